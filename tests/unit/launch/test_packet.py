"""Packet and Plane: what they are, and what they refuse."""

import numpy as np
import pytest

from branchlab.errors import InputError, RangeError
from branchlab.launch import PlaneWave, Setup
from branchlab.launch.packet import Packet, check_times
from branchlab.launch.plane import Plane
from branchlab.media import RandomMedium, SampledMedium

SETUP = Setup(RandomMedium(0.1, 1.0, 3), PlaneWave(), 10.0, 8.0, "absorbing")


def test_round_trip_and_norm():
    packet = Packet(3.0, 1.0, 0.4, across=0.7, angle=0.5, momentum=0.9)
    assert Packet.from_json(packet.to_json()) == packet
    x, y = np.linspace(-2, 8, 400), np.linspace(-5, 7, 480)
    density = np.abs(packet.psi(x[:, None], y, 15.0)) ** 2
    area = (x[1] - x[0]) * (y[1] - y[0])
    assert density.sum() * area == pytest.approx(1.0, abs=1e-9)
    u = np.stack(np.meshgrid(x - 3.0, y - 1.0, indexing="ij"))
    covariance = np.einsum("iab,jab,ab->ij", u, u, density) * area
    assert np.abs(covariance - packet.position_covariance).max() < 1e-8


def test_momenta_of_the_wigner_function():
    """Its momentum covariance against that of psi's spectrum."""
    packet, k, n = Packet(3.0, 1.0, 0.4, across=0.7, angle=0.5, momentum=0.9), 15.0, 256
    x = np.linspace(-3, 9, n, endpoint=False)
    spectrum = np.abs(np.fft.fft2(packet.psi(x[:, None], x - 2.0, k))) ** 2
    q = 2 * np.pi * np.fft.fftfreq(n, 12.0 / n) / k
    u = np.stack(np.meshgrid(q - 0.9 * np.cos(0.5), q - 0.9 * np.sin(0.5), indexing="ij"))
    covariance = np.einsum("iab,jab,ab->ij", u, u, spectrum) / spectrum.sum()
    assert np.abs(covariance - packet.momentum_covariance(k)).max() < 1e-10


@pytest.mark.parametrize(
    ("packet", "error", "match"),
    [
        (Packet(2.0, 0.0, 0.4), RangeError, "needs 2.4 <= x <= 7.6"),
        (Packet(5.0, 3.0, 0.4), RangeError, "leaves 1"),
        (Packet(5.0, 0.0, 0.4, across=1.0), RangeError, "spread 1 along y .* needs 6 of room"),
    ],
)
def test_packets_that_do_not_fit(packet, error, match):
    with pytest.raises(error, match=match):
        packet.check_fits(SETUP)


def test_periodic_sides_take_packets_at_the_seam():
    periodic = SETUP.with_(sides="periodic")
    Packet(5.0, 3.9, 0.4).check_fits(periodic)
    with pytest.raises(InputError, match=r"\|y\| <= 4; got 4.5"):
        Packet(5.0, 4.5, 0.4).check_fits(periodic)


@pytest.mark.parametrize(
    ("call", "match"),
    [
        (lambda: Packet(1.0, 0.0, -0.4), "spread must be positive"),
        (lambda: Packet(1.0, 0.0, 0.4, momentum=-1.0), "momentum"),
        (lambda: Packet(1.0, 0.0, 0.4, wide=1.0), "has no argument 'wide'"),
        (lambda: check_times([2.0, 1.0], SETUP, Packet(5.0, 0.0, 0.4)), "times must rise"),
        (lambda: check_times([-1.0], SETUP, Packet(5.0, 0.0, 0.4)), "times must rise"),
    ],
)
def test_slips(call, match):
    with pytest.raises(InputError, match=match):
        call()


def test_plane_is_the_window_inside():
    plane = Plane(SETUP)
    x = np.linspace(0.0, 10.0, 41)
    assert np.array_equal(plane.rows(x, 128), SETUP.window.rows(x, 128))


def test_plane_is_smooth_and_its_mean_beyond():
    plane = Plane(SETUP)
    x = np.linspace(-plane.pad, 10.0 + plane.pad, 4001)
    v = plane.rows(x, 64)
    assert not v[x < -plane.fade].any()
    assert not v[x > 10.0 + plane.fade].any()
    step = x[1] - x[0]
    second = np.abs(np.diff(v, 2, axis=0)).max(axis=1) / step**2
    near = np.abs(x[1:-1]) < 2 * step
    assert second[near].max() < 2.0 * second[1000:3000].max()  # no kink where the fade begins


@pytest.mark.parametrize("sides", ["periodic", "absorbing"])
def test_plane_is_resolved_by_an_eighth_of_its_finest(sides):
    plane = Plane(SETUP.with_(sides=sides))
    shape = [round(8 * span / plane.finest) for span in plane.span]
    power = np.abs(np.fft.fft2(plane.sample(shape)))
    outer = [np.abs(np.fft.fftfreq(n)) > 0.4 for n in shape]
    assert power[outer[0]].max() < 1e-4 * power.max()
    assert power[:, outer[1]].max() < 1e-4 * power.max()


def test_media_that_end_with_the_window_are_continued():
    x, y = np.linspace(0.0, 10.0, 81), np.linspace(-8.0, 8.0, 129)
    v = RandomMedium(0.1, 1.0, 3).rows(x, y)
    plane = Plane(Setup(SampledMedium(v, x, y), PlaneWave(), 10.0, 8.0))
    step = 1e-4
    for end in (0.0, 10.0):
        rows = plane.rows(end + step * np.array([-2.0, -1.0, 0.0, 1.0, 2.0]), 64)
        assert np.abs(np.diff(rows, 2, axis=0)).max() < 1e-6  # v and v_x are continuous


def test_absorber_begins_at_the_window():
    plane = Plane(SETUP)
    x, y = plane.points((400, 300))
    along, across = plane.absorber((400, 300))
    assert not along[(x > 0) & (x < 10)].any()
    assert not across[np.abs(y) < 4].any()
    assert along[0] > 0.99
    assert along[-1] > 0.99
    assert across[0] > 0.99
    assert (np.diff(along[x > 10]) >= 0).all()
