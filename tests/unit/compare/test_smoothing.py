"""The Gaussian of the resolution, against scipy.ndimage.gaussian_filter1d."""

import numpy as np
import pytest
import xarray as xr
from scipy import ndimage

from branchlab.compare import smooth
from branchlab.errors import InputError

WIDTH, CELLS = 16.0, 240
Y = (np.arange(CELLS) + 0.5) * (WIDTH / CELLS) - 0.5 * WIDTH


def over_y(values):
    return xr.DataArray(values, {"y": Y}, dims=("x", "y"))


@pytest.mark.parametrize("cells", [1.0, 1.7, 6.0, 20.0])
@pytest.mark.parametrize(("sides", "mode"), [("periodic", "wrap"), ("absorbing", "constant")])
def test_against_scipy(rng, cells, sides, mode):
    """Same sampled, normalised kernel cut at 8 deviations; wrap is periodic, constant is zeros beyond the ends."""
    rows = rng.gamma(0.3, size=(5, CELLS))
    found = smooth(over_y(rows), cells * WIDTH / CELLS, sides=sides).values
    reference = ndimage.gaussian_filter1d(rows, cells, axis=1, mode=mode, truncate=8.0)
    np.testing.assert_allclose(found, reference, atol=1e-13 * rows.max())  # round-off of the transform


def test_absorbing_sides_reflect_nothing(rng):
    """What stands at one end leaves half of itself outside and does not come in at the other end."""
    rows = np.zeros((1, CELLS))
    rows[0, -1] = 1.0
    found = smooth(over_y(rows), 0.5, sides="absorbing").values[0]
    assert found[: CELLS // 2].max() == 0.0
    edge = np.exp(-0.5 * (0.5 * np.arange(-80, 81) * WIDTH / CELLS / 0.25) ** 2)  # resolution 0.5
    assert found.sum() == pytest.approx((edge[:81]).sum() / edge.sum(), abs=1e-12)


def test_keeps_flux_and_sign_when_periodic(rng):
    rows = rng.gamma(0.1, size=(20, CELLS))
    found = smooth(over_y(rows), WIDTH / CELLS).values
    np.testing.assert_allclose(found.sum(axis=1), rows.sum(axis=1), rtol=1e-13)
    assert found.min() >= 0.0


def test_other_dimensions_and_attributes_stay(rng):
    values = xr.DataArray(rng.random((CELLS, 3)), {"y": Y}, dims=("y", "x"), attrs={"units": "1"})
    found = smooth(values, 0.3)
    assert found.dims == ("y", "x")
    assert found.attrs == {"units": "1", "resolution": 0.3}


@pytest.mark.parametrize(
    ("resolution", "text"),
    [
        (0.01, r"16/240 = 0.0666667.*Use resolution >= 0.06667, or at least cells=1600"),
        (4.5, r"16/4 = 4"),
        (-1.0, "positive"),
        (float("nan"), "positive"),
        ("wide", "must be a number"),
    ],
)
def test_refused_resolutions(resolution, text):
    with pytest.raises(InputError, match=text):
        smooth(over_y(np.ones((1, CELLS))), resolution)


def test_refused_sides_and_cells():
    with pytest.raises(InputError, match="Did you mean 'periodic'"):
        smooth(over_y(np.ones((1, CELLS))), 0.2, sides="periodc")
    uneven = Y.copy()
    uneven[100] += 0.01
    with pytest.raises(InputError, match=r"equal steps; y\[(99|100)\]"):
        smooth(xr.DataArray(np.ones(CELLS), {"y": uneven}, dims="y"), 0.2)
    with pytest.raises(InputError, match="must rise"):
        smooth(xr.DataArray(np.ones(CELLS), {"y": Y[::-1]}, dims="y"), 0.2)
