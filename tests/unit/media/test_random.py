"""RandomMedium: arguments, cut-off, memory; BumpMedium: arguments; seeds."""

import math

import numpy as np
import pytest

from branchlab.errors import BranchlabWarning, InputError, ResourceError
from branchlab.media import BumpMedium, RandomMedium
from branchlab.media.hashing import check_seed

SLIPS = {
    "strength": (lambda: RandomMedium(-0.1, 1.0, 1), "strength must be positive; got -0.1"),
    "length": (lambda: RandomMedium(0.1, 0.0, 1), "correlation_length must be positive; got 0.0"),
    "text": (lambda: RandomMedium("strong", 1.0, 1), "strength must be a number; got 'strong'"),
    "family": (lambda: RandomMedium(0.1, 1.0, 1, "gausian"), "family 'gausian' is not known.*mean 'gaussian'"),
    "seed": (lambda: RandomMedium(0.1, 1.0, 1.5), "seed must be a whole number of at least 0; got 1.5"),
    "negative seed": (lambda: RandomMedium(0.1, 1.0, -1), "seed must be a whole number of at least 0; got -1"),
    "huge seed": (lambda: RandomMedium(0.1, 1.0, 2**63), r"seed must be below 2\*\*63"),
    "missing": (lambda: RandomMedium(0.1, 1.0), "missing a required argument: 'seed'"),
    "foreign smoothness": (
        lambda: RandomMedium(0.1, 1.0, 1, smoothness=2.5),
        "smoothness belongs to the family 'matern'",
    ),
    "foreign scale": (
        lambda: RandomMedium(0.1, 1.0, 1, inner_scale=0.1),
        "inner_scale belongs to the family 'power-law'",
    ),
    "smoothness": (
        lambda: RandomMedium(0.1, 1.0, 1, "matern", smoothness=99),
        r"smoothness must be in \(0, 30\]; got 99",
    ),
    "exponent": (
        lambda: RandomMedium(0.1, 1.0, 1, "power-law", exponent=0.5),
        r"exponent must be in \[1, 12\]; got 0.5",
    ),
    "inner above outer": (
        lambda: RandomMedium(0.1, 1.0, 1, "power-law", inner_scale=1.2),
        "inner_scale must be below the outer scale, correlation_length = 1; got 1.2",
    ),
    "lost": (lambda: RandomMedium(0.1, 1.0, 1, lost_variance=0.9), r"lost_variance must be in \[1e-16, 0.5\]; got 0.9"),
    "one length": (lambda: RandomMedium(0.1, 1.0, 1, box=64.0), r"box must be two lengths \(Bx, By\); got 64.0"),
    "small box": (lambda: RandomMedium(0.1, 1.0, 1, box=(64.0, 2.0)), r"box\[1\] must be in \[4, inf"),
    "radius": (lambda: BumpMedium(0.1, -1.0, 1.0, 1), "radius must be positive; got -1.0"),
    "density": (lambda: BumpMedium(0.1, 1.0, 0.0, 1), "density must be positive; got 0.0"),
    "sign": (lambda: BumpMedium(0.1, 1.0, 1.0, 1, sign="hill"), "sign 'hill' is not known.*mean 'hills'"),
}


@pytest.mark.parametrize("slip", SLIPS)
def test_slips_are_refused(slip):
    build, words = SLIPS[slip]
    with pytest.raises(InputError, match=words):
        build()


def test_formula_is_printed_with_the_length():
    assert "correlation_length=2 [l of C(r) = exp(-r**2/l**2)]" in repr(RandomMedium(0.1, 2.0, 1))
    html = RandomMedium(0.1, 2.0, 1, "donor-layer")._repr_html_()
    assert "2 [l of C(r) = (1 + r**2/(4 l**2))**(-3/2), donors at the distance l]" in html


def test_seeds_are_told_apart_to_the_last_digit():
    """float64 ends at 2**53: both seeds below would be one."""
    one, other = RandomMedium(0.1, 1.0, 2**60), RandomMedium(0.1, 1.0, 2**60 + 1)
    assert one.seed + 1 == other.seed
    assert one.rows([1.0], [1.0]) != other.rows([1.0], [1.0])
    assert check_seed(np.int64(7)) == check_seed(7.0) == 7


def test_cut_off_follows_the_lost_variance():
    medium = RandomMedium(0.1, 1.0, 1, "donor-layer", lost_variance=1e-6)
    assert medium.spectrum.share_beyond(medium.cut) == pytest.approx(1e-6, rel=1e-9)
    assert medium.scale == pytest.approx(min(12.0 / medium.cut, 1.0))
    assert medium.with_(lost_variance=1e-12).scale < medium.scale
    assert RandomMedium(0.1, 1.0, 1, lost_variance=0.3).scale == 1.0  # not above the correlation length


def test_lost_variance_is_missing_from_the_field():
    """Ensemble rms with 10 % left out: strength sqrt(0.9), within 4 standard errors of 60 realisations."""
    squares = [RandomMedium(0.1, 1.0, seed, lost_variance=0.1, box=(24, 24)).realised_rms ** 2 for seed in range(60)]
    assert np.mean(squares) == pytest.approx(0.009, abs=4 * np.std(squares) / math.sqrt(60))


def test_a_table_that_does_not_fit_is_refused(monkeypatch):
    monkeypatch.setattr("branchlab.errors.available_memory", lambda: 2**20)
    with pytest.raises(ResourceError, match=r"table of 489 x 123 modes needs about .* larger lost_variance"):
        RandomMedium(0.1, 1.0, 1).rows([0.0], [0.0])


def test_many_rows_are_made_in_blocks():
    medium = RandomMedium(0.1, 1.0, 1, box=(24, 24))
    x = np.linspace(0.0, 24.0, 1201)
    assert np.abs(medium.rows(x, [0.3])[600:] - medium.rows(x[600:], [0.3])).max() < 1e-14


def test_warning_points_at_the_line_that_made_the_medium():
    with pytest.warns(BranchlabWarning, match=r"caustics depend on the shortest structure kept \(0.131\)") as caught:
        RandomMedium(0.1, 1.0, 1, "exponential")
    assert caught[0].filename == __file__


def test_bumps_of_any_density():
    """Dense bumps tend to a Gaussian medium (skewness falls as density**(-1/2)); sparse ones leave v at its floor."""
    dense, sparse = BumpMedium(0.1, 1.0, 60.0, 1), BumpMedium(0.1, 1.0, 0.002, 1)
    assert dense.skewness == pytest.approx(BumpMedium(0.1, 1.0, 0.6, 1).skewness / 10.0)
    axis = np.arange(0.0, 12.0, 0.5)
    assert dense.rows(axis, axis).std() == pytest.approx(0.1, rel=0.2)
    floor = -sparse.height * sparse.density * math.pi
    far = sparse.rows(np.arange(0.0, 60.0, 2.0), np.arange(0.0, 60.0, 2.0))
    assert np.median(far) == pytest.approx(floor, rel=1e-3)
    assert far.min() >= floor * (1 + 1e-12)


def test_bumps_against_a_plain_sum(rng):
    """Value at scattered points from every bump one by one."""
    medium = BumpMedium(0.1, 0.7, 0.8, 9, sign="wells")
    at_x, at_y = medium._centres(-10.0, 15.0, -12.0, 12.0)
    for x, y in rng.uniform(-2.0, 6.0, (5, 2)):
        plain = medium.height * (np.exp(-((x - at_x) ** 2 + (y - at_y) ** 2) / 0.49).sum() - 0.8 * math.pi * 0.49)
        assert medium.rows([x], [y])[0, 0] == pytest.approx(plain, abs=1e-14)


@pytest.mark.parametrize(("dx", "dy"), [(0, 0), (1, 0), (0, 1), (0, 2)])
@pytest.mark.parametrize("periods", [1, 3])
def test_transforms_of_whole_periods_are_the_mode_sum(periods, dx, dy):
    """On whole periods a row is one Fourier transform; in another order of y it is summed mode by mode."""
    medium = RandomMedium(0.1, 1.0, 5, box=(12.0, 8.0))
    x, y = np.linspace(0.0, 5.0, 7), -3.7 + np.arange(360) * (8.0 * periods / 360)
    assert medium._whole_periods(y) == periods
    assert medium._whole_periods(y[::-1]) == 0
    summed = medium.rows(x, y[::-1], dx=dx, dy=dy)[:, ::-1]
    rms = np.sqrt((summed**2).mean())
    assert np.abs(medium.rows(x, y, dx=dx, dy=dy) - summed).max() < 1e-13 * rms


def test_grids_that_are_not_whole_periods_are_summed():
    medium = RandomMedium(0.1, 1.0, 5, box=(12.0, 8.0))
    y = np.arange(360) * (8.0 / 360)
    assert medium._whole_periods(y) == 1
    assert medium._whole_periods(y * (1 + 1e-12)) == 0
    assert medium._whole_periods(y[:-1]) == 0
    assert medium._whole_periods(y[::18]) == 0  # 20 points do not hold the modes
    assert medium._whole_periods(y[:1]) == 0
