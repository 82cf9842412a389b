"""Laboratory numbers against printed ones; the source stands beside each."""

import math

import pytest

from branchlab import settings
from branchlab.errors import InputError


@pytest.mark.parametrize(
    ("density", "wavelength", "energy", "speed"),
    [(1e15, 79.27, 3.573, 1.370e5), (2e15, 56.05, 7.146, 1.937e5), (4e15, 39.63, 14.292, 2.739e5)],
)
def test_electron_gas(density, wavelength, energy, speed):
    """GaAs, m = 0.067: k_F = sqrt(2 pi n), E_F = pi hbar**2 n/m (Ando, Fowler & Stern, Rev. Mod. Phys. 54 (1982) 437; from
    memory). nm, meV, m/s as printed.
    """
    gas = settings.electron_gas(density=density, potential_rms_mev=0.1 * energy)
    assert gas.wavelength == pytest.approx(wavelength * 1e-9, rel=2e-4)
    assert gas.strength == pytest.approx(0.1, rel=2e-4)
    assert gas.speed == pytest.approx(speed, rel=5e-4)
    assert gas.thermal_length is None


@pytest.mark.parametrize(("temperature", "length"), [(0.3, 1570.0), (1.7, 277.0), (4.2, 112.0)])
def test_thermal_length(temperature, length):
    """hbar v_F/(pi k_B T) of n = 2e15 per square metre, nm (Datta, Electronic Transport in Mesoscopic Systems, 1995; from
    memory).
    """
    gas = settings.electron_gas(density=2e15, potential_rms_mev=0.5, temperature=temperature)
    assert gas.thermal_length == pytest.approx(length * 1e-9, rel=4e-3)


def test_shallow_water():
    """c = (g h)**(1/2): 198.06 m/s = 713.0 km/h over 4000 m, 99.03 m/s over 1000 m (Berry, Proc. R. Soc. A 463 (2007)
    3055, prints about 700 km/h). The index goes as h**(-1/2): v = -dh/h.
    """
    deep = settings.shallow_water(period=1200.0, depth=4000.0, depth_rms=200.0)
    assert deep.speed == pytest.approx(198.06, abs=0.005)
    assert deep.speed * 3.6 == pytest.approx(713.0, abs=0.05)
    assert deep.wavelength == pytest.approx(1200.0 * deep.speed)
    assert deep.strength == pytest.approx(0.05)
    assert settings.shallow_water(period=600.0, depth=1000.0, depth_rms=1.0).speed == pytest.approx(99.03, abs=0.005)


def test_sound_and_light():
    """v = 1 - (c0/c)**2 = 2 dc/c0 and 1 - (n/n0)**2 = -2 dn/n0 to first order: strength twice the relative rms."""
    sound = settings.sound(frequency=1e6, speed=1500.0, speed_rms=30.0)
    assert (sound.wavelength, sound.strength) == (pytest.approx(1.5e-3), pytest.approx(0.04))
    light = settings.light(vacuum_wavelength=532e-9, index=1.33, index_rms=0.00665)
    assert (light.wavelength, light.strength) == (pytest.approx(400e-9), pytest.approx(0.01))
    assert light.speed == pytest.approx(299792458.0 / 1.33)


def test_cautions_where_people_can_be_hurt():
    for one in (
        settings.sound(frequency=1e6, speed=1500.0, speed_rms=30.0),
        settings.light(vacuum_wavelength=532e-9, index=1.33, index_rms=0.01),
        settings.shallow_water(period=1200.0, depth=4000.0, depth_rms=200.0),
    ):
        assert "not for navigation, warning, structural design or safety limits" in one.note
        assert "local codes" in one.note


SLIPS = {
    "per square centimetre": (
        lambda: settings.electron_gas(density=2e11, potential_rms_mev=0.5),
        r"Fermi energy 0.000715 meV of a density of 2e\+11 per square metre make the rms of v 700",
    ),
    "density": (lambda: settings.electron_gas(density=-1, potential_rms_mev=0.5), "density must be positive; got -1"),
    "strong": (
        lambda: settings.sound(frequency=1e6, speed=1500.0, speed_rms=900.0),
        "speed_rms 900 and speed 1500 make",
    ),
    "index": (lambda: settings.light(vacuum_wavelength=5e-7, index=0.0, index_rms=0.1), "index must be positive"),
    "short wave": (
        lambda: settings.shallow_water(period=100.0, depth=4000.0, depth_rms=9.0),
        r"in \[20, inf.* got 4.95",
    ),
    "dry": (
        lambda: settings.shallow_water(period=1e4, depth=100.0, depth_rms=100.0),
        "depth_rms 100 and depth 100 make",
    ),
    "temperature": (
        lambda: settings.electron_gas(density=2e15, potential_rms_mev=0.5, temperature=0.0),
        "temperature must be positive",
    ),
}


@pytest.mark.parametrize("slip", SLIPS)
def test_slips_are_refused(slip):
    build, words = SLIPS[slip]
    with pytest.raises(InputError, match=words):
        build()


def test_a_setting_is_a_frozen_value():
    gas = settings.electron_gas(density=2e15, potential_rms_mev=0.5)
    assert type(gas).from_json(gas.to_json()) == gas
    assert math.isclose(gas.with_(wavelength=1.0).wavelength, 1.0)
