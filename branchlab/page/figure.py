"""One figure of a study: maps of rays, wave and mismatch, misplaced flux over range, and its parts."""

import json
import pathlib
import textwrap

import numpy as np
import xarray as xr
from scipy import stats

from branchlab.conventions import REALISATION, WAVELENGTH, X, Y, with_caution
from branchlab.errors import InputError
from branchlab.page.palette import INK, INTENSITY, MISMATCH, PAPER, PARTS, QUIET, RULE, WAVES
from branchlab.results import check

SIZE, DPI = (13.333, 7.5), 150  # inches: a slide of 16:9, 2000 x 1125 pixels
LABELS = {
    "removable": "removable interference",
    "caustic": "caustics",
    "interference": "interference",
    "diffraction": "diffraction",
}
KEY = "branchlab-study"  # of the text in the PNG file


def draw_study(result: xr.Dataset, path) -> pathlib.Path:
    """Draw the result of a study and write it as PNG.

    Parameters
    ----------
    result : Dataset
        As `Study.run` returns it.
    path : path
        Replaced if it exists.

    Returns
    -------
    path

    Raises
    ------
    InputError
        Not the result of a study; a file that cannot be written.

    Notes
    -----
    The maps show one realisation at one wavelength: that whose validity range is nearest to half of the window. Curves
    are means over the realisations with the confidence interval of the mean (Student's t).
    """
    check(result, "comparison")
    if "verdict" not in result.attrs:
        raise InputError("this comparison is not the result of a study: it has no verdict. Use Study(...).run().")
    figure = _figure(result)
    path = pathlib.Path(path)
    try:
        figure.savefig(path, dpi=DPI, format="png", metadata={KEY: result.attrs["fingerprint"]})
    except OSError as fault:
        raise InputError(f"{path} cannot be written: {fault.strerror}.") from None
    return path


def fingerprint_in(path) -> str | None:
    """Return the fingerprint of the study that a figure of ours shows, None for any other PNG file.

    Raises
    ------
    InputError
        The file cannot be read.
    """
    try:
        data = pathlib.Path(path).read_bytes()
    except OSError as fault:
        raise InputError(f"{path} cannot be read: {fault.strerror}.") from None
    at = 8  # after the signature come chunks: length, type, data, checksum
    while at + 12 <= len(data):
        size, kind = int.from_bytes(data[at : at + 4], "big"), data[at + 4 : at + 8]
        body = data[at + 8 : at + 8 + size]
        if kind == b"tEXt" and body.startswith(KEY.encode() + b"\0"):
            return body.split(b"\0", 1)[1].decode("latin-1")
        at += 12 + size
    return None


def _figure(result: xr.Dataset):
    """Return the figure."""
    from matplotlib import rc_context
    from matplotlib.figure import Figure

    style = {
        "font.size": 11,
        "axes.edgecolor": QUIET,
        "axes.linewidth": 0.8,
        "axes.labelcolor": INK,
        "axes.titlesize": 12,
        "axes.titleweight": "bold",
        "axes.titlelocation": "left",
        "xtick.color": QUIET,
        "ytick.color": QUIET,
        "xtick.labelcolor": INK,
        "ytick.labelcolor": INK,
        "text.color": INK,
        "text.parse_math": False,  # a title from outside is text, whatever it holds
    }
    with rc_context(style):
        figure = Figure(figsize=SIZE, facecolor=PAPER)
        upper = figure.add_gridspec(1, 3, left=0.06, right=0.985, top=0.82, bottom=0.565, wspace=0.08)
        parts = [name for name in PARTS if f"misplaced_{name}" in result]
        columns = [1.5, 1.0] if parts else [1.0]
        lower = figure.add_gridspec(
            1, len(columns), left=0.06, right=0.985, top=0.315, bottom=0.11, width_ratios=columns, wspace=0.34
        )
        shown = _shown(result)
        _headline(figure, result)
        _maps(figure, [figure.add_subplot(place) for place in upper], result, shown)
        _curves(figure.add_subplot(lower[0]), result)
        if parts:
            _shares(figure.add_subplot(lower[1]), result, parts)
    return figure


def _length(value: float, unit: str) -> str:
    """Return a length with three digits and its unit."""
    number = np.format_float_positional(float(f"{value:.3g}"), trim="-")
    return number if unit == "1" else f"{number} {unit}"


def _label(what: str, unit: str) -> str:
    return what if unit == "1" else f"{what} [{unit}]"


def _over_realisations(result: xr.Dataset, name: str) -> np.ndarray:
    """Return a variable over (realisation, wavelength, x)."""
    variable = result[name]
    if REALISATION not in variable.dims:
        variable = variable.expand_dims(REALISATION)
    return variable.transpose(REALISATION, WAVELENGTH, X).values


def _shown(result: xr.Dataset) -> int:
    """Return the wavelength of the maps: that whose range is nearest to half of the window."""
    reach = np.where(np.isfinite(result["reach"].values), result["reach"].values, np.inf)
    return int(np.argmin(np.abs(reach - 0.5 * float(result[X].values[-1]))))


def _headline(figure, result: xr.Dataset) -> None:
    """Write what is shown, and the answer."""
    unit, study = result.attrs["length_unit"], json.loads(result.attrs["study"])
    figure.text(0.06, 0.953, study["title"] or "Rays and wave", fontsize=19, weight="bold", va="center")
    order = np.argsort(-result[WAVELENGTH].values)
    ranges = []
    for at in order if len(order) <= 5 else order[[0, len(order) // 2, -1]]:
        if not result["decided"].values[at]:
            continue
        beyond = "" if result["crossed"].values[at] else "beyond "
        wavelength, reach = result[WAVELENGTH].values[at], result["reach"].values[at]
        ranges.append(f"{beyond}{_length(reach, unit)} at wavelength {_length(wavelength, unit)}")
    answer = "; ".join(ranges) or "no wavelength: the numerical error is too large to tell"
    threshold = f"{100 * result.attrs['threshold']:.3g} %"
    resolution = _length(result.attrs["resolution"], unit)
    figure.text(
        0.06,
        0.907,
        f"At resolution {resolution}, rays place all but {threshold} of the flux rightly out to",
        va="center",
    )
    note = "\n".join(textwrap.wrap(with_caution(study["note"]), 190))
    figure.text(0.06, 0.004, note, color=QUIET, fontsize=7.5, va="bottom", linespacing=1.25)
    figure.text(0.06, 0.876, f"{answer}.", va="center", weight="bold")


def _maps(figure, places, result: xr.Dataset, at: int) -> None:
    """Draw rays, wave and their signed mismatch in one realisation."""
    from matplotlib.colors import LinearSegmentedColormap

    one = result.isel({REALISATION: 0}) if REALISATION in result.dims else result
    one = one.isel({WAVELENGTH: at})
    unit, x, y = result.attrs["length_unit"], one[X].values, one[Y].values
    step, cell = x[1] - x[0], y[1] - y[0]
    box = (x[0] - 0.5 * step, x[-1] + 0.5 * step, y[0] - 0.5 * cell, y[-1] + 0.5 * cell)
    both = np.concatenate([one["intensity_ray"].values[1:], one["intensity_wave"].values[1:]])
    top, apart = float(np.quantile(both, 0.998)), float(np.quantile(np.abs(one["mismatch"].values), 0.998)) or 1.0
    even = LinearSegmentedColormap.from_list("intensity", INTENSITY, 512)
    signed = LinearSegmentedColormap.from_list("mismatch", MISMATCH, 512)
    wavelength = _length(one[WAVELENGTH].item(), unit)
    panels = (
        ("intensity_ray", "Rays", even, 0.0, top),
        ("intensity_wave", f"Wave, wavelength {wavelength}", even, 0.0, top),
        ("mismatch", "Mismatch: wave minus rays", signed, -apart, apart),
    )
    reach = float(result["reach"].values[at])
    images = []
    for i, (place, (name, title, colours, low, high)) in enumerate(zip(places, panels, strict=True)):
        image = place.imshow(
            one[name].values.T, cmap=colours, vmin=low, vmax=high, extent=box, origin="lower", aspect="auto",
            interpolation="bilinear",
        )  # fmt: skip
        place.set(xlim=(x[0], x[-1]), ylim=box[2:], title=title, xlabel=_label("range x", unit))
        place.set_ylabel(_label("across y", unit) if i == 0 else "")
        place.tick_params(labelleft=i == 0)
        if result["crossed"].values[at]:
            ink = INK if name == "mismatch" else PAPER
            place.axvline(reach, color=ink, lw=1.4, ls=(0, (4, 3)))
            if i == 2:
                late = reach > x[0] + 0.6 * (x[-1] - x[0])
                place.annotate(
                    f"range {_length(reach, unit)}",
                    (reach + (-0.015 if late else 0.015) * (x[-1] - x[0]), 0.96),
                    xycoords=("data", "axes fraction"),
                    va="top",
                    ha="right" if late else "left",
                    color=ink,
                    bbox={"boxstyle": "square,pad=0.15", "fc": MISMATCH[3], "ec": "none", "alpha": 0.8},
                )
        images.append(image)
    incoming = result.attrs.get("normalisation", "intensity 1") == "intensity 1"
    scale = "intensity (incoming wave: 1)" if incoming else f"intensity [1/{unit}] (total flux: 1)"
    bars = (
        (images[1], places[:2], f"{scale}, rays and wave on one scale", "max"),
        (images[2], places[2:], "rays brighter  <  0  <  wave brighter", "both"),
    )
    for image, over, text, extend in bars:
        left, right = over[0].get_position().x0, over[-1].get_position().x1
        bar = figure.colorbar(
            image, cax=figure.add_axes((left, 0.468, right - left, 0.014)), orientation="horizontal", extend=extend
        )
        bar.ax.set_xlabel(text, color=QUIET, fontsize=10, labelpad=3)
        bar.outline.set_edgecolor(RULE)
        bar.ax.tick_params(labelsize=10)


def _curves(place, result: xr.Dataset) -> None:
    """Draw misplaced flux over range, with its confidence, the threshold, the validity ranges, the numerical error."""
    unit, x = result.attrs["length_unit"], result[X].values
    threshold, confidence = result.attrs["threshold"], result.attrs["confidence"]
    values = 100.0 * _over_realisations(result, "misplaced_flux")
    count = values.shape[0]
    mean = values.mean(axis=0)
    top = max(1.12 * float(mean.max()), 130.0 * threshold)
    error = 100.0 * _over_realisations(result, "numerical_error").mean(axis=0).max(axis=0)
    place.fill_between(x, 0.0, error, color=RULE, lw=0, zorder=1)
    place.axhline(100.0 * threshold, color=INK, lw=1.0, ls=(0, (4, 3)), zorder=2)
    place.annotate(
        f"threshold {100 * threshold:.3g} %",
        (x[0], 100 * threshold),
        (5, 4),
        textcoords="offset points",
        fontsize=9.5,
        zorder=7,
        bbox={"boxstyle": "square,pad=0.1", "fc": PAPER, "ec": "none", "alpha": 0.75},
    )
    ends = []
    bands = "misplaced_flux_band" in result
    averages = 100.0 * _over_realisations(result, "misplaced_flux_band").mean(axis=0) if bands else None
    for rank, at in enumerate(np.argsort(-result[WAVELENGTH].values)):
        colour, dash = WAVES[rank % len(WAVES)], ["-", "--", ":"][rank // len(WAVES) % 3]
        if count > 1:
            half = values[:, at].std(axis=0, ddof=1) / np.sqrt(count) * stats.t.ppf(0.5 + 0.5 * confidence, count - 1)
            place.fill_between(x, mean[at] - half, mean[at] + half, color=colour, alpha=0.22, lw=0, zorder=3)
        place.plot(x, mean[at], color=colour, lw=2.2, ls=dash, zorder=4)
        if bands:
            place.plot(x, averages[at], color=colour, lw=0.9, ls=dash, zorder=4)
        if result["crossed"].values[at]:
            _mark_reach(place, result, at, 100.0 * threshold, colour, x[-1])
        ends.append((mean[at, -1], _length(result[WAVELENGTH].values[at], unit), colour))
    _end_labels(place, x[-1], ends, top)
    place.set(xlim=(x[0], x[-1]), ylim=(0.0, top), xlabel=_label("range x", unit), ylabel="misplaced flux [%]")
    place.set_title("Misplaced flux, by wavelength", pad=22)
    shade = (
        f"mean of {count} realisations; shaded: {100 * confidence:.3g} % confidence" if count > 1 else "one realisation"
    )
    dashes = "; thin: band average" if bands else ""
    place.text(
        0.0, 1.03, f"{shade}{dashes}; rings: validity range; grey: numerical error", transform=place.transAxes,
        fontsize=9.3, color=QUIET,
    )  # fmt: skip
    place.grid(color=RULE, lw=0.5)
    place.set_axisbelow(True)
    for side in ("top", "right"):
        place.spines[side].set_visible(False)


def _mark_reach(place, result, at, height, colour, end) -> None:
    """Mark a validity range on the threshold, with its interval."""
    reach, low, high = (float(result[f"reach{tail}"].values[at]) for tail in ("", "_low", "_high"))
    if np.isfinite(low):
        place.plot([low, min(high, end)], [height] * 2, color=colour, lw=5, solid_capstyle="butt", alpha=0.6, zorder=5)
    place.plot(reach, height, "o", ms=7, mfc=PAPER, mec=colour, mew=2.0, zorder=6)


def _end_labels(place, end, ends, top) -> None:
    """Write wavelengths at the ends of their curves, moved apart where they would touch."""
    gap, last = 0.085 * top, -np.inf
    for height, text, colour in sorted(ends):
        height = max(height, last + gap)
        last = height
        place.annotate(
            text, (end, height), (6, 0), textcoords="offset points", va="center", color=colour, weight="bold",
            annotation_clip=False,
        )  # fmt: skip


def _shares(place, result: xr.Dataset, parts) -> None:
    """Draw what the misplaced flux on the last screen consists of, one bar a wavelength; what lessens it, left of 0."""
    unit, end = result.attrs["length_unit"], float(result[X].values[-1])
    order = np.argsort(result[WAVELENGTH].values)
    positions = np.arange(order.size)
    right, below = np.zeros(order.size), np.zeros(order.size)
    for name in parts:
        size = 100.0 * _over_realisations(result, f"misplaced_{name}")[:, order, -1].mean(axis=0)
        left = np.where(size >= 0.0, right, below)
        place.barh(
            positions, size, left=left, color=PARTS[name], edgecolor=PAPER, lw=1.0, height=0.66, label=LABELS[name]
        )
        for at, (start, width) in enumerate(zip(left, size, strict=True)):
            if abs(width) > 3.0:
                ink = PAPER if name == "diffraction" else INK
                place.text(start + 0.5 * width, at, f"{width:.0f}", ha="center", va="center", color=ink, fontsize=10)
        right, below = right + np.maximum(size, 0.0), below + np.minimum(size, 0.0)
    if below.min() < 0.0:
        place.axvline(0.0, color=INK, lw=1.0)
    place.set_yticks(positions, [_length(one, unit) for one in result[WAVELENGTH].values[order]])
    place.set(xlabel="part of the flux [%]", xlim=(1.05 * below.min(), 1.05 * right.max()))
    place.set_title(f"Misplaced at x = {_length(end, unit)}, in parts", pad=22)
    place.legend(
        loc="lower left", bbox_to_anchor=(-0.02, 1.0), ncols=len(parts), frameon=False, fontsize=9.5, handlelength=1.0,
        columnspacing=1.2, handletextpad=0.5, borderaxespad=0.0,
    )  # fmt: skip
    for side in ("top", "right"):
        place.spines[side].set_visible(False)
