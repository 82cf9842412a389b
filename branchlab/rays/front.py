"""A launching front refined until the screens see it smooth."""

import numpy as np

from branchlab.errors import check_memory
from branchlab.kernels.tubes import worst_sagitta
from branchlab.launch.part import CoherentPart
from branchlab.rays.march import Marcher, refuse_turned

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(3)


class TracedFront:
    """Rays of one coherent part on every screen, dense enough for the tubes between them.

    A tube between two rays is bisected while its sagitta, how far the curve through both with their stretches departs
    from the chord, exceeds a tolerance on any screen; every new ray is traced from the source. When the number of rays
    runs out, the worst tubes have been served first.

    Parameters
    ----------
    part : CoherentPart
    marcher : Marcher
    first_rays : int
        Equal steps of s to begin with.
    tolerance : float
        Largest sagitta, a length.
    most_rays : int

    Attributes
    ----------
    s : ndarray, shape (ray,)
    y, A : ndarray, shape (screen, ray)
        Positions and stretch dy/ds in true coordinates.

    Raises
    ------
    RangeError
        More than a hundredth of the flux turns back.
    ResourceError
        `most_rays` do not fit into memory.
    """

    def __init__(self, part: CoherentPart, marcher: Marcher, first_rays: int, tolerance: float, most_rays: int):
        screens = marcher.setup.x.size
        check_memory(
            4 * 16.0 * screens * most_rays,
            f"a front of up to {most_rays} rays on {screens} screens",
            "Use a smaller most_rays or fewer screens.",
        )
        self.part = part
        low, high = part.front.span
        s = np.linspace(low, high, first_rays + 1)
        y, stretch = _traced(part, marcher, s[:-1] if part.front.closed else s, refuse=True)
        self._keep([(s[: y.shape[1]], y, stretch)])
        if self.lap:
            y = np.concatenate([y, y[:, :1] + self.lap], axis=1)
            stretch = np.concatenate([stretch, stretch[:, :1]], axis=1)
        self._refine(marcher, s, y, stretch, tolerance, most_rays)

    def _refine(self, marcher: Marcher, s, y, stretch, tolerance: float, most_rays: int) -> None:
        """Bisect the tubes between successive columns."""
        kept = [(self.s, self.y, self.A)]
        edge = 0.5 * marcher.setup.width if marcher.setup.sides == "absorbing" else np.inf
        ends = np.arange(s.size - 1), np.arange(1, s.size)
        (s0, s1), (y0, y1), (a0, a1) = ([row[..., end] for end in ends] for row in (s, y, stretch))
        room = most_rays - self.s.size
        while room > 0:
            worst = worst_sagitta(y0, y1, a0, a1, s1 - s0, edge)
            at = np.flatnonzero(worst > tolerance)
            rest = at[:0]
            if 2 * at.size > room:  # rays run short: half of what is left goes to the worst tubes, round by round
                at = at[np.argsort(-worst[at], kind="stable")]
                at, rest = at[: (room + 1) // 2], at[(room + 1) // 2 : room]
            if at.size == 0:
                break
            room -= at.size
            new = 0.5 * (s0[at] + s1[at])
            y, stretch = _traced(self.part, marcher, new)
            kept.append((new, y, stretch))
            s0, s1 = np.concatenate([s0[at], new, s0[rest]]), np.concatenate([new, s1[at], s1[rest]])
            y0, y1 = np.hstack([y0[:, at], y, y0[:, rest]]), np.hstack([y, y1[:, at], y1[:, rest]])
            a0, a1 = np.hstack([a0[:, at], stretch, a0[:, rest]]), np.hstack([stretch, a1[:, at], a1[:, rest]])
        self._keep(kept)

    def _keep(self, batches) -> None:
        """Join batches of rays (s, y, A) in the order of s."""
        s = np.concatenate([one[0] for one in batches])
        order = np.argsort(s)
        self.s = s[order]
        self.y, self.A = (np.concatenate([one[i] for one in batches], axis=1)[:, order] for i in (1, 2))

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

    def halved(self, marcher: Marcher) -> "TracedFront":
        """Return the front of every second ray, traced by another marcher."""
        half = object.__new__(TracedFront)
        half.part = self.part
        half.s = self.s[::2]
        if not self.part.front.closed and self.s.size % 2 == 0:
            half.s = np.append(half.s, self.s[-1])
        half.y, half.A = _traced(self.part, marcher, half.s)
        return half


def _traced(part: CoherentPart, marcher: Marcher, s, refuse: bool = False) -> tuple[np.ndarray, np.ndarray]:
    """Return y and A on every screen, shape (screen, ray) each."""
    rays = part.front.at(s)
    y = np.empty((marcher.setup.x.size, s.size))
    stretch = np.empty_like(y)
    for i, state in enumerate(marcher.march(rays)):
        if refuse:
            refuse_turned(state, rays.amplitude**2)
        y[i], stretch[i] = state.y, state.A
    return y, stretch
