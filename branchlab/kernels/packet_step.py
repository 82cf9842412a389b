"""Passes over a wave in the plane: transposing copies and phase screens, one block of rows at a time."""

from numba import njit

from branchlab.kernels.native_fft import transform
from branchlab.kernels.screens import turn64

_OPTIONS = {"nogil": True, "cache": True, "error_model": "numpy", "fastmath": {"contract"}}


@njit(**_OPTIONS)
def gather(block, field, first):
    """Set block[r, j] = field[j, first + r]: rows of the transposed field.

    Parameters
    ----------
    block : ndarray of complex128, shape (rows, n)
    field : ndarray of complex128, shape (n, all rows)
    first : int
    """
    for j in range(block.shape[1]):
        for r in range(block.shape[0]):
            block[r, j] = field[j, first + r]


@njit(**_OPTIONS)
def scale_rows(block, factor):
    """Multiply every row by one factor, shape (n,), in place."""
    for r in range(block.shape[0]):
        for j in range(block.shape[1]):
            block[r, j] *= factor[j]


@njit(**_OPTIONS)
def screen_rows(pairs, path, first, turn):
    """Multiply rows by exp(-i turn path[first + r, j]), in place.

    Parameters
    ----------
    pairs : ndarray of float64, shape (rows, 2 n)
        Complex rows seen as pairs of real numbers.
    path : ndarray, shape (all rows, n)
    first : int
    turn : float
        k times the step.
    """
    for r in range(pairs.shape[0]):
        row = path[first + r]
        for j in range(row.size):
            c, s = turn64(-turn * row[j])
            re, im = pairs[r, 2 * j], pairs[r, 2 * j + 1]
            pairs[r, 2 * j] = re * c - im * s
            pairs[r, 2 * j + 1] = re * s + im * c


@njit(**_OPTIONS)
def multiply_rows(block, table, first):
    """Multiply rows by the rows first, first + 1, ... of a table, in place."""
    for r in range(block.shape[0]):
        row = table[first + r]
        for j in range(row.size):
            block[r, j] *= row[j]


@njit(**_OPTIONS)
def native_visit(out, field, begin, end, factor, last, screen, block, address, plans):
    """Take rows begin ... end - 1 of the transposed `field` through a step, in one go, and put them into `out`.

    Along each row: the factor `factor` in Fourier space, the screen, the factor `last` in Fourier space.

    Parameters
    ----------
    out, field : ndarrays of complex128, shapes (rows, n), (n, rows)
    begin, end : int
        A whole number of blocks.
    factor, last : ndarrays of complex128, shape (n,)
        Kinetic factors, divided by n.
    screen : ndarray of complex128, shape (rows, n)
    block : ndarray, shape (block rows, n)
        Working room of this thread.
    address, plans : int, (int, int)
        Of a `kernels.native_fft.NativePlan` of the block's shape.
    """
    data = block.ctypes.data
    for first in range(begin, end, block.shape[0]):
        gather(block, field, first)
        transform(address, plans[0], data)
        scale_rows(block, factor)
        transform(address, plans[1], data)
        multiply_rows(block, screen, first)
        transform(address, plans[0], data)
        scale_rows(block, last)
        transform(address, plans[1], data)
        out[first : first + block.shape[0]] = block


@njit(**_OPTIONS)
def native_turn(out, field, begin, end, factor, block, address, plans):
    """Do what `native_visit` does without the screen and the second factor."""
    data = block.ctypes.data
    for first in range(begin, end, block.shape[0]):
        gather(block, field, first)
        transform(address, plans[0], data)
        scale_rows(block, factor)
        transform(address, plans[1], data)
        out[first : first + block.shape[0]] = block
