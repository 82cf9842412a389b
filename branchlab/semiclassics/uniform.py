"""Sums over branches: each with its own amplitude (primitive), or pairs joined at folds (uniform Airy)."""

import numpy as np
from scipy.special import airy

from branchlab.semiclassics.branches import Branches, find_branches
from branchlab.semiclassics.manifold import Line, Manifold

CLOSE = 1e-4
"""Airy argument below which a point is on the fold to round-off: the pair is replaced by its limit there."""
DARK = 9.0
"""Airy argument beyond the fold where the sum ends: Ai(9) = 3e-9."""


def primitive_sum(branches: Branches, k: float, n: int) -> np.ndarray:
    """Return the sum of size exp(i k path - i pi maslov/2) over all branches, shape (n,).

    The Van Vleck sum (Van Vleck, PNAS 14 (1928) 178, with the index of Maslov & Fedoriuk, 1981). It diverges
    at folds and ends abruptly behind them; within a few Airy widths (1/k**(2/3)) of one it is wrong.
    """
    phase = k * branches.path - 0.5 * np.pi * branches.maslov[branches.branch]
    return _gather(branches.column, branches.size * np.exp(1j * phase), n)


def _gather(column, values, n):
    """Add values up at columns wrapped into 0 ... n - 1."""
    column = column % n
    real = np.bincount(column, values.real, n)
    return real + 1j * np.bincount(column, values.imag, n)


def _ranges(begin, end):
    """Return (owner, value) that run through begin[i] ... end[i] - 1 for every i."""
    length = np.maximum(end - begin, 0)
    owner = np.repeat(np.arange(length.size), length)
    return owner, np.arange(length.sum()) - np.repeat(np.cumsum(length) - length, length) + begin[owner]


def _fade(t):
    """Return 1 for t <= 1/2 that falls to 0 at t = 1."""
    t = np.clip(2.0 * t - 1.0, 0.0, 1.0)
    return 1.0 - t * t * (3.0 - 2.0 * t)


class AiryPairs:
    """What the uniform form of every fold adds to the primitive sum on one line.

    A pair of branches with paths S0 < S1, sizes a0, a1 and Maslov indices m, m + 1 is replaced by

        exp(i k (S0 + S1)/2 - i pi (m + 1/2)/2) sqrt(pi) [(a0 + a1) z**(1/4) Ai(-z) - i (a0 - a1) z**(-1/4) Ai'(-z)]

    with z = (3 k (S1 - S0)/4)**(2/3) (Chester, Friedman & Ursell, Proc. Camb. Phil. Soc. 53 (1957) 599). Beyond
    the fold the two branches go on as complex conjugate rays: roots of the polynomial through six rays around
    the fold.

    Parameters
    ----------
    manifold : Manifold
    line : Line
    """

    def __init__(self, manifold: Manifold, line: Line):
        self.manifold, self.line = manifold, line
        self.branches = branches = find_branches(manifold, line)
        usable = np.isfinite(branches.folds[:, 1]) & ~branches.torn
        self.number = np.flatnonzero(usable)
        # s: dy/ds at the fold is 0; Y - y = curvature (s - s_f)**2 / 2, p - p_f = turn (s - s_f)
        self.place, self.slope, self.path = branches.folds[usable, 1:4].T
        self.curvature, self.turn, self.amplitude = branches.folds[usable, 4:7].T
        self.side = np.where(self.curvature > 0, 1, -1)  # towards the lit side
        before, after = branches.before[usable], branches.after[usable]
        self.index = np.minimum(branches.maslov[before], branches.maslov[after])
        self._pair_up(before, after, branches.shift[usable])

    def _pair_up(self, before, after, shift):
        """Find the landings of both branches of each fold at every point that both reach."""
        b = self.branches
        first = self._first_column()
        begin = np.maximum(b.begin[before] + shift, b.begin[after])
        end = np.minimum(b.end[before] + shift, b.end[after])
        begin = np.where(self.side > 0, np.maximum(first, begin), begin)
        end = np.where(self.side > 0, end, np.minimum(first + 1, end))
        fold, column = _ranges(begin, end)
        at0, found0 = b.find(before[fold], column - shift[fold])
        at1, found1 = b.find(after[fold], column)
        both = found0 & found1
        fold, column, at0, at1 = fold[both], column[both], at0[both], at1[both]
        late = (b.maslov[after] > b.maslov[before])[fold]
        early, later = np.where(late, at0, at1), np.where(late, at1, at0)
        self.pair = fold
        self.pair_column = column
        self.pair_path = b.path[early], b.path[later]
        self.pair_size = b.size[early], b.size[later]
        self.pair_distance = np.abs(self.line.start + (column + 0.5) * self.line.pitch - self.place[fold])
        self.closed = b.ended[before] | b.ended[after]

    def field(self, k: float) -> np.ndarray:
        """Return the uniform sum for one wavenumber, shape (n,)."""
        psi = primitive_sum(self.branches, k, self.line.n)
        if self.number.size:
            psi += self._lit(k) + self._dark(k)
        return psi

    def _first_column(self):
        """Return the first point on the lit side of each fold."""
        at = (self.place - self.line.start) / self.line.pitch - 0.5
        return np.where(self.side > 0, np.ceil(at), np.ceil(at) - 1).astype(np.int64)

    def _width(self, k):
        """Return the Airy width of each fold, z = distance/width to first order."""
        return 0.5 * np.abs(self.curvature) * (0.5 * k * np.abs(self.turn * self.curvature)) ** (-2.0 / 3.0)

    def _on_fold(self, fold, z, k):
        """Return the limit of a pair at its fold (local Airy function), without the path's phase."""
        strength = (0.5 * k * np.abs(self.turn * self.curvature)) ** (1.0 / 6.0) / np.sqrt(np.abs(self.curvature))
        return 2.0 * np.sqrt(np.pi) * (self.amplitude * strength)[fold] * airy(-z)[0]

    def _lit(self, k):
        """Return uniform minus primitive pairs on the lit side of all folds."""
        fold, (path0, path1), (size0, size1) = self.pair, self.pair_path, self.pair_size
        local = self.pair_distance / self._width(k)[fold]
        z = np.maximum((0.75 * k * np.maximum(path1 - path0, 0.0)) ** (2.0 / 3.0), CLOSE)
        ai, slope = airy(-z)[:2]
        pair = np.sqrt(np.pi) * ((size0 + size1) * z**0.25 * ai - 1j * (size0 - size1) * z**-0.25 * slope)
        pair = np.where(local < CLOSE, self._on_fold(fold, local, k), pair)
        common = np.exp(1j * (0.5 * k * (path0 + path1) - 0.5 * np.pi * (self.index[fold] + 0.5)))
        half = np.exp(1j * (0.5 * k * (path1 - path0) - 0.25 * np.pi))
        change = common * (pair - size0 / half - size1 * half)
        # a branch that ends at another fold leaves the pair before it gets there
        farthest = np.zeros(self.number.size)
        np.maximum.at(farthest, fold, z)
        change *= np.where(self.closed[fold], _fade(z / farthest[fold]), 1.0)
        return _gather(self.pair_column, change, self.line.n)

    def _dark(self, k):
        """Return the fields beyond all folds."""
        width = self._width(k)
        first = self._first_column()
        reach = np.minimum(np.floor(DARK * width / self.line.pitch), self.line.n).astype(np.int64) + 1
        begin = np.where(self.side > 0, first - reach, first + 1)
        fold, column = _ranges(begin, begin + reach)
        if not self.line.periodic:
            inside = (column >= 0) & (column < self.line.n)
            fold, column = fold[inside], column[inside]
        offset = self.line.start + (column + 0.5) * self.line.pitch - self.place[fold]
        local = np.abs(offset) / width[fold]
        plain = self._on_fold(fold, -local, k) * np.exp(1j * k * (self.path[fold] + self.slope[fold] * offset))
        path, spread, good = self._complex_rays(k, fold, offset)
        z = np.where(good, (1.5 * k * np.abs(path.imag)) ** (2.0 / 3.0), 1.0)
        tilt = 0.5 * (np.angle(spread) - 0.5 * np.pi)
        size = 1.0 / np.sqrt(np.abs(spread))
        ai, slope = airy(z)[:2]
        pair = 2.0 * size * np.sqrt(np.pi) * (np.cos(tilt) * z**0.25 * ai - 1j * np.sin(tilt) * z**-0.25 * slope)
        pair = np.where(good & (local > CLOSE), pair * np.exp(1j * k * path.real), plain)
        return _gather(column, pair * np.exp(-0.5j * np.pi * (self.index[fold] + 0.5)), self.line.n)

    def _complex_rays(self, k, fold, offset):
        """Solve y(s) = Y beyond the folds, with s complex.

        Returns the action and e (dy/ds)/amplitude**2 of the ray with the higher index, e the sign of its dy/ds
        on the lit side, and where the root can be trusted: within three spacings of the polynomial's rays. The
        other ray is the conjugate one.
        """
        y, p, amplitude, unit = self._polynomials(k)
        dy, full = _derivative(y), _integral(_product(p, _derivative(y)))
        # the late branch lies on the side where (dy/ds)(dp/ds) > 0
        way = np.sign(self.curvature * self.turn)[fold]
        s = 1j * way * np.sqrt(2.0 * np.abs(offset / self.curvature[fold])) / unit[fold]
        for _ in range(8):
            slope = _value(dy[:, fold], s)
            s = s - (_value(y[:, fold], s) - offset) / np.where(slope == 0, 1.0, slope)
        residual = np.abs(_value(y[:, fold], s) - offset)
        good = (np.abs(s) < 3.0) & (residual < 1e-6 * np.abs(offset)) & (s.imag * way > 0)
        path = self.path[fold] + self.slope[fold] * offset + _value(full[:, fold], s)
        size = _value(amplitude[:, fold], s)
        good &= np.abs(size) > 0.1 * self.amplitude[fold]
        spread = np.sign(self.turn[fold]) * _value(dy[:, fold], s) / unit[fold] / np.where(good, size, 1.0) ** 2
        return path, np.where(good, spread, 1j), good

    def _polynomials(self, k):
        """Return y - y_f, p - p_f and amplitude around each fold as polynomials, and their unit of s.

        Shapes (12, fold), (12, fold), (6, fold), (fold,). Through six rays: the two next to the fold and two on
        either side, the outer ones as far off as the complex rays at z = 1 are from the fold.
        """
        m = self.manifold
        rays, at = m.y.size, self.branches.folds[self.number, 0]
        i = np.floor(at).astype(np.int64)
        far = np.sqrt(2.0 * self._width(k) / np.abs(self.curvature)) / m.ds
        gap = np.diff(at, prepend=-np.inf, append=np.inf)
        far = np.minimum(far, np.minimum(gap[:-1], gap[1:]))  # not beyond the neighbouring folds
        far = np.clip(np.rint(far), 2, max(rays // 8, 2)).astype(np.int64)
        near = (far + 1) // 2
        nodes = np.stack([i - far, i - near, i, i + 1, i + 1 + near, i + 1 + far])
        if m.lap == 0.0:
            nodes += np.maximum(-nodes[0], 0) - np.maximum(nodes[-1] - rays + 1, 0)
        lap, wrapped = np.divmod(nodes, rays)
        unit = far * m.ds
        t = (nodes - at) / far
        powers = t[..., None] ** np.arange(12)
        slopes = np.arange(12) * t[..., None] ** np.maximum(np.arange(12) - 1, 0)
        matrix = np.concatenate([powers, slopes]).transpose(1, 0, 2)
        y = np.concatenate([m.y[wrapped] + lap * m.lap - self.place, m.A[wrapped] * unit])
        p = np.concatenate([m.p[wrapped] - self.slope, m.C[wrapped] * unit])
        both = np.linalg.solve(matrix, np.stack([y, p], axis=-1).transpose(1, 0, 2))
        amplitude = np.linalg.solve(powers[..., :6].transpose(1, 0, 2), m.amplitude[wrapped].T[..., None])
        return both[:, :, 0].T, both[:, :, 1].T, amplitude[:, :, 0].T, unit


def _value(polynomial, s):
    """Horner's rule; coefficients along the first axis, rising."""
    total = polynomial[-1] * np.ones_like(s)
    for row in polynomial[-2::-1]:
        total = total * s + row
    return total


def _derivative(polynomial):
    """Return the coefficients of the derivative."""
    return polynomial[1:] * np.arange(1, polynomial.shape[0])[:, None]


def _integral(polynomial):
    """Return the coefficients of the integral from 0."""
    inner = polynomial / np.arange(1, polynomial.shape[0] + 1)[:, None]
    return np.concatenate([np.zeros((1, polynomial.shape[1])), inner])


def _product(a, b):
    """Return the coefficients of a product."""
    total = np.zeros((a.shape[0] + b.shape[0] - 1, a.shape[1]))
    for power, row in enumerate(b):
        total[power : power + a.shape[0]] += a * row
    return total
