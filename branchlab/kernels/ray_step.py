"""The paraxial ray step: one drift, one kick, its exact tangent, and the processor that makes it fourth order.

State arrays are rows of one (rows, ray) block whose number of rays is a multiple of `BLOCK`:
0 y, 1 p, 2 action, 3 A, 4 C, 5 maslov, and for the full matrix 6 B, 7 D. (A, C) is one tangent d(y, p), the
front's or the first column of the stability matrix; (B, D) is the second column.

Potentials W are quintic splines in y, one per kick: cell j holds the six coefficients of a polynomial in
t = (y - start)/pitch - j, 0 <= t < 1, and two doubles of padding. Cells repeat with their number, a power of 2.
"""

from numba import njit, prange
from numba.core import types
from numba.extending import intrinsic

from branchlab.kernels.eight import LANES, load, row_addresses, spline_cells, spread, store
from branchlab.kernels.spline import CELL

BLOCK = 256
FRONT_ROWS, MATRIX_ROWS = 6, 8
NEWTON_STEPS = 3  # of y + c W_y = true: each squares the error, 1e-2 at most and times c W_yyy = 1e-2
_OPTIONS = {"nogil": True, "cache": True, "error_model": "numpy"}
_TANGENTS = {FRONT_ROWS: ((3, 4),), MATRIX_ROWS: ((3, 4), (6, 7))}


def taylor(t, w, order):
    """Return f, f', f''/2, ... of the polynomial sum w[m] t**m (Horner's scheme)."""
    rows = [w[-1]] + [None] * order
    for coefficient in reversed(w[:-1]):
        for d in range(order, 0, -1):
            if rows[d - 1] is not None:
                rows[d] = rows[d - 1] if rows[d] is None else rows[d - 1] + t * rows[d]
        rows[0] = coefficient + t * rows[0]
    return rows


class _Row:
    """A spline row: gives W and its derivatives at eight places."""

    def __init__(self, context, builder, kind, table, base, start, inverse, mask):
        self.table = context, builder, kind, table, base
        self.start, self.inverse, self.mask = spread(builder, start), spread(builder, inverse), mask

    def at(self, y, order):
        """Return W, W_y, W_yy/2, W_yyy/6, as far as `order`."""
        u = (y - self.start) * self.inverse
        floor = u.floor()
        rows = taylor(u - floor, spline_cells(*self.table, floor, self.mask), order)
        scale = self.inverse
        for d in range(1, order + 1):
            rows[d] = rows[d] * scale
            scale = scale * self.inverse
        return rows


class _Processor:
    """The flow of G = c (W_x + p W_y), c = step**2/24: a kick by c W_x, then the lift of y -> y + c W_y."""

    def __init__(self, y, potential, gradient, strength):
        self.strength = strength
        self.value, self.kick, half_turn = gradient.at(y, 2)
        _, self.slope, half_bend, self.sixth = potential.at(y, 3)
        self.stretch = 1.0 + strength * (2.0 * half_bend)
        self.turn = strength * (2.0 * half_turn)

    def shear(self, p):
        """Return p times the derivative of 1/stretch, up to its sign; p after the kick."""
        return p * (self.strength * (6.0 * self.sixth)) / (self.stretch * self.stretch)


def _zero(context):
    """Return the whole number 0."""
    return context.get_constant(types.intp, 0)


def _signature(kinds, arrays, doubles):
    """Return the signature of an intrinsic: arrays and whole numbers as given, then doubles, then the mask."""
    return types.void(*kinds[:arrays], *[types.float64] * doubles, types.intp)


def _stepping(rows):
    """Return the code of drift and kick for eight rays of a state with this many rows."""

    def generate(context, builder, signature, args):
        state, column, table, base, drift, kick, start, inverse, mask = args
        address = row_addresses(context, builder, signature.args[0], state, column)
        drift, kick = spread(builder, drift), spread(builder, kick)
        y, p, action = (load(builder, address(row)) for row in range(3))
        y = y + drift * p
        value, slope, half_bend = _Row(context, builder, signature.args[2], table, base, start, inverse, mask).at(y, 2)
        turn = kick * (2.0 * half_bend)
        for first, second in _TANGENTS[rows]:
            before, c = load(builder, address(first)), load(builder, address(second))
            a = before + drift * c
            store(a, address(first))
            store(c - turn * a, address(second))
            if first == 3:
                store(load(builder, address(5)) + a.crossed(before), address(5))
        store(y, address(0))
        store(p - kick * slope, address(1))
        store(action + 0.5 * drift * p * p - kick * value, address(2))
        return context.get_dummy_value()

    return generate


def _closing(rows):
    """Return the code of the half drift that ends a step, and of the processor, for eight rays."""

    def generate(context, builder, signature, args):
        state, true, column, potential, gradient, half, strength, start, inverse, mask = args
        here = row_addresses(context, builder, signature.args[0], state, column)
        there = row_addresses(context, builder, signature.args[1], true, column)
        zero = _zero(context)
        half, strength = spread(builder, half), spread(builder, strength)
        w, w_x = (
            _Row(context, builder, kind, table, zero, start, inverse, mask)
            for kind, table in zip(signature.args[3:5], (potential, gradient), strict=True)
        )
        y, p, action = (load(builder, here(row)) for row in range(3))
        y, action = y + half * p, action + 0.5 * half * p * p
        store(y, here(0))
        store(action, here(2))
        processor = _Processor(y, w, w_x, strength)
        p = p - strength * processor.kick
        shear = processor.shear(p)
        store(y + strength * processor.slope, there(0))
        store(p / processor.stretch, there(1))
        store(action - strength * processor.value, there(2))
        for first, second in _TANGENTS[rows]:
            before, c = load(builder, here(first)), load(builder, here(second))
            a = before + half * c
            store(a, here(first))
            true_a = processor.stretch * a
            true_c = (c - processor.turn * a) / processor.stretch - shear * a
            store(true_a, there(first))
            store(true_c, there(second))
            if first == 3:
                maslov = load(builder, here(5)) + a.crossed(before)
                store(maslov, here(5))
                store(_settled(maslov, true_a, true_c), there(5))
        return context.get_dummy_value()

    return generate


def _settled(maslov, a, c):
    """Return the Maslov index made to agree with the sign of the true A.

    It is counted on the kernel map, whose caustics lie O(step**2) from the true ones; behind a caustic A and C have one
    sign, before it they have opposite signs.
    """
    odd = maslov - 2.0 * (0.5 * maslov).floor()
    change = (a * c * -1.0).below_zero(1.0, -1.0)
    return maslov + (a * (1.0 + -2.0 * odd)).below_zero(change, 0.0)


def _opening(rows):
    """Return the code that undoes the processor for eight rays."""

    def generate(context, builder, signature, args):
        state, column, potential, gradient, strength, start, inverse, mask = args
        address = row_addresses(context, builder, signature.args[0], state, column)
        zero = _zero(context)
        strength = spread(builder, strength)
        w, w_x = (
            _Row(context, builder, kind, table, zero, start, inverse, mask)
            for kind, table in zip(signature.args[2:4], (potential, gradient), strict=True)
        )
        true, p, action = (load(builder, address(row)) for row in range(3))
        y = true
        for _ in range(NEWTON_STEPS):
            _, slope, half_bend = w.at(y, 2)
            y = y - (y + strength * slope - true) / (1.0 + strength * (2.0 * half_bend))
        processor = _Processor(y, w, w_x, strength)
        p = p * processor.stretch
        shear = processor.shear(p)
        store(y, address(0))
        store(p + strength * processor.kick, address(1))
        store(action + strength * processor.value, address(2))
        for first, second in _TANGENTS[rows]:
            a = load(builder, address(first)) / processor.stretch
            c = load(builder, address(second))
            store(a, address(first))
            store((c + shear * a) * processor.stretch + processor.turn * a, address(second))
        return context.get_dummy_value()

    return generate


@intrinsic
def step_front(typingctx, state, column, table, base, drift, kick, start, inverse, mask):  # noqa: ARG001
    """Drift, then kick eight rays with one tangent, from `column` on."""
    return _signature((state, types.intp, table, types.intp), 4, 4), _stepping(FRONT_ROWS)


@intrinsic
def step_matrix(typingctx, state, column, table, base, drift, kick, start, inverse, mask):  # noqa: ARG001
    """Drift, then kick eight rays with both tangents, from `column` on."""
    return _signature((state, types.intp, table, types.intp), 4, 4), _stepping(MATRIX_ROWS)


@intrinsic
def close_front(typingctx, state, true, column, potential, gradient, half, strength, start, inverse, mask):  # noqa: ARG001
    """End the step of eight rays with one tangent, and give their true coordinates."""
    return _signature((state, true, types.intp, potential, gradient), 5, 4), _closing(FRONT_ROWS)


@intrinsic
def close_matrix(typingctx, state, true, column, potential, gradient, half, strength, start, inverse, mask):  # noqa: ARG001
    """End the step of eight rays with both tangents, and give their true coordinates."""
    return _signature((state, true, types.intp, potential, gradient), 5, 4), _closing(MATRIX_ROWS)


@intrinsic
def open_front(typingctx, state, column, potential, gradient, strength, start, inverse, mask):  # noqa: ARG001
    """Turn eight rays with one tangent from true coordinates to the kernel map's."""
    return _signature((state, types.intp, potential, gradient), 4, 3), _opening(FRONT_ROWS)


@intrinsic
def open_matrix(typingctx, state, column, potential, gradient, strength, start, inverse, mask):  # noqa: ARG001
    """Turn eight rays with both tangents from true coordinates to the kernel map's."""
    return _signature((state, types.intp, potential, gradient), 4, 3), _opening(MATRIX_ROWS)


@njit(**_OPTIONS)
def _march_block(state, true, begin, kicks, w, w_x, row, start, inverse, mask, step, strength, first, last):
    """Take a block of rays from one screen to the next."""
    end, half = begin + BLOCK, 0.5 * step
    both = state.shape[0] == MATRIX_ROWS
    for n in range(first, last):
        drift = half if n == first else step
        if both:
            for i in range(begin, end, LANES):
                step_matrix(state, i, kicks, n * row, drift, step, start, inverse, mask)
        else:
            for i in range(begin, end, LANES):
                step_front(state, i, kicks, n * row, drift, step, start, inverse, mask)
    if both:
        for i in range(begin, end, LANES):
            close_matrix(state, true, i, w, w_x, half, strength, start, inverse, mask)
    else:
        for i in range(begin, end, LANES):
            close_front(state, true, i, w, w_x, half, strength, start, inverse, mask)


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
    row, mask = cells * CELL, cells - 1
    for block in prange(state.shape[1] // BLOCK):
        begin = block * BLOCK
        for n in range(true.shape[0]):
            screen = first + n
            w, w_x = potential[screen + 1], gradient[screen + 1]
            from_kick, to_kick = screen * steps, (screen + 1) * steps
            _march_block(
                state, true[n], begin, kicks, w, w_x, row, start, inverse, mask, step, strength, from_kick, to_kick
            )


@njit(parallel=True, **_OPTIONS)
def from_true(state, potential, gradient, cells, start, inverse, strength):
    """Turn true coordinates into those of the kernel map, in place.

    The inverse, to round-off, of what `march_screens` does on a screen.

    Parameters
    ----------
    state : ndarray, shape (FRONT_ROWS or MATRIX_ROWS, ray)
    potential, gradient : ndarray, shape (cells * CELL,)
        One spline row of W and one of W_x, at the screen.
    cells, start, inverse, strength :
        As for `march_screens`.
    """
    for block in prange(state.shape[1] // BLOCK):
        for i in range(block * BLOCK, (block + 1) * BLOCK, LANES):
            if state.shape[0] == MATRIX_ROWS:
                open_matrix(state, i, potential, gradient, strength, start, inverse, cells - 1)
            else:
                open_front(state, i, potential, gradient, strength, start, inverse, cells - 1)
