"""Averages over a band of wavelengths: which entries of a result they need, and the incoherent mean."""

import numpy as np
import xarray as xr

from branchlab.conventions import WAVELENGTH
from branchlab.errors import InputError
from branchlab.values import ValueObject

SAME = 1e-9  # relative difference below which two wavelengths are one


def check_bands(band) -> tuple:
    """Return the bands as a tuple: of one `Band`, or of a sequence of them with different centres.

    Raises
    ------
    InputError
        Something else than a `Band`, none at all, or two bands with one centre.
    """
    bands = tuple(band) if isinstance(band, (list, tuple)) else (band,)
    for one in bands:
        if not (isinstance(one, ValueObject) and type(one).__name__ == "Band"):
            raise InputError(
                f"band must be a Band or a list of Bands; got {type(one).__name__} {one!r:.60}. "
                "Use band=Band(centre, width)."
            )
    if not bands:
        raise InputError("band is an empty list; give at least one Band, or band=None for no average.")
    centres = sorted(one.centre for one in bands)
    for a, b in zip(centres, centres[1:], strict=False):
        if b - a <= SAME * b:
            raise InputError(
                f"two bands have the centre {a:g}, which names them in the result. Compare one band after the other."
            )
    return bands


def places(result: xr.Dataset, wavelengths, what: str, call: str) -> np.ndarray:
    """Return where in a result the wavelengths are.

    Parameters
    ----------
    result : Dataset
        With the coordinate wavelength.
    wavelengths : array_like, shape (n,)
    what, call : str
        What the result is called in the message, and the call that makes the wavelengths.

    Returns
    -------
    ndarray of int, shape (n,)

    Raises
    ------
    InputError
        Some are not there; all of these are listed.
    """
    known = np.atleast_1d(np.asarray(result[WAVELENGTH].values, dtype=np.float64))
    wanted = np.asarray(wavelengths, dtype=np.float64)
    distance = np.abs(wanted[:, None] - known[None, :])
    found = distance.argmin(axis=1)
    missing = wanted[distance.min(axis=1) > SAME * wanted]
    if missing.size:
        raise InputError(
            f"the {what} lacks {missing.size} of the {wanted.size} wavelengths that are needed: "
            f"{', '.join(f'{one:.6g}' for one in missing)}; it has {', '.join(f'{one:.6g}' for one in known[:8])}"
            f"{', ...' if known.size > 8 else ''}. Make them with {call}."
        )
    return found


def weighted(values: np.ndarray, band, axis: int) -> np.ndarray:
    """Return the average over a band of values that are given at its nodes along `axis`."""
    return np.tensordot(values, band.weights(), axes=(axis, 0))
