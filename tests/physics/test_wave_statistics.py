"""Waves in random media and behind random screens against closed forms of their averages; seeded samples.

Tolerances are sampling errors (stated as standard errors beside each) unless said otherwise.
"""

import numpy as np
import pytest
from scipy import special

from branchlab.launch import Beam, FieldSource, PlaneWave, Setup
from branchlab.rays import RayEnsemble
from branchlab.waves import ParaxialWave
from tests.oracles.empty import Empty
from tests.oracles.white_noise import WhiteNoise


def test_coherence_of_a_plane_wave():
    """<u(y) u*(y + r)> = exp(-k^2 [A(0) - A(r)] z), exact for rows that are independent.
    Tatarskii, The Effects of the Turbulent Atmosphere (1971); Ishimaru, Wave Propagation and Scattering (1978)."""
    k, z = 30.0, 24.0
    lags = np.array([0.125, 0.25, 0.5, 1.0])
    found = []
    for seed in range(12):
        medium = WhiteNoise(0.024, seed)
        setup = Setup(medium, PlaneWave(), z, 64.0, screens=25, cells=1024)
        wave = ParaxialWave(setup, steps_per_scale=1, tolerance=1.0)
        psi = wave.solve(2 * np.pi / k, fields=True).psi.values[0, -1]
        pitch = 64.0 / psi.size
        found.append([(psi.conj() * np.roll(psi, -round(lag / pitch))).mean() for lag in lags])
    exact = np.exp(-(k**2) * medium.coherence_loss(lags) * z)
    mean, error = np.mean(found, axis=0), np.std(found, axis=0) / np.sqrt(12)
    assert 0.05 < exact[-1] < exact[0] < 0.96
    assert np.abs(mean - exact).max() < 4 * error.max()
    assert error.max() < 0.02


def test_spread_of_a_beam_is_ray_spread_plus_diffraction():
    """<y^2> = s0^2 + z^2/(4 k^2 s0^2) + Dtheta z^3/3 for the wave at every k; the rays lack the middle term.
    Tatarskii 1971; by Ehrenfest's theorem. Mean over 80 realisations, standard error 6 %."""
    waist, z = 1.6, 20.0
    s0 = waist / 2
    waves, rays = {12.0: [], 40.0: []}, []
    for seed in range(80):
        medium = WhiteNoise(0.06, 1000 + seed, period=32.0)
        setup = Setup(medium, Beam(waist), z, 32.0, screens=6, cells=512)
        solved = ParaxialWave(setup, steps_per_scale=1, tolerance=1.0).solve([2 * np.pi / k for k in waves])
        for number, k in enumerate(waves):
            share = solved.intensity.values[number, -1] * setup.cell
            waves[k].append((share * setup.y**2).sum())
        share = RayEnsemble(setup).density().intensity.values[-1] * setup.cell
        rays.append((share * setup.y**2).sum())
    turned = medium.angle_diffusion * z**3 / 3
    for k, spread in waves.items():
        exact = s0**2 + z**2 / (4 * k**2 * s0**2) + turned
        assert np.mean(spread) == pytest.approx(exact, abs=4 * np.std(spread) / np.sqrt(80))
        assert np.std(spread) / np.sqrt(80) < 0.07 * exact
        # the same realisations: what the wave has beyond the rays is diffraction alone
        beyond = np.array(spread) - rays
        diffraction = z**2 / (4 * k**2 * s0**2)
        assert np.mean(beyond) == pytest.approx(diffraction, abs=4 * np.std(beyond) / np.sqrt(80))
    assert np.mean(rays) == pytest.approx(s0**2 + turned, abs=4 * np.std(rays) / np.sqrt(80))


@pytest.mark.parametrize("tau", [0.3, 0.7])
def test_rays_behind_a_sinusoidal_screen(tau):
    """Harmonic m of the ray density behind exp(i phi0 cos qy) is J_m(m tau), tau = phi0 q^2 z/k < 1; S^2 = 1/sqrt(1-tau^2)
    - 1; on the axis I = 1/(1 - tau). Kapteyn series, Watson, Theory of Bessel Functions, ch. 17."""
    setup, q = _screen_setup(tau, cells=2048)
    density = RayEnsemble(setup, rays_per_scale=512).density().intensity.values[-1]
    m = np.arange(1, 9)
    coefficient = np.fft.fft(density)[2 * m] / density.size * np.exp(-1j * m * q * setup.y[0])
    cell = np.sinc(m * q * setup.cell / (2 * np.pi))  # mean over a cell
    assert coefficient.real == pytest.approx(special.jv(m, m * tau) * cell, abs=1e-6)
    assert np.abs(coefficient.imag).max() < 1e-6
    assert density.max() == pytest.approx(1 / (1 - tau), rel=2e-3)
    assert density.var() == pytest.approx(1 / np.sqrt(1 - tau**2) - 1, rel=2e-3)


def _screen_setup(tau, cells, z=8.0, q=1.0):
    y = np.linspace(-2 * np.pi / q, 2 * np.pi / q, 801)
    return Setup(
        Empty(), FieldSource(y, 1.0, tau / (q**2 * z) * np.cos(q * y)), z, 4 * np.pi / q, screens=2, cells=cells
    ), q


def test_wave_tends_to_rays_harmonic_by_harmonic():
    """J_m(2 phi0 sin(m q^2 z/2k)) -> J_m(m tau) as k grows at fixed rays; the difference falls as 1/k^2.
    Guigay, Optica Acta 18 (1971) 677."""
    setup, q = _screen_setup(0.6, cells=1024)
    m = np.arange(1, 5)
    wavelengths = [2 * np.pi / k for k in (20.0, 40.0, 80.0)]
    intensity = ParaxialWave(setup).solve(wavelengths).intensity.values[:, -1]
    cell = np.sinc(m * q * setup.cell / (2 * np.pi))
    wave = (np.fft.fft(intensity, axis=1)[:, 2 * m] / 1024 * np.exp(-1j * m * q * setup.y[0])).real / cell
    off = np.abs(wave - special.jv(m, 0.6 * m)).max(axis=1)
    assert off[0] > 1e-4
    assert off[:-1] / off[1:] == pytest.approx([4.0, 4.0], rel=0.15)


def _gaussian_path(seed, width, rms):
    """A random path with correlation rms^2 exp(-y^2/2), periodic over the width, and its samples."""
    n = 16 * round(width)
    generator = np.random.default_rng(seed)
    q = 2 * np.pi * np.fft.rfftfreq(n, width / n)
    power = np.exp(-(q**2) / 2)
    power[0] = 0
    power *= rms**2 / (power[1:].sum() * 2)
    modes = np.sqrt(power / 2) * (generator.standard_normal(q.size) + 1j * generator.standard_normal(q.size))
    path = np.fft.irfft(modes, n=n, norm="forward")
    y = np.linspace(-width / 2, width / 2, n + 1)
    return y, np.append(path, path[0])


def test_scintillation_grows_with_ln_k_by_the_rays_folds():
    """dS^2/d ln k = 2 p_J(0): the growth of the wave's scintillation index with the wavenumber is given by the rays alone,
    J = dy/ds. Behind a Gaussian random screen with a = z rms(path''): 2 p_J(0) = 2 exp(-1/2a^2)/(a sqrt(2 pi)).
    Log law: Berry, J. Phys. A 10 (1977) 2061; its coefficient counts two rays per fold. At a = 1, 0.3354 per doubling."""
    z, width, a = 10.0, 512.0, 1.0
    rms = a / (z * np.sqrt(3.0))
    ks = np.array([32.0, 64.0]) / rms  # rms phase of the screen: 32 and 64
    gain, near, count = [], 0, 0
    for seed in range(10):
        y, path = _gaussian_path(seed, width, rms)
        setup = Setup(Empty(), FieldSource(y, 1.0, path), z, width, screens=2, cells=4096)
        psi = [ParaxialWave(setup, tolerance=1.0).solve(2 * np.pi / k, fields=True).psi.values[0, -1] for k in ks]
        index = [(np.abs(p) ** 4).mean() / (np.abs(p) ** 2).mean() ** 2 - 1 for p in psi]
        gain.append(index[1] - index[0])
        stretch = RayEnsemble(setup).trace(rays=16384).dyds.values[-1]
        near += int((np.abs(stretch) < 0.1).sum())
        count += stretch.size
    closed = 2 * np.exp(-0.5 / a**2) / (a * np.sqrt(2 * np.pi))
    from_rays = 2 * near / (0.2 * count)
    assert from_rays == pytest.approx(closed, rel=0.03)
    error = np.std(gain) / np.sqrt(len(gain)) / np.log(2)
    assert error < 0.05 * closed
    assert np.mean(gain) / np.log(2) == pytest.approx(from_rays, rel=0.05, abs=2 * error)


@pytest.mark.parametrize("sides", ["periodic", "absorbing"])
@pytest.mark.parametrize("source", ["plane", "beam"])
def test_rays_and_wave_carry_the_same_flux(sides, source):
    """Nothing is rescaled: both start with the flux of the source, cell by cell, and keep it inside periodic sides."""
    from branchlab.media import RandomMedium

    sent = {"plane": PlaneWave(), "beam": Beam(1.5)}[source]
    setup = Setup(RandomMedium(0.05, 1.0, 3), sent, 6.0, 16.0, sides, screens=7)
    wave = ParaxialWave(setup).solve([0.2, 0.1])
    rays = RayEnsemble(setup).density()
    assert wave.flux.values[:, 0] == pytest.approx(np.full(2, rays.flux.values[0]), rel=1e-5)
    assert np.abs(wave.intensity.values[:, 0] - rays.intensity.values[0]).max() < 1e-3 * rays.intensity.values[0].max()
    if sides == "periodic":
        assert wave.flux.values[:, -1] == pytest.approx(np.full(2, rays.flux.values[-1]), rel=1e-6)
