"""PacketCloud: the sample, layout, refusals, progress."""

import numpy as np
import pytest
from scipy import stats

from branchlab.errors import InputError, RangeError
from branchlab.launch import PlaneWave, Setup
from branchlab.launch.packet import Packet
from branchlab.launch.plane import Plane
from branchlab.media import Duct, RandomMedium
from branchlab.rays.cloud import PacketCloud, normal_cloud
from branchlab.results import load, save

SETUP = Setup(RandomMedium(0.1, 1.0, 3), PlaneWave(), 8.0, 8.0, cells=64)
PACKET = Packet(4.0, 0.0, 0.5, across=0.4, angle=0.3)


def test_sample_is_normal():
    """Exact in its first three moments; each axis and two sums pass for normal (Kolmogorov-Smirnov, scipy) by far."""
    z = normal_cloud(4096, 5)
    assert np.abs(z.mean(axis=1)).max() < 1e-14
    assert np.abs(z @ z.T / 4096 - np.eye(4)).max() < 1e-13
    for one in (*z, (z[0] + z[1]) / np.sqrt(2), (z[1] - z[2] + z[3]) / np.sqrt(3)):
        assert stats.kstest(one, "norm").statistic < 0.65 / np.sqrt(4096)  # random points: 0.83 is the median
    assert np.array_equal(z, normal_cloud(4096, 5))
    assert not np.allclose(z, normal_cloud(4096, 6))


def test_start_has_the_packets_moments():
    cloud = PacketCloud(SETUP, PACKET, points=1024)
    state = cloud.start(12.0)
    assert np.abs(state[:2].mean(axis=1) - [4.0, 0.0]).max() < 1e-13
    assert np.abs(np.cov(state[:2], bias=True) - PACKET.position_covariance).max() < 1e-13
    assert np.abs(state[2:4].mean(axis=1) - [np.cos(0.3), np.sin(0.3)]).max() < 1e-13
    assert np.abs(np.cov(state[2:4], bias=True) - PACKET.momentum_covariance(12.0)).max() < 1e-13


def test_result_and_its_file(tmp_path):
    seen = []
    result = PacketCloud(SETUP, PACKET, points=2048, seed=4).solve([0.3, 0.6], seen.append, times=[0.0, 5.0, 9.0])
    inside = result.density.sum(("x", "y")) * SETUP.cell * Plane(SETUP).cell
    assert np.abs(inside - result.inside).max() < 1e-12
    assert result.inside[0, 2] < 0.5
    assert len(seen) == 6
    assert seen[-1] == 1.0
    assert result.attrs["seed"] == 4
    assert (result.ehrenfest_time.values > 0).all()
    save(result, tmp_path / "cloud.nc")
    assert load(tmp_path / "cloud.nc").identical(result)
    again = PacketCloud(SETUP, PACKET, points=2048, seed=4).solve([0.3, 0.6], times=[0.0, 5.0, 9.0])
    assert again.identical(result)


def test_position_error_is_that_of_the_steps():
    """The stated error against a quarter of the step: within a factor 3."""
    coarse, fine = (PacketCloud(SETUP, PACKET, points=256, steps_per_scale=n) for n in (4, 16))
    stated = coarse.solve(0.3, times=[3.0]).position_error.values[0, 0]
    true = []
    for cloud in (coarse, fine):
        monitor = []
        cloud._measured = lambda state, first, rough, to=monitor: to.append(state.copy()) or {}
        list(cloud._one(2 * np.pi / 0.3, np.array([3.0])))
        true.append(monitor[0][:2])
    distance = np.median(np.hypot(*(true[0] - true[1])))
    assert 1 / 3 < stated / distance < 3


def test_a_duct_has_no_logarithmic_time():
    cloud = PacketCloud(Setup(Duct(0.3), PlaneWave(), 8.0, 8.0, "absorbing"), PACKET, points=512)
    result = cloud.solve(0.6, times=[0.0, 1.0, 2.0])
    assert np.isnan(result.ehrenfest_time).all()
    assert np.isnan(result.wave_parameter).all()


@pytest.mark.parametrize(
    ("call", "error", "match"),
    [
        (lambda: PacketCloud(SETUP, None), InputError, "must be a Packet; got NoneType"),
        (lambda: PacketCloud(SETUP, PACKET, points=1000), InputError, "multiple of 256; got 1000"),
        (lambda: PacketCloud(SETUP, Packet(1.0, 0.0, 0.5)), RangeError, "needs 3 <= x <= 5"),
        (lambda: PacketCloud(SETUP, PACKET, seed=-1), InputError, "seed"),
    ],
)
def test_refusals(call, error, match):
    with pytest.raises(error, match=match):
        call()
