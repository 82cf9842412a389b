"""The written layout of every result: names, dimensions, units, and one check that lists all faults."""

import numpy as np
import xarray as xr

from branchlab.conventions import (
    BRANCH,
    CAUSTIC,
    RAY,
    REALISATION,
    TIME,
    WAVELENGTH,
    X_FINE,
    Y_FINE,
    X,
    Y,
)
from branchlab.errors import InputError, check_choice

# unit of a variable: "1"; "L": the length unit of the setup (with a power, as in "L-1"); "I" and "F": intensity and
# flux, whose unit depends on the normalisation of the source
NAMES = {
    X: ("L", "range"),
    Y: ("L", "transverse position"),
    X_FINE: ("L", "range, fine grid"),
    Y_FINE: ("L", "transverse position, fine grid"),
    TIME: ("L", "time, as the way that a free packet of momentum 1 goes in it"),
    WAVELENGTH: ("L", "wavelength where v = 0"),
    RAY: ("1", "number of the ray"),
    REALISATION: ("1", "seed of the realisation"),
    CAUSTIC: ("1", "number of the caustic point"),
    BRANCH: ("1", "number of the branch"),
    "v": ("1", "v = V/E = 1 - n**2"),
    "intensity": ("I", "intensity, mean over a cell"),
    "psi": ("1", "envelope of the wave"),
    "flux": ("F", "flux through the screen"),
    "forward_flux": ("F", "flux of the waves that travel forward"),
    "backward_flux": ("F", "flux of the waves that travel backward, positive"),
    "reflected": ("1", "share of the incoming flux that comes back in front of the entry face"),
    "residual": ("1", "relative residual of the equation that was solved"),
    "refinement_error": ("1", "estimated relative error of the field by the grid"),
    "iterations": ("1", "iterations"),
    "memory": ("1", "memory taken by the solver, bytes"),
    "lost_flux": ("F", "flux that left the window"),
    "turned_flux": ("F", "flux of rays that turned back before the screen"),
    "unresolved_flux": ("F", "flux in tubes too coarse to be resolved"),
    "numerical_error": ("1", "numerical error, as misplaced flux"),
    "field_error": ("1", "relative numerical error of the field"),
    "spectral_tail": ("1", "share of the spectrum near the end of the grid's"),
    "flux_excess": ("1", "flux of the sum over that of its rays, minus 1"),
    "entry_error": ("1", "relative error with which the sum rebuilds the entry field"),
    "trusted": ("1", "the sum's own alarm is silent"),
    "rays_per_point": ("1", "mean number of rays through a point"),
    "position": ("L", "transverse position"),
    "momentum": ("1", "transverse momentum (sine of the angle)"),
    "action": ("L", "action, carrier removed"),
    "maslov": ("1", "Maslov index"),
    "status": ("1", "status of the ray"),
    "dydy": ("1", "stability matrix, dy/dy0"),
    "dydp": ("L", "stability matrix, dy/dp0"),
    "dpdy": ("L-1", "stability matrix, dp/dy0"),
    "dpdp": ("1", "stability matrix, dp/dp0"),
    "dyds": ("1", "stretch of the front, dy/ds"),
    "dpds": ("1", "turn of the front, dp/ds"),
    "s": ("1", "front parameter"),
    "part": ("1", "number of the coherent part"),
    "ray_flux": ("F", "flux that the ray stands for"),
    "caustic_x": ("L", "range of the caustic point"),
    "caustic_y": ("L", "transverse position of the caustic point"),
    "ray_number": ("1", "number of the ray that meets the caustic"),
    "first_caustic": ("L", "range of the first caustic on the ray"),
    "order": ("1", "how many caustics the ray has passed, this one included"),
    "intensity_ray": ("I", "ray density, smoothed to the resolution"),
    "intensity_wave": ("I", "wave intensity, smoothed to the resolution"),
    "mismatch": ("I", "wave intensity minus ray density"),
    "misplaced_flux": ("1", "misplaced flux"),
    "misplaced_flux_rays": ("1", "misplaced flux between the rays of the two models"),
    "numerical_error_rays": ("1", "numerical error of the rays of both models, as misplaced flux"),
    "misplaced_flux_band": ("1", "misplaced flux of the band average"),
    "displacement": ("L", "displacement (Wasserstein-1 distance)"),
    "displacement_band": ("L", "displacement of the band average"),
    "correlation": ("1", "correlation of rays and wave"),
    "correlation_band": ("1", "correlation of rays and band average"),
    "numerical_error_band": ("1", "numerical error of the band average, as misplaced flux"),
    "resolved_band": ("1", "mismatch of the band average is above its numerical error"),
    "intensity_band": ("1", "wave intensity averaged over the band, smoothed to the resolution"),
    "flux_mismatch": ("1", "flux of the wave over that of the rays, minus 1"),
    "scintillation": ("1", "scintillation index"),
    "scintillation_ray": ("1", "scintillation index of the rays, at the resolution"),
    "scintillation_wave": ("1", "scintillation index of the wave, at the resolution"),
    "paraxial_error": ("1", "misplaced flux between the paraxial and the full wave, at the resolution"),
    "paraxial_error_rays": ("1", "misplaced flux between paraxial and full rays, at the resolution"),
    "wave_parameter": ("1", "kappa = 3 k Dtheta D**(-2/3): rays fail by it and by x/z_c alone"),
    "mean_first_caustic": ("L", "mean first caustic of a plane wave, weak-fluctuation limit"),
    "scintillation_band": ("1", "scintillation index of the band average, at the resolution"),
    "density": ("L-2", "probability per area, mean over a cell"),
    "norm": ("1", "probability that is left"),
    "inside": ("1", "probability inside the window"),
    "energy": ("1", "mean energy, p**2/2 + v/2"),
    "energy_error": ("1", "rms change of the energy of a ray"),
    "mean_x": ("L", "mean range"),
    "mean_y": ("L", "mean transverse position"),
    "mean_px": ("1", "mean momentum along x"),
    "mean_py": ("1", "mean momentum along y"),
    "spread_x": ("L", "standard deviation of the range"),
    "spread_y": ("L", "standard deviation of the transverse position"),
    "position_error": ("L", "median numerical error of a ray's position"),
    "stretch": ("1", "mean logarithm of the stretch of a ray's neighbourhood"),
    "lyapunov": ("L-1", "rate of the stretch over the second half of the times"),
    "overlap": ("1", "overlap of two packets, abs(<a|b>)"),
    "density_ray": ("L-2", "density of the cloud, smoothed to the resolution"),
    "density_wave": ("L-2", "density of the packet, smoothed to the resolution"),
    "divergence_time": ("L", "time at which packet and cloud part"),
    "ehrenfest_time": ("L", "logarithmic estimate of it, ln(kappa)/(2 lyapunov)"),
    "parted": ("1", "packet and cloud part within the times"),
    "resolved": ("1", "mismatch is above the numerical error"),
    "interference": ("I", "semiclassical sum minus ray density"),
    "removable": ("I", "interference that the band removes"),
    "caustic_part": ("I", "interference that stays under the band, at caustics"),
    "diffraction": ("I", "wave minus semiclassical sum"),
    "share_interference": ("1", "misplaced flux of the interference"),
    "share_removable": ("1", "misplaced flux of the removable interference"),
    "share_caustic": ("1", "misplaced flux of the caustic part"),
    "share_diffraction": ("1", "misplaced flux of the diffraction"),
    "misplaced_interference": ("1", "portion of the misplaced flux due to interference"),
    "misplaced_removable": ("1", "portion of the misplaced flux due to removable interference"),
    "misplaced_caustic": ("1", "portion of the misplaced flux due to the caustic part"),
    "misplaced_diffraction": ("1", "portion of the misplaced flux due to diffraction"),
    "region": ("1", "number of the branch that the cell belongs to, 0 for none"),
    "sort": ("1", "dark: rays fill what the wave leaves dark; stray: the reverse"),
    "branch_wavelength": ("L", "wavelength at which the branch is found"),
    "branch_realisation": ("1", "realisation in which the branch is found"),
    "onset": ("L", "range at which the branch begins"),
    "branch_length": ("L", "length of the branch along the range"),
    "centre_x": ("L", "range of the branch's centre of flux"),
    "centre_y": ("L", "transverse position of the branch's centre of flux"),
    "branch_flux": ("1", "share of the flux that fills the branch, mean over its screens"),
    "branch_excess": ("1", "share of the flux that the other side lacks there, mean over its screens"),
    "contrast": ("1", "flux in the branch over the other side's"),
    "relit": ("1", "the band average brings the contrast below the factor"),
    "decided": ("1", "numerical error stays below the threshold as far as the range"),
    "decided_band": ("1", "numerical error of the band average stays below the threshold as far as the range"),
    "reach": ("L", "validity range"),
    "reach_low": ("L", "validity range, lower end of the interval"),
    "reach_high": ("L", "validity range, upper end of the interval"),
    "crossed": ("1", "the threshold is crossed inside the window"),
    "reach_band": ("L", "validity range of the band average"),
    "reach_band_low": ("L", "validity range of the band average, lower end of the interval"),
    "reach_band_high": ("L", "validity range of the band average, upper end of the interval"),
    "crossed_band": ("1", "the band average crosses the threshold inside the window"),
}

# kind -> variables it must have, with their dimensions (a leading realisation dimension is always allowed)
KINDS = {
    "trace": {name: (X, RAY) for name in ("position", "momentum", "action", "maslov", "status")},
    "density": {
        "intensity": (X, Y),
        **{name: (X,) for name in ("flux", "lost_flux", "unresolved_flux", "numerical_error")},
    },
    "caustics": {"first_caustic": (RAY,), "order": (CAUSTIC,)},
    "section": {"position": (RAY,), "momentum": (RAY,), "ray_flux": (RAY,)},
    "wave": {
        "intensity": (WAVELENGTH, X, Y),
        **{name: (WAVELENGTH, X) for name in ("flux", "numerical_error", "spectral_tail")},
    },
    "packet": {
        "density": (WAVELENGTH, TIME, X, Y),
        **{name: (WAVELENGTH, TIME) for name in ("norm", "energy", "numerical_error", "spectral_tail")},
    },
    "cloud": {
        "density": (WAVELENGTH, TIME, X, Y),
        **{name: (WAVELENGTH, TIME) for name in ("inside", "energy", "energy_error", "position_error", "stretch")},
    },
    "divergence": {
        **{name: (WAVELENGTH, TIME) for name in ("misplaced_flux", "numerical_error", "resolved")},
        **{name: (WAVELENGTH,) for name in ("divergence_time", "ehrenfest_time", "parted")},
    },
    "semiclassical": {
        "intensity": (WAVELENGTH, X, Y),
        **{name: (WAVELENGTH, X) for name in ("flux_excess", "trusted")},
    },
    "comparison": {
        **{name: (WAVELENGTH, X, Y) for name in ("intensity_wave", "mismatch")},
        **{
            name: (WAVELENGTH, X)
            for name in ("misplaced_flux", "displacement", "correlation", "numerical_error", "resolved")
        },
    },
    "paraxial error": {
        **{name: (WAVELENGTH, X) for name in ("misplaced_flux", "numerical_error", "resolved")},
        **{name: (X,) for name in ("misplaced_flux_rays", "numerical_error_rays")},
        **{name: (WAVELENGTH,) for name in ("reach", "crossed")},
    },
    "validity": {name: (WAVELENGTH,) for name in ("reach", "reach_low", "reach_high", "crossed", "decided")},
    "branches": {
        name: (BRANCH,)
        for name in ("sort", "onset", "branch_length", "centre_x", "centre_y", "branch_flux", "contrast")
    },
}
ATTRIBUTES = ("kind", "model", "sides", "length_unit", "setup", "versions")


NORMALISATIONS = {"intensity 1": {"I": "1", "F": "L"}, "flux 1": {"I": "L-1", "F": "1"}}


def unit_of(name: str, *, length_unit: str, normalisation: str) -> str:
    """Return the unit of a variable of the layout, with the setup's length unit put in."""
    check_choice("variable", name, NAMES)
    unit = NAMES[name][0]
    unit = NORMALISATIONS[normalisation].get(unit, unit)
    if not unit.startswith("L"):
        return unit
    return length_unit if length_unit == "1" else length_unit + unit[1:]


def labelled(name: str, data, dims, *, length_unit: str = "1", normalisation: str = "intensity 1") -> xr.Variable:
    """Return `data` as a Variable with the unit and long name that the layout gives to `name`.

    Parameters
    ----------
    name : str
        A name of the layout.
    data : array_like
    dims : tuple of str
    length_unit : str
        The setup's length unit.
    normalisation : {"intensity 1", "flux 1"}
        The source's: it decides the units of intensity and flux.
    """
    unit = unit_of(name, length_unit=length_unit, normalisation=normalisation)
    return xr.Variable(dims, data, {"units": unit, "long_name": NAMES[name][1]})


def dataset(kind: str, variables: dict, coords: dict, attrs: dict) -> xr.Dataset:
    """Build a result of a kind from ``{name: (dims, data)}`` and check it.

    Parameters
    ----------
    kind : str
        A key of `KINDS`.
    variables, coords : dict
        ``name: (dims, data)``; units and long names come from the layout.
    attrs : dict
        As `provenance` gives them; more may be added.
    """
    units = {"length_unit": attrs["length_unit"], "normalisation": attrs.get("normalisation", "intensity 1")}

    def label(entries):
        return {name: labelled(name, data, dims, **units) for name, (dims, data) in entries.items()}

    result = xr.Dataset(label(variables), label(coords), {"kind": kind, **attrs})
    check(result, kind)
    return result


def faults(result: xr.Dataset, kind: str) -> list[str]:
    """Return everything in which a Dataset departs from the layout of its kind, in words."""
    found = []
    if result.attrs.get("kind") != kind:
        found.append(f"attribute 'kind' is {result.attrs.get('kind')!r}, wanted {kind!r}")
    found += [f"attribute {name!r} is missing" for name in ATTRIBUTES if name not in result.attrs]
    for name, dims in KINDS[kind].items():
        if name not in result:
            found.append(f"variable {name!r} is missing")
        elif tuple(d for d in result[name].dims if d != REALISATION) != dims:
            found.append(f"variable {name!r} has dimensions {result[name].dims}, wanted {dims}")
    for name, variable in result.variables.items():
        if name not in NAMES:
            found.append(f"variable {name!r} is not in the layout")
        found += [f"variable {name!r} has no {key}" for key in ("units", "long_name") if key not in variable.attrs]
        if np.iscomplexobj(variable) and name != "psi":
            found.append(f"variable {name!r} is complex")
    return found


def check(result: xr.Dataset, kind: str) -> None:
    """Raise `InputError` that lists every fault of a Dataset against the layout of `kind`."""
    check_choice("kind", kind, KINDS)
    if not isinstance(result, xr.Dataset):
        raise InputError(f"expected an xarray.Dataset of kind {kind!r}; got {type(result).__name__}.")
    found = faults(result, kind)
    if found:
        raise InputError(f"this is not a result of kind {kind!r}: " + "; ".join(found) + ".")
