"""The full wave's kernels, written out plainly: whole matrices, numpy's own transforms."""

import numpy as np


def operator(field, u, loss_x, loss_y, qx, qy, k, eps):
    """A field = field - G[V field]."""
    potential = k**2 * (u + 1j * eps - 1j * (loss_x[:, None] + loss_y))
    green = 1.0 / (k**2 * (1 + 1j * eps) - qx[:, None] ** 2 - qy**2)
    return field - np.fft.ifft2(green * np.fft.fft2(potential * field))


def marches(q, u, screen, step, bend, curve):
    """The wave that marches down the rows and the one that marches up them, from sources q: their sum."""
    gain = 1 + u / 4 + 5 * u**2 / 32
    total = np.zeros_like(q)
    n = q.shape[1]
    for rows in (range(len(q)), range(len(q) - 1, -1, -1)):
        spectrum, turned = np.zeros(n, complex), np.zeros(n, complex)
        for count, row in enumerate(rows):
            v = u[row] + curve * u[row] ** 2
            wave = np.fft.ifft(spectrum) * n
            if count % 2:
                wave = wave + v * np.fft.ifft(turned) * n
            wave = wave * screen[row]
            total[row] += gain[row] * wave
            wave = (wave + gain[row] * q[row]) * screen[row]
            spectrum = np.fft.fft(wave)
            if count % 2 == 0:
                spectrum = spectrum + bend * np.fft.fft(v * wave)
            spectrum = step * spectrum
            turned = bend * spectrum
    return total


def direct_sum(values, positions, span, at):
    """The Fourier series of equidistant periodic values, at any places."""
    n = len(values)
    order = np.arange(-(n // 2) + 1, n // 2)
    waves = np.exp(-2j * np.pi * np.outer(order, positions) / span) @ values / n
    return np.exp(2j * np.pi * np.outer(at, order) / span) @ waves
