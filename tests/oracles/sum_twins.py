"""Slow plain twins of the kernels of the semiclassical sums, and rays in media where they are known in closed form."""

from typing import NamedTuple

import numpy as np
from scipy.interpolate import CubicHermiteSpline
from scipy.optimize import brentq


class Rays(NamedTuple):
    """Rays at one range: place, momentum, action, stability matrix (A, B; C, D), Maslov index of (A, C)."""

    y: np.ndarray
    p: np.ndarray
    action: np.ndarray
    A: np.ndarray
    B: np.ndarray
    C: np.ndarray
    D: np.ndarray
    maslov: np.ndarray


def packets(y, p, path, turn, amplitude, stretch, k, gamma, start, pitch, n, *, laps=0):
    """Sum Gaussian packets point by point; `laps` copies of the box on either side stand for a periodic box."""
    points = start + (np.arange(n) + 0.5) * pitch
    psi = np.zeros(n, dtype=complex)
    for i in np.flatnonzero(np.isfinite(y) & (amplitude != 0)):
        for lap in range(-laps, laps + 1):
            d = points + lap * n * pitch - y[i]
            psi += (
                amplitude[i]
                * np.exp(-((k * stretch[i]) ** 2))
                * np.exp(1j * (k * path[i] + turn[i] + k * p[i] * d) - 0.5 * k * gamma * d**2)
            )
    return psi


def landings(y, slope, ds, target):
    """Return the sorted front parameters (in units of ds, from ray 0) at which the Hermite curve passes `target`."""
    found = []
    for i in range(y.size - 1):
        curve = CubicHermiteSpline([0.0, 1.0], y[i : i + 2], slope[i : i + 2] * ds)
        turns = [t for t in curve.derivative().roots(extrapolate=False) if 0 < t < 1]
        ends = np.array([0.0, *turns, 1.0])
        values = curve(ends) - target
        for a, b, fa, fb in zip(ends[:-1], ends[1:], values[:-1], values[1:], strict=True):
            if fa * fb < 0:
                found.append(i + brentq(lambda t, c=curve: c(t) - target, a, b, xtol=1e-15))
    return np.sort(found)


def linear(q, p, g, x):
    """Rays in v = g y: p(x) = p - g x/2, y(x) = q + p x - g x**2/4."""
    one = np.ones_like(q)
    px, yx = p - 0.5 * g * x, q + p * x - 0.25 * g * x**2
    # int (p**2/2 - v/2) dx
    action = 0.5 * p**2 * x - 0.5 * g * p * x**2 + g**2 * x**3 / 12 - 0.5 * g * q * x
    return Rays(yx, px, action, one, x * one, 0 * one, one, 0 * one)


def duct(q, p, a, x, *, tangent=(1.0, 0.0)):
    """Rays in v = a**2 y**2 (H = p**2/2 + a**2 y**2/2); the Maslov index counts zeros of the given tangent's dy."""
    c, s = np.cos(a * x), np.sin(a * x)
    one = np.ones_like(q)
    yx, px = q * c + p * s / a, p * c - a * q * s
    action = 0.5 * (yx * px - q * p)
    grid = np.linspace(0, x, 4001)[1:]
    along = tangent[0] * np.cos(a * grid) + tangent[1] * np.sin(a * grid) / a
    crossings = np.count_nonzero(along[1:] * along[:-1] < 0)
    return Rays(yx, px, action, c * one, s / a * one, -a * s * one, c * one, crossings * one)
