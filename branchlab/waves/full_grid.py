"""The periodic grid of the full wave: the window, its face and exit, and pads that absorb."""

import functools
import math

import numpy as np
import scipy.fft

from branchlab.errors import RangeError, check_memory
from branchlab.kernels.fourier import resampled, wavenumbers
from branchlab.launch.plane import Plane
from branchlab.launch.setup import smooth_number
from branchlab.launch.slab import Slab

MEDIUM_POINTS = 16  # per length that must be resolved: they carry the spectrum of medium, fades and face to 1e-8
PAD_WAVELENGTHS = 14.0  # thickness of an absorbing pad: see `FullGrid`
PAD_LOSS = 10.0  # peak loss in wavelengths over pad thickness
MEDIUM_WAVENUMBER = 8.0  # in 1/scale, that the medium adds to the wave's own
COLUMNS_AT_ONCE = 128


class SlabTable:
    """v of a setup relative to its mean medium, sampled once as finely as it needs and refitted to any grid.

    (lap + k**2 (1 - v)) psi = 0 is (lap + k_b**2 (1 - u)) psi = 0 with k_b**2 = k**2 (1 - mean) and
    u = (v - mean)/(1 - mean), which is 0 beyond face, exit and sides.

    Parameters
    ----------
    setup : Setup

    Attributes
    ----------
    slab : Slab
    index : float
        k_b / k.
    start : float
        Where the face begins.
    """

    def __init__(self, setup):
        self.setup, self.slab = setup, Slab(setup)
        mean = setup.medium.mean
        if not mean < 1.0:
            raise RangeError(
                f"the medium's mean is {mean:g}: no wave can travel there, for v must be below 1. Take a constant off v, "
                "or use a shorter wavelength in its units."
            )
        self.index = math.sqrt(1.0 - mean)
        self.start = -0.5 * self.slab.face
        along, across = self.slab.finest, Plane.finest.fget(self.slab)  # the face is only met along x
        self.step = setup.length / math.ceil(MEDIUM_POINTS * setup.length / along)
        self.per_cell = max(1, math.ceil(MEDIUM_POINTS * setup.cell / across))

    @functools.cached_property
    def _sampled(self) -> tuple[int, np.ndarray]:
        """Number of the first row, whose middle is (first + 1/2) step, and u on rows and points of the window's box."""
        slab, setup = self.slab, self.setup
        first = math.floor(self.start / self.step)
        last = math.ceil((setup.length + slab.fade) / self.step)
        n = self.per_cell * setup.cells_in_span()
        check_memory(
            24.0 * (last - first) * n,
            f"the medium on {last - first} x {n} points",
            "Use a smaller window or a medium of larger scale.",
        )
        mean = setup.medium.mean
        v = slab.rows((np.arange(first, last) + 0.5) * self.step, n)
        v -= mean
        v /= 1.0 - mean
        return first, v

    def bytes_on(self, grid) -> float:
        """Return the bytes that samples and their refitting take on a grid."""
        u = self._sampled[1]
        return u.nbytes + 24.0 * (grid.steps[1] - grid.steps[0]) * max(grid.shape[1], grid.cells * self.per_cell)

    @property
    def lowest(self) -> float:
        """Smallest u."""
        return float(self._sampled[1].min())

    @functools.cached_property
    def rms(self) -> float:
        """Root mean square of u in the slab."""
        return float(np.sqrt(np.mean(self._sampled[1] ** 2)))

    def _embedded(self, grid) -> np.ndarray:
        """Return u on the samples' own points all over a grid's box, 0 beyond the slab."""
        first, u = self._sampled
        whole = np.zeros((grid.steps[1] - grid.steps[0], grid.cells * self.per_cell))
        spare = (whole.shape[1] - u.shape[1]) // 2
        source = slice(max(0, -spare), u.shape[1] - max(0, -spare))
        target = slice(max(0, spare), whole.shape[1] - max(0, spare))
        begin = first - grid.steps[0]
        whole[begin : begin + u.shape[0], target] = u[:, source]
        return whole

    def on(self, grid, dtype) -> np.ndarray:
        """Return u on a grid, shape (nx, ny), band-limited where the grid is coarser than the samples."""
        nx, ny = grid.shape
        across = resampled(self._embedded(grid), ny)
        out = np.empty((nx, ny), dtype)
        for at in range(0, ny, COLUMNS_AT_ONCE):
            some = np.ascontiguousarray(across[:, at : at + COLUMNS_AT_ONCE].T)
            out[:, at : at + COLUMNS_AT_ONCE] = resampled(some, nx).T
        return out

    def lines(self, grid, numbers, axis: int) -> np.ndarray:
        """Return u on lines of a grid, on twice the grid's points along them, shape (line, 2 n).

        Parameters
        ----------
        grid : FullGrid
        numbers : ndarray of int
            Rows (axis 0) or columns (axis 1) of the grid.
        axis : {0, 1}
        """
        whole = self._embedded(grid) if axis == 0 else self._embedded(grid).T
        n, m = grid.shape[axis], whole.shape[0]
        order = np.fft.fftfreq(m, 1.0 / m)
        # the Fourier series of m samples at a grid point: both are centres of equal cells of one box
        turn = np.exp(2j * np.pi * np.multiply.outer((numbers + 0.5) / n - 0.5 / m, order)) / m
        if m % 2 == 0:
            turn[:, m // 2] = 0.0
        weights = scipy.fft.fft(turn, axis=1).real
        return resampled(weights @ whole, 2 * grid.shape[1 - axis])


class FullGrid:
    """The grid of one wavelength and one Bloch phase.

    Along x the box goes from a pad before the face to a pad behind the exit's fade; along y it is the width, or with
    absorbing sides goes from pad to pad behind the fades of the sides. Pads lie in the mean medium, so that what they
    do with a wave is known, and the answer is that of the slab alone in an endless mean medium. Their loss is
    w = 10 (wavelength/thickness) u**3, u the depth in the pad over its thickness of 14 wavelengths.

    Parameters
    ----------
    table : SlabTable
    wavelength : float
        Where v = 0.
    resolution : float
        Grid wavenumber pi/h over k_b sqrt(1 - lowest u) + 8/scale.
    points_per_wavelength : float or None
        Of the mean medium; takes the place of `resolution`.
    bloch : float
        Fields are exp(i bloch y) times a function of the box's period.

    Attributes
    ----------
    k : float
        Wavenumber of the mean medium.
    shape : (int, int)
    pitch : (float, float)
    start : (float, float)
        Lower corner; points are the centres of equal cells.
    span : (float, float)
    edges : (float, float)
        Where the pads along x begin.
    side, pad_y : float
        Where the pads along y begin, and their thickness; width/2 and 0 for periodic sides.
    loss_x, loss_y : ndarrays
        w along x and y.
    qx, qy : ndarrays
        Wavenumbers; those along y with the Bloch phase.
    """

    def __init__(self, table, wavelength: float, *, resolution: float, points_per_wavelength=None, bloch: float = 0.0):
        setup, slab = table.setup, table.slab
        self.setup, self.wavelength, self.bloch = setup, wavelength, bloch
        self.k = 2.0 * np.pi / wavelength * table.index
        own = wavelength / table.index
        pad = PAD_WAVELENGTHS * own
        self.edges = table.start, setup.length + slab.fade
        before, behind = self.edges[0] - pad, self.edges[1] + pad
        self.steps = math.floor(before / table.step), math.ceil(behind / table.step)
        low, high = (number * table.step for number in self.steps)
        absorbs = bool(setup.window.pad)
        self.side = 0.5 * setup.width + (setup.window.fade if absorbs else 0.0)
        spare = math.ceil((setup.window.fade + pad) / setup.cell) if absorbs else 0
        self.cells = setup.y.size + 2 * spare
        self.start = low, -0.5 * setup.width - spare * setup.cell
        self.pad_y = -self.start[1] - self.side
        self.span = high - low, self.cells * setup.cell
        if points_per_wavelength is None:
            largest = self.k * math.sqrt(1.0 - table.lowest) + MEDIUM_WAVENUMBER / setup.medium.scale
            pitch = np.pi / (resolution * largest)
        else:
            pitch = own / points_per_wavelength
        self.shape = tuple(8 * smooth_number(math.ceil(0.125 * span / pitch)) for span in self.span)
        self.pitch = tuple(span / n for span, n in zip(self.span, self.shape, strict=True))
        self.x, self.y = (
            start + (np.arange(n) + 0.5) * h for start, n, h in zip(self.start, self.shape, self.pitch, strict=True)
        )
        self.qx = wavenumbers(self.shape[0], self.span[0])
        self.qy = wavenumbers(self.shape[1], self.span[1]) + bloch
        front, back = self.edges
        self.loss_x = self._loss(front - self.x, front - low) + self._loss(self.x - back, high - back)
        self.loss_y = self._loss(np.abs(self.y) - self.side, self.pad_y) if absorbs else np.zeros_like(self.y)

    def _loss(self, depth, pad: float) -> np.ndarray:
        return PAD_LOSS * 2.0 * np.pi / (self.k * pad) * np.clip(depth / pad, 0.0, 1.0) ** 3
