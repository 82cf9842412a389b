"""The medium as full rays see it: one biquintic spline over the box in x and y."""

import math

import numpy as np

from branchlab.errors import check_memory
from branchlab.kernels.plane_rays import PATCH, biquintic_cells
from branchlab.launch.plane import Plane
from branchlab.launch.setup import smooth_number
from branchlab.rays.table import POINTS_PER_SCALE


def _slope(v, span: float) -> np.ndarray:
    """Return the derivative of periodic rows along the last axis, spectrally."""
    n = v.shape[-1]
    q = 2.0 * np.pi * np.fft.rfftfreq(n, span / n)
    q[-1] = 0.0 if n % 2 == 0 else q[-1]
    return np.fft.irfft(1j * q * np.fft.rfft(v, axis=-1), n=n, axis=-1)


class PlaneTable:
    """Spline table of W~ = W - (step**2/24) (grad W)**2, W = v/2, for one step length (Takahashi & Imada 1984).

    The processor uses the same table: that differs from W by O(step**2), and the map by O(step**4), which it is right to.

    Parameters
    ----------
    plane : Plane
    step : float
    points_per_scale : int
        Density of the spline grid.

    Attributes
    ----------
    step, strength : float
        strength = step**2/24, of the gradient correction and the processor.
    flat : ndarray
        The cells as one row, as the kernels read them.
    grid, box : tuple
        See `kernels.plane_rays.potential`.
    """

    def __init__(self, plane: Plane, step: float, points_per_scale: int = POINTS_PER_SCALE):
        finest = plane.finest, plane.finest_across
        shape = tuple(
            smooth_number(math.ceil(points_per_scale * span / fine))
            for span, fine in zip(plane.span, finest, strict=True)
        )
        check_memory(
            8.0 * 6 * PATCH * shape[0] * shape[1],
            f"the rays' spline of {shape[0]} x {shape[1]} cells",
            "Use a smaller window, or a medium with a larger scale.",
        )
        self.step, self.strength = step, step**2 / 24.0
        w = 0.5 * plane.sample(shape)
        slope_x, slope_y = _slope(np.ascontiguousarray(w.T), plane.span[0]).T, _slope(w, plane.span[1])
        self.flat = biquintic_cells(w - self.strength * (slope_x**2 + slope_y**2)).reshape(-1)
        x, y = plane.points(shape)
        self.grid = (*shape, False, not plane.window.pad)
        self.box = (float(x[0]), float(y[0]), shape[0] / plane.span[0], shape[1] / plane.span[1])
