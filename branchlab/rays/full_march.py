"""Full rays from screen to screen: any angle, the same surface as the paraxial marcher."""

import functools
import math
from collections.abc import Iterator

import numpy as np

from branchlab.errors import RangeError
from branchlab.kernels.eight import LANES
from branchlab.kernels.full_rays import FATE, FIXED, GOING, LOST, MASLOV, OUT_ROWS, TANGENT, march_to_screens
from branchlab.launch.part import FrontRays
from branchlab.launch.slab import Slab
from branchlab.rays.march import LEFT, OK, SCREENS_BYTES, RayState
from branchlab.rays.plane_table import PlaneTable
from branchlab.rays.table import POINTS_PER_SCALE, STEPS_PER_SCALE

FACE_STEPS = 1.5  # how much shorter the steps must be for the slab's face than for a medium of its thickness
LONGEST_WAY = 64  # times the straight way to the last screen: a ray that needs more is lost


class FullMarcher:
    """March full rays through the slab of a setup: H = p**2/2 + v/2 = 1/2, dr/dt = p, dp/dt = -grad v/2.

    The step in time is that of `kernels.plane_rays`: drift, kick, drift with the gradient-corrected potential, conjugate
    to a fourth-order map. Near a screen a ray is taken from its true coordinates to it by one fourth-order step of the
    right length. On a screen a ray is what it is at its first forward crossing.

    Parameters
    ----------
    setup : Setup
    steps_per_scale : int
        A ray of the mean medium takes `FACE_STEPS` times as many for the thickness of the face, which is a medium scale or
        less, and everywhere.
    points_per_scale : int
        Points of the spline per scale of the medium and, along x, per half of the face, at least.
    screens : array_like, optional
        Where rays are seen, rising; each must be behind the face's beginning and at most at `length`. Default: `setup.x`.
    """

    def __init__(
        self,
        setup,
        steps_per_scale: int = STEPS_PER_SCALE,
        points_per_scale: int = POINTS_PER_SCALE,
        screens=None,
    ):
        self.setup, self.plane = setup, Slab(setup)
        self.steps_per_scale = steps_per_scale
        self.points_per_scale = points_per_scale
        self.x = setup.x if screens is None else np.asarray(screens, dtype=np.float64)
        self.energy = 1.0 - setup.medium.mean  # p**2 in the mean medium
        if not self.energy > 0.0:
            raise RangeError(
                f"the medium's mean v is {setup.medium.mean:g}; rays enter from the mean medium, so it must be below 1 "
                "(v = 1 - n**2: the index is imaginary beyond). Reduce the medium's offset."
            )

    @property
    def steps_per_screen(self) -> int:
        """Equal steps from screen to screen that follow a ray as finely as the march does."""
        return self.setup.steps_per_screen(self.setup.medium.scale / self.steps_per_scale)

    @functools.cached_property
    def table(self) -> PlaneTable:
        """The medium's spline."""
        step = self.plane.face / (FACE_STEPS * self.steps_per_scale * math.sqrt(self.energy))
        return PlaneTable(self.plane, step, self.points_per_scale)

    def on(self, screens) -> "FullMarcher":
        """Return a marcher through the same medium to other screens."""
        other = FullMarcher(self.setup, self.steps_per_scale, self.points_per_scale, screens)
        other.table = self.table
        return other

    def march(self, rays: FrontRays, matrix: bool = False) -> Iterator[RayState]:
        """Yield the rays on every screen.

        Parameters
        ----------
        rays : FrontRays
            Rays as they would cross x = 0 in the mean medium alone; they start at x = -face/2 on straight lines there.
            Without `matrix`, (dy, dp) is the tangent that is carried along.
        matrix : bool
            Carry the full stability matrix d(y, p)/d(y0, p0) from the identity instead.

        Yields
        ------
        RayState
            Fresh arrays; `px` and `turn` are set.
        """
        state = self._start(rays, matrix)
        table = self.table
        look = table.flat, table.grid, table.box
        edge = 0.5 * self.setup.window.span if self.setup.window.pad else math.inf
        pace = table.step * math.sqrt(self.energy)
        most = LONGEST_WAY * math.ceil((self.x[-1] + self.plane.face) / pace)
        rows = OUT_ROWS + 2 * matrix
        last = np.zeros((rows, state.shape[1]))  # what rays show that never reach a screen
        last[0], last[1], last[2], last[5], last[6], last[7] = state[[1, 3, 4, MASLOV, FATE, 2]]
        together = max(1, SCREENS_BYTES // max(last.nbytes, 1))
        for first in range(0, self.x.size, together):
            screens = self.x[first : first + together]
            out = np.empty((screens.size, *last.shape))
            march_to_screens(state, out, last, screens, *look, edge, table.step, table.strength, most)
            for x, row in zip(screens, out, strict=True):
                yield _given(x, row[:, : rays.y.size], edge)
            last = out[-1].copy()

    def _start(self, rays: FrontRays, matrix: bool) -> np.ndarray:
        """Return the rays at x = -face/2, where the medium is even and coordinates of the kernel map are true ones."""
        count = rays.y.size
        whole = np.zeros((FIXED + TANGENT * (1 + matrix), -(-count // LANES) * LANES))
        whole[2], whole[FATE, count:] = 1.0, LOST
        state = whole[:, :count]
        square = self.energy - rays.p**2
        travels = square > 0.0
        px = np.sqrt(np.where(travels, square, 1.0))
        time = -0.5 * self.plane.face / px
        state[0], state[1], state[2], state[3] = -0.5 * self.plane.face, rays.y + time * rays.p, px, rays.p
        state[4] = rays.action + time * self.energy
        state[FATE] = np.where(travels & np.isfinite(state[1]), GOING, LOST)
        one, zero = np.ones_like(px), np.zeros_like(px)
        for row, (dy, dp) in enumerate(((one, zero), (zero, one)) if matrix else ((rays.dy, rays.dp),)):
            at, dpx = FIXED + TANGENT * row, -rays.p / px * dp
            state[at : at + TANGENT] = time * dpx, dy + time * dp, dpx, dp
        # a focus between the start and x = 0 belongs to the free ray behind x = 0: it is not to be counted
        dy, dp = (one, zero) if matrix else (rays.dy, rays.dp)
        here = px * state[FIXED + 1] - rays.p * state[FIXED]
        there = np.where(dy == 0.0, dp, dy)
        state[MASLOV] = np.where((here < 0.0) & (there > 0.0), -1.0, np.where((here > 0.0) & (there < 0.0), -1.0, 0.0))
        return whole


def _given(x: float, row, edge: float) -> RayState:
    """Return rays as the kernel wrote them down on one screen."""
    y, p, action, a, c, maslov, fate, px, turn = row[:OUT_ROWS]
    status = fate.astype(np.int8)
    status[(status == OK) & (np.abs(y) > edge) & (y * p > 0.0)] = LEFT
    second = row[OUT_ROWS:] if row.shape[0] > OUT_ROWS else (None, None)
    return RayState(float(x), y, p, action, a, c, maslov, status, *second, px, turn)
