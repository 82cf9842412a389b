"""medium.statistics: estimators on media whose statistics are known."""

import math

import numpy as np
import pytest

from branchlab.conventions import MEAN_FIRST_CAUSTIC
from branchlab.media import BumpMedium, Duct, Lens, RandomMedium, SampledMedium

MEASURED = ("rms", "angle_diffusion", "curvature_noise")


@pytest.mark.parametrize(
    "medium",
    [
        RandomMedium(0.08, 1.0, 7),
        RandomMedium(0.08, 0.5, 8, "donor-layer"),
        BumpMedium(0.05, 1.0, 0.4, 3),
        RandomMedium(0.05, 1.0, 9) + RandomMedium(0.03, 1.5, 10),
    ],
    ids=["gaussian", "donor-layer", "bumps", "sum"],
)
def test_measured_is_what_was_requested(medium):
    """Within 4 sampling errors as told (of 8 stretches: they are known to a quarter), and those are small."""
    found = medium.statistics()
    for name in MEASURED:
        error = float(found[f"{name}_error"])
        requested = float(found[f"requested_{name}"])
        assert abs(float(found[name]) - requested) < 4.0 * error, name
        assert error < 0.15 * requested, name
    for axis in "xy":
        assert float(found[f"correlation_length_{axis}"]) == pytest.approx(
            float(found.requested_correlation_length), rel=0.1
        )
        assert np.abs(found[f"correlation_{axis}"] - found.requested_correlation).max() < 0.2
    assert float(found.skewness) == pytest.approx(float(found.requested_skewness), abs=4 * float(found.skewness_error))


def test_sampling_errors_are_honest():
    """Over 30 seeds (measured - requested)/error has a spread near 1 (t of 7 degrees of freedom: 1.18)."""
    scores = {name: [] for name in MEASURED}
    for seed in range(30):
        found = RandomMedium(0.08, 1.0, seed, box=(64.0, 32.0)).statistics()
        for name in MEASURED:
            scores[name].append(float((found[name] - found[f"requested_{name}"]) / found[f"{name}_error"]))
    for name, values in scores.items():
        assert 0.7 < np.std(values) < 1.8, name
        assert abs(np.mean(values)) < 4.0 * 1.4 / math.sqrt(30), name


def test_numbers_hang_together():
    found = RandomMedium(0.08, 1.0, 7).statistics()
    assert float(found.realised_rms) == pytest.approx(float(found.rms), rel=1e-9)
    assert float(found.requested_mean_first_caustic) == pytest.approx(2.395 * 0.08 ** (-2 / 3), rel=3e-4)
    assert float(found.caustic_scale) == pytest.approx(float(found.curvature_noise) ** (-1 / 3))
    assert float(found.mean_first_caustic) == pytest.approx(MEAN_FIRST_CAUSTIC * float(found.caustic_scale))
    assert float(found.requested_correlation_length) == pytest.approx(1.0, rel=1e-12)
    assert float(found.requested_correlation.interp(lag=1.0)) == pytest.approx(math.exp(-1), abs=1e-3)


def test_no_ray_limit_shows():
    with pytest.warns(UserWarning, match="no limit"):
        medium = RandomMedium(0.08, 1.0, 7, "exponential", box=(16.0, 16.0), lost_variance=0.1)
    found = medium.statistics()
    assert math.isinf(found.requested_curvature_noise)
    assert float(found.requested_caustic_scale) == 0.0
    assert float(found.requested_rms) == pytest.approx(0.08 * math.sqrt(0.9))


def test_what_a_window_does_not_tell_is_nan():
    found = Duct(0.1, half_aperture=3.0).statistics(length=40.0, width=12.0)
    assert math.isnan(found.correlation_length_x)
    assert math.isnan(found.curvature_noise)
    assert math.isnan(found.rms_error)
    assert "requested_rms" not in found
    assert math.isnan(RandomMedium(0.08, 1.0, 7).statistics(length=6.0, width=20.0).angle_diffusion_error)


def test_a_mixed_sum_has_nothing_requested():
    found = (RandomMedium(0.05, 1.0, 9) + Lens(0.1, 1.0, x=3.0)).statistics(length=20.0, width=20.0)
    assert "requested_rms" not in found
    assert float(found.rms) > 0


def test_a_constant_medium():
    axis = np.linspace(0.0, 5.0, 11)
    found = SampledMedium(np.full((11, 11), 0.1), axis, axis - 2.5, length_unit="mm").statistics()
    assert float(found["mean"]) == pytest.approx(0.1)
    assert float(found.rms) < 1e-15
    assert found.curvature_noise.attrs["units"] == "mm-3"


def test_period_of_a_wave():
    """v = a cos(q y): correlation along y is cos(q lag), 1/e at arccos(1/e)/q; kurtosis 3/2."""
    y = np.linspace(-30.0, 30.0, 601)
    wave = SampledMedium(0.05 * np.tile(np.cos(2.0 * y), (41, 1)), np.linspace(0.0, 60.0, 41), y)
    found = wave.statistics()
    assert float(found.correlation_length_y) == pytest.approx(math.acos(math.exp(-1)) / 2.0, rel=0.03)
    assert float(found.kurtosis) == pytest.approx(1.5, rel=0.02)
