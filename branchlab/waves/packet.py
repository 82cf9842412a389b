"""Packets: the time-dependent wave in the plane, from a Gaussian packet."""

import warnings

import numpy as np
import scipy.fft
import xarray as xr

from branchlab.conventions import FULL, TIME, WAVELENGTH, X_FINE, Y_FINE, X, Y, wavenumber
from branchlab.errors import (
    BranchlabWarning,
    InputError,
    RangeError,
    check_integer,
    check_memory,
    check_number,
)
from branchlab.kernels.fourier import wavenumbers
from branchlab.launch.band import wavelength_axis
from branchlab.launch.packet import Packet, check_times
from branchlab.launch.plane import Plane
from branchlab.results import dataset, labelled, provenance
from branchlab.waves.plane_march import BYTES_A_POINT, THREADS, PlaneMarch, blocked

TAIL_LIMIT = 1e-10  # share of the norm at the end of the spectrum above which the grid is refined
OUTER = 0.9  # the spectral tail is what lies beyond this share of the grid's largest wavenumbers
ATTEMPTS = 4  # refinements of grid and of steps, at the most
CELL_ROWS = 8  # rows of cells that are made at once
GROWTH = 1.25  # of the grid from one attempt to the next
MEDIUM_SHARE = 10.0  # wavenumber, in 1/scale, that the medium adds to that of the fastest part
NUMBERS = ("norm", "energy", "mean_x", "mean_y", "mean_px", "mean_py", "spread_x", "spread_y", "spectral_tail")


class WavePacket:
    """A packet in the medium of a setup: (i/k) dpsi/dt = -(1/2k**2) lap psi + (v/2) psi, t a length (free speed 1).

    The setup gives medium, window, sides and cells; its source plays no part. What leaves the window is damped in the
    pads around it (but goes round periodic sides), and the norm falls by it.

    Parameters
    ----------
    setup : Setup
    packet : Packet
    steps_per_scale : int
        Steps, to begin with, in which the fastest part goes one medium scale.
    tolerance : float
        Largest numerical error, as misplaced probability per cell; steps are halved until it is met.
    """

    def __init__(self, setup, packet: Packet, *, steps_per_scale: int = 4, tolerance: float = 1e-3):
        if not isinstance(packet, Packet):
            raise InputError(f"packet must be a Packet; got {type(packet).__name__} {packet!r:.60}.")
        packet.check_fits(setup)
        self.setup, self.packet = setup, packet
        self.steps_per_scale = check_integer("steps_per_scale", steps_per_scale, low=1)
        self.tolerance = check_number("tolerance", tolerance, low=0.0, high=1.0, open_low=True)
        self.plane = Plane(setup)

    def __repr__(self):
        return f"WavePacket({self.setup!r}, {self.packet!r})"

    def solve(self, wavelengths, progress=None, *, times=None, fields: bool = False) -> xr.Dataset:
        """Follow the packet at one or several wavelengths.

        Parameters
        ----------
        wavelengths : float, sequence of float, or Band
            In the setup's length unit.
        progress : callable, optional
            Called with the fraction done, 0 ... 1; it may raise to cancel.
        times : float or sequence of float, optional
            Rising; lengths. Default: 21 from 0 to when a free packet has travelled the length of the window.
        fields : bool
            Also return psi on the grid of the box; only for one wavelength.

        Returns
        -------
        Dataset of kind "packet"
            density (wavelength, time, x, y), the mean of abs(psi)**2 over a cell of the window; norm, energy (mean of
            H per norm: 1/2 for a free packet of momentum 1, plus its spread), means and spreads of position, mean
            momenta, spectral_tail, numerical_error (wavelength, time; as misplaced probability: a fifteenth of the
            difference to twice the step, plus the spectral tail); field_error (wavelength), of psi at the last time.

        Raises
        ------
        InputError
            Wavelengths that are not positive or do not suit a sampled medium; times that do not rise.
        RangeError
            The window is shorter or narrower than three wavelengths.
        ResourceError
            The fields do not fit into memory.

        Warns
        -----
        BranchlabWarning
            The spectrum reaches the end of the finest grid that was tried, or the tolerance was not met.
        """
        lengths = wavelength_axis(wavelengths)
        times = check_times(times, self.setup, self.packet)
        self._check(lengths, fields)
        rows = []
        for number, length in enumerate(lengths):

            def report(share, number=number):
                if progress:
                    progress((number + share) / lengths.size)

            rows.append(self._one(length, times, fields, report))
        if progress:
            progress(1.0)
        variables = {
            name: ((WAVELENGTH, TIME), np.array([one[name] for one in rows])) for name in (*NUMBERS, "numerical_error")
        }
        variables["density"] = (WAVELENGTH, TIME, X, Y), np.array([one["density"] for one in rows])
        variables["field_error"] = (WAVELENGTH,), np.array([one["field_error"] for one in rows])
        coords = {
            WAVELENGTH: ((WAVELENGTH,), lengths),
            TIME: ((TIME,), times),
            X: ((X,), self.plane.x),
            Y: ((Y,), self.setup.y),
        }
        attrs = provenance(self.setup, model=FULL) | {
            "packet": self.packet.to_json(),
            "longest_step": [one["step"] for one in rows],
            "points_x": [one["shape"][0] for one in rows],
            "points_y": [one["shape"][1] for one in rows],
        }
        if fields:
            variables["psi"] = (WAVELENGTH, TIME, X_FINE, Y_FINE), rows[0]["psi"][None]
            x, y = self.plane.points(rows[0]["shape"])
            coords |= {X_FINE: ((X_FINE,), x), Y_FINE: ((Y_FINE,), y)}
        return dataset("packet", variables, coords, attrs)

    def _one(self, length: float, times, fields: bool, report) -> dict:
        """Follow one wavelength: refine the grid, then the steps, until both hold."""
        k = wavenumber(length)
        speed, shape = self._first_grid(k)
        longest = self.setup.medium.scale / self.steps_per_scale / speed
        for attempt in range(ATTEMPTS + 1):
            self._check_memory(shape, times, fields)
            march = PlaneMarch(self.plane, shape, k, speed)
            start = self._start(shape, k)
            rough = self._run(march, start, times, longest, 2, False, lambda share: report(0.3 * share))
            if rough["spectral_tail"].max() <= TAIL_LIMIT or attempt == ATTEMPTS:
                break
            shape = tuple(blocked(int(GROWTH * n)) for n in shape)
        for attempt in range(ATTEMPTS + 1):
            fine = self._run(march, start, times, longest, 1, fields, lambda share: report(0.3 + 0.7 * share))
            difference = np.abs(fine["density"] - rough["density"]).sum(axis=(1, 2))
            error = 0.5 * difference * self.plane.cell * self.setup.cell / 15.0
            if error.max() <= self.tolerance or attempt == ATTEMPTS:
                break
            rough, longest = fine, 0.5 * longest
        fine["numerical_error"] = error + fine["spectral_tail"]
        last = np.linalg.norm(fine["last"] - rough["last"]) / max(np.linalg.norm(fine["last"]), 1e-300)
        tail = float(fine["spectral_tail"].max())
        if tail > self.tolerance or error.max() > self.tolerance:
            warnings.warn(
                f"wavelength {length:g}: {tail:.2g} of the norm lies at the end of the grid's spectrum ({shape[0]} x "
                f"{shape[1]} points), and the steps misplace {error.max():.2g}; the tolerance is {self.tolerance:g}. "
                "Expect errors of this size.",
                BranchlabWarning,
                stacklevel=3,
            )
        return fine | {"field_error": last / 15.0, "step": longest, "shape": shape}

    def _first_grid(self, k: float) -> tuple[float, tuple[int, int]]:
        """Return the largest momentum that energy allows, and a grid that resolves it."""
        plane = self.plane
        speed = self.packet.fastest(plane, k)
        q = k * speed + MEDIUM_SHARE / plane.finest
        return speed, tuple(blocked(int(np.ceil(span * q / np.pi))) for span in plane.span)

    def _start(self, shape, k: float) -> np.ndarray:
        x, y = self.plane.points(shape)
        return self.packet.psi(x[:, None], self.plane.about(y, self.packet.y), k)

    def _run(self, march, start, times, longest, halve, fields, report) -> dict:
        """March once; return all that is measured on the way."""
        seen = {name: [] for name in (*NUMBERS, "density")}
        psi = np.empty((times.size, *march.shape), complex) if fields else None
        for number, field in enumerate(march.run(start, times, longest, halve)):
            for name, one in self._measured(march, field).items():
                seen[name].append(one)
            if fields:
                psi[number] = field
            report((number + 1) / times.size)
        return {name: np.array(values) for name, values in seen.items()} | {"psi": psi, "last": field}

    def _measured(self, march, field) -> dict:
        """Return norm, energy, means, spreads, tail and cell density of a field."""
        plane, (nx, ny) = self.plane, march.shape
        area = plane.span[0] * plane.span[1] / (nx * ny)
        density = np.abs(field) ** 2
        whole = density.sum()
        spectrum = scipy.fft.fft2(field, workers=THREADS)
        power = np.abs(spectrum) ** 2
        power /= power.sum()
        qx, qy = march.along_x.q, march.along_y.q
        px, py = power.sum(axis=1), power.sum(axis=0)
        kinetic = ((qx**2 * px).sum() + (qy**2 * py).sum()) / (2.0 * march.k**2)
        outer = [np.abs(q) > OUTER * np.abs(q).max() for q in (qx, qy)]
        x, y = plane.points(march.shape)
        along, across = density.sum(axis=1) / whole, density.sum(axis=0) / whole
        turn = np.angle((across * np.exp(2j * np.pi * y / plane.span[1])).sum())
        y = plane.about(y, turn * plane.span[1] / (2.0 * np.pi))
        mean_x, mean_y = (along * x).sum(), (across * y).sum()
        return {
            "norm": whole * area,
            "energy": kinetic + 0.5 * (march.v * density).sum() / whole,
            "mean_x": mean_x,
            "mean_y": mean_y,
            "mean_px": (qx * px).sum() / march.k,
            "mean_py": (qy * py).sum() / march.k,
            "spread_x": np.sqrt((along * (x - mean_x) ** 2).sum()),
            "spread_y": np.sqrt((across * (y - mean_y) ** 2).sum()),
            "spectral_tail": (px[outer[0]].sum() + py[outer[1]].sum()) * whole * area,
            "density": self._cell_density(spectrum),
        }

    def _cell_density(self, spectrum) -> np.ndarray:
        """Return the mean of abs(psi)**2 over the cells of the window.

        psi is put on a grid twice as fine, or finer, whose points fill whole cells: abs(psi)**2 has twice the bandwidth
        of psi.
        """
        per = [-(-2 * n // cells) for n, cells in zip(spectrum.shape, self.plane.cells_in_span, strict=True)]
        (nx, ny), (along, across) = self.plane.cells_in_span, self.plane.cells
        first = (nx - along) // 2
        fine = _padded(spectrum, per[0] * nx, 0)[first * per[0] : (first + along) * per[0]]
        low = (ny - across) // 2
        means = np.empty((along, across))
        for row in range(0, along, CELL_ROWS):
            some = _padded(fine[row * per[0] : (row + CELL_ROWS) * per[0]], per[1] * ny, 1)
            some = some[:, low * per[1] : (low + across) * per[1]]
            some = (some.real**2 + some.imag**2).reshape(-1, per[0], across, per[1])
            means[row : row + CELL_ROWS] = some.mean(axis=(1, 3))
        return means

    def _check(self, lengths, fields: bool) -> None:
        """Refuse wavelengths that the medium, the window or the request does not suit."""
        setup = self.setup
        if fields and lengths.size > 1:
            raise InputError(
                f"fields=True needs one wavelength: every wavelength has a grid of its own; got {lengths.size}. Solve one "
                "at a time, or use fields=False."
            )
        if lengths.min() < setup.medium.shortest_wavelength:
            raise InputError(
                f"wavelength {lengths.min():g} is too short for the spacing of the sampled medium, which holds structure for "
                f"wavelengths >= {setup.medium.shortest_wavelength:.3g} (6 points each). Use a longer wavelength, a finer "
                "medium, or smooth the samples."
            )
        longest = min(setup.length, setup.width) / 3.0
        if lengths.max() > longest:
            raise RangeError(
                f"wavelength {lengths.max():g} does not fit the window of {setup.length:g} x {setup.width:g} three times; "
                f"its pads would not absorb it. Use wavelength <= {longest:.4g} or a larger window."
            )

    def _check_memory(self, shape, times, fields: bool) -> None:
        """Refuse what does not fit."""
        points = shape[0] * shape[1]
        cells = self.plane.cells[0] * self.plane.cells[1]
        check_memory(
            BYTES_A_POINT * points + 8.0 * 3 * cells * times.size + (16.0 * points * times.size if fields else 0.0),
            f"a packet on {shape[0]} x {shape[1]} points at {times.size} times",
            "Use a longer wavelength, a smaller window, fewer times or cells, or fields=False.",
        )


def _padded(spectrum, n: int, axis: int) -> np.ndarray:
    """Return the field of a spectrum on n points along one axis, at the centres of equal cells of the same period."""
    m = spectrum.shape[axis]
    spectrum = np.moveaxis(spectrum, axis, -1)
    wide = np.zeros((*spectrum.shape[:-1], n), complex)
    half = m // 2
    q = np.fft.fftfreq(m, 1.0 / m)
    moved = spectrum * np.exp(1j * np.pi * q * (1.0 / n - 1.0 / m)) * (n / m)
    wide[..., :half], wide[..., -half:] = moved[..., :half], moved[..., -half:]
    return np.moveaxis(scipy.fft.ifft(wide, axis=-1, workers=THREADS, overwrite_x=True), -1, axis)


def overlap(first: xr.Dataset, second: xr.Dataset) -> xr.DataArray:
    """Return abs(<first|second>) of two packets in one setup, solved with `fields=True` at the same times.

    Parameters
    ----------
    first, second : Dataset of kind "packet"
        One wavelength, which is the same. Their grids may differ: the spectra are multiplied where both have one.

    Returns
    -------
    DataArray (time,)
        Constant in time while both packets are inside the window: to round-off if both were solved with as many steps
        from time to time, else to their `field_error`.
    """
    for one in (first, second):
        if "psi" not in one:
            raise InputError("an overlap needs psi: solve both packets with fields=True.")
    for name, what in ((WAVELENGTH, "wavelengths"), (TIME, "times")):
        if not np.array_equal(first[name], second[name]):
            raise InputError(f"the two packets have different {what}. Solve both with the same.")
    if first.attrs["setup"] != second.attrs["setup"]:
        raise InputError("the two packets are in different setups. Solve both in one Setup.")
    spectra = [_common(one.psi.values[0], one, (first, second)) for one in (first, second)]
    values = np.abs((np.conj(spectra[0]) * spectra[1]).sum(axis=(1, 2)))
    unit = first.attrs["length_unit"]
    return xr.DataArray(labelled("overlap", values, (TIME,), length_unit=unit), {TIME: first[TIME]}, name="overlap")


def _common(psi, own, both) -> np.ndarray:
    """Return Fourier amplitudes of psi, in units that make the sum of their squares its norm, on common wavenumbers."""
    for axis, name in ((1, X_FINE), (2, Y_FINE)):
        x = own[name].values
        span = (x[1] - x[0]) * x.size
        half = min(one[name].size for one in both) // 2
        keep = np.r_[0:half, -half + 1 : 0]
        q = wavenumbers(x.size, span)[keep]
        psi = np.take(scipy.fft.fft(psi, axis=axis, workers=THREADS), keep, axis=axis)
        shift = np.exp(-1j * q * x[0]) * (np.sqrt(span) / x.size)
        psi = psi * np.expand_dims(shift, [a for a in range(3) if a != axis])
    return psi
