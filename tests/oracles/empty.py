"""Media of the tests that are not part of the package."""

import numpy as np

from branchlab.errors import check_axis
from branchlab.media.base import Medium
from branchlab.values import value


@value
class Empty(Medium):
    """v = 0."""

    scale = 1.0

    def rows(self, x, y, *, dx=0, dy=0):
        return np.zeros((check_axis("x", x).size, check_axis("y", y).size))


@value
class Bowl(Medium):
    """v = (0.08 y)**2: a duct whose flat front meets at x = pi/0.16."""

    scale = 1.0

    def rows(self, x, y, *, dx=0, dy=0):
        y = check_axis("y", y)
        row = (0.0064 * y**2, 0.0128 * y, np.full_like(y, 0.0128))[dy]
        return np.tile(0 * row if dx else row, (check_axis("x", x).size, 1))
