"""The deposit of Gaussian packets and its elementary functions against plain twins and numpy."""

import numba
import numpy as np
import pytest
from numba import njit

from branchlab.kernels.elementary import cos_sin, exponential
from branchlab.kernels.packets import add_packets, add_packets_alone
from tests.oracles import sum_twins as twins


@njit
def _apply(x, e, c, s):
    for i in range(x.size):
        e[i] = exponential(x[i])
        c[i], s[i] = cos_sin(x[i])


@pytest.mark.parametrize("scale", [1e-3, 1.0, 600.0])
def test_elementary_functions_equal_numpy(rng, scale):
    x = rng.uniform(-scale, scale, 20000)
    e, c, s = (np.empty_like(x) for _ in range(3))
    _apply(x, e, c, s)
    # 1 ulp of the polynomial and 1 of numpy's own
    assert np.abs(e / np.exp(x) - 1).max() < 5e-16
    assert max(np.abs(c - np.cos(x)).max(), np.abs(s - np.sin(x)).max()) < 5e-16


def test_cosine_of_a_large_phase(rng):
    x = np.append(rng.uniform(-1e6, 1e6, 20000), 0.0)
    e, c, s = (np.empty_like(x) for _ in range(3))
    _apply(x, e, c, s)
    # x * 2**-53 is not resolved by the argument itself: 1e6 * 1e-16
    assert max(np.abs(c - np.cos(x)).max(), np.abs(s - np.sin(x)).max()) < 2e-10


def _random(rng, rays=700, box=16.0):
    y, p = rng.uniform(-0.7 * box, 0.7 * box, rays), rng.normal(0, 0.3, rays)
    path, turn = rng.normal(0, 5, rays), rng.uniform(0, 6, rays)
    amplitude, stretch = rng.normal(0, 1, rays), np.abs(rng.normal(0, 0.02, rays))
    y[5], amplitude[7], p[11] = np.nan, 0.0, np.nan
    return y, p, path, turn, amplitude, stretch


@pytest.mark.parametrize("periodic", [True, False])
@pytest.mark.parametrize(("k", "gamma", "n"), [(60.0, 0.37, 384), (6.0, 0.2, 100), (400.0, 2.0, 1215)])
def test_packets_equal_the_plain_sum(rng, periodic, k, gamma, n):
    rays, box = _random(rng), 16.0
    psi = add_packets(*rays, k, gamma, -0.5 * box, box / n, n, 9.0, periodic)
    ok = np.isfinite(rays[0]) & np.isfinite(rays[1])
    plain = twins.packets(*(a[ok] for a in rays), k, gamma, -0.5 * box, box / n, n, laps=3 if periodic else 0)
    # the cut exp(-81/2) is below round-off; the powers z**8 carry 100 ulp over a packet
    assert np.abs(psi - plain).max() < 1e-12 * np.abs(plain).max()


def test_packets_do_not_depend_on_the_number_of_threads(rng):
    rays = _random(rng)
    many = numba.get_num_threads()
    try:
        numba.set_num_threads(1)
        one = add_packets(*rays, 60.0, 0.37, -8.0, 16 / 384, 384, 6.0, True)
    finally:
        numba.set_num_threads(many)
    np.testing.assert_array_equal(one, add_packets(*rays, 60.0, 0.37, -8.0, 16 / 384, 384, 6.0, True))
    np.testing.assert_array_equal(one, add_packets_alone(*rays, 60.0, 0.37, -8.0, 16 / 384, 384, 6.0, True))


def test_a_packet_narrower_than_the_pitch_stays_finite():
    one = np.ones(1)
    psi = add_packets(0.25 * one, 0 * one, 0 * one, 0 * one, one, 0 * one, 400.0, 2.0, -4.0, 0.5, 16, 5.0, True)
    # at the points -0.25 +- ... : exp(-400 * 2 * d**2 / 2) with d = 0 and 0.5
    np.testing.assert_allclose(psi[8], 1.0)
    np.testing.assert_allclose(np.abs(psi[7]), np.exp(-100.0), rtol=1e-9)
