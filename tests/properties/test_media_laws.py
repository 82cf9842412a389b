"""Laws that hold for every medium of a kind, over many drawn at random."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from branchlab.media import BumpMedium, Duct, Lens, Medium, Ramp, RandomMedium, SampledMedium

quick = settings(max_examples=40, deadline=None, derandomize=True)
seeds = st.integers(0, 2**63 - 1)
strengths = st.floats(1e-3, 0.3)
lengths = st.floats(0.2, 5.0)
X = np.array([0.3, 2.9, 1.1])
Y = np.array([-1.7, 0.0, 0.4, 2.2])


@st.composite
def random_media(draw):
    length = draw(lengths)
    common = (draw(strengths), length, draw(seeds))
    box = (8.0 * length, 8.0 * length)
    family = draw(st.sampled_from(["gaussian", "matern", "power-law", "donor-layer"]))
    options = {
        "matern": {"smoothness": draw(st.floats(1.6, 30.0)), "lost_variance": 1e-4},
        "power-law": {"exponent": draw(st.floats(1.0, 12.0)), "inner_scale": length * draw(st.floats(0.2, 0.9))},
    }
    return RandomMedium(*common, family, box=box, **options.get(family, {}))


bumps = st.builds(BumpMedium, strengths, lengths, st.floats(0.01, 2.0), seeds, sign=st.sampled_from(["hills", "wells"]))
plain = st.one_of(
    st.builds(Duct, st.floats(0.01, 0.3), y=st.floats(-2, 2), profile=st.sampled_from(["parabolic", "sech"])),
    st.builds(Lens, st.floats(-0.9, 3.0), lengths, x=st.floats(-3, 3), y=st.floats(-3, 3)),
    st.builds(Ramp, slope_x=st.floats(0.001, 0.1), slope_y=st.floats(-0.1, 0.1)),
)
media = st.one_of(random_media(), bumps, plain)


@quick
@given(media)
def test_json_keeps_every_bit(medium):
    again = Medium.from_json(medium.to_json())
    assert again == medium
    assert np.array_equal(again.rows(X, Y), medium.rows(X, Y))


@quick
@given(random_media(), st.floats(0.1, 10.0))
def test_strength_is_a_factor(medium, factor):
    stronger = medium.with_(strength=factor * medium.strength)
    assert np.allclose(stronger.rows(X, Y), factor * medium.rows(X, Y), rtol=1e-12, atol=1e-14)


@quick
@given(random_media(), st.floats(0.1, 10.0))
def test_lengths_scale_together(medium, factor):
    """A medium stretched with its box is the same medium, seen from farther; its slope falls as 1/factor."""
    options = {"correlation_length": factor * medium.correlation_length, "box": tuple(factor * b for b in medium.box)}
    if medium.inner_scale is not None:
        options["inner_scale"] = factor * medium.inner_scale
    stretched = medium.with_(**options)
    # a mode at the very edge of the cut-off may fall on either side of it by round-off: 1e-6 of the strength
    for order in (0, 1):
        change = stretched.rows(factor * X, factor * Y, dy=order) * factor**order - medium.rows(X, Y, dy=order)
        assert np.abs(change).max() <= 3e-3 * medium.strength / medium.scale**order
    assert np.isclose(stretched.scale, factor * medium.scale)


@pytest.mark.filterwarnings("ignore:.*of the same seed")
@quick
@given(media, media, media)
def test_sums_are_associative_and_add_values(a, b, c):
    assert (a + b) + c == a + (b + c)
    whole = ((a + b) + c).rows(X, Y, dx=1)
    assert np.allclose(whole, a.rows(X, Y, dx=1) + b.rows(X, Y, dx=1) + c.rows(X, Y, dx=1), rtol=1e-12, atol=1e-14)
    assert (a + b).scale == (b + a).scale == min(a.scale, b.scale)


@quick
@given(st.one_of(random_media(), bumps), seeds)
def test_other_seeds_are_other_media(medium, seed):
    other = medium.with_seed(seed)
    assert (other == medium) == (seed == medium.seed)
    if isinstance(medium, RandomMedium):  # sparse bumps may leave all these points bare
        assert np.array_equal(other.rows(X, Y), medium.rows(X, Y)) == (seed == medium.seed)


@quick
@given(
    st.integers(6, 14),
    st.integers(6, 14),
    seeds,
    st.sampled_from(["v", "index", "speed", "depth"]),
    st.floats(0.5, 2.0),
)
def test_sampled_media_pass_through_their_samples(nx, ny, seed, kind, reference):
    values = np.random.default_rng(seed).uniform(0.6, 0.9, (nx, ny))
    x, y = np.linspace(0.0, 3.0, nx), np.linspace(-1.0, 2.0, ny)
    medium = SampledMedium(values, x, y, kind, None if kind == "v" else reference)
    ratio = values / reference
    expected = {"v": values, "index": 1 - ratio**2, "speed": 1 - ratio**-2.0, "depth": 1 - 1 / ratio}[kind]
    assert np.allclose(medium.rows(x, y), expected, rtol=0, atol=1e-11)
    assert medium.v.max() < 1
    assert SampledMedium.from_dataarray(medium.sample(x, y), "v").mean == medium.rows(x, y).mean()
