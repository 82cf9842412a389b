"""The validity range: crossings of known curves, and whether its interval covers the truth as often as it says."""

import numpy as np
import pytest
import xarray as xr
from scipy import stats

from branchlab.compare import validity_range
from branchlab.compare.validity import first_crossing
from branchlab.errors import InputError
from branchlab.launch import PlaneWave, Setup
from branchlab.results import check
from tests.unit.compare import made

X = np.linspace(0.0, 20.0, 41)


def one(curve, **options):
    """The validity range of one realisation with this curve."""
    names = {key: options.pop(key) for key in ("error", "band", "of") if key in options}
    return validity_range(made.comparison(X, [curve], **names), **options)


def test_straight_line():
    """m = 0.02 x crosses 0.15 at 7.5, between two screens."""
    result = one(0.02 * X + 1e-4 * np.sin(2 * np.pi * X / 0.5))
    check(result, "validity")
    assert float(result["reach"][0]) == pytest.approx(7.5, abs=1e-12)
    assert result["crossed"].all()
    assert result["decided"].all()
    assert np.isnan(result["reach_low"]).all()  # one realisation
    assert result.attrs["persistence"] == 1.0  # the correlation length of the medium in the setup


def test_never_crossed_is_open_ended():
    result = one(0.1 * np.sin(X) ** 2)
    assert not result["crossed"].any()
    assert float(result["reach"][0]) == 20.0


def test_a_short_excursion_does_not_end_the_range():
    """Above from 4.25 to 4.75 (length 0.5) and from 10.25 on: the range ends at the first that lasts."""
    curve = np.where(X == 4.5, 0.2, np.where(X >= 10.5, 0.2, 0.1))
    assert float(one(curve, persistence=0.6)["reach"][0]) == pytest.approx(10.25)
    assert float(one(curve, persistence=0.5)["reach"][0]) == pytest.approx(4.25)


def test_above_at_the_end_counts():
    """Nothing is known beyond the window, so a curve that ends above is not called good to the end."""
    curve = np.where(X > 19.6, 0.2, 0.1)
    result = one(curve, persistence=5.0)
    assert float(result["reach"][0]) == pytest.approx(19.75)
    assert result["crossed"].all()


def test_above_from_the_entry():
    assert float(one(0.3 + 0.0 * X)["reach"][0]) == 0.0


def test_numerical_error_above_the_threshold_decides_nothing():
    curve = 0.02 * X
    late = np.where(X > 12.0, 0.2, 0.001)
    assert one(curve, error=late)["decided"].all()  # beyond the range and its persistence it does no harm
    early = np.where(X > 8.0, 0.2, 0.001)
    result = one(curve, error=early)
    assert not result["decided"].any()
    assert np.isnan(result["reach"]).all()
    assert not result["crossed"].any()
    unknown = one(curve, error=np.full(X.size, np.nan))
    assert not unknown["decided"].any()


def test_band_has_its_own_range():
    result = one(0.02 * X, band=0.01 * X)
    assert float(result["reach_band"][0]) == pytest.approx(15.0)
    assert result["crossed_band"].all()


def test_first_crossing_by_a_slow_twin(rng):
    """Random walks against a search of the straight lines on a grid 200 times finer."""
    curves = 0.15 + np.cumsum(rng.normal(size=(200, X.size)), axis=1) * 0.02
    found = first_crossing(curves, X, 0.15, 1.3)
    fine = np.linspace(X[0], X[-1], 200 * (X.size - 1) + 1)
    step = fine[1] - fine[0]
    for curve, place in zip(curves, found, strict=True):
        above = np.interp(fine, X, curve) > 0.15
        slow, begin = np.inf, None
        for i, up in enumerate(above):
            if up and begin is None:
                begin = i
            if begin is not None and (not up or i == above.size - 1):
                if up or fine[i] - fine[begin] >= 1.3 - 2 * step:
                    slow = fine[begin]
                    break
                begin = None
        if (
            slow != place and not abs(min(slow, 99.0) - min(place, 99.0)) <= 2 * step
        ):  # a run within two fine steps of the persistence may go either way
            runs = first_crossing(curve, X, 0.15, 1.3 - 4 * step), first_crossing(curve, X, 0.15, 1.3 + 4 * step)
            assert runs[0] != runs[1]


@pytest.mark.parametrize(("count", "law"), [(6, "normal"), (12, "normal"), (24, "lognormal")])
def test_interval_covers_the_truth_as_often_as_it_says(count, law):
    """Curves m_i = a_i x with mean a = 0.02: the true range is 7.5. 400 data sets, confidence 90 %.

    Statistical: the coverage found scatters by sqrt(0.9 0.1/400) = 1.5 %; 4 of these are allowed below (the seeds
    are fixed). A skew law is allowed 3 % more: a quantile interval of the mean does not know the skewness.
    """
    rng = np.random.default_rng(5)
    covered = []
    for _ in range(400):
        if law == "normal":
            slope = 0.02 + 0.004 * rng.normal(size=count)
        else:
            slope = 0.02 * rng.lognormal(-0.5 * 0.4**2, 0.4, size=count)
        result = validity_range(SMALL(slope), confidence=0.9, resamples=400, persistence=1.0)
        covered.append(float(result["reach_low"][0]) <= 7.5 <= float(result["reach_high"][0]))
    allowed = 0.06 + (0.03 if law == "lognormal" else 0.0)
    assert abs(np.mean(covered) - 0.9) <= allowed


def SMALL(slope):  # noqa: N802 - built 1200 times: as few cells as a setup allows
    return made.comparison(X, slope[:, None] * X, of=COARSE)


COARSE = Setup(made.MEDIUM, PlaneWave(), 20.0, 16.0, cells=8)


def test_interval_of_a_straight_line_is_that_of_the_mean():
    """For m = a x the range is 0.15/mean(a); its interval is close to Student's t interval of the mean."""
    slope = 0.02 + 0.003 * np.random.default_rng(3).normal(size=20)
    result = validity_range(SMALL(slope), resamples=4000)
    half = stats.t.ppf(0.975, 19) * slope.std(ddof=1) / np.sqrt(20)
    low, high = 0.15 / (slope.mean() + half), 0.15 / (slope.mean() - half)
    assert float(result["reach_low"][0]) == pytest.approx(low, abs=0.15 * (high - low))
    assert float(result["reach_high"][0]) == pytest.approx(high, abs=0.15 * (high - low))


def test_numerical_error_widens_the_interval():
    slope = 0.02 + 0.003 * np.random.default_rng(3).normal(size=8)
    sharp = validity_range(made.comparison(X, slope[:, None] * X, of=COARSE))
    vague = validity_range(made.comparison(X, slope[:, None] * X, of=COARSE, error=0.02))
    assert float(vague["reach_low"][0]) < float(sharp["reach_low"][0]) - 0.5
    assert float(vague["reach_high"][0]) > float(sharp["reach_high"][0]) + 0.5


def test_interval_that_is_open_above():
    slope = np.array([0.002, 0.004, 0.02, 0.012, 0.006, 0.012])
    result = validity_range(SMALL(slope))
    assert np.isinf(result["reach_high"]).all()
    assert np.isfinite(result["reach_low"]).all()


def test_same_seed_same_interval():
    slope = 0.02 + 0.003 * np.random.default_rng(3).normal(size=8)
    a, b, c = (validity_range(SMALL(slope), seed=seed) for seed in (1, 1, 2))
    xr.testing.assert_identical(a, b)
    assert float(a["reach_low"][0]) != float(c["reach_low"][0])
    assert a.attrs["realisations"] == 8


@pytest.mark.parametrize(
    ("options", "text"),
    [
        ({"threshold": -0.1}, r"threshold must be in \(0, 1\); got -0.1"),
        ({"threshold": 1.5}, "threshold"),
        ({"persistence": 0.0}, "persistence must be positive"),
        ({"confidence": 95}, r"confidence must be in \(0, 1\); got 95"),
        ({"resamples": 10}, "at least 100"),
        ({"seed": -1}, "at least 0"),
        ({"seed": 1.5}, "whole number"),
    ],
)
def test_refused_numbers(options, text):
    with pytest.raises(InputError, match=text):
        one(0.02 * X, **options)


def test_refused_results():
    result = made.comparison(X, [0.02 * X])
    with pytest.raises(InputError, match="mixed pair, paraxial rays with a full wave"):
        validity_range(result.assign_attrs(pair="mixed", wave_model="full"))
    with pytest.raises(InputError, match="not a result of kind 'comparison'"):
        validity_range(made.rays(made.setup(), 1.0))
    dark = result.copy(deep=True)
    dark["misplaced_flux"][0, 0, 30:] = np.nan
    with pytest.raises(InputError, match=r"no flux on the screen x = 15.*slice\(None, 14.5\)"):
        validity_range(dark)
    with pytest.raises(InputError, match="Use persistence="):
        validity_range(result.assign_attrs(setup='{"kind": "Unknown"}'))
    validity_range(result.assign_attrs(setup='{"kind": "Unknown"}'), persistence=1.0)
