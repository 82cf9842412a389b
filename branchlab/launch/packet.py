"""A Gaussian packet: where a wave, or the cloud of rays that stands for it, starts."""

import math

import attrs
import numpy as np

from branchlab.errors import InputError, RangeError, check_axis, check_number, check_positive
from branchlab.values import ValueObject, value

FAR = 350.0  # exp(-FAR): processors are slow with numbers that are much smaller
TIMES = 21
REACH = 6.0  # standard deviations at which a packet counts as over: exp(-18) of its density, 1e-9 of its norm


def _number(name):
    return lambda s: check_number(name, s)


@value
class Packet(ValueObject):
    """A Gaussian packet of unit norm at time 0.

    psi = (2 pi sa sc)**(-1/2) exp(-a**2/(4 sa**2) - c**2/(4 sc**2) + i k momentum a): a and c are the distances from
    the centre along the direction of travel and across it, sa and sc the spreads. Its Wigner function is Gaussian, with
    standard deviations sa, sc in position and 1/(2 k sa), 1/(2 k sc) in momentum (textbook).

    Parameters
    ----------
    x, y : float
        Centre.
    spread : float
        Standard deviation of abs(psi)**2 along the direction of travel.
    across : float, optional
        The same across it. Default: `spread`.
    angle : float
        Direction of travel against the x axis, radians; any.
    momentum : float
        1 for a packet of the medium's energy where v = 0: it moves at speed 1 there.
    """

    x: float = attrs.field(converter=_number("x"))
    y: float = attrs.field(converter=_number("y"))
    spread: float = attrs.field(converter=lambda s: check_positive("spread", s))
    across: float | None = attrs.field(
        default=None, kw_only=True, converter=lambda s: s if s is None else check_positive("across", s)
    )
    angle: float = attrs.field(default=0.0, kw_only=True, converter=_number("angle"))
    momentum: float = attrs.field(default=1.0, kw_only=True, converter=lambda s: check_number("momentum", s, low=0.0))

    @property
    def spreads(self) -> tuple[float, float]:
        """Standard deviations along and across the direction of travel."""
        return self.spread, self.spread if self.across is None else self.across

    @property
    def axes(self) -> np.ndarray:
        """The unit vectors along and across, as columns."""
        c, s = math.cos(self.angle), math.sin(self.angle)
        return np.array([[c, -s], [s, c]])

    @property
    def position_covariance(self) -> np.ndarray:
        """Covariance of x and y, shape (2, 2)."""
        return self.axes @ np.diag(np.square(self.spreads)) @ self.axes.T

    def momentum_covariance(self, k: float) -> np.ndarray:
        """Return the covariance of the momenta along x and y, shape (2, 2)."""
        return self.axes @ np.diag((2.0 * k * np.array(self.spreads)) ** -2.0) @ self.axes.T

    def psi(self, x, y, k: float) -> np.ndarray:
        """Return the wave at time 0 at places of one shape (or shapes that broadcast)."""
        (along, sideways), (sa, sc) = self.axes.T, self.spreads
        dx, dy = x - self.x, y - self.y
        a, c = along[0] * dx + along[1] * dy, sideways[0] * dx + sideways[1] * dy
        height = (2.0 * np.pi * sa * sc) ** -0.5
        fall = np.minimum(0.25 * ((a / sa) ** 2 + (c / sc) ** 2), FAR)
        return height * np.exp(1j * k * self.momentum * a - fall)

    def fastest(self, plane, k: float) -> float:
        """Return the largest momentum that any part of the packet can reach in a `Plane`, by its energy.

        sqrt(p**2 + max v - min v), p the momentum at `REACH` standard deviations, the largest v taken within as many spreads
        of the centre at time 0 and the smallest in the whole box.
        """
        start = self.momentum + REACH / (2.0 * k * min(self.spreads))
        shape = [max(64, round(8 * span / plane.finest)) for span in plane.span]
        v, (x, y) = plane.sample(shape), plane.points(shape)
        near = np.hypot(x[:, None] - self.x, plane.about(y, self.y) - self.y) <= REACH * max(self.spreads)
        near |= v == v.min()
        return math.sqrt(start**2 + v[near].max() - v.min())

    def check_fits(self, setup) -> None:
        """Raise `RangeError` if the packet does not lie inside the window at time 0, with `REACH` spreads around it.

        With periodic sides only its size must fit in y.
        """
        if setup.sides == "periodic" and not abs(self.y) <= 0.5 * setup.width:
            raise InputError(f"y must lie in the window, |y| <= {0.5 * setup.width:g}; got {self.y:g}.")
        rx, ry = REACH * np.sqrt(np.diag(self.position_covariance))
        low, high = rx, setup.length - rx
        if not low <= self.x <= high:
            raise RangeError(
                f"a packet of spread {rx / REACH:.4g} along x at x = {self.x:g} needs {low:.4g} <= x <= {high:.4g} ({REACH:g} "
                f"spreads from the ends of the window, 0 and {setup.length:g}). Use another x, a narrower packet or a "
                "longer window."
            )
        room = 0.5 * setup.width - (abs(self.y) if setup.sides == "absorbing" else 0.0)
        if ry > room:
            raise RangeError(
                f"a packet of spread {ry / REACH:.4g} along y at y = {self.y:g} needs {ry:.4g} of room on either side "
                f"({REACH:g} spreads); the window leaves {room:.4g}. Use another y, a narrower packet or a wider window."
            )


def check_times(times, setup, packet: Packet) -> np.ndarray:
    """Return the times, shape (time,); by default 21 from 0 to when a free packet has travelled the length."""
    if times is None:
        return np.linspace(0.0, setup.length / (packet.momentum or 1.0), TIMES)
    axis = check_axis("times", np.atleast_1d(times))
    if axis[0] < 0.0 or (np.diff(axis) <= 0.0).any():
        raise InputError(f"times must rise, the first zero or positive; got {axis[:8].tolist()}.")
    return axis
