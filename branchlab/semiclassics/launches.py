"""What each method of summing sends through the medium, and what it makes of the rays on a screen."""

import attrs
import numpy as np

from branchlab.launch.part import CoherentPart, FrontRays
from branchlab.launch.window import smooth_step
from branchlab.rays.march import LEFT, NOT_FINITE, TURNED, RayState, refuse_turned
from branchlab.semiclassics.branches import find_branches
from branchlab.semiclassics.frozen import FrozenGaussians
from branchlab.semiclassics.herman_kluk import HermanKluk, PhaseSpace
from branchlab.semiclassics.manifold import Line, Manifold
from branchlab.semiclassics.uniform import AiryPairs, primitive_sum

LOOSE_ACTION = 0.5
"""Radians by which the action between two rays may miss the integral of p dy, before their flux is unresolved."""


def launch_rays(part: CoherentPart, count: int) -> tuple[FrontRays, float]:
    """Return `count` rays in the middles of equal steps of the front parameter, and the step."""
    low, high = part.front.span
    ds = (high - low) / count
    return part.front.at(low + (np.arange(count) + 0.5) * ds), ds


def slowness(state: RayState, index: float) -> np.ndarray | float:
    """Return by what rays on a screen multiply amplitudes of flux: (n/px)**(1/2) of full rays, 1 of paraxial ones.

    Parameters
    ----------
    state : RayState
    index : float
        n, the index of the mean medium.
    """
    return 1.0 if state.px is None else np.sqrt(index / state.px)


def gone(state: RayState) -> np.ndarray:
    """Return which rays are not on the screen; a paraxial ray that turned farther than it should stays."""
    away = (state.status == LEFT) | (state.status == NOT_FINITE)
    return away if state.px is None else away | (state.status == TURNED)


def manifold_on(part: CoherentPart, rays: FrontRays, ds: float, state: RayState, index: float = 1.0) -> Manifold:
    """Return the front of a part as it stands on a screen; rays that are gone become nan.

    A ray that turned farther than a paraxial ray should still carries its flux, and stays; a full ray that turned back is
    gone.

    Parameters
    ----------
    part : CoherentPart
    rays : FrontRays
        As launched.
    ds : float
        Step of the front parameter.
    state : RayState
        The rays on the screen.
    index : float
        Index of the mean medium, for full rays.

    Raises
    ------
    RangeError
        More than a hundredth of the rays of a paraxial front turned.
    """
    refuse_turned(state)
    y = np.where(gone(state), np.nan, state.y)
    return Manifold(
        y,
        state.p - part.tilt,
        state.action - part.tilt * y,
        state.A,
        state.C,
        state.maslov,
        np.ascontiguousarray(rays.amplitude * slowness(state, index)),
        ds,
        part.front.span[1] - part.front.span[0] if part.front.closed else 0.0,
        part.front.phase,
    )


class FrontLaunch:
    """The rays of one launching front, summed as frozen Gaussians or branch by branch.

    Parameters
    ----------
    part : CoherentPart
    k : ndarray, shape (k,)
        All wavenumbers; they share the rays.
    method : {"frozen-gaussian", "uniform", "primitive"}
    gamma, reach : float
        Of frozen Gaussians.
    count : int
        Number of rays.
    index : float
        Index of the mean medium, for full rays.
    """

    matrix = False

    def __init__(self, part: CoherentPart, k, method: str, gamma: float, reach: float, count: int, index: float):
        self.part, self.k, self.method, self.gamma, self.reach = part, k, method, gamma, reach
        self.index = index
        self.packets = method == "frozen-gaussian"
        self.rays, self.ds = launch_rays(part, count)

    def on(self, state: RayState) -> "FrontScreen":
        """Return the sum on the screen of a ray state."""
        return FrontScreen(self, manifold_on(self.part, self.rays, self.ds, state, self.index))


class FrontScreen:
    """One front on one screen."""

    def __init__(self, launch: FrontLaunch, manifold: Manifold):
        self.launch, self.manifold = launch, manifold
        self.frozen = None
        if launch.method == "frozen-gaussian":
            self.frozen = FrozenGaussians(manifold, launch.gamma, launch.reach)
        self.found = {}

    def _on(self, line: Line):
        """Return the branches on a line, found once for all wavelengths that share it."""
        if line not in self.found:
            uniform = self.launch.method == "uniform"
            self.found[line] = AiryPairs(self.manifold, line) if uniform else find_branches(self.manifold, line)
        return self.found[line]

    def field(self, which: int, line: Line, *, alone: bool = False) -> np.ndarray:
        """Return the envelope for the wavenumber launch.k[which], shape (n,); `alone`: by one thread."""
        k = self.launch.k[which]
        if self.frozen:
            return self.frozen.field(k, line, alone=alone)
        found = self._on(line)
        psi = found.field(k) if self.launch.method == "uniform" else primitive_sum(found, k, line.n)
        return psi * np.exp(1j * self.manifold.phase)

    def flux(self, half_width: float) -> float:
        """Return the flux of the rays at abs(y) <= half_width."""
        inside = np.abs(self.manifold.y) <= half_width if not self.manifold.lap else slice(None)
        return float(self.manifold.flux[inside].sum())

    def unresolved(self, which: int, line: Line) -> float:
        """Return the flux on rays that are too far apart for the wavenumber launch.k[which]."""
        k = self.launch.k[which]
        if self.frozen:
            return self.frozen.unresolved(k)
        found = self._on(line)
        branches = found.branches if self.launch.method == "uniform" else found
        loose = k * np.abs(branches.gaps) > LOOSE_ACTION
        loose[np.floor(branches.folds[branches.torn, 0]).astype(np.int64)] = True
        return float(self.manifold.flux[: loose.size][loose].sum())


def _wider(part: CoherentPart, line: Line) -> tuple[CoherentPart, Line, float]:
    """Return an endless part that fades out softly beyond its front, a line that holds it, and its flux over the front's.

    Packets diffract at an end: it must be soft, and far from the window.
    """
    low, high = part.front.span
    fade = line.pitch * line.n
    n = -(-int(np.ceil((high - low + 2.0 * fade) / line.pitch)) // 2) * 2

    def shape(y):
        return smooth_step((y - low + fade) / fade) * smooth_step((high + fade - y) / fade)

    def entry(y, k):
        return np.tile(shape(y).astype(np.complex128), (np.size(k), 1))

    wide = Line(low - fade, line.pitch, n, False)
    return attrs.evolve(part, entry=entry), wide, float(np.sum(shape(wide.points) ** 2) * line.pitch / (high - low))


class PhaseSpaceLaunch:
    """The packets of the Herman-Kluk sum for wavenumbers that share their rays.

    Parameters
    ----------
    part : CoherentPart
    k : ndarray, shape (k,)
    line : Line
        The box.
    gamma, reach, spacing : float
        See `PhaseSpace`.
    index : float, optional
        Index of the mean medium, for full rays; None for paraxial ones.
    """

    matrix = packets = True

    def __init__(
        self, part: CoherentPart, k, line: Line, gamma: float, reach: float, spacing: float, index: float | None
    ):
        self.part, self.k, self.index = part, k, index
        rays, ds = launch_rays(part, 4096)
        self.sent = float(np.sum(rays.amplitude**2) * ds)
        if part.endless and index is not None and not line.periodic:
            part, line, share = _wider(part, line)
            self.sent *= share
        self.space = PhaseSpace(part, line, k, gamma, spacing, reach, index)
        self.rays = self.space.rays

    def on(self, state: RayState) -> HermanKluk:
        """Return the sum on the screen of a ray state."""
        # packets beyond |p| = 1 belong to the paraxial wave too, and carry next to nothing: they stay
        y = np.where(gone(state), np.nan, state.y)
        p, action = state.p - self.part.tilt, state.action - self.part.tilt * y
        matrix = (state.A, state.B, state.C, state.D)
        return HermanKluk(self.space, self.sent, y, p, action, matrix, state.maslov, slowness(state, self.index))
