"""Spectra, correlations and line integrals of every family against numerical integrals and published closed forms.

Conventions: v has the correlation C(r) = int S(q) J0(qr) q dq/(2 pi), C(0) = 1; A(y) = int C dx. The index correlation is a
quarter of v's (mu = -v/2). Tolerances of 1e-8 are the integrators'.
"""

import math

import mpmath
import numpy as np
import pytest
from scipy import special
from scipy.integrate import quad

from branchlab.conventions import MEAN_FIRST_CAUSTIC, wave_parameter
from branchlab.media.spectra import (
    DonorLayerSpectrum,
    ExponentialSpectrum,
    GaussianSpectrum,
    MaternSpectrum,
    PowerLawSpectrum,
)

SPECTRA = [
    GaussianSpectrum(1.3),
    MaternSpectrum(0.8, 2.5),
    MaternSpectrum(1.1, 1.0 / 3.0),
    MaternSpectrum(0.7, 4.0),
    ExponentialSpectrum(0.9),
    PowerLawSpectrum(1.3, 8.0 / 3.0, 0.2),
    PowerLawSpectrum(1.0, 11.0 / 3.0, 0.05),
    PowerLawSpectrum(2.0, 1.5, 0.4),
    DonorLayerSpectrum(0.6),
]
every = pytest.mark.parametrize("spectrum", SPECTRA, ids=lambda s: f"{type(s).__name__}-{SPECTRA.index(s)}")


def bounded(function, edges):
    """Gauss-Legendre over panels, to round-off for smooth functions."""
    node, weight = np.polynomial.legendre.leggauss(24)
    edges = np.asarray(edges)
    half = 0.5 * np.diff(edges)[:, None]
    points = 0.5 * (edges[1:] + edges[:-1])[:, None] + half * node
    return float((half * weight * function(points)).sum())


def panels(last, length):
    """Panels that resolve the behaviour at 0 (down to 1e-14 of the length) and waves of a tenth of the length."""
    return np.concatenate([[0.0], np.geomspace(1e-14, 0.05, 60) * length, np.arange(0.1, last / length, 0.1) * length])


@every
@pytest.mark.parametrize("r", [0.0, 0.2, 1.0, 2.5])
def test_correlation_and_spectrum_are_a_pair(spectrum, r):
    """Hankel pair (Stein, Interpolation of Spatial Data, 1999; Goff & Jordan, J. Geophys. Res. 93 (1988) 13589).

    Integrated from whichever side falls fast: S = 2 pi int C J0(q r) r dr, or C = int S J0(q r) q dq/(2 pi).
    """
    length = spectrum.length
    if isinstance(spectrum, (MaternSpectrum, ExponentialSpectrum)):
        q = r / length  # any four wavenumbers
        got = bounded(lambda s: 2 * math.pi * spectrum.correlation(s) * special.j0(q * s) * s, panels(60.0, length))
        assert got == pytest.approx(float(spectrum.density(q)), rel=1e-8)
    else:
        last = spectrum.cut * 2.0
        got = bounded(
            lambda q: spectrum.density(q) * special.j0(q * r) * q / (2 * math.pi), np.arange(0.0, last, 0.25 / length)
        )
        assert got == pytest.approx(float(spectrum.correlation(r)), rel=1e-8, abs=1e-9)


@every
@pytest.mark.parametrize("y", [0.0, 0.3, 1.0, 2.0])
def test_projection_is_the_line_integral(spectrum, y):
    """Against the integral along the line (closed forms: Tatarskii 1971; exponential 2 y K1(y/l))."""
    if isinstance(spectrum, DonorLayerSpectrum):  # falls as x**-3: mapped to a finite interval
        got = 2 * quad(lambda x: float(spectrum.correlation(math.hypot(x, y))), 0, math.inf, epsabs=1e-12)[0]
    else:
        got = 2 * bounded(lambda x: spectrum.correlation(np.hypot(x, y)), panels(60.0, spectrum.length))
    assert float(spectrum.projection(y)) == pytest.approx(got, rel=1e-8)


@every
def test_variance_beyond_a_wavenumber(spectrum):
    for q in (0.5 / spectrum.length, 2.0 / spectrum.length):
        inside = bounded(lambda p: spectrum.density(p) * p / (2 * math.pi), np.linspace(0.0, q, 9))
        assert spectrum.share_beyond(q) == pytest.approx(1.0 - inside, rel=1e-9)
    assert spectrum.share_beyond(0.0) == pytest.approx(1.0, rel=1e-14)
    for lost in (0.3, 1e-3):
        assert spectrum.share_beyond(spectrum.cut_for(lost)) == pytest.approx(lost, rel=1e-9)


@pytest.mark.parametrize("nu", [1.0 / 3.0, 0.5, 1.0, 2.5, 7.0])
@pytest.mark.parametrize("t", [1e-9, 0.01, 0.7, 3.0, 20.0])
def test_matern_at_high_precision(nu, t):
    """von Karman's form 2**(1-nu)/Gamma(nu) t**nu K_nu(t) with 30 digits (mpmath)."""
    with mpmath.workdps(30):
        exact = mpmath.mpf(2) ** (1 - mpmath.mpf(nu)) / mpmath.gamma(nu) * mpmath.mpf(t) ** nu * mpmath.besselk(nu, t)
    assert float(MaternSpectrum(1.0, nu).correlation(t)) == pytest.approx(float(exact), rel=1e-12)


def test_special_cases_of_matern():
    """nu = 1/2 is exponential; nu = 3/2 and 5/2 have polynomials (Stein 1999, sec. 2.7); large nu is Gaussian."""
    r = np.linspace(0.0, 5.0, 26)
    assert np.allclose(MaternSpectrum(1.3, 0.5).correlation(r), ExponentialSpectrum(1.3).correlation(r), rtol=1e-13)
    assert np.allclose(MaternSpectrum(1.3, 0.5).projection(r), ExponentialSpectrum(1.3).projection(r), rtol=1e-12)
    t = r / 1.3
    assert np.allclose(MaternSpectrum(1.3, 1.5).correlation(r), (1 + t) * np.exp(-t), rtol=1e-13)
    assert np.allclose(MaternSpectrum(1.3, 2.5).correlation(r), (1 + t + t**2 / 3) * np.exp(-t), rtol=1e-13)
    wide = MaternSpectrum(1.0 / math.sqrt(4.0 * 30.0), 30.0)  # exp(-r**2) as nu grows, corrections of order 1/nu
    assert np.abs(wide.correlation(r) - np.exp(-(r**2))).max() < 0.5 / 30.0


def test_power_law_tends_to_von_karman():
    """Without an inner scale, exponent p is Matern of nu = p/2 - 1 (von Karman); the error falls as inner_scale**(2 nu)."""
    r = np.array([0.0, 0.5, 1.0, 3.0])
    exact = MaternSpectrum(1.0, 5.0 / 6.0).correlation(r)
    errors = [np.abs(PowerLawSpectrum(1.0, 11.0 / 3.0, a).correlation(r) - exact).max() for a in (1e-3, 1e-4)]
    assert errors[1] < 1e-6
    assert math.log10(errors[0] / errors[1]) == pytest.approx(5.0 / 3.0, abs=0.05)


def closed_noise(family, eps, length):
    """Dtheta and D of the published table of conventions: index rms eps; Chernov 1960, Kulkarny & White 1982."""
    if family == "gaussian":  # C = eps**2 exp(-r**2/l**2)
        return 2 * math.sqrt(math.pi) * eps**2 / length, 12 * math.sqrt(math.pi) * eps**2 / length**3
    nu = family
    front = 2 * math.sqrt(math.pi) * eps**2 * math.gamma(nu + 0.5) / math.gamma(nu)
    return front / (2 * (nu - 0.5) * length), 3 * front / (4 * (nu - 0.5) * (nu - 1.5) * length**3)


@pytest.mark.parametrize(
    ("spectrum", "family"),
    [(GaussianSpectrum(1.7), "gaussian"), (MaternSpectrum(0.6, 2.5), 2.5), (MaternSpectrum(0.6, 4.0), 4.0)],
    ids=["gaussian", "matern 5/2", "matern 4"],
)
def test_angle_diffusion_and_curvature_noise(spectrum, family):
    diffusion, noise = closed_noise(family, 0.5, spectrum.length)  # v of rms 1: index of rms 1/2
    far = 1e7 / spectrum.length  # no cut-off
    assert 0.25 * spectrum.line_moment(2, far) == pytest.approx(diffusion, rel=1e-9)
    assert 0.25 * spectrum.line_moment(4, far) == pytest.approx(noise, rel=1e-8)


@every
def test_moments_are_derivatives_of_the_projection(spectrum):
    """-A''(0) from A itself, by central differences extrapolated to step 0, where the family has it."""
    if isinstance(spectrum, ExponentialSpectrum) or getattr(spectrum, "smoothness", 9.0) < 2.0:
        assert not spectrum.limit
        return
    assert spectrum.limit

    def bend(h):
        return 2.0 * float(spectrum.projection(0.0) - spectrum.projection(h)) / h**2

    h = 2e-3 * min(spectrum.length, getattr(spectrum, "inner_scale", math.inf))
    assert (4.0 * bend(h) - bend(2.0 * h)) / 3.0 == pytest.approx(spectrum.line_moment(2), rel=1e-3)


def test_donor_layer_closed_forms():
    """int q**n S(0, q) dq/(2 pi) = 8 l**2 n!/(2 l)**(n+1): Dtheta = rms**2/(2 l), D = (3/2) rms**2/l**3, rms of v."""
    layer = DonorLayerSpectrum(0.7)
    assert 0.25 * layer.line_moment(2, 60.0 / 0.7) == pytest.approx(0.5 / 0.7, rel=1e-9)
    assert 0.25 * layer.line_moment(4, 60.0 / 0.7) == pytest.approx(1.5 / 0.7**3, rel=1e-9)


def test_first_caustics_of_the_published_table():
    """z_c and mean first caustic in L = l eps**(-2/3), eps the index rms (law: Kulkarny & White, Phys. Fluids 25 (1982)
    1770; decimals of the mean from Halperin's node density, computed twice). Form exp(-r**2/l**2): 0.3609, 1.508; Matern 5/2:
    0.7937, 3.317. Four digits as printed.
    """
    eps = 0.01
    for spectrum, scale, mean in (
        (GaussianSpectrum(1.0), 0.3609, 1.508),
        (MaternSpectrum(1.0, 2.5), 0.7937, 3.317),
    ):
        noise = eps**2 * spectrum.line_moment(4, 1e7)
        unit = eps ** (-2.0 / 3.0)
        assert noise ** (-1.0 / 3.0) / unit == pytest.approx(scale, abs=6e-5)
        assert MEAN_FIRST_CAUSTIC * noise ** (-1.0 / 3.0) / unit == pytest.approx(mean, abs=6e-4)


def test_wave_parameter_of_the_other_form():
    """exp(-r**2/(2 l**2)) of index rms eps: kappa = k l**2/z_c = 1.959 k l eps**(2/3) (that l is ours over sqrt 2)."""
    k, other, eps = 50.0, 0.8, 0.02
    spectrum = GaussianSpectrum(math.sqrt(2.0) * other)
    diffusion, noise = (eps**2 * spectrum.line_moment(order) for order in (2, 4))
    assert wave_parameter(k, diffusion, noise) == pytest.approx(k * other**2 * noise ** (1.0 / 3.0), rel=1e-9)
    assert wave_parameter(k, diffusion, noise) == pytest.approx(1.959 * k * other * eps ** (2.0 / 3.0), rel=3e-4)
