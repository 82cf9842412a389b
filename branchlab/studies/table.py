"""The numbers behind a verdict, as a table of plain text."""

import numpy as np
import xarray as xr

from branchlab.conventions import WAVELENGTH, X
from branchlab.results import check

PARTS = ("removable", "caustic", "interference", "diffraction")


def _number(value: float) -> str:
    """Return a number with three significant digits."""
    return np.format_float_positional(float(f"{value:.3g}"), trim="-")


def _with_unit(value: float, unit: str) -> str:
    return _number(value) + ("" if unit == "1" else f" {unit}")


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
        One column each. Parts are portions of the misplaced flux that add up to it; means over realisations.
    """
    check(result, "comparison")
    end, unit = float(result[X].values[-1]), result.attrs["length_unit"]
    places = range(result.sizes[WAVELENGTH])
    in_unit = "" if unit == "1" else f" [{unit}]"

    def at_end(name):
        means = result[name].isel({X: -1}).mean(set(result[name].dims) - {WAVELENGTH, X})
        return [_share(float(value)) for value in means.values]

    columns = {"wavelength" + in_unit: [_number(value) for value in result[WAVELENGTH].values]}
    if "wave_parameter" in result:
        columns["kappa"] = [_number(value) for value in result["wave_parameter"].values]
    columns["range" + in_unit] = [_reach(result, at, "", end) for at in places]
    if "bands" in result.attrs:
        columns["band average" + in_unit] = [_reach(result, at, "_band", end) for at in places]
    columns[f"misplaced at {_with_unit(end, unit)}"] = at_end("misplaced_flux")
    for i, name in enumerate(one for one in PARTS if f"misplaced_{one}" in result):
        columns[f"{'=+'[i > 0]} {name}"] = at_end(f"misplaced_{name}")
    errors = result["numerical_error"].max(set(result["numerical_error"].dims) - {WAVELENGTH})
    columns["num. error"] = [_share(float(value)) for value in errors.values]
    widths = {head: max(len(head), *(len(cell) for cell in cells)) for head, cells in columns.items()}
    lines = ["  ".join(head.rjust(width) for head, width in widths.items())]
    lines += ["  ".join(columns[head][at].rjust(width) for head, width in widths.items()) for at in places]
    if "wave_parameter" in result:
        caustic = _with_unit(float(result["mean_first_caustic"]), unit)
        lines.append(
            f"kappa: wave parameter. Rays meet their first caustic at {caustic} on average (weak-fluctuation limit)."
        )
    return "\n".join(lines)
