"""Phase screens and kinetic factors: what a wave is multiplied with between two transforms."""

import numpy as np
from numba import njit

_OPTIONS = {"nogil": True, "cache": True, "error_model": "numpy", "fastmath": {"contract"}}
_TURN = 0.15915494309189535  # 1/2pi
_TWO_PI, _TWO_PI_REST = 6.283185307179586, 2.4492935982947064e-16
_TURN_32 = np.float32(0.15915494)
_TWO_PI_32, _TWO_PI_REST_32 = np.float32(6.28125), np.float32(1.9353072e-3)  # the first is short: products are exact


@njit(inline="always", **_OPTIONS)
def turn64(angle):
    """Return cos and sin of an angle without a branch, so that loops over it vectorise (7e-15 to 1e3 radians).

    The angle is reduced to an eighth of (-pi, pi], expanded, and doubled three times as cos - 1 and sin.
    """
    reduced = angle - np.rint(angle * _TURN) * _TWO_PI
    reduced = (reduced - np.rint(angle * _TURN) * _TWO_PI_REST) * 0.125
    z = reduced * reduced
    s = reduced * (
        1.0 + z * (-1 / 6.0 + z * (1 / 120.0 + z * (-1 / 5040.0 + z * (1 / 362880.0 - z * (1 / 39916800.0)))))
    )
    c = z * (-0.5 + z * (1 / 24.0 + z * (-1 / 720.0 + z * (1 / 40320.0 + z * (-1 / 3628800.0 + z / 479001600.0)))))
    for _ in range(3):
        c, s = 2.0 * c + (c * c - s * s), 2.0 * s * (1.0 + c)
    return 1.0 + c, s


@njit(inline="always", **_OPTIONS)
def turn32(angle):
    """Return cos and sin of a float32 angle (5e-7)."""
    turns = np.rint(angle * _TURN_32)
    reduced = ((angle - turns * _TWO_PI_32) - turns * _TWO_PI_REST_32) * np.float32(0.125)
    z = reduced * reduced
    s = reduced * (
        np.float32(1.0) + z * (np.float32(-1 / 6.0) + z * (np.float32(1 / 120.0) - z * np.float32(1 / 5040.0)))
    )
    c = z * (np.float32(-0.5) + z * (np.float32(1 / 24.0) + z * np.float32(-1 / 720.0)))
    for _ in range(3):
        c, s = np.float32(2.0) * c + (c * c - s * s), np.float32(2.0) * s * (np.float32(1.0) + c)
    return np.float32(1.0) + c, s


@njit(**_OPTIONS)
def screen64(field, path, turn, keep):
    """Multiply rows by keep * exp(-i turn path), in place.

    Parameters
    ----------
    field : ndarray of float64, shape (rows, 2 n)
        Complex rows seen as pairs of real numbers.
    path : ndarray, shape (n,)
    turn : ndarray, shape (rows,)
        k times the step.
    keep : ndarray, shape (n,)
        What the absorber leaves of the amplitude in one step.
    """
    for j in range(turn.size):
        scale = -turn[j]
        for i in range(path.size):
            c, s = turn64(scale * path[i])
            re, im = field[j, 2 * i] * keep[i], field[j, 2 * i + 1] * keep[i]
            field[j, 2 * i] = re * c - im * s
            field[j, 2 * i + 1] = re * s + im * c


@njit(**_OPTIONS)
def screen32(field, path, turn, keep):
    """Do what `screen64` does, in single precision."""
    for j in range(turn.size):
        scale = -turn[j]
        for i in range(path.size):
            c, s = turn32(scale * path[i])
            re, im = field[j, 2 * i] * keep[i], field[j, 2 * i + 1] * keep[i]
            field[j, 2 * i] = re * c - im * s
            field[j, 2 * i + 1] = re * s + im * c


@njit(**_OPTIONS)
def multiply(field, factor):
    """Multiply rows by a table of the same shape, in place."""
    for j in range(field.shape[0]):
        for i in range(field.shape[1]):
            field[j, i] *= factor[j, i]


@njit(**_OPTIONS)
def multiply_into(out, field, factor):
    """Set `out` to rows times a table of the same shape."""
    for j in range(field.shape[0]):
        for i in range(field.shape[1]):
            out[j, i] = field[j, i] * factor[j, i]


@njit(**_OPTIONS)
def differentiate(out, spectrum, q, shift):
    """Set `out` to i (q + shift) times a spectrum; one shift per row."""
    for j in range(spectrum.shape[0]):
        for i in range(spectrum.shape[1]):
            out[j, i] = spectrum[j, i] * (1j * (q[i] + shift[j]))


@njit(**_OPTIONS)
def outer_share(spectrum, first, last):
    """Return the share of each row's power at the places first ... last - 1, shape (rows,)."""
    share = np.empty(spectrum.shape[0])
    for j in range(spectrum.shape[0]):
        whole, outer = 0.0, 0.0
        for i in range(spectrum.shape[1]):
            z = spectrum[j, i]
            power = z.real * z.real + z.imag * z.imag
            whole += power
            if first <= i < last:
                outer += power
        share[j] = outer / whole if whole > 0.0 else 0.0
    return share


@njit(**_OPTIONS)
def cell_intensity(out, field, slope, across, bend, strength):
    """Set `out` to cell means of abs(u - (strength / 2) (bend u + 2 across du/dy))**2.

    Parameters
    ----------
    out : ndarray, shape (rows, cells)
    field, slope : ndarray, shape (rows, n)
        u and du/dy; n is a multiple of the number of cells.
    across, bend : ndarray, shape (n,)
    strength : float
    """
    cells = out.shape[1]
    per = field.shape[1] // cells
    half = 0.5 * strength
    for j in range(field.shape[0]):
        for cell in range(cells):
            total = 0.0
            for i in range(cell * per, (cell + 1) * per):
                u, d = field[j, i], slope[j, i]
                own, turn = 1.0 - half * bend[i], strength * across[i]
                re, im = own * u.real - turn * d.real, own * u.imag - turn * d.imag
                total += re * re + im * im
            out[j, cell] = total / per
