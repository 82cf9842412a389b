"""The march of a wave through time in the plane, fourth order at one pair of two-dimensional transforms a step.

Kernel of a step h: half a kinetic factor, a screen with the gradient-corrected potential, half a kinetic factor. It is
conjugate to a fourth-order map (Takahashi & Imada 1984, Rowlands 1991): psi(t) = exp(-P) K**n exp(+P) psi(0),
P u = (h**2/96)(lap(v u) - v lap u). The kinetic factor splits into one along x and one along y, which commute. So the wave
is held in two layouts, (x, y) and (y, x), in turn: a step is one visit to the rows of one layout, which ends the
factor of the step before, lays the screen and begins the factor of the step after. Memory is passed once a step.
"""

import math
from concurrent.futures import ThreadPoolExecutor

import numpy as np

from branchlab.kernels.fourier import RowBlock, periodic_derivative, resampled, wavenumbers
from branchlab.kernels.native_fft import NativePlan, available
from branchlab.kernels.packet_step import gather, multiply_rows, native_turn, native_visit, scale_rows, screen_rows
from branchlab.launch.setup import smooth_number

THREADS = 2
BLOCK = 16  # rows of a block: a grid's sides are multiples of it. 16 rows of 2000 points fit a second-level cache
MEDIUM_POINTS = 32  # per medium scale
PAD_LOSS = 10.0  # powers of e that a packet at full speed loses on its way through the absorber and back
BYTES_A_POINT = 230  # the highest that was traced is 220


def blocked(n: int) -> int:
    """Return the smallest number of grid points >= n that transforms and blocks like."""
    return BLOCK * smooth_number(-(-n // BLOCK))


class _Layout:
    """The wave with one direction along its rows: working room and kinetic factors."""

    def __init__(self, rows: int, n: int, span: float, k: float):
        self.n = n
        self.q = wavenumbers(n, span)
        self.kinetic = self.q**2 / (2.0 * k)
        self.native = available()
        if self.native:
            self.plan = NativePlan(BLOCK, n)
            self.blocks = [self.plan.empty() for _ in range(THREADS)]
        else:
            self.rooms = [RowBlock(BLOCK, n) for _ in range(THREADS)]
            self.blocks = [room.data for room in self.rooms]
        edges = BLOCK * np.linspace(0, rows // BLOCK, THREADS + 1).astype(int)
        self.shares = list(zip(edges[:-1].tolist(), edges[1:].tolist(), strict=True))

    def factor(self, step: float) -> np.ndarray:
        """Return exp(-i step q**2/2k)/n."""
        return np.exp(-1j * step * self.kinetic) / self.n

    def visit(self, thread: int, out, field, factor, last, screen) -> None:
        """Take this thread's rows of the transposed field through a step (see `native_visit`)."""
        begin, end = self.shares[thread]
        block = self.blocks[thread]
        if self.native:
            plans = self.plan.forward, self.plan.inverse
            native_visit(out, field, begin, end, factor, last, screen, block, self.plan.address, plans)
            return
        for first in range(begin, end, BLOCK):
            gather(block, field, first)
            self._multiply(self.rooms[thread], factor)
            multiply_rows(block, screen, first)
            self._multiply(self.rooms[thread], last)
            out[first : first + BLOCK] = block

    def turn(self, thread: int, out, field, factor) -> None:
        """Turn the transposed field's rows, and apply one kinetic factor along them."""
        begin, end = self.shares[thread]
        block = self.blocks[thread]
        if self.native:
            plans = self.plan.forward, self.plan.inverse
            native_turn(out, field, begin, end, factor, block, self.plan.address, plans)
            return
        for first in range(begin, end, BLOCK):
            gather(block, field, first)
            self._multiply(self.rooms[thread], factor)
            out[first : first + BLOCK] = block

    @staticmethod
    def _multiply(room, factor) -> None:
        room.forward()
        scale_rows(room.data, factor)
        room.inverse()


class PlaneMarch:
    """One wavelength on one grid of a box.

    Parameters
    ----------
    plane : Plane
    shape : (int, int)
        Grid points along x and y; multiples of `BLOCK`.
    k : float
    speed : float
        Largest momentum: sets the absorber; 0 for none.

    Attributes
    ----------
    v : ndarray, shape (nx, ny)
        The medium on the grid.
    """

    def __init__(self, plane, shape, k: float, speed: float):
        self.plane, self.shape, self.k = plane, shape, k
        nx, ny = shape
        self.v = self._medium()
        self.along_y, self.along_x = _Layout(nx, ny, plane.span[1], k), _Layout(ny, nx, plane.span[0], k)
        shapes, pads = plane.absorber(shape), (plane.pad, plane.window.pad)
        self._loss = [PAD_LOSS * speed / pad * one if pad else one for one, pad in zip(shapes, pads, strict=True)]
        self._field, self._turned = np.empty(shape, complex), np.empty((ny, nx), complex)
        self._step = None

    def _medium(self) -> np.ndarray:
        """Return v on the grid, through a grid that is as fine as v needs."""
        coarse = [
            min(n, smooth_number(math.ceil(MEDIUM_POINTS * span / self.plane.finest)))
            for n, span in zip(self.shape, self.plane.span, strict=True)
        ]
        v = resampled(self.plane.sample(coarse), self.shape[1])
        return np.ascontiguousarray(resampled(np.ascontiguousarray(v.T), self.shape[0]).T)

    def _prepare(self, step: float) -> None:
        """Make the screens and kinetic factors of a step length."""
        if step == self._step:
            return
        slope_y = periodic_derivative(self.v, self.plane.span[1])
        slope_x = periodic_derivative(np.ascontiguousarray(self.v.T), self.plane.span[0]).T
        path = 0.5 * self.v - (step**2 / 96.0) * (slope_x**2 + slope_y**2)
        keep_x, keep_y = (np.exp(-step * loss) for loss in self._loss)
        screen = (keep_x[:, None] * keep_y).astype(complex)
        screen_rows(screen.view(np.float64), path, 0, self.k * step)
        self._screens = screen, np.ascontiguousarray(screen.T)
        self._factors = {
            (layout, share): layout.factor(share * step)
            for layout in (self.along_x, self.along_y)
            for share in (0.5, 1.0)
        }
        self._step = step

    def kernel_steps(self, field, step: float, steps: int) -> np.ndarray:
        """Take a field in the coordinates of the kernel through an even number of steps.

        Unitary to round-off outside the absorber.
        """
        self._prepare(step)
        self._field[...] = field
        on_x, on_y, factors = self.along_x, self.along_y, self._factors
        with ThreadPoolExecutor(THREADS - 1) as pool:
            self._all_threads(pool, on_x.turn, self._turned, self._field, factors[on_x, 0.5])
            for number in range(0, steps, 2):
                first = factors[on_y, 1.0 if number else 0.5]
                last = factors[on_x, 1.0 if number + 2 < steps else 0.5]
                on, off = self._screens
                self._all_threads(pool, on_y.visit, self._field, self._turned, first, factors[on_y, 1.0], on)
                self._all_threads(pool, on_x.visit, self._turned, self._field, factors[on_x, 1.0], last, off)
            self._all_threads(pool, on_y.turn, self._field, self._turned, factors[on_y, 0.5])
        return self._field.copy()

    def processed(self, field, step: float, sign: float) -> np.ndarray:
        """Return exp(sign P) field: +1 leads to the coordinates of the kernel, -1, its exact inverse, to the true ones.

        exp(P) = C(a, a) C(-a, -a) + O(step**4) with 2 a**2 = step**2/24 and C(a, b) the group commutator of a kinetic
        factor and a screen, exp(-iaT) exp(-ibV) exp(iaT) exp(ibV): unitary to round-off, like the kernel.
        """
        a = step / np.sqrt(48.0)
        kinetic, screens = (
            (a, -a, -a, a),
            (a, -a, -a, a),
        )  # in the order in which they act: screen, kinetic, screen, ...
        acts = [
            act for pair in zip(screens, kinetic, strict=True) for act in (("screen", pair[0]), ("kinetic", pair[1]))
        ]
        if sign < 0.0:
            acts = [(kind, -length) for kind, length in reversed(acts)]
        self._field[...] = field
        with ThreadPoolExecutor(THREADS - 1) as pool:
            for kind, length in acts:
                if kind == "screen":
                    self._all_threads(pool, self._bare_screen, 0.5 * self.k * length)
                else:
                    on_x, on_y = (layout.factor(length) for layout in (self.along_x, self.along_y))
                    self._all_threads(pool, self.along_x.turn, self._turned, self._field, on_x)
                    self._all_threads(pool, self.along_y.turn, self._field, self._turned, on_y)
        return self._field.copy()

    def _bare_screen(self, thread: int, turn: float) -> None:
        """Lay the screen exp(-i turn v) over this thread's rows."""
        begin, end = self.along_y.shares[thread]
        screen_rows(self._field[begin:end].view(np.float64), self.v, begin, turn)

    @staticmethod
    def _all_threads(pool, work, *arguments) -> None:
        """Let every thread do its share, this one too, and wait for all."""
        others = [pool.submit(work, thread, *arguments) for thread in range(1, THREADS)]
        work(0, *arguments)
        for job in others:
            job.result()

    def run(self, field, times, longest: float, halve: int = 1):
        """Yield the true field at each of the rising times, for a field given at time 0.

        Parameters
        ----------
        field : ndarray, shape (nx, ny)
        times : ndarray, shape (time,)
        longest : float
            Steps are no longer, before they are doubled.
        halve : {1, 2}
            1: an even number of steps from time to time, none longer than `longest`, divisible by 4. 2: half as many.
        """
        step = None
        for gap in np.diff(times, prepend=0.0):
            if gap > 0.0:
                steps = 4 * max(1, math.ceil(gap / (4.0 * longest) - 1e-9)) // halve
                if step is None or not math.isclose(step, gap / steps, rel_tol=1e-12):
                    field = field if step is None else self.processed(field, step, -1.0)
                    step = gap / steps
                    field = self.processed(field, step, +1.0)
                field = self.kernel_steps(field, step, steps)
            yield field if step is None else self.processed(field, step, -1.0)
