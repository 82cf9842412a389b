"""The classical partner of a wave packet: a cloud of full rays drawn from its Wigner function."""

import functools
import math

import numpy as np
import scipy.special
import xarray as xr

from branchlab.conventions import FULL, TIME, WAVELENGTH, X, Y, wave_parameter, wavenumber
from branchlab.errors import InputError, check_integer, check_memory
from branchlab.kernels.plane_rays import BLOCK, FIXED_ROWS, TANGENT_ROWS, march_plane, potentials, to_kernel, to_true
from branchlab.launch.band import wavelength_axis
from branchlab.launch.packet import Packet, check_times
from branchlab.launch.plane import Plane
from branchlab.media import SampledMedium
from branchlab.rays.plane_table import PlaneTable
from branchlab.results import dataset, provenance

POINTS = 65536
NUMBERS = (
    "inside", "energy", "energy_error", "position_error", "stretch",
    "mean_x", "mean_y", "mean_px", "mean_py", "spread_x", "spread_y",
)  # fmt: skip


def normal_cloud(points: int, seed: int) -> np.ndarray:
    """Return quasi-random points of the standard normal distribution in four dimensions, shape (4, points).

    A Kronecker sequence with the powers of the root of g**5 = g + 1 as steps (common practice), from a start that the
    seed draws, with its mirror image; then made exact in mean and covariance by a linear map. Moments of first and second
    order are thus those of the distribution, and third moments vanish.

    Parameters
    ----------
    points : int
        Even.
    seed : int
    """
    golden = 1.1673039782614187  # the root; 1/g ... 1/g**4 with 1 have no whole-number relation
    steps = golden ** -np.arange(1.0, 5.0)
    start = np.random.default_rng(seed).random(4)
    uniform = (start[:, None] + np.outer(steps, np.arange(1, points // 2 + 1))) % 1.0
    half = scipy.special.ndtri(np.clip(uniform, 1e-12, 1.0 - 1e-12))
    whole = np.concatenate([half, -half], axis=1)
    return np.linalg.solve(np.linalg.cholesky(whole @ whole.T / points), whole)


class PacketCloud:
    """The cloud of rays that a packet is in the classical limit: H = p**2/2 + v/2, dr/dt = p, dp/dt = -grad v/2.

    Its points are drawn from the packet's Wigner function, which is Gaussian and positive, so that in a medium at most
    quadratic in x and y cloud and packet agree at all times (textbook). The setup's source plays no part. A ray that
    leaves the box of the window and its pads goes straight on.

    Parameters
    ----------
    setup : Setup
    packet : Packet
    points : int
        Rays of the cloud, a multiple of 256.
    seed : int
    steps_per_scale : int
        Steps in which the fastest ray goes one medium scale, at least.
    """

    def __init__(self, setup, packet: Packet, *, points: int = POINTS, seed: int = 0, steps_per_scale: int = 4):
        if not isinstance(packet, Packet):
            raise InputError(f"packet must be a Packet; got {type(packet).__name__} {packet!r:.60}.")
        packet.check_fits(setup)
        self.setup, self.packet = setup, packet
        self.points = check_integer("points", points, low=2 * BLOCK)
        if self.points % (2 * BLOCK):
            raise InputError(f"points must be a multiple of {2 * BLOCK}; got {points}.")
        self.seed = check_integer("seed", seed, low=0)
        self.steps_per_scale = check_integer("steps_per_scale", steps_per_scale, low=1)
        self.plane = Plane(setup)

    def __repr__(self):
        return f"PacketCloud({self.setup!r}, {self.packet!r}, points={self.points}, seed={self.seed})"

    def solve(self, wavelengths, progress=None, *, times=None) -> xr.Dataset:
        """Follow the cloud at one or several wavelengths, which decide how widely its momenta are spread.

        Parameters
        ----------
        wavelengths, progress, times :
            As for `WavePacket.solve`.

        Returns
        -------
        Dataset of kind "cloud"
            density (wavelength, time, x, y), the share of the rays in a cell over its area; inside, the share in the
            window; means and spreads of all rays; energy and energy_error, the rms change of a ray's; position_error, the
            median of a fifteenth of the difference to twice the step; stretch, mean logarithm of the growth of a tangent
            that starts across the packet (dr**2/scale**2 + dp**2). lyapunov (wavelength): its rate over the second half of
            the times (nan for fewer than two); wave_parameter and ehrenfest_time = ln(wave_parameter)/(2 lyapunov), the
            logarithmic estimate of when packet and cloud part (Berman & Zaslavsky, Physica A 91 (1978) 450), nan for
            a medium without curvature noise or a wave parameter below 1: an order of magnitude.

        Raises
        ------
        InputError
            Wavelengths that are not positive, times that do not rise.
        ResourceError
            The spline of the medium does not fit into memory.
        """
        lengths = wavelength_axis(wavelengths)
        times = check_times(times, self.setup, self.packet)
        along, across = self.plane.cells
        check_memory(
            8.0 * along * across * times.size * lengths.size + 8.0 * 60 * self.points,
            f"a cloud of {self.points} rays at {times.size} times in {along} x {across} cells",
            "Use fewer points, times, wavelengths or cells.",
        )
        rows = []
        for number, length in enumerate(lengths):
            rows.append([])
            for at, one in enumerate(self._one(wavenumber(length), times)):
                rows[-1].append(one)
                if progress:
                    progress((number + (at + 1) / times.size) / lengths.size)
        variables = {
            name: ((WAVELENGTH, TIME), np.array([[one[name] for one in row] for row in rows])) for name in NUMBERS
        }
        variables["density"] = (WAVELENGTH, TIME, X, Y), np.array([[one["density"] for one in row] for row in rows])
        lyapunov = np.array([_rate(times, row) for row in variables["stretch"][1]])
        kappa = self._wave_parameter(wavenumber(lengths))
        valid = (kappa > 1.0) & (lyapunov > 0.0)
        ehrenfest = np.full(lengths.size, np.nan)
        ehrenfest[valid] = np.log(kappa[valid]) / (2.0 * lyapunov[valid])
        variables |= {
            "lyapunov": ((WAVELENGTH,), lyapunov),
            "wave_parameter": ((WAVELENGTH,), kappa),
            "ehrenfest_time": ((WAVELENGTH,), ehrenfest),
        }
        coords = {
            WAVELENGTH: ((WAVELENGTH,), lengths),
            TIME: ((TIME,), times),
            X: ((X,), self.plane.x),
            Y: ((Y,), self.setup.y),
        }
        attrs = provenance(self.setup, model=FULL)
        attrs |= {"packet": self.packet.to_json(), "points": self.points, "seed": self.seed}
        return dataset("cloud", variables, coords, attrs)

    def start(self, k: float) -> np.ndarray:
        """Return the rays at time 0, shape (rows, ray): the state of `kernels.plane_rays` with one tangent."""
        packet = self.packet
        state = np.zeros((FIXED_ROWS + TANGENT_ROWS, self.points))
        normal = normal_cloud(self.points, self.seed)
        spreads = np.array(packet.spreads)[:, None]
        state[:2] = np.array([[packet.x], [packet.y]]) + packet.axes @ (spreads * normal[:2])
        momenta = normal[2:] / (2.0 * k * spreads)
        momenta[0] += packet.momentum
        state[2:4] = packet.axes @ momenta
        state[FIXED_ROWS : FIXED_ROWS + 2] = packet.axes[:, 1:]
        return state

    def _one(self, k: float, times):
        """Yield what is measured at each time."""
        state = self.start(k)
        first, rough, table, twice = state.copy(), state.copy(), None, None
        longest = self.setup.medium.scale / self.steps_per_scale / self.packet.fastest(self.plane, k)
        for gap in np.diff(times, prepend=0.0):
            if gap > 0.0:
                steps = 2 * max(1, math.ceil(gap / (2.0 * longest) - 1e-9))
                if table is None or not math.isclose(table.step, gap / steps, rel_tol=1e-9):
                    table, twice = (PlaneTable(self.plane, gap / n) for n in (steps, steps // 2))
                _advance(state, table, steps)
                _advance(rough, twice, steps // 2)
            yield self._measured(state, first, rough)

    def _measured(self, state, first, rough) -> dict:
        """Return density, means, spreads and errors of the rays."""
        x, y, px, py = state[:4]
        energy = 0.5 * (px**2 + py**2) + 0.5 * self._v(x, y)
        change = energy - 0.5 * (first[2] ** 2 + first[3] ** 2) - 0.5 * self._v(*first[:2])
        inside = self.plane.inside(x, y)
        tangents = [
            np.log(np.hypot(one[5], one[6]) ** 2 / self.setup.medium.scale**2 + one[7] ** 2 + one[8] ** 2)
            for one in (state, first)
        ]
        return {
            "density": self._cell_density(x[inside], y[inside]),
            "inside": inside.mean(),
            "energy": energy.mean(),
            "energy_error": np.sqrt((change**2).mean()),
            "position_error": np.median(np.hypot(*(rough[:2] - state[:2]))) / 15.0,
            "stretch": 0.5 * (tangents[0] - tangents[1]).mean(),
            "mean_x": x.mean(),
            "mean_y": y.mean(),
            "mean_px": px.mean(),
            "mean_py": py.mean(),
            "spread_x": x.std(),
            "spread_y": y.std(),
        }

    def _cell_density(self, x, y) -> np.ndarray:
        """Return the share of the rays in each cell, over its area."""
        along, across = self.plane.cells
        width, cell = self.setup.width, self.setup.cell
        i = np.minimum((x / self.plane.cell).astype(np.int64), along - 1)
        j = np.floor((y + 0.5 * width) / cell).astype(np.int64)
        j = np.clip(j, 0, across - 1) if self.plane.window.pad else j % across
        counts = np.bincount(i * across + j, minlength=along * across).reshape(along, across)
        return counts / (self.points * self.plane.cell * cell)

    @functools.cached_property
    def _bare(self) -> PlaneTable:
        """The medium's spline without the gradient correction."""
        return PlaneTable(self.plane, 0.0)

    def _v(self, x, y) -> np.ndarray:
        """Return v at the rays."""
        return 2.0 * potentials(x, y, self._bare.flat, self._bare.grid, self._bare.box)

    def _wave_parameter(self, k) -> np.ndarray:
        """Return kappa of the medium: as asked for of a random one, as measured of a sampled one; nan for others."""
        numbers = self.setup.medium.statistics(length=self.setup.length, width=self.setup.width)
        start = "requested_" if "requested_curvature_noise" in numbers else ""
        diffusion, noise = (float(numbers[start + name]) for name in ("angle_diffusion", "curvature_noise"))
        known = start or isinstance(self.setup.medium, SampledMedium)
        if not (known and diffusion > 0.0 and 0.0 < noise < math.inf):
            return np.full(np.shape(k), np.nan)
        return wave_parameter(k, diffusion, noise)


def _advance(state, table: PlaneTable, steps: int) -> None:
    """Take rays in true coordinates through a number of steps, in place."""
    look = table.flat, table.grid, table.box
    to_kernel(state, *look, table.strength)
    march_plane(state, *look, table.step, steps)
    to_true(state, *look, table.strength)


def _rate(times, stretch) -> float:
    """Return the slope of the stretch over the second half of the times (least squares), nan for fewer than two."""
    late = times >= 0.5 * times[-1]
    if late.sum() < 2:
        return math.nan
    t = times[late] - times[late].mean()
    return float((t * stretch[late]).sum() / (t**2).sum())
