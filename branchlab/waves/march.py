"""The paraxial march of many wavelengths at once, fourth order at one transform pair a step.

Kernel of a step h: half a kinetic factor, a screen with the gradient-corrected potential at the step's middle, half a
kinetic factor. It is conjugate to a fourth-order map (Takahashi & Imada 1984, Rowlands 1991),
u(x) = exp(-P) K**n exp(+P) u(0), P = (i h**2/24) V_x + (h**2/48k)(V_yy + 2 V_y d/dy), V = kv/2; P is the processor.
"""

import math
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor

import numpy as np
import scipy.fft

from branchlab.kernels.fourier import RowBlock, periodic_derivative, resampled, wavenumbers
from branchlab.kernels.screens import multiply, screen32, screen64
from branchlab.launch.part import CoherentPart
from branchlab.launch.setup import smooth_number

ROWS_AT_ONCE = 256  # rows of the medium that are evaluated before they are marched through
BLOCK_ROWS = 8  # wavelengths of one block: its rows stay in the second-level cache
THREADS = 2
MEDIUM_POINTS = 32  # per medium scale
OUTER = 0.9  # the spectral tail is what lies beyond this share of the grid's largest wavenumber
PAD_LOSS = 10.0  # powers of e that the steepest ray loses on its way through the absorber


class _Block:
    """Some wavelengths of the march, worked on by one thread."""

    def __init__(self, k, n: int, span: float, step: float, tilt: float, dtype):
        real = np.float64 if dtype == np.complex128 else np.float32
        self.rows = RowBlock(k.size, n, dtype)
        self.pairs = self.rows.data.view(real)
        self.turn = (k * step).astype(real)
        self.screen = screen64 if real is np.float64 else screen32
        kinetic = (wavenumbers(n, span) + k[:, None] * tilt) ** 2 / (2.0 * k[:, None])
        self.whole = (np.exp(-1j * step * kinetic) / n).astype(dtype)
        self.half = (np.exp(-0.5j * step * kinetic) / n).astype(dtype)
        self.n = n

    def enter(self, field) -> None:
        """Take a field in the coordinates of the kernel, and stand before the first screen."""
        self.rows.data[...] = field
        self.rows.forward()
        multiply(self.rows.data, self.half)

    def through(self, paths, keep) -> tuple[np.ndarray, np.ndarray]:
        """Take one step per row of `paths`; return the field there and its spectrum, in kernel coordinates."""
        for i, path in enumerate(paths):
            if i:
                multiply(self.rows.data, self.whole)
            self.rows.inverse()
            self.screen(self.pairs, path, self.turn, keep)
            self.rows.forward()
        spectrum = self.rows.data * self.half
        multiply(self.rows.data, self.whole)  # the half step that ends here, and the one that begins
        return scipy.fft.ifft(spectrum, axis=1, norm="forward"), spectrum


class March:
    """March the wavelengths of one coherent part from screen to screen.

    Parameters
    ----------
    setup : Setup
    part : CoherentPart
    k : ndarray, shape (k,)
    n : int
        Transverse points of the box.
    steps_per_screen : int
    dtype : {complex128, complex64}
    """

    def __init__(self, setup, part: CoherentPart, k, n: int, steps_per_screen: int, dtype):
        self.setup, self.part, self.k, self.n = setup, part, k, n
        self.steps_per_screen = steps_per_screen
        self.step = setup.length / (steps_per_screen * (setup.x.size - 1))
        self.span = setup.window.span
        self.q = wavenumbers(n, self.span)
        count = max(min(THREADS, k.size), math.ceil(k.size / BLOCK_ROWS))
        self.slices = [slice(part[0], part[-1] + 1) for part in np.array_split(np.arange(k.size), count)]
        self.blocks = [_Block(k[at], n, self.span, self.step, part.tilt, dtype) for at in self.slices]
        self.real = self.blocks[0].pairs.dtype
        angle = max(setup.angle_bound(), 1e-3)
        absorber = setup.window.absorber(setup.window.points(n))
        # the absorber's mean height is a half: exp(-loss) for a ray that crosses it twice at the largest angle
        rate = PAD_LOSS * angle / setup.window.pad if setup.window.pad else 0.0
        # a grid this dense carries the medium's whole spectrum (to 1e-8 in the taper at the ends, 1e-10 inside): finer rows follow
        dense = MEDIUM_POINTS * self.span / setup.medium.scale
        self.medium_points = min(n, smooth_number(math.ceil(dense)))
        self.keep = np.exp(-rate * self.step * absorber).astype(self.real)

    def _rows(self, x, *, dx: int = 0) -> np.ndarray:
        """Return v (or its x-derivative) at x and the march's points."""
        return resampled(self.setup.window.rows(x, self.medium_points, dx=dx), self.n)

    def _process(self, field, screen: int, sign: float) -> np.ndarray:
        """Return exp(sign P) field at a screen (third-order Taylor series)."""
        v = self._rows(self.setup.x[[screen]])[0]
        along = self._rows(self.setup.x[[screen]], dx=1)[0]
        across, bend = (periodic_derivative(v, self.span, order) for order in (1, 2))
        k, h2 = self.k[:, None], self.step**2

        def processor(u):
            slope = scipy.fft.ifft(1j * (self.q + k * self.part.tilt) * scipy.fft.fft(u, axis=1), axis=1)
            return (0.5j * h2 / 24.0) * k * along * u + (h2 / 96.0) * (bend * u + 2.0 * across * slope)

        term, total = field, field
        for order in (1.0, 2.0, 3.0):
            term = (sign / order) * processor(term)
            total = total + term
        return total

    def tail(self, spectrum) -> np.ndarray:
        """Return the share of flux beyond `OUTER` of the grid's largest wavenumber, shape (k,)."""
        power = spectrum.real**2 + spectrum.imag**2
        return power[:, np.abs(self.q) > OUTER * np.abs(self.q).max()].sum(axis=1) / power.sum(axis=1)

    def run(self) -> Iterator[tuple[int, np.ndarray, np.ndarray]]:
        """Yield (screen, field, spectrum) on every screen, the entry first.

        Both, shape (k, n), are in the coordinates of the kernel: `true_field` and `cell_means` give the true ones. The
        spectrum holds the coefficients of exp(iqy).
        """
        setup = self.setup
        field = self._process(self.part.entry(setup.window.points(self.n), self.k), 0, +1.0)
        yield 0, field, scipy.fft.fft(field, axis=1, norm="forward")
        for block, at in zip(self.blocks, self.slices, strict=True):
            block.enter(field[at])
        per = self.steps_per_screen
        together = max(1, ROWS_AT_ONCE // per)
        with ThreadPoolExecutor(THREADS) as pool:
            for first in range(1, setup.x.size, together):
                last = min(first + together, setup.x.size)
                middles = (np.arange((first - 1) * per, (last - 1) * per) + 0.5) * self.step
                v = self._rows(middles)
                paths = 0.5 * v - (self.step**2 / 96.0) * periodic_derivative(v, self.span) ** 2
                paths = paths.astype(self.real)
                for screen in range(first, last):
                    some = paths[(screen - first) * per : (screen - first + 1) * per]
                    seen = list(pool.map(lambda block, rows=some: block.through(rows, self.keep), self.blocks))
                    yield screen, *(np.concatenate(arrays) for arrays in zip(*seen, strict=True))

    def true_field(self, field, screen: int) -> np.ndarray:
        """Return the true envelope, tilt included, shape (k, n)."""
        turn = np.multiply.outer(self.k * self.part.tilt, self.setup.window.points(self.n))
        return self._process(field, screen, -1.0) * np.exp(1j * turn)

    def cell_means(self, field, spectrum, screen: int) -> np.ndarray:
        """Return the true mean intensity in the setup's cells, shape (k, y).

        abs(exp(-P) u)**2 with P to first order: its second is 1e-6 of the intensity. The processor's phase, i V_x, does
        not show.
        """
        setup, tilt = self.setup, self.part.tilt
        v = self._rows(setup.x[[screen]])
        across, bend = (periodic_derivative(v, self.span, order) for order in (1, 2))
        slope = scipy.fft.ifft(1j * (self.q + self.k[:, None] * tilt) * spectrum, axis=1, norm="forward")
        change = bend * field + 2.0 * across * slope
        intensity = field.real**2 + field.imag**2
        intensity -= (self.step**2 / 48.0) * (field.real * change.real + field.imag * change.imag)
        cells = setup.cells_in_span()
        pad = (cells - setup.y.size) // 2
        return intensity.reshape(self.k.size, cells, -1).mean(axis=2)[:, pad : pad + setup.y.size].astype(np.float64)
