"""Deterministic media with closed forms: duct, lens, ramp."""

import math

import attrs
import numpy as np

from branchlab.errors import InputError, check_axis, check_choice, check_number, check_positive
from branchlab.media.base import Medium
from branchlab.values import value


def _number(name):
    return lambda s: check_number(name, s)


@value
class Duct(Medium):
    """A guide along x about the line y = y0.

    profile "parabolic": v = rate**2 (y - y0)**2, every paraxial ray has the period 2 pi/rate in x.
    profile "sech": n = sech(rate (y - y0)), v = tanh(rate (y - y0))**2: every ray, at any angle, has that period.

    Parameters
    ----------
    rate : float
        Turns of a ray per length, in radians.
    y : float
        Transverse position y0 of the axis.
    profile : {"parabolic", "sech"}

    Notes
    -----
    A parabolic duct reaches v = 1 at abs(y - y0) = 1/rate: windows must be narrower than 2/rate.
    """

    rate: float = attrs.field(converter=lambda s: check_positive("rate", s))
    y: float = attrs.field(default=0.0, kw_only=True, converter=_number("y"))
    profile: str = attrs.field(
        default="parabolic", kw_only=True, converter=lambda s: check_choice("profile", s, ("parabolic", "sech"))
    )

    @property
    def scale(self) -> float:
        """Half a radian of the rays' turns."""
        return 0.5 / self.rate

    def rows(self, x, y, *, dx: int = 0, dy: int = 0) -> np.ndarray:
        """Return v or a derivative of it (see `Medium.rows`)."""
        x, y = check_axis("x", x), check_axis("y", y)
        if dx:
            return np.zeros((x.size, y.size))
        u = self.rate * (y - self.y)
        if self.profile == "parabolic":
            row = (u**2, 2.0 * u * self.rate, np.full_like(u, 2.0 * self.rate**2))[dy]
        else:
            t = np.tanh(u)
            bright = 1.0 - t**2
            row = (t**2, 2.0 * t * bright * self.rate, 2.0 * bright * (1.0 - 3.0 * t**2) * self.rate**2)[dy]
        return np.tile(row, (x.size, 1))


def bell(u, radius: float, order: int):
    """Return a derivative of exp(-u**2/radius**2) with respect to u."""
    t = u / radius
    bell = np.exp(-(t**2))
    return (bell, -2.0 * t / radius * bell, (4.0 * t**2 - 2.0) / radius**2 * bell)[order]


@value
class Lens(Medium):
    """A smooth round lens: n**2 = 1 + strength exp(-r**2/radius**2), v = -strength exp(-r**2/radius**2).

    Parameters
    ----------
    strength : float
        n**2 - 1 in the middle; negative for a lens that spreads. Above -1 (v < 1).
    radius : float
    x, y : float
        Position of the middle.
    """

    strength: float = attrs.field(converter=lambda s: check_number("strength", s, low=-1.0, open_low=True))
    radius: float = attrs.field(converter=lambda s: check_positive("radius", s))
    x: float = attrs.field(kw_only=True, converter=_number("x"))
    y: float = attrs.field(default=0.0, kw_only=True, converter=_number("y"))

    @property
    def scale(self) -> float:
        """The radius."""
        return self.radius

    def rows(self, x, y, *, dx: int = 0, dy: int = 0) -> np.ndarray:
        """Return v or a derivative of it (see `Medium.rows`)."""
        along = bell(check_axis("x", x) - self.x, self.radius, dx)
        across = bell(check_axis("y", y) - self.y, self.radius, dy)
        return -self.strength * np.outer(along, across)


@value
class Ramp(Medium):
    """A linear medium: v = slope_x x + slope_y y.

    Parameters
    ----------
    slope_x, slope_y : float
        Rise of v per length; at least one is not 0. A ray bends by -slope_y/2 per length.
    """

    slope_x: float = attrs.field(default=0.0, kw_only=True, converter=_number("slope_x"))
    slope_y: float = attrs.field(default=0.0, kw_only=True, converter=_number("slope_y"))

    def __attrs_post_init__(self):
        if self.slope_x == 0 and self.slope_y == 0:
            raise InputError("a Ramp needs slope_x or slope_y other than 0; both are 0, which is no medium at all.")

    @property
    def scale(self) -> float:
        """The length in which v changes by a quarter."""
        return 0.25 / math.hypot(self.slope_x, self.slope_y)

    def rows(self, x, y, *, dx: int = 0, dy: int = 0) -> np.ndarray:
        """Return v or a derivative of it (see `Medium.rows`)."""
        x, y = check_axis("x", x), check_axis("y", y)
        if dx + dy > 1:
            return np.zeros((x.size, y.size))
        if dx:
            return np.full((x.size, y.size), self.slope_x)
        if dy:
            return np.full((x.size, y.size), self.slope_y)
        return self.slope_x * x[:, None] + self.slope_y * y[None, :]
