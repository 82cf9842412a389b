"""The full wave's solver against the transforms it is made of, and against the convergent Born series.

Ratios of interleaved best times in one process; the tables are printed with -s. `BRANCHLAB_BENCHMARK=full` takes the grids
of 3 million points and more, the scan of wavelengths and the largest domain.
"""

import os
import time

import numpy as np
import pytest
import scipy.fft
import scipy.sparse.linalg

from branchlab.kernels.native_fft import available
from branchlab.launch import Beam, PlaneWave, Setup
from branchlab.media import RandomMedium
from branchlab.waves import FullWave, full_grid
from branchlab.waves.born import born_loss
from branchlab.waves.full_grid import SlabTable
from branchlab.waves.full_operator import DampedOperator
from branchlab.waves.full_problem import FullProblem
from branchlab.waves.team import THREADS, Team
from tests.benchmarks.race import best, print_times

FULL = os.environ.get("BRANCHLAB_BENCHMARK") == "full"
ROUNDS = 12 if FULL else 5


def setup_of(length, width, strength, sides="absorbing"):
    source = Beam(1.5) if sides == "absorbing" else PlaneWave()
    return Setup(RandomMedium(strength, 1.0, 5, box=(128.0, 64.0)), source, length, width, sides)


def pair_of(shape):
    """A forward and an inverse transform in place: planned FFTW on two threads where pyfftw is installed, else scipy."""
    if not available():
        field = np.zeros(shape, np.complex64)
        return lambda: scipy.fft.ifft2(scipy.fft.fft2(field, workers=THREADS), workers=THREADS)
    import pyfftw

    field = pyfftw.empty_aligned(shape, dtype=np.complex64)
    options = {"axes": (0, 1), "threads": THREADS, "flags": ("FFTW_MEASURE",)}
    forward = pyfftw.FFTW(field, field, **options)
    inverse = pyfftw.FFTW(field, field, direction="FFTW_BACKWARD", normalise_idft=False, **options)
    field[:] = 0.0
    return lambda: (forward.execute(), inverse.execute())


@pytest.mark.parametrize("wavelength", [0.05, 0.025] if FULL else [0.1])
def test_sweeps_against_transforms(wavelength):
    table = SlabTable(setup_of(20.0, 10.0, 0.02))
    with Team() as team:
        problem = FullProblem(table, wavelength, np.complex64, team, resolution=1.02)
        grid, operator, sweeps = problem.machinery(table.setup.parts()[0])
        pair = pair_of(grid.shape)
        b, out = operator.empty(), operator.empty()
        b[...] = 1e-3

        def sweep():
            sweeps.apply(out, b)

        def two_and_residual():
            sweeps.apply(out, b)
            operator.apply(b, out)
            sweeps.apply(out, b)
            b[...] = 1e-3

        ways = {"transform pair": pair, "one sweep": sweep, "two sweeps and a residual": two_and_residual}
        for way in ways.values():
            way()
        times = best(ways, ROUNDS)
    points = grid.shape[0] * grid.shape[1]
    print(f"\n{grid.shape[0]} x {grid.shape[1]} points, single precision, ns a point and pairs")
    print_times(times, points, times["transform pair"])
    if points > 3e6:
        assert times["one sweep"] < 2.5 * times["transform pair"]
        assert times["two sweeps and a residual"] < 5.0 * times["transform pair"]


def series(operator, b, exact, wanted, apply):
    """Run the Born series until its error against a reference is as wanted; return seconds and iterations."""
    grid = operator.grid
    gamma = 1.0 - (grid.loss_x[:, None] + grid.loss_y + 1j * operator.v) / operator.eps
    gamma, size = gamma.astype(b.dtype), np.linalg.norm(exact)
    field, seconds = np.zeros_like(b), 0.0
    for count in range(1, 5000):
        begin = time.perf_counter()
        change = apply(field)
        np.subtract(b, change, out=change)
        change *= gamma
        field += change
        seconds += time.perf_counter() - begin
        if count % 20 == 0 and np.linalg.norm(field - exact) < wanted * size:
            return seconds, count
    raise AssertionError("the series did not get there")


def plain_gmres(b, exact, wanted, apply):
    """Run scipy's GMRES(30) without a preconditioner until its error is as wanted; return seconds and products with A."""
    products, field, size = 0, np.zeros(b.size, b.dtype), np.linalg.norm(exact)

    def product(flat):
        nonlocal products
        products += 1
        return apply(flat.reshape(b.shape)).ravel()

    matrix = scipy.sparse.linalg.LinearOperator((b.size, b.size), matvec=product, dtype=b.dtype)
    seconds = 0.0
    for _ in range(100):
        begin = time.perf_counter()
        field, _ = scipy.sparse.linalg.gmres(matrix, b.ravel(), x0=field, restart=30, maxiter=1, rtol=1e-7)
        seconds += time.perf_counter() - begin
        if np.linalg.norm(field - exact.ravel()) < wanted * size:
            return seconds, products
    raise AssertionError("GMRES did not get there")


@pytest.mark.parametrize("size", [(20.0, 10.0), (40.0, 20.0)] if FULL else [(10.0, 9.0)])
def test_against_the_born_series(size, monkeypatch):
    """Pads that absorb more gently than usual, for both: the series is slow where they are strong."""
    monkeypatch.setattr(full_grid, "PAD_LOSS", 4.0)
    wavelength, tolerance = 0.1, 1e-3
    table = SlabTable(setup_of(*size, 0.05))
    part = table.setup.parts()[0]
    with Team() as team:
        problem = FullProblem(table, wavelength, np.complex64, team, resolution=1.02)
        exact = FullProblem(table, wavelength, np.complex128, team, resolution=1.02)
        exact = exact.solve(part, 1e-6, lambda share: None).solved.field
        seconds = np.inf
        for _ in range(ROUNDS):
            begin = time.perf_counter()
            found = problem.solve(part, tolerance, lambda share: None)
            seconds = min(seconds, time.perf_counter() - begin)
        wanted = np.linalg.norm(found.solved.field - exact) / np.linalg.norm(exact)
        operator = DampedOperator(found.grid, problem.u, born_loss(problem.u, found.grid), np.complex64, team)
        b, *_ = problem.source(found.grid, found.free)
        operator.green(b)
        room = operator.empty()

        def own(field):
            operator.apply(room, field)
            return room

        potential = found.grid.k**2 * (operator.v + 1j * (operator.damp_x[:, None] + operator.damp_y))
        green = 1.0 / (found.grid.k**2 * (1.0 + 1j * operator.eps) - found.grid.qx[:, None] ** 2 - found.grid.qy**2)

        def plain(field):
            waves = scipy.fft.fft2(potential * field, workers=THREADS)
            return field - scipy.fft.ifft2(green * waves, workers=THREADS)

        same, count = series(operator, b, exact, wanted, own)
        usual, _ = series(operator, b.astype(complex), exact, wanted, plain)
        krylov, products = plain_gmres(b, exact, wanted, own) if size[0] < 40.0 else (np.nan, 0)
    print(
        f"\n{size[0]:g} x {size[1]:g}, wavelength {wavelength}: error {wanted:.1e}; sweeps {seconds:.3f} s "
        f"({found.solved.iterations + 1} sweeps); Born series, same kernels {same:.2f} s ({count} iterations), "
        f"{same / seconds:.0f} times; with scipy.fft {usual:.2f} s, {usual / seconds:.0f} times; GMRES(30) on the same "
        f"operator {krylov:.2f} s ({products} products), {krylov / seconds:.0f} times"
    )
    assert same > 4.0 * seconds


def test_time_to_answer():
    """Seconds for a whole solve, medium and tables included, after a first one."""
    for sides in ("absorbing", "periodic"):
        wave, seconds = FullWave(setup_of(20.0, 10.0, 0.05, sides), "single"), []
        for _ in range(ROUNDS):
            begin = time.perf_counter()
            result = wave.solve(0.0997)
            seconds.append(time.perf_counter() - begin)
        print(
            f"\n20 x 10, wavelength 0.0997, {sides} sides: first {seconds[0]:.2f} s, then {min(seconds[1:]):.3f} s; "
            f"field error {float(result.field_error[0]):.1e}"
        )
        assert float(result.field_error[0]) < 1.5e-3


@pytest.mark.skipif(not FULL, reason="BRANCHLAB_BENCHMARK=full")
@pytest.mark.parametrize(
    ("size", "wavelength", "strength"),
    [((60, 30), 0.1, 0.05), ((60, 30), 0.05, 0.05), ((60, 30), 0.025, 0.02), ((60, 30), 0.025, 0.05)],
)
def test_large_domain(size, wavelength, strength):
    """Up to 2400 x 1200 wavelengths."""
    wave = FullWave(setup_of(*size, strength), "single")
    wave.solve(10 * wavelength)  # the medium and what is compiled
    begin = time.perf_counter()
    result = wave.solve(wavelength)
    print(
        f"\n{size[0]} x {size[1]}, wavelength {wavelength}, strength {strength}: "
        f"{result.points_x[0]} x {result.points_y[0]} points, "
        f"{time.perf_counter() - begin:.1f} s, {int(result.iterations[0])} iterations, field error "
        f"{float(result.field_error[0]):.1e}, {float(result.memory[0]) / 2**30:.2f} GiB"
    )


@pytest.mark.skipif(not FULL, reason="BRANCHLAB_BENCHMARK=full")
def test_scan_of_wavelengths():
    wave = FullWave(setup_of(20.0, 10.0, 0.05), "single")
    wave.solve(0.2)
    begin = time.perf_counter()
    wave.solve(np.geomspace(0.05, 0.2, 16))
    print(f"\n16 wavelengths from 0.05 to 0.2 on 20 x 10: {time.perf_counter() - begin:.2f} s")


@pytest.mark.skipif(not FULL, reason="BRANCHLAB_BENCHMARK=full")
def test_against_a_sparse_direct_solver(monkeypatch):
    """scipy's SuperLU on a fourth-order difference stencil of 12 points per wavelength, with the same pads."""
    monkeypatch.setattr(full_grid, "PAD_WAVELENGTHS", 6.0)
    monkeypatch.setattr(full_grid, "PAD_LOSS", 4.0)
    wavelength = 0.5
    setup = Setup(RandomMedium(0.05, 1.0, 5, box=(32.0, 32.0)), Beam(0.8), 3.0, 5.0, "absorbing")
    table, part = SlabTable(setup), setup.parts()[0]
    with Team() as team:
        fine = FullProblem(table, wavelength, complex, team, resolution=1.0, points_per_wavelength=12.0)
        exact = fine.solve(part, 1e-7, lambda share: None)
        grid = exact.grid
        problem = FullProblem(table, wavelength, np.complex64, team, resolution=1.02)
        seconds, found = np.inf, None
        for _ in range(ROUNDS):
            begin = time.perf_counter()
            found = problem.solve(part, 1e-3, lambda share: None)
            seconds = min(seconds, time.perf_counter() - begin)
        off = found.solved.error
        source, *_ = fine.source(grid, exact.free)
    begin = time.perf_counter()
    lines = []
    for n, h in zip(grid.shape, grid.pitch, strict=True):
        bands = [np.full(n, value / (12.0 * h * h)) for value in (-1.0, 16.0, -30.0, 16.0, -1.0)]
        lines.append(scipy.sparse.diags(bands, (-2, -1, 0, 1, 2), shape=(n, n)))
    index = 1.0 - fine.u + 1j * (grid.loss_x[:, None] + grid.loss_y)
    matrix = scipy.sparse.kron(lines[0], scipy.sparse.eye(grid.shape[1]))
    matrix = matrix + scipy.sparse.kron(scipy.sparse.eye(grid.shape[0]), lines[1])
    matrix = matrix + scipy.sparse.diags(grid.k**2 * index.ravel())
    # the ordering and the pivots that suit a symmetric pattern: the default takes several times longer
    how = {"permc_spec": "MMD_AT_PLUS_A", "diag_pivot_thresh": 0.0, "options": {"SymmetricMode": True}}
    field = scipy.sparse.linalg.splu(matrix.tocsc(), **how).solve(source.ravel())
    direct = time.perf_counter() - begin
    wrong = np.linalg.norm(field - exact.solved.field.ravel()) / np.linalg.norm(exact.solved.field)
    print(
        f"\n3 x 5, wavelength {wavelength}: sweeps {seconds:.4f} s, estimated error {off:.1e}; SuperLU, {field.size} unknowns, "
        f"{direct:.1f} s, error {wrong:.1e}: {direct / seconds:.0f} times"
    )
    assert direct > 20.0 * seconds
    assert wrong > off
