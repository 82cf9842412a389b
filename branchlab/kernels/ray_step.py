"""The paraxial ray step: one drift, one kick, its exact tangent, and the processor that makes it fourth order.

State arrays are rows of one (rows, ray) block whose number of rays is a multiple of `BLOCK`:
0 y, 1 p, 2 action, 3 A, 4 C, 5 maslov, and for the full matrix 6 B, 7 D. (A, C) is one tangent d(y, p), the
front's or the first column of the stability matrix; (B, D) is the second column.

Potentials W are quintic splines in y, one per kick: cell j holds the six coefficients of a polynomial in
t = (y - start)/pitch - j, 0 <= t < 1, and two doubles of padding. Cells repeat with their number, a power of 2.
"""

import numpy as np
from numba import int64, njit, prange

from branchlab.kernels.lanes import get, look_up, put
from branchlab.kernels.spline import CELL

BLOCK = 256
FRONT_ROWS, MATRIX_ROWS = 6, 8
_OPTIONS = {"nogil": True, "cache": True, "error_model": "numpy", "fastmath": {"contract"}}
_NEWTON_STEPS = 6  # y -> y + c W' is a step of 1e-3 of a cell: each Newton step squares the error


@njit(**_OPTIONS)
def _advance_front(y_, p_, s_, a_, c_, m_, table, base, drift, kick, start, inverse, mask):
    """Drift, then kick, one block of rays with one tangent."""
    kick_p = kick * inverse
    kick_c = kick_p * inverse
    for i in range(BLOCK):
        p = get(p_, i)
        y = get(y_, i) + drift * p
        c = get(c_, i)
        before = get(a_, i)
        a = before + drift * c
        u = (y - start) * inverse
        floor = np.floor(u)
        t = u - floor
        j = base + CELL * (int64(floor) & mask)
        w0 = look_up(table, j)
        w1 = look_up(table, j + 1)
        w2 = look_up(table, j + 2)
        w3 = look_up(table, j + 3)
        w4 = look_up(table, j + 4)
        w5 = look_up(table, j + 5)
        value = w0 + t * (w1 + t * (w2 + t * (w3 + t * (w4 + t * w5))))
        slope = w1 + t * (2.0 * w2 + t * (3.0 * w3 + t * (4.0 * w4 + t * 5.0 * w5)))
        bend = 2.0 * w2 + t * (6.0 * w3 + t * (12.0 * w4 + t * 20.0 * w5))
        put(m_, i, get(m_, i) + (1.0 if a * before < 0.0 else 0.0))
        put(s_, i, get(s_, i) + 0.5 * drift * p * p - kick * value)
        put(y_, i, y)
        put(p_, i, p - kick_p * slope)
        put(a_, i, a)
        put(c_, i, c - kick_c * bend * a)


@njit(**_OPTIONS)
def _advance_matrix(y_, p_, s_, a_, c_, m_, b_, d_, table, base, drift, kick, start, inverse, mask):
    """Drift, then kick, one block of rays with both tangents."""
    kick_p = kick * inverse
    kick_c = kick_p * inverse
    for i in range(BLOCK):
        p = get(p_, i)
        y = get(y_, i) + drift * p
        c = get(c_, i)
        d = get(d_, i)
        before = get(a_, i)
        a = before + drift * c
        b = get(b_, i) + drift * d
        u = (y - start) * inverse
        floor = np.floor(u)
        t = u - floor
        j = base + CELL * (int64(floor) & mask)
        w0 = look_up(table, j)
        w1 = look_up(table, j + 1)
        w2 = look_up(table, j + 2)
        w3 = look_up(table, j + 3)
        w4 = look_up(table, j + 4)
        w5 = look_up(table, j + 5)
        value = w0 + t * (w1 + t * (w2 + t * (w3 + t * (w4 + t * w5))))
        slope = w1 + t * (2.0 * w2 + t * (3.0 * w3 + t * (4.0 * w4 + t * 5.0 * w5)))
        bend = 2.0 * w2 + t * (6.0 * w3 + t * (12.0 * w4 + t * 20.0 * w5))
        put(m_, i, get(m_, i) + (1.0 if a * before < 0.0 else 0.0))
        put(s_, i, get(s_, i) + 0.5 * drift * p * p - kick * value)
        put(y_, i, y)
        put(p_, i, p - kick_p * slope)
        put(a_, i, a)
        put(b_, i, b)
        put(c_, i, c - kick_c * bend * a)
        put(d_, i, d - kick_c * bend * b)


@njit(**_OPTIONS)
def _march_block(state, begin, table, cells, start, inverse, step, first, last):
    """March the block of rays that begins at `begin`."""
    mask = cells - 1
    half = 0.5 * step
    both = state.shape[0] == MATRIX_ROWS
    end = begin + BLOCK
    y, p, s = state[0, begin:end], state[1, begin:end], state[2, begin:end]
    a, c, m = state[3, begin:end], state[4, begin:end], state[5, begin:end]
    for n in range(first, last):
        drift = half if n == first else step
        base = n * cells * CELL
        if both:
            b, d = state[6, begin:end], state[7, begin:end]
            _advance_matrix(y, p, s, a, c, m, b, d, table, base, drift, step, start, inverse, mask)
        else:
            _advance_front(y, p, s, a, c, m, table, base, drift, step, start, inverse, mask)
    for i in range(BLOCK):
        before = a[i]
        a[i] = before + half * c[i]
        m[i] += 1.0 if a[i] * before < 0.0 else 0.0
        y[i] += half * p[i]
        s[i] += 0.5 * half * p[i] * p[i]
    if both:
        for i in range(begin, end):
            state[6, i] += half * state[7, i]


@njit(**_OPTIONS)
def _spline(table, base, y, start, inverse, mask):
    """Return W, W', W'', W''' of the spline row that begins at `base`."""
    u = (y - start) * inverse
    floor = np.floor(u)
    t = u - floor
    j = base + CELL * (int64(floor) & mask)
    w0, w1, w2, w3, w4, w5 = table[j], table[j + 1], table[j + 2], table[j + 3], table[j + 4], table[j + 5]
    value = w0 + t * (w1 + t * (w2 + t * (w3 + t * (w4 + t * w5))))
    first = w1 + t * (2.0 * w2 + t * (3.0 * w3 + t * (4.0 * w4 + t * 5.0 * w5)))
    second = 2.0 * w2 + t * (6.0 * w3 + t * (12.0 * w4 + t * 20.0 * w5))
    third = 6.0 * w3 + t * (24.0 * w4 + t * 60.0 * w5)
    return value, first * inverse, second * inverse * inverse, third * inverse * inverse * inverse


@njit(**_OPTIONS)
def _to_true_ray(state, i, potential, gradient, start, inverse, mask, strength):
    """Turn ray i from coordinates of the kernel map into true ones."""
    y, p = state[0, i], state[1, i]
    value, first, second, _ = _spline(gradient, 0, y, start, inverse, mask)
    p -= strength * first
    turn = strength * second
    _, slope, bend, third = _spline(potential, 0, y, start, inverse, mask)
    stretch = 1.0 + strength * bend
    shear = p * strength * third / (stretch * stretch)
    state[0, i] = y + strength * slope
    state[1, i] = p / stretch
    state[2, i] -= strength * value
    a, c = state[3, i], state[4, i]
    state[3, i] = stretch * a
    state[4, i] = (c - turn * a) / stretch - shear * a
    if state.shape[0] == MATRIX_ROWS:
        b, d = state[6, i], state[7, i]
        state[6, i] = stretch * b
        state[7, i] = (d - turn * b) / stretch - shear * b


@njit(**_OPTIONS)
def _from_true_ray(state, i, potential, gradient, start, inverse, mask, strength):
    """Undo `_to_true_ray`."""
    true = state[0, i]
    y = true
    for _ in range(_NEWTON_STEPS):
        _, slope, bend, _ = _spline(potential, 0, y, start, inverse, mask)
        y -= (y + strength * slope - true) / (1.0 + strength * bend)
    _, _, bend, third = _spline(potential, 0, y, start, inverse, mask)
    stretch = 1.0 + strength * bend
    value, first, second, _ = _spline(gradient, 0, y, start, inverse, mask)
    p = state[1, i] * stretch
    turn = strength * second
    shear = p * strength * third / (stretch * stretch)
    a = state[3, i] / stretch
    state[4, i] = (state[4, i] + shear * a) * stretch + turn * a
    state[3, i] = a
    if state.shape[0] == MATRIX_ROWS:
        b = state[6, i] / stretch
        state[7, i] = (state[7, i] + shear * b) * stretch + turn * b
        state[6, i] = b
    state[0, i] = y
    state[1, i] = p + strength * first
    state[2, i] += strength * value


@njit(**_OPTIONS)
def _settle_ray(true, i):
    """Make the Maslov index agree with the sign of the true A.

    It is counted on the kernel map, whose caustics lie O(step**2) from the true ones; behind a caustic A and C have one
    sign, before it they have opposite signs.
    """
    a = true[3, i]
    even = np.floor(0.5 * true[5, i]) * 2.0 == true[5, i]
    if (a < 0.0 and even) or (a > 0.0 and not even):
        true[5, i] += 1.0 if a * true[4, i] > 0.0 else -1.0


@njit(parallel=True, **_OPTIONS)
def march_screens(state, true, kicks, potential, gradient, cells, start, inverse, step, strength, steps, first):
    """March from screen `first` over the next ones, and give the true coordinates on each.

    Every block of rays goes through all screens while it is in the cache.

    Parameters
    ----------
    state : ndarray, shape (rows, ray)
        Coordinates of the kernel map, changed in place.
    true : ndarray, shape (screens, rows, ray)
        Set to the true coordinates on the screens first + 1, first + 2, ...
    kicks : ndarray, shape (kicks * cells * CELL,)
        Spline cells of the kicks' potentials.
    potential, gradient : ndarray, shape (all screens, cells * CELL)
        Spline rows of W and W_x at the screens.
    cells : int
        Cells of a row, a power of 2.
    start, inverse : float
        Position of cell 0 and one over the pitch.
    step : float
    strength : float
        Of the processor, step**2/24.
    steps : int
        Steps per screen.
    first : int
    """
    rows = state.shape[0]
    for block in prange(state.shape[1] // BLOCK):
        begin = block * BLOCK
        for n in range(true.shape[0]):
            screen = first + n
            _march_block(state, begin, kicks, cells, start, inverse, step, screen * steps, (screen + 1) * steps)
            seen = true[n]
            for row in range(rows):
                for i in range(begin, begin + BLOCK):
                    seen[row, i] = state[row, i]
            for i in range(begin, begin + BLOCK):
                _to_true_ray(seen, i, potential[screen + 1], gradient[screen + 1], start, inverse, cells - 1, strength)
                _settle_ray(seen, i)


@njit(parallel=True, **_OPTIONS)
def from_true(state, potential, gradient, cells, start, inverse, strength):
    """Turn true coordinates into those of the kernel map, in place.

    The inverse, to round-off, of what `march_screens` does on a screen: the flow of G = c (W_x + p W_y),
    c = strength = step**2/24, as a kick by c W_x and then the lift of y -> y + c W_y.

    Parameters
    ----------
    state : ndarray, shape (FRONT_ROWS or MATRIX_ROWS, ray)
    potential, gradient : ndarray, shape (cells * CELL,)
        One spline row of W and one of W_x, at the screen.
    cells, start, inverse, strength :
        As for `march_screens`.
    """
    for i in prange(state.shape[1]):
        _from_true_ray(state, i, potential, gradient, start, inverse, cells - 1, strength)
