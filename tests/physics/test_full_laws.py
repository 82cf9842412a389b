"""Laws of the full wave: flux, reciprocity, what absorbs, two iterations against each other, and its own error bars."""

import numpy as np
import pytest

from branchlab.launch import Beam, PlaneWave, Setup
from branchlab.media import Lens, RandomMedium
from branchlab.waves import FullWave
from branchlab.waves.born import born_iteration, born_loss
from branchlab.waves.full_grid import SlabTable
from branchlab.waves.full_operator import DampedOperator
from branchlab.waves.full_problem import FullProblem
from branchlab.waves.team import Team
from tests.oracles.empty import Empty


def misplaced(a, b):
    """Half the absolute difference of intensities, screen by screen, each normalised."""
    a, b = (one / one.sum(axis=-1, keepdims=True) for one in (a, b))
    return 0.5 * np.abs(a - b).sum(axis=-1)


@pytest.mark.parametrize(("precision", "tolerance", "allowed"), [("single", 1e-4, 1e-4), ("double", 1e-6, 1e-6)])
@pytest.mark.parametrize("angle", [0.0, 0.3])
def test_flux_in_is_flux_out_and_back(precision, tolerance, allowed, angle):
    """Conservation of flux between periodic sides (Morse & Feshbach 1953, ch. 11): in = through a screen + back."""
    setup = Setup(RandomMedium(0.08, 1.0, 3, box=(64.0, 32.0)), PlaneWave(angle), 8.0, 7.0)
    result = FullWave(setup, precision).solve(0.23, tolerance=tolerance)
    incoming = setup.width * np.cos(angle)
    through = result.flux.values[0] / incoming
    print(precision, angle, np.abs(through - 1 + float(result.reflected[0])).max(), float(result.reflected[0]))
    assert np.abs(through - 1.0 + float(result.reflected[0])).max() < allowed
    both = result.forward_flux.values[0] - result.backward_flux.values[0]
    assert np.abs(both - result.flux.values[0]).max() < 1e-3 * incoming  # what does not travel is in neither


def test_reciprocity_of_reflection():
    """Reflection from q into -q' equals that from q' into -q, each over its flux (Born & Wolf; de Hoop 1960), here to 1e-6."""
    k, width = 2 * np.pi, 8.0
    orders = 1, 3
    medium = Lens(0.5, 0.35, x=2.5, y=0.7) + Lens(-0.4, 0.3, x=3.2, y=-1.1)
    amplitudes = []
    for inward, outward in (orders, orders[::-1]):
        setup = Setup(medium, PlaneWave(np.arcsin(inward / width)), 6.0, width, screens=2, cells=64)
        with Team() as team:
            problem = FullProblem(SlabTable(setup), 1.0, complex, team, resolution=1.5)
            found = problem.solve(setup.parts()[0], 1e-8, lambda share: None)
        grid = found.grid
        row = np.argmin(np.abs(grid.x - grid.edges[0]))
        waves = np.fft.fft(found.solved.field[row]) / grid.shape[1]
        q = 2 * np.pi * -outward / width
        mode = np.argmin(np.abs(grid.qy - q))
        assert grid.qy[mode] == pytest.approx(q)
        kx_in, kx_out = (np.sqrt(k**2 - (2 * np.pi * n / width) ** 2) for n in (inward, outward))
        phase = np.exp(1j * kx_out * grid.x[row] - 1j * (q - grid.bloch) * grid.y[0])
        amplitudes.append(waves[mode] * phase * np.sqrt(kx_out / kx_in))
    print(amplitudes)
    assert abs(amplitudes[0]) > 1e-3
    assert abs(amplitudes[0] - amplitudes[1]) < 1e-6


def test_absorbing_sides():
    """What comes back from the pads: below -80 dB up to 60 degrees, -60 dB up to 75. The field of a sheet is exact.

    A sheet g(x) exp(iqy) in free space makes the wave exp(i kx x + iqy)/(2i kx) int g exp(-i kx x) dx (DLMF 1.17: Green's
    function of the line).
    """
    setup = Setup(Empty(), PlaneWave(), 6.0, 12.0, screens=2, cells=64)
    with Team() as team:
        problem = FullProblem(SlabTable(setup), 0.5, complex, team, resolution=1.6)
        grid, *_ = problem.machinery(setup.parts()[0])
        operator = DampedOperator(grid, problem.u, born_loss(problem.u, grid), complex, team)
        inside = (grid.x > 1.5) & (grid.x < 6.0)
        for degrees in (0.0, 45.0, 58.0, 74.0):
            q = 2 * np.pi / setup.width * round(np.sin(np.radians(degrees)) * grid.k * setup.width / (2 * np.pi))
            kx = np.sqrt(grid.k**2 - q**2)
            across = np.exp(1j * q * grid.y)
            source = (np.exp(-(((grid.x - 0.5) / 0.3) ** 2))[:, None] * across).astype(complex)
            size = 0.3 * np.sqrt(np.pi) * np.exp(-((0.15 * kx) ** 2)) / (2j * kx)
            operator.green(source)
            field = born_iteration(operator, source, np.zeros_like(source), 1.0, 1e-7, lambda share: None).field
            exact = size * np.exp(1j * kx * (grid.x[inside, None] - 0.5)) * across
            level = 20 * np.log10(np.abs(field[inside] - exact).max() / abs(size))
            angle = np.degrees(np.arcsin(q / grid.k))
            print(f"{angle:.1f} degrees: {level:.0f} dB")
            assert level < (-80.0 if angle <= 60.0 else -60.0)


@pytest.mark.parametrize(("dtype", "tolerance", "allowed"), [(np.complex64, 2e-5, 1e-4), (np.complex128, 1e-7, 1e-6)])
def test_sweeps_and_born_series_agree(dtype, tolerance, allowed):
    """Two iterations with nothing but the equation in common (the series: Osnabrugge et al. 2016)."""
    setup = Setup(RandomMedium(0.1, 1.0, 5, box=(64.0, 32.0)), Beam(1.0), 5.0, 7.0, "absorbing")
    part = setup.parts()[0]
    with Team() as team:
        problem = FullProblem(SlabTable(setup), 0.4, dtype, team, resolution=1.1)
        swept = problem.solve(part, tolerance, lambda share: None)
        operator = DampedOperator(swept.grid, problem.u, born_loss(problem.u, swept.grid), dtype, team)
        b, scale, *_ = problem.source(swept.grid, swept.free)
        operator.green(b)
        born = born_iteration(operator, b, np.zeros_like(b), scale, tolerance, lambda share: None)
    off = np.linalg.norm(born.field - swept.solved.field) / np.linalg.norm(born.field)
    print(np.dtype(dtype).name, off, born.iterations, swept.solved.iterations)
    assert born.converged
    assert off < allowed


def test_error_bars():
    """Reported over true misplaced flux, on 20 media of three strengths, against a finer grid and tolerance."""
    ratios, worst = [], []
    for strength in (0.03, 0.07, 0.12):
        for seed in range(20):
            sides = "periodic" if seed % 3 == 0 else "absorbing"
            source = Beam(1.0) if seed % 2 else PlaneWave()
            setup = Setup(RandomMedium(strength, 1.0, seed, box=(64.0, 32.0)), source, 6.0, 6.0, sides)
            found = FullWave(setup, "single").solve(0.237)
            exact = FullWave(setup, points_per_wavelength=4.2).solve(0.237, tolerance=1e-5)
            true = misplaced(found.intensity.values[0], exact.intensity.values[0])
            ratios.append(found.numerical_error.values[0].mean() / true.mean())
            worst.append(true.max() / 1e-3)
    ratios = np.array(ratios)
    print("reported/true", np.percentile(ratios, [0, 5, 25, 50, 75, 95, 100]).round(2), "worst/tolerance", max(worst))
    assert np.mean((ratios > 0.2) & (ratios < 5.0)) >= 0.95
    assert ratios.min() > 0.33
    assert 1.0 < np.median(ratios) < 4.0
    assert max(worst) < 3.0
