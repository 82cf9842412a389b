"""The resolution: both sides of a comparison are smoothed with one Gaussian along y."""

import math

import numpy as np
import xarray as xr

from branchlab.conventions import SIDES, Y
from branchlab.errors import InputError, check_choice, check_positive

REACH = 8.0  # standard deviations of zero padding: what wraps round beyond them is below exp(-32)


def check_resolution(resolution, y: np.ndarray) -> float:
    """Return the resolution as a float if it lies between one cell and a quarter of the width.

    Parameters
    ----------
    resolution : float
        Standard deviation of the Gaussian, in the unit of y.
    y : ndarray, shape (y,)
        Centres of the cells.

    Raises
    ------
    InputError
        The resolution is finer than the cells hold, or so coarse that one spot fills the width.
    """
    resolution = check_positive("resolution", resolution)
    cell, width = cell_of(y), cell_of(y) * y.size
    if resolution < cell * (1.0 - 1e-9):
        raise InputError(
            f"resolution {resolution:g} is below one cell, {width:g}/{y.size} = {cell:g}: intensities are means over "
            f"cells and hold nothing finer. Use resolution >= {cell:.4g}, or at least cells="
            f"{math.ceil(width / resolution - 1e-9)} in the Setup."
        )
    if resolution > 0.25 * width:
        raise InputError(
            f"resolution {resolution:g} is above a quarter of the width, {width:g}/4 = {0.25 * width:g}: one smoothed "
            "spot would fill the window. Use a finer resolution or a wider window."
        )
    return resolution


def cell_of(y: np.ndarray) -> float:
    """Return the width of the cells whose centres are `y`.

    Raises
    ------
    InputError
        Fewer than 2 cells, or not equidistant and rising; the place is named.
    """
    if y.size < 2:
        raise InputError(f"y needs at least 2 cells; got {y.size}.")
    steps = np.diff(y)
    cell = (y[-1] - y[0]) / (y.size - 1)
    if not (cell > 0 and (np.abs(steps - cell) <= 1e-6 * cell).all()):
        at = int(np.argmax(np.abs(steps - cell)))
        raise InputError(
            f"y must rise in equal steps; y[{at}] = {y[at]:g} is followed by y[{at + 1}] = {y[at + 1]:g} where the "
            f"mean step is {cell:g}."
        )
    return float(cell)


def smooth_rows(rows: np.ndarray, cell: float, resolution: float, sides: str) -> np.ndarray:
    """Return cell means smoothed along the last axis with a Gaussian of standard deviation `resolution`.

    The kernel is exp(-(j cell)**2 / (2 resolution**2)) at whole numbers j, normalised: never negative, so a
    smoothed intensity is not negative either. It is applied as a product in Fourier space.

    Parameters
    ----------
    rows : ndarray, shape (..., y)
        Means over the cells.
    cell, resolution : float
        Lengths in one unit.
    sides : {"periodic", "absorbing"}
        Periodic rows go round. Absorbing rows continue as zeros beyond their ends: nothing is reflected, and
        what is smeared out of the window is left out.
    """
    n = rows.shape[-1]
    reach = math.ceil(REACH * resolution / cell)
    size = n if sides == "periodic" else n + reach
    j = np.arange(-reach, reach + 1)
    kernel = np.zeros(size)
    np.add.at(kernel, j % size, np.exp(-0.5 * (j * (cell / resolution)) ** 2))
    spectrum = np.fft.rfft(rows, n=size, axis=-1) * (np.fft.rfft(kernel).real / kernel.sum())
    smooth = np.fft.irfft(spectrum, n=size, axis=-1)[..., :n]
    floor = 1e-14 * np.abs(rows).max(axis=-1, keepdims=True, initial=0.0)
    return np.where(np.abs(smooth) <= floor, 0.0, smooth)  # round-off of the transform where nothing is


def smooth(intensity: xr.DataArray, resolution: float, *, sides: str = "periodic") -> xr.DataArray:
    """Return an intensity smoothed along y with a Gaussian of standard deviation `resolution`.

    Parameters
    ----------
    intensity : DataArray, dims (..., y)
        Means over the cells y.
    resolution : float
        Standard deviation, between one cell and a quarter of the width, in the unit of y.
    sides : {"periodic", "absorbing"}
        How the intensity continues beyond the window: round, or as zeros.

    Returns
    -------
    DataArray
        Same dims, coordinates and attributes, with `resolution` among the attributes.

    Raises
    ------
    InputError
        A resolution outside the limits, or cells that are not equidistant.

    Examples
    --------
    >>> y = (np.arange(64) + 0.5) / 64
    >>> spike = xr.DataArray(np.where(np.arange(64) == 20, 64.0, 0.0), {"y": y}, dims="y")
    >>> spread = smooth(spike, 0.05)
    >>> round(float(np.sqrt(((y - y[20]) ** 2 * spread).mean())), 4)
    0.05
    """
    check_choice("sides", sides, SIDES)
    y = np.asarray(intensity[Y].values, dtype=np.float64)
    resolution = check_resolution(resolution, y)
    moved = intensity.transpose(..., Y)
    rows = smooth_rows(np.asarray(moved.values, dtype=np.float64), cell_of(y), resolution, sides)
    result = moved.copy(data=rows).transpose(*intensity.dims)
    return result.assign_attrs(intensity.attrs, resolution=resolution)
