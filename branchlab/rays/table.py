"""The medium as paraxial rays see it: spline rows at the middle of every step and at every screen."""

import math

import numpy as np

from branchlab.errors import RangeError, check_memory
from branchlab.kernels.spline import CELL, empty_cells, quintic_cells

POINTS_PER_SCALE = 8  # quintic splines this dense: relative rms errors 2.5e-7, 3.6e-6, 6.9e-5 of v, v_y, v_yy
STEPS_PER_SCALE = 4
FADE_SCALES = 3.0  # a seam or taper of the window is as smooth as a medium of a third of its length
ROWS_AT_ONCE = 256


def _slope(rows, span: float) -> np.ndarray:
    """Return the y-derivative of periodic rows, spectrally."""
    n = rows.shape[-1]
    q = 2.0 * np.pi * np.fft.rfftfreq(n, span / n)
    q[-1] = 0.0 if n % 2 == 0 else q[-1]
    return np.fft.irfft(1j * q * np.fft.rfft(rows, axis=-1), n=n, axis=-1)


def _refuse_walls(v, x, y) -> None:
    """Raise `RangeError` with the place if v reaches 1."""
    if v.max() >= 1.0:
        i, j = np.unravel_index(np.argmax(v), v.shape)
        raise RangeError(
            f"v = {v[i, j]:.3g} at x = {x[i]:.4g}, y = {y[j]:.4g}; rays exist only where v < 1 (v = 1 - n**2: the "
            "index is imaginary beyond). Reduce the medium's strength, or choose a window that leaves the place out."
        )


class KickTable:
    """Spline tables of one setup, for one step length.

    Parameters
    ----------
    setup : Setup
    steps_per_screen : int
        Equal steps between two screens.
    points_per_scale : int
        Density of the spline grid.

    Attributes
    ----------
    step : float
    strength : float
        step**2/24: of the gradient correction and the processor.
    start, inverse, cells :
        Position of cell 0, one over the pitch, cells of a row (a power of 2).
    kicks : ndarray, shape (steps, cells * CELL)
        W~ = W - (step**2/24) W_y**2 at the middle of the steps, W = v/2 (Takahashi & Imada, J. Phys. Soc. Jpn.
        53 (1984) 3765; Rowlands, J. Comput. Phys. 97 (1991) 235).
    potential, gradient : ndarray, shape (screens, cells * CELL)
        W and W_x at the screens, for the processor.

    Raises
    ------
    RangeError
        v >= 1 somewhere in the window: no ray can go there.
    """

    def __init__(self, setup, steps_per_screen: int, points_per_scale: int = POINTS_PER_SCALE):
        window, screens = setup.window, setup.x
        steps = steps_per_screen * (screens.size - 1)
        finest = min(setup.medium.scale, window.fade / FADE_SCALES) if window.fade else setup.medium.scale
        n = 1 << max(5, math.ceil(math.log2(points_per_scale * window.span / finest)))
        check_memory(
            8.0 * CELL * n * (steps + 2 * screens.size),
            f"the rays' table of {steps} steps and {n} points",
            "Use a smaller window, or a medium with a larger scale.",
        )
        self.steps_per_screen = steps_per_screen
        self.step = setup.length / steps
        self.strength = self.step**2 / 24.0
        self.cells, self.inverse = n, n / window.span
        self.start = window.points(n)[0]
        cells = empty_cells(steps, n)
        middles = (np.arange(steps) + 0.5) * self.step
        inside = np.abs(window.points(n)) <= 0.5 * setup.width
        for at in range(0, steps, ROWS_AT_ONCE):
            v = window.rows(middles[at : at + ROWS_AT_ONCE], n)
            _refuse_walls(v[:, inside], middles[at : at + ROWS_AT_ONCE], window.points(n)[inside])
            corrected = 0.5 * v - self.strength * (0.5 * _slope(v, window.span)) ** 2
            quintic_cells(corrected, cells[at : at + ROWS_AT_ONCE])
        self.kicks = cells.reshape(steps, -1)
        self.potential = quintic_cells(0.5 * window.rows(screens, n)).reshape(screens.size, -1)
        self.gradient = quintic_cells(0.5 * window.rows(screens, n, dx=1)).reshape(screens.size, -1)

    @property
    def flat(self) -> np.ndarray:
        """The kicks as one row, as the kernels read them."""
        return self.kicks.reshape(-1)
