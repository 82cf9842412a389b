"""A launching front refined until the screens see it smooth."""

import numpy as np

from branchlab.errors import check_memory
from branchlab.launch.part import CoherentPart
from branchlab.rays.march import Marcher, refuse_turned

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(3)


class TracedFront:
    """Rays of one coherent part on every screen, dense enough for the tubes between them.

    Tubes whose sagitta |A ds - dy| exceeds a tolerance on any screen are bisected, round by round, until none is left
    or the number of rays is used up; every new ray is traced from the source.

    Attributes
    ----------
    s : ndarray, shape (ray,)
    y, A : ndarray, shape (screen, ray)
        Positions and stretch dy/ds in true coordinates.
    """

    def __init__(self, part: CoherentPart, marcher: Marcher, first_rays: int, tolerance: float, most_rays: int):
        screens = marcher.setup.x.size
        check_memory(
            3 * 16.0 * screens * most_rays,
            f"a front of up to {most_rays} rays on {screens} screens",
            "Use a smaller most_rays or fewer screens.",
        )
        self.part = part
        low, high = part.front.span
        self.s = np.linspace(low, high, first_rays + 1)
        if part.front.closed:
            self.s = self.s[:-1]
        self.y, self.A = _traced(part, marcher, self.s)
        while True:
            coarse = (self.sagitta() > tolerance).any(axis=0)
            at = np.flatnonzero(coarse)
            if at.size == 0 or self.s.size + at.size > most_rays:
                break
            new = self.s[at] + 0.5 * self.steps[at]
            y, stretch = _traced(part, marcher, new)
            self.s = np.insert(self.s, at + 1, new)
            self.y = np.insert(self.y, at + 1, y, axis=1)
            self.A = np.insert(self.A, at + 1, stretch, axis=1)

    @property
    def lap(self) -> float:
        """For a closed front, the period by which its first ray follows the last; 0 for an open one."""
        low, high = self.part.front.span
        return high - low if self.part.front.closed else 0.0

    @property
    def steps(self) -> np.ndarray:
        """Steps of s between neighbours, shape (tube,)."""
        return np.diff(self.s, append=self.s[:1] + self.lap) if self.lap else np.diff(self.s)

    @property
    def tube_flux(self) -> np.ndarray:
        """Flux of each tube, shape (tube,): Gauss's rule of three points, exact to degree 5 of amplitude**2."""
        steps = self.steps
        start = self.s[: steps.size]
        flux = np.zeros(steps.size)
        for node, weight in zip(_NODES, _WEIGHTS, strict=True):
            amplitude = self.part.front.at(start + 0.5 * (node + 1.0) * steps).amplitude
            flux += 0.5 * weight * steps * amplitude**2
        return flux

    def sagitta(self) -> np.ndarray:
        """Return how far each tube is from a straight line, shape (screen, tube)."""
        steps = self.steps
        ahead = self._next(self.y, self.lap)
        chord = ahead - self.y[:, : steps.size]
        return np.abs(self.A[:, : steps.size] * steps - chord) + np.abs(self._next(self.A, 0.0) * steps - chord)

    def _next(self, rows, lap: float) -> np.ndarray:
        """Return the value of the next ray for each tube."""
        if self.lap:
            return np.concatenate([rows[:, 1:], rows[:, :1] + lap], axis=1)
        return rows[:, 1:]

    def slopes(self, screen: int) -> np.ndarray:
        """Return dy/ds times the step ahead (row 0) and behind (row 1) of each ray, shape (2, ray)."""
        steps = self.steps
        slopes = np.zeros((2, self.s.size))
        slopes[0, : steps.size] = self.A[screen, : steps.size] * steps
        behind = np.roll(steps, 1) if self.lap else np.concatenate([[0.0], steps])
        slopes[1] = self.A[screen] * behind
        return slopes

    def halved(self, marcher: Marcher) -> "TracedFront":
        """Return the front of every second ray, traced by another marcher."""
        half = object.__new__(TracedFront)
        half.part = self.part
        half.s = self.s[::2]
        if not self.part.front.closed and self.s.size % 2 == 0:
            half.s = np.append(half.s, self.s[-1])
        half.y, half.A = _traced(self.part, marcher, half.s)
        return half


def _traced(part: CoherentPart, marcher: Marcher, s) -> tuple[np.ndarray, np.ndarray]:
    """Return y and A on every screen, shape (screen, ray) each."""
    y = np.empty((marcher.setup.x.size, s.size))
    stretch = np.empty_like(y)
    for i, state in enumerate(marcher.march(part.front.at(s))):
        refuse_turned(state)
        y[i], stretch[i] = state.y, state.A
    return y, stretch
