"""The verdict: a comparison and its validity range in words."""

import json

import numpy as np
import xarray as xr

from branchlab.compare.pairs import rows
from branchlab.conventions import WAVELENGTH, X
from branchlab.errors import InputError
from branchlab.results import check

SAYS = {
    "removable": "is interference that the band removes",
    "caustic": "sits at caustics and stays",
    "interference": "is interference between ray families",
    "diffraction": "is diffraction, which no sum over rays contains",
}
LESSENS = {
    "removable": "interference that the band removes",
    "caustic": "what stays at caustics",
    "interference": "interference between ray families",
    "diffraction": "diffraction, which no sum over rays contains,",
}

SUMS = {
    "frozen-gaussian": "frozen Gaussians on the launching front",
    "herman-kluk": "Herman-Kluk, over phase space: it already holds part of the diffraction",
    "uniform": "branch by branch, with Airy functions at folds",
    "primitive": "branch by branch, infinite at caustics",
}


def _length(value: float, unit: str) -> str:
    """Return a length with three significant digits and its unit."""
    text = np.format_float_positional(float(f"{value:.3g}"), trim="-")
    return text if unit == "1" else f"{text} {unit}"


def _percent(value: float) -> str:
    """Return a share in percent: whole numbers from 10 %, two significant digits below."""
    return f"{100 * value:.0f} %" if abs(value) >= 0.0995 or value == 0 else f"{100 * value:.2g} %"


def _joined(parts: list[str]) -> str:
    """Return parts as an enumeration."""
    return parts[0] if len(parts) == 1 else f"{', '.join(parts[:-1])} and {parts[-1]}"


def _range(result: xr.Dataset, validity: xr.Dataset, at: int, ending: str) -> str:
    """Return one validity range in words."""
    unit, end = validity.attrs["length_unit"], float(result[X].values[-1])
    reach, low, high = (float(validity[f"reach{ending}{tail}"].values[at]) for tail in ("", "_low", "_high"))
    if not validity["decided" + ending].values[at]:
        error = float(np.nanmax(rows(result, "numerical_error" + ending, (WAVELENGTH, X)).mean(axis=0)[at]))
        return (
            f"not resolved, for the numerical error reaches {_percent(error)} of the flux; refine the rays and the wave"
        )
    if not validity["crossed" + ending].values[at]:
        text = f"to the end of the window, x = {_length(reach, unit)}, and perhaps beyond"
    elif reach > 0:
        text = f"out to x = {_length(reach, unit)}"
    else:
        text = "nowhere, not even at the entry"
    if np.isnan(low):
        return text
    lower = _length(min(low, end), unit)
    if not np.isfinite(low):
        return f"{text} (with the stated confidence: to the end of the window at least)"
    return f"{text} ({lower} to {_length(high, unit)})" if np.isfinite(high) else f"{text} ({lower} or more)"


def _split(result: xr.Dataset, at: int, beyond: np.ndarray) -> str:
    """Return in words how the misplaced flux on some screens splits into its parts, "" without a sum."""

    def over(name):
        return float(rows(result, name, (WAVELENGTH, X))[:, at, beyond].mean())

    names = [name for name in SAYS if f"misplaced_{name}" in result]
    whole = over("misplaced_flux")
    if not names or not whole > 0:
        return ""
    part = {name: over(f"misplaced_{name}") / whole for name in names}
    parts = [f"{_percent(part[name])} {SAYS[name]}" for name in names if part[name] >= 0]
    parts += [f"{LESSENS[name]} lessens it by {_percent(-part[name])}" for name in names if part[name] < 0]
    excess, trusted = over("flux_excess"), over("trusted")
    alarm = f"; the sum carries {_percent(abs(excess))} {'more' if excess >= 0 else 'less'} flux than its rays there"
    if trusted < 0.5:
        alarm += f" and is trusted on {_percent(trusted)} of the screens only: take the split as a rough guide"
    return f"{_joined(parts)}{alarm}."


def verdict(result: xr.Dataset, validity: xr.Dataset) -> str:
    """Return the answer in words: how far rays may stand in for the wave, and what goes wrong beyond.

    Parameters
    ----------
    result : Dataset
        Of kind "comparison", the one that the validity range was found from.
    validity : Dataset
        Of kind "validity".

    Returns
    -------
    str
        Several lines: the claim with its resolution; for each wavelength the range with its confidence interval, the
        range of the band average, and how the misplaced flux beyond splits into its parts (the portions
        `misplaced_...`, which add up to it); the numerical error; what the averages and intervals mean.

    Raises
    ------
    InputError
        The two do not belong together.
    """
    check(result, "comparison")
    check(validity, "validity")
    if (
        result.attrs["setup"] != validity.attrs["setup"]
        or result.attrs["resolution"] != validity.attrs["resolution"]
        or not np.array_equal(result[WAVELENGTH].values, validity[WAVELENGTH].values)
    ):
        raise InputError(
            "this validity range was not found from this comparison: setup, resolution or wavelengths differ. "
            "Use validity = validity_range(result)."
        )
    unit, count = validity.attrs["length_unit"], int(validity.attrs["realisations"])
    bands = json.loads(result.attrs.get("bands", "[]"))
    x = np.asarray(result[X].values, dtype=np.float64)
    lines = [
        f"At resolution {_length(result.attrs['resolution'], unit)}, rays place all but "
        f"{_percent(validity.attrs['threshold'])} of the flux rightly"
    ]
    for at, wavelength in enumerate(validity[WAVELENGTH].values):
        line = f"- at wavelength {_length(wavelength, unit)} {_range(result, validity, at, '')}"
        if bands:
            line += (
                f"; averaged over a {bands[at]['shape']} band of {_percent(bands[at]['width'])} "
                f"{_range(result, validity, at, '_band')}"
            )
        lines.append(line + ".")
        reach = float(validity["reach"].values[at])
        beyond = x > reach if validity["crossed"].values[at] and (x > reach).any() else np.ones(x.size, bool)
        split = _split(result, at, beyond)
        if split:
            where = "Of the flux misplaced beyond it" if not beyond.all() else "Of the flux misplaced in the window"
            lines.append(f"  {where}, {split}")
    if method := result.attrs.get("sum_method"):
        lines.append(f"The sum over rays: {SUMS.get(method, method)}.")
    endings = ("", "_band") if bands else ("",)
    error = max(float(np.nanmax(result["numerical_error" + ending].values)) for ending in endings)
    entered = x > x[0]
    unresolved = 1.0 - float(rows(result, "resolved", (WAVELENGTH, X))[:, :, entered].mean())
    lines.append(f"Numerical error: at most {_percent(error)} of the flux.")
    if unresolved > 0:
        lines[-1] += (
            f" On {_percent(unresolved)} of the screens the mismatch is below it, which is not resolved, not agreement."
        )
    if count > 1:
        sure = _percent(validity.attrs["confidence"])
        lines.append(f"Ranges: mean of {count} realisations, in brackets with {sure} confidence.")
    else:
        lines.append("Ranges: one realisation of the medium, so there is no confidence interval.")
    if bands:
        lines.append("Bands are averaged at fixed rays: the wavelength changes, the medium does not.")
    return "\n".join(lines)
