"""Dark and stray branches: where rays fill what the wave leaves dark, and where the wave goes without rays."""

import numpy as np
import xarray as xr
from scipy import ndimage

from branchlab.compare.pairs import rows
from branchlab.compare.smoothing import cell_of
from branchlab.conventions import BRANCH, REALISATION, WAVELENGTH, X, Y
from branchlab.errors import InputError, check_number
from branchlab.results import check, dataset

TOUCH = np.ones((3, 3))  # cells that touch at a corner are connected: a slanted branch steps from screen to screen


def connected(mask: np.ndarray, *, periodic: bool) -> np.ndarray:
    """Return the connected regions of a map (x, y) as numbers 1, 2, ..., with y going round if periodic.

    Examples
    --------
    >>> connected(np.array([[True, False, False, True]]), periodic=True).tolist()
    [[1, 0, 0, 1]]
    """
    if not periodic:
        return ndimage.label(mask, TOUCH)[0]
    # one more column beyond either end joins what touches across the seam
    wrapped = np.concatenate([mask[:, -1:], mask, mask[:, :1]], axis=1)
    labels, count = ndimage.label(wrapped, TOUCH)
    twin = np.arange(count + 1)

    def root(i):
        while twin[i] != i:
            i = twin[i]
        return i

    for copy, cell in ((0, -2), (-1, 1)):  # a column beyond the end, and the cell that it repeats
        for one, other in zip(labels[:, copy], labels[:, cell], strict=True):
            a, b = sorted((root(one), root(other)))
            twin[b] = a
    roots = np.array([root(i) for i in range(count + 1)])
    numbers = np.unique(roots, return_inverse=True)[1]  # 0 stays 0: it is the smallest
    return numbers[labels[:, 1:-1]]


def _centre(content: np.ndarray, region: np.ndarray, count: int, y: np.ndarray, periodic: bool) -> np.ndarray:
    """Return the centre of flux in y of every region, shape (count,)."""
    if not periodic:
        return np.bincount(region, content * y, count + 1)[1:] / np.bincount(region, content, count + 1)[1:]
    width = cell_of(np.unique(y)) * np.unique(y).size
    start = y.min() - 0.5 * cell_of(np.unique(y))
    angle = 2.0 * np.pi * (y - start) / width
    mean = [np.bincount(region, content * f(angle), count + 1)[1:] for f in (np.sin, np.cos)]
    return start + width * (np.arctan2(*mean) / (2.0 * np.pi) % 1.0)


def _described(region, filled, other, x, y, periodic) -> dict[str, np.ndarray]:
    """Return place, size and contrast of every region of one map; `filled` is the side that fills it.

    Parameters
    ----------
    region : ndarray of int, shape (x, y)
    filled, other : ndarray, shape (x, y)
    x, y : ndarray, shapes (x,), (y,)
    periodic : bool

    Returns
    -------
    dict of ndarray, shape (regions,)
    """
    count = int(region.max(initial=0))
    flat = region.ravel()

    def per_screen(values):
        at = flat * x.size + np.repeat(np.arange(x.size), y.size)
        return np.bincount(at, values.ravel(), (count + 1) * x.size).reshape(count + 1, x.size)[1:]

    cells = per_screen(np.ones(region.shape)) > 0
    first, last = cells.argmax(axis=1), x.size - 1 - cells[:, ::-1].argmax(axis=1)
    edges = np.concatenate([x[:1], 0.5 * (x[1:] + x[:-1]), x[-1:]])
    inside, outside = per_screen(filled), per_screen(other)
    screens = cells.sum(axis=1)
    flux = filled.sum(axis=1)
    total, rest = inside.sum(axis=1), outside.sum(axis=1)
    return {
        "onset": x[first],
        "branch_length": edges[last + 1] - edges[first],
        "centre_x": (inside * x).sum(axis=1) / total,
        "centre_y": _centre(filled.ravel(), flat, count, np.tile(y, x.size), periodic),
        "branch_flux": (inside / flux).sum(axis=1) / screens,
        "branch_excess": ((inside - outside) / flux).sum(axis=1) / screens,
        "contrast": np.divide(total, rest, out=np.full(count, np.inf), where=rest > 0),
    }


def branches(result: xr.Dataset, factor: float = 2.0, *, brightness: float = 1.0) -> xr.Dataset:
    """List the dark and the stray branches of a comparison.

    A dark branch is a connected region in which the rays are at least `factor` times as bright as the wave: rays
    fill it, the wave leaves it dark. A stray branch is the reverse. Both sides are smoothed to the resolution
    of the comparison.

    Parameters
    ----------
    result : Dataset
        Of kind "comparison".
    factor : float
        Above 1.
    brightness : float
        The brighter side must be at least this many times the mean of its screen: nothing is called a branch
        where both sides are dark. With a source that lights a small part of the width the mean is low; raise it.

    Returns
    -------
    Dataset of kind "branches", dimension branch, the largest branch (excess times length) first
        - `sort`: "dark" or "stray"; `branch_wavelength`, with several realisations `branch_realisation`;
        - `onset`: its first screen; `branch_length`; `centre_x`, `centre_y`: its centre of flux;
        - `branch_flux`: share of its screens' flux that fills it; `branch_excess`: by how much that is more than
          the other side has there (both means over its screens);
        - `contrast`: flux in it over the other side's;
        - `relit` (comparison with a band): with the average over the band in place of the single wavelength the
          contrast is below the factor;
        - `region(wavelength, x, y)`: the number of the branch at each cell, 0 for none; numbers start at 1.

    Raises
    ------
    InputError
        A factor of 1 or less; a result that is not a comparison.
    """
    check(result, "comparison")
    factor = check_number("factor", factor, low=1.0, open_low=True, open_high=True)
    brightness = check_number("brightness", brightness, low=0.0)
    x, y = (np.asarray(result[axis].values, dtype=np.float64) for axis in (X, Y))
    if x.size < 2:
        raise InputError("a branch needs at least 2 screens; this comparison has 1.")
    ray = rows(result, "intensity_ray", (X, Y))
    wave = rows(result, "intensity_wave", (WAVELENGTH, X, Y))
    average = rows(result, "intensity_band", (WAVELENGTH, X, Y)) if "intensity_band" in result else None
    periodic = result.attrs["sides"] == "periodic"
    wavelengths = result[WAVELENGTH].values
    several = REALISATION in result["intensity_wave"].dims
    seeds = result[REALISATION].values if REALISATION in result.coords else np.arange(ray.shape[0])

    region = np.zeros(wave.shape, dtype=np.int32)
    lists: dict[str, list] = {}
    found = 0
    for r in range(wave.shape[0]):
        for w in range(wave.shape[1]):
            for sort, filled, other in (("dark", ray[r], wave[r, w]), ("stray", wave[r, w], ray[r])):
                lit = filled >= brightness * filled.mean(axis=1, keepdims=True)
                numbers = connected(lit & (filled > 0) & (filled >= factor * other), periodic=periodic)
                table = _described(numbers, filled, other, x, y, periodic)
                count = table["onset"].size
                table["sort"] = np.full(count, sort)
                table["branch_wavelength"] = np.full(count, wavelengths[w])
                if several:
                    table["branch_realisation"] = np.full(count, seeds[r])
                if average is not None:
                    sides = (filled, average[r, w]) if sort == "dark" else (average[r, w], other)
                    table["relit"] = _described(numbers, *sides, x, y, periodic)["contrast"] < factor
                for name, values in table.items():
                    lists.setdefault(name, []).append(values)
                region[r, w] += np.where(numbers > 0, numbers + found, 0).astype(np.int32)
                found += count

    columns = {name: np.concatenate(parts) for name, parts in lists.items()}
    order = np.argsort(-columns["branch_excess"] * columns["branch_length"], kind="stable")
    rank = np.zeros(found + 1, dtype=np.int32)
    rank[order + 1] = np.arange(1, found + 1)
    variables = {name: ((BRANCH,), values[order]) for name, values in columns.items()}
    dims = (REALISATION, WAVELENGTH, X, Y)
    variables["region"] = (dims, rank[region]) if several else (dims[1:], rank[region][0])
    coords = {name: (result[name].dims, result[name].values) for name in (WAVELENGTH, X, Y)}
    if several and REALISATION in result.coords:
        coords[REALISATION] = ((REALISATION,), seeds)
    coords[BRANCH] = ((BRANCH,), np.arange(1, found + 1))
    kept = ("model", "sides", "length_unit", "setup", "versions", "resolution", "pair", "wave_model", "bands")
    attrs = {name: result.attrs[name] for name in kept if name in result.attrs}
    return dataset("branches", variables, coords, attrs | {"factor": factor, "brightness": brightness})
