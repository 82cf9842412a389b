"""Plain twins of the wave kernels: numpy only, one line per formula."""

import numpy as np


def screened(field, path, turn, keep):
    """Rows times keep exp(-i turn path)."""
    return field * keep * np.exp(-1j * np.multiply.outer(turn, path))


def cell_means(field, slope, across, bend, strength, cells):
    """Cell means of abs(u - (strength / 2) (bend u + 2 across du/dy))**2."""
    changed = field - strength / 2 * (bend * field + 2 * across * slope)
    return (np.abs(changed) ** 2).reshape(field.shape[0], cells, -1).mean(axis=2)


def plain_march(setup, part, k, n, steps):
    """The processed march with numpy transforms, one wavelength and one step at a time, to the last screen.

    exp(-P) K**n exp(+P) u0 with both exponentials of P summed to the tenth order.
    """
    window = setup.window
    y, span = window.points(n), window.span
    q = 2 * np.pi * np.fft.fftfreq(n, span / n)
    h = setup.length / steps

    def derivative(row, order):
        factor = (1j * q) ** order
        if order % 2:
            factor[n // 2] = 0
        return np.fft.ifft(factor * np.fft.fft(row)).real

    def process(u, x, sign):
        v, vx = window.rows([x], n)[0], window.rows([x], n, dx=1)[0]
        vy, vyy = derivative(v, 1), derivative(v, 2)

        def p(w):
            slope = np.fft.ifft(1j * (q + k * part.tilt) * np.fft.fft(w))
            return 1j * h**2 / 24 * k / 2 * vx * w + h**2 / 96 * (vyy * w + 2 * vy * slope)

        total = term = u
        for order in range(1, 11):
            term = sign / order * p(term)
            total = total + term
        return total

    half = np.exp(-0.5j * h * (q + k * part.tilt) ** 2 / (2 * k))
    u = process(part.entry(y, np.array([k]))[0], 0.0, +1)
    for step in range(steps):
        v = window.rows([(step + 0.5) * h], n)[0]
        u = np.fft.ifft(half * np.fft.fft(u))
        u = u * np.exp(-1j * k * h * (v / 2 - h**2 / 96 * derivative(v, 1) ** 2))
        u = np.fft.ifft(half * np.fft.fft(u))
    return process(u, setup.length, -1) * np.exp(1j * k * part.tilt * y)
