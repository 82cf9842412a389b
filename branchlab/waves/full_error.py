"""How wrong the grid makes a full wave: what of v psi the grid folds onto waves that travel."""

import numpy as np
import scipy.fft

from branchlab.waves.team import workers

LINES = 48  # rows and columns that are looked at
NEAR = 1.02  # waves up to this share of k travel
GRID_ERROR = 0.09  # error over k scale folded: 0.06 to 0.15 in 40 runs, strength .02 to .15, wavelength .1 to .25


def sampled_lines(grid) -> tuple[np.ndarray, np.ndarray]:
    """Return numbers of rows and of columns, spread over the window."""
    setup = grid.setup
    rows = np.flatnonzero((grid.x > 0.0) & (grid.x < setup.length))
    columns = np.flatnonzero(np.abs(grid.y) < 0.5 * setup.width)
    return tuple(one[:: max(1, one.size // LINES)] for one in (rows, columns))


def folded(u, psi, pitch: float, k: float) -> float:
    """Return how much of u psi beyond the grid's spectrum falls onto travelling waves, relative to what is there.

    The product on the grid's points takes its waves q + 2 pi/pitch for q. On twice the points both are seen apart.

    Parameters
    ----------
    u : ndarray, shape (line, 2 n)
    psi : ndarray, shape (line, n)
    pitch : float
        Of the n points.
    k : float
    """
    n = psi.shape[1]
    number = np.fft.fftfreq(2 * n, 0.5 / n)
    spectrum = scipy.fft.fft(psi, axis=1, norm="forward", workers=workers(psi))
    wide = np.zeros((psi.shape[0], 2 * n), dtype=np.complex128)
    wide[:, : n // 2], wide[:, -(n // 2) + 1 :] = spectrum[:, : n // 2], spectrum[:, n // 2 + 1 :]
    turn = np.exp(-0.5j * np.pi * number / n)  # the first of 2 n points lies half a fine pitch before the first of n
    product = u * scipy.fft.ifft(wide * turn, axis=1, norm="forward", workers=workers(wide))
    waves = scipy.fft.fft(product, axis=1, workers=workers(product))
    travels = np.abs(number) * 2.0 * np.pi / (n * pitch) < NEAR * k
    own = np.linalg.norm(waves[:, travels])
    beyond = np.linalg.norm(np.roll(waves, n, axis=1)[:, travels])
    return float(beyond / own) if own else 0.0


def grid_error(table, grid, field, free_rows, free_columns) -> float:
    """Return the estimated relative error of the field that is due to the grid.

    0.09 k scale f, f the folded share of both directions: a source on a travelling wave that should not be there acts
    over a length of the medium's scale, with strength k/2 a length.

    Parameters
    ----------
    table : SlabTable
    grid : FullGrid
    field : ndarray, shape (nx, ny)
        Scattered field.
    free_rows, free_columns : ndarrays
        The incoming wave on the `sampled_lines`.
    """
    rows, columns = sampled_lines(grid)
    shares = [
        folded(table.lines(grid, rows, 0), free_rows + field[rows], grid.pitch[1], grid.k),
        folded(table.lines(grid, columns, 1), free_columns + field[:, columns].T, grid.pitch[0], grid.k),
    ]
    return GRID_ERROR * grid.k * grid.setup.medium.scale * float(np.hypot(*shares))
