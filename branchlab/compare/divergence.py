"""Where and when a wave packet and its classical cloud part."""

import math

import numpy as np
import xarray as xr

from branchlab.compare.pairs import differences
from branchlab.compare.smoothing import check_resolution, smooth_rows
from branchlab.conventions import TIME, WAVELENGTH, X, Y
from branchlab.errors import InputError, check_number
from branchlab.results import check, dataset

CARRIED = ("setup", "packet", "sides", "length_unit", "normalisation", "model", "versions")


def divergence(cloud: xr.Dataset, packet: xr.Dataset, *, resolution: float, threshold: float = 0.15) -> xr.Dataset:
    """Measure a packet against its cloud, time by time, at a resolution.

    Both densities are smoothed with the same Gaussian in x and y. The misplaced flux is
    m = (1/2) sum abs(rho_cloud - rho_packet) dA over the window and, as one more cell, all that is outside it: the share of
    the probability that is in the wrong place.

    Parameters
    ----------
    cloud : Dataset of kind "cloud"
    packet : Dataset of kind "packet"
        Of the same setup, packet, wavelengths and times.
    resolution : float
        Standard deviation of the Gaussian, from one cell to a quarter of the width.
    threshold : float
        The two have parted when m stays above it.

    Returns
    -------
    Dataset of kind "divergence"
        density_ray, density_wave (wavelength, time, x, y), smoothed; misplaced_flux (wavelength, time); numerical_error:
        that of the packet, the sampling noise of the cloud, sum sqrt(rho/(4 pi resolution**2 rays)) dA/sqrt(2 pi) (independent
        rays; a quasi-random cloud starts with less), and its position error over sqrt(2 pi) resolution; resolved: m is above
        it; divergence_time (wavelength), from which m stays above the threshold to the end, interpolated between times, nan if
        it does not: `parted` says which; ehrenfest_time, the cloud's logarithmic estimate (one realisation is off it by up to 5).

    Raises
    ------
    InputError
        Results of other kinds, or of different setups, packets, wavelengths or times.
    """
    check(cloud, "cloud")
    check(packet, "packet")
    _check_same(cloud, packet)
    resolution = check_resolution(resolution, packet[Y].values)
    threshold = check_number("threshold", threshold, low=0.0, high=1.0, open_low=True)
    x, y = packet[X].values, packet[Y].values
    cells, sides = (x[1] - x[0], y[1] - y[0]), packet.attrs["sides"]
    ray, wave = (_smoothed(one["density"].values, cells, resolution, sides) for one in (cloud, packet))
    area = cells[0] * cells[1]
    outside = (wave - ray).sum(axis=(2, 3)) * area
    misplaced = 0.5 * (np.abs(ray - wave).sum(axis=(2, 3)) * area + np.abs(outside))
    grain = 1.0 / (4.0 * math.pi * resolution**2 * cloud.attrs["points"])
    # of the expected density, the packet's; where it expects less than a ray, the noise is the density itself
    noise = np.minimum(np.sqrt(np.maximum(wave, 0.0) * grain / (2.0 * math.pi)), wave).sum(axis=(2, 3)) * area
    shift = cloud["position_error"].values / (math.sqrt(2.0 * math.pi) * resolution)
    error = packet["numerical_error"].values + noise + np.minimum(shift, 1.0)
    times = packet[TIME].values
    parting = np.array([_parting(times, one, threshold) for one in misplaced])
    both, field = (WAVELENGTH, TIME), (WAVELENGTH, TIME, X, Y)
    variables = {
        "density_ray": (field, ray),
        "density_wave": (field, wave),
        "misplaced_flux": (both, misplaced),
        "numerical_error": (both, error),
        "resolved": (both, misplaced > error),
        "divergence_time": ((WAVELENGTH,), parting),
        "parted": ((WAVELENGTH,), np.isfinite(parting)),
        "ehrenfest_time": ((WAVELENGTH,), cloud["ehrenfest_time"].values),
    }
    coords = {name: ((name,), packet[name].values) for name in (WAVELENGTH, TIME, X, Y)}
    attrs = {name: packet.attrs[name] for name in CARRIED}
    return dataset("divergence", variables, coords, attrs | {"resolution": resolution, "threshold": threshold})


def _check_same(cloud, packet) -> None:
    """Refuse two results that do not belong together."""
    for name in ("setup", "packet"):
        if found := differences(cloud.attrs[name], packet.attrs[name]):
            raise InputError(
                f"cloud and packet have different {name}s (cloud against packet): {'; '.join(found)}. Make both from one "
                "Setup and one Packet."
            )
    for name in (WAVELENGTH, TIME):
        if not np.array_equal(cloud[name], packet[name]):
            raise InputError(
                f"cloud and packet have different values of {name}: {cloud[name].values[:4].tolist()} against "
                f"{packet[name].values[:4].tolist()}. Solve both for the same."
            )


def _smoothed(density, cells, resolution: float, sides: str) -> np.ndarray:
    """Return densities smoothed along x, where zeros continue them, and along y."""
    along = smooth_rows(np.moveaxis(density, 2, 3), cells[0], resolution, "absorbing")
    return smooth_rows(np.moveaxis(along, 3, 2), cells[1], resolution, sides)


def _parting(times, misplaced, threshold: float) -> float:
    """Return when a curve rises above the threshold for good, nan if it is not above it at the end."""
    below = np.flatnonzero(misplaced <= threshold)
    if below.size and below[-1] == times.size - 1:
        return math.nan
    if not below.size:
        return float(times[0])
    at = below[-1]
    share = (threshold - misplaced[at]) / (misplaced[at + 1] - misplaced[at])
    return float(times[at] + share * (times[at + 1] - times[at]))
