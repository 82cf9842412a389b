"""Periodic quintic splines in polynomial form: the tables that ray steps look up."""

import numpy as np

CELL = 8

# rows: power of t; columns: coefficients of the B-splines at offsets -2 ... 3
_QUINTIC = (
    np.array(
        [
            [1, 26, 66, 26, 1, 0],
            [-5, -50, 0, 50, 5, 0],
            [10, 20, -60, 20, 10, 0],
            [-10, 20, 0, -20, 10, 0],
            [5, -20, 30, -20, 5, 0],
            [-1, 5, -10, 10, -5, 1],
        ],
        dtype=np.float64,
    )
    / 120.0
)


def quintic_cells(samples) -> np.ndarray:
    """Return the quintic spline through periodic samples, as polynomials on cells.

    Parameters
    ----------
    samples : ndarray, shape (rows, n)
        Equidistant values over one period.

    Returns
    -------
    ndarray, shape (rows, n, 8)
        Coefficients of t**0 ... t**5 between sample j (t = 0) and j + 1 (t = 1), and two zeros of padding. The
        interpolation conditions are solved exactly, by dividing the transform by the B-spline's
        (66 + 52 cos w + 2 cos 2w)/120.
    """
    n = samples.shape[-1]
    w = 2.0 * np.pi * np.arange(n // 2 + 1) / n
    gain = (66.0 + 52.0 * np.cos(w) + 2.0 * np.cos(2.0 * w)) / 120.0
    weights = np.fft.irfft(np.fft.rfft(samples, axis=-1) / gain, n=n, axis=-1)
    shifted = np.stack([np.roll(weights, 2 - m, axis=-1) for m in range(6)], axis=-1)
    cells = np.zeros((*samples.shape, CELL))
    cells[..., :6] = shifted @ _QUINTIC.T
    return cells
