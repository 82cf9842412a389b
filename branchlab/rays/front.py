"""A launching front refined until the screens see it smooth."""

import numpy as np

from branchlab.errors import check_memory
from branchlab.kernels.tubes import worst_sagitta
from branchlab.launch.part import CoherentPart
from branchlab.rays.full_march import FullMarcher
from branchlab.rays.march import NOT_FINITE, TURNED, Marcher, refuse_turned

NARROWEST = 1.0 / 64.0  # of a first step: how far the edge of rays that are gone is looked for
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(3)


class TracedFront:
    """Rays of one coherent part on every screen, dense enough for the tubes between them.

    A tube between two rays is bisected while its sagitta, how far the curve through both with their stretches departs
    from the chord, exceeds a tolerance on any screen; every new ray is traced from the source. When the number of rays
    runs out, the worst tubes have been served first.

    Parameters
    ----------
    part : CoherentPart
    marcher : Marcher or FullMarcher
    first_rays : int
        Equal steps of s to begin with.
    tolerance : float
        Largest sagitta, a length.
    most_rays : int

    Attributes
    ----------
    s : ndarray, shape (ray,)
    y, A : ndarray, shape (screen, ray)
        Positions and stretch dy/ds in true coordinates; of full rays, y is nan where a ray is gone.
    px : ndarray, shape (screen, ray), or None
        Of full rays: momentum along x, 0 where a ray has turned back, nan where it is lost.

    Raises
    ------
    RangeError
        More than a hundredth of the flux of paraxial rays turns back.
    ResourceError
        `most_rays` do not fit into memory.
    """

    def __init__(
        self,
        part: CoherentPart,
        marcher: Marcher | FullMarcher,
        first_rays: int,
        tolerance: float,
        most_rays: int,
    ):
        screens = marcher.setup.x.size
        check_memory(
            4 * (24.0 if isinstance(marcher, FullMarcher) else 16.0) * screens * most_rays,
            f"a front of up to {most_rays} rays on {screens} screens",
            "Use a smaller most_rays or fewer screens.",
        )
        self.part = part
        low, high = part.front.span
        s = np.linspace(low, high, first_rays + 1)
        rows = _traced(part, marcher, s[:-1] if part.front.closed else s, refuse=True)
        self._keep([(s[: rows[0].shape[1]], *rows)])
        if self.lap:
            rows = [np.concatenate([row, row[:, :1]], axis=1) for row in rows]
            rows[0][:, -1] += self.lap
        self._refine(marcher, s, rows, tolerance, most_rays)

    def _refine(self, marcher: Marcher | FullMarcher, s, rows, tolerance: float, most_rays: int) -> None:
        """Bisect the tubes between successive columns."""
        kept = []
        edge = 0.5 * marcher.setup.width if marcher.setup.sides == "absorbing" else np.inf
        shortest = (s[1] - s[0]) * NARROWEST
        s0, s1 = s[:-1], s[1:]
        starts, ends = [row[:, :-1] for row in rows], [row[:, 1:] for row in rows]
        room = most_rays - self.s.size
        while room > 0:
            worst = worst_sagitta(starts[0], ends[0], starts[1], ends[1], s1 - s0, edge)
            parts = (np.isfinite(starts[0]) != np.isfinite(ends[0])).any(axis=0) & (s1 - s0 > shortest)
            at = np.flatnonzero((worst > tolerance) | parts)
            rest = at[:0]
            if 2 * at.size > room:  # rays run short: half of what is left goes to the worst tubes, round by round
                at = at[np.argsort(-worst[at], kind="stable")]
                at, rest = at[: (room + 1) // 2], at[(room + 1) // 2 : room]
            if at.size == 0:
                break
            room -= at.size
            new = 0.5 * (s0[at] + s1[at])
            between = _traced(self.part, marcher, new)
            kept.append((new, *between))
            s0, s1 = np.concatenate([s0[at], new, s0[rest]]), np.concatenate([new, s1[at], s1[rest]])
            starts = [np.hstack([row[:, at], one, row[:, rest]]) for row, one in zip(starts, between, strict=True)]
            ends = [np.hstack([one, row[:, at], row[:, rest]]) for row, one in zip(ends, between, strict=True)]
        self._keep([(self.s, self.y, self.A, *([] if self.px is None else [self.px])), *kept])

    def _keep(self, batches) -> None:
        """Join batches of rays (s, y, A, and px of full rays) in the order of s."""
        s = np.concatenate([one[0] for one in batches])
        order = np.argsort(s)
        self.s = s[order]
        rows = [np.concatenate(row, axis=1)[:, order] for row in list(zip(*batches, strict=True))[1:]]
        self.y, self.A, self.px = rows if len(rows) == 3 else (*rows, None)

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

    def halved(self, marcher: Marcher | FullMarcher) -> "TracedFront":
        """Return the front of every second ray, traced by another marcher."""
        half = object.__new__(TracedFront)
        half.part = self.part
        half.s = self.s[::2]
        if not self.part.front.closed and self.s.size % 2 == 0:
            half.s = np.append(half.s, self.s[-1])
        half._keep([(half.s, *_traced(self.part, marcher, half.s))])
        return half


def _traced(part: CoherentPart, marcher: Marcher | FullMarcher, s, refuse: bool = False) -> list[np.ndarray]:
    """Return y and A on every screen, shape (screen, ray) each, and px of full rays."""
    rays = part.front.at(s)
    full = isinstance(marcher, FullMarcher)
    rows = [np.empty((marcher.setup.x.size, s.size)) for _ in range(2 + full)]
    for i, state in enumerate(marcher.march(rays)):
        if refuse:
            refuse_turned(state, rays.amplitude**2)
        rows[0][i], rows[1][i] = state.y, state.A
        if full:
            turned, lost = state.status == TURNED, state.status == NOT_FINITE
            rows[0][i, turned | lost] = np.nan
            rows[2][i] = np.where(lost, np.nan, np.where(turned, 0.0, state.px))
    return rows
