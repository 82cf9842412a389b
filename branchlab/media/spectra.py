"""Spectra of random media, one class per family: S(q) with int S d2q/(2 pi)**2 = 1, and what follows from it.

The correlation of v is strength**2 C(r), C(r) = int S(q) J0(q r) q dq/(2 pi). Rays and paraxial waves see the medium
through its line integral: with the index correlation strength**2 C/4 (mu = n - 1 = -v/2),
A(y) = (strength**2/4) int C((x**2 + y**2)**(1/2)) dx, Dtheta = -A''(0), D = A''''(0), z_c = D**(-1/3).
In the spectrum: -A''(0) and A''''(0) are strength**2/4 times int q**2 S(0, q) dq/(2 pi) and the same with q**4.

Sources (from memory; the physics tests integrate every pair numerically): Stein, Interpolation of Spatial Data (1999),
sec. 2.7, and Goff & Jordan, J. Geophys. Res. 93 (1988) 13589, for Matern, that is von Karman, and its exponential case;
Tatarskii, The Effects of the Turbulent Atmosphere on Wave Propagation (1971), for the line integrals; Davies & Nixon,
Phys. Rev. B 39 (1989) 3423, for the donor layer.
"""

import abc
import functools
import math

import attrs
import numpy as np
from scipy import special

PANELS, NODES = 48, 16  # Gauss-Legendre panels over log q: 1e-13 for every family


@attrs.frozen
class Spectrum(abc.ABC):
    """Shape of a spectrum; `length` is the l of the family's formula."""

    length: float

    limit = True
    """Whether rays have a limit: D is finite without a cut-off."""

    @property
    @abc.abstractmethod
    def formula(self) -> str:
        """The correlation (or, where it has no closed form, the spectrum) in l, as printed with a medium."""

    @abc.abstractmethod
    def density(self, q):
        """Return S(q), length**2."""

    @abc.abstractmethod
    def correlation(self, r):
        """Return C(r), with C(0) = 1."""

    @abc.abstractmethod
    def projection(self, y):
        """Return int C((x**2 + y**2)**(1/2)) dx, a length."""

    @abc.abstractmethod
    def share_beyond(self, q: float) -> float:
        """Return the share of the variance at wavenumbers above q."""

    @property
    @abc.abstractmethod
    def cut(self) -> float:
        """Wavenumber beyond which modes are left out unless another loss is asked for."""

    def cut_for(self, lost: float) -> float:
        """Return the wavenumber beyond which the share `lost` of the variance lies."""
        low, high = 0.0, 1.0 / self.length
        while self.share_beyond(high) > lost:
            low, high = high, 2.0 * high
        while high - low > 1e-12 * high:
            middle = 0.5 * (low + high)
            low, high = (middle, high) if self.share_beyond(middle) > lost else (low, middle)
        return high

    def line_moment(self, order: int, cut: float | None = None) -> float:
        """Return int q**order S(0, q) dq/(2 pi) over abs(q) < cut, length**(1 - order).

        Parameters
        ----------
        order : int
            Even and at least 2: 2 gives -A''(0), 4 gives A''''(0) of unit index variance.
        cut : float, optional
            Default: the family's own.
        """
        cut = self.cut if cut is None else cut
        t, weight = np.polynomial.legendre.leggauss(NODES)
        edges = np.linspace(math.log(1e-6 / self.length), math.log(cut), PANELS + 1)
        half = 0.5 * np.diff(edges)[:, None]
        q = np.exp(0.5 * (edges[1:] + edges[:-1])[:, None] + half * t)
        return float((half * weight * q ** (order + 1) * self.density(q)).sum() / math.pi)


class GaussianSpectrum(Spectrum):
    """The gaussian family."""

    formula = "C(r) = exp(-r**2/l**2)"

    def density(self, q):
        """Return pi l**2 exp(-q**2 l**2/4)."""
        return math.pi * self.length**2 * np.exp(-((q * self.length) ** 2) / 4.0)

    def correlation(self, r):
        """Return exp(-r**2/l**2)."""
        return np.exp(-((np.asarray(r) / self.length) ** 2))

    def projection(self, y):
        """Return sqrt(pi) l exp(-y**2/l**2)."""
        return math.sqrt(math.pi) * self.length * self.correlation(y)

    def share_beyond(self, q: float) -> float:
        """Return exp(-q**2 l**2/4)."""
        return math.exp(-((q * self.length) ** 2) / 4.0)

    @property
    def cut(self) -> float:
        """12/l leaves out exp(-36) of the variance."""
        return 12.0 / self.length


def _matern(t, nu: float):
    """Return 2**(1 - nu)/Gamma(nu) t**nu K_nu(t), 1 at t = 0."""
    t = np.maximum(np.asarray(t, dtype=np.float64), 10.0 ** (-200.0 / max(nu, 1.0)))  # K_nu overflows below
    return 2.0 ** (1.0 - nu) / special.gamma(nu) * t**nu * special.kv(nu, t)


@attrs.frozen
class MaternSpectrum(Spectrum):
    """The Matern, or von Karman, family; `smoothness` is its nu."""

    smoothness: float

    formula = "C(r) = 2**(1-nu)/Gamma(nu) (r/l)**nu K_nu(r/l)"

    @property
    def limit(self) -> bool:
        """Rays have a limit above smoothness 3/2."""
        return self.smoothness > 1.5

    def density(self, q):
        """Return 4 pi nu l**2 (1 + q**2 l**2)**(-nu - 1)."""
        nu = self.smoothness
        return 4.0 * math.pi * nu * self.length**2 * (1.0 + (q * self.length) ** 2) ** (-nu - 1.0)

    def correlation(self, r):
        """Return 2**(1 - nu)/Gamma(nu) (r/l)**nu K_nu(r/l)."""
        return _matern(np.asarray(r) / self.length, self.smoothness)

    def projection(self, y):
        """Return 2 sqrt(pi) l Gamma(nu + 1/2)/Gamma(nu) times the Matern correlation of smoothness nu + 1/2."""
        nu = self.smoothness
        front = 2.0 * math.sqrt(math.pi) * self.length * special.gamma(nu + 0.5) / special.gamma(nu)
        return front * _matern(np.asarray(y) / self.length, nu + 0.5)

    def share_beyond(self, q: float) -> float:
        """Return (1 + q**2 l**2)**(-nu)."""
        return (1.0 + (q * self.length) ** 2) ** -self.smoothness

    @property
    def cut(self) -> float:
        """36/l leaves out 2e-8 of the variance and 0.2 % of D at nu = 5/2."""
        return 36.0 / self.length


class ExponentialSpectrum(Spectrum):
    """The exponential family: Matern of smoothness 1/2."""

    limit = False
    formula = "C(r) = exp(-r/l)"

    def density(self, q):
        """Return 2 pi l**2 (1 + q**2 l**2)**(-3/2)."""
        return 2.0 * math.pi * self.length**2 * (1.0 + (q * self.length) ** 2) ** -1.5

    def correlation(self, r):
        """Return exp(-r/l)."""
        return np.exp(-np.asarray(r) / self.length)

    def projection(self, y):
        """Return 2 y K1(y/l)."""
        return 2.0 * self.length * _matern(np.asarray(y) / self.length, 1.0)

    def share_beyond(self, q: float) -> float:
        """Return (1 + q**2 l**2)**(-1/2)."""
        return (1.0 + (q * self.length) ** 2) ** -0.5

    @property
    def cut(self) -> float:
        """48/l leaves out 2 % of the variance."""
        return 48.0 / self.length


@functools.lru_cache(maxsize=64)
def _mixture(length: float, exponent: float, inner: float):
    """Return the power law as a sum of Gaussians: c and weights of exp(-c q**2), and the norm of S.

    (1 + q**2 l**2)**(-p/2) Gamma(p/2) = int s**(p/2 - 1) exp(-s (1 + q**2 l**2)) ds, with s = exp(u) by the trapezoid rule:
    its error is exp(-pi**2/step), 1e-17.
    """
    step = 0.25
    lowest = min(0.0, 2.0 * math.log(0.5 * inner / length)) - 80.0 / exponent
    u = np.arange(lowest, math.log(700.0), step)
    s = np.exp(u)
    c = s * length**2 + 0.25 * inner**2
    weight = step * np.exp(0.5 * exponent * u - s) / special.gamma(0.5 * exponent)
    return c, weight, float((weight / c).sum() / (4.0 * math.pi))


@attrs.frozen
class PowerLawSpectrum(Spectrum):
    """The power-law family: a von Karman spectrum that ends at an inner scale; l is the outer scale."""

    exponent: float
    inner_scale: float

    formula = "S(q) ~ (1 + q**2 l**2)**(-exponent/2) exp(-q**2 inner_scale**2/4)"

    @property
    def _parts(self):
        """Widths c, shares of the variance (sum 1) and norm of the Gaussians that make the spectrum up."""
        c, weight, norm = _mixture(self.length, self.exponent, self.inner_scale)
        return c, weight / (4.0 * math.pi * norm * c), norm

    def density(self, q):
        """Return the normalised power law."""
        q = np.asarray(q, dtype=np.float64)
        shape = (1.0 + (q * self.length) ** 2) ** (-0.5 * self.exponent) * np.exp(-((q * self.inner_scale) ** 2) / 4.0)
        return shape / self._parts[2]

    def correlation(self, r):
        """Return sum_j share_j exp(-r**2/(4 c_j))."""
        c, share, _ = self._parts
        return np.exp(-np.multiply.outer(np.asarray(r, dtype=np.float64) ** 2, 0.25 / c)) @ share

    def projection(self, y):
        """Return sum_j share_j sqrt(4 pi c_j) exp(-y**2/(4 c_j))."""
        c, share, _ = self._parts
        return np.exp(-np.multiply.outer(np.asarray(y, dtype=np.float64) ** 2, 0.25 / c)) @ (
            share * np.sqrt(4.0 * math.pi * c)
        )

    def share_beyond(self, q: float) -> float:
        """Return sum_j share_j exp(-c_j q**2)."""
        c, share, _ = self._parts
        return float(np.exp(-c * q**2) @ share)

    @property
    def cut(self) -> float:
        """8/inner_scale leaves out less than exp(-16) of the variance."""
        return 8.0 / self.inner_scale


class DonorLayerSpectrum(Spectrum):
    """White charges at the distance l from a gas that screens them."""

    formula = "C(r) = (1 + r**2/(4 l**2))**(-3/2), donors at the distance l"

    def density(self, q):
        """Return 8 pi l**2 exp(-2 q l): white charges, their potential filtered by exp(-q l)."""
        return 8.0 * math.pi * self.length**2 * np.exp(-2.0 * q * self.length)

    def correlation(self, r):
        """Return (1 + r**2/(4 l**2))**(-3/2)."""
        return (1.0 + (np.asarray(r) / (2.0 * self.length)) ** 2) ** -1.5

    def projection(self, y):
        """Return 4 l/(1 + y**2/(4 l**2))."""
        return 4.0 * self.length / (1.0 + (np.asarray(y) / (2.0 * self.length)) ** 2)

    def share_beyond(self, q: float) -> float:
        """Return (1 + 2 q l) exp(-2 q l)."""
        return (1.0 + 2.0 * q * self.length) * math.exp(-2.0 * q * self.length)

    @property
    def cut(self) -> float:
        """12/l leaves out 25 exp(-24) = 1e-9 of the variance."""
        return 12.0 / self.length
