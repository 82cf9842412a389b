"""Attribution: what the mismatch of wave and rays consists of."""

import numpy as np

PARTS = ("removable", "caustic", "diffraction")


def split(rays, wave, total, average=None) -> dict[str, np.ndarray]:
    """Return the signed maps whose sum is wave - rays.

    With the coherent sum over rays I_sc and its average <I_sc> over a band:

    - removable = I_sc - <I_sc>: interference between ray families that the band takes away;
    - caustic = <I_sc> - I_ray: near-caustic families that no such band dephases;
    - diffraction = I_wave - I_sc: what no sum over rays contains.

    Without an average the first two come together as interference = I_sc - I_ray.

    Parameters
    ----------
    rays, wave, total : ndarray, shape (..., y)
        Intensities at one resolution, scaled to one flux per screen; `total` is the semiclassical sum.
    average : ndarray, shape (..., y), optional
        The sum averaged over the band.

    Returns
    -------
    dict of ndarray
        The parts by name; they add up to wave - rays to round-off.
    """
    diffraction = wave - total
    if average is None:
        return {"interference": total - rays, "diffraction": diffraction}
    return {"removable": total - average, "caustic": average - rays, "diffraction": diffraction}


def shares(maps: dict[str, np.ndarray], flux: np.ndarray) -> dict[str, np.ndarray]:
    """Return the size of each part as misplaced flux: half the sum of abs(part) over the flux.

    The sizes do not add up to the misplaced flux, for the parts cancel each other in places.

    Parameters
    ----------
    maps : dict of ndarray, shape (..., y)
    flux : ndarray, shape (...)
        Sum over y of the rays.
    """
    return {name: _over(0.5 * np.abs(part).sum(axis=-1), flux) for name, part in maps.items()}


def portions(maps: dict[str, np.ndarray], mismatch: np.ndarray, flux: np.ndarray) -> dict[str, np.ndarray]:
    """Return the portions of the misplaced flux that the parts account for: these add up to it.

    Each is half the sum of part * sign(mismatch) over the flux; it is negative for a part that makes the
    mismatch smaller.

    Parameters
    ----------
    maps : dict of ndarray, shape (..., y)
    mismatch : ndarray, shape (..., y)
        Their sum.
    flux : ndarray, shape (...)
        Sum over y of the rays.
    """
    sign = np.sign(mismatch)
    return {name: _over(0.5 * (part * sign).sum(axis=-1), flux) for name, part in maps.items()}


def _over(value: np.ndarray, flux: np.ndarray) -> np.ndarray:
    """Return value / flux, nan where there is no flux."""
    value, flux = np.broadcast_arrays(value, flux)
    return np.divide(value, flux, out=np.full(value.shape, np.nan), where=flux > 0)
