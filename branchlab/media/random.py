"""A random medium as a table of Fourier modes whose amplitudes are a pure function of seed and mode number."""

import functools

import attrs
import numpy as np

from branchlab.errors import InputError, check_axis, check_choice, check_integer, check_number, check_positive
from branchlab.media.base import Medium
from branchlab.values import value

FAMILIES = ("gaussian",)


def _splitmix(x):
    """Mix 64-bit integers (Steele, Lea & Flood, OOPSLA 2014, the SplitMix64 finaliser)."""
    x = x + np.uint64(0x9E3779B97F4A7C15)
    x = (x ^ (x >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    x = (x ^ (x >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    return x ^ (x >> np.uint64(31))


def mode_amplitude(seed: int, m, n):
    """Return unit complex normal numbers (E|z|**2 = 1) for integer modes: a pure function of (seed, m, n)."""
    with np.errstate(over="ignore"):
        start = _splitmix(np.uint64(seed) ^ np.uint64(0x6A09E667F3BCC909))
        mixed = _splitmix(start ^ (np.asarray(m, np.int64).astype(np.uint64) * np.uint64(0x9E3779B97F4A7C15)))
        first = _splitmix(mixed ^ (np.asarray(n, np.int64).astype(np.uint64) * np.uint64(0xC2B2AE3D27D4EB4F)))
        second = _splitmix(first)
    radius = ((first >> np.uint64(11)).astype(np.float64) + 0.5) / 2.0**53
    turn = (second >> np.uint64(11)).astype(np.float64) / 2.0**53
    return np.sqrt(-np.log(radius)) * np.exp(2j * np.pi * turn)


@value
class RandomMedium(Medium):
    """Stationary Gaussian random v(x, y) of zero mean on a periodic super-box.

    v(x, y) = Re sum_{mn} A_mn exp(2 pi i (m x/Bx + n y/By)) over a half plane of modes, with
    E|A_mn|**2 = 4 strength**2 S(q)/(Bx By) and S normalised to int S d2q/(2 pi)**2 = 1. The realisation
    depends on the seed and the box alone: not on grids, windows or the number of workers.

    Parameters
    ----------
    strength : float
        Ensemble rms of v (that of one realisation differs by some percent: `statistics` reports it).
    correlation_length : float
        The length l in the family's formula; gaussian: C(r) = strength**2 exp(-r**2/l**2).
    seed : int
        Number of the realisation, 0 ... 2**63 - 1.
    family : {"gaussian"}
        Shape of the correlation.
    box : (float, float), optional
        Lengths (Bx, By) of the super-box, after which the medium repeats. Default 128 by 64 correlation lengths.
    """

    strength: float = attrs.field(converter=lambda s: check_positive("strength", s))
    correlation_length: float = attrs.field(converter=lambda s: check_positive("correlation_length", s))
    seed: int = attrs.field(converter=lambda s: check_integer("seed", s, low=0))
    family: str = attrs.field(default="gaussian", converter=lambda s: check_choice("family", s, FAMILIES))
    box: tuple[float, float] | None = attrs.field(default=None, kw_only=True)

    def __attrs_post_init__(self):
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

    @property
    def scale(self) -> float:
        """The correlation length."""
        return self.correlation_length

    @property
    def period(self) -> tuple[float, float]:
        """Lengths (Bx, By) of the super-box."""
        return self.box or (128.0 * self.correlation_length, 64.0 * self.correlation_length)

    @property
    def period_y(self) -> float:
        """Exact transverse period: the width of the super-box."""
        return self.period[1]

    def _spectrum(self, q):
        """S(q), normalised to int S d2q/(2 pi)**2 = 1, and the wavenumber beyond which it is dropped."""
        length = self.correlation_length
        return np.pi * length**2 * np.exp(-((q * length) ** 2) / 4.0)

    @functools.cached_property
    def _table(self):
        """Wavenumbers qx (M,), qy (N,) and complex amplitudes A (M, N)."""
        bx, by = self.period
        cut = 12.0 / self.correlation_length  # drops exp(-36) of the variance
        m = np.arange(-int(cut * bx / (2 * np.pi)), int(cut * bx / (2 * np.pi)) + 1)
        n = np.arange(0, int(cut * by / (2 * np.pi)) + 1)
        qx, qy = 2 * np.pi * m / bx, 2 * np.pi * n / by
        q = np.hypot(qx[:, None], qy[None, :])
        kept = (q <= cut) & ((n[None, :] > 0) | (m[:, None] > 0))
        zero_mode = self._spectrum(0.0) / (bx * by)  # left out, so that v has no mean: its share is given back
        variance = np.where(kept, 4.0 * self.strength**2 * self._spectrum(q) / (bx * by * (1.0 - zero_mode)), 0.0)
        return qx, qy, np.sqrt(variance) * mode_amplitude(self.seed, m[:, None], n[None, :])

    def rows(self, x, y, *, dx: int = 0, dy: int = 0) -> np.ndarray:
        """Return v, or a derivative of it, on the product grid (see `Medium.rows`); exact mode sums."""
        x, y = check_axis("x", x), check_axis("y", y)
        qx, qy, amplitude = self._table
        along = np.exp(1j * np.outer(x, qx)) * (1j * qx) ** dx
        partial = (along @ amplitude) * (1j * qy) ** dy
        phase = np.outer(qy, y)
        return partial.real @ np.cos(phase) - partial.imag @ np.sin(phase)
