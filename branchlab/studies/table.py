"""The numbers behind a verdict, as a table of plain text."""

import json

import numpy as np
import xarray as xr

from branchlab.conventions import WAVELENGTH, X
from branchlab.results import check

PARTS = ("removable", "caustic", "interference", "diffraction")


def _number(value: float) -> str:
    """Return a number with three significant digits."""
    return np.format_float_positional(float(f"{value:.3g}"), trim="-")


def _share(value: float) -> str:
    return f"{100 * value:.2g} %" if abs(value) < 0.0995 else f"{100 * value:.0f} %"


def _reach(result: xr.Dataset, at: int, ending: str, end: float) -> str:
    """Return a validity range with its interval."""
    if not result["decided" + ending].values[at]:
        return "not resolved"
    reach, low, high = (float(result[f"reach{ending}{tail}"].values[at]) for tail in ("", "_low", "_high"))
    text = _number(reach) if result["crossed" + ending].values[at] else f"> {_number(end)}"
    if not np.isfinite(low):  # one realisation, or open-ended with all of the confidence
        return text
    upper = _number(high) if np.isfinite(high) else "open"
    return f"{text} ({_number(min(low, end))} to {upper})"


def table(result: xr.Dataset) -> str:
    """Return per wavelength: validity ranges, the misplaced flux at the far end and its parts, numerical error.

    Parameters
    ----------
    result : Dataset
        As `Study.run` returns it.

    Returns
    -------
    str
        Lines of equal layout. Parts are portions of the misplaced flux that add up to it; means over realisations.
    """
    check(result, "comparison")
    end, unit = float(result[X].values[-1]), result.attrs["length_unit"]
    bands = json.loads(result.attrs.get("bands", "[]"))
    parts = [name for name in PARTS if f"misplaced_{name}" in result]
    in_unit = "" if unit == "1" else f" [{unit}]"
    head = ["wavelength" + in_unit, "range" + in_unit, *(["band average" + in_unit] if bands else [])]
    head += [f"misplaced at {_number(end)}", *(f"{'=+'[i > 0]} {name}" for i, name in enumerate(parts)), "num. error"]
    lines = [head]
    for at, wavelength in enumerate(result[WAVELENGTH].values):
        one = result.isel({WAVELENGTH: at})

        def last(name, one=one):
            return _share(float(one[name].isel({X: -1}).mean()))

        line = [
            _number(wavelength),
            *(_reach(result, at, ending, end) for ending in (["", "_band"] if bands else [""])),
        ]
        line += [last("misplaced_flux"), *(last(f"misplaced_{name}") for name in parts)]
        lines.append([*line, _share(float(one["numerical_error"].max()))])
    widths = [max(len(line[i]) for line in lines) for i in range(len(head))]
    return "\n".join("  ".join(cell.rjust(width) for cell, width in zip(line, widths, strict=True)) for line in lines)
