"""A random medium as a table of Fourier modes whose amplitudes are a pure function of seed and mode number."""

import functools
import math
import warnings

import attrs
import numpy as np

from branchlab.errors import (
    BranchlabWarning,
    InputError,
    check_axis,
    check_choice,
    check_memory,
    check_number,
    check_positive,
)
from branchlab.media import spectra
from branchlab.media.base import Medium
from branchlab.media.hashing import check_seed, complex_normal
from branchlab.values import value

FAMILIES = ("gaussian", "matern", "power-law", "exponential", "donor-layer")
ROWS_AT_ONCE = 512
RESOLVED = 12.0  # a grid of scale/8 resolves wavenumbers up to RESOLVED/scale: scale = RESOLVED/cut


def _optional(name, *, low=0.0, high=math.inf):
    return lambda s: s if s is None else check_number(name, s, low=low, high=high, open_low=low == 0.0)


@value
class RandomMedium(Medium):
    """Stationary Gaussian random v(x, y) of zero mean on a periodic super-box.

    v(x, y) = Re sum_{mn} A_mn exp(2 pi i (m x/Bx + n y/By)) over a half plane of modes, with
    E|A_mn|**2 = 4 strength**2 S(q)/(Bx By) and S normalised to int S d2q/(2 pi)**2 = 1. The realisation
    depends on the seed and the box alone: not on grids, windows or the number of workers.

    Parameters
    ----------
    strength : float
        Ensemble rms of v (that of one realisation differs by some percent: `realised_rms`, `statistics`).
    correlation_length : float
        The length l in the family's formula; see Notes.
    seed : int
        Number of the realisation, 0 ... 2**63 - 1.
    family : {"gaussian", "matern", "power-law", "exponential", "donor-layer"}
        Shape of the spectrum.
    smoothness : float, optional
        nu of "matern", up to 30. Default 5/2; rays have no limit for nu <= 3/2.
    exponent : float, optional
        Of "power-law", 1 ... 12: S ~ q**(-exponent) between outer and inner scale. Default 8/3.
    inner_scale : float, optional
        Of "power-law": the spectrum ends with exp(-q**2 inner_scale**2/4). Default correlation_length/10.
    box : (float, float), optional
        Lengths (Bx, By) of the super-box, after which the medium repeats. Default 128 by 64 correlation lengths
        (64 by 32 for "power-law").
    lost_variance : float, optional
        Share of the variance that the cut-off in wavenumber leaves out. Default: the family's, 2e-16 (gaussian), 1e-9
        (donor-layer), at most 1e-7 (power-law), (1 + 36**2)**(-smoothness) (matern: 2e-8 at 5/2), 2 % (exponential).
        A smaller one adds modes and leaves those that are there as they are.

    Notes
    -----
    C(r)/strength**2 of the families: gaussian exp(-r**2/l**2); matern 2**(1-nu)/Gamma(nu) (r/l)**nu K_nu(r/l);
    exponential exp(-r/l); donor-layer (1 + r**2/(4 l**2))**(-3/2), white charges at the distance l, whose potential
    is filtered by exp(-q l); power-law S(q) ~ (1 + q**2 l**2)**(-exponent/2) exp(-q**2 inner_scale**2/4), l the
    outer scale.

    Warns
    -----
    BranchlabWarning
        The family has no ray limit: D = A''''(0) is infinite, and what rays find depends on the cut-off.
    """

    strength: float = attrs.field(converter=lambda s: check_positive("strength", s))
    correlation_length: float = attrs.field(converter=lambda s: check_positive("correlation_length", s))
    seed: int = attrs.field(converter=check_seed)
    family: str = attrs.field(default="gaussian", converter=lambda s: check_choice("family", s, FAMILIES))
    smoothness: float | None = attrs.field(default=None, kw_only=True, converter=_optional("smoothness", high=30.0))
    exponent: float | None = attrs.field(
        default=None, kw_only=True, converter=_optional("exponent", low=1.0, high=12.0)
    )
    inner_scale: float | None = attrs.field(default=None, kw_only=True, converter=_optional("inner_scale"))
    box: tuple[float, float] | None = attrs.field(default=None, kw_only=True)
    lost_variance: float | None = attrs.field(
        default=None, kw_only=True, converter=_optional("lost_variance", low=1e-16, high=0.5)
    )

    def __attrs_post_init__(self):
        homes = {"smoothness": "matern", "exponent": "power-law", "inner_scale": "power-law"}
        for name, family in homes.items():
            if getattr(self, name) is not None and self.family != family:
                raise InputError(
                    f"{name} belongs to the family {family!r}; the family is {self.family!r}. Leave {name} out, or use "
                    f"family={family!r}."
                )
        if self.inner_scale is not None and self.inner_scale >= self.correlation_length:
            raise InputError(
                f"inner_scale must be below the outer scale, correlation_length = {self.correlation_length:g}; got "
                f"{self.inner_scale:g}."
            )
        if self.box is not None:
            try:
                lengths = tuple(self.box)
            except TypeError:
                lengths = ()
            if len(lengths) != 2:
                raise InputError(f"box must be two lengths (Bx, By); got {self.box!r}.")
            lengths = tuple(
                check_number(f"box[{i}]", b, low=4 * self.correlation_length) for i, b in enumerate(lengths)
            )
            object.__setattr__(self, "box", lengths)
        if not self.spectrum.limit:
            warnings.warn(
                f"the rays of family {self.family!r} have no limit: the curvature noise D is infinite, and caustics depend "
                f"on the shortest structure kept ({2 * np.pi / self.cut:.3g}).",
                BranchlabWarning,
                stacklevel=4,
            )

    @functools.cached_property
    def spectrum(self) -> spectra.Spectrum:
        """The spectrum of the family."""
        length = self.correlation_length
        if self.family == "matern":
            return spectra.MaternSpectrum(length, 2.5 if self.smoothness is None else self.smoothness)
        if self.family == "power-law":
            inner = 0.1 * length if self.inner_scale is None else self.inner_scale
            return spectra.PowerLawSpectrum(length, 8.0 / 3.0 if self.exponent is None else self.exponent, inner)
        kinds = {
            "gaussian": spectra.GaussianSpectrum,
            "exponential": spectra.ExponentialSpectrum,
            "donor-layer": spectra.DonorLayerSpectrum,
        }
        return kinds[self.family](length)

    @functools.cached_property
    def cut(self) -> float:
        """Wavenumber beyond which modes are left out."""
        return self.spectrum.cut if self.lost_variance is None else self.spectrum.cut_for(self.lost_variance)

    @property
    def scale(self) -> float:
        """The correlation length of a gaussian medium; less where the spectrum reaches further."""
        return min(RESOLVED / self.cut, self.correlation_length)

    @property
    def repeats_after(self) -> tuple[float, float]:
        """Lengths (Bx, By) of the super-box."""
        share = 0.5 if self.family == "power-law" else 1.0
        return self.box or (128.0 * share * self.correlation_length, 64.0 * share * self.correlation_length)

    @property
    def period_y(self) -> float:
        """Exact transverse period: the width of the super-box."""
        return self.repeats_after[1]

    def with_seed(self, seed: int) -> "RandomMedium":
        """Return another realisation."""
        return self.with_(seed=seed)

    def _shares(self, cut: float):
        """Return qx (M,), qy (N,) and S(q) of the kept half plane (M, N), 0 beyond the cut."""
        bx, by = self.repeats_after
        top_x, top_y = int(cut * bx / (2 * np.pi)), int(cut * by / (2 * np.pi))
        check_memory(
            80.0 * (2 * top_x + 1) * (top_y + 1),
            f"the medium's table of {2 * top_x + 1} x {top_y + 1} modes",
            "Use a smaller box, a larger lost_variance, or a family whose spectrum ends earlier.",
        )
        m, n = np.arange(-top_x, top_x + 1), np.arange(0, top_y + 1)
        qx, qy = 2 * np.pi * m / bx, 2 * np.pi * n / by
        q = np.hypot(qx[:, None], qy[None, :])
        kept = (q <= cut) & ((n[None, :] > 0) | (m[:, None] > 0))
        return qx, qy, np.where(kept, self.spectrum.density(q), 0.0)

    @functools.cached_property
    def _table(self):
        """Wavenumbers qx (M,), qy (N,) and complex amplitudes A (M, N)."""
        reference = self.spectrum.cut  # the norm must not depend on the cut-off asked for
        qx, qy, share = self._shares(reference)
        # the mean is left out and the box makes of the integral over q a sum: the variance is made exact
        whole = 2.0 * share.sum() / (1.0 - self.spectrum.share_beyond(reference))
        if self.cut != reference:
            qx, qy, share = self._shares(self.cut)
        m, n = np.arange(qx.size) - qx.size // 2, np.arange(qy.size)
        amplitude = np.sqrt(4.0 * self.strength**2 / whole * share)
        return qx, qy, amplitude * complex_normal(self.seed, m[:, None], n[None, :])

    @property
    def realised_rms(self) -> float:
        """Rms of v over the super-box in this realisation."""
        amplitude = self._table[2]
        return float(np.sqrt(0.5 * np.sum(amplitude.real**2 + amplitude.imag**2)))

    def rows(self, x, y, *, dx: int = 0, dy: int = 0) -> np.ndarray:
        """Return v, or a derivative of it, on the product grid (see `Medium.rows`); exact mode sums."""
        x, y = check_axis("x", x), check_axis("y", y)
        qx, qy, amplitude = self._table
        # qx and -qx together: real cosines and sines of half as many phases
        amplitude, middle = amplitude * ((1j * qx[:, None]) ** dx * (1j * qy) ** dy), qx.size // 2
        opposite = amplitude[middle::-1].copy()
        opposite[0] = 0.0  # qx = 0 is its own opposite
        even, odd = ((amplitude[middle:] + sign * opposite).view(np.float64) for sign in (1.0, -1.0))
        periods = self._whole_periods(y)
        if periods:
            turn = 0.5 * np.exp(1j * qy * y[0])
        else:
            phase = np.outer(qy, y)
            cosine, sine = np.cos(phase), np.sin(phase)
        rows = np.empty((x.size, y.size))
        for at in range(0, x.size, ROWS_AT_ONCE):
            block = slice(at, at + ROWS_AT_ONCE)
            turns = np.outer(x[block], qx[middle:])
            partial = (np.cos(turns) @ even).view(np.complex128) + 1j * (np.sin(turns) @ odd).view(np.complex128)
            if periods:  # mode n turns n * periods times over the grid
                spectrum = np.zeros((partial.shape[0], y.size // 2 + 1), dtype=np.complex128)
                spectrum[:, : periods * qy.size : periods] = partial * turn
                spectrum[:, 0] = partial[:, 0].real  # it is its own mirror image: no half
                rows[block] = np.fft.irfft(spectrum, n=y.size, axis=1, norm="forward")
            else:
                rows[block] = partial.real @ cosine - partial.imag @ sine
        return rows

    def _whole_periods(self, y: np.ndarray) -> int:
        """Return how many periods an ascending uniform grid fills exactly; 0 if none, or if it does not hold all modes."""
        if y.size < 2:
            return 0
        pitch = (y[-1] - y[0]) / (y.size - 1)
        periods = round(pitch * y.size / self.period_y)
        top = periods * (self._table[1].size - 1)
        if periods < 1 or 2 * top >= y.size:
            return 0
        exact = y[0] + np.arange(y.size) * (periods * self.period_y / y.size)
        return periods if np.abs(y - exact).max() <= 4.0 * np.finfo(float).eps * np.abs(y).max() else 0

    def _described(self):
        for name, text in super()._described():
            if name == "correlation_length":
                yield name, f"{text} [l of {self.spectrum.formula}]"
            elif text != "None":
                yield name, text
