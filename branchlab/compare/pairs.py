"""What may be compared: two results of one setup, in the same cells, on the same screens."""

import json

import numpy as np
import xarray as xr

from branchlab.compare.measures import check_intensity
from branchlab.compare.smoothing import cell_of
from branchlab.conventions import REALISATION, X, Y
from branchlab.errors import InputError
from branchlab.results import check

SAYS = {"density": "rays", "wave": "wave", "semiclassical": "semiclassical sum"}


def differences(first: str, second: str) -> list[str]:
    """Return in words where two setups, given as JSON texts, differ; at most the first six places.

    Examples
    --------
    >>> differences('{"medium": {"seed": 7}, "width": 16.0}', '{"medium": {"seed": 8}, "width": 16.0}')
    ['medium.seed: 7 against 8']
    """
    found = []

    def short(thing):
        text = json.dumps(thing)
        return text if len(text) <= 40 else text[:37] + "..."

    def walk(a, b, path):
        if isinstance(a, dict) and isinstance(b, dict) and a.keys() == b.keys() and "base64" not in a:
            for key in a:
                walk(a[key], b[key], [*path, key])
        elif isinstance(a, list) and isinstance(b, list) and len(a) == len(b):
            for i, (one, other) in enumerate(zip(a, b, strict=True)):
                walk(one, other, [*path, str(i)])
        elif a != b:
            found.append(f"{'.'.join(path) or 'setup'}: {short(a)} against {short(b)}")

    walk(json.loads(first), json.loads(second), [])
    return found[:6]


def check_side(result: xr.Dataset, kind: str) -> None:
    """Refuse what is not an unsmoothed result of a kind, finite and not negative.

    Parameters
    ----------
    result : Dataset
    kind : {"density", "wave", "semiclassical"}

    Raises
    ------
    InputError
        Another kind, nan or negative intensities (with the place), intensities that were smoothed before.
    """
    check(result, kind)
    check_intensity(result["intensity"], f"intensity of the {SAYS[kind]}")
    done = result["intensity"].attrs.get("resolution")
    if done is not None:
        raise InputError(
            f"the intensity of the {SAYS[kind]} was smoothed to {done:g} already; compare smooths all sides itself, "
            "with one Gaussian. Give it unsmoothed."
        )


def check_pair(rays: xr.Dataset, other: xr.Dataset, kind: str) -> bool:
    """Refuse a result that cannot be compared with the rays; return True if both have the same model.

    Parameters
    ----------
    rays : Dataset
        Of kind "density", checked by `check_side`.
    other : Dataset
        Of kind `kind`, checked likewise.
    kind : {"wave", "semiclassical"}

    Raises
    ------
    InputError
        Another setup (what differs is listed), other screens or cells, other realisations.
    """
    name = SAYS[kind]
    apart = differences(rays.attrs["setup"], other.attrs["setup"])
    if apart:
        raise InputError(
            f"rays and {name} come from different setups; {'; '.join(apart)} (rays against {name}). "
            "Make both from one Setup."
        )
    for axis in (X, Y):
        a, b = np.asarray(rays[axis].values, float), np.asarray(other[axis].values, float)
        step = cell_of(a) if axis == Y else max(np.ptp(a) / max(a.size - 1, 1), 1e-300)
        if a.shape != b.shape or not (np.abs(a - b) <= 1e-6 * step).all():
            raise InputError(
                f"rays and {name} differ in {axis}: {a.size} values from {a[0]:g} to {a[-1]:g} against {b.size} from "
                f"{b[0]:g} to {b[-1]:g}. Cut both alike, for example with .sel."
            )
    several = [REALISATION in one["intensity"].dims for one in (rays, other)]
    if several[0] != several[1]:
        raise InputError(
            f"the {'rays' if several[0] else name} have several realisations, the "
            f"{name if several[0] else 'rays'} one. Join the same realisations on both sides, or select one."
        )
    if several[0]:
        a, b = (one[REALISATION].values if REALISATION in one.coords else None for one in (rays, other))
        if rays.sizes[REALISATION] != other.sizes[REALISATION] or (
            a is not None and b is not None and not np.array_equal(a, b)
        ):
            raise InputError(
                f"rays and {name} have different realisations: {short_list(a, rays)} against {short_list(b, other)}. "
                "Join the same ones, in the same order, on both sides."
            )
    return rays.attrs["model"] == other.attrs["model"]


def short_list(seeds, result) -> str:
    """Return realisations in a few words."""
    if seeds is None:
        return f"{result.sizes[REALISATION]} without numbers"
    return ", ".join(str(seed) for seed in seeds[:6]) + (", ..." if len(seeds) > 6 else "")


def rows(result: xr.Dataset, name: str, dims: tuple[str, ...]) -> np.ndarray:
    """Return a variable as float64 with dimensions (realisation, *dims); realisation has length 1 if absent."""
    variable = result[name]
    if REALISATION in variable.dims:
        return np.asarray(variable.transpose(REALISATION, *dims).values, dtype=np.float64)
    return np.asarray(variable.transpose(*dims).values, dtype=np.float64)[None]
