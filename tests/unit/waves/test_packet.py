"""WavePacket and overlap: layout, refusals, progress, memory; slips are named."""

import tracemalloc

import numpy as np
import pytest

from branchlab import errors
from branchlab.errors import BranchlabWarning, InputError, RangeError, ResourceError
from branchlab.launch import PlaneWave, Setup
from branchlab.launch.packet import Packet
from branchlab.launch.plane import Plane
from branchlab.media import RandomMedium
from branchlab.results import load, save
from branchlab.waves.packet import WavePacket, overlap
from branchlab.waves.plane_march import BYTES_A_POINT
from tests.oracles.empty import Empty

SETUP = Setup(RandomMedium(0.1, 1.0, 3), PlaneWave(), 8.0, 8.0, cells=64, length_unit="mm")
PACKET = Packet(4.0, 0.0, 0.5)


def test_result_and_its_file(tmp_path):
    seen = []
    result = WavePacket(SETUP, PACKET).solve([0.6, 0.8], seen.append, times=[0.0, 1.0])
    assert result.density.dims == ("wavelength", "time", "x", "y")
    assert result.density.shape == (2, 2, 64, 64)
    assert (result.density.units, result.time.units) == ("mm-2", "mm")
    assert result.attrs["model"] == "full"
    inside = result.density.sum(("x", "y")) * SETUP.cell * Plane(SETUP).cell
    assert np.abs(inside.values - 1).max() < 1e-8
    assert seen == sorted(seen)
    assert seen[-1] == 1.0
    save(result, tmp_path / "packet.nc")
    assert load(tmp_path / "packet.nc").identical(result)


def test_default_times():
    result = WavePacket(SETUP, Packet(4.0, 0.0, 0.6, momentum=0.8)).solve(0.8)
    assert result.time.size == 21
    assert result.time.values[-1] == pytest.approx(10.0)


def test_progress_cancels():
    class Stop(Exception):
        pass

    def stop(share):
        raise Stop

    with pytest.raises(Stop):
        WavePacket(SETUP, PACKET).solve(0.8, stop, times=[1.0])


def test_cells_hold_the_mean_density():
    """Means over cells against a fine sum of the closed form at time 0."""
    setup = Setup(Empty(), PlaneWave(), 8.0, 8.0, cells=16)
    result = WavePacket(setup, PACKET).solve(0.6, times=[0.0])
    fine = (np.arange(16 * 64) + 0.5) * (8.0 / (16 * 64))
    along = np.exp(-((fine - 4.0) ** 2) / (2 * 0.25)) / np.sqrt(2 * np.pi * 0.25)
    means = along.reshape(16, 64).mean(axis=1)
    assert np.abs(result.density.values[0, 0] - np.outer(means, means)).max() < 2e-3


def test_periodic_sides_go_round():
    """A packet at the seam is the packet in the middle of the shifted medium-free window."""
    setup = Setup(Empty(), PlaneWave(), 10.0, 8.0, cells=64)
    middle, seam = (WavePacket(setup, Packet(4.0, y, 0.5, angle=0.3)).solve(0.6, times=[0.0, 2.0]) for y in (0.0, 3.75))
    assert np.abs(np.roll(middle.density, 30, axis=3) - seam.density).max() < 1e-10
    ahead = (middle.mean_y + 3.75 - seam.mean_y).values
    assert np.abs((ahead + 4.0) % 8.0 - 4.0).max() < 1e-9


def test_overlap_on_different_grids():
    first = WavePacket(SETUP, PACKET).solve(0.6, times=[0.0, 1.0], fields=True)
    second = WavePacket(SETUP, Packet(4.3, 0.1, 0.2)).solve(0.6, times=[0.0, 1.0], fields=True)
    assert first.psi.shape != second.psi.shape
    found = overlap(first, second)
    # two Gaussians of one momentum: 2 s t/(s**2 + t**2) exp(-d**2/(4 (s**2 + t**2))), textbook
    exact = 2 * 0.5 * 0.2 / 0.29 * np.exp(-0.1 / (4 * 0.29))
    assert abs(found.values[0] - exact) < 1e-12
    # the steps differ, too: kept to the error of the two fields
    assert abs(found.values[1] - exact) < float(first.field_error[0] + second.field_error[0])
    with pytest.raises(InputError, match="fields=True"):
        overlap(first.drop_vars("psi"), second)
    with pytest.raises(InputError, match="different times"):
        overlap(first, second.isel(time=[0]))


@pytest.mark.parametrize(
    ("call", "error", "match"),
    [
        (lambda: WavePacket(SETUP, "packet"), InputError, "must be a Packet; got str"),
        (lambda: WavePacket(SETUP, Packet(1.0, 0.0, 0.5)), RangeError, "needs 3 <= x <= 5"),
        (lambda: WavePacket(SETUP, PACKET).solve(3.0), RangeError, "wavelength <= 2.667"),
        (lambda: WavePacket(SETUP, PACKET).solve(-1.0), InputError, "wavelength must be positive"),
        (lambda: WavePacket(SETUP, PACKET).solve(0.6, times=[1.0, 1.0]), InputError, "times must rise"),
        (lambda: WavePacket(SETUP, PACKET).solve([0.6, 0.7], fields=True), InputError, "one wavelength"),
        (lambda: WavePacket(SETUP, PACKET, tolerance=0.0), InputError, "tolerance"),
        (lambda: WavePacket(SETUP, PACKET, steps_per_scale=0), InputError, "steps_per_scale"),
    ],
)
def test_refusals(call, error, match):
    with pytest.raises(error, match=match):
        call()


def test_memory_is_estimated_before_it_is_taken(monkeypatch):
    monkeypatch.setattr(errors, "available_memory", lambda: 2**20)
    with pytest.raises(ResourceError, match="a packet on .* points at 1 times"):
        WavePacket(SETUP, PACKET).solve(0.6, times=[1.0])


def test_memory_stays_below_the_estimate():
    """What numpy takes at its peak, against the estimate and a tenth for what does not grow with the grid."""
    WavePacket(SETUP, PACKET).solve(0.2, times=[1.0])
    tracemalloc.start()
    try:
        result = WavePacket(SETUP, PACKET).solve(0.2, times=[1.0])
        peak = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    assert peak < 1.1 * BYTES_A_POINT * result.attrs["points_x"][0] * result.attrs["points_y"][0]


def test_missed_tolerance_is_said(monkeypatch):
    monkeypatch.setattr("branchlab.waves.packet.ATTEMPTS", 0)
    with pytest.warns(BranchlabWarning, match="the tolerance is 1e-12"):
        WavePacket(SETUP, PACKET, steps_per_scale=1, tolerance=1e-12).solve(0.6, times=[2.0])
