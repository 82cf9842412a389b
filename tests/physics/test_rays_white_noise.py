"""Laws of rays in a medium without memory, against published and closed-form values; lengths in z_c = D**(-1/3)."""

from typing import NamedTuple

import numpy as np
import pytest
from scipy.special import airy, gamma

from branchlab.launch import PlaneWave, Setup
from branchlab.launch.part import FrontRays
from branchlab.rays import RayEnsemble
from branchlab.rays.caustics import caustic_points
from branchlab.rays.march import Marcher
from tests.oracles.white_noise import WhiteNoise

FOCAL, STEP, WIDTH, SPACING = 8.0, 0.5, 1024.0, 0.5
END, SEEDS = 16, 30  # in z_c; rays a correlation length apart are as good as independent: about 30 000
RAYS = int(WIDTH / SPACING)


def setup_of(seed, end):
    """A window of `end` z_c with a screen after every kick."""
    medium = WhiteNoise.of_focal(FOCAL, STEP, WIDTH, seed)
    return Setup(medium, PlaneWave(), end * FOCAL, WIDTH, screens=1 + round(end * FOCAL / STEP), cells=2048)


def flat_front(count=RAYS):
    y = -0.5 * WIDTH + (np.arange(count) + 0.5) * WIDTH / count
    one, zero = np.ones(count), np.zeros(count)
    return FrontRays(y, y, zero, zero, one, zero, one)


class Traced(NamedTuple):
    plane: np.ndarray  # first caustics of a plane wave, inf where none is met
    point: np.ndarray  # of point sources
    stretch: dict  # z -> J = dy/dy0 of the plane wave


@pytest.fixture(scope="module")
def traced():
    """Both columns of the stability matrix in one march: plane wave (A, C), point source (B, D)."""
    plane, point, stretch = [], [], {z: [] for z in (0.5, 1.0, 1.5, 2.0, 2.5, 3.0)}
    for seed in range(SEEDS):
        states = list(Marcher(setup_of(seed, END)).march(flat_front(), matrix=True))
        for firsts, found in (
            (plane, caustic_points(states)),
            (point, caustic_points(state._replace(A=state.B, C=state.D) for state in states)),
        ):
            first = np.full(RAYS, np.inf)
            first[found.ray[found.order == 1]] = found.x[found.order == 1] / FOCAL
            firsts.append(first)
        for z, kept in stretch.items():
            kept.append(states[round(z * FOCAL / STEP)].A)
    return Traced(np.array(plane), np.array(point), {z: np.array(kept) for z, kept in stretch.items()})


def mean_first(firsts):
    """Mean over rays, and its standard error from the scatter of realisations.

    What lies beyond END decays as exp(-0.281068 z) (leading eigenvalue of the Fokker-Planck operator with absorption at
    the caustic; law of Kulkarny & White, Phys. Fluids 25 (1982) 1770).
    """
    beyond = np.isinf(firsts)
    reached = np.where(beyond, END, firsts) + beyond / 0.281068
    means = reached.mean(axis=1)
    return means.mean(), means.std(ddof=1) / np.sqrt(means.size)


def test_mean_first_caustic_of_a_plane_wave(traced):
    """(2/3) 2**(1/3) pi**2 [Ai(0)**2 + Bi(0)**2] = 4.1796.

    The law is universal: Kulkarny & White, Phys. Fluids 25 (1982) 1770; the constant follows from Halperin's (below).
    """
    ai, _, bi, _ = airy(0.0)
    exact = 2 / 3 * 2 ** (1 / 3) * np.pi**2 * (ai**2 + bi**2)
    assert abs(exact - 4.1796234) < 1e-7
    mean, error = mean_first(traced.plane)
    assert error < 0.006 * exact
    assert abs(mean - exact) < 0.01 * exact


def test_mean_first_caustic_of_a_point_source(traced):
    """2**(1/3) pi**2 [Ai(0)**2 + Bi(0)**2] = 6.2694, one over Halperin's density of nodes, Phys. Rev. 139 (1965) A104."""
    ai, _, bi, _ = airy(0.0)
    exact = 2 ** (1 / 3) * np.pi**2 * (ai**2 + bi**2)
    assert abs(exact - 6.2694351) < 1e-7
    mean, error = mean_first(traced.point)
    assert error < 0.006 * exact
    assert abs(mean - exact) < 0.01 * exact


def test_quantiles_of_the_first_caustic(traced):
    """5, 25, 50, 75 % of the universal law (Kulkarny & White 1982; numbers by quadrature of its Fokker-Planck equation)."""
    levels = [0.05, 0.25, 0.5, 0.75]
    np.testing.assert_allclose(np.quantile(traced.plane, levels), [1.0966, 1.7654, 3.0053, 5.4325], rtol=0.012)
    np.testing.assert_allclose(np.quantile(traced.point, levels), [2.596, 3.738, 5.239, 7.711], rtol=0.012)


def test_law_of_the_first_caustic(traced):
    """Kolmogorov-Smirnov distance to the universal survival function (Kulkarny & White 1982), at its tabulated points."""
    t = np.array([0.6, 0.8, 1, 1.25, 1.5, 2, 2.5, 3, 4, 5, 6, 8, 10, 12])
    survival = np.array([
        0.999989, 0.996753, 0.972065, 0.906317, 0.827999, 0.689447, 0.583830,
        0.500788, 0.374730, 0.282381, 0.213108, 0.121458, 0.069229, 0.039460,
    ])  # fmt: skip
    measured = (traced.plane.reshape(-1, 1) > t).mean(axis=0)
    assert np.abs(measured - survival).max() < 0.007  # 1.2/sqrt(30 000)


def test_a_wrong_noise_is_seen(traced):
    """Companion: 5 % more curvature noise, which shortens every distance by 1.6 %, fails the same bounds."""
    mean, _ = mean_first(traced.plane * 1.05 ** (-1 / 3))
    assert abs(mean - 4.1796234) > 0.01 * 4.1796234


def test_second_moment_of_the_stretch(traced):
    """<J**2> = (1/3) sum_j exp(w**j (2 D)**(1/3) z), w = exp(2 pi i/3), from the closed moment equations."""
    w = np.exp(2j * np.pi * np.arange(3) / 3)
    for z, bound in ((0.5, 0.002), (1.0, 0.01), (1.5, 0.02)):  # the fourth moment grows as exp(3.5 z)
        exact = np.exp(w * 2 ** (1 / 3) * z).sum().real / 3
        assert abs((traced.stretch[z] ** 2).mean() - exact) < bound * exact


def test_mean_number_of_rays_through_a_point(traced):
    """<abs J> = 1.010, 1.136, 1.423, 1.838, 2.368 at z = 1 ... 3 (quadrature of the Fokker-Planck equation of J)."""
    for z, exact in ((1.0, 1.010), (1.5, 1.136), (2.0, 1.423), (2.5, 1.838), (3.0, 2.368)):
        assert abs(np.abs(traced.stretch[z]).mean() - exact) < 0.02 * exact


def test_density_of_stretches_at_zero(traced):
    """2 p_J(0) = 0.291, 0.635, 0.579, 0.352 at z = 1, 1.5, 2, 3: what rays alone say of dS**2/d ln k.

    The scintillation index grows as the logarithm of k (Berry, J. Phys. A 10 (1977) 2061), with this coefficient; the
    fourth-moment equation of the wave gives 0.287, 0.638, 0.577, 0.355 between kappa 20 and 40 (Shishov 1968; Codona et
    al., Radio Sci. 21 (1986) 929, solved anew for these numbers). 5 %, of which sampling takes 2.5.
    """
    for z, exact in ((1.0, 0.287), (1.5, 0.638), (2.0, 0.577), (3.0, 0.355)):
        found = (np.abs(traced.stretch[z]) < 0.1).mean() / 0.1
        assert abs(found - exact) < 0.05 * exact


def test_rays_per_point_of_the_density_are_the_same_number():
    density = RayEnsemble(setup_of(0, 3), rays_per_scale=16.0).density()
    for z, exact in ((1.0, 1.010), (2.0, 1.423), (3.0, 2.368)):
        found = float(density.rays_per_point.sel(x=z * FOCAL, method="nearest"))
        assert abs(found - exact) < 0.06 * exact  # one realisation of a thousand correlation lengths


def test_the_ensemble_gives_the_same_first_caustics(traced):
    found = RayEnsemble(setup_of(0, END)).caustics(rays=RAYS).first_caustic.to_numpy() / FOCAL
    np.testing.assert_allclose(np.nan_to_num(found, nan=np.inf), traced.plane[0], rtol=1e-6)


@pytest.fixture(scope="module")
def far():
    """The stability matrix after 20 and after 100 z_c."""
    setup = setup_of(99, 100)
    setup = setup.with_(screens=1 + setup.x.size // 16)
    states = list(Marcher(setup).march(flat_front(512), matrix=True))
    return states[len(states) // 5], states[-1]


def test_lyapunov_exponent(far):
    """6**(1/3) sqrt(pi)/(2 Gamma(1/6)) = 0.28931 (Derrida & Gardner, J. Phys. 45 (1984) 1283; constant from memory)."""
    exact = 6 ** (1 / 3) * np.sqrt(np.pi) / (2 * gamma(1 / 6))
    assert abs(exact - 0.2893083) < 1e-7
    growth = [0.5 * np.log(s.A**2 + (s.B / FOCAL) ** 2 + (s.C * FOCAL) ** 2 + s.D**2).mean() for s in far]
    assert abs((growth[1] - growth[0]) / 80 - exact) < 0.02 * exact


def test_caustics_per_length(far):
    """1/6.2694 = 0.1595 far away: Halperin's density of nodes, Phys. Rev. 139 (1965) A104. Counted by the Maslov index."""
    rate = (far[1].maslov - far[0].maslov).mean() / 80
    assert abs(rate - 0.159504) < 0.01 * 0.159504
