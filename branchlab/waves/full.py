"""The full wave: the stationary two-way wave equation, the reference for full rays and for the paraxial wave."""

import math
import warnings

import numpy as np
import xarray as xr

from branchlab.conventions import FULL, WAVELENGTH, Y_FINE, X, Y
from branchlab.errors import (
    BranchlabWarning,
    ConvergenceError,
    InputError,
    RangeError,
    check_choice,
    check_number,
)
from branchlab.launch.band import wavelength_axis
from branchlab.results import dataset, provenance
from branchlab.waves.flux import ScreenReader
from branchlab.waves.full_grid import SlabTable
from branchlab.waves.full_problem import FullProblem
from branchlab.waves.team import Team

PRECISIONS = {"double": np.complex128, "single": np.complex64}
FINEST_TOLERANCE = {"double": 1e-8, "single": 1e-5}  # below, round-off of the operator is in the way
ALGEBRA_SHARE = 0.7  # of the tolerance that the iteration may take
RESOLUTION = 1.02  # of the first grid at a tolerance of 1e-3; a tenth more for every further digit
FINER = 1.12  # from one grid to the next
GRIDS = 4  # that are tried, at the most
NARROWEST = 3.0  # wavelengths across the window
NUMBERS = ("reflected", "residual", "refinement_error", "field_error", "iterations", "memory")
ON_SCREENS = ("flux", "forward_flux", "backward_flux", "numerical_error", "spectral_tail")
MISPLACED = 0.25  # least misplaced flux on a screen over the relative error of the field in all; 0.2 to 0.6 in 40 runs
OUTER = 0.9  # the spectral tail is what lies beyond this share of the grid's largest wavenumber


class FullWave:
    """The wave of a setup, at any angle and both ways: (lap + k**2 (1 - v)) psi = 0.

    The medium is that of `Slab`: it begins at a face about x = 0 and fades out behind x = length and, with absorbing
    sides, beyond the sides; around it is its mean, without end. What comes in is the field that the source would have
    in the mean medium alone (see `incoming`), a plane wave without end; what is scattered leaves through absorbing pads.

    Parameters
    ----------
    setup : Setup
    precision : {"double", "single"}
        Single takes half the time and memory and is right to about 1e-5 of the field.
    points_per_wavelength : float, optional
        Of the grid, in the mean medium. Default: as many as the tolerance needs, more where v is negative or its
        structure fine, and more again if the field says so.

    Notes
    -----
    psi = psi0 + psi_s with psi0 the incoming field, and (lap + k**2 (1 - v)) psi_s = k**2 (v - mean) psi0 is solved as
    a damped Lippmann-Schwinger equation on a Fourier grid (`DampedOperator`), by flexible GMRES with one-way marches
    through the medium as preconditioner (`Sweeps`); where v reaches 0.95, and where that stalls, by the convergent Born
    series, which is slower. Regions with v > 1 are thus solved too. Structure of v below the grid's pitch is left out. A
    periodic box a whole number of wavelengths wide, and deep wells, hold resonances that take many iterations.
    """

    def __init__(self, setup, precision: str = "double", *, points_per_wavelength: float | None = None):
        self.setup = setup
        self.precision = check_choice("precision", precision, PRECISIONS)
        self.points_per_wavelength = (
            None
            if points_per_wavelength is None
            else check_number("points_per_wavelength", points_per_wavelength, low=0.0, high=64.0, open_low=True)
        )
        self._table = SlabTable(setup)

    def __repr__(self):
        return f"FullWave({self.setup!r}, precision={self.precision!r})"

    def solve(self, wavelengths, progress=None, *, tolerance: float = 1e-3, fields: bool = False) -> xr.Dataset:
        """Solve one or many wavelengths.

        Parameters
        ----------
        wavelengths : float, sequence of float, or Band
            In the setup's length unit, where v = 0.
        progress : callable, optional
            Called with the fraction done, 0 ... 1; it may raise to cancel.
        tolerance : float
            Largest estimated error of the field, relative.
        fields : bool
            Also return psi on the screens and the grid's points across; one wavelength and one coherent part.

        Returns
        -------
        Dataset of kind "wave"
            intensity (wavelength, x, y), the mean over a cell, incoherent parts added; flux, that which goes forward
            less that which comes back, through the width; forward_flux, backward_flux; numerical_error (as misplaced
            flux: of the iteration and of the grid); spectral_tail; and by wavelength: reflected, the backward flux before
            the face over that which came in; residual; refinement_error, of the field by the grid; field_error, of the
            field in all; iterations; memory in bytes. Attribute `absorber_begins` says where the pads begin: x before
            the face, x behind the exit, abs(y).

        Raises
        ------
        InputError
            Wavelengths that are not positive, or too short for a sampled medium; fields of several wavelengths.
        RangeError
            A window narrower than three wavelengths; fewer points per wavelength than the wave has waves.
        ResourceError
            The fields do not fit into memory.
        ConvergenceError
            Neither iteration reached the tolerance; its `best` is the Dataset as far as it came.

        Warns
        -----
        BranchlabWarning
            A wave that runs along a periodic box meets itself in phase; the grid asked for is too coarse.
        """
        lengths = wavelength_axis(wavelengths)
        tolerance = check_number("tolerance", tolerance, low=FINEST_TOLERANCE[self.precision], high=0.1)
        parts = self.setup.parts()
        self._check(lengths, parts, fields)
        rows = []
        with Team() as team:
            for number, length in enumerate(lengths):

                def report(share, number=number):
                    if progress:
                        progress((number + share) / lengths.size)

                rows.append(self._one(float(length), parts, tolerance, fields, team, report))
        if progress:
            progress(1.0)
        result = self._dataset(lengths, rows, fields)
        wrong = [length for length, row in zip(lengths, rows, strict=True) if not row["converged"]]
        if wrong:
            worst = max(row["field_error"] for row in rows)
            raise ConvergenceError(
                f"wavelength {', '.join(f'{one:g}' for one in wrong)}: neither the sweeps nor the Born series came below "
                f"the tolerance {tolerance:g}; the estimated error of the best field is {worst:.2g}. It is the error's "
                "attribute `best`. Use a larger tolerance, a weaker or smaller medium, or a wavelength off resonance.",
                best=result,
            )
        return result

    def _one(self, length: float, parts, tolerance: float, fields: bool, team, report) -> dict:
        """Solve one wavelength, on finer grids until the field is resolved."""
        resolution = max(1.0, RESOLUTION + 0.1 * math.log10(1e-3 / tolerance))
        for attempt in range(GRIDS):
            problem = FullProblem(
                self._table,
                length,
                PRECISIONS[self.precision],
                team,
                resolution=resolution,
                points_per_wavelength=self.points_per_wavelength,
            )
            row = self._all_parts(problem, parts, tolerance, fields, report)
            coarse = row["refinement_error"] > tolerance
            if self.points_per_wavelength or not coarse or attempt == GRIDS - 1:
                break
            resolution *= FINER
        if coarse:
            warnings.warn(
                f"the grid at wavelength {length:g} leaves an estimated error of {row['refinement_error']:.2g}, above the "
                f"tolerance {tolerance:g}. Use more points_per_wavelength, or a medium without sharp edges.",
                BranchlabWarning,
                stacklevel=3,
            )
        return row

    def _all_parts(self, problem, parts, tolerance: float, fields: bool, report) -> dict:
        """Solve every coherent part and add what they send to the screens."""
        total = dict.fromkeys(("intensity", *ON_SCREENS, "reflected", "refinement_error", "field_error"), 0.0)
        total |= {"residual": 0.0, "iterations": 0, "memory": 0.0, "converged": True}
        for number, part in enumerate(parts):
            scattered = problem.solve(
                part, ALGEBRA_SHARE * tolerance, lambda share, number=number: report((number + share) / len(parts))
            )
            seen = self._seen(scattered)
            for name in ("intensity", *ON_SCREENS, "reflected"):
                total[name] = total[name] + part.weight * seen[name]
            solved = scattered.solved
            total["refinement_error"] += part.weight * scattered.grid_error
            total["field_error"] += part.weight * (solved.error + scattered.grid_error)
            total["residual"] = max(total["residual"], solved.residual)
            total["iterations"] += solved.iterations
            total["memory"] = max(total["memory"], scattered.memory)
            total["converged"] &= solved.converged
        grid = scattered.grid
        total |= {"shape": grid.shape, "begins": (*grid.edges, grid.side if grid.pad_y else math.inf)}
        if fields:
            total |= {"psi": seen["psi"], "y_fine": grid.y}
        return total

    def _seen(self, scattered) -> dict:
        """Return what one coherent part sends to the screens."""
        grid, free, solved, setup = scattered.grid, scattered.free, scattered.solved, self.setup
        reader = ScreenReader(grid, np.append(setup.x, self._table.start))
        field, slope = reader.values(solved.field), reader.slopes(solved.field)
        come, come_x = free.rows(reader.x), free.slopes(reader.x)
        psi, psi_x = come + field, come_x + slope
        (ahead, ahead_x), (back, back_x) = reader.both_ways(field, slope)
        backward = -reader.flux(back, back_x)
        forward = reader.flux(come + ahead, come_x + ahead_x)
        window = np.abs(grid.y) <= 0.5 * setup.width
        change = solved.left * reader.values(solved.correction)
        power = np.sum(np.abs(psi[:, window]) ** 2, axis=1)
        moved = np.sum(np.abs((np.conj(psi) * change).real[:, window]), axis=1)
        # waves that the grid folds onto others come back: they are most where they leave (in 40 runs 1, 0.3, 0.1, 0.05 of
        # the field's error, as misplaced flux, on screens at 0, 1/4, 1/2 and 1 of the length)
        ahead_of = 1.0 - np.clip(reader.x / setup.length, 0.0, 1.0)
        folded = scattered.grid_error * (0.05 + 0.95 * ahead_of**3)
        # what is left need not lie where the correction lay
        left = np.maximum(moved / np.maximum(power, 1e-300), MISPLACED * solved.error)
        spectrum = np.abs(np.fft.fft(field, axis=1)) ** 2
        outer = np.abs(grid.qy) > OUTER * np.pi / grid.pitch[1]
        tail = spectrum[:, outer].sum(axis=1) / np.maximum(spectrum.sum(axis=1), 1e-300)
        return {
            "intensity": reader.cell_means(psi, psi).real[:-1],
            "flux": reader.flux(psi, psi_x)[:-1],
            "forward_flux": forward[:-1],
            "backward_flux": backward[:-1],
            "reflected": backward[-1] / free.flux,
            "numerical_error": (left + folded)[:-1],
            "spectral_tail": tail[:-1],
            "psi": (psi * np.exp(1j * grid.bloch * grid.y))[:-1],
        }

    def _dataset(self, lengths, rows, fields: bool) -> xr.Dataset:
        """Return the result of all wavelengths."""
        setup = self.setup
        variables = {name: ((WAVELENGTH, X), np.array([row[name] for row in rows])) for name in ON_SCREENS}
        variables["intensity"] = (WAVELENGTH, X, Y), np.array([row["intensity"] for row in rows])
        variables |= {name: ((WAVELENGTH,), np.array([row[name] for row in rows])) for name in NUMBERS}
        coords = {WAVELENGTH: ((WAVELENGTH,), lengths), X: ((X,), setup.x), Y: ((Y,), setup.y)}
        if fields:
            variables["psi"] = (WAVELENGTH, X, Y_FINE), rows[0]["psi"][None]
            coords[Y_FINE] = ((Y_FINE,), rows[0]["y_fine"])
        attrs = provenance(setup, model=FULL) | {
            "carrier": "none",
            "precision": self.precision,
            "points_x": [row["shape"][0] for row in rows],
            "points_y": [row["shape"][1] for row in rows],
            "absorber_begins": list(rows[0]["begins"]),
        }
        return dataset("wave", variables, coords, attrs)

    def _check(self, lengths, parts, fields: bool) -> None:
        """Refuse wavelengths that the medium, the window or the request does not suit; warn of resonances."""
        setup = self.setup
        if fields and (lengths.size > 1 or len(parts) > 1):
            raise InputError(
                "fields=True needs one wavelength, for every one has a grid of its own, and a source of one coherent part, for "
                f"parts add as intensities; got {lengths.size} and {len(parts)}. Solve one at a time, or use fields=False."
            )
        shortest = setup.medium.shortest_wavelength
        if lengths.min() < shortest:
            raise InputError(
                f"wavelength {lengths.min():g} is too short for the spacing of the sampled medium, which holds structure for "
                f"wavelengths >= {shortest:.3g} (6 points each). Use a longer wavelength, a finer medium, or smooth the "
                "samples."
            )
        own = lengths / self._table.index
        longest = min(setup.length, setup.width) / NARROWEST
        if own.max() > longest:
            raise RangeError(
                f"wavelength {own.max():.4g} in the medium does not fit the window of {setup.length:g} x {setup.width:g} "
                f"three times: nothing could be told apart in it. Use wavelength <= {longest * self._table.index:.4g} or a "
                "larger window."
            )
        if self.points_per_wavelength is not None:
            least = 2.0 * math.sqrt(1.0 - min(0.0, self._table.lowest))
            if self.points_per_wavelength <= 1.05 * least:
                raise RangeError(
                    f"points_per_wavelength {self.points_per_wavelength:g} is too few: where v is lowest the wave needs more "
                    f"than {1.05 * least:.3g} (two for each of its own wavelengths, and 5 %). Use 3 or more."
                )
        for part in parts:
            if part.tilt**2 >= self._table.index**2:
                raise RangeError(
                    f"a part of the source has transverse momentum {part.tilt:.3g}; in the mean medium it must stay below "
                    f"{self._table.index:.3g} in size. Use a smaller angle."
                )
        if not setup.window.pad:
            self._check_resonance(lengths, parts)

    def _check_resonance(self, lengths, parts) -> None:
        """Warn of waves along y that meet themselves in phase before they have left along x."""
        once = 2.0 * np.pi / self.setup.width
        for length in lengths:
            k = 2.0 * np.pi / length
            for part in parts:
                orders = (np.array([k, -k]) * self._table.index - k * part.tilt) / once
                off = np.abs(orders - np.round(orders)).min() * once
                if math.sqrt(2.0 * k * off) * self.setup.length < 1.0:
                    warnings.warn(
                        f"wavelength {length:g} fits the width of {self.setup.width:g} a whole number of times: waves along "
                        "the periodic sides meet themselves in phase (a grazing resonance). What they carry depends on the last "
                        "digit of the wavelength, and the iteration is slow. Use a wavelength a little off.",
                        BranchlabWarning,
                        stacklevel=4,
                    )
                    return
