"""Measured statistics of a medium in a window, beside those that were asked for."""

import math

import numpy as np
import xarray as xr

from branchlab.conventions import MEAN_FIRST_CAUSTIC
from branchlab.errors import check_positive

POINTS_PER_SCALE = 4
LAGS = 4.0  # scales
DEFAULT_SCALES = 64.0


def measured(medium, length: float | None = None, width: float | None = None) -> xr.Dataset:
    """Measure a medium on a grid of a quarter of its scale.

    Parameters
    ----------
    medium : Medium
    length, width : float, optional
        Window 0 <= x <= length, abs(y) <= width/2. Default: 64 scales, or what the medium has.

    Returns
    -------
    Dataset
        rms, mean, skewness; correlation_x, correlation_y over `lag` (of v - mean, divided by its variance) and the
        lags at which they fall to 1/e; and, where the medium has a spectrum, what was asked for: requested_rms,
        requested_correlation, angle_diffusion Dtheta, curvature_noise D, caustic_scale z_c = D**(-1/3) and
        mean_first_caustic = 4.18 z_c (plane wave, weak-fluctuation limit; at a strength of 0.05 it is 8 % later).
    """
    x0, x1, y0, y1 = medium.extent
    scale, box = medium.scale, medium.repeats_after
    longest = min(x1 - max(x0, 0.0), box[0], DEFAULT_SCALES * scale)
    widest = min(y1 - y0, box[1], DEFAULT_SCALES * scale)
    length = longest if length is None else check_positive("length", length)
    width = widest if width is None else check_positive("width", width)
    middle = 0.5 * (y0 + y1) if math.isfinite(y0 + y1) else 0.0
    start = x0 if math.isfinite(x0) else 0.0
    nx, ny = (max(16, math.ceil(POINTS_PER_SCALE * size / scale)) for size in (length, width))
    x = start + np.arange(nx) * (length / nx)
    y = middle + (np.arange(ny) / ny - 0.5) * width
    v = medium.rows(x, y)
    mean, rms = float(v.mean()), float(v.std())
    safe = rms or 1.0
    found = {
        "rms": ("1", "rms of v about its mean in this window", rms),
        "mean": ("1", "mean of v in this window", mean),
        "skewness": ("1", "skewness of v in this window", float((((v - mean) / safe) ** 3).mean())),
    }
    lag = np.linspace(0.0, min(LAGS * scale, 0.5 * length, 0.5 * width), 33)
    curves = {}
    for axis, step in ((0, length / nx), (1, width / ny)):
        name = "correlation_" + "xy"[axis]
        curves[name] = _correlation((v - mean) / safe, axis, step, lag)
        below = np.flatnonzero(curves[name] < math.exp(-1.0))
        place = (
            float(np.interp(-math.exp(-1.0), -curves[name][: below[0] + 1], lag[: below[0] + 1]))
            if below.size
            else math.nan
        )
        found["correlation_length_" + "xy"[axis]] = ("L", f"lag at which {name} falls to 1/e", place)
    spectrum = getattr(medium, "spectrum", None)
    if spectrum is not None:
        quarter = 0.25 * medium.strength**2
        diffusion = quarter * spectrum.line_moment(2)
        noise = quarter * spectrum.line_moment(4) if spectrum.limit else math.inf
        found |= {
            "requested_rms": ("1", "rms of v in the ensemble", medium.strength),
            "angle_diffusion": ("L-1", "Dtheta = -A''(0) of the line-integrated index correlation", diffusion),
            "curvature_noise": ("L-3", "D = A''''(0) of the line-integrated index correlation", noise),
            "caustic_scale": ("L", "z_c = D**(-1/3)", noise ** (-1.0 / 3.0)),
            "mean_first_caustic": ("L", "mean first caustic of a plane wave", MEAN_FIRST_CAUSTIC * noise ** (-1 / 3)),
        }
        curves["requested_correlation"] = spectrum.correlation(lag)
    result = xr.Dataset(coords={"lag": ("lag", lag, {"units": "L", "long_name": "distance"})})
    for name, (units, text, number) in found.items():
        result[name] = ((), number, {"units": units, "long_name": text})
    for name, curve in curves.items():
        result[name] = ("lag", curve, {"units": "1", "long_name": name.replace("_", " ")})
    result.attrs = {"kind": "statistics", "medium": medium.to_json(), "length": length, "width": width}
    return result


def _correlation(v, axis: int, step: float, lags) -> np.ndarray:
    """Return the correlation of v (mean 0, variance 1) along an axis at `lags`, from pairs inside the window."""
    top = int(math.ceil(lags[-1] / step)) + 1
    n = v.shape[axis]
    v = np.moveaxis(v, axis, 0)
    whole = np.array([float((v[: n - m] * v[m:]).mean()) for m in range(min(top, n - 1) + 1)])
    return np.interp(lags, step * np.arange(whole.size), whole)
