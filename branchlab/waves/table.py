"""The medium as the paraxial wave sees it: one phase screen per step, and what the processor needs at the screens."""

import functools
import math

import numpy as np

from branchlab.kernels.fourier import periodic_derivative, resampled
from branchlab.launch.setup import smooth_number

MEDIUM_POINTS = 32  # per medium scale: they carry its spectrum to 1e-8 in the taper at the sides, 1e-10 inside
ROWS_AT_ONCE = 256
KEPT_BYTES = 1 << 29  # screens are kept for the next march if they take no more than this


class ScreenTable:
    """Phase screens of one setup, for one grid and one step length; one table serves all wavelengths and parts.

    Parameters
    ----------
    setup : Setup
    n : int
        Transverse points of the box.
    steps_per_screen : int

    Attributes
    ----------
    step : float
    """

    def __init__(self, setup, n: int, steps_per_screen: int):
        self.setup, self.n, self.steps_per_screen = setup, n, steps_per_screen
        self.steps = steps_per_screen * (setup.x.size - 1)
        self.step = setup.length / self.steps
        self.span = setup.window.span
        self.medium_points = min(n, smooth_number(math.ceil(MEDIUM_POINTS * self.span / setup.medium.scale)))
        self._kept, self._along = {}, {}

    def _rows(self, x, *, dx: int = 0) -> np.ndarray:
        """Return v (or its x-derivative) at x and the n points, through a grid that is as fine as v needs."""
        return resampled(self.setup.window.rows(x, self.medium_points, dx=dx), self.n)

    @property
    def screens_at_once(self) -> int:
        """How many screens' worth of steps one call of `paths` should give."""
        return max(1, ROWS_AT_ONCE // self.steps_per_screen)

    def paths(self, first: int, last: int) -> np.ndarray:
        """Return v/2 - (step**2/96) v_y**2 at the middles of the steps between two screens, shape (step, n)."""
        key = first, last
        if key in self._kept:
            return self._kept[key]
        per = self.steps_per_screen
        v = self._rows((np.arange(first * per, last * per) + 0.5) * self.step)
        paths = 0.5 * v - (self.step**2 / 96.0) * periodic_derivative(v, self.span) ** 2
        if 8 * self.n * self.steps <= KEPT_BYTES:
            self._kept[key] = paths
        return paths

    @functools.cached_property
    def _at_screens(self) -> tuple[np.ndarray, np.ndarray]:
        v = self._rows(self.setup.x)
        return tuple(periodic_derivative(v, self.span, order) for order in (1, 2))

    def across(self, screen: int) -> np.ndarray:
        """Return v_y on a screen, shape (n,)."""
        return self._at_screens[0][screen]

    def bend(self, screen: int) -> np.ndarray:
        """Return v_yy on a screen, shape (n,)."""
        return self._at_screens[1][screen]

    def along(self, screen: int) -> np.ndarray:
        """Return v_x on a screen, shape (n,)."""
        if screen not in self._along:
            self._along[screen] = self._rows(self.setup.x[[screen]], dx=1)[0]
        return self._along[screen]
