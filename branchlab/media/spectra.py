"""Spectra of random media, one per family: S(q) with int S d2q/(2 pi)**2 = 1, and what follows from it.

The correlation of v is strength**2 C(r), C(r) = int S(q) J0(q r) q dq/(2 pi). Rays and paraxial waves see the medium
through its line integral: with the index correlation strength**2 C/4 (mu = n - 1 = -v/2),
A(y) = (strength**2/4) int S(0, q) exp(iqy) dq/(2 pi), Dtheta = -A''(0), D = A''''(0), z_c = D**(-1/3).
"""

import abc
import math

import attrs
import numpy as np
from scipy import integrate, special


@attrs.frozen
class Spectrum(abc.ABC):
    """Shape of a spectrum; l is the length in the family's formula."""

    length: float

    limit = True
    """Whether rays have a limit: D is finite."""

    @abc.abstractmethod
    def density(self, q):
        """Return S(q), length**2."""

    @abc.abstractmethod
    def correlation(self, r):
        """Return C(r), with C(0) = 1."""

    @property
    @abc.abstractmethod
    def cut(self) -> float:
        """Wavenumber beyond which modes are left out."""

    @property
    def formula(self) -> str:
        """The correlation, as printed with a medium."""
        return type(self).__doc__.split(":", 1)[1].strip().rstrip(".")

    def line_moment(self, order: int) -> float:
        """Return int q**order S(0, q) dq/(2 pi) over all q below the cut, length**(1 - order)."""
        points = [0.1 / self.length, 1.0 / self.length, 10.0 / self.length]
        inside = [p for p in points if p < self.cut]
        value, _ = integrate.quad(
            lambda q: q**order * float(self.density(q)), 0.0, self.cut, points=inside, limit=400, epsrel=1e-11
        )
        return value / math.pi


class GaussianSpectrum(Spectrum):
    """Gaussian: C(r) = exp(-r**2/l**2)."""

    def density(self, q):
        """Return pi l**2 exp(-q**2 l**2/4)."""
        return math.pi * self.length**2 * np.exp(-((q * self.length) ** 2) / 4.0)

    def correlation(self, r):
        """Return exp(-r**2/l**2)."""
        return np.exp(-((np.asarray(r) / self.length) ** 2))

    @property
    def cut(self) -> float:
        """Leaves out exp(-36) of the variance."""
        return 12.0 / self.length


@attrs.frozen
class MaternSpectrum(Spectrum):
    """Matern (von Karman): C(r) = 2**(1-nu)/Gamma(nu) (r/l)**nu K_nu(r/l)."""

    smoothness: float

    @property
    def limit(self) -> bool:
        """Rays have a limit above smoothness 3/2."""
        return self.smoothness > 1.5

    def density(self, q):
        """Return 4 pi nu l**2 (1 + q**2 l**2)**(-nu - 1)."""
        nu = self.smoothness
        return 4.0 * math.pi * nu * self.length**2 * (1.0 + (q * self.length) ** 2) ** (-nu - 1.0)

    def correlation(self, r):
        """Return the Matern correlation."""
        t = np.maximum(np.asarray(r, dtype=float) / self.length, 1e-12)
        nu = self.smoothness
        return 2.0 ** (1.0 - nu) / special.gamma(nu) * t**nu * special.kv(nu, t)

    @property
    def cut(self) -> float:
        """Leaves out (1 + cut**2 l**2)**(-nu) of the variance: 2e-8 at nu = 5/2, 3 % at nu = 1/2."""
        return 36.0 / self.length


class ExponentialSpectrum(Spectrum):
    """exponential: C(r) = exp(-r/l)."""

    limit = False

    def density(self, q):
        """Return 2 pi l**2 (1 + q**2 l**2)**(-3/2)."""
        return 2.0 * math.pi * self.length**2 * (1.0 + (q * self.length) ** 2) ** -1.5

    def correlation(self, r):
        """Return exp(-r/l)."""
        return np.exp(-np.asarray(r) / self.length)

    @property
    def cut(self) -> float:
        """Leaves out (1 + cut**2 l**2)**(-1/2) of the variance: 2 %."""
        return 48.0 / self.length


@attrs.frozen
class PowerLawSpectrum(Spectrum):
    """power law: S(q) ~ (1 + q**2 l**2)**(-exponent/2) exp(-q**2 inner_scale**2/4), l the outer scale."""

    exponent: float
    inner_scale: float

    def _shape(self, q):
        return (1.0 + (q * self.length) ** 2) ** (-0.5 * self.exponent) * np.exp(-((q * self.inner_scale) ** 2) / 4.0)

    @property
    def _norm(self) -> float:
        value, _ = integrate.quad(
            lambda u: math.exp(2.0 * u) * float(self._shape(math.exp(u))),
            math.log(1e-6 / self.length),
            math.log(self.cut),
            limit=400,
            epsrel=1e-11,
        )
        return value / (2.0 * math.pi)

    def density(self, q):
        """Return the normalised power law."""
        return self._shape(q) / self._norm

    def correlation(self, r):
        """Return the Hankel transform of the spectrum, by quadrature."""
        edges = np.linspace(0.0, self.cut, 513)
        node, weight = np.polynomial.legendre.leggauss(8)
        q = (0.5 * (edges[1:] + edges[:-1])[:, None] + 0.5 * np.diff(edges)[:, None] * node).ravel()
        share = (0.5 * np.diff(edges)[:, None] * weight).ravel() * q * self.density(q) / (2.0 * math.pi)
        return special.j0(np.multiply.outer(np.asarray(r, dtype=float), q)) @ share

    @property
    def cut(self) -> float:
        """Leaves out less than exp(-16) of the variance."""
        return 8.0 / self.inner_scale


class DonorLayerSpectrum(Spectrum):
    """donor layer: white charges at the distance l behind a screening gas, C(r) = (1 + r**2/(4 l**2))**(-3/2)."""

    def density(self, q):
        """Return 8 pi l**2 exp(-2 q l): white charges, their potential filtered by exp(-q l)."""
        return 8.0 * math.pi * self.length**2 * np.exp(-2.0 * q * self.length)

    def correlation(self, r):
        """Return (1 + r**2/(4 l**2))**(-3/2)."""
        return (1.0 + (np.asarray(r) / (2.0 * self.length)) ** 2) ** -1.5

    @property
    def cut(self) -> float:
        """Leaves out 25 exp(-24) = 1e-9 of the variance."""
        return 12.0 / self.length
