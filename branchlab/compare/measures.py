"""The measures, one by one: how much flux is misplaced, how far, how alike two screens are.

Each takes two intensities over cells y (and any other dimensions, which are broadcast) and gives one number a
screen. Both sides are normalised on the screen first, so a common factor changes nothing.
"""

import numpy as np
import xarray as xr

from branchlab.compare.smoothing import cell_of, smooth
from branchlab.conventions import SIDES, Y
from branchlab.errors import InputError, check_choice
from branchlab.results import labelled

FLAT = 1e-9  # rms over mean below which a screen counts as flat: round-off of a plane wave before the medium


def unit_rows(rows: np.ndarray) -> np.ndarray:
    """Return intensities divided by their sum along the last axis: shares of the flux; nan where that is 0."""
    total = rows.sum(axis=-1, keepdims=True)
    return np.divide(rows, total, out=np.full(rows.shape, np.nan), where=total > 0)


def misplaced_rows(first: np.ndarray, second: np.ndarray) -> np.ndarray:
    """Return half the sum of abs(first - second) along the last axis, for shares of the flux."""
    return 0.5 * np.abs(first - second).sum(axis=-1)


def displacement_rows(first: np.ndarray, second: np.ndarray, cell: float, sides: str) -> np.ndarray:
    """Return the Wasserstein-1 distance of shares of the flux that sit at the centres of the cells."""
    surplus = np.cumsum(first - second, axis=-1)
    if sides == "periodic":
        surplus = surplus - np.median(surplus, axis=-1, keepdims=True)
    return cell * np.abs(surplus).sum(axis=-1)


def correlation_rows(first: np.ndarray, second: np.ndarray) -> np.ndarray:
    """Return Pearson's correlation along the last axis; nan where a side is flat."""
    first, second = np.broadcast_arrays(first, second)
    size = first.shape[-1]
    a = first - first.mean(axis=-1, keepdims=True)
    b = second - second.mean(axis=-1, keepdims=True)
    spread_a, spread_b = np.sqrt((a * a).mean(axis=-1)), np.sqrt((b * b).mean(axis=-1))
    varied = (spread_a > FLAT * np.abs(first.mean(axis=-1))) & (spread_b > FLAT * np.abs(second.mean(axis=-1)))
    product = (a * b).sum(axis=-1) / size
    return np.divide(product, spread_a * spread_b, out=np.full(product.shape, np.nan), where=varied)


def check_intensity(intensity, name: str) -> None:
    """Refuse what is not an intensity over y: wrong type, nan, or below zero; the place is named.

    Parameters
    ----------
    intensity : DataArray
    name : str
        What the message calls it.
    """
    if not isinstance(intensity, xr.DataArray):
        raise InputError(
            f"the {name} must be an xarray.DataArray over y; got {type(intensity).__name__}. Use result['intensity']."
        )
    if Y not in intensity.dims or Y not in intensity.coords:
        raise InputError(
            f"the {name} has dimensions {intensity.dims}; it needs the dimension and coordinate {Y!r}: the cells."
        )
    if np.iscomplexobj(intensity):
        raise InputError(f"the {name} is complex; give the intensity abs(psi)**2, averaged over cells.")
    values = np.asarray(intensity.values)
    for bad, word in (
        (~np.isfinite(values), "finite"),
        (values < -1e-9 * np.abs(values).max(initial=0.0, where=np.isfinite(values)), "zero or positive"),
    ):
        if bad.any():
            index = np.unravel_index(int(np.argmax(bad)), values.shape)
            place = ", ".join(
                f"{dim} = {intensity[dim].values[i]:g}" if dim in intensity.coords else f"{dim}[{i}]"
                for dim, i in zip(intensity.dims, index, strict=True)
            )
            raise InputError(
                f"the {name} must be {word} everywhere; it is {values[index]:g} at {place} "
                f"({int(bad.sum())} such values of {values.size}). Cut or mend that place before comparing."
            )


def _measured(first, second, measure, name, resolution, sides) -> xr.DataArray:
    """Check, smooth, normalise and measure two intensities along y."""
    check_choice("sides", sides, SIDES)
    check_intensity(first, "first intensity")
    check_intensity(second, "second intensity")
    if first[Y].size != second[Y].size or not np.allclose(
        first[Y], second[Y], rtol=0, atol=1e-6 * cell_of(first[Y].values)
    ):
        raise InputError(
            f"the two intensities have different cells: {first[Y].size} from y = {float(first[Y][0]):g}, and "
            f"{second[Y].size} from y = {float(second[Y][0]):g}. Make both from one Setup."
        )
    second = second.assign_coords({Y: first[Y]})
    if resolution is not None:
        first, second = (smooth(side, resolution, sides=sides) for side in (first, second))
    result = xr.apply_ufunc(lambda a, b: measure(unit_rows(a), unit_rows(b)), first, second, input_core_dims=[[Y], [Y]])
    label = labelled(name, 0.0, (), length_unit=first[Y].attrs.get("units", "1")).attrs
    result.attrs = {**label, **({} if resolution is None else {"resolution": float(resolution)})}
    return result.rename(name)


def misplaced_flux(first, second, *, resolution: float | None = None, sides: str = "periodic") -> xr.DataArray:
    """Return the fraction of the flux that is in the wrong place, 0 ... 1, on every screen.

    m = (1/2) sum abs(I1 - I2) dy with both sides smoothed and then normalised to sum I dy = 1 (the total
    variation distance of the two screens).

    Parameters
    ----------
    first, second : DataArray, dims (..., y)
        Intensities, means over the same cells; other dimensions are broadcast.
    resolution : float, optional
        Both sides are smoothed with a Gaussian of this standard deviation. Default: not smoothed.
    sides : {"periodic", "absorbing"}
        How the intensities continue beyond the window.

    Returns
    -------
    DataArray
        Over the remaining dimensions; nan where a screen carries no flux.

    Raises
    ------
    InputError
        Different cells, nan or negative intensities, a resolution below a cell.

    Examples
    --------
    >>> y = (np.arange(8) + 0.5) / 8
    >>> even = xr.DataArray(np.ones(8), {"y": y}, dims="y")
    >>> half = xr.DataArray(np.repeat([2.0, 0.0], 4), {"y": y}, dims="y")
    >>> float(misplaced_flux(even, half))
    0.5
    """
    return _measured(first, second, misplaced_rows, "misplaced_flux", resolution, sides)


def displacement(first, second, *, resolution: float | None = None, sides: str = "periodic") -> xr.DataArray:
    """Return how far the misplaced flux was moved, averaged over the flux: a length, on every screen.

    The Wasserstein-1 distance w = dy sum_j abs(D_j - c), D_j the cumulated difference of the two normalised
    sides up to cell j. On a line (absorbing sides) c = 0; with periodic sides flux may go either way round and
    c is the median of D, which minimises w (Delon, Salomon & Sobolevskii, SIAM J. Appl. Math. 70 (2010) 2239).
    Flux counts as sitting at the centres of the cells.

    Parameters
    ----------
    first, second : DataArray, dims (..., y)
        Intensities, means over the same cells; other dimensions are broadcast.
    resolution : float, optional
        Both sides are smoothed with a Gaussian of this standard deviation. Default: not smoothed.
    sides : {"periodic", "absorbing"}
        How the intensities continue beyond the window.

    Returns
    -------
    DataArray
        In the unit of y, over the remaining dimensions; nan where a screen carries no flux.

    Raises
    ------
    InputError
        As `misplaced_flux`.
    """

    def measure(a, b):
        return displacement_rows(a, b, cell_of(np.asarray(first[Y].values, dtype=np.float64)), sides)

    return _measured(first, second, measure, "displacement", resolution, sides)


def correlation(first, second, *, resolution: float | None = None, sides: str = "periodic") -> xr.DataArray:
    """Return Pearson's correlation of two screens over y, -1 ... 1.

    Parameters
    ----------
    first, second : DataArray, dims (..., y)
        Intensities, means over the same cells; other dimensions are broadcast.
    resolution : float, optional
        Both sides are smoothed with a Gaussian of this standard deviation. Default: not smoothed.
    sides : {"periodic", "absorbing"}
        How the intensities continue beyond the window.

    Returns
    -------
    DataArray
        Over the remaining dimensions; nan where a side is flat (rms below 1e-9 of its mean).

    Raises
    ------
    InputError
        As `misplaced_flux`.
    """
    return _measured(first, second, correlation_rows, "correlation", resolution, sides)
