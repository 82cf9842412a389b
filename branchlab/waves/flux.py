"""A full wave on the screens: its values between grid points, cell means, and flux forward and backward."""

import numpy as np
import scipy.fft

from branchlab.launch.window import smooth_step
from branchlab.waves.team import workers

GRAZING = 1e-3  # (k_x/k)**2 below which a wave along the screen is neither forward nor backward


class ScreenReader:
    """Reads fields of a grid on planes x = const, by their Fourier series: exact for what the grid can hold.

    Parameters
    ----------
    grid : FullGrid
    x : ndarray, shape (screen,)
    """

    def __init__(self, grid, x):
        self.grid, self.x = grid, np.asarray(x, dtype=np.float64)
        nx = grid.shape[0]
        turn = np.exp(1j * np.multiply.outer(self.x - grid.x[0], grid.qx)) / nx
        turn[:, nx // 2] = 0.0  # the highest wave of an even grid has no direction
        self._values = scipy.fft.fft(turn, axis=1)
        self._slopes = scipy.fft.fft(1j * grid.qx * turn, axis=1)
        setup = grid.setup
        spare = (grid.cells - setup.y.size) // 2
        self._inner = slice(spare, spare + setup.y.size)
        outside = (np.abs(grid.y) - 0.5 * setup.width) / (0.5 * grid.span[1] - 0.5 * setup.width + 1e-300)
        self._fade = 1.0 - smooth_step(outside) if grid.pad_y else None

    def values(self, field) -> np.ndarray:
        """Return a field on the screens, shape (screen, ny)."""
        return (self._values.astype(field.dtype) @ field).astype(np.complex128)

    def slopes(self, field) -> np.ndarray:
        """Return the x-derivative of a field on the screens."""
        return (self._slopes.astype(field.dtype) @ field).astype(np.complex128)

    def both_ways(self, values, slopes):
        """Split a periodic field on the screens into what travels forward and what travels backward.

        Of every wave exp(iqy), abs(q) < k: (psi +- psi_x/(i k_x))/2.

        Returns
        -------
        forward, backward : (ndarray, ndarray)
            Field and slope of each.
        """
        kx2 = self.grid.k**2 - self.grid.qy**2
        travels = np.flatnonzero(kx2 > GRAZING * self.grid.k**2)
        kx = np.sqrt(kx2[travels])
        psi, slope = (scipy.fft.fft(one, axis=1, workers=workers(one))[:, travels] for one in (values, slopes))
        slope /= 1j * kx
        ways = np.zeros((4, *values.shape), dtype=np.complex128)
        for way, sign in ((0, 1.0), (2, -1.0)):
            ways[way][:, travels] = 0.5 * (psi + sign * slope)
            ways[way + 1][:, travels] = sign * 1j * kx * ways[way][:, travels]
        fields = scipy.fft.ifft(ways, axis=2, overwrite_x=True, workers=workers(ways))
        return (fields[0], fields[1]), (fields[2], fields[3])

    def cell_means(self, a, b) -> np.ndarray:
        """Return the mean of conj(a) b over every cell of the setup, real and imaginary, shape (screen, cell).

        The product is formed on twice the points, which hold its whole spectrum, and integrated by its Fourier series.
        """
        fine = [self._doubled(one) for one in ((a,) if a is b else (a, b))]
        product = np.conj(fine[0]) * fine[-1]
        spectrum = scipy.fft.fft(product, axis=1, norm="forward", workers=workers(product))
        n, cells = fine[0].shape[1], self.grid.cells
        number = np.arange(-n // 2, n // 2)
        # from the middle of the first of n points to the middle of the first cell; the mean over a cell is a sinc
        factor = np.sinc(number / cells) * np.exp(1j * np.pi * number * (1.0 / cells - 1.0 / n))
        spectrum = scipy.fft.fftshift(spectrum, axes=1) * factor
        before = -(n // 2) % cells  # wave 0 comes first in one of the blocks of `cells` that fall onto each other
        after = -(before + n) % cells
        folded = np.pad(spectrum, ((0, 0), (before, after))).reshape(len(spectrum), -1, cells).sum(axis=1)
        return scipy.fft.ifft(folded, axis=1, norm="forward")[:, self._inner]

    def _doubled(self, field) -> np.ndarray:
        """Return a field on the doubled number of points, faded out in the pads where it need not be periodic."""
        if self._fade is not None:
            field = field * self._fade
        n = field.shape[1]
        spectrum = scipy.fft.fft(field, axis=1, norm="forward", workers=workers(field))
        wide = np.zeros((field.shape[0], 2 * n), dtype=np.complex128)
        wide[:, : n // 2], wide[:, -(n // 2) + 1 :] = spectrum[:, : n // 2], spectrum[:, n // 2 + 1 :]
        number = np.fft.fftfreq(2 * n, 1.0 / (2 * n))
        wide *= np.exp(-0.5j * np.pi * number / n)  # to the middles of half the cells: half a fine pitch back
        return scipy.fft.ifft(wide, axis=1, norm="forward", workers=workers(wide))

    def flux(self, field, slope) -> np.ndarray:
        """Return the flux through the width, Im int conj(psi) psi_x dy / k, shape (screen,)."""
        return self.cell_means(field, slope).imag.sum(axis=1) * self.grid.setup.cell / self.grid.k
