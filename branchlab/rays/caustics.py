"""Caustic points: where neighbouring rays of a front cross."""

from collections.abc import Iterable
from typing import NamedTuple

import numpy as np

from branchlab.rays.march import RayState


class CausticPoints(NamedTuple):
    """Caustic points in the order of x, arrays of shape (caustic,).

    `ray` is the number of the ray that passes, `order` how many caustics it has passed then, this one included.
    """

    x: np.ndarray
    y: np.ndarray
    p: np.ndarray
    ray: np.ndarray
    order: np.ndarray


def _hermite(f0, f1, d0, d1, t):
    """Return the cubic through values f and t-derivatives d at t = 0, 1, and its t-derivative."""
    c2 = 3.0 * (f1 - f0) - 2.0 * d0 - d1
    c3 = d0 + d1 - 2.0 * (f1 - f0)
    return f0 + t * (d0 + t * (c2 + t * c3)), d0 + t * (2.0 * c2 + t * 3.0 * c3)


def _root(f0, f1, d0, d1):
    """Return a zero in (0, 1) of cubics that change sign there (Newton, safeguarded by bisection; vectorised)."""
    low, high = np.zeros_like(f0), np.ones_like(f0)
    t = f0 / (f0 - f1)
    for _ in range(60):
        f, slope = _hermite(f0, f1, d0, d1, t)
        same = f * f0 > 0
        low, high = np.where(same, t, low), np.where(same, high, t)
        step = np.divide(f, slope, out=np.zeros_like(f), where=slope != 0)
        inside = (t - step >= low) & (t - step <= high) & (slope != 0)
        new = np.where(inside, t - step, 0.5 * (low + high))
        moved = np.max(np.abs(new - t), initial=0.0)
        t = new
        if moved < 1e-14:
            break
    return t


def _rates(state: RayState):
    """Return dy/dx, dp/dx (None for paraxial rays: not used) and dA/dx."""
    if state.px is None:
        return state.p, None, state.C
    # along a front at fixed x, px**2 + p**2 + v = 1
    return state.p / state.px, state.turn, (state.C - state.p * _forward(state) / state.px) / state.px


def _forward(state: RayState):
    """Return d px/ds of full rays along their front at fixed x."""
    return state.turn * state.A - state.p * state.C / state.px


def caustic_points(states: Iterable[RayState]) -> CausticPoints:
    """Return the zeros of A = dy/ds along rays, from their states at the ends of successive steps.

    Between two states A is the cubic through A and dA/dx, which is C of paraxial rays: exact in free flight, of fourth
    order in the step elsewhere. Two zeros within one step go unseen.
    """
    found = []
    passed = before = None
    for state in states:
        if before is None:
            passed = state.maslov.astype(np.int64)  # -1 before a source on the entry, which is no caustic itself
        else:
            at = np.flatnonzero((before.A < 0.0) != (state.A < 0.0))  # 0 is positive: a zero on a screen counts once
            passed[at] += 1
            ends = [row[at] for one in (before, state) for row in (one.y, one.p, one.A)]
            rates = [np.zeros(at.size) if row is None else row[at] for one in (before, state) for row in _rates(one)]
            found.append(
                (*ends, *rates, np.full(at.size, before.x), np.full(at.size, state.x - before.x), at, passed[at])
            )
        before = state
    columns = [np.concatenate(column) for column in zip(*found, strict=True)]
    y0, p0, a0, y1, p1, a1, dy0, dp0, da0, dy1, dp1, da1, x, h, ray, order = columns
    t = _root(a0, a1, h * da0, h * da1)
    y, slope = _hermite(y0, y1, h * dy0, h * dy1, t)
    p = slope / h if before.px is None else _hermite(p0, p1, h * dp0, h * dp1, t)[0]
    points = CausticPoints(x + t * h, y, p, ray, order)
    in_order = np.argsort(points.x, kind="stable")
    in_order = in_order[points.order[in_order] > 0]
    return CausticPoints(*(column[in_order] for column in points))
