"""Slow plain twin of the full-ray kernel: one ray, small matrices, one line per formula."""

import numpy as np
from scipy.interpolate import BSpline, make_interp_spline
from scipy.optimize import brentq


class TensorSpline:
    """The biquintic periodic interpolant by scipy's B-splines, fitted once along y and once along x."""

    def __init__(self, samples, start, pitch):
        closed = np.pad(samples, ((0, 1), (0, 1)), mode="wrap")
        x, y = (start[i] + pitch[i] * np.arange(closed.shape[i]) for i in (0, 1))
        across = make_interp_spline(y, closed.T, 5, bc_type="periodic")
        self.along, self.knots = make_interp_spline(x, across.c.T, 5, bc_type="periodic"), across.t

    def __call__(self, x, y, dx=0, dy=0):
        return BSpline(self.knots, self.along(x, dx), 5)(y, dy)


class PlainFullRay:
    """A ray of H = p**2/2 + W = 1/2 with its tangents d(x, y, px, py), shape (4, tangents).

    Parameters
    ----------
    spline : callable
        spline(x, y, dx=0, dy=0) gives W~ = W - (step**2/24) (grad W)**2 and its derivatives.
    step : float
    """

    def __init__(self, spline, step, r, p, action, tangents):
        self.spline, self.step = spline, step
        self.r, self.p, self.action, self.tangents = np.array(r), np.array(p), action, np.array(tangents)

    def copy(self):
        return PlainFullRay(self.spline, self.step, self.r, self.p, self.action, self.tangents)

    def _w(self, dx, dy):
        return float(self.spline(*self.r, dx=dx, dy=dy))

    def derivatives(self):
        """Return the value, gradient, Hessian and third derivatives of W~ at the ray."""
        gradient = np.array([self._w(1, 0), self._w(0, 1)])
        hessian = np.array([[self._w(2, 0), self._w(1, 1)], [self._w(1, 1), self._w(0, 2)]])
        third = np.array([[[self._w(3 - a - b - c, a + b + c) for c in (0, 1)] for b in (0, 1)] for a in (0, 1)])
        return self._w(0, 0), gradient, hessian, third

    def drift(self, time):
        self.action += time * (self.p @ self.p + 1) / 2
        self.r = self.r + time * self.p
        self.tangents[:2] += time * self.tangents[2:]

    def kick(self, time, extra):
        """Turn by W~ + extra (grad W~)**2."""
        w, g, h, third = self.derivatives()
        self.p = self.p - time * (g + 2 * extra * h @ g)
        self.action -= time * (w + extra * g @ g)
        self.tangents[2:] -= time * (h + 2 * extra * (h @ h + third @ g)) @ self.tangents[:2]

    def steps(self, number):
        for _ in range(number):
            self.drift(self.step / 2)
            self.kick(self.step, 0.0)
            self.drift(self.step / 2)

    def true(self):
        """Return the ray in true coordinates: the lift of r -> r + c grad W~."""
        c, ray = self.step**2 / 24, self.copy()
        _, g, h, third = self.derivatives()
        jacobian = np.eye(2) + c * h
        ray.r, ray.p = self.r + c * g, np.linalg.solve(jacobian, self.p)
        ray.tangents[:2] = jacobian @ self.tangents[:2]
        ray.tangents[2:] = np.linalg.solve(jacobian, self.tangents[2:] - c * (third @ ray.p) @ self.tangents[:2])
        return ray

    def after(self, time):
        """Return the true ray after one step of scheme A of Chin, Phys. Lett. A 226 (1997) 344."""
        ray, c = self.copy(), self.step**2 / 24
        ray.kick(time / 6, c)
        ray.drift(time / 2)
        ray.kick(2 * time / 3, c - time**2 / 48)
        ray.drift(time / 2)
        ray.kick(time / 6, c)
        return ray

    def at(self, screen):
        """Return the true ray where it crosses a screen, by a root of its own step; tangents are not projected."""
        true = self.true()
        guess = (screen - true.r[0]) / true.p[0]
        reach = 0.1 * self.step
        return true.after(brentq(lambda t: true.after(t).r[0] - screen, guess - reach, guess + reach, xtol=1e-15))

    def on_screen(self, screen):
        """Return y, py, action, px there, and the tangents (A, C), (B, D) carried along the flow to fixed x."""
        ray = self.at(screen)
        _, g, h, _ = ray.derivatives()
        c = self.step**2 / 24
        force = -(g + 2 * c * h @ g)
        flow = np.r_[ray.p, force]
        if ray.tangents.shape[1] == 2:  # the flow made conjugate to both, for their area to stay
            a, b = ray.tangents.T
            turned = np.array([[0, 0, 1, 0], [0, 0, 0, 1], [-1, 0, 0, 0], [0, -1, 0, 0]])
            flow = flow - (a @ turned @ flow) * b + (b @ turned @ flow) * a
        projected = ray.tangents - np.outer(flow, ray.tangents[0] / flow[0])
        return ray.r[1], ray.p[1], ray.action, ray.p[0], projected[[1, 3]]
