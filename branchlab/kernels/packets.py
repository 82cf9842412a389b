"""A wave on a line as a sum of Gaussian packets, one per ray."""

from math import exp, floor, sqrt

import numpy as np
from numba import get_num_threads, int64, njit, prange

from branchlab.kernels.elementary import cos_sin, exponential
from branchlab.kernels.lanes import add_block, look_up, put

_OPTIONS = {"nogil": True, "cache": True, "error_model": "numpy", "fastmath": {"contract", "nsz"}}

BATCH = 64  # packets whose coefficients are prepared together: a vectorised loop, 13 KB that stay in the L1 cache
SHARES = 8  # partial sums, fixed so that the result does not depend on the number of threads
THINNEST = 32.0  # packets thinned by exp(-32) = 1e-14 or more are skipped


@njit(**_OPTIONS)
def _prepare(first, count, y, p, path, turn, amplitude, stretch, k, gamma, start, pitch, half, centre, c, z):
    """Coefficients of packets first ... first + count - 1.

    On the point j of the window (j = 0 is `half` points below the point next to the packet) the packet is
    c z**j exp(-k gamma ((j - half) pitch)**2 / 2). Writes that next point to `centre`, c as (real, imaginary)
    rows of `c`, and z**0 ... z**8 as nine rows of real and nine of imaginary parts to `z`.
    """
    decay = k * gamma
    for t in range(count):
        i = first + t
        u = (look_up(y, i) - start) / pitch - 0.5
        nearest = floor(u + 0.5)
        off = (nearest - u) * pitch
        kp = k * look_up(p, i)
        rate, phase = -decay * off * pitch, kp * pitch
        thin = k * look_up(stretch, i)
        thin *= thin
        size = look_up(amplitude, i) * exponential(-0.5 * decay * off * off - rate * half - min(thin, THINNEST))
        re, im = cos_sin(k * look_up(path, i) + look_up(turn, i) + kp * off - phase * half)
        keep = thin < THINNEST and size == size and re == re  # not nan
        put(centre, t, nearest if keep else 0.0)
        put(c, t, size * re if keep else 0.0)
        put(c, BATCH + t, size * im if keep else 0.0)
        growth = exponential(rate)
        re, im = cos_sin(phase)
        zr, zi = growth * re, growth * im
        put(z, t, 1.0)
        put(z, 9 * BATCH + t, 0.0)
        wr, wi = zr, zi
        for power in range(1, 9):
            put(z, power * BATCH + t, wr)
            put(z, (9 + power) * BATCH + t, wi)
            wr, wi = wr * zr - wi * zi, wr * zi + wi * zr


@njit(**_OPTIONS)
def _room(decay, pitch, n, reach):
    """Return half the width of a packet's window (whole pairs of blocks of eight), its Gaussian, empty sums.

    Real and imaginary rows end in different places of a 4 KiB page: stores to one do not stall loads of the other.
    """
    half = 8 * int64(floor(reach / sqrt(decay) / pitch / 8.0) + 1.0)
    envelope = np.empty(2 * half)
    for j in range(2 * half):
        envelope[j] = exp(-0.5 * decay * ((j - half) * pitch) ** 2)
    row = ((n + 4 * half + 511) // 512) * 512 + 264
    return half, envelope, np.zeros((SHARES, 2 * row))


@njit(**_OPTIONS)
def _deposit(out, envelope, share, y, p, path, turn, amplitude, stretch, k, gamma, start, pitch, n, half, periodic):
    """Add one share of the packets to `out`, real parts first; point j is at j + 2 half."""
    row, width, rays = out.size // 2, 2 * half, y.size
    centre, c, z, powers = np.empty(BATCH), np.empty(2 * BATCH), np.empty(18 * BATCH), np.empty(16)
    last = rays * (share + 1) // SHARES
    for first in range(rays * share // SHARES, last, BATCH):
        count = min(BATCH, last - first)
        _prepare(first, count, y, p, path, turn, amplitude, stretch, k, gamma, start, pitch, half, centre, c, z)
        for t in range(count):
            cr, ci = c[t], c[BATCH + t]
            if cr == 0.0 and ci == 0.0:
                continue
            if periodic:
                at = int64(centre[t] - n * floor(centre[t] / n)) + half
            elif centre[t] > -half and centre[t] < n + half:
                at = int64(centre[t]) + half
            else:
                continue
            for power in range(8):
                powers[power] = z[power * BATCH + t]
                powers[8 + power] = z[(9 + power) * BATCH + t]
            wr, wi = z[8 * BATCH + t], z[17 * BATCH + t]
            # two blocks a turn: their coefficients are two independent chains of products
            dr, di = cr * wr - ci * wi, cr * wi + ci * wr
            wr, wi = wr * wr - wi * wi, 2.0 * wr * wi
            for j in range(0, width, 16):
                add_block(out, at + j, at + j + row, envelope, j, powers, cr, ci)
                add_block(out, at + j + 8, at + j + 8 + row, envelope, j + 8, powers, dr, di)
                cr, ci = cr * wr - ci * wi, cr * wi + ci * wr
                dr, di = dr * wr - di * wi, dr * wi + di * wr


@njit(**_OPTIONS)
def _joined(sums, half, n, periodic):
    """Return the envelope: all shares added, what hangs over the ends wrapped or dropped."""
    psi = np.zeros(n, dtype=np.complex128)
    row = sums.shape[1] // 2
    for share in range(SHARES):
        for j in range(n + 4 * half):
            to = j - 2 * half
            if periodic:
                to -= n * int64(floor(to / n))
            if to >= 0 and to < n:
                psi[to] += complex(sums[share, j], sums[share, row + j])
    return psi


@njit(parallel=True, **_OPTIONS)
def add_packets(y, p, path, turn, amplitude, stretch, k, gamma, start, pitch, n, reach, periodic):
    """Return the sum of Gaussian packets on n equidistant points.

    psi(Y) = sum_i amplitude_i exp(-(k stretch_i)**2) exp(i [k path_i + turn_i])
             exp(i k p_i (Y - y_i) - k gamma (Y - y_i)**2 / 2),    Y = start + (j + 1/2) pitch

    Parameters
    ----------
    y, p, path, turn, amplitude, stretch : float64, shape (ray,), contiguous
        Place, transverse momentum, path length, constant phase (radians), real weight and thinning length of
        each packet. Packets of weight 0 or with a nan are skipped.
    k, gamma : float
        Wavenumber and packet curvature (1/length); packets have the rms width 1/sqrt(2 k gamma) in intensity.
    start, pitch, n : float, float, int
        The points. A pitch beyond 10/sqrt(k gamma) overflows: packets would fall between the points.
    reach : float
        A packet is cut where its Gaussian is below exp(-reach**2 / 2).
    periodic : bool
        Wrap packets round the box, or clip them at its ends.

    Returns
    -------
    complex128, shape (n,)
        The same to the last bit for any number of threads, and from `add_packets_alone`.
    """
    half, envelope, sums = _room(k * gamma, pitch, n, reach)
    for share in prange(SHARES):
        _deposit(
            sums[share], envelope, share,
            y, p, path, turn, amplitude, stretch, k, gamma, start, pitch, n, half, periodic,
        )  # fmt: skip
    return _joined(sums, half, n, periodic)


@njit(**_OPTIONS)
def add_packets_alone(y, p, path, turn, amplitude, stretch, k, gamma, start, pitch, n, reach, periodic):
    """Return what `add_packets` returns, by one thread: for callers that have work for all threads."""
    half, envelope, sums = _room(k * gamma, pitch, n, reach)
    for share in range(SHARES):
        _deposit(
            sums[share], envelope, share,
            y, p, path, turn, amplitude, stretch, k, gamma, start, pitch, n, half, periodic,
        )  # fmt: skip
    return _joined(sums, half, n, periodic)


def threads() -> int:
    """Return how many threads the compiled loops may use."""
    return get_num_threads()
