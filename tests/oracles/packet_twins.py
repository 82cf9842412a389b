"""Plain twins of the packet and full-ray kernels (numpy and scipy only), and closed forms of packets."""

import numpy as np
from scipy.interpolate import make_interp_spline


def plain_steps(field, v, spans, k, step, steps):
    """The gradient-corrected kernel with two-dimensional transforms, one line per factor."""
    qx, qy = (2 * np.pi * np.fft.fftfreq(n, span / n) for n, span in zip(v.shape, spans, strict=True))
    slope = [np.fft.ifft(1j * q * np.fft.fft(one, axis=1), axis=1).real for q, one in ((qx, v.T), (qy, v))]
    screen = np.exp(-1j * k * step * (v / 2 - step**2 / 96 * (slope[0].T ** 2 + slope[1] ** 2)))
    half = np.exp(-0.25j * step * (qx[:, None] ** 2 + qy**2) / k)
    for _ in range(steps):
        field = np.fft.ifft2(half * np.fft.fft2(field))
        field = np.fft.ifft2(half * np.fft.fft2(screen * field))
    return field


def processor_series(field, v, spans, step, sign):
    """exp(sign P) with P u = (step**2/96)(lap(v u) - v lap u), its series to the twelfth order."""
    qx, qy = (2 * np.pi * np.fft.fftfreq(n, span / n) for n, span in zip(v.shape, spans, strict=True))

    def lap(u):
        return np.fft.ifft2(-(qx[:, None] ** 2 + qy**2) * np.fft.fft2(u))

    term, total = field, field
    for order in range(1, 13):
        term = sign * step**2 / 96 / order * (lap(v * term) - v * lap(term))
        total = total + term
    return total


class PlainSpline:
    """The biquintic periodic interpolant, one spline of scipy along y and one along x at a time."""

    def __init__(self, samples, start, pitch):
        self.samples, self.start, self.pitch = samples, start, pitch

    def __call__(self, x, y, dx=0, dy=0):
        along = self._spline(self.samples, 1)(y, dy)
        return self._spline(along, 0)(x, dx)

    def _spline(self, samples, axis):
        moved = np.moveaxis(samples, axis, 0)
        closed = np.concatenate([moved, moved[:1]])
        places = self.start[axis] + self.pitch[axis] * np.arange(len(closed))
        if closed.ndim == 1:
            return make_interp_spline(places, closed, 5, bc_type="periodic")
        return make_interp_spline(places, closed, 5, bc_type="periodic", axis=0)


def free_gaussian(u, spread, momentum, t, k):
    """A free Gaussian of one dimension at time t: exp(-u**2/4s**2 + ik p u) spread by (i/k) psi_t = -psi_uu/2k**2.

    Textbook (for instance Schiff, Quantum Mechanics, sect. 12, with hbar/m = 1/k).
    """
    z = 1 + 0.5j * t / (k * spread**2)
    phase = 1j * k * (momentum * u - 0.5 * momentum**2 * t)
    return (2 * np.pi * spread**2) ** -0.25 / np.sqrt(z) * np.exp(phase - (u - momentum * t) ** 2 / (4 * spread**2 * z))


def gaussian_in_well(u, spread, centre, momentum, rate, t, k):
    """A Gaussian exp(-(u-c)**2/4s**2 + ik p (u-c)) after time t in v = (rate u)**2: one Gaussian integral over Mehler's
    kernel (Mehler 1866; Feynman & Hibbs 1965; the phase at foci: Souriau 1976)."""
    c, s = np.cos(rate * t), np.sin(rate * t)
    b = k * rate / s
    a = 1 / (4 * spread**2) - 0.5j * b * c
    linear = centre / (2 * spread**2) + 1j * k * momentum - 1j * b * u
    constant = -(centre**2) / (4 * spread**2) - 1j * k * momentum * centre + 0.5j * b * c * u**2
    integral = np.sqrt(np.pi / a) * np.exp(linear**2 / (4 * a) + constant)
    kernel = np.sqrt(np.abs(b) / (2 * np.pi)) * np.exp(-0.25j * np.pi - 0.5j * np.pi * np.floor(rate * t / np.pi))
    return (2 * np.pi * spread**2) ** -0.25 * kernel * integral
