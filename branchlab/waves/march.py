"""The paraxial march of many wavelengths at once, fourth order at one transform pair a step.

Kernel of a step h: half a kinetic factor, a screen with the gradient-corrected potential at the step's middle, half a
kinetic factor. It is conjugate to a fourth-order map (Takahashi & Imada 1984, Rowlands 1991),
u(x) = exp(-P) K**n exp(+P) u(0), P = (i h**2/24) V_x + (h**2/48k)(V_yy + 2 V_y d/dy), V = kv/2; P is the processor.
"""

import math
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from typing import NamedTuple

import numpy as np
import scipy.fft

from branchlab.kernels.fourier import RowBlock, wavenumbers
from branchlab.kernels.screens import (
    cell_intensity,
    differentiate,
    multiply,
    multiply_into,
    outer_share,
    screen32,
    screen64,
)
from branchlab.launch.part import CoherentPart
from branchlab.waves.table import ScreenTable

BLOCK_ROWS = 8  # wavelengths of one block: its rows stay in the second-level cache
THREADS = 2
OUTER = 0.9  # the spectral tail is what lies beyond this share of the grid's largest wavenumber
PAD_LOSS = 10.0  # powers of e that the steepest ray loses on its way through the absorber


class Seen(NamedTuple):
    """A wave on one screen.

    Attributes
    ----------
    screen : int
    intensity : ndarray, shape (k, y)
        True mean intensity in the setup's cells.
    tail : ndarray, shape (k,)
        Share of flux beyond `OUTER` of the grid's largest wavenumber.
    field : ndarray, shape (k, n), or None
        Envelope in the coordinates of the kernel; `March.true_field` gives the true one.
    """

    screen: int
    intensity: np.ndarray
    tail: np.ndarray
    field: np.ndarray | None


class _Block:
    """Some wavelengths of the march, worked on by one thread."""

    def __init__(self, march: "March", k):
        n, step, tilt, dtype = march.table.n, march.table.step, march.part.tilt, march.dtype
        self.march, self.n = march, n
        self.real = np.float64 if dtype == np.complex128 else np.float32
        self.rows, self.seen, self.slope = (RowBlock(k.size, n, dtype) for _ in range(3))
        self.pairs = self.rows.data.view(self.real)
        self.turn = (k * step).astype(self.real)
        self.shift = (k * tilt).astype(self.real)
        self.q = march.q.astype(self.real)
        self.keep = march.keep.astype(self.real)
        self.screen = screen64 if self.real is np.float64 else screen32
        kinetic = (march.q + k[:, None] * tilt) ** 2 / (2.0 * k[:, None])
        self.whole = (np.exp(-1j * step * kinetic) / n).astype(dtype)
        self.half = (np.exp(-0.5j * step * kinetic) / n).astype(dtype)

    def enter(self, field) -> tuple[np.ndarray, np.ndarray]:
        """Take a field in the coordinates of the kernel, look at it, and stand before the first screen."""
        self.rows.data[...] = field
        self.rows.forward()
        self.seen.data[...] = self.rows.data / self.n
        looked = self._look(0)
        multiply(self.rows.data, self.half)
        return looked

    def through(self, first: int, last: int, paths, fields):
        """Go from one screen to another; return intensities and tails on the way, and fields where wanted."""
        per = self.march.table.steps_per_screen
        paths = paths.astype(self.real, copy=False)
        intensity, tails, kept = [], [], {}
        for screen in range(first + 1, last + 1):
            for step in range((screen - first - 1) * per, (screen - first) * per):
                if step % per:
                    multiply(self.rows.data, self.whole)
                self.rows.inverse()
                self.screen(self.pairs, paths[step], self.turn, self.keep)
                self.rows.forward()
            multiply_into(self.seen.data, self.rows.data, self.half)
            means, tail = self._look(screen)
            intensity.append(means)
            tails.append(tail)
            if fields or screen == self.march.last_screen:
                kept[screen] = self.seen.data.copy()
            multiply(self.rows.data, self.whole)  # the half step that ends here, and the one that begins
        return intensity, tails, kept

    def _look(self, screen: int) -> tuple[np.ndarray, np.ndarray]:
        """Return cell means and tail of the spectrum in `seen`, which becomes the field.

        abs(exp(-P) u)**2 with P to first order: its second is 1e-6 of the intensity. The processor's phase, i V_x, does
        not show.
        """
        march, table = self.march, self.march.table
        tail = outer_share(self.seen.data, *march.outer)
        differentiate(self.slope.data, self.seen.data, self.q, self.shift)
        self.seen.inverse()
        self.slope.inverse()
        means = np.empty((self.turn.size, march.setup.cells_in_span()))
        strength = table.step**2 / 48.0
        cell_intensity(means, self.seen.data, self.slope.data, table.across(screen), table.bend(screen), strength)
        pad = (means.shape[1] - march.setup.y.size) // 2
        return means[:, pad : pad + march.setup.y.size], tail


class March:
    """March the wavelengths of one coherent part from screen to screen.

    Parameters
    ----------
    setup : Setup
    part : CoherentPart
    k : ndarray, shape (k,)
    table : ScreenTable
    dtype : {complex128, complex64}
    """

    def __init__(self, setup, part: CoherentPart, k, table: ScreenTable, dtype):
        self.setup, self.part, self.k, self.table, self.dtype = setup, part, k, table, dtype
        n = table.n
        self.q = wavenumbers(n, table.span)
        inner = round(0.5 * OUTER * n)
        self.outer = (inner + 1, n - inner)
        self.last_screen = setup.x.size - 1
        # the absorber's mean height is a half: exp(-loss) for a ray that crosses it twice at the largest angle
        angle, pad = max(setup.angle_bound(), 1e-3), setup.window.pad
        rate = PAD_LOSS * angle / pad if pad else 0.0
        self.keep = np.exp(-rate * table.step * setup.window.absorber(setup.window.points(n)))
        count = max(min(THREADS, k.size), math.ceil(k.size / BLOCK_ROWS))
        self.blocks = [_Block(self, some) for some in np.array_split(k, count)]

    def run(self, fields: bool = False) -> Iterator[Seen]:
        """Yield the wave on every screen, the entry first; with `fields`, or on the last screen, its envelope too."""
        table = self.table
        points = self.setup.window.points(table.n)
        entry = self._process(self.part.entry(points, self.k), 0, +1.0)
        edges = np.cumsum([0] + [block.turn.size for block in self.blocks])
        looked = [
            block.enter(entry[low:high]) for block, low, high in zip(self.blocks, edges[:-1], edges[1:], strict=True)
        ]
        yield Seen(0, *(np.concatenate(one) for one in zip(*looked, strict=True)), entry if fields else None)
        table.across(0)  # made before threads ask for it
        with ThreadPoolExecutor(THREADS) as pool:
            for first in range(0, self.last_screen, table.screens_at_once):
                last = min(first + table.screens_at_once, self.last_screen)
                paths = table.paths(first, last)
                jobs = [pool.submit(block.through, first, last, paths, fields) for block in self.blocks]
                done = [job.result() for job in jobs]
                for i, screen in enumerate(range(first + 1, last + 1)):
                    intensity = np.concatenate([one[0][i] for one in done])
                    tail = np.concatenate([one[1][i] for one in done])
                    field = np.concatenate([one[2][screen] for one in done]) if screen in done[0][2] else None
                    yield Seen(screen, intensity, tail, field)

    def true_field(self, field, screen: int) -> np.ndarray:
        """Return the true envelope, tilt included, shape (k, n)."""
        turn = np.multiply.outer(self.k * self.part.tilt, self.setup.window.points(self.table.n))
        return self._process(field, screen, -1.0) * np.exp(1j * turn)

    def _process(self, field, screen: int, sign: float) -> np.ndarray:
        """Return exp(sign P) field at a screen (third-order Taylor series)."""
        table = self.table
        along, across, bend = table.along(screen), table.across(screen), table.bend(screen)
        k, h2 = self.k[:, None], table.step**2

        def processor(u):
            slope = scipy.fft.ifft(1j * (self.q + k * self.part.tilt) * scipy.fft.fft(u, axis=1), axis=1)
            return (0.5j * h2 / 24.0) * k * along * u + (h2 / 96.0) * (bend * u + 2.0 * across * slope)

        term, total = field, field
        for order in (1.0, 2.0, 3.0):
            term = (sign / order) * processor(term)
            total = total + term
        return total
