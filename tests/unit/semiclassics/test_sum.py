"""The public sum: what it accepts, what it returns, how it normalises and when it distrusts itself."""

import numpy as np
import pytest

from branchlab.errors import InputError, RangeError, ResourceError
from branchlab.launch import AngularSpread, Beam, FieldSource, PlaneWave, PointSource, Setup
from branchlab.launch.band import Band
from branchlab.media import RandomMedium
from branchlab.rays import RayEnsemble
from branchlab.rays.march import LEFT, NOT_FINITE, TURNED, RayState
from branchlab.results import check
from branchlab.semiclassics import SemiclassicalSum
from branchlab.semiclassics.curvature import packet_curvature
from branchlab.semiclassics.launches import launch_rays, manifold_on
from branchlab.semiclassics.sum import METHODS
from branchlab.semiclassics.trust import ENTRY_LIMIT, FLUX_EXCESS_LIMIT, UNRESOLVED_LIMIT, trusted
from tests.oracles.empty import Bowl, Empty

MEDIUM = RandomMedium(0.08, 1.0, seed=7)


def summed(
    source=None, method="frozen-gaussian", *, medium=MEDIUM, length=4.0, width=12.0, sides="periodic", **options
):
    setup = Setup(medium, source or PlaneWave(), length, width, sides, screens=5)
    return SemiclassicalSum(RayEnsemble(setup), method, **options)


@pytest.mark.parametrize("method", METHODS)
def test_result_has_the_written_layout_and_the_flux_of_its_rays(method):
    result = summed(method=method).solve([0.2, 0.1])
    check(result, "semiclassical")
    assert result.intensity.dims == ("wavelength", "x", "y")
    assert result.attrs["method"] == method
    assert "not to be trusted" in result.attrs["caution"]
    assert np.isfinite(result.intensity).all()
    # nothing leaves a periodic window: the mean intensity of a plane wave is 1 on every screen
    np.testing.assert_allclose(result.intensity.mean("y"), 1.0, rtol=1e-12)
    np.testing.assert_allclose(result.flux_excess[:, 0], 0.0, atol=1e-5)  # packets are cut at 1e-6
    assert bool(result.trusted[:, 0].all())


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("angle", [0.0, 0.2, -0.35])
def test_plane_wave_in_empty_space(method, angle):
    """u = exp(ik [p0 y - p0**2 x/2]), from the paraxial equation itself."""
    k, p0 = 40.0, np.sin(angle)
    result = summed(PlaneWave(angle), method, medium=Empty(), tolerance=1e-10).solve(2 * np.pi / k, fields=True)
    exact = np.exp(1j * k * (p0 * result.y_fine.values - 0.5 * p0**2 * result.x.values[:, None]))
    np.testing.assert_allclose(result.psi.values[0], exact, atol=1e-8)


@pytest.mark.parametrize("sides", ["periodic", "absorbing"])
def test_beam_through_a_duct_by_herman_kluk(sides):
    """A beam in v = a**2 y**2 through two foci, traced by the real marcher, against the ABCD law.

    Kogelnik & Li, Appl. Opt. 5 (1966) 1550.
    """
    k, a, waist, start, length = 20.0, 0.08, 1.2, 0.8, 64.0
    setup = Setup(Bowl(), Beam(waist, y=start), length, 16.0, sides, screens=11)
    result = SemiclassicalSum(RayEnsemble(setup), "herman-kluk", tolerance=1e-9).solve(2 * np.pi / k, fields=True)
    y, q = result.y_fine.values, 2j / (k * waist**2)
    for i, x in enumerate(setup.x):
        along = np.linspace(0, x, 2001)
        turn = np.unwrap(np.angle(np.cos(a * along) + q * np.sin(a * along) / a))[-1]
        c, s = np.cos(a * x), np.sin(a * x)
        z, slope = c + q * s / a, -a * s + q * c
        centre, p = start * c, -a * start * s
        off = y - centre
        exact = (2 / np.pi / waist**2) ** 0.25 * np.abs(z) ** -0.5 * np.exp(-0.5j * turn)
        exact = exact * np.exp(1j * k * (0.5 * centre * p + p * off + 0.5 * slope / z * off**2))
        error = np.linalg.norm(result.psi.values[0, i] - exact) / np.linalg.norm(exact)
        # the duct is bent near the sides of the window: what the beam's tail sees of that
        assert error < 1e-5


def test_incoherent_parts_add_their_intensities():
    spread = AngularSpread(PlaneWave(), 0.1, nodes=3)
    mixed = summed(spread).solve(0.2)
    weights = [part.weight for part in summed(spread).setup.parts()]
    total = 0.0
    for part, weight in zip(summed(spread).setup.parts(), weights, strict=True):
        one = summed(PlaneWave(float(np.arcsin(part.tilt)))).solve(0.2)
        total = total + weight * one.intensity * (1 + one.flux_excess)
    np.testing.assert_allclose(mixed.intensity * (1 + mixed.flux_excess), total, rtol=1e-10)


def test_a_wavelength_does_not_depend_on_its_company():
    alone = summed(front_rays=4096).solve(0.2)
    together = summed(front_rays=4096).solve([0.1, 0.2, 0.4])
    np.testing.assert_allclose(together.sel(wavelength=0.2).intensity, alone.intensity[0], rtol=1e-12)
    alone = summed(method="herman-kluk").solve(0.2)
    together = summed(method="herman-kluk").solve([0.17, 0.2, 0.4])
    # another phase-space grid: the quadrature error of a smooth integrand
    np.testing.assert_allclose(together.sel(wavelength=0.2).intensity, alone.intensity[0], atol=0.02)


def test_more_rays_and_other_packets_change_little():
    """Between half and twice the packet curvature the frozen sum changes by less than its own error (some percent)."""
    base = summed().solve(0.1).intensity[0]
    finer = summed(front_rays=16384).solve(0.1).intensity[0]
    assert float(np.abs(finer - base).mean()) < 0.003
    gamma = summed().solve(0.1).attrs["packet_curvature"]
    for factor in (0.5, 2.0):
        other = summed(packet_curvature=factor * gamma).solve(0.1).intensity[0]
        assert float(np.abs(other - base).mean()) < 0.05


def test_packet_curvature_of_known_media():
    # sqrt(rms(v_yy)/2): 1.732 strength/l**2 for C = strength**2 exp(-r**2/l**2) (C''''(0) = 12 strength**2/l**4), in
    # one realisation to its sampling error
    np.testing.assert_allclose(packet_curvature(summed().setup), np.sqrt(1.732 * 0.08), rtol=0.1)
    np.testing.assert_allclose(packet_curvature(summed(medium=Bowl()).setup), 0.08)
    np.testing.assert_allclose(packet_curvature(summed(medium=Empty()).setup), 1 / 4.0)


def test_alarms():
    assert trusted(0.0, 0.0, np.nan)
    assert trusted(-FLUX_EXCESS_LIMIT, UNRESOLVED_LIMIT, ENTRY_LIMIT)
    for slip in ((0.2, 0.0, 0.0), (-0.2, 0.0, 0.0), (0.0, 0.1, 0.0), (0.0, 0.0, 0.1)):
        assert not trusted(*slip)


def test_too_few_rays_are_noticed():
    few = summed(front_rays=64, length=12.0).solve(0.05)
    assert float(few.unresolved_flux[0, -1]) > 0.3 * 12.0
    assert not bool(few.trusted[0, -1])
    enough = summed(length=12.0).solve(0.05)
    assert float(enough.unresolved_flux[0].max()) < 0.01 * 12.0


def test_a_small_source_needs_herman_kluk():
    for source in (PointSource(0.0, 0.5), Beam(0.7)):
        frozen = summed(source, sides="absorbing", width=16.0).solve(0.2)
        assert float(frozen.entry_error[0]) > ENTRY_LIMIT
        assert not bool(frozen.trusted.any())
        full = summed(source, "herman-kluk", sides="absorbing", width=16.0).solve(0.2)
        assert float(full.entry_error[0]) < 1e-4
        assert bool(full.trusted.all())
        np.testing.assert_allclose(full.intensity[0].sum("y") * full.y.diff("y")[0], 1.0, atol=1e-5)


def test_what_leaves_through_open_sides_is_gone():
    steep = summed(Beam(0.5, y=4.0, angle=0.6), "herman-kluk", sides="absorbing", length=20.0).solve(0.3)
    flux = steep.intensity[0].sum("y") * float(steep.y[1] - steep.y[0])
    assert float(flux[0]) > 0.999
    assert float(flux[-1]) < 1e-3
    assert np.isfinite(steep.intensity).all()
    frozen = summed(Beam(2.0, y=0.0, angle=0.6), sides="absorbing", length=40.0, medium=Empty()).solve(0.3)
    assert np.isfinite(frozen.intensity).all()
    assert float(frozen.intensity[0, -1].max()) < 1e-12


def test_progress_and_cancel():
    seen = []
    summed().solve([0.2, 0.1], seen.append)
    assert seen == sorted(seen)
    assert seen[-1] == 1.0

    def stop(_):
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        summed().solve(0.2, stop)


def test_a_band_stands_for_its_wavelengths():
    band = Band(0.2, 0.2, nodes=3)
    np.testing.assert_array_equal(summed().solve(band).wavelength, band.wavelengths())


def test_repr_names_rays_and_method():
    assert "RayEnsemble" in repr(summed())
    assert "method='frozen-gaussian'" in repr(summed())
    assert "not to be trusted at cusps" in repr(summed(method="uniform"))


def test_wrong_input():
    rays = summed().rays
    with pytest.raises(InputError, match="did you mean|Did you mean 'herman-kluk'"):
        SemiclassicalSum(rays, "herman-kluck")
    with pytest.raises(InputError, match="rays must be a RayEnsemble; got Setup"):
        SemiclassicalSum(rays.setup)
    with pytest.raises(InputError, match="wavelength must be .*positive; got .*-0.1"):
        summed().solve([0.1, -0.1])
    with pytest.raises(InputError, match="this one has 3"):
        summed(AngularSpread(PlaneWave(), 0.1, nodes=3)).solve(0.2, fields=True)
    with pytest.raises(InputError, match="front_rays must be a whole number of at least 16; got 3"):
        SemiclassicalSum(rays, front_rays=3)
    for name in ("packet_curvature", "spacing", "tolerance"):
        with pytest.raises(InputError, match=name):
            SemiclassicalSum(rays, **{name: 0.0})
    with pytest.raises(ResourceError, match="larger spacing"):
        summed(method="herman-kluk", spacing=1e-6).solve(0.1)
    with pytest.raises(RangeError, match="rays exist only where v < 1"):
        summed(medium=RandomMedium(0.9, 1.0, seed=7), length=12.0).solve(0.2)
    y = np.linspace(-6.0, 6.0, 129)
    with pytest.raises(RangeError, match="must stay below 1"):
        summed(FieldSource(y, 1.0, 2.5 * np.cos(np.pi * y / 6.0)), medium=Empty()).solve(0.2)


def test_a_few_rays_that_turned_keep_their_place_and_those_gone_lose_it():
    (part,) = summed().setup.parts()
    rays, ds = launch_rays(part, 400)
    zero = np.zeros(400)
    status = np.zeros(400, np.int8)
    status[[3, 5, 7]] = TURNED, LEFT, NOT_FINITE
    state = RayState(1.0, rays.y, rays.p, zero, zero + 1, zero, zero.astype(int), status)
    y = manifold_on(part, rays, ds, state).y
    assert y[3] == rays.y[3]
    assert np.isnan(y[[5, 7]]).all()
    assert np.isnan(y).sum() == 2
