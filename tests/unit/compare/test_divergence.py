"""The divergence of made-up densities, whose measures are known."""

import json

import numpy as np
import pytest

from branchlab.compare.divergence import divergence
from branchlab.errors import InputError
from branchlab.launch import PlaneWave, Setup
from branchlab.launch.packet import Packet
from branchlab.launch.plane import Plane
from branchlab.media import RandomMedium
from branchlab.results import dataset, provenance

SETUP = Setup(RandomMedium(0.1, 1.0, 3), PlaneWave(), 20.0, 16.0, "absorbing", cells=160)
PLANE, TIMES = Plane(SETUP), np.array([0.0, 1.0, 2.0, 3.0])


def made(kind, centres, points=10**9, **changes):
    """A packet or cloud that is a round Gaussian of standard deviation 0.6 about given places on the x axis."""
    x, y = PLANE.x[:, None], SETUP.y
    spots = [np.exp(-((x - c) ** 2 + y**2) / 0.72) / (0.72 * np.pi) for c in centres]
    numbers = {
        "packet": ("norm", "energy", "numerical_error", "spectral_tail"),
        "cloud": ("inside", "energy", "energy_error", "position_error", "stretch"),
    }[kind]
    variables = {name: (("wavelength", "time"), np.zeros((1, 4))) for name in numbers}
    variables["density"] = ("wavelength", "time", "x", "y"), np.array([spots])
    if kind == "cloud":
        variables["ehrenfest_time"] = ("wavelength",), np.array([7.0])
    coords = {"wavelength": (("wavelength",), [0.2]), "time": (("time",), TIMES)}
    coords |= {"x": (("x",), PLANE.x), "y": (("y",), SETUP.y)}
    attrs = provenance(SETUP, model="full") | {"packet": Packet(5.0, 0.0, 0.6).to_json(), "points": points}
    return dataset(kind, variables, coords, attrs | changes)


def test_shifted_spots():
    """Two Gaussians of width s a distance d apart misplace erf(d/(2 sqrt(2) s)) of each other (one integral); smoothed,
    s**2 = 0.6**2 + 0.3**2."""
    from scipy.special import erf

    found = divergence(made("cloud", [5.0, 5.2, 5.6, 6.4]), made("packet", [5.0] * 4), resolution=0.3)
    exact = erf(np.array([0.0, 0.2, 0.6, 1.4]) / (2 * np.sqrt(2) * np.sqrt(0.45)))
    assert np.abs(found.misplaced_flux.values[0] - exact).max() < 1e-3  # cells of a sixth of the spot
    assert found.divergence_time.item() == pytest.approx(1 + (0.15 - exact[1]) / (exact[2] - exact[1]), abs=1e-3)
    assert found.parted.item()
    assert found.ehrenfest_time.item() == 7.0
    assert found.resolved.values[0].tolist() == [False, True, True, True]


def test_what_has_left_counts_too():
    found = divergence(made("cloud", [5.0, 5.0, 5.0, 60.0]), made("packet", [5.0] * 4), resolution=0.3)
    assert found.misplaced_flux.values[0] == pytest.approx([0, 0, 0, 1], abs=1e-5)
    gone = divergence(made("cloud", [60.0] * 4), made("packet", [70.0] * 4), resolution=0.3)
    assert gone.misplaced_flux.values[0] == pytest.approx(0, abs=1e-9)


def test_coming_together_again_is_no_parting():
    found = divergence(made("cloud", [5.0, 7.0, 5.0, 5.0]), made("packet", [5.0] * 4), resolution=0.3)
    assert np.isnan(found.divergence_time.item())
    assert not found.parted.item()


def test_sampling_noise(rng):
    """The stated noise against clouds of random points: the mean of |noise| of a normal variable, to 10 %."""
    cell = SETUP.cell * PLANE.cell
    exact, cloud, ratios = made("packet", [5.0] * 4), made("cloud", [5.0] * 4, points=5000), []
    shares = exact.density.values[0, 0].ravel() * cell
    shares = shares / shares.sum()
    for _ in range(10):
        counts = rng.multinomial(5000, shares, size=(1, 4)).reshape(exact.density.shape)
        cloud["density"] = cloud.density.copy(data=counts / (5000 * cell))
        found = divergence(cloud, exact, resolution=0.15)
        ratios.append((found.misplaced_flux / found.numerical_error).values)
    assert np.mean(ratios) == pytest.approx(1.0, abs=0.1)


@pytest.mark.parametrize(
    ("change", "match"),
    [
        (
            lambda c: c.assign_attrs(packet=Packet(5.0, 0.0, 0.7).to_json()),
            "different packets.*spread: 0.7 against 0.6",
        ),
        (
            lambda c: c.assign_attrs(setup=json.dumps({**json.loads(c.attrs["setup"]), "width": 17.0})),
            "different setups.*width: 17.0 against 16.0",
        ),
        (lambda c: c.isel(time=[0, 1]), "different values of time"),
        (lambda c: c.drop_vars("stretch"), "'stretch' is missing"),
    ],
)
def test_refusals(change, match):
    cloud, packet = made("cloud", [5.0] * 4), made("packet", [5.0] * 4)
    with pytest.raises(InputError, match=match):
        divergence(change(cloud), packet, resolution=0.3)


def test_resolution_below_a_cell():
    with pytest.raises(InputError, match="below one cell"):
        divergence(made("cloud", [5.0] * 4), made("packet", [5.0] * 4), resolution=0.05)
