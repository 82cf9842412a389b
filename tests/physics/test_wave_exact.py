"""The paraxial wave against closed forms. Sources stand beside each check; formulas in one transverse dimension."""

import numpy as np
import pytest
from scipy import special

from branchlab.launch import Beam, FieldSource, PlaneWave, Setup
from branchlab.media import Duct, RandomMedium
from branchlab.waves import ParaxialWave
from tests.oracles.empty import Empty


def phase_screen(phi0, q, k, periods=4, samples=400):
    """The field exp(i phi0 cos(q y)) over a whole number of periods, as a source for the wavenumber k."""
    y = np.linspace(-np.pi * periods / q, np.pi * periods / q, samples * periods + 1)
    return FieldSource(y, 1.0, phi0 / k * np.cos(q * y)), 2 * np.pi * periods / q


def psi_on(setup, k, screen=-1, **options):
    """The envelope on a screen: positions and field."""
    result = ParaxialWave(setup, **options).solve(2 * np.pi / k, fields=True)
    return result.y_fine.values, result.psi.values[0, screen]


def test_gaussian_sheet_beam():
    """Free beam: width, curvature and half the Gouy phase of a round beam. Siegman, Lasers (1986), ch. 17."""
    waist, k = 1.0, 20.0
    rayleigh = 0.5 * k * waist**2
    for z in (0.5 * rayleigh, 3.0 * rayleigh):
        setup = Setup(Empty(), Beam(waist), z, 60.0, screens=2, cells=512)
        y, psi = psi_on(setup, k)
        width = waist * np.sqrt(1 + (z / rayleigh) ** 2)
        radius = z * (1 + (rayleigh / z) ** 2)
        exact = (
            (2 / np.pi) ** 0.25
            / np.sqrt(width)
            * np.exp(-((y / width) ** 2) + 0.5j * k * y**2 / radius - 0.5j * np.arctan(z / rayleigh))
        )
        assert np.abs(psi - exact).max() < 1e-10
    assert -0.5 * np.arctan(3.0) == pytest.approx(-0.6245229, abs=1e-7)  # the number printed with the formula


@pytest.mark.parametrize("distance", [0.3, 0.97, 1.03, 1.9])
def test_harmonic_duct_through_its_foci(distance):
    """A Gaussian in a parabolic duct before and behind the foci at multiples of pi/rate: Mehler's kernel applied to it
    (Mehler 1866; Feynman & Hibbs 1965; the phase at foci: Souriau 1976)."""
    rate, k, waist, y0 = 0.1, 40.0, 0.9, 1.2
    length = distance * np.pi / rate
    setup = Setup(Duct(rate), Beam(waist, y=y0), length, 16.0, "absorbing", screens=2, cells=512)
    y, psi = psi_on(setup, k, steps_per_scale=32)
    # Mehler's kernel on exp(-(y-y0)^2/w^2): one Gaussian integral, done analytically
    c, s = np.cos(rate * length), np.sin(rate * length)
    b = k * rate / s  # kernel: sqrt(b/2pi) exp(i b [(x^2+y^2) c - 2xy]/2 - i pi/4 - i (pi/2) floor)
    a = 1 / waist**2 - 0.5j * b * c
    linear = 2 * y0 / waist**2 - 1j * b * y
    integral = np.sqrt(np.pi / a) * np.exp(linear**2 / (4 * a) - (y0 / waist) ** 2 + 0.5j * b * c * y**2)
    index = np.floor(rate * length / np.pi)
    kernel = np.sqrt(np.abs(b) / (2 * np.pi)) * np.exp(-0.25j * np.pi - 0.5j * np.pi * index)
    exact = (2 / (np.pi * waist**2)) ** 0.25 * kernel * integral
    inside = np.abs(y) < 6
    assert np.abs(psi - exact)[inside].max() < 1e-8


def test_coherent_state_over_half_a_period():
    """Matched Gaussian in a duct, half a period at a step of 0.4 of the duct's length 1/rate/...: mirrored, phase -pi/2
    (the ground-state phase of a harmonic oscillator, textbook)."""
    rate, k, y0 = 0.1, 40.0, 1.5
    waist = np.sqrt(2 / (k * rate))
    length = np.pi / rate
    setup = Setup(Duct(rate), Beam(waist, y=y0), length, 16.0, "absorbing", screens=2, cells=512)
    result = ParaxialWave(setup, steps_per_scale=12, tolerance=1.0).solve(2 * np.pi / k, fields=True)
    step = result.attrs["step"]
    assert 0.3 < step < 0.45
    y, psi = result.y_fine.values, result.psi.values[0, -1]
    exact = -1j * (2 / (np.pi * waist**2)) ** 0.25 * np.exp(-(((y + y0) / waist) ** 2))
    assert np.abs(psi - exact)[np.abs(y) < 6].max() < 1e-7


def test_revival_in_a_duct():
    """psi(2 pi/rate) = -psi(0): every mode has turned (m + 1/2) 2 pi (textbook)."""
    rate, k = 0.1, 40.0
    setup = Setup(Duct(rate), Beam(0.7, y=1.0), 2 * np.pi / rate, 16.0, "absorbing", screens=3, cells=512)
    y, psi = psi_on(setup, k, steps_per_scale=96)
    entry = setup.parts()[0].entry(y, np.array([k]))[0]
    assert np.abs(psi + entry)[np.abs(y) < 6].max() < 3e-10


def test_knife_edge():
    """Fresnel diffraction by a half plane: I = 1/4 at the edge's shadow line, first maximum 1.370443 at v = 1.217198, first
    minimum 0.778251 at v = 1.872519, v = y sqrt(2/(lambda z)). Born & Wolf, Principles of Optics, 8.7.3.
    The edge is apodised over a 100th of that unit, and the far edge falls off too smoothly to be felt."""
    k, z = 200.0, 4.0
    unit = np.sqrt(0.5 * (2 * np.pi / k) * z)
    y = np.linspace(-2.0, 14.0, 40001)
    amplitude = 0.5 * special.erfc(-y / (unit / 100)) * np.exp(-((np.maximum(y, 0.0) / 8.0) ** 8))
    setup = Setup(Empty(), FieldSource(y, amplitude), z, 32.0, screens=2, cells=2048)
    at, psi = psi_on(setup, k)
    intensity = np.interp(unit * np.array([0.0, 1.217198, 1.872519]), at, np.abs(psi) ** 2)
    assert intensity == pytest.approx([0.25, 1.370443, 0.778251], abs=1.5e-3)


def test_talbot_revival():
    """Any field of period d repeats after z_T = 2 d^2/lambda and is shifted by d/2 after half of that (Rayleigh 1881;
    Goodman, Introduction to Fourier Optics)."""
    k, q = 30.0, 2 * np.pi / 3.0
    source, width = phase_screen(1.3, q, k)
    d = 2 * np.pi / q
    length = 2 * d**2 * k / (2 * np.pi)
    setup = Setup(Empty(), source, length, width, screens=3, cells=512)
    result = ParaxialWave(setup).solve(2 * np.pi / k, fields=True)
    psi = result.psi.values[0]
    half = round(0.5 * d / (width / psi.shape[1]))
    assert psi.shape[1] % 8 == 0
    assert np.abs(psi[2] - psi[0]).max() < 1e-9
    assert np.abs(psi[1] - np.roll(psi[0], half)).max() < 1e-9


@pytest.mark.parametrize("phi0", [0.3, 2.0, 8.0])
@pytest.mark.parametrize("k", [20.0, 80.0])
def test_phase_grating_far_field(phi0, k):
    """Its spectrum is i^n J_n(phi0) (Raman & Nath 1935): the wave keeps it in free space; J_n(1)^2 = 0.585527, 0.193645,
    0.013203."""
    q = 2.0
    source, width = phase_screen(phi0, q, k)
    setup = Setup(Empty(), source, 5.0, width, screens=2, cells=512)
    _, psi = psi_on(setup, k)
    n = psi.size
    spectrum = np.abs(np.fft.fft(psi) / n) ** 2
    orders = np.arange(5)
    assert spectrum[4 * orders] == pytest.approx(special.jv(orders, phi0) ** 2, abs=1e-12)


@pytest.mark.parametrize("phi0", [0.5, 2.0, 6.0])
@pytest.mark.parametrize("z", [0.4, 2.0, 7.0])
@pytest.mark.parametrize("k", [15.0, 90.0])
def test_phase_grating_near_field(phi0, z, k):
    """Intensity harmonic m behind exp(i phi0 cos qy): J_m(2 phi0 sin(m q^2 z/2k)) cos-amplitudes; exact at every z and k.
    Cowley & Moodie, Proc. Phys. Soc. B 70 (1957) 486; Guigay, Optica Acta 18 (1971) 677."""
    q = 2.0
    source, width = phase_screen(phi0, q, k)
    setup = Setup(Empty(), source, z, width, screens=2, cells=512)
    y, psi = psi_on(setup, k)
    harmonic = np.fft.fft(np.abs(psi) ** 2) / psi.size
    m = np.arange(8)
    # the points are centres of cells: take their phase out of the coefficients of exp(i m q y)
    found = harmonic[4 * m] * np.exp(-1j * m * q * y[0])
    exact = special.jv(m, 2 * phi0 * np.sin(m * q**2 * z / (2 * k)))
    assert np.abs(found.imag).max() < 1e-10
    assert np.abs(found.real - exact).max() < 1e-10


def test_cusp_of_a_lens():
    """At the focus of the path -y^2/2f + c y^4/4 (wide aperture): I = 4 Gamma(5/4)^2 sqrt(k/c)/(pi f). DLMF 36.2.15
    (Pearcey integral at 0) and 36.6."""
    f, c = 6.0, 0.01
    y = np.linspace(-6.0, 6.0, 12001)
    amplitude = np.exp(-((y / 4.0) ** 8))  # flat over the part that matters, abs(y) < (k c)^(-1/4) = 0.7 and less
    for k in (500.0, 2000.0):
        setup = Setup(
            Empty(), FieldSource(y, amplitude, -(y**2) / (2 * f) + 0.25 * c * y**4), f, 20.0, screens=2, cells=4096
        )
        at, psi = psi_on(setup, k)
        exact = 4 * special.gamma(1.25) ** 2 * np.sqrt(k / c) / (np.pi * f)
        turn = np.exp(-2j * np.pi * np.fft.fftfreq(at.size) * (at[0] / (at[1] - at[0])))
        found = np.abs((np.fft.fft(psi) * turn).mean()) ** 2  # the field between the points, at y = 0
        assert found == pytest.approx(exact, rel=1e-4)


def test_fourth_order_in_a_random_medium():
    """The field's error falls as step^4 (4.0 +- 0.1), and the error bar is 1 to 1.3 times the truth."""
    setup = Setup(RandomMedium(0.1, 1.0, 7), PlaneWave(), 12.0, 16.0, screens=4)
    k = 2 * np.pi / 0.1
    _, truth = psi_on(setup, k, steps_per_scale=64, tolerance=1.0)
    errors, bars = [], []
    for steps in (4, 8, 16):
        result = ParaxialWave(setup, steps_per_scale=steps, tolerance=1.0).solve(0.1, fields=True)
        errors.append(np.linalg.norm(result.psi.values[0, -1] - truth) / np.linalg.norm(truth))
        bars.append(float(result.field_error[0]))
    orders = np.log2(np.array(errors[:-1]) / errors[1:])
    assert np.abs(orders - 4.0).max() < 0.1
    ratio = np.array(bars) / errors
    assert (ratio >= 1.0).all()
    assert (ratio <= 1.3).all()


def test_norm_overlap_and_way_back():
    """Unitary: norm and overlap of two fields are kept (1e-9, the processor's series); back through the mirrored medium
    with the conjugate field the entry returns."""
    medium = RandomMedium(0.08, 1.0, 3)
    k, length = 50.0, 8.0
    y0 = np.linspace(-8, 8, 257)
    fields = []
    for source in (
        FieldSource(y0, 1.0, 0.3 * np.cos(np.pi * y0 / 4)),
        FieldSource(y0, 1.0, 0.2 * np.sin(np.pi * y0 / 8)),
    ):
        setup = Setup(medium, source, length, 16.0, screens=5, cells=512)
        result = ParaxialWave(setup, tolerance=1.0).solve(2 * np.pi / k, fields=True)
        fields.append(result.psi.values[0])
    a, b = fields
    dy = 16.0 / a.shape[1]
    assert np.abs((np.abs(a) ** 2).sum(axis=1) * dy - 16.0).max() < 1e-7
    overlap = (a.conj() * b).sum(axis=1) * dy
    assert np.abs(overlap - overlap[0]).max() < 1e-7
