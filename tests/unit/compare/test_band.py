"""Bands: nodes, weights, what is refused; averages against closed forms."""

import numpy as np
import pytest

from branchlab.errors import InputError
from branchlab.launch.band import Band


@pytest.mark.parametrize("shape", ["flat", "gaussian"])
@pytest.mark.parametrize("width", [0.05, 0.2, 0.4, 0.7])
def test_nodes_hold_the_centre_and_are_symmetric_in_wavenumber(shape, width):
    band = Band(0.13, width, shape)
    wavelengths, weights = band.wavelengths(), band.weights()
    middle = wavelengths.size // 2
    assert wavelengths.size % 2 == 1
    assert wavelengths[middle] == 0.13  # to the last bit: the single wavelength is one of the nodes
    assert (np.diff(wavelengths) > 0).all()
    offset = 0.13 / wavelengths - 1.0
    np.testing.assert_allclose(offset, -offset[::-1], atol=1e-15)  # round-off
    np.testing.assert_allclose(weights, weights[::-1], rtol=1e-12)
    assert weights.sum() == pytest.approx(1.0, abs=1e-14)


@pytest.mark.parametrize(
    ("width", "shape", "nodes"),
    [(0.2, "flat", 7), (0.4, "flat", 9), (1.2, "flat", 17), (0.2, "gaussian", 9), (0.4, "gaussian", 13)],
)
def test_default_number_of_nodes(width, shape, nodes):
    assert Band(1.0, width, shape).wavelengths().size == nodes


def test_flat_band_stays_inside_its_width():
    k = 1.0 / Band(1.0, 0.4).wavelengths()
    assert k.min() > 0.8
    assert k.max() < 1.2


@pytest.mark.parametrize(("width", "phase"), [(0.1, 150.0), (0.4, 60.0), (1.2, 45.0)])
def test_flat_average_of_a_fringe_is_a_sinc(width, phase):
    """Mean of cos(phase k/k0) over a flat band: cos(phase) sin(z)/z, z = width phase/2 (elementary integral)."""
    band = Band(1.0, width)
    shares = np.linspace(0.0, phase, 200)
    found = np.cos(np.outer(shares, 1.0 / band.wavelengths())) @ band.weights()
    z = 0.5 * width * shares
    np.testing.assert_allclose(found, np.cos(shares) * np.sinc(z / np.pi), atol=0.01)  # as the docstring says


@pytest.mark.parametrize("width", [0.1, 0.4, 0.7])
def test_gaussian_average_of_a_fringe(width):
    """exp(-(sigma phase)**2/2), sigma = width/2.3548 (Fourier transform of a Gaussian), for phases up to 50 rad."""
    band = Band(1.0, width, "gaussian")
    phase = np.linspace(0.0, 50.0, 200)
    found = np.cos(np.outer(phase, 1.0 / band.wavelengths())) @ band.weights()
    exact = np.cos(phase) * np.exp(-0.5 * (width / (2.0 * np.sqrt(2.0 * np.log(2.0))) * phase) ** 2)
    np.testing.assert_allclose(found, exact, atol=0.005)  # the cut at 3 deviations, twice 0.27 %


def test_gaussian_width_is_that_at_half_maximum():
    band = Band(1.0, 0.3, "gaussian", nodes=201)
    k, weights = 1.0 / band.wavelengths(), band.weights()
    half = k[weights >= 0.5 * weights.max()]
    assert np.ptp(half) == pytest.approx(0.3, abs=2 * np.diff(k[::-1]).max())


@pytest.mark.parametrize(
    ("make", "text"),
    [
        (lambda: Band(-0.1, 0.2), "centre must be positive; got -0.1"),
        (lambda: Band(0.1, 0.0), "width must be positive; got 0"),
        (lambda: Band(0.1, 2.5), "Use width <= 1.99"),
        (lambda: Band(0.1, 0.9, "gaussian"), "Use width <= 0.769"),
        (lambda: Band(0.1, 0.2, "flt"), "Did you mean 'flat'"),
        (lambda: Band(0.1, 0.2, kind="energy"), "supported now: 'fixed-rays'"),
        (lambda: Band(0.1, 0.2, kind="fixed-ray"), "Did you mean 'fixed-rays'"),
        (lambda: Band(0.1, 0.2, nodes=8), "Use 7 or 9"),
        (lambda: Band(0.1, 0.2, nodes=1), "at least 3"),
        (lambda: Band(0.1, 0.2, node=9), "Did you mean 'nodes'"),
        (lambda: Band(float("nan"), 0.2), "centre must be positive; got nan"),
    ],
)
def test_refused(make, text):
    with pytest.raises(InputError, match=text.replace("(", r"\(")):
        make()


def test_json_round_trip():
    band = Band(0.1, 0.3, "gaussian", nodes=11)
    assert Band.from_json(band.to_json()) == band
    assert band.with_(width=0.2).width == 0.2
