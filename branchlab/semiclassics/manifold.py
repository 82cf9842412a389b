"""A launching front as it stands on one screen, and the line on which its sum is taken."""

from typing import NamedTuple

import numpy as np


class Manifold(NamedTuple):
    """Rays of one front on one screen, at equal steps of the front parameter s.

    Attributes
    ----------
    y, p, action : ndarray, shape (ray,)
        Transverse position, momentum, and action with the carrier removed. The tilt of the coherent part is
        taken out of momentum and action (p - p0, action - p0 y), so that its sum is the envelope.
    A, C : ndarray, shape (ray,)
        The tangent (dy/ds, dp/ds).
    maslov : ndarray, shape (ray,)
        Maslov index.
    amplitude : ndarray, shape (ray,)
        Square root of the flux per ds.
    ds : float
        Step of the front parameter.
    lap : float
        For a closed front, the y by which the first ray follows the last (with equal p and action); 0 for an
        open one.
    phase : float
        Phase of every ray, in radians.
    """

    y: np.ndarray
    p: np.ndarray
    action: np.ndarray
    A: np.ndarray
    C: np.ndarray
    maslov: np.ndarray
    amplitude: np.ndarray
    ds: float
    lap: float = 0.0
    phase: float = 0.0

    @property
    def flux(self) -> np.ndarray:
        """Flux that each ray stands for; 0 for a ray that has left the window."""
        return np.where(np.isfinite(self.y), self.amplitude**2, 0.0) * self.ds


class Line(NamedTuple):
    """Equidistant points across the box: Y_j = start + (j + 1/2) pitch, j = 0 ... n - 1.

    `periodic` tells whether what leaves the box on one side enters on the other.
    """

    start: float
    pitch: float
    n: int
    periodic: bool

    @property
    def points(self) -> np.ndarray:
        """The points, shape (n,)."""
        return self.start + (np.arange(self.n) + 0.5) * self.pitch
