"""Smooth bumps scattered at random: a random medium that is not Gaussian."""

import functools
import math

import attrs
import numpy as np
from scipy import stats

from branchlab.errors import check_axis, check_choice, check_integer, check_positive
from branchlab.media.base import Medium
from branchlab.media.elements import bell
from branchlab.media.hashing import uniform
from branchlab.media.spectra import GaussianSpectrum
from branchlab.values import value

CELL_RADII = 4.0  # side of the squares in which bumps are drawn
REACH_RADII = 6.0  # a bump is exp(-36) of its height here


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
    seed: int = attrs.field(converter=lambda s: check_integer("seed", s, low=0))
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
        """Return the bumps of all squares that touch a rectangle, shape (bump,) each."""
        side = CELL_RADII * self.radius
        i = np.arange(math.floor(x0 / side), math.floor(x1 / side) + 1)[:, None]
        j = np.arange(math.floor(y0 / side), math.floor(y1 / side) + 1)[None, :]
        counts = stats.poisson.ppf(uniform(self.seed, i, j), self.density * side**2).astype(np.int64)
        i, j = (np.broadcast_to(one, counts.shape).ravel() for one in (i, j))
        x, y = [], []
        for number in range(int(counts.max(initial=0))):
            there = counts.ravel() > number
            x.append((i[there] + uniform(self.seed, i[there], j[there], 2 * number + 1)) * side)
            y.append((j[there] + uniform(self.seed, i[there], j[there], 2 * number + 2)) * side)
        return (np.concatenate(one) if one else np.empty(0) for one in (x, y))

    def rows(self, x, y, *, dx: int = 0, dy: int = 0) -> np.ndarray:
        """Return v or a derivative of it (see `Medium.rows`)."""
        x, y = check_axis("x", x, minimum=1), check_axis("y", y, minimum=1)
        reach = REACH_RADII * self.radius
        at_x, at_y = self._centres(x.min() - reach, x.max() + reach, y.min() - reach, y.max() + reach)
        along = bell(x[:, None] - at_x, self.radius, dx)
        across = bell(at_y[:, None] - y, self.radius, dy) * (-1.0) ** dy
        rows = self.height * (along @ across)
        if not (dx or dy):
            rows -= self.height * self.density * math.pi * self.radius**2
        return rows
