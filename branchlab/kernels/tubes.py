"""Flux tubes laid conservatively into cells: the density of a folded front of rays.

Between two neighbouring rays y(t), 0 <= t <= 1, is the cubic Hermite curve through their positions and slopes
dy/dt, and carries its flux evenly in t. Each monotone piece is inverted at the cell edges it crosses, so that every
cell gets exactly its share: the sum of what is laid is the flux sent, to round-off.
"""

import math

import numpy as np
from numba import njit, prange

_OPTIONS = {"nogil": True, "cache": True, "error_model": "numpy"}
CHUNK = 512
CLOSE = 1e-11  # of a tube's flux may be laid on the wrong side of an edge; none is lost
STRAIGHT = 1e-3  # cells of sagitta below which a tube is laid as a straight line


@njit(**_OPTIONS)
def _add(out, cell, flux, cells, periodic):
    """Add flux to a cell; what lies outside an open row is summed in out[cells]."""
    if 0 <= cell < cells:
        out[cell] += flux
    elif periodic:
        out[cell % cells] += flux
    else:
        out[cells] += flux


@njit(**_OPTIONS)
def _lay_line(out, low, high, flux, cells, periodic):
    """Lay flux evenly between two positions, in units of cells."""
    if low > high:
        low, high = high, low
    first, last = int(math.floor(low)), int(math.floor(high))
    if first == last:
        _add(out, first, flux, cells, periodic)
        return
    if not periodic and (last < 0 or first >= cells):
        out[cells] += flux
        return
    density = flux / (high - low)
    _add(out, first, density * (first + 1 - low), cells, periodic)
    _add(out, last, density * (high - last), cells, periodic)
    for cell in range(first + 1, last):
        _add(out, cell, density, cells, periodic)


@njit(**_OPTIONS)
def _invert(y0, a0, c2, c3, target, left, right, guess, rising):
    """Return t in [left, right] with y(t) = target on a monotone piece (Newton, safeguarded by bisection)."""
    t = guess
    for _ in range(60):
        excess = y0 + t * (a0 + t * (c2 + t * c3)) - target
        if (excess > 0.0) == rising:
            right = t
        else:
            left = t
        slope = a0 + t * (2.0 * c2 + t * 3.0 * c3)
        new = t - excess / slope if slope != 0.0 else 0.5 * (left + right)
        if not left <= new <= right:
            new = 0.5 * (left + right)
        if abs(new - t) < CLOSE:
            return new
        t = new
    return t


@njit(**_OPTIONS)
def _lay_piece(out, y0, a0, c2, c3, left, right, y_left, y_right, flux, cells, periodic):
    """Lay a monotone piece left <= t <= right of a tube."""
    rising = y_right > y_left
    cell = int(math.floor(y_left)) if rising else int(math.ceil(y_left)) - 1
    t, y = left, y_left
    while True:
        edge = cell + 1.0 if rising else float(cell)
        if (rising and edge >= y_right) or (not rising and edge <= y_right):
            _add(out, cell, flux * (right - t), cells, periodic)
            return
        guess = t + (right - t) * (edge - y) / (y_right - y)
        crossing = _invert(y0, a0, c2, c3, edge, t, right, guess, rising)
        _add(out, cell, flux * (crossing - t), cells, periodic)
        t, y = crossing, edge
        cell += 1 if rising else -1


@njit(**_OPTIONS)
def _turning_points(a0, c2, c3):
    """Return the roots of y'(t) in (0, 1), rising; 2 where there is none."""
    first, second = 2.0, 2.0
    q, p = 3.0 * c3, 2.0 * c2
    discriminant = p * p - 4.0 * q * a0
    if discriminant > 0.0:
        root = math.sqrt(discriminant)
        z = -0.5 * (p + (root if p >= 0.0 else -root))
        if q != 0.0:
            first = z / q
        if z != 0.0:
            second = a0 / z
        if not 0.0 < first < 1.0:
            first = 2.0
        if not 0.0 < second < 1.0:
            second = 2.0
        if second < first:
            first, second = second, first
    return first, second


@njit(**_OPTIONS)
def _monotone(chord, a0, a1):
    """Whether a cubic is monotone because no end slope exceeds 3 chords (Fritsch & Carlson 1980)."""
    steep = 3.0 * chord * chord
    return 0.0 < a0 * chord <= steep and 0.0 < a1 * chord <= steep


@njit(**_OPTIONS)
def lay_tube(out, y0, y1, a0, a1, flux, cells, periodic, coarse):
    """Lay one tube between rays at y0, y1 (in cells) with slopes a0, a1 (dy/dt).

    Returns
    -------
    float
        The flux if the tube's sagitta exceeds `coarse` cells (it is laid as a straight line), else 0.
    """
    chord = y1 - y0
    sagitta = abs(a0 - chord) + abs(a1 - chord)
    if not np.isfinite(sagitta):
        out[cells] += flux
        return flux
    if sagitta > coarse or (sagitta < STRAIGHT and a0 * a1 > 0.0):
        _lay_line(out, y0, y1, flux, cells, periodic)
        return flux if sagitta > coarse else 0.0
    c2 = 3.0 * chord - 2.0 * a0 - a1
    c3 = a0 + a1 - 2.0 * chord
    first, second = (2.0, 2.0) if _monotone(chord, a0, a1) else _turning_points(a0, c2, c3)
    left, y_left = 0.0, y0
    for piece in range(3):
        right = (first, second, 1.0)[piece]
        if right > 1.0:
            continue
        y_right = y1 if piece == 2 else y0 + right * (a0 + right * (c2 + right * c3))
        _lay_piece(out, y0, a0, c2, c3, left, right, y_left, y_right, flux, cells, periodic)
        left, y_left = right, y_right
    return 0.0


@njit(parallel=True, **_OPTIONS)
def lay_tubes(y, stretch, steps, flux, lap, start, pitch, cells, periodic, coarse):
    """Lay all tubes of a front into the cells of every screen.

    Parameters
    ----------
    y, stretch : ndarray, shape (screen, ray)
        Positions and dy/ds.
    steps : ndarray, shape (tube,)
        Step of s of each tube: one tube fewer than rays for an open front, as many for a closed one.
    flux : ndarray, shape (1 or screen, tube)
        What each tube carries, on all screens or on each. A tube that carries nothing may have nan ends.
    lap : float
        For a closed front, the y by which the first ray follows the last.
    start, pitch : float
        Lower edge of cell 0, and width of a cell.
    cells : int
    periodic : bool
        Whether what leaves on one side enters on the other.
    coarse : float
        Sagitta in cells above which a tube is unresolved.

    Returns
    -------
    laid : ndarray, shape (screen, cells)
    outside, unresolved : ndarray, shape (screen,)
        Flux beyond an open row of cells, and flux of tubes that were laid as straight lines.
    """
    screens, rays, tubes = y.shape[0], y.shape[1], steps.size
    laid = np.zeros((screens, cells + 1))
    unresolved = np.zeros(screens)
    inverse = 1.0 / pitch
    for m in prange(screens):
        n = m // 2 if m % 2 == 0 else screens - 1 - m // 2  # later screens are dearer: every thread gets some of both
        row, carried = laid[n], flux[min(n, flux.shape[0] - 1)]
        for i in range(tubes):
            j = i + 1
            ahead = 0.0
            if j == rays:
                j = 0
                ahead = lap
            y0 = (y[n, i] - start) * inverse
            y1 = (y[n, j] + ahead - start) * inverse
            a0 = stretch[n, i] * steps[i] * inverse
            a1 = stretch[n, j] * steps[i] * inverse
            cell = math.floor(y0)
            if cell == math.floor(y1) and 0 <= cell < cells and _monotone(y1 - y0, a0, a1):
                row[cell] += carried[i]  # most tubes; a call would cost more than this
            else:
                unresolved[n] += lay_tube(row, y0, y1, a0, a1, carried[i], cells, periodic, coarse)
    return laid[:, :cells].copy(), laid[:, cells].copy(), unresolved


@njit(parallel=True, **_OPTIONS)
def worst_sagitta(y0, y1, a0, a1, steps, edge):
    """Return how far each tube departs from a straight line on its worst screen.

    Parameters
    ----------
    y0, y1, a0, a1 : ndarray, shape (screen, tube)
        Positions and dy/ds of the rays at both ends.
    steps : ndarray, shape (tube,)
        Step of s between them.
    edge : float
        A tube that lies wholly beyond y = edge, or below -edge, or has an end that is gone (nan), counts as straight.

    Returns
    -------
    ndarray, shape (tube,)
        Largest abs(a0 step - (y1 - y0)) + abs(a1 step - (y1 - y0)).
    """
    tubes = steps.size
    worst = np.zeros(tubes)
    for chunk in prange((tubes + CHUNK - 1) // CHUNK):
        for n in range(y0.shape[0]):
            for i in range(chunk * CHUNK, min((chunk + 1) * CHUNK, tubes)):
                low, high = y0[n, i], y1[n, i]
                chord = high - low
                sagitta = abs(a0[n, i] * steps[i] - chord) + abs(a1[n, i] * steps[i] - chord)
                if not np.isfinite(sagitta):
                    continue
                reach = edge + sagitta
                if not (min(low, high) > reach or max(low, high) < -reach):
                    worst[i] = max(worst[i], sagitta)
    return worst
