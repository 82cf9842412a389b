"""Which sum over rays a study takes, and why: frozen Gaussians where they hold the source."""

import numpy as np
import xarray as xr

from branchlab.rays import RayEnsemble
from branchlab.semiclassics import SemiclassicalSum
from branchlab.semiclassics.trust import ENTRY_LIMIT

FROZEN, PHASE_SPACE = "frozen-gaussian", "herman-kluk"
WHY = "frozen_entry_error"


def summed(rays: RayEnsemble, wavelengths, progress=None, *, method: str | None = None) -> xr.Dataset:
    """Return the sum of frozen Gaussians, or Herman-Kluk's of a source that these cannot rebuild.

    Parameters
    ----------
    rays : RayEnsemble
    wavelengths : array, shape (wavelength,)
    progress : callable, optional
    method : {"frozen-gaussian", "herman-kluk"}, optional
        Take this one. Default: frozen Gaussians, unless their `entry_error` exceeds
        `branchlab.semiclassics.trust.ENTRY_LIMIT` at any of the wavelengths: a source no larger than a few packets.

    Returns
    -------
    Dataset of kind "semiclassical"
        Attribute `frozen_entry_error` if frozen Gaussians were tried and given up: the largest of their errors.
    """
    if method is not None:
        return SemiclassicalSum(rays, method).solve(wavelengths, progress)
    total = SemiclassicalSum(rays, FROZEN).solve(wavelengths, progress)
    error = float(total["entry_error"].max())
    if error <= ENTRY_LIMIT:
        return total
    # the progress has been to the end already: it stays there, and can still cancel
    held = None if progress is None else lambda _fraction: progress(1.0)
    return SemiclassicalSum(rays, PHASE_SPACE).solve(wavelengths, held).assign_attrs({WHY: error})


def given_up(comparisons) -> float:
    """Return the largest error for which frozen Gaussians were given up in any comparison, nan if in none."""
    return max((one.attrs[WHY] for one in comparisons if WHY in one.attrs), default=np.nan)


def reason(error: float) -> str:
    """Return in words why the sum is Herman-Kluk's."""
    return (
        "Herman-Kluk was taken because frozen Gaussians would rebuild the entry field of this source with an error of up to "
        f"{100 * error:.2g} %, and are trusted to {100 * ENTRY_LIMIT:g} %."
    )
