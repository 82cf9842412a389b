"""What every medium must do: one function v(x, y) with its own derivatives, and the manners of a value object."""

import gc
import pickle

import attrs
import numpy as np
import pytest

from branchlab.errors import BranchlabWarning, InputError
from branchlab.media import Lens, Medium, RandomMedium, SumMedium
from tests.canon import MEDIA, missing

X = np.array([0.7, 9.3, 4.0, 2.21])  # any coordinates, in any order
Y = np.array([3.1, -6.4, 0.0, 5.55, -0.37])
every = pytest.mark.parametrize("medium", MEDIA, ids=lambda m: f"{type(m).__name__}-{MEDIA.index(m)}")


def fresh(medium):
    """The same medium with nothing computed yet."""
    return Medium.from_json(medium.to_json())


def arguments(medium):
    return {f.alias: getattr(medium, f.name) for f in attrs.fields(type(medium)) if f.init}


@every
def test_rows_have_the_shape_of_the_axes(medium):
    rows = medium.rows(X, Y)
    assert rows.shape == (4, 5)
    assert rows.dtype == np.float64
    assert np.isfinite(rows).all()
    assert medium.rows([1.0], [2.0]).shape == (1, 1)


@every
@pytest.mark.parametrize("orders", [(0, 0), (1, 0), (0, 2), (1, 1)])
def test_a_value_does_not_depend_on_its_neighbours(medium, orders):
    """Round-off of sums in another order: 1e-13 of the largest value."""
    dx, dy = orders
    rows = medium.rows(X, Y, dx=dx, dy=dy)
    single = np.array([[medium.rows([a], [b], dx=dx, dy=dy)[0, 0] for b in Y] for a in X])
    assert np.abs(rows - single).max() <= 1e-13 * max(np.abs(rows).max(), 1e-3)


@every
@pytest.mark.parametrize("orders", [(1, 0), (0, 1), (0, 2), (1, 1), (1, 2)])
def test_derivatives_are_those_of_the_same_function(medium, orders):
    """Fourth-order central differences of the rows one order below; their error is (step/scale)**4."""
    dx, dy = orders
    step = 0.004 * medium.scale
    lower = {"dx": dx, "dy": dy - 1} if dy else {"dx": dx - 1, "dy": dy}

    def shifted(n):
        return medium.rows(X + (0 if dy else n * step), Y + (n * step if dy else 0), **lower)

    differences = (8.0 * (shifted(1) - shifted(-1)) - (shifted(2) - shifted(-2))) / (12.0 * step)
    exact = medium.rows(X, Y, dx=dx, dy=dy)
    natural = np.abs(medium.rows(X, Y)).max() / medium.scale ** (dx + dy)
    assert np.abs(differences - exact).max() <= 3e-7 * natural


@every
def test_periods_are_exact(medium):
    v = medium.rows(X, Y)
    if medium.period_y is not None:
        assert np.allclose(medium.rows(X, Y + medium.period_y), v, rtol=0, atol=1e-12)
        assert np.allclose(medium.rows(X + medium.repeats_after[0], Y), v, rtol=0, atol=1e-12)
    assert min(medium.repeats_after) >= 4.0 * medium.scale


@every
def test_scale_extent_and_mean_are_numbers(medium):
    assert np.isfinite(medium.scale)
    assert medium.scale > 0
    x0, x1, y0, y1 = medium.extent
    assert x0 < x1
    assert y0 < y1
    assert np.isfinite(medium.mean)
    assert medium.mean < 1


@every
def test_scale_resolves_the_medium(medium):
    """A spline on scale/8, as the rays' tables use, gives v to 1e-5 of its range along a line."""
    from scipy.interpolate import make_interp_spline

    step = medium.scale / 8.0
    y = np.arange(-40, 41) * step * min(1.0, 7.0 / (40 * step))
    middle = np.linspace(0.5 * y[0], 0.5 * y[-1], 101)
    line = make_interp_spline(y, medium.rows([4.0], y)[0], k=5)
    exact = medium.rows([4.0], middle)[0]
    assert np.abs(line(middle) - exact).max() <= 1e-5 * max(np.abs(medium.rows([4.0], y)).max(), 1e-3)


@every
def test_json_round_trip(medium):
    again = Medium.from_json(medium.to_json())
    assert again == medium
    assert hash(again) == hash(medium)
    assert np.array_equal(again.rows(X, Y), medium.rows(X, Y))


@every
def test_pickle(medium):
    medium.rows(X, Y)  # what was cached must not travel
    packed = pickle.dumps(medium)
    assert pickle.loads(packed) == medium
    assert len(packed) < 2000 + 40 * sum(a.size for a in arguments(medium).values() if isinstance(a, np.ndarray))


@every
def test_with_makes_a_new_object(medium):
    assert medium.with_() == medium
    assert medium.with_() is not medium
    for other in MEDIA:
        assert (other == medium) == (other is medium)
    with pytest.raises(InputError, match="has no argument 'strangth'"):
        medium.with_(strangth=1.0)


@every
def test_it_is_frozen(medium):
    for name, thing in arguments(medium).items():
        with pytest.raises(attrs.exceptions.FrozenInstanceError):
            setattr(medium, name, thing)
        if isinstance(thing, np.ndarray):
            with pytest.raises(ValueError, match="read-only"):
                thing[0] = 0.0


@every
def test_misspelt_arguments_are_named(medium):
    for name in arguments(medium):
        if len(name) > 3:
            wrong = {**arguments(medium), name[0] + name[2:]: 1}
            with pytest.raises(InputError, match=f"Did you mean '{name}'"):
                type(medium)(**wrong)


@every
def test_reprs_are_short_and_compute_nothing(medium):
    new = fresh(medium)
    before = set(vars(new))
    assert type(medium).__name__ in repr(new)
    assert type(medium).__name__ in new._repr_html_()
    assert len(repr(new)) < 400
    assert set(vars(new)) == before


@every
def test_sample_is_a_labelled_array(medium):
    samples = medium.sample(X, Y, length_unit="mm")
    assert samples.dims == ("x", "y")
    assert samples.attrs["units"] == "1"
    assert samples.x.attrs["units"] == samples.y.attrs["units"] == "mm"
    assert np.array_equal(samples.values, medium.rows(X, Y))
    assert Medium.from_json(samples.attrs["medium"]) == medium


@every
def test_statistics_are_labelled(medium):
    found = medium.statistics(length=5.0, width=8.0)
    assert found.attrs["kind"] == "statistics"
    for name, variable in found.variables.items():
        assert variable.attrs["units"], name
        assert variable.attrs["long_name"], name
    assert float(found.correlation_x[0]) == pytest.approx(1.0)
    assert float(found.largest) >= float(found["mean"])


@every
@pytest.mark.filterwarnings("ignore:.*of the same seed")  # a medium is added to itself
def test_media_add(medium):
    lens = Lens(0.1, 1.0, x=2.0)
    both = medium + lens
    assert isinstance(both, SumMedium)
    assert np.allclose(both.rows(X, Y, dy=1), medium.rows(X, Y, dy=1) + lens.rows(X, Y, dy=1), rtol=1e-14, atol=1e-16)
    assert both.scale == min(medium.scale, 1.0)
    assert both.extent == medium.extent
    assert (medium + lens) + medium == medium + (lens + medium)
    with pytest.raises(TypeError):
        medium + 1.0


def test_a_sum_of_one_seed_is_told():
    with pytest.warns(BranchlabWarning, match="RandomMediums of the same seed, 7: .* fluctuate together"):
        RandomMedium(0.05, 1.0, 7) + RandomMedium(0.05, 2.0, 7)


@every
def test_seeds_belong_to_random_media(medium):
    if "seed" in medium.to_json():
        other = medium.with_seed(1234)
        assert other != medium
        assert other.with_seed(1234) == other
        assert not np.allclose(other.rows(X, Y), medium.rows(X, Y))
    else:
        with pytest.raises(InputError, match="is not random"):
            medium.with_seed(1234)


def test_a_class_without_an_instance_is_noticed():
    class Forgotten(Lens):
        pass

    Forgotten.__module__ = "branchlab.media.forgotten"
    assert missing(Medium, MEDIA) == ["Forgotten"]
    del Forgotten
    gc.collect()
    assert missing(Medium, MEDIA) == []
