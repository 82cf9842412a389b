"""Time of full rays from entry to exit: ours against C (gcc), and against scipy's general integrator, in one process.

Rounds are interleaved and the best of each is taken. `BRANCHLAB_BENCHMARK=full` takes more rounds.
"""

import ctypes
import os
import time

import numba
import numpy as np
import pytest
from scipy.integrate import solve_ivp

from branchlab.launch import PlaneWave, Setup
from branchlab.launch.part import FrontRays
from branchlab.media import RandomMedium
from branchlab.rays.full_march import FullMarcher
from branchlab.rays.march import OK
from tests.benchmarks import race
from tests.benchmarks.built import library_from

FULL = os.environ.get("BRANCHLAB_BENCHMARK") == "full"
ROUNDS = 40 if FULL else 8
LENGTH, WIDTH, STRENGTH = 20.0, 32.0, 0.05
RAYS = 16384
NOISE = 1.15  # what other work on the machine may do to a ratio of two best times
WAITING = 2.0  # the same where threads wait for one another


@pytest.fixture(scope="module")
def library(tmp_path_factory):
    """The loop in C, built here."""
    return library_from("full_rays.c", tmp_path_factory.mktemp("c"), "-ffast-math")


def setup_of():
    return Setup(RandomMedium(STRENGTH, 1.0, seed=1), PlaneWave(), LENGTH, WIDTH)


def flat_front(count):
    y = -0.5 * WIDTH + (np.arange(count) + 0.5) * WIDTH / count
    one, zero = np.ones(count), np.zeros(count)
    return FrontRays(y, y, zero, zero, one, zero, one)


def pointer(array):
    return array.ctypes.data_as(ctypes.c_void_p)


@pytest.mark.parametrize("screens", ["the default", "the last alone"])
@pytest.mark.parametrize("threads", sorted({1, numba.get_num_threads()}))
def test_full_rays_against_c(library, threads, screens):
    """y, py, action, A, C and the Maslov index of every ray on every screen."""
    marcher, front = FullMarcher(setup_of()), flat_front(RAYS)
    marcher = marcher if screens == "the default" else marcher.on([LENGTH])
    table, x = marcher.table, np.ascontiguousarray(marcher.x)
    face = 0.5 * marcher.plane.face
    zero, one = np.zeros(RAYS), np.ones(RAYS)
    start = np.array([zero - face, front.y, one, zero, zero - face, zero, one, zero, zero])
    out = np.empty((x.size, 6, RAYS))
    box = np.array(table.box)

    def theirs():
        library.full_rays(
            pointer(start), pointer(out), ctypes.c_long(RAYS), pointer(x), ctypes.c_long(x.size), pointer(table.flat),
            ctypes.c_long(table.grid[0]), ctypes.c_long(table.grid[1]), pointer(box), ctypes.c_double(table.step),
            ctypes.c_int(threads),
        )  # fmt: skip

    def ours():
        return list(marcher.march(front))

    theirs()
    for state, row in zip(ours(), out, strict=True):
        assert (state.status == OK).all()
        for found, exact in zip((state.y, state.p, state.action, state.A, state.C, state.maslov), row, strict=True):
            # chaos multiplies round-off by |A| ~ 100
            np.testing.assert_allclose(found, exact, rtol=0, atol=1e-8 * max(1.0, np.abs(exact).max()))
    with race.threads(threads):
        times = race.best({"branchlab": ours, "C": theirs}, ROUNDS)
    steps = LENGTH / table.step
    print(f"\nfull rays, {RAYS} rays, {steps:.0f} steps, {x.size} screens, {threads} thread(s): ns per ray-step, of C")
    race.print_times(times, RAYS * steps, times["C"])
    assert times["branchlab"] <= (NOISE if threads == 1 else WAITING) * times["C"]


def test_full_rays_against_a_general_integrator():
    """A ray with its tangent by scipy's DOP853 to 1e-5, in the same medium by its own spline: what a user would write."""
    setup, few = setup_of(), 8
    marcher, fine = FullMarcher(setup), FullMarcher(setup, 24, 24)
    *_, exact = fine.on([LENGTH]).march(flat_front(few))
    *_, found = marcher.on([LENGTH]).march(flat_front(few))
    x = np.arange(-0.5, LENGTH + 0.5, 1 / 16)
    y = np.arange(-0.5 * WIDTH - 2, 0.5 * WIDTH + 2, 1 / 16)
    medium = setup.medium
    grids = {(dx, dy): medium.rows(x, y, dx=dx, dy=dy) for dx, dy in ((0, 0), (0, 1), (1, 0))}

    def at(grid, place):
        i, j = (place[0] - x[0]) * 16, (place[1] - y[0]) * 16
        i0, j0 = int(i), int(j)
        s, t = i - i0, j - j0
        cell = grid[i0 : i0 + 2, j0 : j0 + 2]
        return (1 - s) * ((1 - t) * cell[0, 0] + t * cell[0, 1]) + s * ((1 - t) * cell[1, 0] + t * cell[1, 1])

    def slopes(_, z):
        place = np.clip(z[0], x[0], x[-2]), np.clip(z[1], y[0], y[-2])
        return [z[2], z[3], -0.5 * at(grids[1, 0], place), -0.5 * at(grids[0, 1], place)]

    def arrive(_, z):
        return z[0] - LENGTH

    arrive.terminal = True

    def general():
        for start in flat_front(few).y:
            solve_ivp(slopes, (0, 2 * LENGTH), [0.0, start, 1.0, 0.0], method="DOP853", rtol=1e-5, events=arrive)

    many = flat_front(RAYS)
    ours = race.best({"": lambda: list(marcher.march(many))}, ROUNDS, time.process_time)[""]
    ours /= RAYS * numba.get_num_threads()
    theirs = race.best({"": general}, 1, time.process_time)[""] / few
    print(f"\nfull rays over {LENGTH:g} lengths, per ray and thread: {ours * 1e6:.1f} us with tangents on all screens;")
    print(f"  scipy DOP853, end only, without tangents or action: {theirs * 1e6:.0f} us, {theirs / ours:.0f} x")
    error = np.sqrt(np.mean((found.y - exact.y) ** 2))
    print(f"  rms error of y of ours: {error:.1e}")
    assert error < 1e-2
    assert theirs >= 100.0 * ours
