"""The box in x and y in which packets and full rays move: the medium smooth there, and constant beyond its ends."""

import functools
import math

import numpy as np

from branchlab.launch.setup import FADE_SCALES, PAD_SCALES, PAD_SHARE, Setup
from branchlab.launch.window import smooth_step

ROWS_AT_ONCE = 256


class Plane:
    """The window of a setup with a pad before x = 0 and one behind x = length.

    Across, it is the setup's `Window`. Along, v is the medium's own inside 0 <= x <= length; beyond either end it is
    led to the medium's mean over `fade` by the smooth step that the window's sides use, and is the mean from there on.
    Where the medium is not defined beyond an end, it is continued by its point reflection there, 2 v(end) - v(mirrored
    x), which keeps v and v_x continuous. The box is thus periodic both ways. The absorber of a wave lies in the pads:
    it begins at x = 0, at x = length and, with absorbing sides, at abs(y) = width/2.

    Parameters
    ----------
    setup : Setup

    Attributes
    ----------
    pad, fade : float
        Along x: thickness of a pad (whole cells), and length over which v is led to its mean.
    cell : float
        Length of a cell along x; across, it is the setup's.
    cells : (int, int)
        Cells of the window 0 <= x <= length, abs(y) <= width/2.
    start, span : (float, float)
        Lower corner and sides of the box.
    """

    def __init__(self, setup: Setup):
        self.setup, self.window = setup, setup.window
        scale = min(setup.medium.scale, 0.25 * setup.length)
        along = math.ceil(setup.length / setup.cell - 1e-9)
        self.cell = setup.length / along
        self.cells = along, setup.y.size
        thinnest = max(PAD_SHARE * setup.length, PAD_SCALES * scale)
        self.pad = math.ceil(thinnest / self.cell) * self.cell
        self.fade = min(FADE_SCALES * scale, 0.5 * self.pad)
        self.start = -self.pad, self.window.start
        self.span = setup.length + 2.0 * self.pad, self.window.span

    @property
    def cells_in_span(self) -> tuple[int, int]:
        """How many cells the box is divided into, pads included."""
        return self.cells[0] + 2 * round(self.pad / self.cell), self.setup.cells_in_span()

    @functools.cached_property
    def x(self) -> np.ndarray:
        """Centres of the cells along x."""
        return (np.arange(self.cells[0]) + 0.5) * self.cell

    @property
    def finest(self) -> float:
        """Length whose eighth resolves the medium and the fades."""
        fades = [self.fade] + ([self.window.fade] if self.window.fade else [])
        return min(self.setup.medium.scale, min(fades) / FADE_SCALES)

    @property
    def finest_across(self) -> float:
        """The same for the medium along y alone."""
        scale = self.setup.medium.scale
        return min(scale, self.window.fade / FADE_SCALES) if self.window.fade else scale

    def points(self, shape) -> tuple[np.ndarray, np.ndarray]:
        """Return x and y of the centres of equal cells, `shape` of them, that fill the box."""
        return tuple(
            start + (np.arange(n) + 0.5) * (span / n)
            for n, start, span in zip(shape, self.start, self.span, strict=True)
        )

    def rows(self, x, n: int) -> np.ndarray:
        """Return v at any x and the n points of the box across, shape (x, n)."""
        x = np.asarray(x, dtype=np.float64)
        mean = self.setup.medium.mean
        present = self.present(x)
        v = np.full((x.size, n), mean)
        near = np.flatnonzero(present)
        first, last = self.setup.medium.extent[:2]
        for at in range(0, near.size, ROWS_AT_ONCE):
            some = near[at : at + ROWS_AT_ONCE]
            inner = np.where(x[some] < first, 2.0 * first - x[some], x[some])
            inner = np.where(x[some] > last, 2.0 * last - x[some], inner)
            values = self.window.rows(inner, n)
            for end, outside in ((first, x[some] < first), (last, x[some] > last)):
                if outside.any():
                    values[outside] = 2.0 * self.window.rows([end], n) - values[outside]
            v[some] += present[some, None] * (values - mean)
        return v

    def present(self, x) -> np.ndarray:
        """Return how much of the medium is there at x: 1 in the window, 0 beyond the fades."""
        return 1.0 - smooth_step(np.maximum(-x, x - self.setup.length) / self.fade)

    def sample(self, shape) -> np.ndarray:
        """Return v at the points of the box."""
        x, _ = self.points(shape)
        return self.rows(x, shape[1])

    def absorber(self, shape) -> tuple[np.ndarray, np.ndarray]:
        """Return the shapes of the absorber along x and along y, 0 inside the window, rising smoothly to 1."""
        x, y = self.points(shape)
        half = 0.5 * self.setup.length
        return smooth_step((np.abs(x - half) - half) / self.pad), self.window.absorber(y)

    def inside(self, x, y) -> np.ndarray:
        """Return which places lie in the window; y is taken modulo the width where the sides are periodic."""
        within = (x >= 0.0) & (x <= self.setup.length)
        return within if not self.window.pad else within & (np.abs(y) <= 0.5 * self.setup.width)

    def about(self, y, centre: float) -> np.ndarray:
        """Return y, or with periodic sides the image of y that lies nearest to `centre`."""
        if self.window.pad:
            return y
        return centre + np.remainder(y - centre + 0.5 * self.span[1], self.span[1]) - 0.5 * self.span[1]
