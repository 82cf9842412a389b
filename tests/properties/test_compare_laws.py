"""Laws that hold for all intensities: distance axioms, bounds, scaling, rolling, attribution that adds up."""

import numpy as np
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays

from branchlab.compare import compare, correlation, displacement, misplaced_flux
from branchlab.launch.band import Band
from tests.unit.compare import made

CELLS = 32
Y = (np.arange(CELLS) + 0.5) * (4.0 / CELLS)
OF = made.setup(length=2.0, width=16.0, screens=2, cells=CELLS)
BAND = Band(0.1, 0.4, nodes=3)

sides = st.sampled_from(["periodic", "absorbing"])
resolutions = st.one_of(st.none(), st.floats(4.0 / CELLS, 1.0))
values = st.floats(0.0, 1e6, allow_subnormal=False).map(lambda v: 0.0 if v < 1e-6 else v)


def screens(count=1):
    """Intensities that carry some flux."""
    rows = arrays.arrays(np.float64, (count, CELLS), elements=values)
    return rows.map(lambda a: a + (a.sum(axis=1, keepdims=True) == 0))


def over_y(row):
    return xr.DataArray(row, {"y": Y}, dims="y")


quick = settings(max_examples=60, deadline=None, derandomize=True)


@quick
@given(screens(3), sides, resolutions)
def test_distances(rows, side, resolution):
    """Zero for equals, symmetric, triangle inequality; misplaced flux within 0 ... 1, displacement within the width."""
    a, b, c = (over_y(row) for row in rows)
    for measure, largest in ((misplaced_flux, 1.0), (displacement, 4.0)):

        def between(first, second, measure=measure):
            return float(measure(first, second, resolution=resolution, sides=side))

        assert between(a, a) == 0.0
        assert abs(between(a, b) - between(b, a)) <= 1e-12 * largest
        assert 0.0 <= between(a, b) <= largest * (1 + 1e-12)
        assert between(a, c) <= between(a, b) + between(b, c) + 1e-12 * largest


@quick
@given(screens(2), sides, resolutions, st.floats(1e-3, 1e3))
def test_a_common_or_single_factor_changes_nothing(rows, side, resolution, factor):
    a, b = (over_y(row) for row in rows)
    for measure in (misplaced_flux, displacement, correlation):
        first = measure(a, b, resolution=resolution, sides=side)
        for pair in ((factor * a, factor * b), (a, factor * b)):
            other = measure(*pair, resolution=resolution, sides=side)
            np.testing.assert_allclose(other, first, rtol=1e-8, atol=1e-10)


@quick
@given(screens(2), resolutions, st.integers(0, CELLS - 1))
def test_rolling_both_along_a_periodic_side_changes_nothing(rows, resolution, shift):
    for measure in (misplaced_flux, displacement, correlation):
        here = measure(*(over_y(row) for row in rows), resolution=resolution)
        there = measure(*(over_y(np.roll(row, shift)) for row in rows), resolution=resolution)
        np.testing.assert_allclose(there, here, rtol=1e-8, atol=1e-10)


@quick
@given(screens(2), st.floats(4.0 / CELLS, 1.0))
def test_smoothing_never_misplaces_more(rows, resolution):
    """Periodic smoothing mixes shifted copies of both, so it cannot raise a distance that obeys the triangle law."""
    a, b = (over_y(row) for row in rows)
    for measure in (misplaced_flux, displacement):
        assert float(measure(a, b, resolution=resolution)) <= float(measure(a, b)) + 1e-12


@quick
@given(screens(2), sides, resolutions)
def test_correlation_is_symmetric_and_bounded(rows, side, resolution):
    a, b = (over_y(row) for row in rows)
    found = float(correlation(a, b, resolution=resolution, sides=side))
    assert np.isnan(found) or abs(found) <= 1 + 1e-12
    np.testing.assert_allclose(correlation(b, a, resolution=resolution, sides=side), found, atol=1e-12)


@quick
@given(screens(2), screens(6), screens(6), sides, st.booleans())
def test_attribution_adds_up(ray_rows, wave_rows, sum_rows, side, with_band):
    of = OF.with_(sides=side)
    nodes = BAND.wavelengths()
    result = compare(
        made.rays(of, ray_rows),
        made.wave(of, nodes, wave_rows.reshape(3, 2, CELLS)),
        made.total(of, nodes, sum_rows.reshape(3, 2, CELLS)),
        resolution=1.0,
        band=BAND if with_band else None,
    )
    maps = ["removable", "caustic_part", "diffraction"] if with_band else ["interference", "diffraction"]
    names = [name.removesuffix("_part") for name in maps]
    largest = max(float(abs(result[name]).max()) for name in (*maps, "intensity_ray", "intensity_wave"))
    np.testing.assert_allclose(sum(result[name] for name in maps), result["mismatch"], atol=1e-13 * largest)
    portions = sum(result[f"misplaced_{name}"] for name in names)
    np.testing.assert_allclose(portions, result["misplaced_flux"], atol=1e-12)
    shares = sum(result[f"share_{name}"] for name in names)
    assert (shares >= result["misplaced_flux"] - 1e-12).all()  # triangle inequality
    for name in ("misplaced_flux", *(f"share_{name}" for name in names)):
        assert ((result[name] >= 0) & (result[name] <= 1 + 1e-12)).all()
