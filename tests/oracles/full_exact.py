"""Exact answers of the stationary wave equation (lap + k**2 (1 - v)) psi = 0, by separation of variables."""

import numpy as np
from scipy.interpolate import CubicSpline
from scipy.special import h1vp, hankel1, jv, jvp


def orders(k, radius):
    """Partial waves that reach a radius: all, to round-off."""
    return np.arange(int(k * radius + 8.0 * (k * radius) ** (1.0 / 3.0) + 20.0))


def _sum(k, r, angle, inside, outer, scattered):
    """exp(ikx) plus scattered partial waves outside `outer`, the radial functions `inside` within it."""
    m = np.arange(len(scattered))
    weight = np.where(m == 0, 1.0, 2.0) * 1j**m
    out = np.empty(r.shape, complex)
    for i, (radius, phi) in enumerate(zip(r, angle, strict=True)):
        if radius >= outer:
            # the incoming wave is not expanded: a truncated series would cut it
            wave = np.exp(1j * k * radius * np.cos(phi))
            out[i] = wave + np.sum(weight * scattered * hankel1(m, k * radius) * np.cos(m * phi))
        else:
            out[i] = np.sum(weight * inside(radius) * np.cos(m * phi))
    return out


def round_lens(k, v, outer, r, angle, steps=32000):
    """Total field of exp(ikx) on a round smooth medium v(r), 0 beyond `outer`: partial waves by their radial equation.

    R'' + R'/r + (k**2 (1 - v) - m**2/r**2) R = 0, regular at 0, joined to J_m + b_m H_m at `outer` (Morse & Feshbach,
    Methods of Theoretical Physics, 1953, ch. 11.2). With R = r**m g and s = log(r), g'' + 2 m g' + (k r)**2 (1 - v) g = 0:
    a classical Runge-Kutta march of all m at once.
    """
    m = orders(k, outer)
    start = 1e-4 / k
    h = np.log(outer / start) / steps
    g, d = np.ones(m.size), -((k * start) ** 2) * (1.0 - v(start)) / (2.0 * (m + 1.0))
    kept = np.empty((steps + 1, m.size))
    kept[0] = g
    strengths = [(k * radius) ** 2 * (1.0 - v(radius)) for radius in start * np.exp(0.5 * h * np.arange(2 * steps + 1))]
    for n in range(steps):
        first, middle, last = strengths[2 * n : 2 * n + 3]
        a1, b1 = d, -2.0 * m * d - first * g
        a2, b2 = d + 0.5 * h * b1, -2.0 * m * (d + 0.5 * h * b1) - middle * (g + 0.5 * h * a1)
        a3, b3 = d + 0.5 * h * b2, -2.0 * m * (d + 0.5 * h * b2) - middle * (g + 0.5 * h * a2)
        a4, b4 = d + h * b3, -2.0 * m * (d + h * b3) - last * (g + h * a3)
        g, d = g + h / 6.0 * (a1 + 2.0 * (a2 + a3) + a4), d + h / 6.0 * (b1 + 2.0 * (b2 + b3) + b4)
        kept[n + 1] = g
    ratio = (m + d / g) / (k * outer)  # R'/(k R)
    j, hankel = jv(m, k * outer), hankel1(m, k * outer)
    b = (ratio * j - jvp(m, k * outer)) / (h1vp(m, k * outer) - ratio * hankel)
    scale = (j + b * hankel) / g
    radial = CubicSpline(h * np.arange(steps + 1), kept)

    def inside(radius):
        return scale * radial(np.log(radius / start)) * (radius / outer) ** m

    return _sum(k, r, angle, inside, outer, b)


def cylinder(k, v, radius, r, angle):
    """Total field of exp(ikx) on a cylinder of constant v (Bohren & Huffman, Absorption and Scattering of Light, 1983, ch. 8)."""
    m = orders(k, radius)
    own = k * np.sqrt(1.0 - v + 0j)
    j, jp, h, hp = jv(m, k * radius), jvp(m, k * radius), hankel1(m, k * radius), h1vp(m, k * radius)
    ji, jip = jv(m, own * radius), jvp(m, own * radius)
    b = (own * jip * j - k * jp * ji) / (k * hp * ji - own * jip * h)
    c = (j + b * h) / ji
    return _sum(k, r, angle, lambda radius: c * jv(m, own * radius), radius, b)


def sech_layer(kx, strength, rate):
    """Reflected and transmitted share of a layer psi'' + (kx**2 - strength sech(rate x)**2) psi = 0.

    Landau & Lifshitz, Quantum Mechanics, sec. 25, problem 4 (Poeschl & Teller 1933).
    """
    s = np.sinh(np.pi * kx / rate) ** 2
    d = 4.0 * strength / rate**2 - 1.0
    c = np.cosh(0.5 * np.pi * np.sqrt(d)) ** 2 if d > 0 else np.cos(0.5 * np.pi * np.sqrt(-d)) ** 2
    return c / (s + c), s / (s + c)


def smooth_step_reflection(k1, k2, thickness):
    """Reflected share of k(x)**2 = (k1**2 + k2**2)/2 + (k2**2 - k1**2)/2 tanh(x/(2 thickness)).

    sinh(pi s (k2 - k1))**2 / sinh(pi s (k2 + k1))**2 (Epstein 1930; Landau & Lifshitz, Quantum Mechanics, sec. 25, problem 3).
    """
    return (np.sinh(np.pi * thickness * (k2 - k1)) / np.sinh(np.pi * thickness * (k2 + k1))) ** 2
