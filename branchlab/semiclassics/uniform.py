"""Sums over branches: each with its own amplitude (primitive), or pairs joined at folds (uniform Airy)."""

import numpy as np
from scipy.special import airy

from branchlab.semiclassics.branches import Branches, find_branches
from branchlab.semiclassics.complex_rays import ComplexRays
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


def _uniform(z, total, difference):
    """Return sqrt(pi) [total Ai(-z) - i difference Ai'(-z)]."""
    value, slope = airy(-z)[:2]
    return np.sqrt(np.pi) * (total * value - 1j * difference * slope)


class AiryPairs:
    """What the uniform form of every fold adds to the primitive sum on one line.

    A pair of branches with paths S0 < S1, sizes a0, a1 and Maslov indices m, m + 1 is replaced by

        exp(i k (S0 + S1)/2 - i pi (m + 1/2)/2) sqrt(pi) [(a0 + a1) z**(1/4) Ai(-z) - i (a0 - a1) z**(-1/4) Ai'(-z)]

    with z = (3 k (S1 - S0)/4)**(2/3) (Chester, Friedman & Ursell, Proc. Camb. Phil. Soc. 53 (1957) 599). Beyond
    the fold the two branches go on as complex conjugate rays (`ComplexRays`).

    Parameters
    ----------
    manifold : Manifold
    line : Line
    """

    def __init__(self, manifold: Manifold, line: Line):
        self.manifold, self.line = manifold, line
        self.branches = branches = find_branches(manifold, line)
        usable = np.isfinite(branches.folds[:, 1]) & ~branches.torn
        self.folds = branches.folds[usable]
        # near the fold Y - place = curvature (s - s_f)**2 / 2 and p - slope = turn (s - s_f)
        _, self.place, self.slope, self.path, self.curvature, self.turn, self.amplitude = self.folds.T
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
        if self.folds.shape[0] == 0:
            return psi
        rays = ComplexRays(self.manifold, self.folds, k)
        # the amplitudes of the uniform form at the folds themselves, from just behind them
        every = np.arange(self.side.size)
        _, total, difference, _ = rays.beyond(every, -self.side * CLOSE * rays.width)
        return psi + self._lit(k, rays.width, total, difference) + self._dark(k, rays)

    def _first_column(self):
        """Return the first point on the lit side of each fold."""
        at = (self.place - self.line.start) / self.line.pitch - 0.5
        return np.where(self.side > 0, np.ceil(at), np.ceil(at) - 1).astype(np.int64)

    def _lit(self, k, width, total, difference):
        """Return uniform minus primitive pairs on the lit side of all folds."""
        fold, (path0, path1), (size0, size1) = self.pair, self.pair_path, self.pair_size
        local = self.pair_distance / width[fold]
        z = np.maximum((0.75 * k * np.maximum(path1 - path0, 0.0)) ** (2.0 / 3.0), CLOSE)
        close = local < CLOSE
        pair = _uniform(
            np.where(close, local, z),
            np.where(close, total[fold], (size0 + size1) * z**0.25),
            np.where(close, difference[fold], (size0 - size1) * z**-0.25),
        )
        common = np.exp(1j * (0.5 * k * (path0 + path1) - 0.5 * np.pi * (self.index[fold] + 0.5)))
        half = np.exp(1j * (0.5 * k * (path1 - path0) - 0.25 * np.pi))
        change = common * (pair - size0 / half - size1 * half)
        # a branch that ends at another fold leaves the pair before it gets there
        farthest = np.zeros(width.size)
        np.maximum.at(farthest, fold, z)
        change *= np.where(self.closed[fold], _fade(z / farthest[fold]), 1.0)
        return _gather(self.pair_column, change, self.line.n)

    def _dark(self, k, rays):
        """Return the fields beyond all folds."""
        first = self._first_column()
        reach = np.minimum(np.floor(DARK * rays.width / self.line.pitch), self.line.n).astype(np.int64) + 1
        begin = np.where(self.side > 0, first - reach, first + 1)
        fold, column = _ranges(begin, begin + reach)
        if not self.line.periodic:
            inside = (column >= 0) & (column < self.line.n)
            fold, column = fold[inside], column[inside]
        offset = self.line.start + (column + 0.5) * self.line.pitch - self.place[fold]
        closest = np.maximum(np.abs(offset), CLOSE * rays.width[fold])
        z, total, difference, path = rays.beyond(fold, -self.side[fold] * closest)
        phase = k * path - 0.5 * np.pi * (self.index[fold] + 0.5)
        return _gather(column, _uniform(-z, total, difference) * np.exp(1j * phase), self.line.n)
