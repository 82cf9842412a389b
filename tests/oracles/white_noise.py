"""A medium of independent rows: the white-noise limit in which closed forms for random media hold exactly."""

import attrs
import numpy as np

from branchlab.media.base import Medium
from branchlab.media.hashing import complex_normal
from branchlab.values import value


@value
class WhiteNoise(Medium):
    """Rows of Gaussian-correlated v, one per step of the march, independent of one another.

    v on 0 < x - i step < step is row i, with correlation strength**2 exp(-y**2/length**2) and the period `period`. On the
    multiples of `step` it is 0, so that no processor acts. The line-integrated index correlation of the rows
    is A(y) = step (strength**2/4) exp(-y**2/length**2): Dtheta = -A''(0), D = A''''(0).
    """

    strength: float
    seed: int
    step: float = 1.0
    length: float = 1.0
    period: float = 64.0
    grid_scale: float | None = attrs.field(default=None, kw_only=True)  # what grids and steps are fractions of

    @classmethod
    def of_focal(cls, focal, step, period, seed):
        """Return the medium with D = 1/focal**3 at the length 1: the caustic scale is `focal`.

        Grids of scale/8 = 1/4 hold it: the spectrum exp(-q**2/4) is down to exp(-39) at their end.
        """
        return cls((3.0 * step * focal**3) ** -0.5, seed, step, period=period, grid_scale=2.0)

    @property
    def scale(self):
        return self.grid_scale or min(self.length, 4.0 * self.step)

    @property
    def period_y(self):
        return self.period

    @property
    def angle_diffusion(self):
        return self.step * self.strength**2 / 4 * 2 / self.length**2

    @property
    def curvature_noise(self):
        return self.step * self.strength**2 / 4 * 12 / self.length**4

    @property
    def caustic_scale(self):
        return self.curvature_noise ** (-1 / 3)

    def coherence_loss(self, y):
        """A(0) - A(y)."""
        return self.step * self.strength**2 / 4 * -np.expm1(-((y / self.length) ** 2))

    def rows(self, x, y, *, dx=0, dy=0):
        x, y = np.asarray(x, float), np.asarray(y, float)
        if dx:
            return np.zeros((x.size, y.size))
        n = np.arange(1, int(12.0 * self.period / (2 * np.pi * self.length)) + 1)
        q = 2 * np.pi * n / self.period
        share = np.sqrt(np.pi) * self.length * np.exp(-((q * self.length) ** 2) / 4)
        share *= 2 * self.strength**2 / share.sum()
        number = np.floor(x / self.step).astype(np.int64)
        amplitude = np.sqrt(share) * complex_normal(self.seed, number[:, None], n[None, :]) * (1j * q) ** dy
        on_step = np.isclose(x / self.step, np.round(x / self.step), rtol=0, atol=1e-6)
        amplitude[on_step] = 0.0
        m = y.size
        pitch = self.period / m
        if m > 2 * n[-1] and np.allclose(np.diff(y), pitch, rtol=1e-9, atol=0):  # a whole period: one transform a row
            spectrum = np.zeros((x.size, m // 2 + 1), complex)
            spectrum[:, n] = 0.5 * amplitude * np.exp(1j * q * y[0])
            return np.fft.irfft(spectrum, n=m, axis=1, norm="forward")
        phase = np.outer(q, y)
        return amplitude.real @ np.cos(phase) - amplitude.imag @ np.sin(phase)
