"""Laws of whole fronts of rays: flux, error bars, refinement, spread of angles and places."""

import numba
import numpy as np
import pytest
from scipy.special import erf

from branchlab.launch import Beam, FieldSource, PlaneWave, PointSource, Setup
from branchlab.launch.part import FrontRays
from branchlab.media import Duct, Lens, RandomMedium
from branchlab.rays import RayEnsemble
from branchlab.rays.front import TracedFront
from branchlab.rays.march import Marcher
from tests.canon import SOURCES
from tests.oracles.white_noise import WhiteNoise

STRONG = RandomMedium(0.1, 1.0, seed=7)


def launch(y):
    one, zero = np.ones(y.shape), np.zeros(y.shape)
    return FrontRays(y, y, zero, zero, one, zero, one)


def last_of(setup, rays, *options):
    *_, last = Marcher(setup, *options).march(rays)
    return last


# ---- flux


@pytest.mark.parametrize("sides", ["periodic", "absorbing"])
@pytest.mark.parametrize("source", SOURCES, ids=lambda s: type(s).__name__)
def test_flux_is_closed_past_caustics(source, sides):
    """Every source, both kinds of sides: what is in the cells and what has left is what was sent.

    Transport equation: Born & Wolf, Principles of Optics, 3.1.
    """
    setup = Setup(STRONG, source, 14.0, 16.0, sides)
    density = RayEnsemble(setup).density()
    total = (density.flux + density.lost_flux).to_numpy()
    np.testing.assert_allclose(total, total[0], rtol=1e-12)
    sent = 16.0
    if isinstance(source, (PointSource, Beam)):
        sent = 1.0
    elif sides == "absorbing" and not isinstance(source, FieldSource):
        edge = np.linspace(0, 1, 20001)  # a plane wave ends softly at both sides
        rise = edge**5 * (126 - edge * (420 - edge * (540 - edge * (315 - 70 * edge))))
        sent -= 2 * setup.window.fade * (1 - np.trapezoid(rise**2, edge))
    # flux per tube is integrated by a rule of degree 5: exact for even illumination, else to the tubes' width
    assert abs(total[0] / sent - 1.0) < (1e-12 if sent == 16.0 else 1e-6)
    if sides == "periodic":
        assert float(np.abs(density.lost_flux).max()) == 0.0


def test_density_on_one_thread_is_that_on_all():
    rays, threads, found = RayEnsemble(Setup(STRONG, PlaneWave(), 14.0, 16.0)), numba.get_num_threads(), []
    try:
        for count in (1, threads):
            numba.set_num_threads(count)
            found.append(rays.density().intensity.to_numpy())
    finally:
        numba.set_num_threads(threads)
    np.testing.assert_array_equal(*found)


# ---- error bar and refinement

FIELD = FieldSource(np.linspace(-8, 8, 257), 1.0, 0.3 * np.cos(np.pi * np.linspace(-8, 8, 257) / 4))
CASES = {
    "random": (STRONG, PlaneWave(), 14.0, "periodic"),
    "random, absorbing": (RandomMedium(0.1, 1.0, seed=8), PlaneWave(), 14.0, "absorbing"),
    "random, stronger": (RandomMedium(0.15, 1.0, seed=9), PlaneWave(0.05), 12.0, "periodic"),
    "matern": (RandomMedium(0.05, 1.0, seed=3, family="matern", box=(32.0, 32.0)), PlaneWave(), 12.0, "periodic"),
    "lens": (Lens(0.4, 1.5, x=3.0), FIELD, 14.0, "periodic"),
    "duct": (Duct(0.1, profile="sech"), PlaneWave(), 20.0, "absorbing"),
}


def dots(setup, count):
    """Share of the flux per cell at the exit: rays on a finer table with shorter steps, counted where they fall."""
    (part,) = setup.parts()
    low, high = part.front.span
    rays = part.front.at(low + (np.arange(count) + 0.5) * (high - low) / count)
    cell = np.floor((last_of(setup.with_(screens=2), rays, 8, 16).y + 0.5 * setup.width) / setup.cell).astype(int)
    if setup.sides == "periodic":
        cell = cell % setup.y.size
    inside = (cell >= 0) & (cell < setup.y.size)
    laid = np.bincount(cell[inside], rays.amplitude[inside] ** 2, minlength=setup.y.size)
    return laid / laid.sum()


@pytest.mark.parametrize("case", CASES)
def test_the_error_bar_covers_the_error(case):
    """Misplaced flux against half a million dots on a finer table with shorter steps."""
    medium, source, length, sides = CASES[case]
    setup = Setup(medium, source, length, 16.0, sides)
    density = RayEnsemble(setup).density()
    laid = (density.intensity[-1] / density.intensity[-1].sum()).to_numpy()
    exact, half = dots(setup, 1 << 19), dots(setup, 1 << 18)
    true = 0.5 * np.abs(laid - exact).sum()
    of_dots = 0.5 * np.abs(exact - half).sum()
    told = float(density.numerical_error[-1])
    assert of_dots < 1e-3  # the edges of dots: one in 2000 per cell and branch
    assert true <= told + of_dots
    assert told < 0.03


def test_an_error_bar_without_the_step_would_not_do(monkeypatch):
    """Companion: with the coarser march taken for the finer one, steps as long as a scale go unnoticed."""
    setup = Setup(STRONG, PlaneWave(), 14.0, 16.0)
    rays = RayEnsemble(setup, steps_per_scale=2)
    exact = dots(setup, 1 << 18)
    marcher = rays.marcher
    monkeypatch.setattr("branchlab.rays.ensemble.Marcher", lambda *_: marcher)
    blind = rays.density()
    laid = (blind.intensity[-1] / blind.intensity[-1].sum()).to_numpy()
    assert 0.5 * np.abs(laid - exact).sum() > 2.0 * float(blind.numerical_error[-1])


def test_a_refined_front_needs_fewer_rays():
    """At equal error, against fronts of equal steps, past the first caustics."""
    setup = Setup(STRONG, PlaneWave(), 16.0, 16.0)
    (part,), marcher = setup.parts(), Marcher(setup)
    rays = RayEnsemble(setup)

    def laid(front):
        return rays._laid(front, setup.cell)[0][-1] / 16.0

    def even(count):
        return TracedFront(part, marcher, count, 1e9, count)

    exact = laid(even(1 << 17))
    refined = TracedFront(part, marcher, 64, 0.5 * setup.cell, 1 << 14)
    error = 0.5 * np.abs(laid(refined) - exact).sum()
    as_many = 0.5 * np.abs(laid(even(refined.s.size)) - exact).sum()
    twice = 0.5 * np.abs(laid(even(2 * refined.s.size)) - exact).sum()
    assert error < twice < as_many


# ---- spread of angles and places


def test_angles_in_a_medium_with_memory():
    """<p**2> = (e**2/l**2) [sqrt(2 pi) l x erf(x/(l sqrt 2)) - 2 l**2 (1 - exp(-x**2/(2 l**2)))].

    First order in the index fluctuation e, for exp(-r**2/(2 l**2)): Chernov, Wave Propagation in a Random Medium
    (1960) (from memory). Here e = strength/2, correlation_length = l sqrt 2; at x = 2 and 4 the memoryless law
    sqrt(2 pi) e**2 x/l would be 30 and 14 % high.
    """
    strength, seeds, found = 0.01, 48, []
    y = np.linspace(-64, 64, 257)[:-1]
    for seed in range(seeds):
        medium = RandomMedium(strength, 1.0, seed=seed, box=(16.0, 128.0))
        states = Marcher(Setup(medium, PlaneWave(), 4.0, 128.0, screens=3, cells=256)).march(launch(y))
        found.append([np.mean(state.p**2) for state in states][1:])
    mean, error = np.mean(found, axis=0), np.std(found, axis=0, ddof=1) / np.sqrt(seeds)
    x, length, e = np.array([2.0, 4.0]), 0.5**0.5, 0.5 * strength
    memory = 2 * length**2 * -np.expm1(-(x**2) / (2 * length**2))
    exact = (e / length) ** 2 * (np.sqrt(2 * np.pi) * length * x * erf(x / length / np.sqrt(2)) - memory)
    assert (error < 0.03 * exact).all()
    assert (np.abs(mean - exact) < 3 * error + 0.005 * exact).all()  # caustics, at 50, are far off
    assert (np.sqrt(2 * np.pi) * e**2 * x / length > 1.12 * exact).all()


def test_angles_and_places_in_a_medium_without_memory():
    """<p**2> = Dtheta x, <(y - y0)**2> = Dtheta x**3/3, <p (y - y0)> = Dtheta x**2/2, at every x, past caustics too.

    Dtheta = D l**2/6 for exp(-r**2/l**2), l = 1 (Tatarskii, The Effects of the Turbulent Atmosphere on Wave
    Propagation (1971), from memory): diffusion of the angle, exact where slabs are independent.
    """
    focal, step, end, seeds, found = 8.0, 0.5, 5, 16, []
    for seed in range(200, 200 + seeds):
        setup = Setup(
            WhiteNoise.of_focal(focal, step, 512.0, seed), PlaneWave(), end * focal, 512.0, screens=3, cells=1024
        )
        rays = launch(np.linspace(-256, 256, 513)[:-1])
        *_, middle, last = Marcher(setup).march(rays)
        rows = [(s.p, s.y - rays.y) for s in (middle, last)]
        found.append([[np.mean(p**2), np.mean(r**2), np.mean(p * r)] for p, r in rows])
    mean, error = np.mean(found, axis=0), np.std(found, axis=0, ddof=1) / np.sqrt(seeds)
    # kicks in the middles of slabs: sums of ((n + 1/2) step)**2 and ((n + 1/2) step) differ by (step/x)**2/4 at most
    x, d_theta = np.array([[0.5], [1.0]]) * end * focal, focal**-3 / 6
    exact = d_theta * np.concatenate([x, x**3 / 3, x**2 / 2], axis=1)
    assert (error < 0.04 * exact).all()
    assert (np.abs(mean - exact) < 3.5 * error).all()  # six figures
