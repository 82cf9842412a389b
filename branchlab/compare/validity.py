"""The validity range: the distance out to which rays misplace no more than a stated part of the flux."""

import numpy as np
import xarray as xr
from scipy import stats

from branchlab.conventions import REALISATION, WAVELENGTH, X
from branchlab.errors import InputError, check_integer, check_number, check_positive
from branchlab.results import check, dataset, setup_of


def first_crossing(curves: np.ndarray, x: np.ndarray, threshold: float, persistence: float):
    """Return where curves first go above a threshold and stay there.

    Between screens the curves are straight lines. A run above the threshold counts if it is at least
    `persistence` long, or lasts to the end of x: nothing is known beyond.

    Parameters
    ----------
    curves : ndarray, shape (..., x)
    x : ndarray, shape (x,)
        Rising.
    threshold, persistence : float

    Returns
    -------
    place : ndarray, shape (...)
        inf where no run counts.

    Examples
    --------
    >>> float(first_crossing(np.array([0.0, 0.1, 0.3, 0.4]), np.arange(4.0), 0.2, 1.0))
    1.5
    """
    above = curves > threshold
    start = np.full(curves.shape, np.inf)
    start[..., 0] = np.where(above[..., 0], x[0], np.inf)
    low, high = curves[..., :-1], curves[..., 1:]
    changed = above[..., :-1] != above[..., 1:]
    share = np.divide(threshold - low, high - low, out=np.zeros(low.shape), where=changed)
    place = x[:-1] + share * np.diff(x)
    start[..., 1:] = np.where(changed & above[..., 1:], place, np.inf)
    end = np.full(curves.shape[:-1], np.inf)
    first = np.full(curves.shape[:-1], np.inf)
    for i in range(x.size - 1, -1, -1):
        if i < x.size - 1:
            end = np.where(changed[..., i] & above[..., i], place[..., i], end)
        begins = np.isfinite(start[..., i])
        lasts = np.subtract(end, start[..., i], out=np.zeros(end.shape), where=begins) >= persistence
        first = np.where(begins & lasts, start[..., i], first)
    return first


def _persistence(result: xr.Dataset) -> float:
    """Return the medium's scale from the setup that the result carries."""
    try:
        return float(setup_of(result).medium.scale)
    except InputError as fault:
        raise InputError(
            f"the default of persistence is the medium's scale, and no setup can be read: {fault} "
            "Use persistence=..., a length such as the correlation length."
        ) from None


def _interval(misplaced, error, x, threshold, persistence, confidence, resamples, seed):
    """Return the ends of the bootstrap interval of the reach, shape (wavelength,) each; nan for one realisation.

    Realisations are drawn with replacement, the same draws for every wavelength. Quantiles are those of the
    expanded percentile interval, at Phi(-sqrt(n/(n-1)) t), which corrects the shortness of the plain one for
    few realisations (Hesterberg, The American Statistician 69 (2015) 371, section 3). The numerical error
    widens the interval: its lower end is of the curve plus error, the upper of the curve minus error.
    """
    n = misplaced.shape[0]
    if n == 1:
        return np.full(misplaced.shape[1], np.nan), np.full(misplaced.shape[1], np.nan)
    generator = np.random.default_rng(seed)
    weights = generator.multinomial(n, np.full(n, 1.0 / n), size=resamples) / n
    tail = stats.norm.cdf(-np.sqrt(n / (n - 1)) * stats.t.ppf(0.5 + 0.5 * confidence, n - 1))
    ends = []
    for sign, quantile, method in ((1.0, tail, "lower"), (-1.0, 1.0 - tail, "higher")):
        curves = np.einsum("rn,nwx->rwx", weights, misplaced + sign * error)
        places = first_crossing(curves, x, threshold, persistence)
        ends.append(np.quantile(places, quantile, axis=0, method=method))  # no mean of a number and inf
    return ends


def validity_range(
    result: xr.Dataset,
    *,
    threshold: float = 0.15,
    persistence: float | None = None,
    confidence: float = 0.95,
    resamples: int = 1000,
    seed: int = 0,
) -> xr.Dataset:
    """Return how far rays may stand in for the wave: the first x beyond which too much flux is misplaced.

    The misplaced flux, averaged over realisations, is followed along x to the place where it goes above the
    threshold and stays there for the persistence (or to the end of the window).

    Parameters
    ----------
    result : Dataset
        Of kind "comparison"; several realisations joined along `realisation` give a confidence interval.
    threshold : float
        Largest part of the flux that may be misplaced, between 0 and 1.
    persistence : float, optional
        Length for which the misplaced flux must stay above the threshold. Default: the scale (correlation
        length) of the medium.
    confidence : float
        Of the interval, between 0 and 1.
    resamples : int
        Bootstrap resamples of the realisations, at least 100.
    seed : int
        Of the resampling.

    Returns
    -------
    Dataset of kind "validity", dimension wavelength
        - `reach`: the range; the end of the window if the threshold is never crossed (then it is open-ended);
          nan if it is not decided.
        - `reach_low`, `reach_high`: confidence interval, which also holds the numerical error; inf: open-ended; nan
          for one realisation.
        - `crossed`: the threshold is crossed inside the window.
        - `decided`: false if the numerical error reaches the threshold before the range (plus persistence) ends.
        - `reach_band` and so on for the average over the band, if the comparison has one.

    Raises
    ------
    InputError
        A mixed pair (paraxial with full): its mismatch measures the paraxial approximation. Numbers outside
        their limits. A screen without flux.

    Notes
    -----
    Realisations must be independent. With fewer than about 6 the interval is rough.
    """
    check(result, "comparison")
    if result.attrs.get("pair") != "matched":
        raise InputError(
            f"this is a mixed pair, {result.attrs['model']} rays with a {result.attrs.get('wave_model')} wave: its "
            "mismatch measures the paraxial approximation, not how far rays may stand in for the wave. Compare "
            "each wave with its own rays."
        )
    threshold = check_number("threshold", threshold, low=0.0, high=1.0, open_low=True, open_high=True)
    confidence = check_number("confidence", confidence, low=0.0, high=1.0, open_low=True, open_high=True)
    resamples = check_integer("resamples", resamples, low=100)
    seed = check_integer("seed", seed, low=0)
    persistence = _persistence(result) if persistence is None else check_positive("persistence", persistence)
    x = np.asarray(result[X].values, dtype=np.float64)
    found = {}
    for ending in ("", "_band"):
        if "misplaced_flux" + ending not in result:
            continue
        misplaced = _curves(result, "misplaced_flux" + ending)
        error = _curves(result, "numerical_error" + ending)
        if np.isnan(misplaced).any():
            at = np.argwhere(np.isnan(misplaced))[0]
            raise InputError(
                f"a side carries no flux on the screen x = {x[at[2]]:g}, so nothing can be compared there. Cut the "
                f"result with .sel(x=slice(None, {x[max(at[2] - 1, 0)]:g}))."
            )
        place = first_crossing(misplaced.mean(axis=0), x, threshold, persistence)
        crossed = np.isfinite(place)
        reach = np.where(crossed, place, x[-1])
        needed = x <= (reach + persistence)[:, None]
        decided = ((error.mean(axis=0) < threshold) | ~needed).all(axis=-1)
        low, high = _interval(misplaced, error, x, threshold, persistence, confidence, resamples, seed)
        name = "reach" + ending
        for key, values in ((name, reach), (name + "_low", low), (name + "_high", high)):
            found[key] = ((WAVELENGTH,), np.where(decided, values, np.nan))
        found["crossed" + ending] = ((WAVELENGTH,), crossed & decided)
        found["decided" + ending] = ((WAVELENGTH,), decided)
    kept = ("model", "sides", "length_unit", "setup", "versions", "resolution", "pair", "wave_model", "bands")
    attrs = {name: result.attrs[name] for name in kept if name in result.attrs}
    attrs |= {"threshold": threshold, "persistence": persistence, "confidence": confidence}
    attrs |= {"resamples": resamples, "seed": seed, "realisations": int(misplaced.shape[0])}
    return dataset("validity", found, {WAVELENGTH: ((WAVELENGTH,), result[WAVELENGTH].values)}, attrs)


def _curves(result: xr.Dataset, name: str) -> np.ndarray:
    """Return a variable over (realisation, wavelength, x), with one realisation if the result has no more."""
    variable = result[name]
    if REALISATION not in variable.dims:
        variable = variable.expand_dims(REALISATION)
    return np.asarray(variable.transpose(REALISATION, WAVELENGTH, X).values, dtype=np.float64)
