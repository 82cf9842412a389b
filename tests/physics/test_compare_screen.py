"""compare() on a sinusoidal phase screen in free space, where wave, rays and two-beam limits are closed forms.

A plane wave behind the thin screen exp(i phi0 cos(q y)), at distance x in free space:

- wave: I = sum_m J_m(2 phi0 sin(m q**2 x/2k)) exp(i m q y)
  (Cowley & Moodie, Proc. Phys. Soc. B 70 (1957) 486; Guigay, C. R. Acad. Sci. B 273 (1971) 107; both from memory);
- rays: its limit k -> infinity at fixed tau = phi0 q**2 x/k, I = sum_m J_m(m tau) exp(i m q y) (Kepler's series,
  Watson, Bessel Functions, 1944, ch. 17), the density of the map y = y0 - (tau/q) sin(q y0), for tau < 1.

A mean over a cell c wide takes sinc(m q c/2) of harmonic m, the Gaussian of resolution d exp(-(m q d)**2/2).
"""

import numpy as np
import pytest
from scipy import integrate, optimize, special

from branchlab.compare import branches, compare, validity_range
from branchlab.launch.band import Band
from tests.unit.compare import made

PERIODS, PATH, RESOLUTION = 4, 0.012, 0.25  # path = phi0/k: the rays do not depend on the wavelength
OF = made.setup(length=36.0, width=16.0, screens=37, cells=512)
Q = 2.0 * np.pi * PERIODS / OF.width
TAU = PATH * Q**2 * OF.x
ORDERS = np.arange(1, 64)


def harmonics(amplitude):
    """Cell means of 1 + 2 sum_m amplitude_m cos(m q y), amplitude (..., m) -> (..., y)."""
    cell = np.sinc(ORDERS * Q * OF.cell / (2 * np.pi))
    return 1.0 + 2.0 * (amplitude * cell) @ np.cos(np.outer(ORDERS * Q, OF.y))


def wave_amplitude(wavelength):
    k = 2 * np.pi / wavelength
    turn = np.sin(np.multiply.outer(OF.x, ORDERS) * Q**2 / (2 * k))
    return special.jv(ORDERS, 2 * k * PATH * turn)


def ray_amplitude():
    return special.jv(ORDERS, np.multiply.outer(TAU, ORDERS))


def damped(amplitude):
    """What the resolution leaves of harmonics of cell means."""
    return amplitude * np.sinc(ORDERS * Q * OF.cell / (2 * np.pi)) * np.exp(-0.5 * (ORDERS * Q * RESOLUTION) ** 2)


def rays():
    return made.rays(OF, np.maximum(harmonics(ray_amplitude()), 0.0))  # 63 harmonics overshoot beyond the cusp


def wave(wavelengths):
    return made.wave(OF, wavelengths, [np.maximum(harmonics(wave_amplitude(one)), 0.0) for one in wavelengths])


def test_the_two_forms_themselves():
    """Rays against the density of their map; wave against the spectrum of the screen carried over the distance."""
    assert TAU[-1] < 1.2
    at = int(np.argmin(np.abs(TAU - 0.6)))
    y = OF.y[::64]
    start = [optimize.brentq(lambda s, one=one: s - TAU[at] / Q * np.sin(Q * s) - one, one - 2, one + 2) for one in y]
    exact = 1.0 / (1.0 - TAU[at] * np.cos(Q * np.array(start)))
    series = 1.0 + 2.0 * ray_amplitude()[at] @ np.cos(np.outer(ORDERS * Q, y))
    np.testing.assert_allclose(series, exact, rtol=1e-9)
    k, fine = 2 * np.pi / 0.5, np.arange(256) * (2 * np.pi / Q / 256)
    spectrum = np.fft.fft(np.exp(1j * k * PATH * np.cos(Q * fine)))
    order = np.fft.fftfreq(256, 1 / 256)
    field = np.fft.ifft(spectrum * np.exp(-0.5j * (order * Q) ** 2 * OF.x[at] / k))
    series = 1.0 + 2.0 * wave_amplitude(0.5)[at] @ np.cos(np.outer(ORDERS * Q, fine))
    np.testing.assert_allclose(series, np.abs(field) ** 2, atol=1e-12)


@pytest.mark.parametrize("wavelength", [0.1, 0.5, 2.0])
def test_mismatch_harmonic_by_harmonic(wavelength):
    """Each harmonic of the map: [J_m(2 phi0 sin ..) - J_m(m tau)] times cell and resolution, before the caustic."""
    result = compare(rays(), wave([wavelength]), resolution=RESOLUTION)
    before = TAU < 0.8
    spectrum = np.fft.rfft(result["mismatch"].values[0], axis=-1) / OF.y.size
    first = 0.5 * OF.cell - 0.5 * OF.width  # y of the first cell
    found = spectrum[:, PERIODS * ORDERS[:40]] * np.exp(-1j * ORDERS[:40] * Q * first)
    exact = damped(wave_amplitude(wavelength) - ray_amplitude())[:, :40]
    np.testing.assert_allclose(found[before], exact[before], atol=1e-13)  # round-off


@pytest.mark.parametrize("wavelength", [0.1, 0.5, 2.0])
def test_misplaced_flux_by_adaptive_quadrature(wavelength):
    """Half the integral of abs(mismatch) over a period, by scipy.integrate.quad of the series, at tau = 0.6."""
    at = int(np.argmin(np.abs(TAU - 0.6)))
    amplitude = damped(wave_amplitude(wavelength) - ray_amplitude())[at]

    def mismatch(y):
        return 2.0 * amplitude @ np.cos(ORDERS * Q * y)

    half = np.pi / Q  # even in y about 0 and pi/q
    grid = np.linspace(0, half, 400)
    signs = np.sign([mismatch(y) for y in grid])
    roots = [optimize.brentq(mismatch, grid[i], grid[i + 1]) for i in np.flatnonzero(np.diff(signs))]
    exact = 0.5 * integrate.quad(lambda y: abs(mismatch(y)), 0, half, points=roots, limit=200)[0] / half
    found = float(compare(rays(), wave([wavelength]), resolution=RESOLUTION)["misplaced_flux"][0, at])
    assert found == pytest.approx(exact, rel=2e-3)  # the sum over cells, at each sign change (cell q)**2


def test_rays_are_the_limit_of_short_waves():
    """phi0 sin(m q**2 x/2k) -> m tau/2 with error (m q**2 x)**2 tau/k**2: misplaced flux falls as wavelength**2."""
    at = int(np.argmin(np.abs(TAU - 0.3)))
    result = compare(rays(), wave([0.02, 0.04]), resolution=RESOLUTION)
    ratio = result["misplaced_flux"][1, at] / result["misplaced_flux"][0, at]
    assert float(ratio) == pytest.approx(4.0, rel=0.005)


def test_validity_range_of_a_weak_screen():
    """One harmonic: m(x) = (2/pi) phi0 abs(a - sin a) g, a = q**2 x/2k, g the damping; solved by scipy.optimize.

    First order in phi0 (J_1(z) = z/2), which the intensities given here have exactly.
    """
    wavelength = 1.0
    k = 2 * np.pi / wavelength
    phase = 0.05
    turn = Q**2 * OF.x / (2 * k)
    amplitude = np.zeros((OF.x.size, ORDERS.size))
    sine = amplitude.copy()
    amplitude[:, 0], sine[:, 0] = phase * turn, phase * np.sin(turn)
    result = compare(
        made.rays(OF, harmonics(amplitude)), made.wave(OF, [wavelength], harmonics(sine)), resolution=RESOLUTION
    )
    left = np.exp(-0.5 * (Q * RESOLUTION) ** 2) * np.sinc(Q * OF.cell / (2 * np.pi))
    exact = optimize.brentq(lambda a: 2 / np.pi * phase * (a - np.sin(a)) * left - 0.02, 0, 10) * 2 * k / Q**2
    found = validity_range(result, threshold=0.02)
    assert float(found["reach"][0]) == pytest.approx(exact, rel=5e-3)  # screens 1 apart: h**2 m''/(8 m') = 0.02


@pytest.mark.parametrize("shape", ["flat", "gaussian"])
def test_band_takes_the_fringe_of_two_beams(shape):
    """I = 1 + V cos(k s) cos(q y), s = 0.15 x: a flat band of width b leaves sin(z)/z, z = b k0 s/2; a Gaussian one
    exp(-(sigma k0 s)**2/2), sigma = b/2.3548 (elementary Fourier integrals; the cut at 3 sigma leaves 0.3 % out).
    """
    band = Band(0.5, 0.4, shape)
    k0 = 2 * np.pi / 0.5
    path = 0.15 * OF.x

    def fringe(k):
        return harmonics(np.where(ORDERS == 1, 0.5 * 0.8 * np.cos(k * path)[:, None], 0.0))

    intensity = np.array([fringe(2 * np.pi / one) for one in band.wavelengths()])
    result = compare(
        made.rays(OF, 1.0),
        made.wave(OF, band.wavelengths(), intensity),
        made.total(OF, band.wavelengths(), intensity),
        resolution=RESOLUTION,
        band=band,
    )
    left = np.exp(-0.5 * (Q * RESOLUTION) ** 2) * np.sinc(Q * OF.cell / (2 * np.pi))
    if shape == "flat":
        coherence = np.sinc(0.2 * k0 * path / np.pi)
    else:
        coherence = np.exp(-0.5 * (0.4 / 2.3548 * k0 * path) ** 2)
    tolerance = 1e-2
    size = 0.8 / np.pi * left  # half the mean of V abs(cos)
    one, all_ = np.abs(np.cos(k0 * path)), np.abs(coherence * np.cos(k0 * path))
    seen = k0 * path < 50.0  # as far as the default nodes serve
    np.testing.assert_allclose(result["misplaced_flux"][0], size * one, atol=1e-3)
    np.testing.assert_allclose(result["misplaced_flux_band"][0][seen], (size * all_)[seen], atol=tolerance * size)
    np.testing.assert_allclose(result["share_caustic"][0][seen], (size * all_)[seen], atol=tolerance * size)
    np.testing.assert_allclose(result["share_diffraction"][0], 0.0, atol=1e-14)
    removed = np.abs((1 - coherence) * np.cos(k0 * path))
    np.testing.assert_allclose(result["share_removable"][0][seen], (size * removed)[seen], atol=tolerance * size)


def test_dark_branch_of_long_waves_at_the_focus():
    """At tau = 1 (the cusp) rays fill y = 0 without bound, a wave of q**2 x/k ~ 1 does not: a dark branch a period."""
    result = compare(rays(), wave([8.0]), resolution=RESOLUTION)
    found = branches(result, 1.3)
    dark = found.isel(branch=found["sort"].values == "dark")
    near = dark.isel(branch=np.abs(dark["centre_x"].values * PATH * Q**2 - 1.0) < 0.4)
    places = np.sort((near["centre_y"].values + 1.0) % 16.0 - 1.0)
    np.testing.assert_allclose(places, [0.0, 4.0, 8.0, 12.0], atol=OF.cell)
