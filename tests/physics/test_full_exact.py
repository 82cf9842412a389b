"""The full wave against exact answers of (lap + k**2 (1 - v)) psi = 0. Sources stand beside each check."""

import numpy as np
import pytest
from scipy import special

from branchlab.errors import BranchlabWarning
from branchlab.launch import Beam, FieldSource, PlaneWave, PointSource, Setup
from branchlab.media import Duct, Lens, Ramp
from branchlab.waves import FullWave
from tests.oracles.empty import Empty
from tests.oracles.full_exact import cylinder, round_lens, sech_layer, smooth_step_reflection
from tests.oracles.full_media import Disc, Layers, Pillar


def field_of(setup, k, precision="double", tolerance=1e-6, points=None):
    """Solve one wavelength; return screens, points across inside the sides, psi there, and the result."""
    wave = FullWave(setup, precision, points_per_wavelength=points)
    result = wave.solve(2 * np.pi / k, tolerance=tolerance, fields=True)
    inside = np.abs(result.y_fine.values) < 0.5 * setup.width
    return result.x.values, result.y_fine.values[inside], result.psi.values[0][:, inside], result


def relative(found, exact):
    return np.linalg.norm(found - exact) / np.linalg.norm(exact)


def against_round(exact_of, middle, x, y, psi, k, reach, edge=None):
    """Relative error against a field given in polar coordinates about (middle, 0), phase 0 there; a fifth off an edge."""
    x_all, y_all = np.meshgrid(x - middle, y, indexing="ij")
    r = np.maximum(np.hypot(x_all, y_all), 1e-4)
    near = np.abs(y_all) < reach
    if edge:
        near &= np.abs(r - edge) > 0.2 * edge
    exact = exact_of(r[near], np.arctan2(y_all, x_all)[near])
    return relative(psi[near] * np.exp(-1j * k * middle), exact)


@pytest.mark.parametrize(
    ("precision", "tolerance", "allowed"), [("double", 1e-6, 1e-6), ("single", 1e-4, 5e-5), ("single", 1e-3, 5e-4)]
)
def test_smooth_lens(precision, tolerance, allowed):
    """n**2 = 1 + 0.2 exp(-r**2/a**2), k a = 10, by partial waves (Morse & Feshbach 1953, ch. 11.2)."""
    k, middle = 10.0, 5.5
    setup = Setup(Lens(0.2, 1.0, x=middle), PlaneWave(), 14.0, 12.0, "absorbing", screens=8, cells=96)
    x, y, psi, result = field_of(setup, k, precision, tolerance)
    error = against_round(
        lambda r, a: round_lens(k, lambda s: -0.2 * np.exp(-(s**2)), 6.0, r, a), middle, x, y[::7], psi[:, ::7], k, 5.0
    )
    print("lens", precision, tolerance, error, float(result.field_error[0]))
    assert error < allowed
    assert error < float(result.field_error[0])


def test_smooth_lens_at_printed_points():
    """Numbers by a second way, a volume integral equation that agrees with partial waves to 2e-10; 8 digits kept."""
    table = {  # x/a, y/a of a lens of k a = 10
        (0.5, 0.0): 1.0638873896 + 0.0137842375j,
        (2.0, 0.0): -1.2591218751 + 0.5624175293j,
        (5.0, 0.0): 0.9146897066 + 1.2438113237j,
        (-2.0, 0.0): 0.4113986025 - 0.9105713260j,
    }
    points = np.array(list(table))
    found = round_lens(10.0, lambda s: -0.2 * np.exp(-(s**2)), 6.0, np.hypot(*points.T), np.arctan2(*points.T[::-1]))
    assert np.abs(found - list(table.values())).max() < 2e-7


@pytest.mark.parametrize("v", [1.0 - 1.05**2, 0.1])
def test_penetrable_cylinder(v):
    """k a = 10, the edge band-limited by a grid of 6 points per wavelength. Bohren & Huffman 1983, ch. 8."""
    k, middle = 10.0, 4.0
    setup = Setup(Disc(v, 1.0, 3.0 * k, middle), PlaneWave(), 9.0, 9.0, "absorbing", screens=10, cells=90)
    with pytest.warns(BranchlabWarning, match="without sharp edges"):
        x, y, psi, result = field_of(setup, k, tolerance=1e-5, points=6.0)
    error = against_round(lambda r, a: cylinder(k, v, 1.0, r, a), middle, x, y[::3], psi[:, ::3], k, 4.0, edge=1.0)
    print("cylinder", v, error, float(result.refinement_error[0]))
    assert error < 3e-4


def test_hard_cylinder():
    """v = 6: the wave ends within a tenth of a wavelength. By the Born series. Bohren & Huffman 1983, ch. 8."""
    k, middle, v = 5.0, 2.5, 6.0
    setup = Setup(Pillar(v, 1.0, 0.02, middle), PlaneWave(), 5.0, 5.0, "absorbing", screens=6, cells=60)
    with pytest.warns(BranchlabWarning, match="without sharp edges"):
        x, y, psi, result = field_of(setup, k, tolerance=1e-3, points=12.0)
    error = against_round(lambda r, a: cylinder(k, v, 1.0, r, a), middle, x, y[::3], psi[:, ::3], k, 2.0, edge=1.0)
    print("hard cylinder", error, result.iterations.values)
    assert error < 1e-2


@pytest.mark.parametrize(
    ("strength", "rate", "angle"), [(0.1, 8.0, 0.0), (0.1, 4.0, 0.0), (-0.1, 8.0, 0.0), (0.1, 8.0, 0.7)]
)
def test_sech_layer(strength, rate, angle):
    """Share reflected by v = strength sech(rate (x - x0))**2: Landau & Lifshitz, Quantum Mechanics, sec. 25, problem 4."""
    k = 4.0 * np.pi
    width = 2 * np.pi * 8 / (k * np.sin(angle)) if angle else 4.1
    medium = Layers("sech", strength, rate, 2.5, 1.5 / rate, width)
    setup = Setup(medium, PlaneWave(angle), 5.0, width, screens=6, cells=32)
    result = FullWave(setup, points_per_wavelength=14.0).solve(0.5, tolerance=1e-7)
    reflected, _ = sech_layer(k * np.cos(angle), k**2 * strength, rate)
    print("sech", strength, rate, angle, float(result.reflected[0]), reflected)
    assert float(result.reflected[0]) == pytest.approx(reflected, rel=1e-2 if reflected < 1e-6 else 1e-3)


@pytest.mark.filterwarnings("ignore:the grid at wavelength")  # the thin step is sharper than the grid, and told to be
@pytest.mark.parametrize(("k2", "thickness"), [(6.0, 0.1), (7.5, 0.02)])
def test_step(k2, thickness):
    """Share reflected by a smooth step of the index: Epstein 1930 (4.0722884e-4 for the first); a sharp one is Fresnel's."""
    k1 = 5.0
    medium = Layers("step", 1.0 - (k2 / k1) ** 2, 0.5 / thickness, 3.0, 2.0 * thickness, 5.0)
    setup = Setup(medium, PlaneWave(), 14.0, 5.0, screens=8, cells=32)
    result = FullWave(setup, points_per_wavelength=24.0).solve(2 * np.pi / k1, tolerance=1e-6)
    exact = smooth_step_reflection(k1, k2, thickness)
    print("step", k2, float(result.reflected[0]), exact, result.iterations.values)
    assert float(result.reflected[0]) == pytest.approx(exact, rel=1e-3)


def test_linear_layer_turns_the_wave():
    """v = x/8 turns a plane wave at x = 8: psi ~ Ai((k**2/8)**(1/3) (x - 8)) (DLMF 9.2), and all of it comes back."""
    k = 12.0
    setup = Setup(Ramp(slope_x=1 / 8), PlaneWave(), 11.0, 3.0, screens=89, cells=32)
    x, _, psi, result = field_of(setup, k, tolerance=1e-5, points=16.0)
    exact = special.airy((k**2 / 8) ** (1 / 3) * (x - 8.0))[0]
    inner = x > 1.0
    wave = psi[inner, 0]
    wave = wave * (np.vdot(wave, exact[inner]) / np.vdot(wave, wave))
    print("ramp", relative(wave, exact[inner]), float(result.reflected[0]), result.iterations.values)
    assert relative(wave, exact[inner]) < 1e-3
    assert float(result.reflected[0]) == pytest.approx(1.0, abs=1e-3)


def test_duct_beyond_the_paraxial_limit():
    """Mode m of v = (a y)**2 goes as exp(i beta x), beta**2 = k**2 - (2 m + 1) k a (Landau & Lifshitz, sec. 23)."""
    rate, k = 0.25, 12.0
    y = np.linspace(-3.4, 3.4, 201)
    setup = Setup(Duct(rate), FieldSource(y, np.exp(-0.5 * k * rate * y**2)), 12.0, 7.0, "absorbing", screens=13)
    x, at, psi, _ = field_of(setup, k, tolerance=1e-6)
    mode = np.exp(-0.5 * k * rate * at**2)
    amplitude = psi @ mode
    inner = x >= 3.0
    slope = np.polyfit(x[inner], np.unwrap(np.angle(amplitude[inner] * np.exp(-1j * k * x[inner]))), 1)[0] + k
    print("duct", slope, np.sqrt(k**2 - k * rate), k - 0.5 * rate)
    assert slope == pytest.approx(np.sqrt(k**2 - k * rate), abs=1e-4)
    assert abs(slope - (k - 0.5 * rate)) > 5e-4  # the paraxial mode's wavenumber


def test_beam_at_thirty_degrees():
    """A Gaussian beam at 30 degrees is its plane waves, here by Gauss-Legendre (Goodman, Introduction to Fourier Optics)."""
    k, waist, tilt = 20.0, 1.0, 0.5
    setup = Setup(Empty(), Beam(waist, y=-3.0, angle=np.arcsin(tilt)), 10.0, 14.0, "absorbing", screens=5, cells=64)
    x, y, psi, _ = field_of(setup, k)
    nodes, weights = np.polynomial.legendre.leggauss(800)
    q = k * (tilt + 0.45 * nodes)
    spectrum = (2 / np.pi) ** 0.25 / np.sqrt(waist) * waist / (2 * np.sqrt(np.pi))
    spectrum = spectrum * np.exp(-((q - k * tilt) ** 2) * waist**2 / 4 + 1j * (q - k * tilt) * 3.0)
    waves = np.exp(1j * (np.sqrt(k**2 - q**2) * x[:, None, None] + q * y[:, None]))
    exact = waves @ (spectrum * weights * 0.45 * k)
    print("beam", relative(psi, exact))
    assert relative(psi, exact) < 1e-9


def test_point_source():
    """Inside its fan a point source is an outgoing cylinder wave, H0(kr) (DLMF 10.9): h (pi k/2)**(1/2) H0."""
    k, x0 = 25.0, -2.0
    source = PointSource(x0, 0.3, half_angle=1.0)
    setup = Setup(Empty(), source, 6.0, 10.0, "absorbing", screens=4, cells=64)
    x, y, psi, result = field_of(setup, k)
    x_all, y_all = np.meshgrid(x - x0, y - 0.3, indexing="ij")
    near = (np.abs(y_all) < 0.5 * x_all) & (x_all > 4.0)
    # even in angle: h (pi k/2)**(1/2), h the height of the fan with unit flux, int (fan/cos)**2 cos dp = 1
    p, weights = np.polynomial.legendre.leggauss(400)
    fan = setup.parts()[0].front.at(p).amplitude
    height = fan.max() / np.sqrt(np.sum(weights * fan**2 / np.sqrt(1.0 - p**2)))
    exact = height * np.sqrt(0.5 * np.pi * k) * special.hankel1(0, k * np.hypot(x_all, y_all))
    print("point", relative(psi[near], exact[near]), result.flux.values[0])
    assert relative(psi[near], exact[near]) < 1e-3
    assert float(result.forward_flux[0, 0]) == pytest.approx(1.0, abs=0.01)
