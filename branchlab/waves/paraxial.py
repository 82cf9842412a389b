"""The paraxial wave: the reference for paraxial rays, with which it shares one Hamiltonian."""

import warnings

import numpy as np
import xarray as xr

from branchlab.conventions import CARRIER, PARAXIAL, WAVELENGTH, Y_FINE, X, Y, wavenumber
from branchlab.errors import (
    BranchlabWarning,
    InputError,
    check_choice,
    check_integer,
    check_memory,
    check_number,
)
from branchlab.launch.band import wavelength_axis
from branchlab.launch.setup import GRID_SHARE
from branchlab.results import dataset, provenance
from branchlab.waves.march import March
from branchlab.waves.table import ScreenTable

PRECISIONS = {"double": np.complex128, "single": np.complex64}
TAIL_LIMIT = 1e-5  # share of flux at the end of the spectrum above which the grid is doubled
DOUBLINGS = 4  # of grid and of steps, at the most


class ParaxialWave:
    """The paraxial wave through the window of a setup: i du/dx = -(1/2k) u_yy + (k/2) v u, psi = u exp(ikx).

    Parameters
    ----------
    setup : Setup
    precision : {"double", "single"}
        Single is twice as fast and right to about 1e-5 of the field after hundreds of steps.
    steps_per_scale : int
        Steps per medium scale to begin with.
    tolerance : float
        Largest numerical error, as misplaced flux per cell; steps are halved until it is met.

    Notes
    -----
    Right while angles to x are small: the error of the paraxial model itself is not part of `numerical_error`. With
    absorbing sides the wave is damped outside the width, and flux that has left does not come back.
    """

    def __init__(self, setup, precision: str = "double", *, steps_per_scale: int = 4, tolerance: float = 1e-3):
        self.setup = setup
        self.precision = check_choice("precision", precision, PRECISIONS)
        self.steps_per_scale = check_integer("steps_per_scale", steps_per_scale, low=1)
        self.tolerance = check_number("tolerance", tolerance, low=0.0, high=1.0, open_low=True)

    def __repr__(self):
        return f"ParaxialWave({self.setup!r}, precision={self.precision!r})"

    def solve(self, wavelengths, progress=None, *, fields: bool = False) -> xr.Dataset:
        """March one or many wavelengths through the window, together.

        Parameters
        ----------
        wavelengths : float, sequence of float, or Band
            In the setup's length unit.
        progress : callable, optional
            Called with the fraction done, 0 ... 1; it may raise to cancel.
        fields : bool
            Also return the envelope psi on the fine transverse grid; only for a source of one coherent part.

        Returns
        -------
        Dataset of kind "wave"
            intensity (wavelength, x, y), the mean over a cell, incoherent parts added; flux; numerical_error (as
            misplaced flux: a fifteenth of the difference to twice the step, plus the spectral tail);
            spectral_tail; field_error (wavelength), of the envelope on the last screen. Attributes `step`, `points`.

        Raises
        ------
        InputError
            Wavelengths that are not positive, or too short for the spacing of a sampled medium.
        ResourceError
            The fields do not fit into memory.

        Warns
        -----
        BranchlabWarning
            The spectrum reaches the end of the finest grid that was tried.
        """
        lengths = wavelength_axis(wavelengths)
        self._check_samples(lengths)
        parts, setup = self.setup.parts(), self.setup
        if fields and len(parts) > 1:
            raise InputError(
                f"fields=True needs a source of one coherent part; this one has {len(parts)}, whose intensities add, "
                "not their fields. Use fields=False, or one coherent source."
            )
        k = wavenumber(lengths)
        per = setup.steps_per_screen(setup.medium.scale / self.steps_per_scale)
        per += per % 2
        n = setup.fine_points(k.max(), setup.angle_bound() / GRID_SHARE)
        for attempt in range(DOUBLINGS + 1):
            self._check_memory(k.size, n, fields)
            rough, _ = self._all_parts(parts, k, n, per // 2, False, progress, (0.0, 0.3))
            if rough["tail"].max() <= TAIL_LIMIT or attempt == DOUBLINGS:
                break
            n *= 2
        for attempt in range(DOUBLINGS + 1):
            fine, psi = self._all_parts(parts, k, n, per, fields, progress, (0.3, 1.0))
            error = _misplaced(fine["intensity"], rough["intensity"]) / 15.0
            if error.max() <= self.tolerance or attempt == DOUBLINGS:
                break
            rough, per = fine, 2 * per
        if fine["tail"].max() > TAIL_LIMIT:
            warnings.warn(
                f"up to {fine['tail'].max():.2g} of the flux lies beyond 90 % of the grid's largest wavenumber (limit "
                f"{TAIL_LIMIT:g}; {n} points): a source or a medium with sharp edges. Expect errors of this size.",
                BranchlabWarning,
                stacklevel=2,
            )
        if progress:
            progress(1.0)
        last = np.linalg.norm(fine["last"] - rough["last"], axis=-1) / np.linalg.norm(fine["last"], axis=-1)
        variables = {
            "intensity": ((WAVELENGTH, X, Y), fine["intensity"]),
            "flux": ((WAVELENGTH, X), fine["intensity"].sum(axis=-1) * setup.cell),
            "numerical_error": ((WAVELENGTH, X), error + fine["tail"]),
            "spectral_tail": ((WAVELENGTH, X), fine["tail"]),
            "field_error": ((WAVELENGTH,), last / 15.0),
        }
        coords = {WAVELENGTH: ((WAVELENGTH,), lengths), X: ((X,), setup.x), Y: ((Y,), setup.y)}
        if fields:
            variables["psi"] = ((WAVELENGTH, X, Y_FINE), psi)
            coords[Y_FINE] = ((Y_FINE,), setup.window.points(n))
        attrs = provenance(setup, model=PARAXIAL)
        attrs |= {
            "carrier": CARRIER,
            "precision": self.precision,
            "step": setup.length / (per * (setup.x.size - 1)),
            "points": n,
        }
        return dataset("wave", variables, coords, attrs)

    def _all_parts(self, parts, k, n, per, fields, progress, share):
        """March every coherent part: intensities, tails and the last fields, and psi on request."""
        setup = self.setup
        found = {
            "intensity": np.zeros((k.size, setup.x.size, setup.y.size)),
            "tail": np.zeros((k.size, setup.x.size)),
            "last": np.empty((k.size, len(parts) * n), dtype=np.complex128),
        }
        psi = np.empty((k.size, setup.x.size, n), dtype=np.complex128) if fields else None
        table = ScreenTable(setup, n, per)
        for number, part in enumerate(parts):
            march = March(setup, part, k, table, PRECISIONS[self.precision])
            for seen in march.run(fields):
                found["intensity"][:, seen.screen] += part.weight * seen.intensity
                found["tail"][:, seen.screen] += part.weight * seen.tail
                if fields:
                    psi[:, seen.screen] = march.true_field(seen.field, seen.screen)
                if progress:
                    done = (number + seen.screen / setup.x.size) / len(parts)
                    progress(share[0] + (share[1] - share[0]) * done)
            found["last"][:, number * n : (number + 1) * n] = march.true_field(seen.field, seen.screen)
        return found, psi

    def _check_samples(self, lengths) -> None:
        """Refuse wavelengths that would see structure which a sampled medium does not hold."""
        shortest = self.setup.medium.shortest_wavelength
        if lengths.min() < shortest:
            raise InputError(
                f"wavelength {lengths.min():g} in a medium of rough samples needs a spacing <= {lengths.min() / 6:.3g} (6 "
                f"points per wavelength); the sampled medium has {shortest / 6:.3g}. Use wavelength >= {shortest:.3g}, a "
                "finer medium, or smooth the samples."
            )

    def _check_memory(self, wavelengths: int, n: int, fields: bool) -> None:
        """Refuse a march whose arrays do not fit."""
        setup = self.setup
        results = 3 * 8.0 * wavelengths * setup.x.size * setup.y.size
        march = (12 + 2 * len(setup.parts())) * 16.0 * wavelengths * n
        kept = 16.0 * wavelengths * setup.x.size * n if fields else 0.0
        check_memory(
            results + march + kept,
            f"a march of {wavelengths} wavelengths on {n} points and {setup.x.size} screens",
            "Use fewer wavelengths, screens or cells, a longer shortest wavelength, or fields=False.",
        )


def _misplaced(a, b) -> np.ndarray:
    """Return half the absolute difference of two intensities, each normalised on its screen."""
    a_sum, b_sum = (np.maximum(one.sum(axis=-1, keepdims=True), np.finfo(float).tiny) for one in (a, b))
    return 0.5 * np.abs(a / a_sum - b / b_sum).sum(axis=-1)
