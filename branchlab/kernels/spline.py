"""Periodic quintic splines in polynomial form: the tables that ray steps look up."""

import math

import numpy as np
from numba import njit

CELL = 8


@njit(nogil=True, cache=True, error_model="numpy")
def _polynomials(weights, cells):
    """Turn B-spline weights, shape (rows, n + 5), two of them before the first cell, into cells (rows, n, CELL)."""
    for row in range(cells.shape[0]):
        for j in range(cells.shape[1]):
            w0, w1, w2 = weights[row, j], weights[row, j + 1], weights[row, j + 2]
            w3, w4, w5 = weights[row, j + 3], weights[row, j + 4], weights[row, j + 5]
            cells[row, j, 0] = (w0 + w4 + 26.0 * (w1 + w3) + 66.0 * w2) / 120.0
            cells[row, j, 1] = (w4 - w0 + 10.0 * (w3 - w1)) / 24.0
            cells[row, j, 2] = (w0 + w4 + 2.0 * (w1 + w3) - 6.0 * w2) / 12.0
            cells[row, j, 3] = (w4 - w0 - 2.0 * (w3 - w1)) / 12.0
            cells[row, j, 4] = (w0 + w4 - 4.0 * (w1 + w3) + 6.0 * w2) / 24.0
            cells[row, j, 5] = (w5 - w0 + 5.0 * (w1 - w4) + 10.0 * (w3 - w2)) / 120.0
            cells[row, j, 6] = cells[row, j, 7] = 0.0


def empty_cells(*shape) -> np.ndarray:
    """Return room for cells, shape (*shape, CELL), each on its own cache line."""
    size = math.prod(shape) * CELL
    room = np.empty(size + CELL)
    first = -(room.__array_interface__["data"][0] // room.itemsize) % CELL
    return room[first : first + size].reshape(*shape, CELL)


def quintic_cells(samples, out=None) -> np.ndarray:
    """Return the quintic spline through periodic samples, as polynomials on cells.

    Parameters
    ----------
    samples : ndarray, shape (rows, n)
        Equidistant values over one period.
    out : ndarray, shape (rows, n, CELL), optional
        Where to put the cells.

    Returns
    -------
    ndarray, shape (rows, n, CELL)
        Coefficients of t**0 ... t**5 between sample j (t = 0) and j + 1 (t = 1), and two zeros of padding. The
        interpolation conditions are solved exactly, by dividing the transform by the B-spline's
        (66 + 52 cos w + 2 cos 2w)/120.
    """
    n = samples.shape[-1]
    w = 2.0 * np.pi * np.arange(n // 2 + 1) / n
    gain = (66.0 + 52.0 * np.cos(w) + 2.0 * np.cos(2.0 * w)) / 120.0
    weights = np.fft.irfft(np.fft.rfft(samples, axis=-1) / gain, n=n, axis=-1)
    out = empty_cells(*samples.shape) if out is None else out
    _polynomials(np.concatenate([weights[:, -2:], weights, weights[:, :3]], axis=1), out)
    return out
