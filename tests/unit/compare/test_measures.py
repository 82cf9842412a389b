"""Measures against reference libraries and closed forms; what they refuse."""

import numpy as np
import pytest
import xarray as xr
from scipy import special, stats

from branchlab.compare import correlation, displacement, misplaced_flux
from branchlab.errors import InputError

WIDTH, CELLS = 20.0, 1000
Y = (np.arange(CELLS) + 0.5) * (WIDTH / CELLS) - 0.5 * WIDTH


def over_y(values):
    return xr.DataArray(values, {"y": ("y", Y, {"units": "mm"})}, dims="y")


def gaussian(centre, deviation):
    return over_y(np.exp(-0.5 * ((Y - centre) / deviation) ** 2))


@pytest.mark.parametrize("sides", ["periodic", "absorbing"])
@pytest.mark.parametrize(("shift", "resolution"), [(0.3, None), (1.1, None), (1.1, 0.5)])
def test_misplaced_flux_of_shifted_gaussians(sides, shift, resolution):
    """Two Gaussians of deviation s, d apart: erf(d / (2 sqrt(2) s)) (their curves cross once, half way).

    Smoothing adds variances. Tolerance: the cell that the crossing lies in, (cell/s)**2.
    """
    s = np.hypot(0.7, resolution or 0.0)
    found = misplaced_flux(gaussian(-shift / 2, 0.7), gaussian(shift / 2, 0.7), resolution=resolution, sides=sides)
    assert float(found) == pytest.approx(special.erf(shift / (2 * np.sqrt(2) * s)), abs=2 * (WIDTH / CELLS / s) ** 2)


@pytest.mark.parametrize("sides", ["periodic", "absorbing"])
@pytest.mark.parametrize("shift", [0.013, 0.4, 3.0])
def test_displacement_of_a_shift_is_the_shift(sides, shift):
    """Wasserstein-1 of a rigid shift is the shift (Villani, Topics in Optimal Transportation, 2003, ch. 2)."""
    found = displacement(gaussian(0.0, 0.3), gaussian(shift, 0.3), sides=sides)
    assert float(found) == pytest.approx(shift, rel=1e-9)
    assert found.attrs["units"] == "mm"


def test_displacement_goes_the_short_way_round():
    """A spot moved by 15 of a period of 20 was moved by 5 the other way."""
    a, b = gaussian(-7.5, 0.3), gaussian(7.5, 0.3)
    assert float(displacement(a, b)) == pytest.approx(5.0, rel=1e-9)
    assert float(displacement(a, b, sides="absorbing")) == pytest.approx(15.0, rel=1e-9)


def test_displacement_against_scipy(rng):
    """scipy.stats.wasserstein_distance of weighted points at the cell centres, on a line."""
    for _ in range(5):
        a, b = rng.gamma(0.5, size=(2, CELLS))
        found = displacement(over_y(a), over_y(b), sides="absorbing")
        assert float(found) == pytest.approx(stats.wasserstein_distance(Y, Y, a, b), rel=1e-10)


def test_periodic_displacement_is_the_least_over_all_cuts(rng):
    """On a circle: the least of scipy's line distances over cuts with any flux sent round (brute force)."""
    n, y = 40, np.arange(40) + 0.5
    a, b = (row / row.sum() for row in rng.gamma(0.5, size=(2, n)))
    offsets = np.linspace(-1, 1, 4001)
    surplus = np.cumsum(a - b)
    brute = np.abs(surplus[None, :] - offsets[:, None]).sum(axis=1).min()
    sides = [xr.DataArray(row, {"y": y}, dims="y") for row in (a, b)]
    assert float(displacement(*sides)) == pytest.approx(brute, abs=n * (offsets[1] - offsets[0]))
    assert float(displacement(*sides)) <= stats.wasserstein_distance(y, y, a, b)


def test_correlation_against_numpy(rng):
    a = rng.gamma(1.0, size=CELLS)
    b = a + rng.gamma(1.0, size=CELLS)
    assert float(correlation(over_y(a), over_y(b))) == pytest.approx(np.corrcoef(a, b)[0, 1], rel=1e-12)


def test_correlation_of_a_flat_screen_is_not_a_number(rng):
    flat = over_y(1.0 + 1e-13 * rng.random(CELLS))  # a plane wave before the medium, with round-off
    assert np.isnan(float(correlation(flat, over_y(rng.random(CELLS)))))


def test_other_dimensions_are_broadcast(rng):
    rays = xr.DataArray(rng.random((3, CELLS)), {"y": Y}, dims=("x", "y"))
    waves = xr.DataArray(rng.random((2, 3, CELLS)), {"y": Y, "wavelength": [0.1, 0.2]}, dims=("wavelength", "x", "y"))
    found = misplaced_flux(rays, waves)
    assert set(found.dims) == {"wavelength", "x"}
    one = misplaced_flux(rays[1], waves[0, 1])
    assert float(found.sel(wavelength=0.1)[1]) == float(one)


def test_screen_without_flux_is_not_a_number():
    assert np.isnan(float(misplaced_flux(over_y(np.zeros(CELLS)), over_y(np.ones(CELLS)))))


def test_refused():
    good = over_y(np.ones(CELLS))
    holed, below = np.ones(CELLS), np.ones(CELLS)
    holed[10], below[-1] = np.nan, -0.5
    with pytest.raises(InputError, match="first intensity must be finite everywhere; it is nan at y = -9.79"):
        misplaced_flux(over_y(holed), good)
    with pytest.raises(
        InputError, match="second intensity must be zero or positive everywhere; it is -0.5 at y = 9.99"
    ):
        displacement(good, over_y(below))
    with pytest.raises(InputError, match="different cells: 1000 from y = -9.99, and 500"):
        correlation(good, good[::2])
    with pytest.raises(InputError, match="must be an xarray.DataArray"):
        misplaced_flux(np.ones(5), good)
    with pytest.raises(InputError, match="needs the dimension and coordinate 'y'"):
        misplaced_flux(xr.DataArray(np.ones(5), dims="z"), good)
    with pytest.raises(InputError, match="complex"):
        misplaced_flux(good, good + 1j)
    with pytest.raises(InputError, match="Did you mean 'absorbing'"):
        displacement(good, good, sides="absorbin")
