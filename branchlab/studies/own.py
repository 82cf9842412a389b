"""A study of somebody's own medium: what the samples leave open is chosen here, and told."""

import math

from branchlab.errors import check_positive
from branchlab.launch import Band, PlaneWave, Setup
from branchlab.launch.setup import FADE_SCALES, smooth_number
from branchlab.media import SampledMedium
from branchlab.studies.study import Study

BANDWIDTH = 0.4
PER_SCALE = 10.0  # default resolution: this many in a scale of the medium
CELLS_IN_RESOLUTION = 1.6
CAUTIONS = {
    "depth": "Linear long waves, no rotation, no breaking: wavelengths below 20 depths are outside it (common practice).",
    "speed": "Linear waves without loss.",
}


def own_study(
    medium: SampledMedium,
    wavelengths,
    *,
    bandwidth: float | None = BANDWIDTH,
    length: float | None = None,
    width: float | None = None,
    sides: str = "periodic",
    resolution: float | None = None,
    threshold: float = 0.15,
    title: str = "",
    note: str = "",
) -> Study:
    """Return the study of a plane wave through a sampled medium.

    The wave enters at the first sample of x and travels along x; y = 0 is the middle of the samples.

    Parameters
    ----------
    medium : SampledMedium
    wavelengths : float or sequence of float
        Where v = 0, in the unit of the samples' axes.
    bandwidth : float, optional
        Relative width of a flat band about each wavelength; None: no averages.
    length, width : float, optional
        Of the window. Default: all of x; as much of y as leaves room for the fade at the sides.
    sides : {"periodic", "absorbing"}
    resolution : float, optional
        Default: a tenth of the medium's scale.
    threshold, title, note :
        See `Study`.
    """
    medium = medium.with_(x=medium.x - medium.x[0], y=medium.y - 0.5 * (medium.y[0] + medium.y[-1]))
    span = float(medium.y[-1] - medium.y[0])
    if width is None:
        # the fade takes 3 scales at either side, and in a narrow window a quarter (periodic) or 3/4 of the width
        width = max(span - 2.0 * FADE_SCALES * medium.scale, span / (1.5 if sides == "periodic" else 2.5))
        width = _rounded(width, math.floor)
    length = float(medium.x[-1]) if length is None else length
    if resolution is None:
        resolution = _rounded(medium.scale / PER_SCALE, round)
    resolution = check_positive("resolution", resolution)
    fewest = max(16.0 / medium.scale, CELLS_IN_RESOLUTION / resolution) * check_positive("width", width)
    items = list(wavelengths) if isinstance(wavelengths, (list, tuple)) else [wavelengths]
    return Study(
        Setup(
            medium,
            PlaneWave(),
            length,
            width,
            sides,
            cells=smooth_number(round(fewest)),
            length_unit=medium.length_unit,
        ),
        items if bandwidth is None else [Band(one, bandwidth) for one in items],
        resolution=resolution,
        threshold=threshold,
        title=title,
        note=note,
    )


def _rounded(value: float, way) -> float:
    """Return a number with three significant digits, rounded by `floor` or `round`."""
    unit = 10.0 ** (math.floor(math.log10(value)) - 2)
    return float(f"{way(value / unit) * unit:.6g}")
