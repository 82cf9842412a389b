"""A harmonic well in the plane, for tests."""

import attrs
import numpy as np

from branchlab.errors import check_axis
from branchlab.media.base import Medium
from branchlab.values import value


@value
class Well(Medium):
    """v = (rate_x (x - middle))**2 + (rate_y y)**2."""

    middle: float = attrs.field(converter=float)
    rate_x: float = attrs.field(converter=float)
    rate_y: float = attrs.field(converter=float)

    scale = 1.0

    def rows(self, x, y, *, dx=0, dy=0):
        u, w = check_axis("x", x) - self.middle, check_axis("y", y)
        along = ((self.rate_x * u) ** 2, 2 * self.rate_x**2 * u)[dx]
        across = ((self.rate_y * w) ** 2, 2 * self.rate_y**2 * w, np.full_like(w, 2 * self.rate_y**2))[dy]
        if dx and dy:
            return np.zeros((u.size, w.size))
        if dx:
            return np.repeat(along[:, None], w.size, axis=1)
        if dy:
            return np.repeat(across[None], u.size, axis=0)
        return along[:, None] + across
