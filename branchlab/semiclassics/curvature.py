"""The curvature of the packets of a sum: from the medium and the front, not from the wavelength."""

import numpy as np


def packet_curvature(setup) -> float:
    """Return gamma in 1/length, the packet curvature at which a packet is least deformed on its way.

    gamma**2 = rms(v_yy)/2 + c**2. In v = a**2 y**2 the first term is a**2: the packet is the coherent state of
    the duct. c = rms(C)/rms(A + C length/2) is the curvature of the launching front half way in empty space; it
    matters when the medium is weak or absent. Without either, gamma = 1/length. Sums hardly depend on it: between
    half and twice the value they change by less than a tenth of their own error (our measurement).

    Parameters
    ----------
    setup : Setup
    """
    x = setup.x[:: -(-setup.x.size // 64)]
    y = setup.y[:: -(-setup.y.size // 512)]
    bend = setup.medium.rows(x, y, dy=2)
    strength = np.sqrt(np.mean(bend**2)) / 2.0
    curvature = 0.0
    for part in setup.parts():
        rays = part.front.at(np.linspace(*part.front.span, 1024))
        flux = rays.amplitude**2
        half_way = np.sum(flux * (rays.dy + 0.5 * setup.length * rays.dp) ** 2)
        if half_way > 0:
            curvature = max(curvature, np.sum(flux * rays.dp**2) / half_way)
    gamma = np.sqrt(strength + curvature)
    return float(gamma) if gamma * setup.length > 1e-3 else 1.0 / setup.length
