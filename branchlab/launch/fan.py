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
    """Return the coherent parts of a setup's source with the fronts of full rays.

    `amplitude**2` of a full front is the true flux per ds: the intensity on x = 0 times p_x/n, n the index of the mean
    medium, so that a plane wave of intensity 1 at an angle sends cos(angle) through a unit of length. A point source
    sends unit flux evenly in angle, with the soft edges of its fan; s is the angle. A plane wave is not cut by open
    sides: its front spans the whole box, and what comes in from the side on the way.

    Parameters
    ----------
    setup : Setup
    """
    index = background_index(setup)
    return tuple(attrs.evolve(part, front=_full_front(setup, part, index)) for part in setup.parts())


def _full_front(setup: Setup, part: CoherentPart, index: float) -> Front:
    """Return the front of full rays of one part."""
    origin = setup.source.source if isinstance(setup.source, AngularSpread) else setup.source
    while isinstance(origin, AngularSpread):
        origin = origin.source
    if isinstance(origin, PointSource):
        return _fan(origin, part, index)
    span, inner = part.front.span, part.front.at
    if part.endless and setup.window.pad:
        slope = min(abs(part.tilt) / index, STEEPEST)
        aside = setup.length * slope / math.sqrt(1.0 - slope**2)
        half = 0.5 * setup.window.span
        span = (-half - (aside if part.tilt > 0 else 0.0), half + (aside if part.tilt < 0 else 0.0))

    def at(s):
        rays = inner(s)
        amplitude = np.ones_like(rays.y) if part.endless else rays.amplitude
        forward = np.sqrt(np.maximum(index**2 - rays.p**2, 0.0)) / index
        return rays._replace(amplitude=amplitude * np.sqrt(forward))

    return attrs.evolve(part.front, span=span, at=at)


def _fan(source: PointSource, part: CoherentPart, index: float) -> Front:
    """Return the front of a point source, even in angle; a tilt turns its momenta after they are spread."""
    widest = math.asin(min(source.half_angle / index, 1.0))
    t, w = np.polynomial.legendre.leggauss(400)
    height = 1.0 / math.sqrt(np.sum(widest * w * source.fan(index * np.sin(widest * t)) ** 2))

    def at(s):
        s = np.asarray(s, dtype=np.float64)
        p, px = index * np.sin(s), index * np.cos(s)
        ahead = -source.x / np.cos(s)
        y = source.y + ahead * np.sin(s)
        amplitude = height * source.fan(p)
        return FrontRays(s, y, p + part.tilt, index * ahead + part.tilt * y, ahead / np.cos(s), px, amplitude)

    return Front((-widest, widest), False, at, phase=part.front.phase)
