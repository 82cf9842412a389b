"""Rays where they are known in closed form: ramps, ducts, screens of given phase; caustics and densities of those."""

import numpy as np
import pytest
from scipy.special import erf, jv

from branchlab.launch import FieldSource, PlaneWave, PointSource, Setup
from branchlab.launch.part import FrontRays
from branchlab.media import Duct, Ramp
from branchlab.rays import RayEnsemble
from branchlab.rays.caustics import caustic_points
from branchlab.rays.march import Marcher
from tests.oracles.empty import Empty


def launch(y, p):
    """Rays with unit front tangent along y."""
    y, p = np.broadcast_arrays(np.asarray(y, float), np.asarray(p, float))
    one, zero = np.ones(y.shape), np.zeros(y.shape)
    return FrontRays(y.copy(), y.copy(), p.copy(), zero, one, zero, one)


def at_the_end(setup, y, p, steps_per_scale=4, points_per_scale=8):
    *_, last = Marcher(setup, steps_per_scale, points_per_scale).march(launch(y, p), matrix=True)
    return last


# ---- linear medium


def test_ramp_across():
    """n**2 = 1 + g y: y = y0 + p0 x + g x**2/4; a uniform field makes parabolas, and free tangents."""
    g, x = 0.02, 12.0
    setup = Setup(Ramp(slope_y=-g), PlaneWave(), x, 40.0, "absorbing", screens=25, cells=640)
    y, p = np.linspace(-4, 4, 33), np.linspace(-0.1, 0.1, 33)[::-1]
    last = at_the_end(setup, y, p)
    # round-off and the far tail of the taper at the sides, as the spectral slope of the table sees it
    np.testing.assert_allclose(last.y, y + p * x + g * x**2 / 4, atol=1e-9)
    np.testing.assert_allclose(last.p, p + g * x / 2, atol=1e-10)
    action = 0.5 * p**2 * x + 0.5 * g * p * x**2 + g**2 * x**3 / 12 + 0.5 * g * y * x
    np.testing.assert_allclose(last.action, action, atol=1e-9)
    for found, exact in ((last.A, 1.0), (last.B, x), (last.C, 0.0), (last.D, 1.0)):
        np.testing.assert_allclose(found, exact, atol=1e-8)


def test_ramp_along():
    """v = g x bends no ray: S = p**2 x/2 - g x**2/4."""
    g, x = 0.02, 12.0
    setup = Setup(Ramp(slope_x=g), PlaneWave(), x, 40.0, "absorbing", screens=25, cells=640)
    y, p = np.linspace(-4, 4, 33), np.linspace(-0.1, 0.1, 33)
    last = at_the_end(setup, y, p)
    np.testing.assert_allclose(last.y, y + p * x, atol=1e-12)
    np.testing.assert_allclose(last.action, 0.5 * p**2 * x - g * x**2 / 4, atol=1e-12)


def test_ramp_is_the_small_angle_limit_of_the_exact_law():
    """Exact: x = p_x s, y = p_y s + g s**2/4, path n0**2 s + p_y g s**2/2 + g**2 s**3/12 (ds_arc = n ds).

    Kravtsov & Orlov, Geometrical Optics of Inhomogeneous Media (1990) (from memory). A paraxial ray misses y by the third
    power of the angle and the path by the fourth.
    """
    x, errors = 10.0, []
    for small in (0.1, 0.05):
        p, g = small, 0.1 * small
        setup = Setup(Ramp(slope_y=-g), PlaneWave(), x, 40.0, "absorbing", screens=21, cells=640)
        last = at_the_end(setup, 0.0, p)
        s = x / np.sqrt(1 - p**2)
        errors.append([last.y - (p * s + g * s**2 / 4), x + last.action - (s + p * g * s**2 / 2 + g**2 * s**3 / 12)])
    y_ratio, path_ratio = np.abs(errors[0]) / np.abs(errors[1])
    assert abs(y_ratio - 8) < 0.1
    assert abs(path_ratio - 16) < 0.2


# ---- duct

RATE = 0.1


@pytest.mark.parametrize("x", [10.0, 25.0, 60.0])  # before and behind the foci at 5 pi, 15 pi, ...
def test_duct(x):
    """n**2 = 1 - a**2 y**2: all columns turn as cos ax, sin ax; a caustic at every zero of cos ax.

    Marcuse, Light Transmission Optics (1982) (from memory), in its paraxial form.
    """
    setup = Setup(Duct(RATE), PlaneWave(), x, 16.0, "absorbing", screens=21, cells=256)
    y, p = np.linspace(-2, 2, 33), np.linspace(-0.1, 0.1, 33)
    cos, sin = np.cos(RATE * x), np.sin(RATE * x)
    # the fourth order of the step, (a h)**4 = 2e-4 and 6e-8, times 1/2880 and the few radians travelled
    for steps, points, bound in ((4, 8, 2e-6), (32, 32, 1e-9)):
        last = at_the_end(setup, y, p, steps, points)
        np.testing.assert_allclose(last.y, y * cos + p * sin / RATE, atol=3 * bound)
        np.testing.assert_allclose(last.p, p * cos - RATE * y * sin, atol=bound)
        action = 0.25 * ((p**2 - RATE**2 * y**2) * np.sin(2 * RATE * x) / RATE) - y * p * sin**2
        np.testing.assert_allclose(last.action, action, atol=bound)
        for found, exact in ((last.A, cos), (last.B, sin / RATE), (last.C, -RATE * sin), (last.D, cos)):
            np.testing.assert_allclose(found, exact, atol=10 * bound)
        assert (last.maslov == np.floor(RATE * x / np.pi + 0.5)).all()


def test_duct_refocuses_paraxially():
    """Exact rays return to the axis after pi cos(angle)/a (Marcuse 1982); paraxial ones all after pi/a.

    The exact y = (sin(angle)/a) sin(a x/cos(angle)) is met to the third power of the angle.
    """
    x, errors = 0.9 * np.pi / RATE, []
    setup = Setup(Duct(RATE), PlaneWave(), x, 16.0, "absorbing", screens=21, cells=256)
    for angle in (0.1, 0.05):
        last = at_the_end(setup, 0.0, np.sin(angle), 16)
        errors.append(abs(last.y - np.sin(angle) / RATE * np.sin(RATE * x / np.cos(angle))).item())
    assert abs(errors[0] / errors[1] - 8) < 0.2
    focus = at_the_end(setup.with_(length=np.pi / RATE), 0.0, np.sin([0.02, 0.1, 0.2]), 16)
    np.testing.assert_allclose(focus.y, 0.0, atol=2e-7)


def test_duct_focuses_at_right_places():
    """Caustics of a flat front at a x = pi/2, 3 pi/2: found to the fourth order of the step."""
    setup, exact = Setup(Duct(RATE), PlaneWave(), 50.0, 16.0, "absorbing", cells=256), 5 * np.pi * np.array([1, 3])
    errors = []
    for steps in (40, 80):
        states = Marcher(setup.with_(screens=steps + 1), 1, 32).march(launch(np.linspace(-3, 3, 32), 0.0))
        found = caustic_points(states)
        errors.append([np.abs(found.x[found.order == n + 1] - exact[n]).max() for n in range(2)])
    np.testing.assert_allclose(np.log2(np.divide(*errors)), 4.0, atol=0.2)
    first = RayEnsemble(setup).caustics(rays=64).first_caustic
    np.testing.assert_allclose(first[np.abs(first.s) < 3.0], exact[0], atol=1e-4)


# ---- phase given at the entry, then free space


def test_cusp_of_an_aberrated_lens():
    """Slopes -y/f + c y**3: abs(y_c) = 2 c x [(x/f - 1)/(3 c x)]**(3/2) for x > f.

    Berry & Upstill, Progress in Optics 18 (1980) 257 (from memory).
    """
    f, c = 6.0, 0.004
    y = np.linspace(-4, 4, 65)
    source = FieldSource(y, 1.0, -(y**2) / (2 * f) + c * y**4 / 4)  # a quintic spline holds a quartic exactly
    setup = Setup(Empty(), source, 12.0, 16.0, "absorbing")
    found = RayEnsemble(setup).caustics(rays=501)
    x, y_found = found.caustic_x.to_numpy(), found.caustic_y.to_numpy()
    assert x.size > 300
    exact = 2 * c * x * (np.maximum(x / f - 1, 0) / (3 * c * x)) ** 1.5
    np.testing.assert_allclose(np.abs(y_found), exact, atol=1e-9)
    assert abs(x.min() - f) < 1e-9  # the middle ray meets the cusp itself
    assert (found.order == 1).all()


FACTOR, Q = 0.25, 2 * np.pi / 8.0  # J = 1 - tau cos(q y0), tau = FACTOR x


def screen(length, width=16.0, **options):
    """A sinusoidal phase screen at the entry of empty space."""
    y = np.linspace(-0.5 * width, 0.5 * width, 1025)
    source = FieldSource(y, 1.0, FACTOR / Q**2 * np.cos(Q * y))
    return Setup(Empty(), source, length, width, **options)


def test_folds_of_a_sinusoidal_screen():
    """First focus at tau = 1; fold edges at q y = sqrt(tau**2 - 1) - arccos(1/tau), 0.6848533 at tau = 2."""
    found = RayEnsemble(screen(12.0)).caustics(rays=801)
    tau, y = FACTOR * found.caustic_x.to_numpy(), found.caustic_y.to_numpy()
    assert tau.min() > 1 - 1e-6
    launched = found.s.to_numpy()[found.ray_number]
    middle = 8.0 * np.round(launched / 8.0)
    tau = np.maximum(tau, 1.0)  # the focus itself, to round-off
    edge = np.sqrt(tau**2 - 1) - np.arccos(1 / tau)
    np.testing.assert_allclose(np.abs(y - middle), edge / Q, atol=1e-6)
    at_two = np.interp(2.0, np.sort(tau), np.sort(edge))
    assert abs(at_two - 0.6848533) < 1e-4


@pytest.mark.parametrize("tau", [0.3, 0.6, 0.9])
def test_density_of_a_sinusoidal_screen(tau):
    """Before the focus harmonic m of the ray density is J_m(m tau), and its variance 1/sqrt(1 - tau**2) - 1.

    Kapteyn series: Watson, Theory of Bessel Functions (1922), ch. 17. A cell holds its mean: times sinc.
    """
    cells = 2048
    density = RayEnsemble(screen(tau / FACTOR, screens=2, cells=cells)).density().intensity[-1].to_numpy()
    m = np.arange(1, 33)  # two periods fill the window
    harmonics = np.fft.rfft(density)[2 * m] / cells
    centred = harmonics * np.exp(2j * np.pi * m * (1 - 1 / cells))  # phases about y = 0: J_m is even
    np.testing.assert_allclose(centred, jv(m, m * tau) * np.sinc(2 * m / cells), atol=2e-6)
    assert abs(density.var() - (1 / np.sqrt(1 - tau**2) - 1)) < 0.01
    # flux between two places is the difference of the launching points: 1/(1 - tau) in the middle
    cell = 16.0 / cells
    launched = np.linspace(0.0, 4.0, 400_001)
    inverse = np.interp([0.0, cell], launched - tau / Q * np.sin(Q * launched), launched)
    assert abs(density[cells // 2] - np.diff(inverse).item() / cell) < 1e-4 / (1 - tau)


def test_flux_of_an_open_front():
    """What is inside and what has left make the flux that was sent, 1 for a localised source (flux closure 1e-12)."""
    setup = Setup(Empty(), PointSource(-1.0, 0.5, half_angle=0.5), 24.0, 16.0, "absorbing", cells=256)
    density = RayEnsemble(setup).density()
    np.testing.assert_allclose(density.flux + density.lost_flux, 1.0, atol=1e-12)
    assert float(density.lost_flux[0]) == 0.0
    assert float(density.lost_flux[-1]) > 0.2
    # a fan of even brightness: I = a(p)**2/(x + 1) inside 0.8 half_angle
    i = 12
    x, y = float(density.x[i]), density.y.to_numpy()
    p = (y - 0.5) / (x + 1.0)
    inside = np.abs(p) < 0.38
    steps = np.linspace(0, 1, 20001)
    rise = steps**5 * (126 - steps * (420 - steps * (540 - steps * (315 - 70 * steps))))
    height = 1 / (2 * 0.5 * (0.8 + 0.2 * np.trapezoid(rise**2, steps)))
    np.testing.assert_allclose(density.intensity[i].to_numpy()[inside], height / (x + 1.0), rtol=1e-6)


def test_intensity_times_stretch_is_constant():
    """I abs(dy/ds) = I0 on every ray (transport equation; Born & Wolf, Principles of Optics, 3.1), before caustics."""
    setup = screen(2.4, screens=2, cells=2048)
    density = RayEnsemble(setup).density().intensity[-1]
    trace = RayEnsemble(setup).trace(rays=64)
    inside = np.abs(trace.position[-1]) < 7.5
    seen = np.interp(trace.position[-1][inside], density.y, density)
    # the mean over a cell of pitch 1/128 differs by I'' pitch**2/24
    np.testing.assert_allclose(seen * trace.dyds[-1][inside], 1.0, atol=5e-4)


def test_gaussian_random_screen(rng):
    """Rays through a point and folds per launched length behind a Gaussian random phase, with a = x rms(phase_yy).

    erf(1/(a sqrt 2)) + a sqrt(2/pi) exp(-1/2a**2), and (1/pi) (rms phase_yyy/rms phase_yy) exp(-1/2a**2) (Rice, Bell
    Syst. Tech. J. 23 (1944) 282; Longuet-Higgins, J. Opt. Soc. Am. 50 (1960) 838).
    """
    width, n = 8192.0, 131072
    q = 2 * np.pi * np.fft.rfftfreq(n, width / n)
    spectrum = np.exp(-(q**2) / 8) * (rng.standard_normal((2, q.size)) * [[1], [1j]]).sum(axis=0) * (q < 12)
    spectrum[0] = 0.0
    spectrum *= 0.15 / np.fft.irfft(-(q**2) * spectrum, n).std()  # phase_yy/k
    path, third = np.fft.irfft(spectrum, n), np.fft.irfft(-1j * q**3 * spectrum, n).std()
    y = -0.5 * width + np.arange(n + 1) * width / n
    source = FieldSource(y, 1.0, np.append(path, path[0]))
    rays = RayEnsemble(Setup(Empty(), source, 12.0, width, screens=13, cells=32768))
    density, trace = rays.density(resolution=1.0), rays.trace(rays=131072)
    for x in (6.0, 10.0):
        a = x * 0.15
        found, exact = (
            float(density.rays_per_point.sel(x=x)),
            erf(1 / (a * 2**0.5)) + a * (2 / np.pi) ** 0.5 * np.exp(-0.5 / a**2),
        )
        assert abs(found - exact) < 0.01 * exact
        stretch = trace.dyds.sel(x=x).to_numpy()
        folds, exact = (stretch * np.roll(stretch, 1) < 0).sum() / width, third / 0.15 / np.pi * np.exp(-0.5 / a**2)
        assert abs(folds - exact) < 0.03 * exact  # four thousand folds, 1.6 % if they came at random
