"""The scintillation index: how strongly a screen twinkles."""

import numpy as np
import xarray as xr

from branchlab.compare.averaging import check_bands, places, weighted
from branchlab.compare.measures import check_intensity
from branchlab.compare.smoothing import smooth
from branchlab.conventions import REALISATION, WAVELENGTH, Y
from branchlab.errors import InputError, check_choice
from branchlab.results import check, labelled

DIVERGES = (
    "the ray <I**2> diverges at folds (tail I**-3): this index grows with the logarithm of 1/resolution; compare it "
    "with a wave only at equal resolution"
)


def scintillation(result: xr.Dataset, *, resolution: float | None = None, band=None) -> xr.DataArray:
    """Return the scintillation index S2 = <I**2>/<I>**2 - 1 on every screen.

    The means run over y and, if there are several, over realisations: a statement about a screen that is lit
    evenly, as by a plane wave.

    Parameters
    ----------
    result : Dataset
        Of kind "density" (rays), "wave" or "semiclassical".
    resolution : float, optional
        Smooth with a Gaussian of this standard deviation first. Rays must have one: their <I**2> diverges at
        folds (tail I**-3), so their S2 grows with the logarithm of 1/resolution and is a statement about the
        resolution as much as about the medium. Compare it with a wave only at equal resolution.
    band : Band, optional
        Average the intensity of a wave or sum over the band before it is squared.

    Returns
    -------
    DataArray, dims (wavelength, x); (x,) for rays and for the average over a band
        nan where a screen carries no flux. Attributes: `resolution`, `caution` for rays.

    Raises
    ------
    InputError
        Rays without a resolution, or with a band; nodes of the band missing from the result.
    """
    if not isinstance(result, xr.Dataset):
        raise InputError(f"scintillation needs a Dataset of rays, wave or sum; got {type(result).__name__}.")
    kind = check_choice("kind of the result", result.attrs.get("kind"), ("density", "wave", "semiclassical"))
    check(result, kind)
    intensity = result["intensity"]
    check_intensity(intensity, f"intensity of the {kind}")
    extra = {}
    if kind == "density":
        if resolution is None:
            raise InputError(
                "the scintillation index of rays has no value without a resolution: their <I**2> diverges at folds "
                "(tail I**-3). Use resolution=..., the one at which rays and wave are compared."
            )
        if band is not None:
            raise InputError("rays do not depend on the wavelength; leave band out for a density.")
        extra["caution"] = DIVERGES
    if band is not None:
        bands = check_bands(band)
        if len(bands) > 1:
            raise InputError(f"scintillation takes one band; got {len(bands)}. Call it once per band.")
        at = places(result, bands[0].wavelengths(), kind, f".solve({bands[0]!r})")
        ordered = intensity.transpose(..., WAVELENGTH)
        rows = weighted(ordered.values[..., at], bands[0], -1)
        intensity = xr.DataArray(
            rows,
            {name: c for name, c in ordered.coords.items() if WAVELENGTH not in c.dims},
            [d for d in ordered.dims if d != WAVELENGTH],
        )
        extra["band"] = bands[0].to_json()
    if resolution is not None:
        intensity = smooth(intensity, resolution, sides=result.attrs["sides"])
        extra["resolution"] = float(resolution)
    over = [dim for dim in (REALISATION, Y) if dim in intensity.dims]
    mean, square = intensity.mean(over), (intensity**2).mean(over)
    index = np.divide(square.values, mean.values**2, out=np.full(mean.shape, np.nan), where=mean.values > 0) - 1.0
    return xr.DataArray(
        index, mean.coords, mean.dims, "scintillation", {**labelled("scintillation", 0.0, ()).attrs, **extra}
    )
