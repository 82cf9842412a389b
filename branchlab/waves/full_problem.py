"""One wavelength of the full wave on one grid: operator, sweeps, and what a coherent part scatters into."""

import math

import attrs
import numpy as np

from branchlab.errors import available_memory, check_memory
from branchlab.waves.born import born_iteration, born_loss
from branchlab.waves.full_error import grid_error, sampled_lines
from branchlab.waves.full_grid import FullGrid
from branchlab.waves.full_iteration import MOST_ITERATIONS, Solved, sweep_iteration
from branchlab.waves.full_operator import REALS, DampedOperator
from branchlab.waves.full_sweeps import Sweeps
from branchlab.waves.incoming import incoming

LEAST_LOSS = 0.1  # eps; with less, what the grid's box leaves of a wave that goes round it stalls the iteration
LOSS_PER_RMS = 2.5
ROWS_AT_ONCE = 64
FIELDS = 12  # fields that are held beside two an iteration, in units of one field; measured, marches along y included
FEWEST_KEPT = 4
SHARE = 0.8  # of the free memory
SWEEPS_UP_TO = 0.95  # largest v for which sweeps are tried: where v > 1 no wave goes on, and there is nothing to follow


@attrs.frozen(slots=False, eq=False)
class Scattered:
    """What one coherent part is scattered into.

    Attributes
    ----------
    grid : FullGrid
    free : PlaneIncoming or SpectrumIncoming
        The wave that comes in.
    solved : Solved
        The scattered field, the Bloch phase taken out.
    grid_error : float
        Estimated relative error of the field by the grid.
    memory : float
        Bytes.
    """

    grid: FullGrid
    free: object
    solved: Solved
    grid_error: float
    memory: float


class FullProblem:
    """The wave equation of a setup at one wavelength on one grid, for any part of the source.

    Parameters
    ----------
    table : SlabTable
    wavelength : float
    dtype : dtype
    team : Team
    resolution, points_per_wavelength
        As for `FullGrid`.
    """

    def __init__(self, table, wavelength: float, dtype, team, *, resolution: float, points_per_wavelength=None):
        self.table, self.wavelength, self.dtype, self.team = table, wavelength, np.dtype(dtype), team
        self._fineness = {"resolution": resolution, "points_per_wavelength": points_per_wavelength}
        self._ready = None
        grid = self._grid(0.0)
        points = grid.shape[0] * grid.shape[1]
        self._field = points * self.dtype.itemsize
        least = (FIELDS + 2 * FEWEST_KEPT) * self._field + table.bytes_on(grid)
        check_memory(
            least,
            f"the full wave at wavelength {wavelength:g} on {grid.shape[0]} x {grid.shape[1]} points",
            'Use a longer wavelength, a smaller window, precision="single" or fewer points per wavelength.',
        )
        spare = SHARE * available_memory() - FIELDS * self._field - table.bytes_on(grid)
        self.kept = min(MOST_ITERATIONS, max(FEWEST_KEPT, int(spare / (2 * self._field))))
        self.u = table.on(grid, REALS[self.dtype])

    def _grid(self, bloch: float) -> FullGrid:
        return FullGrid(self.table, self.wavelength, bloch=bloch, **self._fineness)

    def _bloch(self, part) -> float:
        """Return the part of a tilt that does not repeat after the width."""
        setup = self.table.setup
        if setup.window.pad:
            return 0.0
        turn, once = 2.0 * np.pi / self.wavelength * part.tilt, 2.0 * np.pi / setup.width
        return turn - once * round(turn / once)

    def machinery(self, part):
        """Return grid, operator and sweeps (or None) for a part; those of the last part if its Bloch phase is the same."""
        bloch = self._bloch(part)
        if self._ready is None or self._ready[0].bloch != bloch:
            self._ready = None  # let go of before as much is taken again
            grid = self._grid(bloch)
            loss = max(LEAST_LOSS, LOSS_PER_RMS * self.table.rms, grid.loss_x.max(), grid.loss_y.max())
            operator = DampedOperator(grid, self.u, loss, self.dtype, self.team)
            sweeps = Sweeps(operator, self.table.rms) if np.max(self.u) < SWEEPS_UP_TO else None
            self._ready = grid, operator, sweeps
        return self._ready

    def source(self, grid, free):
        """Return k**2 u psi0, the norm of psi0 in the window, and psi0 on the sampled lines."""
        source = np.empty(grid.shape, self.dtype)
        setup = self.table.setup
        window = np.abs(grid.y) <= 0.5 * setup.width
        rows, columns = sampled_lines(grid)
        on_columns = np.empty((columns.size, grid.shape[0]), complex)
        square = 0.0
        for at in range(0, grid.shape[0], ROWS_AT_ONCE):
            some = slice(at, at + ROWS_AT_ONCE)
            psi = free.rows(grid.x[some])
            within = (grid.x[some] >= 0.0) & (grid.x[some] <= setup.length)
            square += float(np.sum(np.abs(psi[within][:, window]) ** 2))
            on_columns[:, some] = psi[:, columns].T
            source[some] = grid.k**2 * self.u[some] * psi
        return source, math.sqrt(square), free.rows(grid.x[rows]), on_columns

    def solve(self, part, tolerance: float, report) -> Scattered:
        """Return what a coherent part is scattered into.

        Parameters
        ----------
        part : CoherentPart
        tolerance : float
            Estimated error of the field that the iteration stops at, relative to the incoming field in the window.
        report : callable
            report(share) is called once an iteration.
        """
        grid, operator, sweeps = self.machinery(part)
        free = incoming(grid, part)
        b, scale, on_rows, on_columns = self.source(grid, free)
        solved = None
        if sweeps is not None:
            operator.green(b)
            solved = sweep_iteration(operator, sweeps, b, scale, tolerance, report, self.kept)
        if solved is None or not solved.converged:
            solved = self._born(grid, free, scale, tolerance, report, solved)
        error = grid_error(self.table, grid, solved.field, on_rows, on_columns)
        memory = (FIELDS + 2 * min(solved.iterations + 1, self.kept)) * self._field + self.table.bytes_on(grid)
        return Scattered(grid, free, solved, error, memory)

    def _born(self, grid, free, scale, tolerance, report, begun) -> Solved:
        """Go on by the Born series, from where the sweeps got to if that is better than nothing."""
        operator = DampedOperator(grid, self.u, born_loss(self.u, grid), self.dtype, self.team)
        b, *_ = self.source(grid, free)
        operator.green(b)
        useful = begun is not None and begun.error < 1.0
        start = begun.field if useful else np.zeros_like(b)
        solved = born_iteration(operator, b, start, scale, tolerance, report)
        return attrs.evolve(solved, iterations=solved.iterations + (begun.iterations if begun else 0))
