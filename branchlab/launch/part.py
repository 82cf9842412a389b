"""A coherent part of a source: an entry wave for the marchers of waves, a launching front for rays."""

from collections.abc import Callable
from typing import NamedTuple

import attrs
import numpy as np


class FrontRays(NamedTuple):
    """Rays on a launching front at x = 0, all arrays of shape (ray,).

    ``amplitude**2`` is the flux per unit of the front parameter s; ``dy`` and ``dp`` are dy/ds and dp/ds.
    """

    s: np.ndarray
    y: np.ndarray
    p: np.ndarray
    action: np.ndarray
    dy: np.ndarray
    dp: np.ndarray
    amplitude: np.ndarray


@attrs.frozen(slots=False)
class Front:
    """A curve of rays s -> (y, p, action, ...), the Lagrangian manifold that a coherent part launches.

    Attributes
    ----------
    span : (float, float)
        First and last value of the front parameter s.
    closed : bool
        True when the two ends are the same ray of a periodic window, one period apart.
    at : callable
        ``at(s)`` gives `FrontRays` for an array of s inside `span`.
    phase : float
        Constant phase in radians that belongs to every ray: 0 for a front with dy/ds > 0, -pi/4 for a point
        source (stationary phase of its plane-wave sum).
    """

    span: tuple[float, float]
    closed: bool
    at: Callable[[np.ndarray], FrontRays]
    phase: float = 0.0


@attrs.frozen(slots=False)
class CoherentPart:
    """One coherent member of the incoherent mixture that a source is.

    Attributes
    ----------
    weight : float
        Share of the part; the weights of a source sum to 1.
    tilt : float
        Transverse momentum p0 that is taken out of the entry wave: the field is entry * exp(i k p0 y).
    entry : callable
        ``entry(y, k)`` gives the complex envelope at x = 0, shape (k, y), periodic on the window.
    front : Front
        The rays of the same field.
    endless : bool
        True for a plane wave: what open sides cut in the paraxial model goes on beyond them in the full one.
    """

    weight: float
    tilt: float
    entry: Callable[[np.ndarray, np.ndarray], np.ndarray]
    front: Front
    endless: bool = False

    def turned(self, by: float, weight: float) -> "CoherentPart":
        """Return the part with transverse momentum `by` added to every ray, and another weight."""
        inner = self.front.at

        def at(s):
            rays = inner(s)
            return rays._replace(p=rays.p + by, action=rays.action + by * rays.y)

        return attrs.evolve(self, weight=weight, tilt=self.tilt + by, front=attrs.evolve(self.front, at=at))
