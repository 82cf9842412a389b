"""The comparison of rays and wave, screen by screen, at one resolution."""

import json
import warnings

import numpy as np
import xarray as xr

from branchlab.compare import attribution
from branchlab.compare.averaging import check_bands, places, weighted
from branchlab.compare.measures import correlation_rows, displacement_rows, misplaced_rows, unit_rows
from branchlab.compare.pairs import check_pair, check_side, rows
from branchlab.compare.smoothing import cell_of, check_resolution, smooth_rows
from branchlab.conventions import REALISATION, WAVELENGTH, X, Y
from branchlab.errors import BranchlabWarning
from branchlab.results import dataset

STORED = {"caustic": "caustic_part"}  # "caustic" alone is a dimension of the layout
MAP, CURVE = (REALISATION, WAVELENGTH, X, Y), (REALISATION, WAVELENGTH, X)


def _scaled(values: np.ndarray, flux: np.ndarray) -> np.ndarray:
    """Return intensities scaled to a flux (sum over y) per screen; 0 where there is none."""
    return np.nan_to_num(unit_rows(values), nan=0.0) * flux[..., None]


class _Side:
    """One smoothed side: the values at single wavelengths, and their averages over the bands."""

    def __init__(self, result, kind, call, wavelengths, bands, resolution):
        cell = cell_of(np.asarray(result[Y].values, float))
        values = rows(result, "intensity", (WAVELENGTH, X, Y))

        def smoothed(intensity):
            return smooth_rows(intensity, cell, resolution, result.attrs["sides"])

        self.result, self.bands = result, bands
        if bands:
            nodes = [band.wavelengths() for band in bands]
            at = places(result, np.concatenate(nodes), kind, call)
            self.nodes = np.split(at, np.cumsum([one.size for one in nodes])[:-1])
            self.at = np.array([one[one.size // 2] for one in self.nodes])  # the centre is the middle node
        else:
            self.at = places(result, wavelengths, kind, call)
        self.flux = cell * values[:, self.at].sum(axis=-1)
        self.single = smoothed(values[:, self.at])
        self.average = None
        if bands:
            self.average = smoothed(self._averages(values))

    def curve(self, name) -> np.ndarray:
        """Return a variable over (realisation, wavelength, x) at the single wavelengths."""
        return rows(self.result, name, (WAVELENGTH, X))[:, self.at]

    def curve_average(self, name) -> np.ndarray:
        """Return the band averages of a variable over (realisation, wavelength, x)."""
        return self._averages(rows(self.result, name, (WAVELENGTH, X)))

    def _averages(self, values: np.ndarray) -> np.ndarray:
        """Return the averages over the bands of values over (realisation, wavelength, ...)."""
        means = [weighted(values[:, at], band, 1) for at, band in zip(self.nodes, self.bands, strict=True)]
        return np.stack(means, axis=1)


def _call(maker: str, bands, wavelengths) -> str:
    """Return the call that makes what a comparison needs."""
    if len(bands) == 1:
        return f"{maker}.solve({bands[0]!r})"
    if bands:
        return f"{maker}.solve(numpy.concatenate([band.wavelengths() for band in bands]))"
    return f"{maker}.solve([{', '.join(f'{one:.12g}' for one in wavelengths)}])"


def compare(rays, wave, semiclassical=None, *, resolution: float, band=None) -> xr.Dataset:
    """Compare a ray density with a wave, and with a semiclassical sum say what the mismatch consists of.

    All sides are smoothed with one Gaussian along y. On every screen each is then scaled to the flux of the
    rays (for the measures: to 1), so what is compared is where the flux is; how much of it there is stands in
    `flux_mismatch`.

    Parameters
    ----------
    rays : Dataset
        Of kind "density".
    wave : Dataset
        Of kind "wave", at the wavelengths to compare, or with a band at least at its nodes.
    semiclassical : Dataset, optional
        Of kind "semiclassical", at the same wavelengths: gives the attribution.
    resolution : float
        Standard deviation of the Gaussian, in the unit of y: between one cell and a quarter of the width.
    band : Band or list of Band, optional
        Also compare the averages over these bands. The result then has one entry per band, at its centre.

    Returns
    -------
    Dataset of kind "comparison"
        Dimensions (realisation,) wavelength, x, y; a realisation dimension of the inputs is carried.

        - `intensity_ray`, `intensity_wave`, with a band `intensity_band` (the wave's average), and `mismatch` =
          wave - rays: maps, smoothed, at the flux of the rays.
        - `misplaced_flux`, `displacement` (a length), `correlation`: see the functions of these names;
          `flux_mismatch`: flux of the wave over that of the rays, minus 1, before smoothing.
        - `numerical_error`: errors of rays and wave added; misplaced flux is a distance, so the triangle inequality
          makes this a bound. `resolved` is false where the misplaced flux is not above it.
        - with a band: `misplaced_flux_band` and so on, of the average of the wave against the rays.
        - with a sum and a band: maps `removable`, `caustic_part`, `diffraction` that add up to `mismatch`; with a
          sum alone `interference` and `diffraction`. Each also as `share_...` (half its absolute integral) and as
          `misplaced_...` (the portion of the misplaced flux that it accounts for; these add up to it), with the
          sum's `flux_excess`, `trusted` and `entry_error` (wavelength), and its method as attribute `sum_method`.

        Attribute `pair` is "matched", or "mixed" if rays and wave do not share one Hamiltonian: a mixed pair
        measures the paraxial approximation, and `validity_range` refuses it.

    Raises
    ------
    InputError
        Different setups, screens or realisations (what differs is listed); a resolution below a cell; wavelengths
        that are needed and missing (listed, with the call that makes them); nan or negative intensities.

    Warns
    -----
    BranchlabWarning
        The sum rebuilds the entry field with a larger error than it is trusted to: the attribution is off.
    """
    for side, kind in ((rays, "density"), (wave, "wave"), (semiclassical, "semiclassical")):
        if side is not None or kind != "semiclassical":
            check_side(side, kind)
    matched = check_pair(rays, wave, "wave")
    if semiclassical is not None:
        matched &= check_pair(rays, semiclassical, "semiclassical")
    y = np.asarray(rays[Y].values, dtype=np.float64)
    cell, sides, resolution = cell_of(y), rays.attrs["sides"], check_resolution(resolution, y)
    bands = () if band is None else check_bands(band)
    if bands:
        wavelengths = np.array([one.centre for one in bands])
    else:
        wavelengths = np.atleast_1d(np.asarray(wave[WAVELENGTH].values, dtype=np.float64))

    maker = "ParaxialWave(setup)" if wave.attrs["model"] == "paraxial" else "wave"
    waves = _Side(wave, "wave", _call(maker, bands, wavelengths), wavelengths, bands, resolution)
    ray = smooth_rows(rows(rays, "intensity", (X, Y)), cell, resolution, sides)[:, None]
    flux = ray.sum(axis=-1)
    single = _scaled(waves.single, flux)
    mismatch = single - ray

    found = {
        "intensity_ray": ((REALISATION, X, Y), ray[:, 0]),
        "intensity_wave": (MAP, single),
        "mismatch": (MAP, mismatch),
    }
    ray_error = rows(rays, "numerical_error", (X,))[:, None]
    found |= _measures(ray, waves.single, cell, sides, ray_error + waves.curve("numerical_error"), "")
    entry = cell * rows(rays, "intensity", (X, Y)).sum(axis=-1)[:, None]
    ratio = np.divide(waves.flux, entry, out=np.full(waves.flux.shape, np.nan), where=entry > 0)
    found["flux_mismatch"] = (CURVE, ratio - 1.0)
    if bands:
        found["intensity_band"] = (MAP, _scaled(waves.average, flux))
        error = ray_error + waves.curve_average("numerical_error")
        found |= _measures(ray, waves.average, cell, sides, error, "_band")
    if semiclassical is not None:
        call = _call("SemiclassicalSum(rays)", bands, wavelengths)
        sums = _Side(semiclassical, "semiclassical sum", call, wavelengths, bands, resolution)
        average = _scaled(sums.average, flux) if bands else None
        maps = attribution.split(ray, single, _scaled(sums.single, flux), average)
        found |= {STORED.get(name, name): (MAP, part) for name, part in maps.items()}
        found |= {f"share_{name}": (CURVE, v) for name, v in attribution.shares(maps, flux).items()}
        found |= {f"misplaced_{name}": (CURVE, v) for name, v in attribution.portions(maps, mismatch, flux).items()}
        found["flux_excess"] = (CURVE, sums.curve("flux_excess"))
        found["trusted"] = (CURVE, sums.curve("trusted") > 0.5)
        if "entry_error" in semiclassical:
            entry_error = rows(semiclassical, "entry_error", (WAVELENGTH,))
            found["entry_error"] = ((REALISATION, WAVELENGTH), entry_error[:, sums.at])
            _warn_of_entry(semiclassical, entry_error[:, np.concatenate(sums.nodes) if bands else sums.at])

    attrs = {"wave_model": wave.attrs["model"]}
    if semiclassical is not None:
        attrs["sum_method"] = semiclassical.attrs["method"]
    return _assembled(found, rays, wavelengths, resolution, bands, matched, attrs)


def _warn_of_entry(semiclassical, entry_error) -> None:
    """Say that a sum does not start as the wave does, if it is told to what error it is trusted."""
    limit = semiclassical.attrs.get("entry_limit", np.inf)
    worst = float(np.max(entry_error, initial=0.0, where=np.isfinite(entry_error)))
    if worst > limit:
        method = semiclassical.attrs["method"]
        warnings.warn(
            f"the semiclassical sum ({method}) rebuilds the entry field with an error of {worst:.2g}; it is trusted to "
            f"{limit:g}, so what is called interference and diffraction here is partly an error of the sum. This is a source "
            'of a few packets (a narrow beam, a point): use SemiclassicalSum(rays, "herman-kluk").',
            BranchlabWarning,
            stacklevel=3,
        )


def _measures(ray, wave, cell, sides, error, ending) -> dict:
    """Return the measures of smoothed rays and wave, their numerical error, and whether they stand above it."""
    a, b = unit_rows(ray), unit_rows(wave)
    misplaced = misplaced_rows(a, b)
    return {
        "misplaced_flux" + ending: (CURVE, misplaced),
        "displacement" + ending: (CURVE, displacement_rows(a, b, cell, sides)),
        "correlation" + ending: (CURVE, correlation_rows(a, b)),
        "numerical_error" + ending: (CURVE, error),
        "resolved" + ending: (CURVE, misplaced > error),
    }


def _assembled(found, rays, wavelengths, resolution, bands, matched, more) -> xr.Dataset:
    """Build the Dataset, with the realisation dimension only if the inputs have one."""
    several = REALISATION in rays["intensity"].dims
    if not several:
        found = {name: (dims[1:], values[0]) for name, (dims, values) in found.items()}
    coords = {WAVELENGTH: ((WAVELENGTH,), wavelengths)}
    coords |= {axis: ((axis,), rays[axis].values) for axis in (X, Y)}
    if several and REALISATION in rays.coords:
        coords[REALISATION] = ((REALISATION,), rays[REALISATION].values)
    attrs = {name: rays.attrs[name] for name in ("model", "sides", "length_unit", "setup", "versions")}
    attrs |= {"resolution": resolution, "pair": "matched" if matched else "mixed", **more}
    if bands:
        attrs["bands"] = json.dumps([one.to_dict() for one in bands])
    return dataset("comparison", found, coords, attrs)
