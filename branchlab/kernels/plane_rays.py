"""The step of full rays in the plane, H = p**2/2 + W(x, y): drift, kick, drift, its exact tangents, the processor.

State arrays are rows of one (rows, ray) block whose number of rays is a multiple of `BLOCK`: 0 x, 1 y, 2 px, 3 py,
4 action, then four rows per tangent d(x, y, px, py), any number of tangents. The action is the integral of
p**2/2 - W; that of p dr is this plus the energy times the time.

W is a biquintic spline: cell (i, j) holds six rows of `CELL` doubles, row a the coefficients of s**a t**0 ... t**5, s and
t the places in the cell along x and y, 0 <= s, t < 1. Along an axis the cells repeat, or (`wraps` false) a place beyond
the ends is looked up at the end.
"""

from math import floor

import numpy as np
from numba import int64, njit, prange

from branchlab.kernels.spline import CELL, quintic_cells

BLOCK = 128
FIXED_ROWS, TANGENT_ROWS = 5, 4
PATCH = 6 * CELL
NEWTON_STEPS = 4
_OPTIONS = {"nogil": True, "cache": True, "error_model": "numpy", "fastmath": {"contract"}}


def biquintic_cells(samples) -> np.ndarray:
    """Return the biquintic spline through samples that are periodic both ways, shape (nx, ny, 6, CELL).

    The interpolation conditions are solved exactly, along y by `quintic_cells`, along x for each of its coefficients.
    """
    rows = quintic_cells(samples)
    nx, ny = samples.shape
    along = np.ascontiguousarray(rows.reshape(nx, -1).T)
    return np.ascontiguousarray(quintic_cells(along).reshape(ny, CELL, nx, CELL)[..., :6].transpose(2, 0, 3, 1))


@njit(inline="always", **_OPTIONS)
def _cell(u, n, wraps):
    """Return the number of the cell, and the place in it, of a coordinate in cells."""
    if wraps:
        whole = floor(u)
        number = int64(whole) % n
        return number, u - whole
    u = min(max(u, 0.0), n - 1.0)  # not beyond the last sample: the cell behind it leads back to the first
    whole = min(floor(u), n - 2.0)
    return int64(whole), u - whole


@njit(inline="always", **_OPTIONS)
def _row(table, at, t):
    """Return a polynomial row: value, first and second derivative."""
    c0, c1, c2, c3, c4, c5 = table[at], table[at + 1], table[at + 2], table[at + 3], table[at + 4], table[at + 5]
    value = c0 + t * (c1 + t * (c2 + t * (c3 + t * (c4 + t * c5))))
    first = c1 + t * (2.0 * c2 + t * (3.0 * c3 + t * (4.0 * c4 + t * 5.0 * c5)))
    second = 2.0 * c2 + t * (6.0 * c3 + t * (12.0 * c4 + t * 20.0 * c5))
    return value, first, second


@njit(**_OPTIONS)
def _row_third(table, at, t):
    """Return the third derivative of a polynomial row."""
    return 6.0 * table[at + 3] + t * (24.0 * table[at + 4] + t * 60.0 * table[at + 5])


@njit(**_OPTIONS)
def _sum(s, a0, a1, a2, a3, a4, a5):
    """Return the value of a0 + a1 s + ... + a5 s**5."""
    return a0 + s * (a1 + s * (a2 + s * (a3 + s * (a4 + s * a5))))


@njit(**_OPTIONS)
def _sum_first(s, a1, a2, a3, a4, a5):
    """Return its derivative."""
    return a1 + s * (2.0 * a2 + s * (3.0 * a3 + s * (4.0 * a4 + s * 5.0 * a5)))


@njit(**_OPTIONS)
def _sum_second(s, a2, a3, a4, a5):
    """Return its second derivative."""
    return 2.0 * a2 + s * (6.0 * a3 + s * (12.0 * a4 + s * 20.0 * a5))


@njit(inline="always", **_OPTIONS)
def _patch(x, y, grid, box):
    """Return where the patch of a place begins, and the place in it."""
    nx, ny, wraps_x, wraps_y = grid
    start_x, start_y, inverse_x, inverse_y = box
    i, s = _cell((x - start_x) * inverse_x, nx, wraps_x)
    j, t = _cell((y - start_y) * inverse_y, ny, wraps_y)
    return (i * ny + j) * PATCH, s, t


@njit(**_OPTIONS)
def potential(x, y, table, grid, box):
    """Return W, W_x, W_y, W_xx, W_xy, W_yy at a place.

    Parameters
    ----------
    x, y : float
    table : ndarray, shape (nx * ny * PATCH,)
    grid : (int, int, bool, bool)
        Cells along x and y, and whether they repeat.
    box : (float, float, float, float)
        Position of cell (0, 0) along x and y, one over the pitch along x and y.
    """
    at, s, t = _patch(x, y, grid, box)
    v0, d0, e0 = _row(table, at, t)
    v1, d1, e1 = _row(table, at + CELL, t)
    v2, d2, e2 = _row(table, at + 2 * CELL, t)
    v3, d3, e3 = _row(table, at + 3 * CELL, t)
    v4, d4, e4 = _row(table, at + 4 * CELL, t)
    v5, d5, e5 = _row(table, at + 5 * CELL, t)
    ix, iy = box[2], box[3]
    return (
        _sum(s, v0, v1, v2, v3, v4, v5),
        _sum_first(s, v1, v2, v3, v4, v5) * ix,
        _sum(s, d0, d1, d2, d3, d4, d5) * iy,
        _sum_second(s, v2, v3, v4, v5) * (ix * ix),
        _sum_first(s, d1, d2, d3, d4, d5) * (ix * iy),
        _sum(s, e0, e1, e2, e3, e4, e5) * (iy * iy),
    )


@njit(**_OPTIONS)
def _thirds(x, y, table, grid, box):
    """Return W_xxx, W_xxy, W_xyy, W_yyy at a place."""
    at, s, t = _patch(x, y, grid, box)
    v3, d3, _ = _row(table, at + 3 * CELL, t)
    v4, d4, _ = _row(table, at + 4 * CELL, t)
    v5, d5, _ = _row(table, at + 5 * CELL, t)
    _, d2, _ = _row(table, at + 2 * CELL, t)
    _, _, e1 = _row(table, at + CELL, t)
    _, _, e2 = _row(table, at + 2 * CELL, t)
    _, _, e3 = _row(table, at + 3 * CELL, t)
    _, _, e4 = _row(table, at + 4 * CELL, t)
    _, _, e5 = _row(table, at + 5 * CELL, t)
    f0, f1, f2 = _row_third(table, at, t), _row_third(table, at + CELL, t), _row_third(table, at + 2 * CELL, t)
    f3, f4 = _row_third(table, at + 3 * CELL, t), _row_third(table, at + 4 * CELL, t)
    f5 = _row_third(table, at + 5 * CELL, t)
    ix, iy = box[2], box[3]
    return (
        (6.0 * v3 + s * (24.0 * v4 + s * 60.0 * v5)) * (ix * ix * ix),
        _sum_second(s, d2, d3, d4, d5) * (ix * ix * iy),
        _sum_first(s, e1, e2, e3, e4, e5) * (ix * iy * iy),
        _sum(s, f0, f1, f2, f3, f4, f5) * (iy * iy * iy),
    )


@njit(parallel=True, **_OPTIONS)
def march_plane(state, table, grid, box, step, steps):
    """Take rays through a number of steps, in place: half a drift, kicks and drifts in turn, half a drift.

    Parameters
    ----------
    state : ndarray, shape (rows, ray)
        In the coordinates of the kernel map (`to_kernel`).
    table, grid, box :
        The spline of the kicks (see `potential`).
    step : float
    steps : int
    """
    tangents = (state.shape[0] - FIXED_ROWS) // TANGENT_ROWS
    for block in prange(state.shape[1] // BLOCK):
        begin, end = block * BLOCK, (block + 1) * BLOCK
        for n in range(steps + 1):
            drift = step if 0 < n < steps else 0.5 * step
            kick = step if n < steps else 0.0
            for i in range(begin, end):
                px, py = state[2, i], state[3, i]
                x, y = state[0, i] + drift * px, state[1, i] + drift * py
                action = state[4, i] + 0.5 * drift * (px * px + py * py)
                state[0, i], state[1, i] = x, y
                if n == steps:
                    state[4, i] = action
                    for row in range(FIXED_ROWS, FIXED_ROWS + TANGENT_ROWS * tangents, TANGENT_ROWS):
                        state[row, i] += drift * state[row + 2, i]
                        state[row + 1, i] += drift * state[row + 3, i]
                    continue
                w, w_x, w_y, w_xx, w_xy, w_yy = potential(x, y, table, grid, box)
                state[2, i], state[3, i] = px - kick * w_x, py - kick * w_y
                state[4, i] = action - kick * w
                for row in range(FIXED_ROWS, FIXED_ROWS + TANGENT_ROWS * tangents, TANGENT_ROWS):
                    dx = state[row, i] + drift * state[row + 2, i]
                    dy = state[row + 1, i] + drift * state[row + 3, i]
                    state[row, i], state[row + 1, i] = dx, dy
                    state[row + 2, i] -= kick * (w_xx * dx + w_xy * dy)
                    state[row + 3, i] -= kick * (w_xy * dx + w_yy * dy)


@njit(**_OPTIONS)
def _sheared(x, y, px, py, dx, dy, table, grid, box, strength):
    """Return strength * (third derivatives of W applied to a tangent and to the true momentum), two numbers."""
    w_xxx, w_xxy, w_xyy, w_yyy = _thirds(x, y, table, grid, box)
    xx, xy, yy = w_xxx * dx + w_xxy * dy, w_xxy * dx + w_xyy * dy, w_xyy * dx + w_yyy * dy
    return strength * (xx * px + xy * py), strength * (xy * px + yy * py)


@njit(parallel=True, **_OPTIONS)
def to_true(state, table, grid, box, strength):
    """Turn coordinates of the kernel map into true ones, in place.

    The lift of r -> R = r + c grad W, p -> (dR/dr)**-1 p, c = `strength` = step**2/24: exactly symplectic, and the
    action stays, for p dr does. On both ends of a march it makes the second-order kernel a fourth-order map.
    """
    for block in prange(state.shape[1] // BLOCK):
        for i in range(block * BLOCK, (block + 1) * BLOCK):
            x, y = state[0, i], state[1, i]
            _, w_x, w_y, w_xx, w_xy, w_yy = potential(x, y, table, grid, box)
            jxx, jxy, jyy = 1.0 + strength * w_xx, strength * w_xy, 1.0 + strength * w_yy
            det = jxx * jyy - jxy * jxy
            px = (jyy * state[2, i] - jxy * state[3, i]) / det
            py = (jxx * state[3, i] - jxy * state[2, i]) / det
            state[0, i], state[1, i] = x + strength * w_x, y + strength * w_y
            state[2, i], state[3, i] = px, py
            for row in range(FIXED_ROWS, state.shape[0], TANGENT_ROWS):
                dx, dy = state[row, i], state[row + 1, i]
                sx, sy = _sheared(x, y, px, py, dx, dy, table, grid, box, strength)
                ax, ay = state[row + 2, i] - sx, state[row + 3, i] - sy
                state[row, i], state[row + 1, i] = jxx * dx + jxy * dy, jxy * dx + jyy * dy
                state[row + 2, i] = (jyy * ax - jxy * ay) / det
                state[row + 3, i] = (jxx * ay - jxy * ax) / det


@njit(parallel=True, **_OPTIONS)
def to_kernel(state, table, grid, box, strength):
    """Turn true coordinates into those of the kernel map, in place: the inverse of `to_true` to round-off."""
    for block in prange(state.shape[1] // BLOCK):
        for i in range(block * BLOCK, (block + 1) * BLOCK):
            true_x, true_y, px, py = state[0, i], state[1, i], state[2, i], state[3, i]
            x, y = true_x, true_y
            for _ in range(NEWTON_STEPS):
                _, w_x, w_y, w_xx, w_xy, w_yy = potential(x, y, table, grid, box)
                jxx, jxy, jyy = 1.0 + strength * w_xx, strength * w_xy, 1.0 + strength * w_yy
                det = jxx * jyy - jxy * jxy
                off_x, off_y = x + strength * w_x - true_x, y + strength * w_y - true_y
                x, y = x - (jyy * off_x - jxy * off_y) / det, y - (jxx * off_y - jxy * off_x) / det
            _, w_x, w_y, w_xx, w_xy, w_yy = potential(x, y, table, grid, box)
            jxx, jxy, jyy = 1.0 + strength * w_xx, strength * w_xy, 1.0 + strength * w_yy
            det = jxx * jyy - jxy * jxy
            state[0, i], state[1, i] = x, y
            state[2, i], state[3, i] = jxx * px + jxy * py, jxy * px + jyy * py
            for row in range(FIXED_ROWS, state.shape[0], TANGENT_ROWS):
                tx, ty, ax, ay = state[row, i], state[row + 1, i], state[row + 2, i], state[row + 3, i]
                dx, dy = (jyy * tx - jxy * ty) / det, (jxx * ty - jxy * tx) / det
                sx, sy = _sheared(x, y, px, py, dx, dy, table, grid, box, strength)
                state[row, i], state[row + 1, i] = dx, dy
                state[row + 2, i] = jxx * ax + jxy * ay + sx
                state[row + 3, i] = jxy * ax + jyy * ay + sy


@njit(parallel=True, **_OPTIONS)
def potentials(x, y, table, grid, box):
    """Return W at many places (see `potential`), shape (place,)."""
    out = np.empty(x.size)
    for i in prange(x.size):
        out[i] = potential(x[i], y[i], table, grid, box)[0]
    return out
