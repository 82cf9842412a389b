"""Slow plain twins of the ray kernels, with splines and roots of scipy, and rays by a library's ODE solver."""

import numpy as np
from scipy.integrate import solve_ivp
from scipy.interpolate import CubicHermiteSpline, make_interp_spline
from scipy.optimize import brentq


class PeriodicSpline:
    """The quintic spline through equidistant samples of one period; called with y and the order of the derivative."""

    def __init__(self, samples, start, span):
        self.start, self.span = start, span
        nodes = start + span * np.arange(samples.size + 1) / samples.size
        self.spline = make_interp_spline(nodes, np.append(samples, samples[0]), k=5, bc_type="periodic")

    def __call__(self, y, order=0):
        return self.spline(self.start + np.mod(y - self.start, self.span), order)


def to_true(ray, w, w_x, c):
    """Turn a ray (y, p, action, A, C, B, D) from the kernel map's coordinates into true ones.

    Kick by c W_x, then the lift of Y = y + c W_y: P = p/(dY/dy).
    """
    y, p, action, a, cc, b, d = ray
    p = p - c * w_x(y, 1)
    action = action - c * w_x(y)
    stretch = 1 + c * w(y, 2)
    tangent = np.array([[stretch, 0], [-p * c * w(y, 3) / stretch**2, 1 / stretch]])
    (a, b), (cc, d) = tangent @ np.array([[1, 0], [-c * w_x(y, 2), 1]]) @ np.array([[a, b], [cc, d]])
    return np.array([y + c * w(y, 1), p / stretch, action, a, cc, b, d])


def from_true(ray, w, w_x, c):
    """Undo `to_true`; the inverse of its tangent is found by linear algebra."""
    true, p_true, action, a, cc, b, d = ray
    y = brentq(lambda y: y + c * w(y, 1) - true, true - 0.5, true + 0.5, xtol=1e-15)
    p = p_true * (1 + c * w(y, 2)) + c * w_x(y, 1)
    _, _, _, ta, tc, tb, td = to_true(np.array([y, p, 0, 1, 0, 0, 1.0]), w, w_x, c)
    (a, b), (cc, d) = np.linalg.solve(np.array([[ta, tb], [tc, td]]), np.array([[a, b], [cc, d]]))
    return np.array([y, p, action + c * w_x(y), a, cc, b, d])


def kernel_step(ray, w, h):
    """Drift, kick, drift of one ray; returns it with the number of sign changes of A."""
    y, p, action, a, cc, b, d = ray
    turns = 0
    for _ in range(2):
        before = a
        y, action, a, b = y + 0.5 * h * p, action + 0.25 * h * p**2, a + 0.5 * h * cc, b + 0.5 * h * d
        turns += (before < 0) != (a < 0)
        if _ == 0:
            action = action - h * w(y)
            p, cc, d = p - h * w(y, 1), cc - h * w(y, 2) * a, d - h * w(y, 2) * b
    return np.array([y, p, action, a, cc, b, d]), turns


def by_ode_solver(medium, x, y, p, *, rtol=1e-12):
    """Ray (y, p, action, A, C, B, D) at x from the exact v of a medium, by the order-8 Runge-Kutta of scipy."""

    def rates(at, state):
        y, p, _, a, c, b, d = state
        v, v_y, v_yy = (medium.rows([at], [y], dy=order).item() for order in range(3))
        return [p, -0.5 * v_y, 0.5 * p**2 - 0.5 * v, c, -0.5 * v_yy * a, d, -0.5 * v_yy * b]

    start = [y, p, 0.0, 1.0, 0.0, 0.0, 1.0]
    return solve_ivp(rates, (0.0, x), start, method="DOP853", rtol=rtol, atol=1e-13).y[:, -1]


def lay_tubes(y, stretch, steps, flux, start, pitch, cells, periodic):
    """Lay the tubes of an open front into cells: every cell edge is a root of the cubic, found by scipy."""
    laid, outside = np.zeros(cells), 0.0
    for i in range(flux.size):
        ends = (y[i : i + 2] - start) / pitch
        curve = CubicHermiteSpline([0.0, 1.0], ends, stretch[i : i + 2] * steps[i] / pitch)
        low, high = np.floor(curve(np.linspace(0, 1, 201))).min() - 1, np.ceil(curve(np.linspace(0, 1, 201))).max() + 1
        cuts = [curve.solve(edge, extrapolate=False) for edge in np.arange(low, high + 1)]
        t = np.unique(np.concatenate([[0.0, 1.0], *cuts]).clip(0.0, 1.0))
        for left, right in zip(t[:-1], t[1:], strict=True):
            cell = int(np.floor(curve(0.5 * (left + right))))
            share = flux[i] * (right - left)
            if periodic:
                laid[cell % cells] += share
            elif 0 <= cell < cells:
                laid[cell] += share
            else:
                outside += share
    return laid, outside
