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
    half_aperture : float, optional
        Of the parabolic profile: the parabola holds for abs(y - y0) <= half_aperture, below 2/(3 rate); it then flattens
        over the same length to v = (1.5 rate half_aperture)**2, with five continuous derivatives. Default: it goes on.

    Notes
    -----
    Without a half-aperture a parabolic duct reaches v = 1 at abs(y - y0) = 1/rate: windows must be narrower than 2/rate.
    """

    rate: float = attrs.field(converter=lambda s: check_positive("rate", s))
    y: float = attrs.field(default=0.0, kw_only=True, converter=_number("y"))
    profile: str = attrs.field(
        default="parabolic", kw_only=True, converter=lambda s: check_choice("profile", s, ("parabolic", "sech"))
    )
    half_aperture: float | None = attrs.field(
        default=None, kw_only=True, converter=lambda s: s if s is None else check_positive("half_aperture", s)
    )

    def __attrs_post_init__(self):
        if self.half_aperture is None:
            return
        if self.profile != "parabolic":
            raise InputError(
                f"half_aperture belongs to the parabolic profile; the profile is {self.profile!r}, which flattens by itself. "
                "Leave half_aperture out."
            )
        if self.half_aperture * self.rate >= 2.0 / 3.0:
            raise InputError(
                f"half_aperture {self.half_aperture:g} lets v reach {(1.5 * self.rate * self.half_aperture) ** 2:.3g}; v must "
                f"stay below 1, so half_aperture below 2/(3 rate) = {2.0 / (3.0 * self.rate):.4g}. Use a smaller one."
            )

    @property
    def scale(self) -> float:
        """Half a radian of the rays' turns; at most a third of the half-aperture."""
        return min(0.5 / self.rate, math.inf if self.half_aperture is None else self.half_aperture / 3.0)

    @property
    def mean(self) -> float:
        """What v flattens to: (1.5 rate half_aperture)**2, or 0 without a half-aperture."""
        return 0.0 if self.half_aperture is None else (1.5 * self.rate * self.half_aperture) ** 2

    def rows(self, x, y, *, dx: int = 0, dy: int = 0) -> np.ndarray:
        """Return v or a derivative of it (see `Medium.rows`)."""
        x, y = check_axis("x", x), check_axis("y", y)
        if dx:
            return np.zeros((x.size, y.size))
        u = self.rate * (y - self.y)
        if self.profile == "parabolic":
            aperture = math.inf if self.half_aperture is None else self.rate * self.half_aperture
            g, slope, bend = _flattened(u, aperture)
            row = (g**2, 2.0 * g * slope * self.rate, 2.0 * (slope**2 + g * bend) * self.rate**2)[dy]
        else:
            t = np.tanh(u)
            bright = 1.0 - t**2
            row = (t**2, 2.0 * t * bright * self.rate, 2.0 * bright * (1.0 - 3.0 * t**2) * self.rate**2)[dy]
        return np.tile(row, (x.size, 1))


def _flattened(u, aperture: float):
    """Return g(u) and two derivatives: g = u up to the aperture, constant beyond twice that.

    Between, g' falls from 1 to 0 as 1 - t**5 (126 - 420 t + 540 t**2 - 315 t**3 + 70 t**4), t = abs(u)/aperture - 1.
    """
    if not math.isfinite(aperture):
        return u, np.ones_like(u), np.zeros_like(u)
    t = np.clip(np.abs(u) / aperture - 1.0, 0.0, 1.0)
    slope = 1.0 - t**5 * (126.0 - t * (420.0 - t * (540.0 - t * (315.0 - 70.0 * t))))
    beyond = t - t**6 * (21.0 - t * (60.0 - t * (67.5 - t * (35.0 - 7.0 * t))))
    g = np.sign(u) * (np.minimum(np.abs(u), aperture) + aperture * beyond)
    return g, slope, -np.sign(u) * 630.0 * (t * (1.0 - t)) ** 4 / aperture


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

    @property
    def period_y(self) -> float | None:
        """0, any period, for a ramp along x alone."""
        return 0.0 if self.slope_y == 0 else None

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
