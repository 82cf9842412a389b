"""Passes over a stationary wave in the plane: the damped operator and the in-medium sweeps, row by row.

Every pass takes a range of rows or columns, so that two Python threads can share one array; transforms are those of
`kernels.native_fft`, called from inside the loops. Real parameters come in arrays of the field's own precision, for a
literal would turn single precision into double.
"""

from numba import njit

from branchlab.kernels.native_fft import transform

_OPTIONS = {"nogil": True, "cache": True, "error_model": "numpy", "fastmath": {"contract", "nsz"}}
COLUMNS = 8  # columns that are gathered at once: a cache line of complex64


@njit(**_OPTIONS)
def transform_rows(field, begin, end, block, address, plan):
    """Transform rows begin ... end - 1 in place.

    Parameters
    ----------
    field : ndarray of complex, shape (rows, n)
    begin, end : int
    block : ndarray, shape (1, n)
        Aligned working room.
    address, plan : int
        Of a `kernels.native_fft.NativePlan`.
    """
    data, row = block.ctypes.data, block[0]
    for n in range(begin, end):
        line = field[n]
        for i in range(row.size):
            row[i] = line[i]
        transform(address, plan, data)
        for i in range(row.size):
            line[i] = row[i]


@njit(**_OPTIONS)
def scatter_rows(out, field, v, damp_x, damp_y, strength, begin, end, block, address, plan):
    """Set rows of `out` to the transform of V field, V = strength (v + i (damp_x + damp_y)).

    Parameters
    ----------
    out, field : ndarrays of complex, shape (rows, n)
    v : ndarray, shape (rows, n)
    damp_x, damp_y : ndarrays, shapes (rows,), (n,)
        eps - w_x and -w_y.
    strength : ndarray, shape (1,)
        k**2.
    begin, end, block, address, plan
        As for `transform_rows`.
    """
    data, row, k2 = block.ctypes.data, block[0], strength[0]
    for n in range(begin, end):
        line, vn, dx, target = field[n], v[n], damp_x[n], out[n]
        for i in range(row.size):
            row[i] = line[i] * complex(k2 * vn[i], k2 * (dx + damp_y[i]))
        transform(address, plan, data)
        for i in range(row.size):
            target[i] = row[i]


@njit(**_OPTIONS)
def subtract_rows(out, field, spectrum, begin, end, block, address, plan):
    """Set rows of `out` to those of `field` minus the inverse transform of those of `spectrum`."""
    data, row = block.ctypes.data, block[0]
    for n in range(begin, end):
        line, source, target = field[n], spectrum[n], out[n]
        for i in range(row.size):
            row[i] = source[i]
        transform(address, plan, data)
        for i in range(row.size):
            target[i] = line[i] - row[i]


@njit(**_OPTIONS)
def green_columns(field, qx2, qy2, numbers, begin, end, block, address, plans):
    """Apply scale / (k**2 (1 + i eps) - qx**2 - qy**2) to columns begin ... end - 1, transforming along them and back.

    Parameters
    ----------
    field : ndarray of complex, shape (nx, ny)
        Already transformed along its rows.
    qx2, qy2 : ndarrays, shapes (nx,), (ny,)
        Squared wavenumbers.
    numbers : ndarray, shape (3,)
        k**2, k**2 eps, scale.
    begin, end : int
    block : ndarray, shape (COLUMNS, nx)
    address, plans : int, (int, int)
    """
    data = block.ctypes.data
    k2, loss, scale = numbers[0], numbers[1], numbers[2]
    for first in range(begin, end, COLUMNS):
        count = min(COLUMNS, end - first)
        for n in range(field.shape[0]):
            for c in range(count):
                block[c, n] = field[n, first + c]
        transform(address, plans[0], data)
        for c in range(count):
            own, line = k2 - qy2[first + c], block[c]
            for n in range(line.size):
                d = own - qx2[n]
                s = scale / (d * d + loss * loss)
                line[n] *= complex(d * s, -loss * s)
        transform(address, plans[1], data)
        for n in range(field.shape[0]):
            for c in range(count):
                field[n, first + c] = block[c, n]


@njit(**_OPTIONS)
def source_rows(q, out, field, v, damp_x, damp_y, numbers, weight, begin, end, block, address, plans):
    """Set rows of q to ifft(weight fft(V field)), and rows of `out` to field + c0 V field + q.

    Parameters
    ----------
    numbers : ndarray, shape (2,)
        k**2 and c0, what a point gives to itself.
    weight : ndarray of complex, shape (n,)
        h/(2 i p) / n.
    """
    data, row = block.ctypes.data, block[0]
    k2, own = numbers[0], numbers[1]
    for n in range(begin, end):
        line, vn, dx, target, qn = field[n], v[n], damp_x[n], out[n], q[n]
        for i in range(row.size):
            s = line[i] * complex(k2 * vn[i], k2 * (dx + damp_y[i]))
            row[i] = s
            target[i] = line[i] + own * s
        transform(address, plans[0], data)
        for i in range(row.size):
            row[i] *= weight[i]
        transform(address, plans[1], data)
        for i in range(row.size):
            qn[i] = row[i]
            target[i] += row[i]


@njit(**_OPTIONS)
def sweep_rows(out, q, shape, gain, screen, step, bend, curve, begin, end, backward, pair, address, singles, pairs):
    """March a wave over rows begin ... end - 1, up or down, and add it to `out`.

    At a row: half a screen, out += gain a, the source joins as q gain, half a screen; between rows the factor `step` in
    Fourier space. Every two rows share the rank-1 correction 1 + shape(x, y) bend(q) of the step between them.

    Parameters
    ----------
    out, q : ndarrays of complex, shape (rows, n)
    shape : ndarray, shape (rows, n)
        v + curve v**2 is the correction's part in space; `shape` is v, clipped.
    gain : ndarray, shape (3,)
        1, 1/4, 5/32: gain = 1 + v/4 + 5 v**2/32, the series of (1 - v)**(-1/4).
    screen : ndarray of complex, shape (rows, n)
        exp(-i (kh/2) (1 - sqrt(1 - v + i w))).
    step, bend : ndarrays of complex, shape (n,)
        exp(i p h) / n; the correction's part in Fourier space.
    curve : ndarray, shape (1,)
    begin, end : int
        An even number of rows.
    backward : bool
        From row end - 1 down to `begin`.
    pair : ndarray of complex, shape (2, n)
        State of the march between calls: the transformed wave in row 0.
    address : int
    singles, pairs : (int, int)
        Plans forward and inverse of one row and of two.
    """
    data, a, b = pair.ctypes.data, pair[0], pair[1]
    one, g1, g2, c2 = gain[0], gain[1], gain[2], curve[0]
    for m in range(end - begin):
        n = end - 1 - m if backward else begin + m
        vn, sn, qn, on = shape[n], screen[n], q[n], out[n]
        if m & 1:
            transform(address, pairs[1], data)
            for i in range(a.size):
                v, s = vn[i], sn[i]
                f = one + v * (g1 + g2 * v)
                wave = (a[i] + (v + c2 * v * v) * b[i]) * s
                on[i] += wave * f
                a[i] = (wave + qn[i] * f) * s
            transform(address, singles[0], data)
            for i in range(a.size):
                a[i] *= step[i]
        else:
            transform(address, singles[1], data)
            for i in range(a.size):
                v, s = vn[i], sn[i]
                f = one + v * (g1 + g2 * v)
                wave = a[i] * s
                on[i] += wave * f
                wave = (wave + qn[i] * f) * s
                a[i] = wave
                b[i] = (v + c2 * v * v) * wave
            transform(address, pairs[0], data)
            for i in range(a.size):
                wave = step[i] * (a[i] + bend[i] * b[i])
                a[i] = wave
                b[i] = bend[i] * wave


@njit(**_OPTIONS)
def split_columns(field, across, qx, qy, edges, weight_x, weight_y, begin, end, block, address, plans):
    """Share columns between waves along x and waves along y, by the angle of their wavenumbers.

    `field` keeps (1 - s) weight_x(qy) of itself, back in x; `across` gets s weight_y(qx), still in qx; s rises by a
    smoothstep in abs(qy)/(abs(qx) + abs(qy)).

    Parameters
    ----------
    field, across : ndarrays of complex, shape (nx, ny)
    qx, qy : ndarrays, shapes (nx,), (ny,)
        Magnitudes of wavenumbers.
    edges : ndarray, shape (6,)
        Where s begins to rise, 1 over the length of its rise, a tiny number, 0, 1, 2.
    weight_x, weight_y : ndarrays of complex, shapes (ny,), (nx,)
    """
    data = block.ctypes.data
    low, rise, tiny, zero, one, two = edges[0], edges[1], edges[2], edges[3], edges[4], edges[5]
    for first in range(begin, end, COLUMNS):
        count = min(COLUMNS, end - first)
        for n in range(field.shape[0]):
            for c in range(count):
                block[c, n] = field[n, first + c]
        transform(address, plans[0], data)
        for c in range(count):
            ay, own, line = qy[first + c], weight_x[first + c], block[c]
            for n in range(line.size):
                u = min(max((ay / (qx[n] + ay + tiny) - low) * rise, zero), one)
                s = u * u * (one + two * (one - u))
                wave = line[n]
                across[n, first + c] = wave * (s * weight_y[n])
                line[n] = wave * ((one - s) * own)
        transform(address, plans[1], data)
        for n in range(field.shape[0]):
            for c in range(count):
                field[n, first + c] = block[c, n]


@njit(**_OPTIONS)
def turn_columns(out, field, begin, end, block, address, plan):
    """Set rows begin ... end - 1 of `out` to the transformed columns of `field`."""
    data = block.ctypes.data
    for first in range(begin, end, COLUMNS):
        count = min(COLUMNS, end - first)
        for n in range(field.shape[0]):
            for c in range(count):
                block[c, n] = field[n, first + c]
        transform(address, plan, data)
        for c in range(count):
            line = block[c]
            for n in range(line.size):
                out[first + c, n] = line[n]


@njit(**_OPTIONS)
def begin_rows(out, field, q, v, damp_x, damp_y, numbers, begin, end, block, address, plan):
    """Transform rows of q back, and set rows of `out` to field + c0 V field + q (see `source_rows`)."""
    data, row = block.ctypes.data, block[0]
    k2, own = numbers[0], numbers[1]
    for n in range(begin, end):
        line, vn, dx, target, qn = field[n], v[n], damp_x[n], out[n], q[n]
        for i in range(row.size):
            row[i] = qn[i]
        transform(address, plan, data)
        for i in range(row.size):
            qn[i] = row[i]
            target[i] = line[i] + own * (line[i] * complex(k2 * vn[i], k2 * (dx + damp_y[i]))) + row[i]


@njit(**_OPTIONS)
def add_turned(out, turned, begin, end):
    """Add the transpose of `turned` to rows begin ... end - 1 of `out`."""
    side = 32
    for rows in range(begin, end, side):
        for columns in range(0, out.shape[1], side):
            for n in range(rows, min(rows + side, end)):
                for i in range(columns, min(columns + side, out.shape[1])):
                    out[n, i] += turned[i, n]


@njit(**(_OPTIONS | {"fastmath": {"contract", "nsz", "reassoc"}}))
def inner(a, b, begin, end):
    """Return sum conj(a) b over rows begin ... end - 1, in double precision."""
    real, imaginary = 0.0, 0.0
    for n in range(begin, end):
        an, bn = a[n], b[n]
        re, im = 0.0, 0.0
        for i in range(an.size):
            x, y = an[i], bn[i]
            re += x.real * y.real + x.imag * y.imag
            im += x.real * y.imag - x.imag * y.real
        real += re
        imaginary += im
    return complex(real, imaginary)


@njit(**_OPTIONS)
def add_scaled(out, factor, field, begin, end):
    """Add factor[0] times `field` to rows begin ... end - 1 of `out`."""
    c = factor[0]
    for n in range(begin, end):
        target, line = out[n], field[n]
        for i in range(line.size):
            target[i] += c * line[i]
