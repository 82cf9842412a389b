"""Results of the written layout, made from given intensities: what compare sees, without any predictor."""

import numpy as np

from branchlab.conventions import WAVELENGTH, X, Y
from branchlab.launch import PlaneWave, Setup
from branchlab.media import RandomMedium
from branchlab.results import dataset, provenance

MEDIUM = RandomMedium(0.08, 1.0, seed=7)


def setup(*, length=8.0, width=16.0, sides="periodic", medium=MEDIUM, **options):
    return Setup(medium, PlaneWave(), length, width, sides, **options)


def _coords(of):
    return {X: ((X,), of.x), Y: ((Y,), of.y)}


def rays(of, intensity, *, error=0.0, model="paraxial"):
    """A ray density; intensity (x, y), error a number or (x,)."""
    intensity = np.broadcast_to(intensity, (of.x.size, of.y.size)).astype(float)
    zero = np.zeros(of.x.size)
    curves = {"flux": intensity.sum(axis=1) * of.cell, "lost_flux": zero, "unresolved_flux": zero}
    curves["numerical_error"] = zero + error
    variables = {"intensity": ((X, Y), intensity), **{name: ((X,), v) for name, v in curves.items()}}
    return dataset("density", variables, _coords(of), provenance(of, model=model))


def wave(of, wavelengths, intensity, *, error=0.0, model="paraxial"):
    """A wave; intensity (wavelength, x, y), error a number or (wavelength, x)."""
    wavelengths = np.atleast_1d(np.asarray(wavelengths, dtype=float))
    shape = (wavelengths.size, of.x.size, of.y.size)
    intensity = np.broadcast_to(intensity, shape).astype(float)
    zero = np.zeros(shape[:2])
    curves = {"flux": intensity.sum(axis=2) * of.cell, "numerical_error": zero + error, "spectral_tail": zero}
    variables = {name: ((WAVELENGTH, X), v) for name, v in curves.items()}
    variables["intensity"] = ((WAVELENGTH, X, Y), intensity)
    coords = {**_coords(of), WAVELENGTH: ((WAVELENGTH,), wavelengths)}
    return dataset("wave", variables, coords, provenance(of, model=model))


def total(of, wavelengths, intensity, *, excess=0.0, trusted=True, entry=0.0, model="paraxial"):
    """A semiclassical sum; intensity (wavelength, x, y), entry a number or (wavelength,)."""
    wavelengths = np.atleast_1d(np.asarray(wavelengths, dtype=float))
    shape = (wavelengths.size, of.x.size, of.y.size)
    variables = {
        "intensity": ((WAVELENGTH, X, Y), np.broadcast_to(intensity, shape).astype(float)),
        "flux_excess": ((WAVELENGTH, X), np.zeros(shape[:2]) + excess),
        "trusted": ((WAVELENGTH, X), np.broadcast_to(trusted, shape[:2]).copy()),
        "entry_error": ((WAVELENGTH,), np.broadcast_to(entry, shape[:1]).copy()),
    }
    coords = {**_coords(of), WAVELENGTH: ((WAVELENGTH,), wavelengths)}
    attrs = provenance(of, model=model) | {"method": "frozen-gaussian", "entry_limit": 0.03}
    return dataset("semiclassical", variables, coords, attrs)


def comparison(x, misplaced, *, error=0.0, band=None, of=None):
    """A comparison that holds given curves (realisation, x) of misplaced flux, at one wavelength."""
    of = of or setup(length=float(x[-1]))
    misplaced = np.asarray(misplaced, dtype=float)[:, None, :]
    dims = ("realisation", WAVELENGTH, X)
    flat = np.ones((misplaced.shape[0], 1, x.size, of.y.size))
    variables = {
        "intensity_ray": (("realisation", X, Y), flat[:, 0]),
        "intensity_wave": ((*dims, Y), flat),
        "mismatch": ((*dims, Y), 0.0 * flat),
    }
    for ending, curve in (("", misplaced), ("_band", band)):
        if curve is not None:
            curve = np.asarray(curve, dtype=float).reshape(misplaced.shape)
            variables["misplaced_flux" + ending] = (dims, curve)
            variables["displacement" + ending] = (dims, curve)
            variables["correlation" + ending] = (dims, 1.0 - curve)
            variables["numerical_error" + ending] = (dims, np.zeros(curve.shape) + error)
            variables["resolved" + ending] = (dims, curve > error)
    coords = {X: ((X,), x), Y: ((Y,), of.y), WAVELENGTH: ((WAVELENGTH,), np.array([0.1]))}
    attrs = provenance(of, model="paraxial") | {"resolution": 0.2, "pair": "matched", "wave_model": "paraxial"}
    return dataset("comparison", variables, coords, attrs)
