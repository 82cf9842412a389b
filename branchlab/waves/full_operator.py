"""The damped form of the wave equation, spectrally accurate on a periodic grid."""

import numpy as np
import scipy.fft

from branchlab.kernels.native_fft import NativePlan, available
from branchlab.kernels.sweeps import (
    COLUMNS,
    add_scaled,
    green_columns,
    inner,
    scatter_rows,
    subtract_rows,
    transform_rows,
)
from branchlab.waves.team import THREADS, shares

MEASURED = 1 << 21  # points of a grid whose transforms are worth seconds of planning
REALS = {np.dtype(np.complex128): np.float64, np.dtype(np.complex64): np.float32}


class DampedOperator:
    """A psi = psi - G[V psi]: (lap + k**2 (1 - v + i w)) psi = S becomes A psi = G[S].

    G = 1/(k**2 (1 + i eps) - q**2) in Fourier space, V = k**2 (v + i eps - i w). The loss eps makes G short, so that it
    does not wrap round the grid; V takes the loss out again, so that eps drops out of the answer (Osnabrugge,
    Leedumrongwatthanakun & Vellekoop, J. Comput. Phys. 322 (2016) 113).

    Parameters
    ----------
    grid : FullGrid
    v : ndarray, shape (nx, ny)
        Relative to the background, in the precision of the field.
    eps : float
    dtype : dtype
        complex128 or complex64.
    team : Team
    """

    def __init__(self, grid, v, eps: float, dtype, team):
        self.grid, self.v, self.eps, self.dtype, self.team = grid, v, eps, np.dtype(dtype), team
        real = REALS[self.dtype]
        k2 = grid.k**2
        self.damp_x, self.damp_y = (eps - grid.loss_x).astype(real), (-grid.loss_y).astype(real)
        self.strength = np.array([k2], real)
        self.numbers = np.array([k2, k2 * eps, 1.0 / v.size], real)
        self.qx2, self.qy2 = (grid.qx**2).astype(real), (grid.qy**2).astype(real)
        self.native = available()
        nx, ny = v.shape
        self.rows, self.columns = shares(nx, 2), shares(ny, COLUMNS)
        if self.native:
            self.measured = v.size > MEASURED
            self.row_plan, self.column_plan = self.plan(1, ny), self.plan(COLUMNS, nx)
            self.row_room = [self.row_plan.empty() for _ in range(THREADS)]
            self.column_room = [self.column_plan.empty() for _ in range(THREADS)]
            self.room = np.empty(v.shape, self.dtype)

    def plan(self, rows: int, n: int) -> NativePlan:
        """Return a plan of transforms, made with as much care as the grid is worth."""
        return NativePlan(rows, n, self.dtype, measured=self.measured)

    def empty(self) -> np.ndarray:
        """Return a field that is not yet set."""
        return np.empty(self.v.shape, self.dtype)

    def apply(self, out, field) -> None:
        """Set `out` to A field."""
        if not self.native:
            potential = self.strength * (self.v + 1j * (self.damp_x[:, None] + self.damp_y))
            out[...] = field - self._plain_green(potential.astype(self.dtype) * field)
            return
        plan, rows, room = self.row_plan, self.rows, self.row_room
        ways = plan.address, plan.forward
        back = plan.address, plan.inverse
        damp = self.damp_x, self.damp_y, self.strength
        self.team.run(lambda t: scatter_rows(self.room, field, self.v, *damp, *rows[t], room[t], *ways))
        self._columns(self.room)
        self.team.run(lambda t: subtract_rows(out, field, self.room, *rows[t], room[t], *back))

    def green(self, source) -> None:
        """Replace a source by G[source]."""
        if not self.native:
            source[...] = self._plain_green(source)
            return
        plan, rows, room = self.row_plan, self.rows, self.row_room
        self.team.run(lambda t: transform_rows(source, *rows[t], room[t], plan.address, plan.forward))
        self._columns(source)
        self.team.run(lambda t: transform_rows(source, *rows[t], room[t], plan.address, plan.inverse))

    def _columns(self, field) -> None:
        plan = self.column_plan
        tables = self.qx2, self.qy2, self.numbers
        ways = plan.address, (plan.forward, plan.inverse)
        self.team.run(lambda t: green_columns(field, *tables, *self.columns[t], self.column_room[t], *ways))

    def _plain_green(self, source) -> np.ndarray:
        below = self.numbers[0] - self.qx2[:, None] - self.qy2 + 1j * self.numbers[1]
        return scipy.fft.ifft2(scipy.fft.fft2(source, workers=THREADS) / below.astype(self.dtype), workers=THREADS)

    def inner(self, a, b) -> complex:
        """Return sum conj(a) b."""
        return sum(self.team.run(lambda t: inner(a, b, *self.rows[t])))

    def norm(self, a) -> float:
        """Return the root of sum abs(a)**2."""
        return float(np.sqrt(self.inner(a, a).real))

    def add_scaled(self, out, factor, field) -> None:
        """Add factor times `field` to `out`."""
        scale = np.array([factor], self.dtype)
        self.team.run(lambda t: add_scaled(out, scale, field, *self.rows[t]))
