"""Packets against closed forms, and the laws of their march. Sources stand beside each check."""

import numpy as np
import pytest

from branchlab.compare.divergence import divergence
from branchlab.launch import PlaneWave, Setup
from branchlab.launch.packet import Packet
from branchlab.launch.plane import Plane
from branchlab.media import RandomMedium
from branchlab.rays.cloud import PacketCloud
from branchlab.waves.packet import WavePacket, overlap
from branchlab.waves.plane_march import PlaneMarch
from tests.oracles.empty import Empty
from tests.oracles.packet_twins import free_gaussian, gaussian_in_well
from tests.oracles.wells import Well

K = 20.0


def random_setup(**options):
    return Setup(RandomMedium(0.1, 1.0, 3), PlaneWave(), 14.0, 12.0, **options)


def psi_of(setup, packet, times, k=K, **options):
    """The solved packet, its grid and psi at all times."""
    result = WavePacket(setup, packet, **options).solve(2 * np.pi / k, times=times, fields=True)
    return result, result.x_fine.values[:, None], result.y_fine.values, result.psi.values[0]


def test_free_spreading():
    """Tilted, of unequal spreads: width, chirp and phase. Textbook (see `free_gaussian`); to round-off, no screen acts."""
    setup = Setup(Empty(), PlaneWave(), 16.0, 14.0, "absorbing")
    packet = Packet(6.0, -1.0, 0.5, across=0.4, angle=0.3)
    times = [0.0, 1.5, 4.0]
    result, x, y, psi = psi_of(setup, packet, times)
    c, s = np.cos(0.3), np.sin(0.3)
    a, b = c * (x - 6.0) + s * (y + 1.0), c * (y + 1.0) - s * (x - 6.0)
    for t, field in zip(times, psi, strict=True):
        exact = free_gaussian(a, 0.5, 1.0, t, K) * free_gaussian(b, 0.4, 0.0, t, K)
        assert np.abs(field - exact).max() < 1e-12
    assert np.abs(result.norm - 1).max() < 1e-12
    spread = np.sqrt(c**2 * 0.25 * (1 + 16 / (400 * 4 * 0.5**4)) + s**2 * 0.16 * (1 + 16 / (400 * 4 * 0.4**4)))
    assert result.spread_x.values[0, -1] == pytest.approx(spread, rel=1e-10)
    exact_energy = 0.5 + (1 / 0.25 + 1 / 0.16) / (8 * K**2)
    assert np.abs(result.energy - exact_energy).max() < 1e-12


@pytest.mark.parametrize("turns", [0.45, 1.4])
def test_packet_in_a_harmonic_well(turns):
    """v = (0.3 u)**2 + (0.5 y)**2, off centre and moving, before and behind foci: Mehler's kernel (see
    `gaussian_in_well`). 1e-8 of the largest amplitude: what fourth order leaves at these steps."""
    setup = Setup(Well(6.0, 0.3, 0.5), PlaneWave(), 12.0, 10.0, "absorbing")
    packet = Packet(6.8, 0.5, 0.35, across=0.3, momentum=0.4)
    t = turns * np.pi / 0.5
    _, x, y, psi = psi_of(setup, packet, [t], steps_per_scale=64)
    along = gaussian_in_well(x - 6.0, 0.35, 0.8, 0.4, 0.3, t, K)
    across = gaussian_in_well(y, 0.3, 0.5, 0.0, 0.5, t, K)
    # the packet's phase is 0 at its centre, as the one-dimensional forms have it
    assert np.abs(psi[0] - along * across).max() < 1e-8 * np.abs(psi).max()


def test_coherent_state_keeps_its_shape():
    """Matched spreads 1/sqrt(2 k rate) swing without change, and after a period psi = exp(-i (rate_x + rate_y) T/2) psi(0)
    up to the classical action, which vanishes over a period (textbook: ground-state phase of two oscillators)."""
    rate = 0.4
    setup = Setup(Well(6.0, rate, rate), PlaneWave(), 12.0, 10.0, "absorbing")
    sigma = 1 / np.sqrt(2 * K * rate)
    packet = Packet(6.0, 0.9, sigma, momentum=0.3)
    period = 2 * np.pi / rate
    result, _, _, psi = psi_of(setup, packet, [0.0, 0.3 * period, period], steps_per_scale=32)
    for name in ("spread_x", "spread_y"):
        assert np.abs(result[name] - sigma).max() < 1e-7
    assert result.mean_x.values[0, 1] - 6.0 == pytest.approx(0.3 / rate * np.sin(0.6 * np.pi), abs=1e-7)
    assert result.mean_y.values[0, 1] == pytest.approx(0.9 * np.cos(0.6 * np.pi), abs=1e-7)
    assert np.abs(psi[2] - np.exp(-1j * rate * period) * psi[0]).max() < 1e-6 * np.abs(psi).max()


def march_in_random_medium():
    """A march without absorber, which is not unitary, and its packet."""
    plane, shape = Plane(random_setup()), (336, 192)
    march = PlaneMarch(plane, shape, 2 * np.pi / 0.25, 0.0)
    x, y = plane.points(shape)
    return march, Packet(4.0, 0.0, 0.6).psi(x[:, None], y, march.k)


def test_order():
    """Halving the step divides the error by 2**4 with the processor, by 2**2 without it (Rowlands 1991): 4.0 +- 0.1."""
    march, start = march_in_random_medium()

    def error(steps, processed):
        step = 5.0 / steps
        field = march.processed(start, step, +1.0) if processed else start
        field = march.kernel_steps(field, step, steps)
        field = march.processed(field, step, -1.0) if processed else field
        return np.linalg.norm(field - reference) / np.linalg.norm(start)

    reference = 0.0
    fine = march.processed(start, 5.0 / 256, +1.0)
    reference = march.processed(march.kernel_steps(fine, 5.0 / 256, 256), 5.0 / 256, -1.0)
    assert np.log2(error(24, True) / error(48, True)) == pytest.approx(4.0, abs=0.1)
    assert np.log2(error(24, False) / error(48, False)) == pytest.approx(2.0, abs=0.1)
    assert error(48, True) < 1e-2 * error(48, False)


def test_kernel_is_unitary_and_reversible():
    """Norm, overlap and the way back to round-off, for any step (textbook): 1e-12 in 200 steps."""
    march, start = march_in_random_medium()
    other = np.roll(start, 5, axis=1)
    before = np.vdot(start, other)
    forth = [
        march.processed(march.kernel_steps(march.processed(one, 0.2, 1.0), 0.2, 200), 0.2, -1.0)
        for one in (start, other)
    ]
    assert np.linalg.norm(forth[0]) == pytest.approx(np.linalg.norm(start), rel=1e-12)
    assert abs(np.vdot(*forth) - before) < 1e-12 * abs(before)
    back = march.processed(march.kernel_steps(march.processed(forth[0], 0.2, 1.0), -0.2, 200), 0.2, -1.0)
    assert np.abs(back - start).max() < 1e-11 * np.abs(start).max()


def test_norm_energy_overlap_stay():
    """While the packets are inside: norm and overlap to 1e-9, energy to the order of the step (textbook)."""
    setup = random_setup()
    first = psi_of(setup, Packet(4.0, 0.0, 0.6, angle=0.1), [0.0, 2.0, 4.0], k=25.0)[0]
    second = psi_of(setup, Packet(4.3, 0.2, 0.5), [0.0, 2.0, 4.0], k=25.0)[0]
    both = overlap(first, second).values
    assert both[0] > 0.05
    assert np.abs(both / both[0] - 1).max() < 1e-9
    assert np.abs(first.norm - 1).max() < 1e-9
    assert np.abs(first.energy / first.energy[0, 0] - 1).max() < 2e-5


@pytest.mark.parametrize("seed", [1, 2])
def test_error_bar_covers(seed):
    """The stated error of psi against a run with a quarter of the step: within a factor 5 (issue's own rule)."""
    setup = Setup(RandomMedium(0.1, 1.0, seed), PlaneWave(), 14.0, 12.0)
    packet = Packet(4.0, 0.0, 0.6)
    coarse = psi_of(setup, packet, [5.0])
    fine = psi_of(setup, packet, [5.0], steps_per_scale=16)
    true = np.linalg.norm(coarse[3] - fine[3]) / np.linalg.norm(fine[3])
    assert 0.2 < float(coarse[0].field_error[0]) / true < 5.0
    cell = setup.cell * Plane(setup).cell
    misplaced = 0.5 * np.abs(coarse[0].density - fine[0].density).sum() * cell
    assert 0.2 < float(coarse[0].numerical_error[0, 0]) / misplaced < 5.0


@pytest.mark.parametrize("angle", [0.0, 60.0, 75.0])
def test_packet_leaves_and_does_not_come_back(angle):
    """What the pads reflect is below -80 dB to 60 degrees and -60 dB to 75 (common practice for absorbing sides)."""
    setup = Setup(Empty(), PlaneWave(), 12.0, 12.0, "absorbing")
    wave = WavePacket(setup, Packet(6.0, 0.0, 0.8, angle=np.radians(angle)))
    result = wave.solve(0.25, times=[0.0, 14.0, 20.0, 30.0])
    inside = result.density.sum(("x", "y")).values[0] * setup.cell * Plane(setup).cell
    assert inside[0] == pytest.approx(1.0, abs=1e-9)
    assert inside[1:].max() < 1e-8


def test_cloud_and_packet_agree_in_a_harmonic_well():
    """Quadratic H: the Wigner function moves with the rays (textbook). Means and spreads to 1e-6, and the misplaced
    probability is the noise of 16384 rays."""
    setup = Setup(Well(6.0, 0.3, 0.5), PlaneWave(), 12.0, 10.0, "absorbing")
    packet = Packet(6.8, 0.5, 0.35, across=0.3, momentum=0.4)
    times = [0.0, 2.0, 5.0]
    wave = WavePacket(setup, packet, steps_per_scale=16).solve(2 * np.pi / K, times=times)
    cloud = PacketCloud(setup, packet, points=16384, steps_per_scale=16).solve(2 * np.pi / K, times=times)
    for name in ("mean_x", "mean_y", "mean_px", "mean_py", "spread_x", "spread_y", "energy"):
        assert np.abs(wave[name] - cloud[name]).max() < 1e-6, name
    parted = divergence(cloud, wave, resolution=0.1)
    assert (parted.misplaced_flux < 1.3 * parted.numerical_error).all()
    assert not parted.parted.any()


def test_rays_fail_later_at_shorter_wavelengths():
    """In a random medium the misplaced probability grows with time and falls with the wavelength: the correspondence
    principle. Packet and cloud have the mean of position alike to the packet's spread before they part."""
    setup, packet, times = random_setup(), Packet(4.0, 0.0, 0.6), [0.0, 3.0, 6.0]
    wave = WavePacket(setup, packet).solve([0.25, 0.5], times=times)
    cloud = PacketCloud(setup, packet, points=32768).solve([0.25, 0.5], times=times)
    result = divergence(cloud, wave, resolution=0.25)
    short, long = result.misplaced_flux.values
    assert short[0] < result.numerical_error.values[0, 0]
    assert short[1] < short[2]
    assert short[2] < 0.8 * long[2]
    assert result.resolved.values[:, 2].all()


def test_logarithmic_time():
    """Over realisations packet and cloud part at ln(kappa)/(2 lyapunov) to a factor 2 in the geometric mean, and later at the
    shorter wavelength (Berman & Zaslavsky, Physica A 91 (1978) 450, whose law is one of averages; a factor in kappa is
    that of the threshold, 8 % at a third of the packet's spread). One realisation alone is off by up to 5: its rate of
    stretch is that of the few bumps which the packet meets."""
    share, lead = [], []
    for seed in (21, 22, 23, 24):
        setup = Setup(RandomMedium(0.2, 1.0, seed), PlaneWave(), 18.0, 14.0)
        packet, times = Packet(3.0, 0.0, 0.45), np.linspace(0, 10, 21)
        wave = WavePacket(setup, packet).solve([0.2, 0.4], times=times)
        cloud = PacketCloud(setup, packet, points=16384).solve([0.2, 0.4], times=times)
        result = divergence(cloud, wave, resolution=0.15, threshold=0.08)
        assert result.parted.all()
        share.append(np.log(result.divergence_time / result.ehrenfest_time))
        lead.append(result.divergence_time[0] - result.divergence_time[1])
    assert (np.abs(np.mean(share, axis=0)) < np.log(2.0)).all()
    assert np.mean(lead) > 0.5
