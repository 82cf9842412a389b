"""The packet's march against plain twins; the compiled transforms against numpy's; both ways of transforming."""

import numba
import numpy as np
import pytest

from branchlab.kernels import native_fft
from branchlab.kernels.native_fft import NativePlan, transform
from branchlab.kernels.packet_step import gather, multiply_rows, native_turn, scale_rows, screen_rows
from branchlab.launch import PlaneWave, Setup
from branchlab.launch.packet import Packet
from branchlab.launch.plane import Plane
from branchlab.media import RandomMedium
from branchlab.waves import plane_march
from branchlab.waves.plane_march import PlaneMarch, blocked
from tests.oracles.packet_twins import plain_steps, processor_series

needs_native = pytest.mark.skipif(
    not native_fft.available(), reason="no planned transforms here (pyfftw, BRANCHLAB_FFT): nothing to call"
)


@pytest.fixture(scope="module")
def start():
    plane = Plane(Setup(RandomMedium(0.1, 1.0, 3), PlaneWave(), 10.0, 8.0))
    x, y = plane.points((160, 96))
    return plane, Packet(4.0, 0.0, 0.6).psi(x[:, None], y, 12.0)


def test_small_kernels(rng):
    block, field = np.zeros((4, 6), complex), rng.standard_normal((6, 12)) + 1j * rng.standard_normal((6, 12))
    gather(block, field, 5)
    assert np.array_equal(block, field.T[5:9])
    factor = np.exp(1j * np.arange(6.0))
    scale_rows(block, factor)
    assert np.allclose(block, field.T[5:9] * factor, rtol=1e-15)
    path, before = rng.standard_normal((12, 6)), block.copy()
    screen_rows(block.view(float), path, 5, 3.0)
    assert np.abs(block - before * np.exp(-3j * path[5:9])).max() < 2e-14
    before = block.copy()
    multiply_rows(block, path + 0j, 5)
    assert np.abs(block - before * path[5:9]).max() < 1e-15


@needs_native
@pytest.mark.parametrize("dtype", [np.complex128, np.complex64])
def test_planned_transforms_inside_compiled_code(dtype, rng):
    plan = NativePlan(4, 90, dtype)
    block = plan.empty()
    given = (rng.standard_normal(block.shape) + 1j * rng.standard_normal(block.shape)).astype(dtype)
    block[...] = given

    @numba.njit
    def there(address, plan, data):
        transform(address, plan, data)

    there(plan.address, plan.forward, block.ctypes.data)
    close = 1e-13 if dtype is np.complex128 else 1e-5
    assert np.abs(block - np.fft.fft(given, axis=1)).max() < close * 90
    there(plan.address, plan.inverse, block.ctypes.data)
    assert np.abs(block - 90 * given).max() < close * 90


@needs_native
def test_native_turn(rng):
    field = rng.standard_normal((30, 32)) + 1j * rng.standard_normal((30, 32))
    factor, out = np.exp(1j * rng.random(30)) / 30, np.zeros((32, 30), complex)
    plan = NativePlan(16, 30)
    native_turn(out, field, 16, 32, factor, plan.empty(), plan.address, (plan.forward, plan.inverse))
    exact = np.fft.ifft(np.fft.fft(field.T, axis=1) * factor * 30, axis=1)
    assert np.abs(out[16:] - exact[16:]).max() < 1e-14
    assert not out[:16].any()


def test_march_against_plain_transforms(start):
    plane, field = start
    march = PlaneMarch(plane, field.shape, 12.0, 0.0)
    found = march.kernel_steps(field, 0.2, 10)
    exact = plain_steps(field, march.v, plane.span, 12.0, 0.2, 10)
    assert np.abs(found - exact).max() < 1e-12 * np.abs(exact).max()


def test_both_ways_of_transforming_agree(start, monkeypatch):
    plane, field = start
    found = []
    for way in (native_fft.available(), False):
        monkeypatch.setattr(plane_march, "available", lambda way=way: way)
        march = PlaneMarch(plane, field.shape, 12.0, 1.3)
        found.append(march.processed(march.kernel_steps(field, 0.2, 10), 0.2, -1.0))
    assert np.abs(found[0] - found[1]).max() < 1e-13


def test_processor_is_the_series_to_fourth_order(start):
    plane, field = start
    march = PlaneMarch(plane, field.shape, 12.0, 1.3)

    def difference(step):
        exact = processor_series(field, march.v, plane.span, step, 1.0)
        return np.linalg.norm(march.processed(field, step, 1.0) - exact) / np.linalg.norm(exact - field)

    # relative to P itself, which is O(step**2): the difference is O(step**4)
    assert np.log2(difference(0.4) / difference(0.2)) == pytest.approx(2.0, abs=0.1)
    assert difference(0.2) < 0.02
    there = march.processed(march.processed(field, 0.2, 1.0), 0.2, -1.0)
    assert np.abs(there - field).max() < 1e-13


def test_times_need_not_be_equidistant(start):
    plane, field = start
    march = PlaneMarch(plane, field.shape, 12.0, 1.3)
    once = list(march.run(field, np.array([3.0]), 0.05))[-1]
    often = list(march.run(field, np.array([0.0, 0.7, 1.0, 3.0]), 0.05))
    assert np.array_equal(often[0], field)
    assert np.linalg.norm(once - often[-1]) < 1e-5 * np.linalg.norm(once)


@pytest.mark.parametrize("n", [1, 16, 17, 130, 1000])
def test_blocked_grids(n):
    assert blocked(n) >= n
    assert blocked(n) % 16 == 0
    assert blocked(n) < 1.25 * n + 16
