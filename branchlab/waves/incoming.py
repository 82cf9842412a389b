"""The wave that comes in: the field a source would have in the mean medium alone."""

import math

import numpy as np
import scipy.fft

from branchlab.launch.setup import smooth_number
from branchlab.waves.team import workers

ROWS_AT_ONCE = 64
STEEPEST = 0.97  # sine up to which a free wave is kept from coming round the sides of its box
LOST_POWER = 1e-9  # share of the flux, at the steepest angles, that may come round


class PlaneIncoming:
    """exp(i (px x + q y)), on the grid as its Bloch envelope."""

    def __init__(self, grid, q: float):
        self.grid = grid
        self.px = math.sqrt(grid.k**2 - q**2)
        self._across = np.exp(1j * (q - grid.bloch) * grid.y)

    @property
    def flux(self) -> float:
        """Flux through the width."""
        return self.px / self.grid.k * self.grid.setup.width

    def rows(self, x) -> np.ndarray:
        """Return the field at x, shape (x, ny)."""
        return np.exp(1j * self.px * np.asarray(x))[:, None] * self._across

    def slopes(self, x) -> np.ndarray:
        """Return its x-derivative."""
        return 1j * self.px * self.rows(x)


class SpectrumIncoming:
    """sum of amplitude exp(i (px x + q y)) over travelling waves, abs(q) < k, on a box that may be wider than the grid.

    Parameters
    ----------
    box : _Box
    amplitude : ndarray
        Of the box's travelling waves at x = 0, as a transform of n points gives them.
    """

    def __init__(self, box, amplitude):
        self.box, self.amplitude = box, amplitude
        self.flux = float(np.sum(box.px * np.abs(amplitude) ** 2) * box.n * box.grid.pitch[1] / box.grid.k)

    def _sum(self, x, factor) -> np.ndarray:
        x, box = np.asarray(x, dtype=np.float64), self.box
        ny = box.grid.shape[1]
        out = np.empty((x.size, ny), dtype=np.complex128)
        for at in range(0, x.size, ROWS_AT_ONCE):
            some = x[at : at + ROWS_AT_ONCE]
            modes = np.zeros((some.size, box.n), dtype=np.complex128)
            modes[:, box.travelling] = factor * np.exp(1j * np.multiply.outer(some, box.px))
            fields = scipy.fft.ifft(modes, norm="forward", overwrite_x=True, workers=workers(modes))
            out[at : at + some.size] = fields[:, box.skip : box.skip + ny]
        return out

    def rows(self, x) -> np.ndarray:
        """Return the field at x, shape (x, ny)."""
        return self._sum(x, self.amplitude)

    def slopes(self, x) -> np.ndarray:
        """Return its x-derivative."""
        return self._sum(x, 1j * self.box.px * self.amplitude)


class _Box:
    """The travelling waves of n points of a grid's pitch, the grid in their middle."""

    def __init__(self, grid, n: int):
        self.grid, self.n = grid, n
        ny, h = grid.shape[1], grid.pitch[1]
        self.skip = (n - ny) // 2
        self.y = grid.y[0] + (np.arange(n) - self.skip) * h
        q = 2.0 * np.pi * np.fft.fftfreq(n, h) + grid.bloch
        self.travelling = np.flatnonzero(np.abs(q) < grid.k * (1.0 - 1e-9))
        self.q = q[self.travelling]
        self.px = np.sqrt(grid.k**2 - self.q**2)

    def entry(self, part, k: float) -> np.ndarray:
        """Return the amplitudes of a field entry exp(ik tilt y) on x = 0."""
        inside = np.abs(self.y) <= 0.5 * self.grid.setup.window.span
        field = np.zeros(self.n, dtype=np.complex128)
        y = self.y[inside]
        field[inside] = part.entry(y, np.array([k]))[0] * np.exp(1j * (k * part.tilt - self.grid.bloch) * y)
        return scipy.fft.fft(field, norm="forward")[self.travelling]

    def fan(self, part, k: float) -> np.ndarray:
        """Return the amplitudes of a point source: a(p)/cos(angle), so that the fan is even in angle; unit flux."""
        rays = part.front.at(np.array([0.0]))
        x0, y0 = -float(rays.dy[0]), float(rays.y[0])
        own = self.q - k * part.tilt  # before the source was turned
        sine = own / self.grid.k
        lit = np.abs(sine) < 1.0 - 1e-9
        px = self.grid.k * np.sqrt(1.0 - sine[lit] ** 2)
        amplitude = np.zeros(own.size, dtype=np.complex128)
        amplitude[lit] = part.front.at(sine[lit]).amplitude * (self.grid.k / px) * np.exp(-1j * px * x0)
        amplitude[lit] /= np.sqrt(np.sum(px * np.abs(amplitude[lit]) ** 2) * self.n * self.grid.pitch[1] / self.grid.k)
        return amplitude * np.exp(-1j * own * y0 + 1j * (self.q - self.grid.bloch) * self.y[0])


def incoming(grid, part):
    """Return the free field of a coherent part in the mean medium.

    Its values on x = 0 are entry exp(ik tilt y), its waves those that travel. With absorbing sides it lives on a box so
    much wider that it does not come round, and an endless plane wave is not cut.

    Parameters
    ----------
    grid : FullGrid
    part : CoherentPart
    """
    k = 2.0 * np.pi / grid.wavelength
    if part.endless:
        return PlaneIncoming(grid, k * part.tilt)
    spectrum = _Box.fan if part.front.phase else _Box.entry
    n = grid.shape[1]
    box = _Box(grid, n)
    amplitude = spectrum(box, part, k)
    if grid.pad_y:
        sine = np.abs(box.q) / grid.k
        power = box.px * np.abs(amplitude) ** 2
        order = np.argsort(sine)
        kept = np.cumsum(power[order]) <= (1.0 - LOST_POWER) * power.sum()
        steepest = min(STEEPEST, float(sine[order][kept].max(initial=0.0)) + 0.01)
        behind = max(0.0, float(part.front.at(np.array([0.0])).dy[0])) if part.front.phase else 0.0
        lateral = (grid.span[0] + behind) * steepest / math.sqrt(1.0 - steepest**2)
        wanted = max(n, math.ceil((grid.setup.window.span + 2.0 * lateral) / grid.pitch[1]))
        box = _Box(grid, 2 * smooth_number(math.ceil(0.5 * wanted)))
        amplitude = spectrum(box, part, k)
    return SpectrumIncoming(box, amplitude)
