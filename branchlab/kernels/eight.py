"""Vectors of eight doubles, for loops whose table look-ups a compiler vectorises badly.

A formula written with `Eight` in plain Python becomes vector code, one instruction (or two, or four, as the machine
has it) per operation. The six coefficients of eight spline cells are fetched as eight whole cells and transposed in
registers: gather instructions, which LLVM would use, are slower on many machines.
"""

from llvmlite import ir
from numba.core import cgutils
from numba.np.arrayobj import make_array

LANES = 8
_DOUBLE, _WORD, _SHORT = ir.DoubleType(), ir.IntType(64), ir.IntType(32)
_DOUBLES, _WORDS = ir.VectorType(_DOUBLE, LANES), ir.VectorType(_WORD, LANES)
_FLAGS = ("contract",)  # products and sums may be fused; nan and inf are kept


class Eight:
    """Eight doubles while code for them is being written."""

    def __init__(self, builder, value):
        self.builder, self.value = builder, value

    def _with(self, other):
        return other.value if isinstance(other, Eight) else ir.Constant(_DOUBLES, [float(other)] * LANES)

    def __add__(self, other):
        return Eight(self.builder, self.builder.fadd(self.value, self._with(other), flags=_FLAGS))

    def __sub__(self, other):
        return Eight(self.builder, self.builder.fsub(self.value, self._with(other), flags=_FLAGS))

    def __mul__(self, other):
        return Eight(self.builder, self.builder.fmul(self.value, self._with(other), flags=_FLAGS))

    def __truediv__(self, other):
        return Eight(self.builder, self.builder.fdiv(self.value, self._with(other), flags=_FLAGS))

    __radd__, __rmul__ = __add__, __mul__

    def floor(self):
        """Return the largest whole numbers not above these."""
        kind = ir.FunctionType(_DOUBLES, [_DOUBLES])
        function = cgutils.get_or_insert_function(self.builder.module, kind, f"llvm.floor.v{LANES}f64")
        return Eight(self.builder, self.builder.call(function, [self.value]))

    def __rtruediv__(self, other):
        return Eight(self.builder, self._with(other)) / self

    def at_least(self, low):
        """Return these or `low`, whichever is larger; `low` for nan."""
        above = self.builder.fcmp_ordered(">=", self.value, self._with(low))
        return Eight(self.builder, self.builder.select(above, self.value, self._with(low)))

    def at_most(self, high):
        """Return these or `high`, whichever is smaller; `high` for nan."""
        below = self.builder.fcmp_ordered("<=", self.value, self._with(high))
        return Eight(self.builder, self.builder.select(below, self.value, self._with(high)))

    def whole(self):
        """Return these, which must be whole numbers of a few digits, as eight words."""
        return self.builder.fptosi(self.value, _WORDS)

    def below_zero(self, yes, no):
        """Return `yes` where a number is below zero, else (and for nan) `no`."""
        below = self.builder.fcmp_ordered("<", self.value, self._with(0.0))
        return Eight(self.builder, self.builder.select(below, self._with(yes), self._with(no)))

    def crossed(self, before):
        """Return 1 where these and the numbers `before` lie on two sides of zero, else 0.

        Zero counts as positive: a passage that stops on zero is counted once, there or at the next step.
        """
        below = [self.builder.fcmp_ordered("<", one.value, self._with(0.0)) for one in (self, before)]
        return Eight(self.builder, self.builder.select(self.builder.xor(*below), self._with(1.0), self._with(0.0)))


def spread(builder, number) -> Eight:
    """Return eight copies of a double."""
    return Eight(builder, _spread(builder, number, _DOUBLES))


def _spread(builder, number, kind):
    empty = ir.Constant(kind, ir.Undefined)
    first = builder.insert_element(empty, number, ir.Constant(_SHORT, 0))
    return _shuffle(builder, first, empty, [0] * LANES)


def _shuffle(builder, first, second, pattern):
    return builder.shuffle_vector(first, second, ir.Constant(ir.VectorType(_SHORT, len(pattern)), pattern))


def row_addresses(context, builder, array_type, array, column) -> list:
    """Return a function of the row that gives the address of eight neighbours in a two-dimensional array."""
    made = make_array(array_type)(context, builder, array)
    columns = cgutils.unpack_tuple(builder, made.shape)[-1]

    def address(row):
        at = builder.add(column, builder.mul(columns, ir.Constant(_WORD, row)))
        return builder.bitcast(builder.gep(made.data, [at], inbounds=True), _DOUBLES.as_pointer())

    return address


def load(builder, address) -> Eight:
    """Return the eight doubles at an address."""
    return Eight(builder, builder.load(address, align=8))


def store(number: Eight, address) -> None:
    """Write eight doubles to an address."""
    number.builder.store(number.value, address, align=8)


def spline_cells(context, builder, table_type, table, base, floor: Eight, mask) -> list[Eight]:
    """Return the six coefficients of eight spline cells, each of them for all eight.

    Cell numbers are taken modulo mask + 1, a power of 2: whatever `floor` is, the look-up stays inside the row that
    begins at `base`.
    """
    data = make_array(table_type)(context, builder, table).data
    number = builder.and_(builder.fptosi(floor.value, _WORDS), _spread(builder, mask, _WORDS))
    offset = builder.shl(number, ir.Constant(_WORDS, [3] * LANES))  # a cell is eight doubles
    return _fetched(builder, data, [builder.add(base, place) for place in _each(builder, offset)])


def spline_rows(builder, data, patch, rows: int, row: int) -> list[Eight]:
    """Return the six coefficients of one cell in each of eight patches, for all eight.

    Patch number n is the cells n * rows ... of the table; `row` tells which of them. `patch` is eight words, each of which
    must be a patch of the table.
    """
    offset = builder.mul(patch, ir.Constant(_WORDS, [8 * rows] * LANES))
    offset = builder.add(offset, ir.Constant(_WORDS, [8 * row] * LANES))
    return _fetched(builder, data, _each(builder, offset))


def _each(builder, words) -> list:
    """Return eight words one by one."""
    return [builder.extract_element(words, ir.Constant(_SHORT, lane)) for lane in range(LANES)]


def _fetched(builder, data, places) -> list[Eight]:
    """Return the first six doubles at each of eight places, each of them for all eight."""
    addresses = [builder.bitcast(builder.gep(data, [at], inbounds=True), _DOUBLES.as_pointer()) for at in places]
    rows = [load(builder, address).value for address in addresses]
    return [Eight(builder, row) for row in _transposed(builder, rows)[:6]]


def _transposed(builder, rows):
    """Transpose eight vectors of eight, by pairs, quadruples and halves."""
    even = [_shuffle(builder, rows[k], rows[k + 1], [0, 8, 2, 10, 4, 12, 6, 14]) for k in range(0, LANES, 2)]
    odd = [_shuffle(builder, rows[k], rows[k + 1], [1, 9, 3, 11, 5, 13, 7, 15]) for k in range(0, LANES, 2)]
    near, far = [0, 1, 8, 9, 4, 5, 12, 13], [2, 3, 10, 11, 6, 7, 14, 15]
    # column m of the first four rows and column m + 4 of them, then the same of the last four rows
    quadruples = [
        [_shuffle(builder, pair[k], pair[k + 1], order) for k in (0, 2)]
        for order in (near, far)
        for pair in (even, odd)
    ]
    low, high = [0, 1, 2, 3, 8, 9, 10, 11], [4, 5, 6, 7, 12, 13, 14, 15]
    return [_shuffle(builder, *quadruple, half) for half in (low, high) for quadruple in quadruples]
