"""Sums over full rays against waves that are known: free fields at any angle, a line source, a ramp."""

import numpy as np
import pytest
from scipy.special import hankel1

from branchlab.compare import compare
from branchlab.conventions import FULL, NO_CARRIER
from branchlab.errors import InputError
from branchlab.launch import AngularSpread, Beam, PlaneWave, PointSource, Setup
from branchlab.media import Ramp, RandomMedium
from branchlab.rays import RayEnsemble
from branchlab.semiclassics import SemiclassicalSum
from tests.oracles.empty import Empty

METHODS = ("primitive", "uniform", "frozen-gaussian", "herman-kluk")


def summed(setup, wavelength, method, **options):
    return SemiclassicalSum(RayEnsemble(setup, dynamics=FULL), method).solve(wavelength, **options)


def free_field(setup, y, k, x):
    """The field on x = 0 carried to x by its plane waves exp(i (q y + (k**2 - q**2)**(1/2) x)): exact (textbook)."""
    (part,) = RayEnsemble(setup, dynamics=FULL).parts
    q = 2 * np.pi * np.fft.fftfreq(y.size, y[1] - y[0])
    along = np.sqrt((k**2 - (q + k * part.tilt) ** 2).astype(complex))
    entry = part.entry(y, np.array([k]))[0]
    return np.fft.ifft(np.fft.fft(entry) * np.exp(1j * along * x)) * np.exp(1j * k * part.tilt * y)


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("angle", [0.0, -0.7])
def test_plane_wave(method, angle):
    """exp(ik(x cos + y sin)), intensity 1 at any angle."""
    setup = Setup(Empty(), PlaneWave(angle), 6.0, 12.0, screens=4)
    found = summed(setup, 0.2, method, fields=True)
    k, y = 10 * np.pi, found.y_fine.values
    exact = np.exp(1j * k * (6.0 * np.cos(angle) + np.sin(angle) * y))
    bound = 3e-3 if method == "herman-kluk" else 1e-7  # packets are broad in p: 1/k
    assert np.abs(found.psi.values[0, -1] - exact).max() < bound
    np.testing.assert_allclose(found.intensity, 1.0, atol=2 * bound)
    assert found.trusted.all()
    assert found.attrs["carrier"] == NO_CARRIER
    assert found.attrs["model"] == FULL


@pytest.mark.parametrize("method", METHODS)
def test_steep_plane_wave_between_open_sides(method):
    """It comes in from the side, beyond the box too: intensity 1 in the whole window at 60 degrees."""
    setup = Setup(Empty(), PlaneWave(np.pi / 3), 20.0, 12.0, "absorbing", screens=3)
    found = summed(setup, 0.1, method)
    np.testing.assert_allclose(found.intensity, 1.0, atol=0.01)
    assert np.abs(found.flux_excess).max() < 0.02


def test_herman_kluk_of_a_steep_beam_errs_by_one_over_k():
    """A narrow beam at 45 degrees with its diffraction, against its plane waves."""
    setup, errors = Setup(Empty(), Beam(1.5, angle=np.pi / 4), 6.0, 40.0, "absorbing", screens=2), []
    for wavelength in (0.2, 0.1, 0.05):
        found = summed(setup, wavelength, "herman-kluk", fields=True)
        exact = free_field(setup, found.y_fine.values, 2 * np.pi / wavelength, 6.0)
        errors.append(np.linalg.norm(found.psi.values[0, -1] - exact) / np.linalg.norm(exact))
    assert errors[0] < 0.01
    np.testing.assert_allclose(np.log2(np.divide(errors[:-1], errors[1:])), 1.0, atol=0.2)


@pytest.mark.parametrize("method", METHODS)
def test_line_source(method):
    """On the flat part of the fan the field is the line source's, height (pi k/2)**(1/2) H0(kr).

    Morse & Feshbach, Methods of Theoretical Physics (1953), sect. 7.2. Its first term is the ray's; the next is 1/(8 kr) of
    it. height**2 is the flux per radian.
    """
    source = PointSource(-3.0, half_angle=0.95)
    setup = Setup(Empty(), source, 6.0, 60.0, "absorbing", screens=2)
    found = summed(setup, 0.2, method, fields=True)
    k, y = 10 * np.pi, found.y_fine.values
    r = np.hypot(9.0, y)
    angle = (np.arange(100000) + 0.5) / 100000 * np.arcsin(0.95)
    height = source.fan(0.0) / np.sqrt(2 * np.arcsin(0.95) * (source.fan(np.sin(angle)) ** 2).mean())
    exact = height * np.sqrt(0.5 * np.pi * k) * hankel1(0, k * r)
    flat = np.abs(y) / r < 0.6
    error = np.abs(found.psi.values[0, -1] / exact - 1)[flat].max()
    assert error < {"herman-kluk": 5e-3, "frozen-gaussian": 2e-2}.get(method, 1.1 / (8 * k * 9.0))


def test_ramp_down_brightens_as_rays_slow_down():
    """v = g x: psi = p_x**(-1/2) exp(ik int p_x dx) at right incidence (WKB; Budden, Radio Waves, 1961): no wave turns yet.

    The slab's ramp begins within its face; the phase behind it is measured between two screens.
    """
    g, k = 0.1, 20 * np.pi
    setup = Setup(Ramp(slope_x=g), PlaneWave(), 6.0, 12.0, screens=13)
    found = summed(setup, 0.1, "primitive", fields=True)
    x, psi = setup.x[4:], found.psi.values[0, 4:, 7]
    np.testing.assert_allclose(np.abs(psi), (1 - g * x) ** -0.25, rtol=1e-6)
    path = (2 / (3 * g)) * ((1 - g * x[0]) ** 1.5 - (1 - g * x) ** 1.5)
    np.testing.assert_allclose(psi / psi[0] / np.abs(psi / psi[0]), np.exp(1j * k * path), atol=2e-4)


@pytest.mark.parametrize(
    "source", [AngularSpread(PlaneWave(), 0.2, nodes=5), AngularSpread(PointSource(-1.0), 0.1, nodes=3)]
)
@pytest.mark.parametrize("method", ["frozen-gaussian", "herman-kluk"])
def test_mixtures(source, method):
    """Intensities of the parts add; in an empty window the sum of plane waves is even."""
    setup = Setup(Empty(), source, 4.0, 12.0, screens=3)
    found = summed(setup, 0.2, method)
    if isinstance(source.source, PlaneWave):
        np.testing.assert_allclose(found.intensity, 1.0, atol=0.01)
    if method == "frozen-gaussian" and isinstance(source.source, PointSource):
        assert not found.trusted.any()  # frozen Gaussians smear a point on the entry, and say so
    else:
        assert np.abs(found.flux_excess).max() < 0.02


def test_comparison_takes_full_results_and_tells_a_mixed_pair():
    setup = Setup(RandomMedium(0.05, 1.0, seed=1), PlaneWave(), 4.0, 12.0)
    full, paraxial = RayEnsemble(setup, dynamics=FULL), RayEnsemble(setup)
    wave = SemiclassicalSum(full).solve(0.2)
    as_wave = _as_wave(wave)
    found = compare(full.density(), as_wave, wave, resolution=0.25)
    assert found.attrs["pair"] == "matched"
    assert compare(paraxial.density(), as_wave, resolution=0.25).attrs["pair"] == "mixed"


def _as_wave(result):
    """A sum dressed as a wave: what compare asks of one."""
    wave = result[["intensity"]].copy()
    for name in ("flux", "numerical_error", "spectral_tail"):
        wave[name] = result.flux_excess * 0.0 + 1e-3
        wave[name].attrs.update(units="1", long_name=name)
    wave.attrs = dict(result.attrs, kind="wave")
    return wave


def test_fields_of_a_mixture_are_refused():
    setup = Setup(Empty(), AngularSpread(PlaneWave(), 0.2, nodes=3), 4.0, 12.0)
    with pytest.raises(InputError, match="one coherent part"):
        summed(setup, 0.2, "primitive", fields=True)
