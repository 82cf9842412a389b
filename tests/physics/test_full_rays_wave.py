"""Full rays and their sums against the full wave in one medium: flux, intensity, and the field with its phase."""

import numpy as np
import pytest

from branchlab.conventions import FULL
from branchlab.launch import PlaneWave, PointSource, Setup
from branchlab.media import RandomMedium
from branchlab.rays import RayEnsemble
from branchlab.semiclassics import SemiclassicalSum
from branchlab.waves import FullWave

LENGTH = 0.1003  # no whole part of the width: no grazing resonance
SOURCES = [PlaneWave(0.2), PointSource(-1.0, half_angle=0.7)]


@pytest.fixture(scope="module", params=SOURCES, ids=["plane wave", "point source"])
def both(request):
    setup = Setup(RandomMedium(0.05, 1.0, seed=1), request.param, 5.0, 12.0)
    return RayEnsemble(setup, dynamics=FULL), FullWave(setup).solve(LENGTH, fields=True)


def test_flux(both):
    """What goes through the screens, rays and wave: the wave loses next to nothing by reflection here."""
    rays, wave = both
    np.testing.assert_allclose(rays.density().flux, wave.flux[0], rtol=2e-4)


def test_intensity_summed_over_the_width(both):
    """The p_x factors: intensity is flux over p_x, which differs from screen to screen by a percent; met to a thousandth."""
    rays, wave = both
    found, exact = rays.density().intensity.sum("y"), wave.intensity[0].sum("y")
    np.testing.assert_allclose(found, exact, rtol=2e-3)
    assert np.ptp(exact.values) > 5e-3 * exact.values.mean()


def test_herman_kluk_is_the_wave_with_its_phase(both):
    rays, wave = both
    setup = rays.setup
    found = SemiclassicalSum(rays, "herman-kluk").solve(LENGTH, fields=True)
    tilt = 2 * np.pi / LENGTH * rays.parts[0].tilt
    y, given = wave.y_fine.values, wave.psi.values[0]
    q = 2 * np.pi * np.fft.fftfreq(y.size, y[1] - y[0])
    modes = np.fft.fft(given * np.exp(-1j * tilt * y), axis=1) * np.exp(-1j * q * y[0]) / y.size
    points = found.y_fine.values
    exact = modes @ np.exp(1j * np.outer(q, points)) * np.exp(1j * tilt * points)
    apart = np.linalg.norm(found.psi.values[0] - exact, axis=1) / np.linalg.norm(exact, axis=1)
    behind = setup.x > 0.5  # the face is half a screen distance deep: on x = 0 the sum has half of it behind
    assert apart[behind].max() < 0.025


def test_sums_come_closer_to_the_wave_than_rays():
    """Behind the first caustics, where rays alone misplace a tenth of the flux."""
    setup = Setup(RandomMedium(0.08, 1.0, seed=1), PlaneWave(0.2), 6.0, 12.0)
    rays, wave = RayEnsemble(setup, dynamics=FULL), FullWave(setup).solve(LENGTH)
    density, exact = rays.density().intensity[-1], wave.intensity[0, -1]

    def apart(one):
        return 0.5 * float(np.abs(one / one.sum() - exact / exact.sum()).sum())

    plain = apart(density)
    for method, share in (("herman-kluk", 0.25), ("frozen-gaussian", 0.6)):
        found = SemiclassicalSum(rays, method).solve(LENGTH)
        assert found.trusted[0, -1] or method == "frozen-gaussian"
        assert apart(found.intensity[0, -1]) < share * plain
