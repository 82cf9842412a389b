"""What every source must do: entry wave and launching front carry the same flux, phase and direction."""

import numpy as np
import pytest

from tests.canon import SOURCES, setup_with

SIDES = ["periodic", "absorbing"]


def cases():
    return [pytest.param(s, sides, id=f"{type(s).__name__}-{sides}") for s in SOURCES for sides in SIDES]


@pytest.mark.parametrize(("source", "sides"), cases())
def test_weights_sum_to_one(source, sides):
    assert sum(part.weight for part in setup_with(source=source, sides=sides).parts()) == pytest.approx(1.0)


@pytest.mark.parametrize(("source", "sides"), cases())
def test_wave_and_rays_carry_the_same_flux(source, sides):
    """int |u|^2 dy = int amplitude^2 ds at two wavelengths (both sums are spectrally accurate or exact)."""
    setup = setup_with(source=source, sides=sides)
    y = setup.window.points(4096)
    for part in setup.parts():
        s = np.linspace(*part.front.span, 20001)
        amplitude = part.front.at(s).amplitude
        rays = np.trapezoid(amplitude**2, s)
        for k in (20.0, 60.0):
            wave = (np.abs(part.entry(y, np.array([k]))) ** 2).sum() * setup.window.span / y.size
            jump = 0.0 if part.front.closed else np.abs(amplitude[[0, -1]]).max()
            pitch = setup.window.span / y.size  # a sharp edge of the field is known to one point
            assert wave == pytest.approx(rays, rel=1e-9, abs=1e-7 + jump**2 * pitch)


@pytest.mark.parametrize(("source", "sides"), cases())
def test_front_tangents_are_derivatives(source, sides):
    """Central differences of y, p and action: dy, dp, and dS = p dy (Lagrangian front)."""
    for part in setup_with(source=source, sides=sides).parts():
        low, high = part.front.span
        s = np.linspace(low, high, 23)[1:-1]
        h = 1e-5 * (high - low)
        plus, minus, here = part.front.at(s + h), part.front.at(s - h), part.front.at(s)
        assert np.allclose((plus.y - minus.y) / (2 * h), here.dy, atol=1e-7)
        assert np.allclose((plus.p - minus.p) / (2 * h), here.dp, atol=1e-7)
        assert np.allclose((plus.action - minus.action) / (2 * h), here.p * here.dy, atol=1e-7)


@pytest.mark.parametrize(("source", "sides"), cases())
def test_local_wavenumber_is_the_rays_momentum(source, sides):
    """Mean transverse momentum of wave and rays agree: <p> = Im int u* du/dy / (k int |u|^2) + tilt."""
    setup = setup_with(source=source, sides=sides)
    y = setup.window.points(4096)
    k = 60.0
    q = 2 * np.pi * np.fft.fftfreq(y.size, setup.window.span / y.size)
    for part in setup.parts():
        power = np.abs(np.fft.fft(part.entry(y, np.array([k]))[0])) ** 2
        wave = (q * power).sum() / (k * power.sum()) + part.tilt
        s = np.linspace(*part.front.span, 20001)
        rays = part.front.at(s)
        mean = np.trapezoid(rays.p * rays.amplitude**2, s) / np.trapezoid(rays.amplitude**2, s)
        assert wave == pytest.approx(mean, abs=1e-5)


def test_point_source_is_the_paraxial_green_function():
    """Inside its fan the field is that of a point: |u|^2 = a(p)^2/d, phase k y^2/2d - pi/4 (stationary phase;
    Fresnel's integral, textbook), up to ripples of relative order sqrt(1/(k d half_angle^2))."""
    from branchlab.launch import PointSource

    d, k = 4.0, 2000.0
    setup = setup_with(source=PointSource(-d, half_angle=0.5))
    (part,) = setup.parts()
    y = np.linspace(-0.5, 0.5, 101)
    u = part.entry(y, np.array([k]))[0]
    exact = part.front.at(y / d).amplitude / np.sqrt(d) * np.exp(1j * (k * y**2 / (2 * d) - np.pi / 4))
    assert np.abs(u - exact).max() < 1e-3 * np.abs(exact).max()
    assert part.front.phase == -np.pi / 4
