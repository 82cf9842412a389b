"""Launching fronts of the full model: the same sources, with angles up to the right angle and true flux."""

import math

import attrs
import numpy as np

from branchlab.launch.part import CoherentPart, Front, FrontRays
from branchlab.launch.setup import Setup
from branchlab.launch.sources import AngularSpread, PointSource

STEEPEST = 0.995  # sine beyond which an endless plane wave is not followed far outside the sides


def background_index(setup: Setup) -> float:
    """Return the index of the mean medium, from which full rays enter."""
    return math.sqrt(max(1.0 - setup.medium.mean, 0.0))


def full_parts(setup: Setup) -> tuple[CoherentPart, ...]:
    """Return the coherent parts of a setup's source with the entry fields and fronts of the full model.

    `amplitude**2` of a full front is the true flux per ds: the intensity on x = 0 times p_x/n, n the index of the mean
    medium, so that a plane wave of intensity 1 at an angle sends cos(angle) through a unit of length. A point source
    sends unit flux evenly in angle, with the soft edges of its fan; s is the angle. A plane wave is not cut by open
    sides: its front spans the whole box, and what comes in from the side on the way.

    Parameters
    ----------
    setup : Setup
    """
    index, origin = background_index(setup), setup.source
    while isinstance(origin, AngularSpread):
        origin = origin.source
    if isinstance(origin, PointSource):
        fan = _Fan(setup, origin, index)
        return tuple(attrs.evolve(part, front=fan.front(part), entry=fan.entry) for part in setup.parts())
    return tuple(_full_part(setup, part, index) for part in setup.parts())


def _full_part(setup: Setup, part: CoherentPart, index: float) -> CoherentPart:
    """Return a part whose field on x = 0 is that of the paraxial one, not cut if it is endless."""
    span, inner, uncut = part.front.span, part.front.at, part.endless and setup.window.pad
    if uncut:
        slope = min(abs(part.tilt) / index, STEEPEST)
        aside = setup.length * slope / math.sqrt(1.0 - slope**2)
        half = 0.5 * setup.window.span
        span = (-half - (aside if part.tilt > 0 else 0.0), half + (aside if part.tilt < 0 else 0.0))

    def at(s):
        rays = inner(s)
        amplitude = np.ones_like(rays.y) if uncut else rays.amplitude
        forward = np.sqrt(np.maximum(index**2 - rays.p**2, 0.0)) / index
        return rays._replace(amplitude=amplitude * np.sqrt(forward))

    def entry(y, k):
        return np.ones((np.size(k), y.size), dtype=np.complex128) if uncut else part.entry(y, k)

    return attrs.evolve(part, front=attrs.evolve(part.front, span=span, at=at), entry=entry)


class _Fan:
    """A point source that is even in angle.

    psi = (k/2pi)**(1/2) int a(p) (n/px)**(1/2) exp(ik[p (y - y0) + px (x - x0)]) dp with a**2 dp = height**2 fan**2
    dangle, and unit flux. A tilt is added to the momenta on x = 0.
    """

    def __init__(self, setup: Setup, source: PointSource, index: float):
        self.setup, self.source, self.index = setup, source, index
        self.widest = math.asin(min(source.half_angle / index, 1.0))
        t, w = np.polynomial.legendre.leggauss(400)
        power = source.fan(index * np.sin(self.widest * t)) ** 2
        self.height = 1.0 / math.sqrt(np.sum(self.widest * w * power))

    def front(self, part: CoherentPart) -> Front:
        """Return the front of a part; s is the angle before the tilt."""
        source, index, tilt = self.source, self.index, part.tilt

        def at(s):
            s = np.asarray(s, dtype=np.float64)
            p, px = index * np.sin(s), index * np.cos(s)
            ahead = -source.x / np.cos(s)
            y = source.y + ahead * np.sin(s)
            forward = np.sqrt(np.maximum(index**2 - (p + tilt) ** 2, 0.0))
            amplitude = self.height * source.fan(p) * np.sqrt(forward / px)
            return FrontRays(s, y, p + tilt, index * ahead + tilt * y, ahead / np.cos(s), px, amplitude)

        return Front((-self.widest, self.widest), False, at, phase=part.front.phase)

    def entry(self, y, k):
        """Return the field on x = 0, shape (k, y), periodic on the window's box, before the tilt."""
        span = self.setup.window.span
        field = np.empty((np.size(k), y.size), dtype=np.complex128)
        for row, one in zip(field, np.atleast_1d(k), strict=True):
            top = math.ceil(one * self.index * math.sin(self.widest) * span / (2.0 * np.pi)) - 1
            q = 2.0 * np.pi * np.arange(-top, top + 1) / span
            px = np.sqrt(self.index**2 - (q / one) ** 2)
            amplitude = self.height * self.source.fan(q / one) * math.sqrt(self.index) / px
            amplitude = amplitude * math.sqrt(2.0 * np.pi / one) / span
            row[:] = np.exp(1j * np.outer(y - self.source.y, q)) @ (amplitude * np.exp(-1j * one * px * self.source.x))
        return field
