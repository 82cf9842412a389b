"""Is the paraxial model good enough here? The paraxial rays and wave against the full ones."""

import numpy as np
import xarray as xr

from branchlab.compare import misplaced_flux
from branchlab.compare.validity import first_crossing
from branchlab.conventions import FULL, PARAXIAL, REALISATION, WAVELENGTH, X
from branchlab.errors import InputError, RangeError, check_number
from branchlab.launch import FieldSource, PlaneWave, Setup
from branchlab.launch.band import wavelength_axis
from branchlab.rays import RayEnsemble
from branchlab.results import dataset
from branchlab.waves import FullWave, ParaxialWave

ENTRY_POINTS = 513


def same_entry(setup: Setup) -> Setup:
    """Return the setup with a source that enters both models alike.

    Between absorbing sides a plane wave is a soft-edged slab in the paraxial model and goes on beyond the sides in the
    full one. Here both get the slab, as a `FieldSource`.
    """
    if setup.sides == "periodic" or not isinstance(setup.source, PlaneWave):
        return setup
    (part,) = setup.parts()
    y = np.linspace(-0.5 * setup.width, 0.5 * setup.width, ENTRY_POINTS)
    rays = part.front.at(y)
    return setup.with_(source=FieldSource(y, rays.amplitude, rays.action))


def model_gap(
    paraxial: tuple[xr.Dataset, xr.Dataset], full: tuple[xr.Dataset, xr.Dataset], *, resolution: float, threshold: float
) -> xr.Dataset:
    """Return how far the two models are apart, from results that exist already.

    Parameters
    ----------
    paraxial, full : (Dataset, Dataset)
        Ray density and wave of one setup in each model; the waves at the same wavelengths. The paraxial density is None
        where rays turn too far for one: what is said of the rays is then nan.
    resolution : float
    threshold : float

    Returns
    -------
    Dataset of kind "paraxial error"
        See `paraxial_error`.
    """
    (thin_rays, thin_wave), (rays, wave) = paraxial, full
    for name, pair in (("rays", (thin_rays, rays)), ("waves", (thin_wave, wave))):
        if pair[0] is None:
            continue
        found = tuple(one.attrs["model"] for one in pair)
        if found != (PARAXIAL, FULL):
            raise InputError(f"the {name} must be of the models (paraxial, full), in this order; got {found}.")
    options = {"resolution": resolution, "sides": wave.attrs["sides"]}
    waves = misplaced_flux(thin_wave["intensity"], wave["intensity"], **options).transpose(WAVELENGTH, X).values
    between_rays = rays_error = np.full(wave[X].size, np.nan)
    if thin_rays is not None:
        between_rays = misplaced_flux(thin_rays["intensity"], rays["intensity"], **options).values
        rays_error = (thin_rays["numerical_error"] + rays["numerical_error"]).values
    error = (thin_wave["numerical_error"] + wave["numerical_error"]).transpose(WAVELENGTH, X).values
    x = wave[X].values
    reach = first_crossing(waves, x, threshold, 0.0)
    crossed = np.isfinite(reach)
    variables = {
        "misplaced_flux": ((WAVELENGTH, X), waves),
        "numerical_error": ((WAVELENGTH, X), error),
        "resolved": ((WAVELENGTH, X), waves > error),
        "misplaced_flux_rays": ((X,), between_rays),
        "numerical_error_rays": ((X,), rays_error),
        "reach": ((WAVELENGTH,), np.where(crossed, reach, x[-1])),
        "crossed": ((WAVELENGTH,), crossed),
    }
    coords = {WAVELENGTH: ((WAVELENGTH,), wave[WAVELENGTH].values), X: ((X,), x)}
    carried = ("model", "sides", "length_unit", "normalisation", "setup", "versions")
    attrs = {name: wave.attrs[name] for name in carried if name in wave.attrs}
    result = dataset("paraxial error", variables, coords, attrs | {"resolution": resolution, "threshold": threshold})
    result.attrs["recommendation"] = recommendation(result)
    return result


def thin_results(setup: Setup, wavelengths) -> tuple[xr.Dataset | None, xr.Dataset]:
    """Return density and wave of the paraxial model; no density where rays turn too far for it."""
    try:
        density = RayEnsemble(setup).density()
    except RangeError:
        density = None
    return density, ParaxialWave(setup).solve(wavelengths)


def recommendation(result: xr.Dataset) -> str:
    """Return in words which model to use, wavelength by wavelength.

    Parameters
    ----------
    result : Dataset of kind "paraxial error"
    """
    unit = result.attrs["length_unit"]
    unit = "" if unit == "1" else f" {unit}"
    limit, end = f"{100 * result.attrs['threshold']:.3g} %", float(result[X].values[-1])
    lines = []
    for at, wavelength in enumerate(result[WAVELENGTH].values):
        worst = float(result["misplaced_flux"].values[at].max())
        error = float(result["numerical_error"].values[at].max())
        there = f"at wavelength {wavelength:.4g}{unit}"
        if error > result.attrs["threshold"]:
            lines.append(f"{there}: not resolved, the numerical error reaches {100 * error:.2g} %; refine both waves")
        elif not result["crossed"].values[at]:
            lines.append(f"{there} the paraxial model serves: it misplaces at most {100 * worst:.2g} % of the flux")
        else:
            reach = float(result["reach"].values[at])
            lines.append(
                f"{there} the paraxial model serves out to x = {reach:.3g}{unit} of {end:.4g}{unit}; beyond, it misplaces "
                f"up to {100 * worst:.2g} % of the flux: use the full model"
            )
    if result["misplaced_flux_rays"].isnull().all():
        lines.append("paraxial rays are refused here: more than a hundredth of their flux turns too far")
    return f"Limit {limit} of the flux at resolution {result.attrs['resolution']:.3g}{unit}: " + "; ".join(lines) + "."


def beside(result: xr.Dataset) -> str:
    """Return in words how far the paraxial model is from the full one, for a study in the full model.

    Parameters
    ----------
    result : Dataset of kind "comparison"
        With `paraxial_error` (realisation, wavelength, x) and `paraxial_error_rays` (realisation, x), or without realisations.
    """
    unit = "" if result.attrs["length_unit"] == "1" else f" {result.attrs['length_unit']}"
    waves = result["paraxial_error"].mean([dim for dim in result["paraxial_error"].dims if dim == REALISATION])
    worst = ", ".join(
        f"{100 * float(waves.sel({WAVELENGTH: one}).max()):.2g} % at wavelength {one:.3g}{unit}"
        for one in result[WAVELENGTH].values
    )
    rays = result["paraxial_error_rays"]
    said = "are refused here" if rays.isnull().all() else f"up to {100 * float(rays.max()):.2g} % in one realisation"
    return (
        f"Rays and wave are full ones. The paraxial wave would place up to {worst} of the flux elsewhere; the paraxial "
        f"rays {said}."
    )


def paraxial_error(
    setup: Setup, wavelengths, *, resolution: float, threshold: float = 0.05, tolerance: float = 1e-3, progress=None
) -> xr.Dataset:
    """Measure the paraxial model against the full one, in the wave and in the rays, and say which to use.

    Misplaced flux between the paraxial and the full wave, and between the paraxial and the full rays, at one resolution.
    Between absorbing sides a plane wave enters both models as the soft-edged slab of the paraxial one.

    Parameters
    ----------
    setup : Setup
    wavelengths : float, sequence or Band
    resolution : float
        Standard deviation of the Gaussian that all are smoothed with.
    threshold : float
        Misplaced flux beyond which the paraxial model does not serve.
    tolerance : float
        Of the full wave's solver.
    progress : callable, optional
        Called with the fraction done, 0 ... 1; it may raise to cancel.

    Returns
    -------
    Dataset of kind "paraxial error"
        misplaced_flux, numerical_error, resolved (wavelength, x) of the waves; misplaced_flux_rays and
        numerical_error_rays (x) of the rays; reach (wavelength), the first x beyond the threshold, and crossed. Attribute
        `recommendation`: the answer in words.

    Raises
    ------
    InputError, RangeError, ResourceError, ConvergenceError
        As from the predictors.
    """
    threshold = check_number("threshold", threshold, low=0.0, high=1.0, open_low=True, open_high=True)
    given, setup = wavelength_axis(wavelengths), same_entry(setup)
    told = None if progress is None else lambda fraction: progress(0.9 * fraction)
    wave = FullWave(setup).solve(given, tolerance=tolerance, progress=told)
    thin = thin_results(setup, given)
    rays = RayEnsemble(setup, dynamics=FULL).density()
    if progress is not None:
        progress(1.0)
    return model_gap(thin, (rays, wave), resolution=resolution, threshold=threshold)
