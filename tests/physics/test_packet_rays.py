"""Full rays in the plane: order, symplectic map, energy, against an ODE solver and closed forms."""

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from branchlab.kernels.plane_rays import march_plane, potentials, to_kernel, to_true
from branchlab.launch import PlaneWave, Setup
from branchlab.launch.plane import Plane
from branchlab.media import RandomMedium
from branchlab.rays.plane_table import PlaneTable
from tests.oracles.wells import Well

RAYS, TIME = 128, 8.0


@pytest.fixture(scope="module")
def plane():
    return Plane(Setup(RandomMedium(0.1, 1.0, 3), PlaneWave(), 16.0, 12.0))


def start(tangents=4):
    """Rays in all forward directions, |p| = 1, with the unit tangents."""
    rng = np.random.default_rng(5)
    state = np.zeros((5 + 4 * tangents, RAYS))
    state[0], state[1] = rng.uniform(2, 5, RAYS), rng.uniform(-4, 4, RAYS)
    angle = rng.uniform(-1.2, 1.2, RAYS)
    state[2], state[3] = np.cos(angle), np.sin(angle)
    for c in range(tangents):
        state[5 + 5 * c] = 1.0
    return state


def advanced(state, table, steps):
    state, look = state.copy(), (table.flat, table.grid, table.box)
    to_kernel(state, *look, table.strength)
    march_plane(state, *look, table.step, steps)
    to_true(state, *look, table.strength)
    return state


def traced(plane, steps, state=None, time=TIME):
    return advanced(start() if state is None else state, PlaneTable(plane, time / steps), steps)


def test_order(plane):
    """Position, momentum, action and tangents converge as step**4 (Rowlands 1991): 4.0 +- 0.15 over a fourfold step."""
    reference = traced(plane, 512)
    for rows in (slice(0, 2), slice(2, 4), slice(4, 5), slice(5, 21)):
        coarse, fine = (np.sqrt(np.mean((traced(plane, n)[rows] - reference[rows]) ** 2)) for n in (32, 128))
        assert 0.5 * np.log2(coarse / fine) == pytest.approx(4.0, abs=0.15)


def test_map_is_symplectic(plane):
    """M^T J M = J for every ray and any step (textbook), to round-off of the products."""
    matrix = traced(plane, 24)[5:].reshape(4, 4, RAYS).transpose(2, 1, 0)
    form = np.block([[np.zeros((2, 2)), np.eye(2)], [-np.eye(2), np.zeros((2, 2))]])
    size = np.abs(matrix).max(axis=(1, 2), keepdims=True) ** 2
    assert (np.abs(matrix.transpose(0, 2, 1) @ form @ matrix - form) / size).max() < 1e-13
    assert np.abs(np.linalg.det(matrix) - 1).max() < 1e-10


def test_processor_undone(plane):
    """to_kernel is the inverse of to_true to round-off, tangents included."""
    table = PlaneTable(plane, 0.25)
    look = table.flat, table.grid, table.box
    state = start()
    to_true(state, *look, table.strength)
    assert np.abs(state - start()).max() > 1e-5
    to_kernel(state, *look, table.strength)
    assert np.abs(state - start()).max() < 1e-13


def test_tangent_is_the_derivative(plane):
    """Columns of M against central differences of the map itself, step 2e-6: 1e-8 of the largest, their own third order."""
    matrix = traced(plane, 24)[5:].reshape(4, 4, RAYS)
    for column in range(4):
        moved = []
        for sign in (1, -1):
            state = start(0)
            state[column] += sign * 2e-6
            moved.append(traced(plane, 24, state)[:4])
        assert np.abs((moved[0] - moved[1]) / 4e-6 - matrix[column]).max() < 1e-8 * np.abs(matrix).max()


def test_rays_against_an_ode_solver(plane):
    """dr/dt = p, dp/dt = -grad v/2 with the medium's own derivatives, no spline, DOP853 at 1e-11 (Hairer, Norsett & Wanner).
    3e-7: what a spline of a sixteenth of the scale leaves."""
    medium = plane.setup.medium
    state = start(0)
    state[1] *= 0.25  # away from the seam of the sides, which belongs to the window
    found = advanced(state, PlaneTable(plane, 3.0 / 512, points_per_scale=16), 512)

    def rhs(t, z):
        v, along, across = (medium.rows([z[0]], [z[1]], dx=dx, dy=dy)[0, 0] for dx, dy in ((0, 0), (1, 0), (0, 1)))
        return [z[2], z[3], -along / 2, -across / 2, (z[2] ** 2 + z[3] ** 2 - v) / 2]

    rays = np.flatnonzero(np.abs(found[1]) < 2.5)[:3]
    for ray in rays:
        exact = solve_ivp(rhs, (0, 3.0), state[:, ray], method="DOP853", rtol=1e-11, atol=1e-12).y[:, -1]
        assert np.abs(exact - found[:, ray]).max() < 3e-7


def test_energy_does_not_drift(plane):
    """The error of H falls as step**4 and is no larger at the end of 32 units than at 8 (backward error analysis of
    symplectic maps: Hairer, Lubich & Wanner, Geometric Numerical Integration, IX.8)."""
    bare = PlaneTable(plane, 0.0)

    def energy(state):
        return (state[2] ** 2 + state[3] ** 2) / 2 + potentials(state[0], state[1], bare.flat, bare.grid, bare.box)

    def errors(steps):
        state = start(0)
        state[2:4] *= 0.2  # slow rays, which the medium keeps inside
        before, found = energy(state), []
        for _ in range(4):
            state = traced(plane, steps, state)
            found.append(np.sqrt(np.mean((energy(state) - before) ** 2)))
        return np.array(found)

    coarse, fine = errors(32), errors(64)
    assert np.log2(coarse / fine).mean() == pytest.approx(4.0, abs=0.3)
    assert coarse[3] < 2 * coarse[:2].max()
    assert coarse.max() < 1e-6


def test_harmonic_well():
    """x = c + a cos(rate t) ..., the action of a harmonic oscillator, and M, a rotation (textbook)."""
    rates, t = np.array([0.3, 0.5]), 7.0
    plane = Plane(Setup(Well(6.0, *rates), PlaneWave(), 12.0, 10.0, "absorbing"))
    state = np.zeros((21, RAYS))
    rng = np.random.default_rng(1)
    state[:2], state[2:4] = rng.uniform(-1.5, 1.5, (2, RAYS)), rng.uniform(-0.4, 0.4, (2, RAYS))
    q, p = state[:2].copy(), state[2:4].copy()
    state[0] += 6.0
    for c in range(4):
        state[5 + 5 * c] = 1.0
    found = traced(plane, 256, state, t)
    c, s, w = np.cos(rates * t)[:, None], np.sin(rates * t)[:, None], rates[:, None]
    found[0] -= 6.0
    assert np.abs(found[:2] - (c * q + s / w * p)).max() < 1e-8
    assert np.abs(found[2:4] - (c * p - w * s * q)).max() < 1e-8
    action = 0.5 * (found[:2] * found[2:4] - q * p).sum(axis=0)  # int (p**2 - w**2 q**2)/2 = [q p]/2
    assert np.abs(found[4] - action).max() < 1e-8
    assert np.abs(found[5] - c[0]).max() < 3e-7
    assert np.abs(found[5 + 4 * 3 + 1] - (s / w)[1]).max() < 3e-7


def test_rays_that_leave_go_straight_on():
    """Beyond the box v is its mean: a ray keeps its momentum there, and does not meet the medium again."""
    plane = Plane(Setup(RandomMedium(0.1, 1.0, 3), PlaneWave(), 16.0, 12.0, "absorbing"))
    once = traced(plane, 128, start(0), 40.0)
    assert (once[0] > plane.start[0] + plane.span[0]).any()
    later = traced(plane, 128, once, 40.0)
    out = (np.abs(once[1]) > 0.5 * plane.span[1]) | (once[0] > plane.start[0] + plane.span[0])
    assert out.sum() > RAYS / 2
    assert np.abs(later[2:4] - once[2:4])[:, out].max() < 1e-6
    assert np.abs(later[:2] - once[:2] - 40.0 * once[2:4])[:, out].max() < 1e-4
