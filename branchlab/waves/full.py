"""The full wave: the stationary two-way wave equation, the reference for full rays and for the paraxial wave."""

import numpy as np
import xarray as xr

from branchlab.conventions import FULL, WAVELENGTH, Y_FINE, X, Y
from branchlab.errors import check_choice
from branchlab.launch.band import wavelength_axis
from branchlab.results import dataset, provenance
from branchlab.waves.flux import ScreenReader
from branchlab.waves.full_grid import FullGrid, SlabTable
from branchlab.waves.full_iteration import sweep_iteration
from branchlab.waves.full_operator import DampedOperator
from branchlab.waves.full_sweeps import Sweeps
from branchlab.waves.incoming import incoming
from branchlab.waves.team import Team

PRECISIONS = {"double": np.complex128, "single": np.complex64}
REALS = {"double": np.float64, "single": np.float32}
ROWS_AT_ONCE = 64
LEAST_LOSS = 0.1
LOSS_PER_RMS = 2.5
OUTER = 0.9


class FullWave:
    def __init__(self, setup, precision="double", *, points_per_wavelength=None):
        self.setup = setup
        self.precision = check_choice("precision", precision, PRECISIONS)
        self.points_per_wavelength = points_per_wavelength
        self.table = SlabTable(setup)

    def solve(self, wavelengths, tolerance=1e-3, fields=False, progress=None) -> xr.Dataset:
        lengths = wavelength_axis(wavelengths)
        rows = []
        with Team() as team:
            for length in lengths:
                rows.append(self._one(length, tolerance, fields, team, progress))
        setup = self.setup
        variables = {
            name: ((WAVELENGTH, X), np.array([one[name] for one in rows]))
            for name in ("flux", "forward_flux", "backward_flux", "numerical_error", "spectral_tail")
        }
        variables["intensity"] = (WAVELENGTH, X, Y), np.array([one["intensity"] for one in rows])
        for name in ("reflected", "residual", "refinement_error", "iterations", "memory"):
            variables[name] = (WAVELENGTH,), np.array([one[name] for one in rows])
        coords = {WAVELENGTH: ((WAVELENGTH,), lengths), X: ((X,), setup.x), Y: ((Y,), setup.y)}
        if fields:
            variables["psi"] = (WAVELENGTH, X, Y_FINE), rows[0]["psi"][None]
            coords[Y_FINE] = ((Y_FINE,), rows[0]["y"])
        return dataset("wave", variables, coords, provenance(setup, model=FULL) | {"carrier": "none"})

    def _one(self, length, tolerance, fields, team, progress):
        setup, dtype = self.setup, PRECISIONS[self.precision]
        out = {}
        resolution = 1.15 + 0.15 * np.log10(1e-3 / tolerance)
        for part in setup.parts():
            turn = 2.0 * np.pi / length * part.tilt
            bloch = 0.0
            if not setup.window.pad:
                once = 2.0 * np.pi / setup.width
                bloch = turn - once * round(turn / once)
            grid = FullGrid(
                self.table, length, resolution=resolution, points_per_wavelength=self.points_per_wavelength, bloch=bloch
            )
            v = self.table.on(grid, REALS[self.precision])
            eps = max(LEAST_LOSS, LOSS_PER_RMS * self.table.rms, grid.loss_x.max(), grid.loss_y.max())
            operator = DampedOperator(grid, v, eps, dtype, team)
            sweeps = Sweeps(operator, self.table.rms)
            wave = incoming(grid, part)
            b = operator.empty()
            square = 0.0
            inside = np.abs(grid.y) <= 0.5 * setup.width
            for at in range(0, grid.shape[0], ROWS_AT_ONCE):
                some = slice(at, at + ROWS_AT_ONCE)
                free = wave.rows(grid.x[some])
                within = (grid.x[some] >= 0) & (grid.x[some] <= setup.length)
                square += np.sum(np.abs(free[np.ix_(within, inside)]) ** 2)
                b[some] = grid.k**2 * v[some] * free
            operator.green(b)
            solved = sweep_iteration(operator, sweeps, b, np.sqrt(square), tolerance, progress or (lambda share: None))
            self.solved, self.grid, self.wave, self.operator = solved, grid, wave, operator
            front = ScreenReader(grid, [self.table.start])
            reader = ScreenReader(grid, setup.x)
            found = self._read(reader, wave, solved)
            back = front.backward(front.values(solved.field), front.slopes(solved.field))
            found["reflected"] = -front.flux(*back)[0] / wave.flux
            found["tail"] = 0.0
            for name, value in found.items():
                out[name] = out.get(name, 0.0) + part.weight * value
            out["psi"], out["y"] = found.pop("psi"), grid.y
            out["residual"], out["iterations"], out["memory"] = solved.residual, solved.iterations, 0.0
            out["refinement_error"] = 0.0
            out["spectral_tail"] = 0.0 * setup.x
        return out

    def _read(self, reader, wave, solved):
        grid = reader.grid
        scattered, bent = reader.values(solved.field), reader.slopes(solved.field)
        free, slope = wave.rows(reader.x), wave.slopes(reader.x)
        psi, psi_x = free + scattered, slope + bent
        ahead = reader.forward(scattered, bent)
        found = {
            "intensity": reader.cell_means(psi, psi).real,
            "flux": reader.flux(psi, psi_x),
            "forward_flux": reader.flux(free + ahead[0], slope + ahead[1]),
            "backward_flux": -reader.flux(*reader.backward(scattered, bent)),
            "psi": psi * np.exp(1j * grid.bloch * grid.y),
        }
        inside = np.abs(grid.y) <= 0.5 * grid.setup.width
        off = np.linalg.norm(reader.values(solved.correction)[:, inside], axis=1)
        size = np.linalg.norm(psi[:, inside], axis=1)
        rho = solved.contraction
        found["numerical_error"] = 1.5 * rho / (1.0 - rho) * off / size
        return found
