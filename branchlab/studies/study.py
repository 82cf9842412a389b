"""A study: everything that leads from a setup to a verdict, as one value object, and its run."""

import functools
import hashlib
import json
import traceback
import warnings

import attrs
import numpy as np
import xarray as xr

from branchlab.compare import compare, scintillation, validity_range, verdict
from branchlab.compare.averaging import check_bands
from branchlab.compare.smoothing import check_resolution
from branchlab.conventions import FULL, PARAXIAL, REALISATION, WAVELENGTH, X, wave_parameter, wavenumber
from branchlab.errors import (
    BranchlabWarning,
    InputError,
    check_choice,
    check_integer,
    check_memory,
    check_number,
    check_positive,
)
from branchlab.launch import Band, Setup
from branchlab.media import SampledMedium
from branchlab.rays import RayEnsemble
from branchlab.results import labelled
from branchlab.studies.model_error import beside, model_gap, paraxial_error, same_entry, thin_results
from branchlab.studies.progress import Progress, tell
from branchlab.studies.sums import FROZEN, PHASE_SPACE, WHY, given_up, reason, summed
from branchlab.values import ValueObject, value
from branchlab.waves import FullWave, ParaxialWave

MEASURES = ("attribution", "scintillation")
MAPS = 8  # maps (x, y) per wavelength and realisation that a comparison holds, copies during the join included
MODELS = {PARAXIAL: ParaxialWave, FULL: functools.partial(FullWave, precision="single")}
STAGES = {  # share of the time of one realisation
    PARAXIAL: {"rays": 0.15, "wave": 0.25, "sum": 0.55, "comparison": 0.05},
    FULL: {"rays": 0.1, "wave": 0.6, "sum": 0.2, "paraxial": 0.05, "comparison": 0.05},
}
RESULTS = ("reach", "crossed", "decided")  # variables of the validity range begin with these


def _wavelengths(given) -> tuple:
    """Return a tuple of positive wavelengths, or of Bands."""
    items = tuple(given) if isinstance(given, (list, tuple, np.ndarray)) else (given,)
    if not items:
        raise InputError("wavelengths is empty; give at least one wavelength, or one Band.")
    bands = [isinstance(item, Band) for item in items]
    if any(bands) and not all(bands):
        raise InputError("wavelengths must be numbers or Bands, not both: a number has no average to stand beside.")
    if bands[0]:
        return check_bands(items)
    lengths = tuple(check_positive("wavelength", item) for item in items)
    if len(set(lengths)) < len(lengths):
        raise InputError(f"wavelengths must differ; got {', '.join(f'{one:g}' for one in lengths)}.")
    return lengths


def _realisations(given) -> tuple[int, ...]:
    """Return seeds: those given, or for a number n the seeds 0 ... n - 1."""
    if given is None:
        return ()
    if isinstance(given, (list, tuple, np.ndarray)):
        seeds = tuple(check_integer("realisations (a seed)", seed, low=0) for seed in given)
    else:
        seeds = tuple(range(check_integer("realisations", given, low=1)))
    if len(set(seeds)) < len(seeds):
        again = next(seed for seed in seeds if seeds.count(seed) > 1)
        raise InputError(f"realisations must differ; the seed {again} stands there twice, which counts it double.")
    return seeds


def _measures(given) -> tuple[str, ...]:
    """Return the names of measures."""
    names = (given,) if isinstance(given, str) else tuple(given)
    return tuple(check_choice("measure", name, MEASURES) for name in names)


@value
class Study(ValueObject):
    """A setup, the wavelengths and the realisations of its medium; `run` leads to the verdict.

    Parameters
    ----------
    setup : Setup
        Geometry and source. The seed of its medium is replaced by those of `realisations`.
    wavelengths : float, Band, or sequence of either
        Numbers, or Bands: then the average over each band stands beside its centre wavelength.
    resolution : float
        Standard deviation of the Gaussian that rays and wave are smoothed with: from one cell to a quarter of the
        width.
    realisations : int or sequence of int, optional
        Seeds of the random medium; a number n stands for the seeds 0 ... n - 1. Default: the medium as it is.
    threshold : float
        Part of the flux that may be misplaced, between 0 and 1.
    measures : sequence of {"attribution", "scintillation"}
        What is found beside the misplaced flux: "attribution" sums over the rays and splits the mismatch.
    model : {"full", "paraxial"}
        Full rays with the full wave, the paraxial error told beside the mismatch; or paraxial rays with the paraxial wave,
        faster, for small angles.
    title, note : str
        Told with the result: what this is; where the data come from, and what to beware of.

    Examples
    --------
    >>> from branchlab import PlaneWave, RandomMedium
    >>> setup = Setup(RandomMedium(0.1, 1.0, seed=0), PlaneWave(), length=8.0, width=8.0)
    >>> study = Study(setup, [0.2, 0.1], resolution=0.2, realisations=3)
    >>> study.realisations
    (0, 1, 2)
    >>> Study.from_json(study.to_json()) == study
    True
    """

    setup: Setup = attrs.field()
    wavelengths: tuple = attrs.field(converter=_wavelengths)
    resolution: float = attrs.field(kw_only=True, converter=lambda s: check_positive("resolution", s))
    realisations: tuple[int, ...] = attrs.field(default=None, kw_only=True, converter=_realisations)
    threshold: float = attrs.field(
        default=0.15,
        kw_only=True,
        converter=lambda s: check_number("threshold", s, low=0.0, high=1.0, open_low=True, open_high=True),
    )
    measures: tuple[str, ...] = attrs.field(default=("attribution",), kw_only=True, converter=_measures)
    model: str = attrs.field(default=FULL, kw_only=True, converter=lambda name: check_choice("model", name, MODELS))
    title: str = attrs.field(default="", kw_only=True, converter=str)
    note: str = attrs.field(default="", kw_only=True, converter=str)

    def __attrs_post_init__(self):
        if not isinstance(self.setup, Setup):
            raise InputError(f"setup must be a Setup; got {type(self.setup).__name__} {self.setup!r:.60}.")
        check_resolution(self.resolution, self.setup.y)
        if self.realisations:
            self.setup.medium.with_seed(self.realisations[0])  # refuses a medium that is not random

    @property
    def bands(self) -> tuple[Band, ...]:
        """The bands, or none."""
        return self.wavelengths if isinstance(self.wavelengths[0], Band) else ()

    @property
    def centres(self) -> list[float]:
        """The wavelengths, or the centres of the bands."""
        return [band.centre for band in self.bands] or list(self.wavelengths)

    def solved_wavelengths(self) -> np.ndarray:
        """Return every wavelength that is marched: the wavelengths, or the nodes of all bands, rising."""
        if self.bands:
            return np.unique(np.concatenate([band.wavelengths() for band in self.bands]))
        return np.unique(self.wavelengths)

    @property
    def fingerprint(self) -> str:
        """Short text that tells this study from any other; results carry it."""
        return hashlib.blake2b(self.to_json().encode(), digest_size=8).hexdigest()

    def realised(self, seed: int | None) -> Setup:
        """Return the setup with one realisation of its medium; None: the medium as it is."""
        return self.setup if seed is None else self.setup.with_(medium=self.setup.medium.with_seed(seed))

    def compared(self, seed: int | None = None, progress=None, *, sum_method: str | None = None) -> xr.Dataset:
        """Return the comparison of rays, wave and sum in one realisation.

        The sum is of frozen Gaussians, or for a source that they cannot rebuild (a narrow beam, a point) Herman-Kluk's.

        Parameters
        ----------
        seed : int, optional
            Of the medium. Default: the medium as it is.
        progress : callable, optional
            Called with the fraction done, 0 ... 1; it may raise to cancel.
        sum_method : {"frozen-gaussian", "herman-kluk"}, optional
            Default: as the source needs. Attribute `sum_method` tells which it is, and `frozen_entry_error` why.
        """
        setup, solved = self.realised(seed), self.solved_wavelengths()
        done = 0.0

        def stage(name):
            nonlocal done
            start, share = done, STAGES[self.model][name]
            done += share
            return None if progress is None else lambda fraction: progress(start + share * fraction)

        ensemble = RayEnsemble(setup, dynamics=self.model)
        rays = ensemble.density()
        tell(stage("rays"))
        wave = MODELS[self.model](setup).solve(solved, progress=stage("wave"))
        total, told = None, stage("sum")
        if "attribution" in self.measures:
            total = summed(ensemble, solved, told, method=sum_method)
        result = compare(
            rays,
            wave if self.bands else wave.sel(wavelength=list(self.wavelengths)),
            total if self.bands or total is None else total.sel(wavelength=list(self.wavelengths)),
            resolution=self.resolution,
            band=list(self.bands) or None,
        )
        if total is not None and WHY in total.attrs:
            result.attrs[WHY] = total.attrs[WHY]
        for name in ("rays_per_point", "unresolved_flux"):
            result[name] = rays[name]
        if "scintillation" in self.measures:
            result = result.assign(self._scintillation(rays, wave))
        if self.model == FULL:
            result = result.assign(self._paraxial_error(setup, rays, wave))
            tell(stage("paraxial"))
        tell(stage("comparison"))
        return result

    def _paraxial_error(self, setup, rays, wave) -> dict:
        """Return how far the paraxial model is from the full one, at the centres."""
        options = {"resolution": self.resolution, "threshold": self.threshold}
        if same_entry(setup) is setup:
            found = model_gap(thin_results(setup, self.centres), (rays, wave.sel(wavelength=self.centres)), **options)
        else:
            found = paraxial_error(setup, self.centres, **options)
        names = {"paraxial_error": "misplaced_flux", "paraxial_error_rays": "misplaced_flux_rays"}
        return {name: labelled(name, found[of].values, found[of].dims) for name, of in names.items()}

    def _scintillation(self, rays, wave) -> dict:
        """Return the scintillation index of rays, wave and averages, at the resolution."""
        centres = self.centres
        index = {
            "scintillation_ray": scintillation(rays, resolution=self.resolution),
            "scintillation_wave": scintillation(wave, resolution=self.resolution).sel(
                wavelength=centres, method="nearest"
            ),
        }
        found = {name: labelled(name, one.values, one.dims) for name, one in index.items()}
        if self.bands:
            rows = [scintillation(wave, resolution=self.resolution, band=band).values for band in self.bands]
            found["scintillation_band"] = labelled("scintillation_band", np.array(rows), (WAVELENGTH, X))
        return found

    def yardsticks(self) -> dict[str, xr.Variable]:
        """Return what the validity range is measured against: mean_first_caustic, and wave_parameter per wavelength.

        As asked for of a random medium, as measured of a sampled one; nothing for other media.
        """
        medium, setup = self.setup.medium, self.setup
        numbers = medium.statistics(length=setup.length, width=setup.width)
        start = "requested_" if "requested_curvature_noise" in numbers else ""
        if not start and not isinstance(medium, SampledMedium):
            return {}
        diffusion, noise, caustic = (
            float(numbers[start + name]) for name in ("angle_diffusion", "curvature_noise", "mean_first_caustic")
        )
        if not (np.isfinite(noise) and noise > 0):
            return {}
        k = wavenumber(np.array(self.centres))
        unit = {"length_unit": setup.length_unit}
        return {
            "wave_parameter": labelled("wave_parameter", wave_parameter(k, diffusion, noise), (WAVELENGTH,)),
            "mean_first_caustic": labelled("mean_first_caustic", caustic, (), **unit),
        }

    def run(self, progress=None) -> xr.Dataset:
        """Compare rays, wave and sum in every realisation and find the validity range.

        Parameters
        ----------
        progress : callable, optional
            Called with the fraction done, 0 ... 1; it may raise to cancel, which loses what was done.

        Returns
        -------
        Dataset of kind "comparison"
            The comparisons of all realisations, joined along `realisation` (no such dimension without seeds), with the
            variables of `validity_range` and `yardsticks`. Attributes: `study` (JSON, the setup aside), `verdict` (the answer in
            words), `failed` (JSON: what went wrong, by seed), `stopped` (1 after Ctrl-C), `fingerprint`, `threshold`,
            `persistence`, `confidence`.

        Raises
        ------
        InputError, ResourceError
            As from the predictors, if no realisation succeeds.

        Warns
        -----
        BranchlabWarning
            A realisation failed, or Ctrl-C stopped the run; the result holds the others.
        """
        seeds = self.realisations or (None,)
        self._check_memory(len(seeds))
        done: dict = {}
        failed: dict = {}
        first, stopped, told, method = None, False, Progress(progress), None
        waiting = list(seeds)
        for number, seed in enumerate(waiting):
            part = told.part(min(number / len(seeds), 1.0), float(number < len(seeds)) / len(seeds))
            try:
                done[seed] = self.compared(seed, part, sum_method=method)
                if method is None and done[seed].attrs.get("sum_method") == PHASE_SPACE:
                    # one method in all realisations: the parts of a mismatch are averaged over them
                    method = PHASE_SPACE
                    again = [one for one in done if done[one].attrs["sum_method"] == FROZEN]
                    waiting += again
                    done = {one: done[one] for one in done if one not in again}
            except KeyboardInterrupt:
                if not done:
                    raise
                stopped = True
                break
            except Exception as fault:
                if told.cancelled:
                    raise
                failed[seed] = f"{type(fault).__name__}: {fault}"
                first = first or (seed, fault)
        if not done:
            raise first[1]
        done = {seed: done[seed] for seed in seeds if seed in done}
        self._warn(done, failed, stopped, first)
        return self._joined(done, failed, stopped)

    def _warn(self, done, failed, stopped, first) -> None:
        """Say what the result lacks."""
        total = len(self.realisations)
        if failed:
            place = traceback.extract_tb(first[1].__traceback__)[-1]
            warnings.warn(
                f"{len(failed)} of {total} realisations failed; the result holds the others. The first: seed {first[0]}, "
                f"{failed[first[0]]} ({place.name}, line {place.lineno} of {place.filename.rsplit('/', 1)[-1]})",
                BranchlabWarning,
                stacklevel=3,
            )
        if stopped:
            warnings.warn(
                f"stopped after {len(done)} of {total} realisations; the result holds these.",
                BranchlabWarning,
                stacklevel=3,
            )

    def _joined(self, done, failed, stopped) -> xr.Dataset:
        """Join comparisons, given by seed, and find the validity range."""
        if self.realisations:
            seeds = xr.DataArray(
                list(done), dims=REALISATION, name=REALISATION, attrs=labelled(REALISATION, 0, ()).attrs
            )
            result = xr.concat(list(done.values()), dim=seeds, combine_attrs="override", join="exact")
        else:
            (result,) = done.values()
        result.attrs["setup"] = self.setup.to_json()
        found = validity_range(result, threshold=self.threshold)
        words = verdict(result, found)
        if np.isfinite(error := given_up(done.values())):
            result.attrs[WHY] = error
            words += "\n" + reason(error)
        if "paraxial_error" in result:
            words += "\n" + beside(result)
        result = result.assign({name: found[name] for name in found.data_vars if name.startswith(RESULTS)})
        result = result.assign(self.yardsticks())
        fields = self.to_dict()
        del fields["setup"]  # it is an attribute of its own already
        result.attrs |= {name: found.attrs[name] for name in ("threshold", "persistence", "confidence")}
        result.attrs |= {
            "study": json.dumps(fields),
            "fingerprint": self.fingerprint,
            "verdict": words,
            "failed": json.dumps({str(seed): text for seed, text in failed.items()}),
            "stopped": int(stopped),
        }
        return result

    def _check_memory(self, realisations: int) -> None:
        """Refuse a study whose result does not fit, before anything is computed."""
        cells = self.setup.x.size * self.setup.y.size
        solved = self.solved_wavelengths().size
        check_memory(
            8.0 * cells * (2.0 * MAPS * realisations * len(self.wavelengths) + 3.0 * solved),
            f"a study of {realisations} realisations, {len(self.wavelengths)} wavelengths ({solved} with the nodes of the "
            f"bands), {self.setup.x.size} screens and {self.setup.y.size} cells",
            "Use fewer realisations, screens or cells, or several studies.",
        )


def study_of(result: xr.Dataset) -> Study:
    """Return the study that a result of `Study.run` carries.

    Raises
    ------
    InputError
        The result carries none, or one that this version cannot read.
    """
    for name in ("study", "setup"):
        if name not in result.attrs:
            raise InputError(f"this Dataset has no attribute {name!r}: it is not the result of a study.")
    return Study.from_dict({**json.loads(result.attrs["study"]), "setup": json.loads(result.attrs["setup"])})
