"""The sum over frozen Gaussians on a launching front: finite at caustics, no search for branches."""

import numpy as np

from branchlab.kernels.packets import add_packets, add_packets_alone
from branchlab.semiclassics.manifold import Line, Manifold

THINNING = 30.0
"""A ray counts fully while k ds**2 (gamma A**2 + C**2/gamma) << THINNING; measured as the best value, at all
distances, in tests against the wave: much smaller throws resolved rays away, larger lets unresolved ones make flux."""


def packet_turn(A, C, maslov, gamma):
    """Return the continuous angle of gamma A + i C along a ray: atan(C/(gamma A)) - pi maslov."""
    side = np.where(A < 0, -1.0, 1.0)
    return np.arctan2(side * C, gamma * np.abs(A)) - np.pi * maslov


class FrozenGaussians:
    """The sum of one front on one screen.

        psi(Y) = sqrt(k/2pi) int ds amplitude (gamma A + i C)**(1/2) exp(ik[S + p (Y - y) + i gamma (Y - y)**2/2])

    with the branch of the root that is continuous along the ray through its caustics. Stationary phase gives the
    primitive sum for every gamma > 0; the integral is exact where the Hamiltonian is quadratic and the front
    parabolic. Each ray is weighted with exp(-(k ds**2 (gamma A**2 + C**2/gamma)/30)**2), which takes out the
    rays that are too far apart for this wavelength.

    Not to be trusted where the front is folded more finely than a phase-space area of 2 pi/k (every sum over
    rays resolves that, the wave does not), nor where rays are too few: the flux excess shows both.

    Source: frozen Gaussians after Heller, J. Chem. Phys. 75 (1981) 2923, summed over a Lagrangian manifold; the
    form above is derived by demanding stationary phase to give Van Vleck's amplitude.

    Parameters
    ----------
    manifold : Manifold
    gamma : float
        Packet curvature, 1/length; a packet has the rms width 1/sqrt(2 k gamma) in intensity.
    reach : float
        Packets are cut where they are down to exp(-reach**2/2).
    """

    def __init__(self, manifold: Manifold, gamma: float, reach: float):
        m = manifold
        spread = gamma * m.A**2 + m.C**2 / gamma
        with np.errstate(invalid="ignore"):
            self.turn = 0.5 * packet_turn(m.A, m.C, m.maslov, gamma) + m.phase
        self.stretch = m.ds**2 * spread / THINNING
        self.size = m.ds * m.amplitude * (gamma * spread) ** 0.25
        self.manifold, self.gamma, self.reach = manifold, gamma, reach

    def field(self, k: float, line: Line, *, alone: bool = False) -> np.ndarray:
        """Return the envelope on a line for one wavenumber, shape (n,); `alone`: by one thread."""
        m = self.manifold
        psi = (add_packets_alone if alone else add_packets)(
            m.y, m.p, m.action, self.turn, self.size, self.stretch, k, self.gamma, *line[:3], self.reach, line.periodic
        )
        return np.sqrt(0.5 * k / np.pi) * psi

    def unresolved(self, k: float) -> float:
        """Return the flux of the rays that are taken out because they are too far apart."""
        thin = np.minimum(k * self.stretch, 20.0)
        lost = np.where(np.isfinite(thin), -np.expm1(-2.0 * thin**2), 0.0)
        return float(np.sum(self.manifold.flux * lost))
