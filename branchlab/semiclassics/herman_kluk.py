"""The Herman-Kluk sum: Gaussian packets over phase space instead of along a front."""

import numpy as np

from branchlab.errors import check_memory
from branchlab.kernels.packets import add_packets, add_packets_alone
from branchlab.launch.part import CoherentPart, FrontRays
from branchlab.semiclassics.frozen import packet_turn
from branchlab.semiclassics.manifold import Line

BYTES_PER_RAY = 400
"""State, tangents, coefficients and their temporaries, all float64."""
PARTED = 10.0
"""Distance of neighbouring packets in packet widths beyond which they are no quadrature any more."""


def prefactor(A, B, C, D, maslov, gamma):
    """Return modulus and continuous angle of the Herman-Kluk root.

    R**2 = (A + D - i gamma B + i C/gamma)/2 (Herman & Kluk, Chem. Phys. 91 (1984) 27). Its branch needs no
    history beyond the Maslov index of the tangent (A, C) that starts as (1, 0): with z = A + i C/gamma and
    AD - BC = 1,

        R**2 = z/2 (1 + (1 + i n)/abs(z)**2),    n = Im[conj(z) (D - i gamma B)]

    whose second factor never turns beyond a right angle.

    Parameters
    ----------
    A, B, C, D : ndarray, shape (ray,)
        Stability matrix: dy/dy0, dy/dp0, dp/dy0, dp/dp0.
    maslov : ndarray, shape (ray,)
        Sign changes of A along the ray.
    gamma : float
        Packet curvature, 1/length.
    """
    square = A**2 + (C / gamma) ** 2
    n = -(gamma * A * B + C * D / gamma)
    modulus = 0.5 * np.hypot(A + D, C / gamma - gamma * B)
    angle = packet_turn(A, C, maslov, gamma) + np.arctan2(n, square + 1.0)
    return np.sqrt(modulus), 0.5 * angle


class PhaseSpace:
    """The packets into which one coherent part is taken apart at x = 0, for one or several wavenumbers.

        psi(Y) = (k/2pi) int dq dp R exp(ikS) g_qtpt(Y) <g_qp|psi0>,
        g_qp(Y) = (k gamma/pi)**(1/4) exp(-k gamma (Y - q)**2/2 + ikp (Y - q))

    Parameters
    ----------
    part : CoherentPart
    line : Line
        The box; its points are not used.
    k : ndarray, shape (k,)
        Wavenumbers that share the rays: the spacing is that of the largest, the reach that of the smallest.
    gamma : float
        Packet curvature, 1/length.
    spacing : float
        Step of q and p in units of 1/sqrt(k gamma) and sqrt(gamma/k).
    reach : float
        Packets are cut at exp(-reach**2/2), and left out where all overlaps are below that share of the largest.
    index : float, optional
        Of the mean medium. Given, packets are those of (px/n)**(1/2) psi, which full rays take along unitarily, and those
        with abs(p) >= n do not travel.
    """

    def __init__(
        self,
        part: CoherentPart,
        line: Line,
        k,
        gamma: float,
        spacing: float,
        reach: float,
        index: float | None = None,
    ):
        self.k, self.gamma, self.spacing, self.reach = np.asarray(k, dtype=np.float64), gamma, spacing, reach
        self.periodic = line.periodic
        low, high = self.k.min(), self.k.max()
        span = line.pitch * line.n
        columns = int(np.ceil(span * np.sqrt(high * gamma) / spacing))
        bound = self._momenta(part, line, span) + reach * np.sqrt(gamma / low)
        step_p = spacing * np.sqrt(gamma / high)
        half = int(np.ceil(bound / step_p))
        p = np.arange(-half, half + 1) * step_p
        check_memory(
            columns * p.size * (BYTES_PER_RAY + 16 * self.k.size),
            f"a phase-space grid of {columns} x {p.size} rays",
            "Use a larger spacing, longer wavelengths, fewer of them at once, or method='frozen-gaussian'.",
        )
        q, overlap = self._overlaps(part, line, span, columns, p)
        largest = np.abs(overlap).max(axis=(1, 2), keepdims=True)
        kept = (np.abs(overlap) > np.exp(-0.5 * reach**2) * np.where(largest > 0, largest, 1.0)).any(axis=0)
        column, row = np.nonzero(kept)
        q, p = q[column], p[row]
        weight = overlap[:, column, row] * (span / columns * step_p)
        weight *= (self.k / (2.0 * np.pi) * (self.k * gamma / np.pi) ** 0.25)[:, None]
        self.size, self.phase = np.abs(weight), np.angle(weight)
        # the share of the flux that each packet carries, for the flux that is left in the window
        self.share = np.abs(overlap[0, column, row]) ** 2
        if index is not None:
            forward = np.sqrt(np.maximum(index**2 - (p + part.tilt) ** 2, 0.0)) / index
            self.size, self.share = self.size * np.sqrt(forward), self.share * forward
        self.share /= max(self.share.sum(), 1e-300)
        one = np.ones(q.size)
        self.rays = FrontRays(q, q, p + part.tilt, part.tilt * q, one, 0.0 * one, one)

    def _momenta(self, part, line, span):
        """Return the largest transverse momentum in the entry field, tilt removed."""
        largest = 0.0
        for k in self.k:
            n = 256
            while True:
                y = line.start + (np.arange(n) + 0.5) * (span / n)
                power = np.abs(np.fft.fft(part.entry(y, np.array([k]))[0])) ** 2
                order = np.abs(np.fft.fftfreq(n, 1.0 / n)).round().astype(np.int64)
                beyond = np.cumsum(np.bincount(order, power)[::-1])[::-1]
                needed = int(np.flatnonzero(beyond > np.exp(-(self.reach**2)) * beyond[0])[-1])
                if needed < 3 * n // 8 or n >= 1 << 20:
                    break
                n *= 2
            largest = max(largest, 2.0 * np.pi * needed / span / k)
        return largest

    def _overlaps(self, part, line, span, columns, p):
        """Return q, shape (q,), and <g_qp|psi0>, shape (k, q, p)."""
        high = self.k.max()
        fine = int(np.ceil(1.5 * span * high * (np.abs(p).max() + self.reach * np.sqrt(self.gamma / high)) / np.pi))
        per = -(-fine // columns)
        n = columns * per
        pitch = span / n
        y = line.start + (np.arange(n) + 0.5) * pitch
        field = part.entry(y, self.k)
        result = np.empty((self.k.size, columns, p.size), dtype=np.complex128)
        centre = np.arange(columns) * per
        for one, (k, u) in enumerate(zip(self.k, field, strict=True)):
            half = int(np.ceil(self.reach / np.sqrt(k * self.gamma) / pitch))
            offset = np.arange(-half, half + 1)
            window = np.exp(-0.5 * k * self.gamma * (offset * pitch) ** 2)
            waves = np.exp(-1j * k * np.outer(offset * pitch, p))
            norm = (k * self.gamma / np.pi) ** 0.25 * pitch
            padded = np.pad(u, half, mode="wrap") if line.periodic and half <= n else np.pad(u, half)
            views = np.lib.stride_tricks.sliding_window_view(padded, 2 * half + 1)[centre]
            for first in range(0, columns, 256):  # blocks bound the memory of the products
                block = slice(first, first + 256)
                result[one, block] = norm * ((views[block] * window) @ waves)
        return y[centre], result


class HermanKluk:
    """The Herman-Kluk sum of one coherent part on one screen.

    Right for beams, small sources and fronts of any shape, exact for quadratic Hamiltonians; it smooths phase
    space over areas of 2 pi/k, as the wave does. Not to be trusted where neighbouring rays of its grid have
    parted by more than a few packet widths (chaotic rays, several first-caustic distances): then it makes flux.

    Parameters
    ----------
    space : PhaseSpace
    sent : float
        Flux of the coherent part.
    y, p, action : ndarray, shape (ray,)
        Rays on the screen, tilt removed from momentum and action.
    matrix : (A, B, C, D)
        Stability matrix on the screen, each of shape (ray,).
    maslov : ndarray, shape (ray,)
    slow : ndarray, shape (ray,), or 1
        Of full rays (n/px)**(1/2), which makes psi of (px/n)**(1/2) psi.
    """

    def __init__(self, space: PhaseSpace, sent: float, y, p, action, matrix, maslov, slow=1.0):
        self.space, self.sent, self.y, self.p, self.action = space, sent, y, p, action
        self.slow, self.there = slow, np.isfinite(y)
        with np.errstate(invalid="ignore"):
            self.root, self.turn = prefactor(*matrix, maslov, space.gamma)
        A, B, C, D = matrix
        gamma = space.gamma
        self.parted = space.spacing * np.sqrt(0.5 * (A**2 + D**2 + (gamma * B) ** 2 + (C / gamma) ** 2))

    def field(self, which: int, line: Line, *, alone: bool = False) -> np.ndarray:
        """Return the envelope on a line for the wavenumber space.k[which], shape (n,); `alone`: by one thread."""
        space = self.space
        size, turn = space.size[which] * self.root * self.slow, space.phase[which] + self.turn
        return (add_packets_alone if alone else add_packets)(
            self.y, self.p, self.action, turn, size, np.zeros_like(size), space.k[which], space.gamma,
            *line[:3], space.reach, line.periodic,
        )  # fmt: skip

    def flux(self, half_width: float) -> float:
        """Return the flux of the packets at abs(y) <= half_width; of full ones, the integral of their intensity."""
        inside = self.there if self.space.periodic else np.abs(self.y) <= half_width
        return self.sent * float((self.space.share * self.slow**2)[inside].sum())

    def unresolved(self, which: int, line: Line) -> float:  # noqa: ARG002  (the grid follows the wavelength)
        """Return the same of packets whose neighbours have parted by more than `PARTED`."""
        return self.sent * float((self.space.share * self.slow**2)[self.there & (self.parted > PARTED)].sum())
