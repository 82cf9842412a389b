"""compare(): layout, attribution, bands, realisations, and what it refuses."""

import json

import numpy as np
import pytest
import xarray as xr

from branchlab.compare import compare, correlation, displacement, misplaced_flux
from branchlab.errors import BranchlabWarning, InputError
from branchlab.launch import PointSource
from branchlab.launch.band import Band
from branchlab.results import check, load, save
from tests.unit.compare import made

OF = made.setup(screens=5, cells=256)
BAND = Band(0.1, 0.2)
NODES = BAND.wavelengths()


def random(rng, *shape):
    return rng.gamma(2.0, size=(*shape, OF.x.size, OF.y.size))


def even_flux(intensity):
    """Intensities as periodic sides give them: one flux on every screen."""
    return intensity / intensity.mean(axis=-1, keepdims=True)


@pytest.fixture
def three(rng):
    """Rays, wave and sum at the nodes of the band, with one flux."""
    rays = made.rays(OF, even_flux(random(rng)), error=0.003)
    wave = made.wave(OF, NODES, even_flux(random(rng, NODES.size)), error=0.002)
    total = made.total(OF, NODES, even_flux(random(rng, NODES.size)), excess=0.1)
    return rays, wave, total


@pytest.mark.parametrize("band", [None, BAND])
@pytest.mark.parametrize("with_sum", [True, False])
def test_layout(three, band, with_sum):
    rays, wave, total = three
    result = compare(rays, wave, total if with_sum else None, resolution=0.2, band=band)
    check(result, "comparison")
    assert result.sizes["wavelength"] == (1 if band else NODES.size)
    assert result.attrs["pair"] == "matched"
    assert ("removable" in result) == (with_sum and band is not None)
    assert ("interference" in result) == (with_sum and band is None)
    assert ("misplaced_flux_band" in result) == (band is not None)
    assert result["intensity_ray"].dims == ("x", "y")


def test_is_the_measures_one_by_one(three):
    rays, wave, _ = three
    result = compare(rays, wave, resolution=0.2)
    for measure in (misplaced_flux, displacement, correlation):
        alone = measure(rays["intensity"], wave["intensity"], resolution=0.2)
        np.testing.assert_allclose(result[measure.__name__], alone.transpose("wavelength", "x"), rtol=1e-12)


@pytest.mark.parametrize("sides", ["periodic", "absorbing"])
@pytest.mark.parametrize("band", [None, BAND])
def test_attribution_adds_up(rng, sides, band):
    """The maps add to the mismatch, the portions to the misplaced flux, to round-off; fluxes differ on purpose."""
    of = made.setup(screens=5, cells=256, sides=sides)
    shape = (NODES.size, of.x.size, of.y.size)
    rays = made.rays(of, rng.gamma(2.0, size=shape[1:]))
    wave = made.wave(of, NODES, 0.7 * rng.gamma(2.0, size=shape))
    total = made.total(of, NODES, rng.gamma(2.0, size=shape))
    result = compare(rays, wave, total, resolution=0.2, band=band)
    names = ("removable", "caustic", "diffraction") if band else ("interference", "diffraction")
    maps = [result["caustic_part" if name == "caustic" else name] for name in names]
    np.testing.assert_allclose(sum(maps), result["mismatch"], atol=1e-13)
    np.testing.assert_allclose(result["mismatch"], result["intensity_wave"] - result["intensity_ray"], atol=1e-13)
    portions = sum(result[f"misplaced_{name}"] for name in names)
    np.testing.assert_allclose(portions, result["misplaced_flux"], atol=1e-13)
    flux = result["intensity_ray"].sum("y")
    for name, part in zip(names, maps, strict=True):
        np.testing.assert_allclose(result[f"share_{name}"], 0.5 * abs(part).sum("y") / flux, rtol=1e-12)
    np.testing.assert_allclose(0.5 * abs(result["mismatch"]).sum("y") / flux, result["misplaced_flux"], rtol=1e-11)


def test_band_average_is_the_weighted_mean(three):
    rays, wave, total = three
    result = compare(rays, wave, total, resolution=0.2, band=BAND)
    mean = (wave["intensity"] * xr.DataArray(BAND.weights(), dims="wavelength")).sum("wavelength")
    alone = misplaced_flux(rays["intensity"], mean, resolution=0.2)
    np.testing.assert_allclose(result["misplaced_flux_band"][0], alone, rtol=1e-12)
    middle = misplaced_flux(rays["intensity"], wave["intensity"][NODES.size // 2], resolution=0.2)
    np.testing.assert_allclose(result["misplaced_flux"][0], middle, rtol=1e-12)
    assert result["wavelength"].values.tolist() == [0.1]
    assert json.loads(result.attrs["bands"])[0]["width"] == 0.2


def test_bands_side_by_side_are_each_alone(rng):
    bands = [Band(0.1, 0.2), Band(0.25, 0.4)]
    nodes = np.concatenate([one.wavelengths() for one in bands])
    rays = made.rays(OF, random(rng))
    wave, total = (make(OF, nodes, random(rng, nodes.size)) for make in (made.wave, made.total))
    both = compare(rays, wave, total, resolution=0.3, band=bands)
    for at, one in enumerate(bands):
        alone = compare(rays, wave, total, resolution=0.3, band=one)
        for name in ("misplaced_flux", "misplaced_flux_band", "share_removable", "displacement_band"):
            np.testing.assert_allclose(both[name][at], alone[name][0], rtol=1e-12)


def test_errors_add_and_decide_what_is_resolved(three):
    """Misplaced flux is a distance: the error of a comparison is at most the sum of those of its sides."""
    rays, wave, total = three
    result = compare(rays, wave, total, resolution=0.2, band=BAND)
    np.testing.assert_allclose(result["numerical_error"], 0.005, rtol=1e-12)
    np.testing.assert_allclose(result["numerical_error_band"], 0.005, rtol=1e-12)
    assert result["resolved"].all()
    rays["numerical_error"][2] = 0.9
    vague = compare(rays, wave, resolution=0.2)
    assert not vague["resolved"][:, 2].any()
    assert vague["resolved"][:, 1].all()


def test_equal_sides_are_not_called_resolved(rng):
    intensity = random(rng)
    result = compare(made.rays(OF, intensity), made.wave(OF, [0.1], intensity), resolution=0.2)
    assert result["misplaced_flux"].max() == 0
    assert not result["resolved"].any()


def test_flux_is_compared_apart_from_its_place(rng):
    intensity = random(rng)
    result = compare(made.rays(OF, intensity), made.wave(OF, [0.1], 0.9 * intensity), resolution=0.2)
    np.testing.assert_allclose(result["flux_mismatch"], -0.1, rtol=1e-12)
    assert result["misplaced_flux"].max() < 1e-14


def test_dark_screen_is_not_a_number(rng):
    intensity = random(rng)
    lost = intensity.copy()
    lost[3] = 0.0
    result = compare(made.rays(OF, intensity), made.wave(OF, [0.1], lost), resolution=0.2)
    assert np.isnan(result["misplaced_flux"].values[0]).tolist() == [False, False, False, True, False]
    assert not result["resolved"][0, 3]


def test_realisations_are_carried(rng):
    each = []
    for seed in range(3):
        of = OF.with_(medium=made.MEDIUM.with_(seed=seed))
        each.append(
            (
                made.rays(of, random(rng)),
                made.wave(of, NODES, random(rng, NODES.size)),
                made.total(of, NODES, random(rng, NODES.size)),
            )
        )
    seeds = xr.DataArray([0, 1, 2], dims="realisation", attrs={"units": "1", "long_name": "seed"})
    joined = [
        xr.concat(side, "realisation", join="exact").assign_coords(realisation=seeds)
        for side in zip(*each, strict=True)
    ]
    together = compare(*joined, resolution=0.2, band=BAND)
    for at, (rays, wave, total) in enumerate(each):
        alone = compare(rays, wave, total, resolution=0.2, band=BAND)
        for name in alone.data_vars:
            np.testing.assert_allclose(together[name].isel(realisation=at), alone[name], rtol=1e-12, atol=1e-14)
    with pytest.raises(InputError, match="rays have several realisations, the wave one"):
        compare(joined[0], each[0][1], resolution=0.2)
    with pytest.raises(InputError, match=r"different realisations: 0, 1, 2 against 2, 1, 0"):
        compare(joined[0], joined[1].isel(realisation=[2, 1, 0]), resolution=0.2)
    with pytest.raises(InputError, match="different realisations"):
        compare(joined[0], joined[1].isel(realisation=[0, 1]), resolution=0.2)


@pytest.mark.parametrize("band", [None, BAND])
def test_a_sum_that_does_not_start_as_the_wave_is_told(three, recwarn, band):
    """At any wavelength that counts: here at the first node of the band, not at its centre."""
    rays, wave, _ = three
    even = np.ones((NODES.size, OF.x.size, OF.y.size))
    entry = np.where(np.arange(NODES.size) == 0, 0.2, 0.01)
    with pytest.warns(BranchlabWarning, match=r"entry field with an error of 0\.2; it is trusted to 0\.03") as caught:
        result = compare(rays, wave, made.total(OF, NODES, even, entry=entry), resolution=0.2, band=band)
    assert caught[0].filename == __file__
    np.testing.assert_array_equal(result["entry_error"], [0.01] if band else entry)
    for silent in (0.03, np.nan):  # a sum without packets rebuilds nothing
        compare(rays, wave, made.total(OF, NODES, even, entry=silent), resolution=0.2, band=band)
    assert not recwarn.list


def test_goes_through_a_file(three, tmp_path):
    result = compare(*three, resolution=0.2, band=BAND)
    again = load(save(result, tmp_path / "result.nc"))
    xr.testing.assert_identical(result, again)


def test_mixed_pair_is_computed_and_marked(rng):
    result = compare(made.rays(OF, random(rng)), made.wave(OF, [0.1], random(rng, 1), model="full"), resolution=0.2)
    assert result.attrs["pair"] == "mixed"
    assert result.attrs["wave_model"] == "full"


class TestRefused:
    def test_different_setups(self, three, rng):
        rays = three[0]
        far = OF.with_(medium=made.MEDIUM.with_(seed=8), source=PointSource(-1.0, 0.0))
        with pytest.raises(InputError, match="medium.seed: 7 against 8"):
            compare(rays, made.wave(far, [0.1], random(rng, 1)), resolution=0.2)
        with pytest.raises(InputError, match="source: "):
            compare(rays, made.wave(far, [0.1], random(rng, 1)), resolution=0.2)
        with pytest.raises(InputError, match=r"rays and semiclassical sum .* medium.seed"):
            compare(rays, three[1], made.total(far, NODES, random(rng, NODES.size)), resolution=0.2)

    def test_different_screens(self, three):
        with pytest.raises(InputError, match="differ in x: 5 values from 0 to 8 against 3 from 0 to 8"):
            compare(three[0], three[1].isel(x=[0, 2, 4]), resolution=0.2)
        with pytest.raises(InputError, match="differ in y"):
            compare(three[0].isel(y=slice(1, None)), three[1].isel(y=slice(None, -1)), resolution=0.2)

    @pytest.mark.parametrize(
        ("resolution", "text"),
        [(0.01, "16/256 = 0.0625"), (-0.2, "positive"), (7.0, "quarter of the width"), ("a", "number")],
    )
    def test_resolution(self, three, resolution, text):
        with pytest.raises(InputError, match=text):
            compare(*three, resolution=resolution)

    def test_missing_nodes(self, three):
        rays, wave, total = three
        with pytest.raises(
            InputError, match=rf"lacks 2 of the 7.*{NODES[0]:.6g}, {NODES[5]:.6g}; .*ParaxialWave\(setup\).solve\(Band"
        ):
            compare(rays, wave.isel(wavelength=[1, 2, 3, 4, 6]), resolution=0.2, band=BAND)
        with pytest.raises(InputError, match=r"sum lacks 1 of the 7.*SemiclassicalSum\(rays\).solve\(Band"):
            compare(rays, wave, total.isel(wavelength=slice(1, None)), resolution=0.2, band=BAND)
        with pytest.raises(InputError, match=r"numpy.concatenate"):
            compare(rays, wave, resolution=0.2, band=[BAND, Band(0.3, 0.2)])

    def test_sum_at_other_wavelengths(self, three, rng):
        rays, wave, _ = three
        with pytest.raises(InputError, match=r"SemiclassicalSum\(rays\).solve\(\[0.0913"):
            compare(rays, wave, made.total(OF, [0.5], random(rng, 1)), resolution=0.2)

    def test_bands(self, three):
        for band, text in ((0.2, "got float 0.2"), ([], "empty list"), ([BAND, Band(0.1, 0.3)], "centre 0.1")):
            with pytest.raises(InputError, match=text):
                compare(*three, resolution=0.2, band=band)

    def test_not_a_number(self, three):
        rays, wave, total = three
        wave["intensity"][3, 2, 17] = np.nan
        place = f"wavelength = {NODES[3]:g}, x = 4, y = {OF.y[17]:g}"
        with pytest.raises(InputError, match=f"intensity of the wave must be finite everywhere; it is nan at {place}"):
            compare(rays, wave, total, resolution=0.2)

    def test_negative(self, three):
        rays, wave, total = three
        rays["intensity"][1, 3] = -2.0
        with pytest.raises(InputError, match="rays must be zero or positive everywhere; it is -2 at x = 2"):
            compare(rays, wave, total, resolution=0.2)

    def test_smoothed_before(self, three):
        rays, wave, _ = three
        rays["intensity"].attrs["resolution"] = 0.3
        with pytest.raises(InputError, match="smoothed to 0.3 already"):
            compare(rays, wave, resolution=0.3)

    def test_wrong_kinds(self, three):
        rays, wave, total = three
        with pytest.raises(InputError, match="not a result of kind 'density'"):
            compare(wave, rays, resolution=0.2)
        with pytest.raises(InputError, match="not a result of kind 'semiclassical'"):
            compare(rays, wave, wave, resolution=0.2)
        with pytest.raises(InputError, match="expected an xarray.Dataset of kind 'wave'; got NoneType"):
            compare(rays, None, resolution=0.2)
