"""Media of the ray tests that are not part of the package."""

import attrs
import numpy as np

from branchlab.errors import check_axis
from branchlab.media.base import Medium
from branchlab.values import value


@value
class WhiteNoise(Medium):
    """A medium without memory along x: rays get one independent kick per slab of thickness `step`.

    v is constant along x inside a slab and 0 on the planes between two. Across, every slab is a Gaussian random function
    of correlation exp(-r**2), of a strength for which the curvature noise is D = 1/focal**3 exactly:
    <(step v_yy/2)**2> = D step, so that <v**2> = D/(3 step).
    """

    focal: float = attrs.field(converter=float)  # z_c = D**(-1/3)
    step: float = attrs.field(converter=float)
    period: float = attrs.field(converter=float)
    seed: int = attrs.field()

    scale = 2.0  # grids of scale/8 = 1/4: the spectrum exp(-q**2/4) is down to exp(-39) at their end

    @property
    def period_y(self):
        return self.period

    def rows(self, x, y, *, dx=0, dy=0):
        x, y = check_axis("x", x), check_axis("y", y)
        n = y.size
        v = np.zeros((x.size, n))
        if dx:
            return v
        assert np.allclose(np.diff(y), self.period / n), "only whole periods of equidistant points"
        modes = np.arange(1, int(12 * self.period / (2 * np.pi)))
        q = 2 * np.pi * modes / self.period
        share = np.exp(-(q**2) / 4)
        curvature = (share * q**4).sum()  # this sum is the variance of v_yy, made exactly 4 D/step
        size = np.sqrt(4.0 / self.focal**3 / self.step * share / curvature)
        for row, at in zip(v, x / self.step, strict=True):
            if abs(at - round(at)) < 1e-6:
                continue
            rng = np.random.default_rng([self.seed, int(at)])
            spectrum = np.zeros(n // 2 + 1, dtype=complex)
            normal = rng.standard_normal((2, modes.size))
            waves = size * (normal[0] + 1j * normal[1]) * np.exp(1j * q * (y[0] + self.period / 2))
            fit = min(modes.size, n // 2 - 1)  # a coarser grid does not see the last modes, which are exp(-10) and less
            spectrum[1 : fit + 1] = 0.5 * n * waves[:fit]
            row[:] = np.fft.irfft(spectrum * (1j * 2 * np.pi * np.arange(n // 2 + 1) / self.period) ** dy, n)
        return v


@value
class Mirrored(Medium):
    """Another medium seen from its far end: v(length - x, y)."""

    medium: Medium
    length: float = attrs.field(converter=float)

    @property
    def scale(self):
        return self.medium.scale

    @property
    def period_y(self):
        return self.medium.period_y

    def rows(self, x, y, *, dx=0, dy=0):
        return (-1) ** dx * self.medium.rows(self.length - check_axis("x", x), y, dx=dx, dy=dy)
