"""Paraxial rays from screen to screen, in true coordinates on every screen."""

import functools
from collections.abc import Iterator
from typing import NamedTuple

import numpy as np

from branchlab.errors import RangeError
from branchlab.kernels.ray_step import BLOCK, FRONT_ROWS, MATRIX_ROWS, from_true, march_screens
from branchlab.launch.part import FrontRays
from branchlab.rays.table import POINTS_PER_SCALE, STEPS_PER_SCALE, KickTable

OK, LEFT, TURNED, NOT_FINITE = 0, 1, 2, 3
STATUS = {OK: "ok", LEFT: "left the window's box", TURNED: "turned too far for a paraxial ray", NOT_FINITE: "lost"}
SCREENS_BYTES = 1 << 24  # rays are kept on this many bytes of screens before they are handed out
STEEPEST = 1.0  # |p| is the sine of the angle to x: beyond this a ray has turned back
TURNED_SHARE = 0.01  # of the flux: an rms of p of 0.39 if p is normal. One steep ray in a thousand spoils nothing


class RayState(NamedTuple):
    """Rays on one screen, arrays of shape (ray,).

    (A, C) is the tangent d(y, p) of the front, or with a full matrix its first column d(y, p)/dy0, and (B, D) the
    second, d(y, p)/dp0. What left the box of absorbing sides, or turned too far, keeps its numbers and has from there
    on a `status` other than `OK`. y is not wrapped at periodic sides. Full rays, whose p is py, have `px` and the rate
    `turn` = dp/dx too; those of paraxial rays are None.
    """

    x: float
    y: np.ndarray
    p: np.ndarray
    action: np.ndarray
    A: np.ndarray
    C: np.ndarray
    maslov: np.ndarray
    status: np.ndarray
    B: np.ndarray | None = None
    D: np.ndarray | None = None
    px: np.ndarray | None = None
    turn: np.ndarray | None = None


def refuse_turned(state: RayState, flux=None) -> None:
    """Raise `RangeError` if more than `TURNED_SHARE` of the flux of paraxial rays has turned so far that it is not.

    Full rays may turn: theirs is counted.

    Parameters
    ----------
    state : RayState
    flux : ndarray, shape (ray,), optional
        Flux that each ray stands for. Default: the same for all.
    """
    turned = state.status == TURNED
    if state.px is not None or not turned.any():
        return
    flux = np.ones(turned.size) if flux is None else flux
    share = flux[turned].sum() / flux.sum()
    if share > TURNED_SHARE:
        at = np.argmax(np.where(turned, np.abs(state.p), 0.0))
        angle = np.degrees(np.sqrt((flux * np.arctan(state.p) ** 2)[state.status <= TURNED].sum() / flux.sum()))
        raise RangeError(
            f"{100 * share:.2g} % of the flux has a transverse momentum |p| >= {STEEPEST:g} at x = {state.x:.4g} (steepest: "
            f"p = {state.p[at]:.3g} at y = {state.y[at]:.4g}; rms angle {angle:.0f} degrees). |p| is the sine of the angle "
            f"to the x axis and must stay below 1: beyond, a ray turns back, and the paraxial model serves while at most "
            f"{100 * TURNED_SHARE:g} % of the flux does. Reduce the medium's strength, the source's angles or the length."
        )


class Marcher:
    """March rays through the window of a setup; the tables are built once.

    Paraxial rays: dy/dx = p, dp/dx = -W_y, dS/dx = p**2/2 - W with W = v/2. Each step is drift, kick, drift with
    the gradient-corrected potential; between the entry and a screen the map is conjugate to a fourth-order one,
    and the coordinates given out are those of the fourth-order map.

    Parameters
    ----------
    setup : Setup
    steps_per_scale, points_per_scale : int
        Steps along x, and points of the spline across, per medium scale, at least.
    """

    def __init__(self, setup, steps_per_scale: int = STEPS_PER_SCALE, points_per_scale: int = POINTS_PER_SCALE):
        self.setup = setup
        self.steps_per_scale = steps_per_scale
        self.points_per_scale = points_per_scale

    @property
    def steps_per_screen(self) -> int:
        """Equal steps from screen to screen."""
        return self.setup.steps_per_screen(self.setup.medium.scale / self.steps_per_scale)

    @functools.cached_property
    def table(self) -> KickTable:
        """The medium's spline tables."""
        return KickTable(self.setup, self.steps_per_screen, self.points_per_scale)

    def march(self, rays: FrontRays, matrix: bool = False) -> Iterator[RayState]:
        """Yield the rays on every screen of the setup, the entry first.

        Parameters
        ----------
        rays : FrontRays
            Rays at x = 0. Without `matrix`, (dy, dp) is the tangent that is carried along.
        matrix : bool
            Carry the full stability matrix from the identity instead.

        Yields
        ------
        RayState
            Fresh arrays: the caller may keep them.
        """
        count = rays.y.size
        state = np.zeros((MATRIX_ROWS if matrix else FRONT_ROWS, -(-count // BLOCK) * BLOCK))
        state[0, :count], state[1, :count], state[2, :count] = rays.y, rays.p, rays.action
        if matrix:
            state[3] = state[7] = 1.0
        else:
            state[3, :count], state[4, :count] = rays.dy, rays.dp
        table = self.table
        box = table.cells, table.start, table.inverse
        status = np.zeros(count, dtype=np.int8)
        yield self._given(state, 0, count, status)
        from_true(state, table.potential[0], table.gradient[0], *box, table.strength)
        together = max(1, SCREENS_BYTES // state.nbytes)
        for first in range(0, self.setup.x.size - 1, together):
            true = np.empty((min(together, self.setup.x.size - 1 - first), *state.shape))
            tables = table.flat, table.potential, table.gradient
            march_screens(state, true, *tables, *box, table.step, table.strength, table.steps_per_screen, first)
            for n, one in enumerate(true):
                yield self._given(one, first + 1 + n, count, status)

    def _given(self, state, screen, count, status) -> RayState:
        """Return the first `count` rays, with their status brought up to date (in place)."""
        y, p = state[0, :count], state[1, :count]
        finite = np.isfinite(y) & np.isfinite(p)
        now = np.where(np.abs(y) > 0.5 * self.setup.window.span, LEFT, OK)
        if not self.setup.window.pad:
            now[:] = OK
        now[finite & (np.abs(p) >= STEEPEST)] = TURNED
        now[~finite] = NOT_FINITE
        status[status == OK] = now[status == OK]
        rows = [state[row, :count].copy() for row in range(state.shape[0])]
        second = rows[6:8] if state.shape[0] == MATRIX_ROWS else (None, None)
        return RayState(float(self.setup.x[screen]), *rows[:6], status.copy(), *second)
