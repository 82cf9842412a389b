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
NEWTON_STEPS = 3  # of y + c W' = true: each squares the error, 1e-2 at most and times c W_yyy = 1e-2


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
def _spline(table, y, start, inverse, mask):
    """Return W and its first three derivatives from a spline row."""
    u = (y - start) * inverse
    floor = np.floor(u)
    t = u - floor
    j = CELL * (int64(floor) & mask)
    w0 = look_up(table, j)
    w1 = look_up(table, j + 1)
    w2 = look_up(table, j + 2)
    w3 = look_up(table, j + 3)
    w4 = look_up(table, j + 4)
    w5 = look_up(table, j + 5)
    value = w0 + t * (w1 + t * (w2 + t * (w3 + t * (w4 + t * w5))))
    first = w1 + t * (2.0 * w2 + t * (3.0 * w3 + t * (4.0 * w4 + t * 5.0 * w5)))
    second = 2.0 * w2 + t * (6.0 * w3 + t * (12.0 * w4 + t * 20.0 * w5))
    third = 6.0 * w3 + t * (24.0 * w4 + t * 60.0 * w5)
    return value, first * inverse, second * inverse * inverse, third * inverse * inverse * inverse


@njit(**_OPTIONS)
def _process_rays(y_, p_, s_, work, potential, gradient, start, inverse, mask, strength):
    """Turn y, p, action of a block from the kernel map's to true; put stretch, turn and shear of tangents in `work`."""
    stretch_, turn_, shear_ = work[0], work[1], work[2]
    for i in range(BLOCK):
        y = get(y_, i)
        value, first, second, _ = _spline(gradient, y, start, inverse, mask)
        _, slope, bend, third = _spline(potential, y, start, inverse, mask)
        p = get(p_, i) - strength * first
        stretch = 1.0 + strength * bend
        put(y_, i, y + strength * slope)
        put(p_, i, p / stretch)
        put(s_, i, get(s_, i) - strength * value)
        put(stretch_, i, stretch)
        put(turn_, i, strength * second)
        put(shear_, i, p * strength * third / (stretch * stretch))


@njit(**_OPTIONS)
def _process_tangent(a_, c_, work):
    """Turn one tangent of a block from the kernel map's to true."""
    stretch_, turn_, shear_ = work[0], work[1], work[2]
    for i in range(BLOCK):
        a = get(a_, i)
        stretch = get(stretch_, i)
        put(c_, i, (get(c_, i) - get(turn_, i) * a) / stretch - get(shear_, i) * a)
        put(a_, i, stretch * a)


@njit(**_OPTIONS)
def _settle(a_, c_, m_):
    """Make the Maslov index of a block agree with the sign of the true A.

    It is counted on the kernel map, whose caustics lie O(step**2) from the true ones; behind a caustic A and C have one
    sign, before it they have opposite signs.
    """
    for i in range(BLOCK):
        a, m = get(a_, i), get(m_, i)
        even = np.floor(0.5 * m) * 2.0 == m
        change = 1.0 if a * get(c_, i) > 0.0 else -1.0
        put(m_, i, m + (change if (a < 0.0 if even else a > 0.0) else 0.0))


@njit(**_OPTIONS)
def _unprocess_rays(y_, p_, s_, work, potential, gradient, start, inverse, mask, strength):
    """Undo `_process_rays`."""
    stretch_, turn_, shear_ = work[0], work[1], work[2]
    for i in range(BLOCK):
        true = get(y_, i)
        y = true
        for _ in range(NEWTON_STEPS):
            _, slope, bend, _ = _spline(potential, y, start, inverse, mask)
            y -= (y + strength * slope - true) / (1.0 + strength * bend)
        _, _, bend, third = _spline(potential, y, start, inverse, mask)
        value, first, second, _ = _spline(gradient, y, start, inverse, mask)
        stretch = 1.0 + strength * bend
        p = get(p_, i) * stretch
        put(y_, i, y)
        put(p_, i, p + strength * first)
        put(s_, i, get(s_, i) + strength * value)
        put(stretch_, i, stretch)
        put(turn_, i, strength * second)
        put(shear_, i, p * strength * third / (stretch * stretch))


@njit(**_OPTIONS)
def _unprocess_tangent(a_, c_, work):
    """Undo `_process_tangent`."""
    stretch_, turn_, shear_ = work[0], work[1], work[2]
    for i in range(BLOCK):
        stretch = get(stretch_, i)
        a = get(a_, i) / stretch
        put(c_, i, (get(c_, i) + get(shear_, i) * a) * stretch + get(turn_, i) * a)
        put(a_, i, a)


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
        end = begin + BLOCK
        work = np.empty((3, BLOCK))
        for n in range(true.shape[0]):
            screen = first + n
            _march_block(state, begin, kicks, cells, start, inverse, step, screen * steps, (screen + 1) * steps)
            for row in range(rows):
                for i in range(begin, end):
                    true[n, row, i] = state[row, i]
            seen = true[n, :, begin:end]
            w, w_x = potential[screen + 1], gradient[screen + 1]
            _process_rays(seen[0], seen[1], seen[2], work, w, w_x, start, inverse, cells - 1, strength)
            _process_tangent(seen[3], seen[4], work)
            _settle(seen[3], seen[4], seen[5])
            if rows == MATRIX_ROWS:
                _process_tangent(seen[6], seen[7], work)


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
    for block in prange(state.shape[1] // BLOCK):
        part = state[:, block * BLOCK : (block + 1) * BLOCK]
        work = np.empty((3, BLOCK))
        _unprocess_rays(part[0], part[1], part[2], work, potential, gradient, start, inverse, cells - 1, strength)
        _unprocess_tangent(part[3], part[4], work)
        if state.shape[0] == MATRIX_ROWS:
            _unprocess_tangent(part[6], part[7], work)
