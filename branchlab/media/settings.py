"""Laboratory numbers into the two that branchlab works with: strength of v and wavelength.

All quantities are in SI units unless the argument's name says otherwise; wavelengths are in metres.
"""

import math

import attrs
from scipy import constants

from branchlab.conventions import CAUTION
from branchlab.errors import InputError, check_number, check_positive
from branchlab.values import ValueObject, value


@value
class Laboratory(ValueObject):
    """What a laboratory medium is to branchlab.

    Attributes
    ----------
    wavelength : float
        Where v = 0, metres.
    strength : float
        rms of v.
    speed : float or None
        Phase speed where v = 0, m/s.
    thermal_length : float or None
        hbar v_F/(pi k_B T) of an electron gas, metres.
    note : str
        Where the numbers hold, and the caution where there is one.
    """

    wavelength: float
    strength: float
    speed: float | None = attrs.field(default=None, kw_only=True)
    thermal_length: float | None = attrs.field(default=None, kw_only=True)
    note: str = attrs.field(default="", kw_only=True)


def _weak(strength: float, what: str) -> float:
    """Return an rms of v that leaves room below v = 1, else raise `InputError`."""
    if strength >= 1.0:
        raise InputError(
            f"{what} make the rms of v {strength:.3g}; it must stay below 1, where nothing propagates (weak disorder: below "
            "0.3). Check the units."
        )
    return strength


def electron_gas(
    *, density: float, potential_rms_mev: float, effective_mass: float = 0.067, temperature: float | None = None
) -> Laboratory:
    """Return the electrons at the Fermi energy of a two-dimensional gas.

    Parameters
    ----------
    density : float
        Electrons per square metre (both spins).
    potential_rms_mev : float
        rms of the potential energy, meV.
    effective_mass : float
        In electron masses; 0.067 for GaAs.
    temperature : float, optional
        Kelvin; gives the thermal length.

    Notes
    -----
    k_F = sqrt(2 pi n), E_F = pi hbar**2 n/m, v = V/E_F (Ando, Fowler & Stern, Rev. Mod. Phys. 54 (1982) 437).
    """
    density, mass = check_positive("density", density), check_positive("effective_mass", effective_mass)
    rms = check_positive("potential_rms_mev", potential_rms_mev)
    mass *= constants.m_e
    energy = math.pi * constants.hbar**2 * density / mass
    wavenumber = math.sqrt(2.0 * math.pi * density)
    fermi_speed = constants.hbar * wavenumber / mass
    thermal = None
    if temperature is not None:
        thermal = constants.hbar * fermi_speed / (math.pi * constants.k * check_positive("temperature", temperature))
    strength = _weak(
        1e-3 * rms * constants.e / energy,
        f"potential_rms_mev {rms:g} and the Fermi energy {1e3 * energy / constants.e:.3g} meV of a density of {density:g} "
        "per square metre",
    )
    return Laboratory(
        2.0 * math.pi / wavenumber,
        strength,
        speed=fermi_speed,
        thermal_length=thermal,
        note="Single electrons at the Fermi energy, one parabolic band, no magnetic field.",
    )


def light(*, vacuum_wavelength: float, index: float, index_rms: float) -> Laboratory:
    """Return light in an uneven medium or film.

    Parameters
    ----------
    vacuum_wavelength : float
        Metres.
    index : float
        Mean (effective) refractive index.
    index_rms : float
        rms of the index; v = 1 - (n/index)**2, strength = 2 index_rms/index.
    """
    wavelength, index = check_positive("vacuum_wavelength", vacuum_wavelength), check_positive("index", index)
    return Laboratory(
        wavelength / index,
        _weak(2.0 * check_positive("index_rms", index_rms) / index, f"index_rms {index_rms:g} and index {index:g}"),
        speed=constants.c / index,
        note="Scalar waves of one polarisation. With lasers: observe eye and skin safety limits as your licensed laser "
        "safety officer sets them. " + CAUTION,
    )


def sound(*, frequency: float, speed: float, speed_rms: float) -> Laboratory:
    """Return sound or ultrasound in an uneven fluid or gel.

    Parameters
    ----------
    frequency : float
        Hertz.
    speed : float
        Mean sound speed, m/s.
    speed_rms : float
        rms of the speed; v = 1 - (speed/c)**2, strength = 2 speed_rms/speed.
    """
    frequency, speed = check_positive("frequency", frequency), check_positive("speed", speed)
    return Laboratory(
        speed / frequency,
        _weak(2.0 * check_positive("speed_rms", speed_rms) / speed, f"speed_rms {speed_rms:g} and speed {speed:g}"),
        speed=speed,
        note="Linear sound without loss or shear. Sound levels can harm. " + CAUTION,
    )


def shallow_water(*, period: float, depth: float, depth_rms: float, gravity: float = constants.g) -> Laboratory:
    """Return long waves on shallow water over an uneven floor.

    Parameters
    ----------
    period : float
        Seconds.
    depth : float
        Mean depth, metres.
    depth_rms : float
        rms of the depth; v = 1 - depth/h, strength = depth_rms/depth.
    gravity : float
        m/s**2.

    Raises
    ------
    InputError
        The wave is shorter than 20 depths, where c = sqrt(g h) fails (common practice).

    Notes
    -----
    c = sqrt(g h) (Lamb, Hydrodynamics, 1932, sec. 170).
    """
    period, depth = check_positive("period", period), check_positive("depth", depth)
    speed = math.sqrt(check_positive("gravity", gravity) * depth)
    check_number("wavelength/depth (c = sqrt(g h) holds for long waves)", speed * period / depth, low=20.0)
    return Laboratory(
        speed * period,
        _weak(check_positive("depth_rms", depth_rms) / depth, f"depth_rms {depth_rms:g} and depth {depth:g}"),
        speed=speed,
        note="Linear long waves, no rotation, no breaking. " + CAUTION,
    )
