"""Media with exact answers for the full wave."""

import functools

import numpy as np
from scipy import special
from scipy.interpolate import CubicSpline

from branchlab.launch.window import smooth_step
from branchlab.media.base import Medium
from branchlab.values import value


@value
class Layers(Medium):
    """v that depends on x alone."""

    profile: str
    strength: float
    rate: float
    x: float
    smallest: float
    width: float

    @property
    def scale(self):
        return self.smallest

    @property
    def period_y(self):
        """Of the window: no seam."""
        return self.width

    def rows(self, x, y, *, dx=0, dy=0):
        u = self.rate * (np.asarray(x, float) - self.x)
        profiles = {
            "sech": lambda: 1.0 / np.cosh(np.clip(u, -300, 300)) ** 2,
            # led back to 0 over so long a way that nothing comes back from there
            "step": lambda: 0.5 * (1.0 + np.tanh(u)) * (1.0 - smooth_step((np.asarray(x) - self.x - 2.0) / 8.0)),
        }
        assert not dx
        line = self.strength * profiles[self.profile]() * (dy == 0)
        return np.repeat(line[:, None], np.size(y), axis=1)


@value
class Disc(Medium):
    """A disc of constant v whose spectrum ends at the wavenumber `cut`: v a int_0^cut J1(q a) J0(q r) dq."""

    strength: float
    radius: float
    cut: float
    x: float

    @property
    def scale(self):
        return 12.0 / self.cut

    @functools.cached_property
    def _table(self):
        nodes, weights = np.polynomial.legendre.leggauss(int(8 * self.cut))
        q, r = 0.5 * self.cut * (nodes + 1.0), np.linspace(0.0, 12.0, int(400 * self.cut))
        shape = 0.5 * self.cut * self.radius * weights * special.j1(q * self.radius)
        return CubicSpline(r, self.strength * special.j0(np.outer(r, q)) @ shape)

    def rows(self, x, y, *, dx=0, dy=0):
        assert dx == dy == 0
        return self._table(np.hypot(np.asarray(x, float)[:, None] - self.x, np.asarray(y, float)))


@value
class Pillar(Medium):
    """A disc of constant v with a narrow edge, erfc((r - radius)/edge)/2."""

    strength: float
    radius: float
    edge: float
    x: float

    @property
    def scale(self):
        return 4.0 * self.edge

    def rows(self, x, y, *, dx=0, dy=0):
        assert dx == dy == 0
        r = np.hypot(np.asarray(x, float)[:, None] - self.x, np.asarray(y, float))
        return 0.5 * self.strength * special.erfc((r - self.radius) / self.edge)
