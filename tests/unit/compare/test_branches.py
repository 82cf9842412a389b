"""Dark and stray branches: places, sizes, the seam of a periodic window, relighting by a band."""

import numpy as np
import pytest
import xarray as xr

from branchlab.compare import branches, compare
from branchlab.compare.branches import connected
from branchlab.errors import InputError
from branchlab.launch.band import Band
from branchlab.results import check, load, save
from tests.unit.compare import made

OF = made.setup(length=10.0, screens=21, cells=256)
XX, YY = np.meshgrid(OF.x, OF.y, indexing="ij")


def spot(x0, x1, y, width=0.5, height=4.0):
    """A bright strip from x0 to x1 about y, going round the seam."""
    apart = (YY - y + 8.0) % 16.0 - 8.0
    return np.where((x0 - 1e-9 <= XX) & (x1 + 1e-9 >= XX), height * np.exp(-0.5 * (apart / width) ** 2), 0.0)


def flood(mask, periodic):
    """Slow twin of connected(): fill from every cell, neighbours in eight directions."""
    found, number = np.zeros(mask.shape, int), 0
    for start in zip(*np.nonzero(mask), strict=True):
        if found[start]:
            continue
        number += 1
        heap = [start]
        while heap:
            i, j = heap.pop()
            if periodic:
                j %= mask.shape[1]
            if not (0 <= i < mask.shape[0] and 0 <= j < mask.shape[1]) or not mask[i, j] or found[i, j]:
                continue
            found[i, j] = number
            heap += [(i + a, j + b) for a in (-1, 0, 1) for b in (-1, 0, 1)]
    return found


@pytest.mark.parametrize("periodic", [True, False])
@pytest.mark.parametrize("share", [0.0, 0.1, 0.3, 0.45, 1.0])
def test_connected_by_a_slow_twin(rng, periodic, share):
    for _ in range(20):
        mask = rng.random((9, 11)) < share
        found, slow = connected(mask, periodic=periodic), flood(mask, periodic)
        assert found.max() == slow.max()
        assert len({*zip(found.ravel(), slow.ravel(), strict=True)}) == slow.max() + (not mask.all())
        assert ((found > 0) == mask).all()


def test_a_dark_and_a_stray_branch_where_they_were_put():
    base = 0.5
    rays = made.rays(OF, base + spot(2.0, 6.0, 3.0))
    wave = made.wave(OF, [0.1], base + spot(7.0, 9.0, -4.0))
    result = branches(compare(rays, wave, resolution=0.1))
    check(result, "branches")
    assert result["sort"].values.tolist() == ["dark", "stray"]  # the larger first
    dark = result.isel(branch=0)
    assert float(dark["onset"]) == 2.0
    assert float(dark["branch_length"]) == pytest.approx(4.5)  # 9 screens, 0.5 apart
    assert float(dark["centre_x"]) == pytest.approx(4.0)
    assert float(dark["centre_y"]) == pytest.approx(3.0, abs=OF.cell)
    assert float(result["centre_y"][1]) == pytest.approx(-4.0, abs=OF.cell)
    assert (dark["contrast"] > 2).all()
    region = result["region"].sel(wavelength=0.1)
    assert set(np.unique(region)) == {0, 1, 2}
    assert int(region.sel(x=4.0, y=3.0, method="nearest")) == 1


def test_flux_of_a_branch():
    """Sums over the region that the branch's definition gives, by hand."""
    rays, wave = made.rays(OF, 0.5 + spot(2.0, 6.0, 3.0)), made.wave(OF, [0.1], 1.0)
    compared = compare(rays, wave, resolution=0.1)
    result = branches(compared, 1.7)
    ray, other = compared["intensity_ray"].values, compared["intensity_wave"].values[0]
    inside = (ray >= 1.7 * other) & (ray >= ray.mean(axis=1, keepdims=True))
    rows = inside.any(axis=1)
    share = (np.where(inside, ray, 0).sum(axis=1) / ray.sum(axis=1))[rows].mean()
    lack = (np.where(inside, ray - other, 0).sum(axis=1) / ray.sum(axis=1))[rows].mean()
    dark = result.isel(branch=int(np.flatnonzero(result["sort"] == "dark")[0]))
    assert float(dark["branch_flux"]) == pytest.approx(share, rel=1e-12)
    assert float(dark["branch_excess"]) == pytest.approx(lack, rel=1e-12)
    assert float(dark["contrast"]) == pytest.approx(ray[inside].sum() / other[inside].sum(), rel=1e-12)


def test_rolling_across_the_seam_changes_nothing_but_the_place():
    def found(shift):
        rays = made.rays(OF, np.roll(0.5 + spot(2.0, 6.0, 0.0), shift, axis=1))
        wave = made.wave(OF, [0.1], np.roll(0.5 + spot(7.0, 9.0, -4.0), shift, axis=1))
        return branches(compare(rays, wave, resolution=0.1))

    centred, across = found(0), found(128)
    assert across.sizes["branch"] == 2
    for name in ("onset", "branch_length", "branch_flux", "contrast"):
        np.testing.assert_allclose(across[name], centred[name], rtol=1e-9)
    moved = (across["centre_y"] - centred["centre_y"]) % 16.0
    np.testing.assert_allclose(moved, 8.0, atol=1e-9)
    assert ((across["centre_y"] >= -8) & (across["centre_y"] <= 8)).all()


def test_absorbing_sides_do_not_join():
    of = OF.with_(sides="absorbing")
    rays = made.rays(of, 0.5 + spot(2.0, 6.0, 8.0))
    result = branches(compare(rays, made.wave(of, [0.1], 0.5), resolution=0.1))
    assert result.sizes["branch"] == 2
    assert sorted(np.sign(result["centre_y"].values)) == [-1.0, 1.0]


def test_band_relights_what_it_relights():
    """Two dark branches; away from the centre the wave fills one of them: the average relights that one only."""
    band = Band(0.1, 0.2)
    rays = made.rays(OF, 0.3 + spot(2.0, 6.0, 3.0) + spot(2.0, 6.0, -3.0))
    wave = np.stack([0.3 + (nodes != 3) * spot(2.0, 6.0, 3.0) + 0 * YY for nodes in range(7)])
    result = branches(compare(rays, made.wave(OF, band.wavelengths(), wave), resolution=0.1, band=band))
    dark = result.isel(branch=result["sort"].values == "dark")
    lit = dict(zip(dark["centre_y"].values.round().astype(int).tolist(), dark["relit"].values.tolist(), strict=True))
    assert lit == {3: True, -3: False}


def test_every_realisation_and_wavelength_and_a_file(tmp_path):
    rays = xr.concat([made.rays(OF, 0.5 + spot(2.0, 6.0, at)) for at in (3.0, -3.0)], "realisation")
    wave = xr.concat([made.wave(OF, [0.1, 0.2], 0.5)] * 2, "realisation")
    seeds = xr.DataArray([11, 12], dims="realisation", attrs={"units": "1", "long_name": "seed"})
    compared = compare(rays.assign_coords(realisation=seeds), wave.assign_coords(realisation=seeds), resolution=0.1)
    result = branches(compared)
    assert result.sizes["branch"] == 4
    assert sorted(result["branch_wavelength"].values.tolist()) == [0.1, 0.1, 0.2, 0.2]
    for at in range(4):
        one = result.isel(branch=at)
        assert float(one["centre_y"]) == pytest.approx({11: 3.0, 12: -3.0}[int(one["branch_realisation"])], abs=OF.cell)
    again = load(save(result, tmp_path / "branches.nc"))
    assert again["sort"].values.tolist() == result["sort"].values.tolist()
    np.testing.assert_array_equal(again["region"], result["region"])


def test_no_branch_is_an_empty_list():
    result = branches(compare(made.rays(OF, 1.0), made.wave(OF, [0.1], 1.0), resolution=0.1))
    assert result.sizes["branch"] == 0
    assert not result["region"].any()
    check(result, "branches")


def test_what_is_dark_on_both_sides_is_no_branch():
    """Rays a hundred times the wave, where both are far below the mean."""
    rays = made.rays(OF, 1e-4 + spot(0.0, 10.0, 3.0))
    wave = made.wave(OF, [0.1], 1e-6 + spot(0.0, 10.0, 3.0))
    compared = compare(rays, wave, resolution=0.1)
    assert branches(compared).sizes["branch"] == 0
    assert branches(compared, brightness=0.0).sizes["branch"] == 1


def test_refused():
    compared = compare(made.rays(OF, 1.0), made.wave(OF, [0.1], 1.0), resolution=0.1)
    for factor in (1.0, -2.0, float("nan")):
        with pytest.raises(InputError, match=r"factor must be in \(1, inf\)"):
            branches(compared, factor)
    with pytest.raises(InputError, match="brightness must be zero or positive"):
        branches(compared, brightness=-1)
    with pytest.raises(InputError, match="not a result of kind 'comparison'"):
        branches(made.rays(OF, 1.0))
