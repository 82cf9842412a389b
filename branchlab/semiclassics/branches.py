"""The branches of a front on a screen, and the folds between them."""

import attrs
import numpy as np

from branchlab.kernels.branches import land
from branchlab.semiclassics.manifold import Line, Manifold

SMALLEST_STRETCH = 1e-9
"""dy/ds below which a point counts as lying on the fold itself: where the primitive amplitude stops growing."""
_EVERYWHERE = 1 << 40  # columns of a periodic line are not wrapped while branches are followed
_PLACE, _CURVATURE, _TURN = 1, 4, 5  # columns of a fold: y, d2y/ds2, dp/ds (see kernels.branches.land)


@attrs.frozen(slots=False, eq=False)
class Branches:
    """Every branch of a front at every point of a line.

    Attributes
    ----------
    column, branch : ndarray of int, shape (landing,)
        Number of the point (not wrapped into the box) and of the branch; sorted by branch, then column.
    path, size : ndarray, shape (landing,)
        Action (tilt removed) and amplitude/sqrt(abs(dy/ds)) of the branch there.
    maslov : ndarray of int, shape (branch,)
    begin, end : ndarray of int, shape (branch,)
        The branch covers begin <= column < end.
    ended : ndarray of bool, shape (branch,)
        The branch has a fold at both ends.
    folds : ndarray, shape (fold, 7)
        Front parameter in units of ds, y, p, action, d2y/ds2, dp/ds, amplitude.
    before, after, shift : ndarray of int, shape (fold,)
        The branches that meet at the fold; the former's columns are reckoned from the fold after adding shift.
    torn : ndarray of bool, shape (fold,)
        The Maslov indices of the two do not differ by one: the rays there are too far apart to be followed.
    gaps : ndarray, shape (segment,)
        Action gained from one ray to the next minus the integral of p dy.
    """

    column: np.ndarray
    branch: np.ndarray
    path: np.ndarray
    size: np.ndarray
    maslov: np.ndarray
    begin: np.ndarray
    end: np.ndarray
    ended: np.ndarray
    folds: np.ndarray
    before: np.ndarray
    after: np.ndarray
    shift: np.ndarray
    torn: np.ndarray
    gaps: np.ndarray

    def find(self, branch, column):
        """Return the indices of landings and a mask that tells which exist."""
        keys = self.branch * _EVERYWHERE + self.column
        wanted = branch * _EVERYWHERE + column
        index = np.minimum(np.searchsorted(keys, wanted), max(keys.size - 1, 0))
        return index, (keys[index] == wanted) if keys.size else np.zeros(wanted.shape, dtype=bool)


def find_branches(manifold: Manifold, line: Line) -> Branches:
    """Invert y(s) of a front at the points of a line.

    Parameters
    ----------
    manifold : Manifold
        Rays that are gone (nan) interrupt the front.
    line : Line
    """
    m = manifold
    low, high = (-_EVERYWHERE // 4, _EVERYWHERE // 4) if line.periodic else (0, line.n)
    rays = [np.ascontiguousarray(a, dtype=np.float64) for a in (m.y, m.p, m.action, m.A, m.C, m.amplitude)]
    closed = m.lap != 0.0
    fixed = (*rays, m.ds, closed, m.lap, line.start, line.pitch, low, high)
    none = np.empty((0, 2), np.int64), np.empty((0, 4)), np.empty(0, np.int64), np.empty((0, 7)), np.empty(0)
    landings, count = land(*fixed, *none)
    at, values = np.empty((landings, 2), np.int64), np.empty((landings, 4))
    first, folds = np.full(count, -1), np.full((count - 1, 7), np.nan)
    gaps = np.zeros(m.y.size if closed else m.y.size - 1)
    land(*fixed, at, values, first, folds, gaps)

    step = np.where(folds[:, _CURVATURE] * folds[:, _TURN] > 0, 1, -1)
    folded = np.isfinite(folds[:, _PLACE])
    # on the side of a fold where (dy/ds)(dp/ds) > 0 the rays have passed it: there the index is higher by one
    maslov = np.where(first >= 0, m.maslov[np.maximum(first, 0)].astype(np.int64), 0)
    for b in np.flatnonzero(first < 0):  # a branch between two rays
        maslov[b] = maslov[b - 1] + step[b - 1] if b else 0
    torn = folded & (np.diff(maslov) != step)

    column, branch = at[:, 0], at[:, 1]
    before, after, shift = np.arange(count - 1), np.arange(1, count), np.zeros(count - 1, dtype=np.int64)
    ended = np.zeros(count, dtype=bool)
    ended[1:-1] = folded[:-1] & folded[1:]
    if closed and count > 1:  # the first branch is the rest of the last one, a lap further on
        turn = round(m.lap / line.pitch)
        column = column + np.where(branch == 0, turn, 0)
        branch = np.where(branch == 0, count - 1, branch)
        before[0], shift[0] = count - 1, -turn
        ended[-1] = folded[0] and folded[-1]
    order = np.lexsort((column, branch))
    column, branch = column[order], branch[order]
    begin = np.searchsorted(branch, np.arange(count), side="left")
    stop = np.searchsorted(branch, np.arange(count), side="right")
    lit = stop > begin
    start_column, end_column = np.zeros(count, np.int64), np.zeros(count, np.int64)
    start_column[lit], end_column[lit] = column[begin[lit]], column[stop[lit] - 1] + 1
    size = values[order, 3] / np.sqrt(np.maximum(values[order, 0], SMALLEST_STRETCH))
    return Branches(
        column,
        branch,
        values[order, 1],
        size,
        maslov,
        start_column,
        end_column,
        ended,
        folds,
        before,
        after,
        shift,
        torn,
        gaps,
    )
