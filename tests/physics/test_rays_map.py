"""What the ray map must keep and how fast it converges: symplecticity, order, reversal, an outside ODE solver."""

import numpy as np
import pytest

from branchlab.launch import PlaneWave, Setup
from branchlab.launch.part import FrontRays
from branchlab.media import RandomMedium
from branchlab.rays.march import Marcher
from tests.oracles import rays_plain as plain
from tests.oracles.rays_media import Mirrored

MEDIUM = RandomMedium(0.1, 1.0, seed=3, box=(64.0, 32.0))


def setup_of(length, medium=MEDIUM, screens=9):
    return Setup(medium, PlaneWave(), length, 32.0, screens=screens)


def launch(y, p=0.0, dy=1.0, dp=0.0):
    y, p, dy, dp = (np.array(a) for a in np.broadcast_arrays(np.asarray(y, float), p, dy, dp))
    return FrontRays(y, y, p, np.zeros(y.shape), dy, dp, np.ones(y.shape))


def last(marcher, rays, matrix=True):
    *_, state = marcher.march(rays, matrix)
    return state


SPREAD = np.linspace(-16, 16, 513)[:-1]


def test_the_stability_matrix_is_symplectic():
    """det M = 1 (Goldstein, Classical Mechanics): exact for the step, so only round-off of ||M||**2 remains."""
    for state in Marcher(setup_of(48.0)).march(launch(SPREAD), matrix=True):
        size = state.A**2 + state.B**2 + state.C**2 + state.D**2
        assert (np.abs(state.A * state.D - state.B * state.C - 1.0) < 1e-12 * size).all()
    assert size.max() > 1e9  # far beyond the first caustics, at 11


def test_area_of_a_loop_of_rays_is_constant():
    """Poincare's invariant: the area in phase space inside a closed loop of rays."""
    turn = 2 * np.pi * np.arange(512) / 512
    rays = launch(1.0 + 0.3 * np.cos(turn), 0.05 * np.sin(turn))
    for state in Marcher(setup_of(8.0)).march(rays, matrix=True):
        slopes = np.fft.irfft(1j * np.arange(257) * np.fft.rfft(state.y))  # dy/dturn of a smooth loop
        area = -np.sum(state.p * slopes) * 2 * np.pi / 512
        assert abs(area - np.pi * 0.3 * 0.05) < 1e-10


def test_order_of_convergence():
    """Position, momentum, action and all of M: fourth order, 4.0 +- 0.2, at one kick per step."""
    rays, steps = launch(SPREAD), np.array([3, 4, 6, 8])

    def columns(n):
        s = last(Marcher(setup_of(16.0), int(n)), rays)
        return np.array([s.y, s.p, s.action, s.A, s.B, s.C, s.D])

    exact = columns(48)
    errors = np.array([np.median(np.abs(columns(n) - exact), axis=1) for n in steps])
    slopes = [np.polyfit(np.log(steps), np.log(error), 1)[0] for error in errors.T]
    np.testing.assert_allclose(slopes, -4.0, atol=0.2)


def test_without_the_processor_the_order_is_two(monkeypatch):
    """Companion: the kernel map alone converges as the square of the step."""
    monkeypatch.setattr("branchlab.rays.march.from_true", lambda *_: None)
    rays, steps = launch(SPREAD), np.array([3, 4, 6, 8])
    exact = last(Marcher(setup_of(16.0), 48), rays)
    errors = [np.median(np.abs(last(Marcher(setup_of(16.0), int(n)), rays).y - exact.y)) for n in steps]
    assert np.polyfit(np.log(steps), np.log(errors), 1)[0] > -2.4


@pytest.mark.parametrize("ray", [(-7.3, 0.0), (2.1, 0.08), (11.9, -0.05)])
def test_against_an_ode_solver_of_a_library(ray):
    """scipy's DOP853 on the medium's own mode sum: no table, no spline, no splitting."""
    y, p = ray
    found = last(Marcher(setup_of(12.0), 24, 32), launch([y], p))
    exact = plain.by_ode_solver(MEDIUM, 12.0, y, p)
    columns = [found.y, found.p, found.action, found.A, found.C, found.B, found.D]
    size = np.maximum(np.abs(exact), 1.0)
    np.testing.assert_allclose(np.ravel(columns) / size, exact / size, atol=1e-6)  # (1/24)**4 = 3e-6 times 1/24


def test_the_matrix_is_the_derivative_of_the_map():
    """Central differences of y and p."""
    rays, d = launch(SPREAD), 1e-5
    marcher = Marcher(setup_of(8.0))
    found = last(marcher, rays)
    size = np.sqrt(found.A**2 + found.B**2 + found.C**2 + found.D**2)
    for along, columns in ((0, ("A", "C")), (1, ("B", "D"))):
        ahead, behind = (last(marcher, launch(SPREAD + (1 - along) * e, along * e)) for e in (d, -d))
        for difference, column in ((ahead.y - behind.y, columns[0]), (ahead.p - behind.p, columns[1])):
            error = np.abs(difference / (2 * d) - getattr(found, column)) / size
            assert np.quantile(error, 0.99) < 1e-7  # d**2 times third derivatives; some rays are close to a caustic


def test_the_action_is_the_generating_function():
    """dS = p dy - p0 dy0 along the front (Hamilton): here p0 = 0, so dS/dy0 = p A."""
    d, marcher = 1e-4, Marcher(setup_of(8.0))
    found = last(marcher, launch(SPREAD))
    ahead, behind = last(marcher, launch(SPREAD + d)), last(marcher, launch(SPREAD - d))
    error = np.abs((ahead.action - behind.action) / (2 * d) - found.p * found.A)
    # exact for the map, drifts, kicks and processor; d**2 times third derivatives remain
    assert np.median(error) < 1e-8
    assert error.max() < 1e-4


def test_time_reversal():
    """Turned round at the exit, in the mirrored medium, rays come back to where and as they started."""
    length = 12.0
    out = last(Marcher(setup_of(length)), launch(SPREAD, 0.05 * np.sin(SPREAD)))
    back = last(Marcher(setup_of(length, Mirrored(MEDIUM, length))), launch(out.y, -out.p))
    size = np.sqrt(out.A**2 + out.B**2 + out.C**2 + out.D**2)
    assert (np.abs(back.y - SPREAD) < 1e-13 * size).all()
    assert (np.abs(back.p + 0.05 * np.sin(SPREAD)) < 1e-13 * size).all()
    np.testing.assert_allclose(back.action, out.action, atol=1e-11)
    # the way back undoes the tangent too: M_back = R M**-1 R with R = diag(1, -1), which swaps A and D
    np.testing.assert_allclose(back.A / size, out.D / size, atol=1e-11)
    np.testing.assert_allclose(back.B / size, out.B / size, atol=1e-11)


def test_a_front_tangent_is_carried_by_the_matrix():
    rays = launch(SPREAD, 0.03 * np.cos(SPREAD), 0.8, -0.2)
    marcher = Marcher(setup_of(16.0))
    for front, full in zip(marcher.march(rays), marcher.march(rays, matrix=True), strict=True):
        np.testing.assert_array_equal(front.y, full.y)
        np.testing.assert_array_equal(front.action, full.action)
        size = np.abs(full.A) + np.abs(full.B) + np.abs(full.C) + np.abs(full.D)
        np.testing.assert_allclose(front.A / size, (0.8 * full.A - 0.2 * full.B) / size, atol=1e-13)
        np.testing.assert_allclose(front.C / size, (0.8 * full.C - 0.2 * full.D) / size, atol=1e-13)


def test_the_maslov_index_counts_the_zeros_of_a_fine_march():
    """The index on coarse screens equals the number of sign changes of the true A on fine ones."""
    rays = launch(SPREAD)
    coarse = last(Marcher(setup_of(24.0)), rays, matrix=False)
    signs = np.array([s.A for s in Marcher(setup_of(24.0, screens=1537), 64).march(rays)])
    passed = (signs[1:] * signs[:-1] < 0).sum(axis=0)
    assert passed.max() >= 3
    # two caustics between two kicks go unseen by both
    assert (coarse.maslov == passed).mean() > 0.99
    assert (np.mod(coarse.maslov - passed, 2) == 0).all()
