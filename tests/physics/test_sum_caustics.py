"""Sums over rays at folds and cusps against closed forms: Airy, Bessel, Pearcey."""

import numpy as np
import pytest
from scipy.special import airy, gamma, jv

from branchlab.launch.part import CoherentPart
from branchlab.launch.window import smooth_step
from branchlab.semiclassics.branches import find_branches
from branchlab.semiclassics.frozen import FrozenGaussians
from branchlab.semiclassics.herman_kluk import HermanKluk, PhaseSpace
from branchlab.semiclassics.manifold import Line, Manifold
from branchlab.semiclassics.uniform import AiryPairs, primitive_sum
from tests.oracles import sum_twins as twins

# DLMF 9.9: first zero of Ai', value there; Ai(0)
PEAK_AT, PEAK, AT_FOLD = -1.01879297164747, 0.5356566560157, 0.355028053888


def fold(half=4.0, count=16384):
    """sqrt(k/2pi) int exp ik(t**3/3 + X t) dt: rays y = -t**2, p = t, two of them at every X < 0."""
    ds = 2 * half / count
    t = -half + (np.arange(count) + 0.5) * ds
    one = np.ones(count)
    return Manifold(-(t**2), t, -2 * t**3 / 3, -2 * t, one, (t < 0) * 1.0, one, ds, 0.0, np.pi / 4)


def fold_field(k, X):
    """abs = sqrt(2 pi) k**(1/6) Ai(k**(2/3) X) (Airy 1838; DLMF 36.2.4, 36.6)."""
    return np.sqrt(2 * np.pi) * k ** (1 / 6) * airy(k ** (2 / 3) * X)[0]


def test_airy_numbers_of_the_library():
    assert abs(airy(PEAK_AT)[0] - PEAK) < 1e-12
    assert abs(airy(0)[0] - AT_FOLD) < 1e-11


@pytest.mark.parametrize("k", [5.0, 50.0, 500.0])
def test_uniform_form_is_the_airy_function_at_a_pure_fold(k):
    line = Line(-3.0, 0.002, 2000, False)
    field = AiryPairs(fold(), line).field(k) * np.exp(0.25j * np.pi)
    exact = fold_field(k, line.points)
    # the dark side ends at Ai(9) = 3e-9 of Ai(0); the cubic between rays is exact here
    np.testing.assert_allclose(field, exact, atol=2e-7 * np.abs(exact).max())


def test_frozen_gaussians_at_a_fold():
    """Peak intensity grows as k**(1/3), fringes narrow as k**(-2/3) (DLMF Table 36.6.1); fringe heights DLMF 9.9."""
    ks = np.array([500.0, 1580.0, 5000.0])
    peaks, places = [], []
    for k in ks:
        line = Line(-8 * k ** (-2 / 3), 0.01 * k ** (-2 / 3), 1000, False)
        intensity = np.abs(FrozenGaussians(fold(1.0), 1.0, 6.0).field(k, line)) ** 2
        inner = intensity[1:-1]
        at = 1 + np.flatnonzero((inner > intensity[2:]) & (inner > intensity[:-2]))[::-1]
        peaks.append(intensity[at[0]])
        places.append(line.points[at[0]])
        # second and third bright fringes, 0.611909 and 0.504339 of the first; the sum's own error is O(k**(-1/3))
        np.testing.assert_allclose(
            intensity[at[1:3]] / intensity[at[0]], [0.611909, 0.504339], atol=0.3 * k ** (-1 / 3)
        )
    assert abs(np.polyfit(np.log(ks), np.log(peaks), 1)[0] - 1 / 3) < 0.01
    np.testing.assert_allclose(peaks, 2 * np.pi * ks ** (1 / 3) * PEAK**2, rtol=0.02)
    np.testing.assert_allclose(places, PEAK_AT * ks ** (-2 / 3), rtol=0.05)


def circle(m, points):
    """Return the sums over rays tangent to the circle of radius m, k = 1, with the phase of J_m taken out."""
    line = Line(0.6 * m, 1.7 * m / points, points, False)
    pairs = AiryPairs(twins.caustic_circle(m, 2.3, 8192), line)
    turn = np.exp(1j * (np.pi / 4 - m * np.pi / 2))
    return line.points, pairs.field(1.0) * turn, primitive_sum(pairs.branches, 1.0, points) * turn


def two_rays(m):
    """Return the error of the two-ray sum at r = 2m in units of its envelope, and that without Maslov's index."""
    found = find_branches(twins.caustic_circle(m, 2.3, 8192), Line(2 * m - 0.5, 1.0, 1, False))  # the one point r = 2m
    turn = np.exp(1j * (np.pi / 4 - m * np.pi / 2))
    envelope = np.sqrt(2 / np.pi) / (3 * m * m) ** 0.25
    without = (found.size * np.exp(1j * found.path)).sum() * turn
    return (
        np.abs(primitive_sum(found, 1.0, 1)[0] * turn - jv(m, 2 * m)) / envelope,
        np.abs(without - jv(m, 2 * m)) / envelope,
    )


def test_caustic_circle_two_ray_sum():
    """sqrt(2/pi s) cos(s - m acos(m/r) - pi/4), s = sqrt(r**2 - m**2): Debye 1909; DLMF 10.19(ii).

    The first term left out is u_1/m of the envelope with u_1 = (3 t + 5 t**3)/24, t = 1/sqrt(3) at r = 2m: 0.1123,
    times the sine of the fringe's phase.
    """
    t = 1 / np.sqrt(3)
    errors = np.array([two_rays(m) for m in range(150, 200)])
    assert abs((errors[:, 0] * np.arange(150, 200)).max() / ((3 * t + 5 * t**3) / 24) - 1) < 0.01
    for m in (10, 50, 200):
        assert two_rays(m)[0] * m < 0.115
    # without the index of the ray that has touched the circle the error is of order 1
    assert errors[:, 1].min() > 0.5


@pytest.mark.parametrize(("m", "limit"), [(10, 2e-3), (50, 1.25e-4), (200, 2.45e-5)])
def test_caustic_circle_uniform(m, limit):
    """(4 zeta/(1 - z**2))**(1/4) m**(-1/3) Ai(m**(2/3) zeta) has errors 8.1e-4, 1.2e-4, 2.4e-5 of the peak.

    Chester, Friedman & Ursell 1957; Olver, DLMF 10.20. Ours reaches them from rays alone, but for m = 10: there the
    dark side lies so far from the rays that its complex ones are known to 2e-3 only.
    """
    r, field, primitive = circle(m, 4000)
    exact = jv(m, r)
    peak = np.abs(exact).max()
    assert np.abs(field - exact).max() / peak < limit
    assert np.abs(primitive - exact).max() / peak > 0.3
    # J_m peaks with 0.674885 m**(-1/3) at m + 0.808616 m**(1/3) (DLMF 10.21, leading terms; the
    # next one is smaller by m**(-2/3))
    if m >= 50:
        assert abs(np.abs(field).max() / (0.674885 * m ** (-1 / 3)) - 1) < 0.2 * m ** (-2 / 3)
        assert abs(r[np.argmax(np.abs(field))] - m - 0.808616 * m ** (1 / 3)) < 0.1


def lens(k, f, c, count=65536, half=0.6):
    """Return the rays of exp(ik(-s**2/2f + c s**4/4)) at the distance f: a cusp on the axis."""
    ds = 2 * half / count
    s = -half + (np.arange(count) + 0.5) * ds
    p, bend = -s / f + c * s**3, -1 / f + 3 * c * s**2
    A = 1 + f * bend
    action = -(s**2) / (2 * f) + c * s**4 / 4 + 0.5 * p * p * f
    one = np.ones(count)
    return Manifold(s + f * p, p, action, A, bend, 0 * one, one, ds)


F, C4 = 20.0, 0.5


def brightness(k):
    """4 Gamma(5/4)**2 sqrt(k/c)/(pi f) on the cusp of a lens (DLMF 36.6; Pearcey at its origin, DLMF 36.2.15)."""
    return 4 * gamma(1.25) ** 2 * np.sqrt(k / C4) / (np.pi * F)


def test_cusp_brightness_by_frozen_gaussians():
    """Finite where rays are infinite, and right to 15 %: Gaussians of the front do not know a cusp's own pattern."""
    for k in (500.0, 1000.0, 2000.0, 4000.0):
        axis = Line(-0.05, 0.1, 1, False)
        for packet in (0.1, 0.2, 0.3):
            found = np.abs(FrozenGaussians(lens(k, F, C4), packet, 7.0).field(k, axis)[0]) ** 2
            assert abs(found / brightness(k) - 1) < 0.15


def behind_the_lens(k, z, y):
    """Return the intensity at (z, y) by Herman-Kluk; free space is quadratic, so it is exact for any front."""

    def entry(s, k):
        path = -(s**2) / (2 * F) + C4 * s**4 / 4
        return smooth_step((1.2 - np.abs(s)) / 0.6) * np.exp(1j * np.multiply.outer(np.atleast_1d(k), path))

    space = PhaseSpace(CoherentPart(1.0, 0.0, entry, None), Line(-1.5, 0.005, 600, False), [k], 0.05, 0.15, 6.0)
    q, p = space.rays.y, space.rays.p
    one = np.ones(q.size)
    hk = HermanKluk(space, 1.0, q + z * p, p, 0.5 * z * p**2, (one, z * one, 0 * one, one), 0 * one)
    return np.abs(hk.field(0, Line(y - 0.0025, 0.005, 1, False))[0]) ** 2


def test_cusp_brightness_by_herman_kluk():
    # what is left is the edge of the aperture
    for k, limit in ((500.0, 1e-4), (1000.0, 1e-6), (2000.0, 1e-7)):
        assert abs(behind_the_lens(k, F, 0.0) / brightness(k) - 1) < limit


def test_pearcey_pattern_by_herman_kluk():
    """P(X, Y) = int exp i(u**4 + X u**2 + Y u) du: X = (1/z - 1/f) sqrt(k/c), Y = -(k y/z) (4/kc)**(1/4).

    Brightest point of the axis at X = -2.198625, behind the cusp, 2.112977 times as bright as the cusp itself
    (computed; picture in Pearcey, Phil. Mag. 37 (1946) 311); first pair of zeros at (-1.743604, +-2.352176)
    (Kaminski & Paris, J. Comput. Appl. Math. 107 (1999) 31, Table 1: -1.743600, 2.352175).
    """
    k = 2000.0
    unit = np.sqrt(k / C4)

    def at(X, Y):
        z = 1 / (1 / F + X / unit)
        return behind_the_lens(k, z, -Y * z / k * (k * C4 / 4) ** 0.25) * z / F / brightness(k)

    assert abs(at(-2.198625, 0.0) / 2.112977 - 1) < 1e-6
    assert at(-2.198625, 0.0) > max(at(-2.15, 0.0), at(-2.25, 0.0))
    # the printed digits end at 1e-6: an intensity of their square, next to 3.3 at the cusp
    assert max(at(-1.743604, 2.352176), at(-1.743604, -2.352176)) < 1e-10
    assert at(-1.743604, 2.2) > 1e-3
