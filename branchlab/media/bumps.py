"""Smooth bumps scattered at random: a random medium that is not Gaussian."""

import functools
import math

import attrs
import numpy as np
from scipy import special

from branchlab.errors import check_axis, check_choice, check_positive
from branchlab.media.base import Medium
from branchlab.media.elements import bell
from branchlab.media.hashing import check_seed, uniform
from branchlab.media.spectra import GaussianSpectrum
from branchlab.values import value

CELL_RADII = 4.0  # side of the squares in which bumps are drawn, unless bumps are dense
MOST_PER_SQUARE = 32.0
REACH_RADII = 6.5  # a bump is exp(-42) of its height here
TILE_RADII = (2.0, 8.0)  # points of one tile share their list of bumps


def _tiles(points, size: float) -> list[np.ndarray]:
    """Return the indices of points that lie in the same interval of a length, interval by interval."""
    order = np.argsort(points, kind="stable")
    tile = np.floor((points[order] - points[order[0]]) / size)
    return np.split(order, np.flatnonzero(np.diff(tile)) + 1)


@value
class BumpMedium(Medium):
    """Gaussian bumps at the points of a Poisson process, their mean taken out.

    v = height (sum_i exp(-abs(r - r_i)**2/radius**2) - density pi radius**2), with the height that makes the ensemble
    rms of v the strength (Campbell's theorem, Rice, Bell Syst. Tech. J. 23 (1944) 282, sec. 1.5):
    strength**2 = height**2 density pi radius**2/2. The skewness is sign (2/3) (2/(pi density radius**2))**(1/2).
    Bumps are drawn square by square from the seed and the square's number: the realisation depends on nothing else.

    Parameters
    ----------
    strength : float
        Ensemble rms of v.
    radius : float
    density : float
        Bumps per area.
    seed : int
    sign : {"hills", "wells"}
        Whether v is high or low on a bump.
    """

    strength: float = attrs.field(converter=lambda s: check_positive("strength", s))
    radius: float = attrs.field(converter=lambda s: check_positive("radius", s))
    density: float = attrs.field(converter=lambda s: check_positive("density", s))
    seed: int = attrs.field(converter=check_seed)
    sign: str = attrs.field(
        default="hills", kw_only=True, converter=lambda s: check_choice("sign", s, ("hills", "wells"))
    )

    @property
    def scale(self) -> float:
        """The radius."""
        return self.radius

    @property
    def height(self) -> float:
        """Height of a bump of v, with its sign."""
        height = self.strength / math.sqrt(0.5 * math.pi * self.density * self.radius**2)
        return height if self.sign == "hills" else -height

    @property
    def skewness(self) -> float:
        """Skewness of v in the ensemble."""
        return math.copysign(2.0 / 3.0 * math.sqrt(2.0 / (math.pi * self.density * self.radius**2)), self.height)

    @functools.cached_property
    def spectrum(self) -> GaussianSpectrum:
        """That of C(r) = exp(-r**2/(2 radius**2))."""
        return GaussianSpectrum(math.sqrt(2.0) * self.radius)

    def with_seed(self, seed: int) -> "BumpMedium":
        """Return another realisation."""
        return self.with_(seed=seed)

    def _centres(self, x0: float, x1: float, y0: float, y1: float):
        """Return the bumps of all squares that touch a rectangle: their x and y, shape (bump,)."""
        side = min(CELL_RADII * self.radius, math.sqrt(MOST_PER_SQUARE / self.density))
        expected = self.density * side**2
        i = np.arange(math.floor(x0 / side), math.floor(x1 / side) + 1)[:, None]
        j = np.arange(math.floor(y0 / side), math.floor(y1 / side) + 1)[None, :]
        # Poisson numbers by inversion of their distribution
        reached = special.pdtr(np.arange(math.ceil(expected + 12.0 * math.sqrt(expected) + 40.0)), expected)
        counts = np.searchsorted(reached, uniform(self.seed, i, j)).ravel()
        i, j = (np.repeat(np.broadcast_to(one, (i.size, j.size)).ravel(), counts) for one in (i, j))
        number = np.arange(i.size) - np.repeat(np.cumsum(counts) - counts, counts)
        return (
            (i + uniform(self.seed, i, j, 2 * number + 1)) * side,
            (j + uniform(self.seed, i, j, 2 * number + 2)) * side,
        )

    def rows(self, x, y, *, dx: int = 0, dy: int = 0) -> np.ndarray:
        """Return v or a derivative of it (see `Medium.rows`)."""
        x, y = check_axis("x", x, minimum=1), check_axis("y", y, minimum=1)
        reach = REACH_RADII * self.radius
        rows = np.empty((x.size, y.size))
        columns = _tiles(y, TILE_RADII[1] * self.radius)
        for strip in _tiles(x, TILE_RADII[0] * self.radius):
            at_x, at_y = self._centres(x[strip].min() - reach, x[strip].max() + reach, y.min() - reach, y.max() + reach)
            along = bell(x[strip][:, None] - at_x, self.radius, dx)
            for tile in columns:
                near = (at_y > y[tile].min() - reach) & (at_y < y[tile].max() + reach)
                rows[np.ix_(strip, tile)] = along[:, near] @ bell(y[tile] - at_y[near, None], self.radius, dy)
        rows *= self.height
        if not (dx or dy):
            rows -= self.height * self.density * math.pi * self.radius**2
        return rows
