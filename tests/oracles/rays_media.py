"""Media of the ray tests that are not part of the package."""

import attrs

from branchlab.errors import check_axis
from branchlab.media.base import Medium
from branchlab.values import value


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
