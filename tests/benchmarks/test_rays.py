"""Time of a ray step: ours against C (gcc) and against numpy with `scipy.ndimage.map_coordinates`, in one process.

Rounds are interleaved and the best of each is taken. `BRANCHLAB_BENCHMARK=full` takes more rounds.
"""

import ctypes
import os
import time

import numba
import numpy as np
import pytest
from scipy.ndimage import map_coordinates, spline_filter

from branchlab.kernels.ray_step import from_true, march_screens
from branchlab.kernels.spline import CELL
from branchlab.kernels.tubes import lay_tubes
from branchlab.launch import PlaneWave, Setup
from branchlab.launch.part import FrontRays
from branchlab.media import RandomMedium
from branchlab.rays import RayEnsemble
from branchlab.rays.march import Marcher
from tests.benchmarks import race
from tests.benchmarks.built import library_from

FULL = os.environ.get("BRANCHLAB_BENCHMARK") == "full"
ROUNDS = 60 if FULL else 12
LENGTH, WIDTH, STRENGTH = 20.0, 64.0, 0.05
RAYS = 65536
NOISE = 1.15  # what other work on the machine may do to a ratio of two best times
WAITING = 2.0  # the same where threads wait for one another


@pytest.fixture(scope="module")
def library(tmp_path_factory):
    """The loops in C, built here."""
    return library_from("ray_step.c", tmp_path_factory.mktemp("c"), "-ffast-math")


def test_the_library_leaves_small_numbers_alone(library):
    """Linked with -ffast-math, it would set flush-to-zero for the whole process, and this product would be 0."""
    smallest = np.array([np.finfo(np.float64).tiny])
    assert (smallest * 0.5)[0] > 0.0


def setup_of(screens=2):
    return Setup(RandomMedium(STRENGTH, 1.0, seed=1), PlaneWave(), LENGTH, WIDTH, screens=screens)


def flat_front(count):
    y = -0.5 * WIDTH + (np.arange(count) + 0.5) * WIDTH / count
    one, zero = np.ones(count), np.zeros(count)
    return FrontRays(y, y, zero, zero, one, zero, one)


def pointer(array):
    return array.ctypes.data_as(ctypes.c_void_p)


def tables_for_c(table):
    """The same spline rows as planes of coefficients and as B-spline weights."""
    cells = table.kicks.reshape(-1, table.cells, CELL)
    planes = np.ascontiguousarray(cells[..., :6].transpose(0, 2, 1))
    n = table.cells
    w = 2 * np.pi * np.arange(n // 2 + 1) / n
    gain = (66 + 52 * np.cos(w) + 2 * np.cos(2 * w)) / 120
    weights = np.fft.irfft(np.fft.rfft(cells[..., 0], axis=1) / gain, n=n, axis=1)
    weights = np.concatenate([weights[:, -2:], weights, weights[:, :3]], axis=1)
    return {"cells_plain": table.kicks, "cells_simd": table.kicks, "planes_simd": planes, "weights_simd": weights}


@pytest.mark.parametrize("threads", sorted({1, numba.get_num_threads()}))
def test_ray_step_against_c(library, threads):
    """One march without screens in between: y, p, action, A, C and the Maslov index of every ray."""
    table = Marcher(setup_of()).table
    steps = table.steps_per_screen
    box = table.cells, table.start, table.inverse
    start = np.zeros((6, RAYS))
    front = flat_front(RAYS)
    start[0], start[3] = front.y, front.dy
    from_true(start, table.potential[0], table.gradient[0], *box, table.strength)
    state, true = start.copy(), np.empty((1, *start.shape))

    def ours():
        state[:] = start
        march_screens(
            state, true, table.flat, table.potential, table.gradient, *box, table.step, table.strength, steps, 0
        )

    ways, found = {"branchlab": ours}, {}
    for name, given in tables_for_c(table).items():
        function = getattr(library, name)
        function.restype = None
        out = start.copy()

        def run(function=function, given=given, out=out):
            out[:] = start
            function(
                pointer(out), ctypes.c_long(RAYS), pointer(given), ctypes.c_long(table.cells),
                ctypes.c_double(table.start), ctypes.c_double(table.inverse), ctypes.c_double(table.step),
                ctypes.c_long(steps), ctypes.c_int(threads),
            )  # fmt: skip

        ways[f"C, {name}"], found[name] = run, out
    with race.threads(threads):
        for way in ways.values():
            way()
        for name, out in found.items():  # chaos multiplies round-off by |A| ~ 10
            assert np.abs(out - state).max() < 1e-8 * max(1.0, np.abs(state).max()), name
        times = race.best(ways, ROUNDS)
    c = min(seconds for name, seconds in times.items() if name.startswith("C"))
    print(f"\nray step, {RAYS} rays, {steps} steps, all outputs, {threads} thread(s): ns per ray-step, of the best C")
    race.print_times(times, RAYS * steps, c)
    assert times["branchlab"] <= (NOISE if threads == 1 else WAITING) * c


def by_map_coordinates(medium, count, step, points_per_length=8):
    """Leapfrog in numpy: v, v_y and v_yy by cubic spline look-up on exact grids, all outputs of a front."""
    nx, ny = int(LENGTH * points_per_length) + 17, int(WIDTH * points_per_length)
    x = (np.arange(nx) - 8) / points_per_length
    y = -0.5 * WIDTH + np.arange(ny) / points_per_length
    grids = [spline_filter(medium.rows(x, y, dy=order), order=3, mode="grid-wrap") for order in (0, 1, 2)]

    def run():
        front = flat_front(count)
        y, p, action, a, c = (q.copy() for q in (front.y, front.p, front.action, front.dy, front.dp))
        maslov = np.zeros(count)
        for n in range(round(LENGTH / step)):
            y, before, action = y + 0.5 * step * p, a, action + 0.25 * step * p**2
            a = a + 0.5 * step * c
            at = np.array(
                [np.full(count, (n + 0.5) * step * points_per_length + 8), (y + 0.5 * WIDTH) * points_per_length]
            )
            v, v_y, v_yy = (map_coordinates(g, at, order=3, mode="grid-wrap", prefilter=False) for g in grids)
            p, c, action = p - 0.5 * step * v_y, c - 0.5 * step * v_yy * a, action - 0.5 * step * v
            y, action = y + 0.5 * step * p, action + 0.25 * step * p**2
            a = a + 0.5 * step * c
            maslov += a * before < 0
        return y, p, action, a, c, maslov

    return run


def last_of(marcher, rays):
    """Return the rays on the last screen."""
    *_, last = marcher.march(rays)
    return last


def test_march_against_numpy():
    """A front from entry to exit through the public marcher, against array code with an ordinary spline look-up."""
    setup, few, steps = setup_of(), 4096, (4, 6)
    marchers = {f"branchlab, {n} steps per scale": Marcher(setup, n) for n in steps}
    front = flat_front(RAYS)
    ours = {name: (lambda m=m: last_of(m, front)) for name, m in marchers.items()}
    theirs = by_map_coordinates(setup.medium, few, 0.1)
    exact = last_of(Marcher(setup, 32, 32), flat_front(few))
    last = {name: last_of(m, flat_front(few)).y for name, m in marchers.items()} | {"numpy leapfrog": theirs()[0]}
    errors = {name: np.sqrt(np.mean((y - exact.y) ** 2)) for name, y in last.items()}
    threads = numba.get_num_threads()
    rounds = 3 if FULL else 1
    # processor time: other work on the machine takes cores from two threads that it does not take from one
    times = {name: seconds / RAYS / threads for name, seconds in race.best(ours, ROUNDS, time.process_time).items()}
    times["numpy leapfrog"] = race.best({"": theirs}, rounds, time.process_time)[""] / few
    fine = f"branchlab, {steps[-1]} steps per scale"
    print(f"\nmarch over {LENGTH:g} correlation lengths, strength {STRENGTH:g}, {threads} threads (numpy: 1):")
    print("  processor time per ray and thread, ratio, rms error of y")
    for name, seconds in times.items():
        print(f"  {name:42s} {seconds * 1e6:9.3f} us  {seconds / times[fine]:8.1f}  {errors[name]:.1e}")
    assert errors[fine] <= 0.1 * errors["numpy leapfrog"]
    assert times["numpy leapfrog"] >= 100.0 * times[fine]


def test_tubes_against_c(library):
    """Exact tubes on one screen against straight ones in C (less exact, one thread both) and a histogram of dots."""
    setup, count, cells = setup_of(), 32768, 1024
    front = flat_front(count)
    state = last_of(Marcher(setup), front)
    flux = np.full(count, WIDTH / count)
    pitch = WIDTH / cells
    out = np.empty(cells)
    library.straight_tubes.restype = None
    arguments = (
        pointer(state.y), pointer(flux), ctypes.c_long(count), ctypes.c_double(WIDTH), ctypes.c_double(-0.5 * WIDTH),
        ctypes.c_double(pitch), ctypes.c_long(cells), pointer(out),
    )  # fmt: skip
    y, stretch = state.y[None], state.A[None]

    def exact():
        return lay_tubes(y, stretch, flux, flux[None], WIDTH, -0.5 * WIDTH, pitch, cells, True, 8.0)[0][0]

    ways = {
        "branchlab, exact tubes": exact,
        "C, straight tubes": lambda: library.straight_tubes(*arguments),
        "numpy, histogram of dots": lambda: np.histogram(state.y % WIDTH, cells, (0.0, WIDTH)),
    }
    laid = exact()
    ways["C, straight tubes"]()
    # straight tubes miss the curvature of 32768/64 rays per length: a few parts in a thousand of the flux
    assert 0.5 * np.abs(out - laid).sum() < 0.01 * WIDTH
    with race.threads(1):
        times = race.best(ways, ROUNDS)
    print(f"\nflux tubes, {count} rays into {cells} cells, 1 thread: time per ray, ratio to C")
    race.print_times(times, count, times["C, straight tubes"])
    assert times["branchlab, exact tubes"] <= 3.5 * NOISE * times["C, straight tubes"]


def test_density():
    """A whole density with its error bar: printed, no limit."""
    setup = setup_of(None)
    RayEnsemble(setup.with_(length=1.0)).density()  # compiled code
    begin = time.perf_counter()
    density = RayEnsemble(setup).density()
    seconds = time.perf_counter() - begin
    print(
        f"\ndensity on {density.sizes['x']} screens, {density.sizes['y']} cells, first caustics at 18: {seconds:.2f} s"
    )
    print(f"  numerical error at the exit, as misplaced flux: {float(density.numerical_error[-1]):.1e}")
    assert float(density.unresolved_flux.max()) == 0.0
