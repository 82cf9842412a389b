"""Sums over rays where they are exact: linear and quadratic media, through two foci, rays in closed form."""

import numpy as np
import pytest

from branchlab.launch.part import CoherentPart
from branchlab.launch.window import smooth_step
from branchlab.semiclassics.branches import find_branches
from branchlab.semiclassics.frozen import FrozenGaussians
from branchlab.semiclassics.herman_kluk import HermanKluk, PhaseSpace, prefactor
from branchlab.semiclassics.manifold import Line
from branchlab.semiclassics.uniform import AiryPairs, primitive_sum
from tests.oracles import sum_twins as twins

A = 0.7  # v = A**2 y**2: foci of a flat front at (pi/2 + n pi)/A = 2.24, 6.73, ...
BEFORE_AND_BEHIND_TWO_FOCI = [0.5, 2.6, 4.0, 5.5, 8.0]


def relative(field, exact):
    """Largest error relative to the largest value."""
    return np.abs(field - exact).max() / np.abs(exact).max()


def flat_front(count=32768, half=12.0):
    """Equal steps of s with an amplitude that falls smoothly to 0 at the ends, 1 in the middle."""
    ds = 2 * half / count
    s = -half + (np.arange(count) + 0.5) * ds
    return s, ds, smooth_step((half - np.abs(s)) / 2.0)


@pytest.mark.parametrize("x", BEFORE_AND_BEHIND_TWO_FOCI)
@pytest.mark.parametrize("k", [20.0, 250.0])
def test_duct_with_a_curved_front(k, x):
    """exp(ik b y**2/2) in a duct: abs(m)**(-1/2) exp(ik (m'/m) y**2/2 - i (pi/2) maslov), m = cos Ax + (b/A) sin Ax.

    Littlejohn, Phys. Rep. 138 (1986) 193 (quadratic Hamiltonians); the index is Gouy's and Maslov's.
    """
    bend = -0.13
    s, ds, amplitude = flat_front()
    rays = twins.duct(s, bend * s, A, x, tangent=(1, bend))
    front = twins.manifold(rays, s, bend, amplitude, ds, path=0.5 * bend * s**2)
    line = Line(-0.5, 1 / 400, 400, False)
    m, slope = np.cos(A * x) + bend / A * np.sin(A * x), -A * np.sin(A * x) + bend * np.cos(A * x)
    exact = np.abs(m) ** -0.5 * np.exp(0.5j * k * slope / m * line.points**2 - 0.5j * np.pi * rays.maslov[0])
    # round-off of the phase, k S 1e-16, and for packets their thinning weight, (k ds**2 ...)**2 = 5e-11
    assert relative(primitive_sum(find_branches(front, line), k, line.n), exact) < 1e-9
    assert relative(AiryPairs(front, line).field(k), exact) < 1e-9
    for gamma in (0.4 * A, A, 3 * A):
        assert relative(FrozenGaussians(front, gamma, 8.0).field(k, line), exact) < 1e-10


def test_the_duct_fails_with_a_wrong_index():
    """Companion: the same sum with one caustic too many is wrong by order 1."""
    s, ds, amplitude = flat_front()
    rays = twins.duct(s, 0 * s, A, 4.0)
    front = twins.manifold(rays, s, 0.0, amplitude, ds)
    line = Line(-0.5, 1 / 400, 400, False)
    wrong = front._replace(maslov=front.maslov + 1)
    for make in (lambda f: FrozenGaussians(f, A, 8.0).field(60.0, line), lambda f: AiryPairs(f, line).field(60.0)):
        np.testing.assert_allclose(make(wrong) / make(front), -1j, atol=1e-9)


@pytest.mark.parametrize("x", [1.0, 3.0])
def test_van_vleck_kernel_in_a_linear_medium(x):
    """A point source in v = g y: K = sqrt(k/2 pi x) exp(-i pi/4) exp ik[(y-y')**2/2x - g x (y+y')/4 - g**2 x**3/96].

    Van Vleck, PNAS 14 (1928) 178; Feynman & Hibbs, Quantum Mechanics and Path Integrals (1965): the uniform field
    (index mu = -v/2 = -g y/2).
    """
    k, g, start = 60.0, 0.2, 0.3
    p, ds, amplitude = flat_front(half=2.0)
    amplitude = smooth_step((2.0 - np.abs(p)) / 0.5)
    rays = twins.linear(np.full_like(p, start), p, g, x)
    front = twins.manifold(rays, p, 1.0, amplitude, ds, phase=-np.pi / 4)
    front = front._replace(A=rays.B, C=rays.D)
    line = Line(start - 0.5, 1 / 400, 400, False)
    y = line.points
    path = (y - start) ** 2 / (2 * x) - g * x * (y + start) / 4 - g**2 * x**3 / 96
    # a fan sqrt(k/2pi) int exp(ikp(y - y')) dp is sqrt(2 pi/k) times a point of unit strength
    exact = np.sqrt(1 / x) * np.exp(-0.25j * np.pi + 1j * k * path)
    assert relative(primitive_sum(find_branches(front, line), k, line.n) * np.exp(-0.25j * np.pi), exact) < 1e-9
    assert relative(FrozenGaussians(front, 0.5, 8.0).field(k, line), exact) < 1e-10


WAIST, PLACE, TILT = 0.4, 0.3, 0.2


def beam(y, k):
    """A Gaussian beam at x = 0, tilt removed."""
    envelope = (2 / np.pi / WAIST**2) ** 0.25 * np.exp(-(((y - PLACE) / WAIST) ** 2))
    return np.broadcast_to(envelope, (np.size(k), y.size)).astype(complex)


def herman_kluk(k, gamma, rays_at, line, spacing=0.3):
    """Return the Herman-Kluk sum of the beam, with rays known in closed form."""
    space = PhaseSpace(CoherentPart(1.0, TILT, beam, None), line, [k], gamma, spacing, 6.5)
    sent = space.rays
    rays = rays_at(sent.y, sent.p)
    action = rays.action + sent.action
    matrix = rays.A, rays.B, rays.C, rays.D
    hk = HermanKluk(space, 1.0, rays.y, rays.p - TILT, action - TILT * rays.y, matrix, rays.maslov)
    return hk.field(0, line) * np.exp(1j * k * TILT * line.points)


@pytest.mark.parametrize("width", [0.3, 1.0, 1.7])
@pytest.mark.parametrize("k", [30.0, 250.0])
def test_herman_kluk_in_a_duct(k, width):
    """A beam through two foci of a duct, packets of any width, against the ABCD law.

    Kogelnik & Li, Appl. Opt. 5 (1966) 1550 (one transverse dimension: the root of A + B q, continuous along x);
    exactness for quadratic Hamiltonians: Kay, J. Chem. Phys. 100 (1994) 4377.
    """
    line = Line(-6.0, 0.01, 1200, False)
    for x in (0.5, 1.9, 0.5 * np.pi / A, 2.6, 4.0, 8.0):
        field = herman_kluk(k, width * A, lambda q, p, x=x: twins.duct(q, p, A, x), line)
        q = 2j / (k * WAIST**2)
        along = np.linspace(0, x, 4001)
        turn = np.unwrap(np.angle(np.cos(A * along) + q * np.sin(A * along) / A))[-1]
        c, s = np.cos(A * x), np.sin(A * x)
        z, slope = c + q * s / A, -A * s + q * c
        y, p = PLACE * c + TILT * s / A, TILT * c - A * PLACE * s
        action = 0.5 * (y * p + PLACE * TILT)
        off = line.points - y
        exact = (2 / np.pi / WAIST**2) ** 0.25 * np.abs(z) ** -0.5 * np.exp(-0.5j * turn)
        exact = exact * np.exp(1j * k * (action + p * off + 0.5 * slope / z * off**2))
        # required 1e-5; packets are cut at exp(-6.5**2/2) = 7e-10, hundreds of them overlap
        assert relative(field, exact) < 1e-7


def test_herman_kluk_in_a_linear_medium():
    """A beam falls in v = g y: Gaussian of free space (Siegman, Lasers, 1986, ch. 17) about the falling ray."""
    k, g, x = 60.0, 0.2, 3.0
    line = Line(-6.0, 0.01, 1200, False)
    field = herman_kluk(k, 0.8, lambda q, p: twins.linear(q, p, g, x), line)
    z = 1 + 2j * x / (k * WAIST**2)
    centre = twins.linear(np.array([PLACE]), np.array([TILT]), g, x)
    off = line.points - centre.y
    exact = (2 / np.pi / WAIST**2) ** 0.25 * np.exp(-(off**2) / WAIST**2 / z) / np.sqrt(z)
    exact = exact * np.exp(1j * k * (centre.action + TILT * PLACE + centre.p * off))
    assert relative(field, exact) < 1e-7


def test_branch_of_the_herman_kluk_root_is_the_continuous_one(rng):
    """The index of (A, C) alone gives the branch that following the root step by step gives (random kicks)."""
    gamma, steps, rays = 0.6, 4000, 200
    M = np.zeros((4, rays)) + np.array([[1.0], [0.0], [0.0], [1.0]])
    maslov, total, last = np.zeros(rays), np.zeros(rays), np.zeros(rays)
    for _ in range(steps):
        drift, kick = 0.01, rng.normal(0, 0.12, rays)
        for part in (0, 1):
            A_, B, C, D = M
            before = A_
            M = np.array([A_ + drift * C, B + drift * D, C, D] if part == 0 else [A_, B, C - kick * A_, D - kick * B])
            maslov += (before * M[0] < 0) & (part == 0)
            angle = np.angle(M[0] + M[3] - 1j * gamma * M[1] + 1j * M[2] / gamma)
            total += np.angle(np.exp(1j * (angle - last)))
            last = angle
    size, turn = prefactor(*M, maslov, gamma)
    assert maslov.max() >= 3
    np.testing.assert_allclose(2 * turn, total, atol=1e-7 * steps)
    np.testing.assert_allclose(size**2, 0.5 * np.abs(M[0] + M[3] - 1j * gamma * M[1] + 1j * M[2] / gamma))
