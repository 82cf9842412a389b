"""The one page of letters, axes, units and signs (DEVELOPERS.md explains each).

x is the range (the way the wave is sent), y is transverse; arrays are ``(x, y)`` with y contiguous.
The medium is ``v(x, y) = V/E = 1 - n**2``. The time factor is exp(-i omega t): outgoing waves are exp(+ikr).
Paraxial wave: i du/dx = -(1/2k) d2u/dy2 + (k/2) v u, with psi = u exp(ikx).
Packets: (i/k) dpsi/dt = -(1/2k**2) lap psi + (v/2) psi; t is a length: the free speed is 1.
Full rays: H = p**2/2 + v/2 = 1/2, dr/dt = p, dp/dt = -grad v/2, S = int p dr; their intensity is flux n/(p_x dy), n the
index of the mean medium, and the flux of a wave Im int psi* psi_x dy/(kn).
Paraxial rays: dy/dx = p, dp/dx = -v_y/2, dS/dx = p**2/2 - v/2; the phase of a ray is kS - (pi/2) maslov.
"""

import math

X, Y, X_FINE, Y_FINE, TIME = "x", "y", "x_fine", "y_fine", "time"
WAVELENGTH, RAY, REALISATION, CAUSTIC, BRANCH = "wavelength", "ray", "realisation", "caustic", "branch"

CARRIER, NO_CARRIER = "exp(ikx) removed", "none"
PARAXIAL, FULL = "paraxial", "full"
SIDES = ("periodic", "absorbing")

CAUTION = (
    "Linear theory, research use; not for navigation, warning, structural design or safety limits. Follow local codes and "
    "licensed practice."
)

MEAN_FIRST_CAUSTIC = 4.1796234
"""Mean distance to the first caustic of a plane wave in units of z_c = D**(-1/3), white-noise limit:
(2/3) 2**(1/3) pi**2 [Ai(0)**2 + Bi(0)**2] (law: Kulkarny & White, Phys. Fluids 25 (1982) 1770)."""


def wavenumber(wavelength):
    """Return k = 2 pi / wavelength."""
    return 2.0 * math.pi / wavelength


def wave_parameter(wavenumber, angle_diffusion, curvature_noise):
    """Return kappa = 3 k Dtheta D**(-2/3), the one parameter (beside x/z_c) by which rays fail.

    Parameters
    ----------
    wavenumber : float or array
        k = 2 pi / wavelength, 1/length.
    angle_diffusion : float
        Dtheta = -A''(0) of the line-integrated index correlation, 1/length.
    curvature_noise : float
        D = A''''(0), 1/length**3.
    """
    return 3.0 * wavenumber * angle_diffusion * curvature_noise ** (-2.0 / 3.0)


def with_caution(note: str) -> str:
    """Return a note with the caution behind it, once."""
    return note if CAUTION in note else f"{note} {CAUTION}".strip()
