"""Caustic points: where neighbouring rays of a front cross."""

from collections.abc import Iterable
from typing import NamedTuple

import numpy as np

from branchlab.rays.march import RayState


class CausticPoints(NamedTuple):
    """Caustic points in the order of x, arrays of shape (caustic,)."""

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
    """Return the zero in (0, 1) of cubics that change sign there (bisection and Newton, vectorised)."""
    low, high = np.zeros_like(f0), np.ones_like(f0)
    t = f0 / (f0 - f1)
    for _ in range(60):
        f, slope = _hermite(f0, f1, d0, d1, t)
        same = f * f0 > 0
        low, high = np.where(same, t, low), np.where(same, high, t)
        step = np.divide(f, slope, out=np.zeros_like(f), where=slope != 0)
        new = np.where((t - step > low) & (t - step < high) & (slope != 0), t - step, 0.5 * (low + high))
        if np.max(np.abs(new - t), initial=0.0) < 1e-15:
            break
        t = np.where(f == 0, t, new)
    return t


def caustic_points(states: Iterable[RayState]) -> CausticPoints:
    """Return the zeros of A = dy/ds along rays, from their states at the ends of successive steps.

    Between two states A is the cubic through A and C = dA/dx: exact in free flight, of fourth order in the step
    elsewhere. Two zeros within one step go unseen.
    """
    found = []
    passed = before = None
    for state in states:
        if before is None:
            passed = np.zeros(state.y.size, dtype=np.int64)
        else:
            at = np.flatnonzero(before.A * state.A < 0.0)
            h = state.x - before.x
            t = _root(before.A[at], state.A[at], h * before.C[at], h * state.C[at])
            y, slope = _hermite(before.y[at], state.y[at], h * before.p[at], h * state.p[at], t)
            passed[at] += 1
            found.append((before.x + t * h, y, slope / h, at, passed[at].copy()))
        before = state
    return CausticPoints(*(np.concatenate(column) for column in zip(*found, strict=True)))
