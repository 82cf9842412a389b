"""Measured statistics of a medium in a window, beside those that were asked for."""

import math

import numpy as np
import xarray as xr

from branchlab.conventions import MEAN_FIRST_CAUSTIC
from branchlab.errors import check_positive

POINTS_PER_SCALE = 4
DEFAULT_SCALES = 64.0
MOST_POINTS = 1 << 20
LAGS = 4.0  # the correlation is given up to this many of its own lengths
FLAT, END = 3.0, 6.0  # the line integral over lags is full up to, and ends at, so many correlation lengths
BLOCKS, FEWEST_BLOCKS = 8, 4  # stretches along x, whose spread gives the sampling error
BLOCK_LENGTHS = 3.0  # a stretch holds this many correlation lengths at least: stretches count as independent

# name -> unit (a power of the length unit), long name
NAMES = {
    "mean": (0, "mean of v"),
    "largest": (0, "largest v"),
    "rms": (0, "rms of v about its mean"),
    "skewness": (0, "skewness of v"),
    "kurtosis": (0, "kurtosis of v (3 if Gaussian)"),
    "realised_rms": (0, "rms of v over the whole super-box of this realisation"),
    "correlation_length": (1, "distance at which the correlation falls to 1/e"),
    "correlation_length_x": (1, "distance along x at which the correlation falls to 1/e"),
    "correlation_length_y": (1, "distance along y at which the correlation falls to 1/e"),
    "angle_diffusion": (-1, "Dtheta = -A''(0) of the line-integrated index correlation"),
    "curvature_noise": (-3, "D = A''''(0) of the line-integrated index correlation"),
    "caustic_scale": (1, "z_c = D**(-1/3)"),
    "mean_first_caustic": (1, "mean first caustic of a plane wave, weak-fluctuation limit"),
}


def measured(medium, length: float | None = None, width: float | None = None) -> xr.Dataset:
    """Measure a medium on a grid of a quarter of its scale.

    Parameters
    ----------
    medium : Medium
    length, width : float, optional
        Window 0 <= x <= length, abs(y) <= width/2. Default: the super-box of a random medium (no more than
        a million points of it), else 64 scales or what the medium has.

    Returns
    -------
    Dataset
        mean, largest, rms, skewness, kurtosis of v; correlation_x, correlation_y over `lag`, and the lags at which they
        fall to 1/e; angle_diffusion Dtheta, curvature_noise D, caustic_scale z_c = D**(-1/3) and mean_first_caustic =
        4.18 z_c (plane wave, weak-fluctuation limit; at a strength of 0.1 it is 8 % later). With the ending _error:
        sampling errors (one standard deviation). With requested_ in front, where the medium is a random one: what was
        asked for, cut-off included. realised_rms: over the whole super-box of this realisation.
        NaN: not to be had from this window, for example a correlation that does not fall to 1/e, or a window of fewer
        than 12 correlation lengths for a sampling error.

    Notes
    -----
    Dtheta = (1/4) int R_1(s) ds and D = (1/4) int R_2(s) ds, R_n the correlation along x of the n-th y-derivative of v;
    the lags are tapered from 3 to 6 correlation lengths. The sampling error is that of the mean of 4 to 8 stretches.
    """
    x, y, step = _grid(medium, length, width)
    v = medium.rows(x, y)
    numbers = {"mean": float(v.mean()), "largest": float(v.max())}
    rms = numbers["rms"] = float(v.std())
    safe = rms or 1.0
    v = (v - numbers["mean"]) / safe
    curves = {f"correlation_{'xy'[axis]}": _correlation(v, axis) for axis in (0, 1)}
    for name, curve in curves.items():
        numbers[name.replace("correlation", "correlation_length")] = _fall(curve, step)
    reach = numbers["correlation_length_x"] / step
    errors = {"rms": 0.5 * rms * _mean_and_error((v**2).mean(axis=1), reach)[1]}
    for name, order in (("skewness", 3), ("kurtosis", 4)):
        numbers[name], errors[name] = _mean_and_error((v**order).mean(axis=1), reach)
    for name, order in (("angle_diffusion", 1), ("curvature_noise", 2)):
        field = 0.5 * medium.rows(x, y, dy=order)
        numbers[name], errors[name] = _line_integral(field, step, reach)
    numbers |= _caustics(numbers["curvature_noise"])
    if hasattr(medium, "realised_rms"):
        numbers["realised_rms"] = medium.realised_rms
    seen = [numbers[f"correlation_length_{axis}"] for axis in "xy"]
    longest = max((one for one in seen if math.isfinite(one)), default=math.inf)
    keep = min(
        len(curves["correlation_x"]), len(curves["correlation_y"]), math.ceil(min(LAGS * longest / step, 1e9)) + 1
    )
    lag = step * np.arange(keep)
    wanted, requested_curve = _requested(medium, lag)
    return _labelled(medium, lag, {**curves, **requested_curve}, numbers, errors, wanted, (x, y, step))


def _grid(medium, length: float | None, width: float | None):
    """Return x, y and their common step."""
    x0, x1, y0, y1 = medium.extent
    scale, box = medium.scale, medium.repeats_after
    many = [one if math.isfinite(one) else DEFAULT_SCALES * scale for one in box]
    shrink = min(1.0, math.sqrt(MOST_POINTS * (scale / POINTS_PER_SCALE) ** 2 / math.prod(many)))
    longest, widest = min(x1 - max(x0, 0.0), shrink * many[0]), min(y1 - y0, shrink * many[1])
    length = longest if length is None else check_positive("length", length)
    width = widest if width is None else check_positive("width", width)
    start = max(x0, 0.0) if math.isfinite(x0) else 0.0
    middle = 0.5 * (y0 + y1) if math.isfinite(y0 + y1) else 0.0
    step = min(scale / POINTS_PER_SCALE, length / 16.0, width / 16.0)
    nx, ny = (int(size / step + 1e-9) for size in (length, width))
    return start + (np.arange(nx) + 0.5) * step, middle + (np.arange(ny) + 0.5 - 0.5 * ny) * step, step


def _mean_and_error(series, reach: float) -> tuple[float, float]:
    """Return the mean of a series along x, and its standard error from the spread of stretches of some `reach`."""
    blocks = int(min(BLOCKS, series.size / (BLOCK_LENGTHS * reach))) if math.isfinite(reach) else 0
    if blocks < FEWEST_BLOCKS:
        return float(series.mean()), math.nan
    stretches = [part.mean() for part in np.array_split(series, blocks)]
    return float(series.mean()), float(np.std(stretches, ddof=1) / math.sqrt(blocks))


def _correlation(v, axis: int) -> np.ndarray:
    """Return the correlation of v along an axis at lags 0, 1, ... of half the window, from the pairs inside it."""
    n = v.shape[axis]
    spectrum = np.fft.rfft(v, 2 * n, axis=axis)
    pairs = np.fft.irfft((np.abs(spectrum) ** 2).mean(axis=1 - axis), 2 * n)[: n // 2 + 1]
    pairs /= n - np.arange(pairs.size)
    return pairs / (pairs[0] or 1.0)


def _fall(curve, step: float) -> float:
    """Return the lag at which a correlation first falls to 1/e, NaN if it does not."""
    level = math.exp(-1.0)
    below = np.flatnonzero(curve < level)
    if not below.size:
        return math.nan
    at = int(below[0])
    return step * (at - (level - curve[at]) / (curve[at - 1] - curve[at]))


def _line_integral(field, step: float, reach: float) -> tuple[float, float]:
    """Return the integral of a field's correlation over all lags along x, and its sampling error.

    `reach` is the correlation length in steps.
    """
    last = math.ceil(END * reach) if math.isfinite(reach) else field.shape[0]
    rows = field.shape[0] - last
    if rows < reach or rows < 1:
        return math.nan, math.nan
    lag = np.arange(1, last + 1) / reach
    taper = np.cos(0.5 * np.pi * np.clip((lag - FLAT) / (END - FLAT), 0.0, 1.0)) ** 2
    ahead = np.zeros_like(field[:rows])
    for m, weight in enumerate(taper, start=1):
        ahead += weight * field[m : m + rows]
    return _mean_and_error(step * (field[:rows] * (field[:rows] + 2.0 * ahead)).mean(axis=1), reach)


def _caustics(noise: float) -> dict[str, float]:
    """Return what follows from the curvature noise D; 0 if it is infinite, NaN if it is 0 or unknown."""
    scale = noise ** (-1.0 / 3.0) if noise > 0 else math.nan
    return {"caustic_scale": scale, "mean_first_caustic": MEAN_FIRST_CAUSTIC * scale}


def _requested(medium, lag) -> tuple[dict[str, float], dict[str, np.ndarray]]:
    """Return what was asked for: numbers, and the correlation at the lags; empty for a medium that is not random.

    Parts of a sum count as independent: variances, third cumulants, correlations, Dtheta and D add.
    """
    parts = getattr(medium, "parts", (medium,))
    if not all(hasattr(part, "spectrum") for part in parts):
        return {}, {}
    variance = [part.strength**2 * _kept(part) for part in parts]
    whole = sum(variance)

    def correlation(r):
        return sum(one * part.spectrum.correlation(r) for one, part in zip(variance, parts, strict=True)) / whole

    third = sum(getattr(part, "skewness", 0.0) * one**1.5 for one, part in zip(variance, parts, strict=True))
    diffusion, noise = (
        sum(0.25 * part.strength**2 * part.spectrum.line_moment(order, getattr(part, "cut", None)) for part in parts)
        for order in (2, 4)
    )
    if not all(part.spectrum.limit for part in parts):
        noise = math.inf
    far = step = 0.01 * min(part.spectrum.length for part in parts)
    while correlation(far) > math.exp(-1.0):
        far *= 1.01
    near = far / 1.01 if far > step else 0.0
    for _ in range(50):
        middle = 0.5 * (near + far)
        near, far = (middle, far) if correlation(middle) > math.exp(-1.0) else (near, middle)
    numbers = {
        "rms": math.sqrt(whole),
        "skewness": third / whole**1.5,
        "correlation_length": far,
        "angle_diffusion": diffusion,
        "curvature_noise": noise,
        **_caustics(noise),
    }
    return numbers, {"requested_correlation": correlation(lag)}


def _kept(part) -> float:
    """Return the share of the variance that the cut-off of a random medium keeps."""
    return 1.0 - part.spectrum.share_beyond(part.cut) if hasattr(part, "cut") else 1.0


def _labelled(medium, lag, curves, numbers, errors, wanted, grid) -> xr.Dataset:
    """Return the Dataset, with units and long names."""
    unit = getattr(medium, "length_unit", "1")

    def entry(name, number, ending=""):
        power, text = NAMES[name]
        units = "1" if power == 0 or unit == "1" else unit if power == 1 else f"{unit}{power}"
        return (), number, {"units": units, "long_name": text + ending}

    x, y, step = grid
    variables = {name: entry(name, number) for name, number in numbers.items()}
    variables |= {f"{name}_error": entry(name, number, ", sampling error") for name, number in errors.items()}
    variables |= {f"requested_{name}": entry(name, number, ", as asked for") for name, number in wanted.items()}
    for name, curve in curves.items():
        variables[name] = "lag", curve[: lag.size], {"units": "1", "long_name": name.replace("_", " ")}
    return xr.Dataset(
        variables,
        {"lag": ("lag", lag, {"units": unit, "long_name": "distance"})},
        {"kind": "statistics", "medium": medium.to_json(), "length": x.size * step, "width": y.size * step},
    )
