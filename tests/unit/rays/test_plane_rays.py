"""The plane's spline and step against plain twins of scipy and numpy."""

import numpy as np
import pytest

from branchlab.errors import ResourceError
from branchlab.kernels.plane_rays import BLOCK, biquintic_cells, march_plane, potential, potentials, to_true
from branchlab.launch import PlaneWave, Setup
from branchlab.launch.plane import Plane
from branchlab.media import RandomMedium
from branchlab.rays.plane_table import PlaneTable
from tests.oracles.packet_twins import PlainSpline


@pytest.fixture(scope="module")
def spline():
    rng = np.random.default_rng(2)
    samples = rng.standard_normal((12, 9))
    look = biquintic_cells(samples).reshape(-1), (12, 9, True, True), (0.5, -1.0, 2.0, 1.0 / 0.7)
    return look, PlainSpline(samples, (0.5, -1.0), (0.5, 0.7))


def test_value_and_derivatives(spline):
    look, plain = spline
    rng = np.random.default_rng(3)
    for x, y in zip(rng.uniform(0.5, 6.5, 20), rng.uniform(-1.0, 5.3, 20), strict=True):
        found = potential(x, y, *look)
        exact = [float(plain(x, y, *d)) for d in ((0, 0), (1, 0), (0, 1), (2, 0), (1, 1), (0, 2))]
        assert np.abs(np.subtract(found, exact)).max() < 1e-10
        assert np.abs(np.subtract(potential(x + 6.0, y - 6.3, *look), exact)).max() < 1e-10


def test_ends_that_do_not_repeat(spline):
    (table, _, box), plain = spline
    look = table, (12, 9, False, True), box
    for x, at in ((-3.0, 0.5), (0.5, 0.5), (5.99, 5.99), (6.2, 6.0), (99.0, 6.0)):
        assert potential(x, 0.3, *look)[0] == pytest.approx(float(plain(at, 0.3)), abs=1e-12)


def test_many_places(spline):
    look, plain = spline
    x, y = np.linspace(0.6, 6.0, 7), np.linspace(-0.9, 5.0, 7)
    exact = [float(plain(*place)) for place in zip(x, y, strict=True)]
    assert np.abs(potentials(x, y, *look) - exact).max() < 1e-12


def plain_march(spline, state, step, steps):
    """Drift, kick, drift of one ray with its tangents, one line per formula."""
    r, p, action, tangents = state[:2].copy(), state[2:4].copy(), state[4], state[5:].reshape(-1, 4).copy()

    def drift(h):
        nonlocal r, action
        action += h * (p @ p) / 2
        r = r + h * p
        tangents[:, :2] += h * tangents[:, 2:]

    for _ in range(steps):
        drift(step / 2)
        w, wx, wy, wxx, wxy, wyy = (float(spline(*r, *d)) for d in ((0, 0), (1, 0), (0, 1), (2, 0), (1, 1), (0, 2)))
        p = p - step * np.array([wx, wy])
        action -= step * w
        tangents[:, 2:] -= step * tangents[:, :2] @ np.array([[wxx, wxy], [wxy, wyy]])
        drift(step / 2)
    return np.concatenate([r, p, [action], tangents.ravel()])


def test_step(spline, rng):
    look, plain = spline
    state = rng.standard_normal((13, BLOCK))
    state[0], state[1] = rng.uniform(2, 5, BLOCK), rng.uniform(0, 3, BLOCK)
    state[2:4] *= 0.3
    before = state.copy()
    march_plane(state, *look, 0.1, 6)
    for ray in (0, 7, BLOCK - 1):
        exact = plain_march(plain, before[:, ray], 0.1, 6)
        assert np.abs(state[:, ray] - exact).max() < 1e-9 * max(1.0, np.abs(exact).max())


def test_lift(spline, rng):
    """r + c grad W and the inverse of its derivative, with numpy's own inverse; tangents by central differences."""
    look, plain = spline
    state = rng.standard_normal((9, BLOCK))
    state[0], state[1] = rng.uniform(2, 5, BLOCK), rng.uniform(0, 3, BLOCK)
    before = state.copy()
    to_true(state, *look, 0.01)

    def lift(z):
        slope = np.array([float(plain(*z[:2], *d)) for d in ((1, 0), (0, 1))])
        bend = [float(plain(*z[:2], *d)) for d in ((2, 0), (1, 1), (0, 2))]
        stretch = np.eye(2) + 0.01 * np.array([[bend[0], bend[1]], [bend[1], bend[2]]])
        return np.concatenate([z[:2] + 0.01 * slope, np.linalg.inv(stretch) @ z[2:4]])

    for ray in (0, BLOCK - 1):
        z, d = before[:4, ray], before[5:, ray]
        assert np.abs(state[:4, ray] - lift(z)).max() < 1e-12
        numeric = (lift(z + 1e-6 * d) - lift(z - 1e-6 * d)) / 2e-6
        assert np.abs(state[5:, ray] - numeric).max() < 1e-6 * np.abs(numeric).max()
        assert state[4, ray] == before[4, ray]


def test_memory_is_estimated_first(monkeypatch):
    monkeypatch.setattr("branchlab.errors.available_memory", lambda: 2**20)
    with pytest.raises(ResourceError, match="the rays' spline of"):
        PlaneTable(Plane(Setup(RandomMedium(0.1, 1.0, 3), PlaneWave(), 10.0, 8.0)), 0.2)
