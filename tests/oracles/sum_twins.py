"""Slow plain twins of the kernels of the semiclassical sums, and rays in media where they are known in closed form."""

from typing import NamedTuple

import numpy as np
from scipy.interpolate import CubicHermiteSpline
from scipy.optimize import brentq
from scipy.special import jv

from branchlab.semiclassics.manifold import Manifold


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


def manifold(rays: Rays, s, bend, amplitude, ds, *, path=0.0, phase=0.0):
    """Return a Manifold of rays that left y = s with dp/ds = bend."""
    A, C = rays.A + bend * rays.B, rays.C + bend * rays.D
    return Manifold(rays.y, rays.p, rays.action + path, A, C, rays.maslov, amplitude, ds, 0.0, phase)


def sinusoidal_screen(ph0, X, tau):
    """Return the exact field behind the thin screen exp(i ph0 cos X), q = 1, at tau = ph0 z/k.

    psi = sum_n i**n J_n(ph0) exp(i n X - i n**2 z/2k): Raman & Nath 1935; Goodman, Introduction to Fourier Optics.
    """
    top = int(ph0 + 60 + 10 * ph0 ** (1 / 3))
    n = np.arange(-top, top + 1)
    return np.sum(1j ** (n % 4) * jv(n, ph0) * np.exp(1j * n * X - 0.5j * n**2 * tau / ph0))


def sinusoidal_front(tau, count, shift=0.0):
    """Return the rays behind that screen at unit distance: path tau cos(s - shift)."""
    ds = 2 * np.pi / count
    s = -np.pi + (np.arange(count) + 0.5) * ds
    c, p = np.cos(s - shift), -tau * np.sin(s - shift)
    A = 1 - tau * c
    return Manifold(s + p, p, tau * c + 0.5 * p * p, A, -tau * c, (A < 0) * 1.0, np.ones(count), ds, 2 * np.pi)


def caustic_circle(m, reach, count):
    """Return the rays tangent to the circle of radius m (k = 1), where they cross the line x = 0, y > 0.

    They run counterclockwise: the ray that touches the circle at the angle phi crosses at y = m/sin(phi); its
    parameter is u = cot(phi), abs(u) <= reach, and it has its caustic at u = 0. The field they make up is
    J_m(r) exp(i m phi) on that line, phi = pi/2: both branches have the flux 1/(2 pi) of Debye's two rays.
    """
    ds = 2 * reach / count
    u = -reach + (np.arange(count) + 0.5) * ds
    sine = 1 / np.sqrt(1 + u * u)
    action = m * (np.arctan2(1, u) + u)  # angular momentum m round the circle, then straight on
    return Manifold(
        m / sine,
        u * sine,
        action,
        m * u * sine,
        sine**3,
        (u > 0) * 1.0,
        np.sqrt(sine / (2 * np.pi)),
        ds,
        0.0,
        np.pi / 4,
    )
