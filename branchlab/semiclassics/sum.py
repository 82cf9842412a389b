"""Coherent sums over rays: many wavelengths on rays that are traced once."""

import collections
import math
from concurrent.futures import ThreadPoolExecutor
from typing import NamedTuple

import numpy as np

from branchlab.conventions import CARRIER, FULL, NO_CARRIER, WAVELENGTH, Y_FINE, X, Y, wavenumber
from branchlab.errors import InputError, check_choice, check_integer, check_memory, check_number, check_positive
from branchlab.kernels.packets import threads
from branchlab.launch.band import wavelength_axis
from branchlab.launch.fan import background_index
from branchlab.launch.part import CoherentPart
from branchlab.launch.setup import GRID_SHARE
from branchlab.rays import RayEnsemble
from branchlab.rays.march import NOT_FINITE, OK, RayState
from branchlab.results import dataset, provenance
from branchlab.semiclassics.curvature import packet_curvature
from branchlab.semiclassics.frozen import FrozenGaussians
from branchlab.semiclassics.launches import FrontLaunch, PhaseSpaceLaunch, gone, launch_rays, manifold_on
from branchlab.semiclassics.manifold import Line
from branchlab.semiclassics.trust import CAUTIONS, ENTRY_LIMIT, trusted

METHODS = tuple(CAUTIONS)
FEWEST_RAYS, MOST_RAYS = 2048, 1 << 18
THINNED = 0.005  # share of the flux that may be thinned out before the front gets more rays
SHARED = 1.5  # wavenumbers that differ by no more than this factor share one phase-space grid
PILOT_RAYS = 512
PILOT_MARGIN = 1.1  # a few of the rays between the pilots go farther than these


class _OnScreen(NamedTuple):
    """The sum of one coherent part on one screen for one wavenumber.

    Mean intensity of the cells, flux of the rays and of the unresolved ones, squared relative error of the entry
    field (0 elsewhere), envelope with the tilt (None unless wanted).
    """

    cells: np.ndarray
    sent: float
    unresolved: float
    apart: float
    psi: np.ndarray | None


class SemiclassicalSum:
    """The wave as a coherent sum over rays: interference between ray families, without diffraction.

    Parameters
    ----------
    rays : RayEnsemble
        Gives the setup and the way rays are traced.
    method : {"frozen-gaussian", "herman-kluk", "uniform", "primitive"}
        - frozen-gaussian: Gaussian packets along the launching front. Finite at caustics, no search for
          branches. Not to be trusted where the front is folded on areas of phase space below 2 pi/k, and for
          beams and small sources, whose front has less than such an area.
        - herman-kluk: packets over all of phase space. Right for any source; it smears phase space over 2 pi/k
          like the wave, so it contains part of the diffraction. Needs many rays where they are chaotic.
        - uniform: one ray per branch, pairs joined by Airy functions at folds. Wrong at cusps.
        - primitive: one ray per branch with its own amplitude. Infinite at caustics, dark behind them.
    packet_curvature : float, optional
        gamma in 1/length: packets have the rms width 1/sqrt(2 k gamma). Default: `curvature.packet_curvature`.
    front_rays : int, optional
        Rays on the front. Default: as many as the shortest wavelength needs on the farthest screen, judged by a
        few thousand rays sent ahead; not used by "herman-kluk".
    spacing : float, optional
        Step of the phase-space grid in packet units, for "herman-kluk". Default: 0.3/sqrt(growth), with the
        typical growth of the stability matrix over the window (rays sent ahead), within 0.02 ... 0.3.
    tolerance : float
        Packets are cut where they are below this share of their height.

    Notes
    -----
    A sum over rays is not unitary. Every screen's intensity is divided by the sum's flux and multiplied by that
    of its rays; `flux_excess` says by how much they differed, and `trusted` whether that, the flux on unresolved
    rays and the error of the rebuilt entry field are within the limits of `branchlab.semiclassics.trust`.

    On full rays, (px/n)**(1/2) psi is summed in the canonical pair (y, py) on each screen, and "flux" is the integral of
    the intensity: the density's normalisation.
    """

    def __init__(
        self,
        rays: RayEnsemble,
        method: str = "frozen-gaussian",
        *,
        packet_curvature: float | None = None,
        front_rays: int | None = None,
        spacing: float | None = None,
        tolerance: float = 1e-6,
    ):
        if not isinstance(rays, RayEnsemble):
            raise InputError(f"rays must be a RayEnsemble; got {type(rays).__name__}. Use RayEnsemble(setup).")
        self.rays = rays
        self.setup = rays.setup
        self.method = check_choice("method", method, METHODS)
        self.packet_curvature = _optional(check_positive, "packet_curvature", packet_curvature)
        self.front_rays = None if front_rays is None else check_integer("front_rays", front_rays, low=16)
        self.spacing = _optional(check_positive, "spacing", spacing)
        self.tolerance = check_number("tolerance", tolerance, low=0.0, high=0.1, open_low=True)

    def __repr__(self):
        return f"SemiclassicalSum({self.rays!r}, method={self.method!r}) - {CAUTIONS[self.method]}"

    def solve(self, wavelengths, progress=None, *, fields: bool = False):
        """Sum over the rays for one or many wavelengths.

        Parameters
        ----------
        wavelengths : float, sequence of float, or Band
            In the setup's length unit.
        progress : callable, optional
            Called with the fraction done, 0 ... 1; it may raise to cancel.
        fields : bool
            Also return the envelope psi (exp(ikx) removed; of full rays psi itself), not flux-normalised, on a fine
            transverse grid; only for a source of one coherent part.

        Returns
        -------
        Dataset of kind "semiclassical"
            intensity (wavelength, x, y): mean over a cell, incoherent parts added, flux-normalised per screen;
            flux_excess, unresolved_flux and trusted (wavelength, x); entry_error (wavelength), nan for methods
            without packets; psi (wavelength, x, y_fine) on request.

        Raises
        ------
        InputError
            Wavelengths that are not positive; fields of an incoherent source.
        ResourceError
            The result or the phase-space grid does not fit into memory.
        """
        wavelengths = wavelength_axis(wavelengths)
        k = wavenumber(wavelengths)
        setup, parts = self.setup, self.rays.parts
        if fields and len(parts) > 1:
            raise InputError(
                f"fields=True needs a source of one coherent part; this one has {len(parts)}, whose intensities "
                "add, not their fields. Use fields=False, or one coherent source."
            )
        gamma = self.packet_curvature or packet_curvature(setup)
        lines = self._lines(k, gamma, common=fields)
        shape = (k.size, setup.x.size)
        check_memory(
            8.0 * k.size * setup.x.size * (setup.y.size + (2 * lines[0].n if fields else 0)),
            f"a result of {k.size} wavelengths on {setup.x.size} screens of {setup.y.size} cells",
            "Use fewer wavelengths, screens or cells, or fields=False.",
        )
        intensity = np.zeros((*shape, setup.y.size))
        sent, unresolved = np.zeros(shape), np.zeros(shape)
        entry = np.zeros(k.size)  # squared
        psi = np.zeros((*shape, lines[0].n), dtype=np.complex128) if fields else None
        launches = list(self._launches(parts, k, lines[0], gamma))
        for done, (launch, part, which) in enumerate(launches):
            for i, screen in enumerate(self._screens(launch, part, [lines[w] for w in which], fields)):
                for w, one in zip(which, screen, strict=True):
                    intensity[w, i] += part.weight * one.cells
                    sent[w, i] += part.weight * one.sent
                    unresolved[w, i] += part.weight * one.unresolved
                    entry[w] += part.weight * one.apart
                    if fields:
                        psi[w, i] = one.psi
                if progress:
                    progress((done + (i + 1) / setup.x.size) / len(launches))
        found = intensity.sum(axis=-1) * setup.cell
        nothing = (found <= 0.0) | (sent <= 0.0)
        ratio = np.where(nothing, 1.0, found / np.where(nothing, 1.0, sent))
        rebuilt = np.sqrt(entry) if launches[0][0].packets else np.full(k.size, np.nan)
        safe = trusted(ratio - 1.0, unresolved / np.where(nothing, 1.0, sent), rebuilt[:, None])
        variables = {
            "intensity": ((WAVELENGTH, X, Y), intensity / ratio[..., None]),
            "flux_excess": ((WAVELENGTH, X), ratio - 1.0),
            "unresolved_flux": ((WAVELENGTH, X), unresolved),
            "entry_error": ((WAVELENGTH,), rebuilt),
            "trusted": ((WAVELENGTH, X), safe),
        }
        coords = {WAVELENGTH: ((WAVELENGTH,), wavelengths), X: ((X,), setup.x), Y: ((Y,), setup.y)}
        if fields:
            variables["psi"] = ((WAVELENGTH, X, Y_FINE), psi)
            coords[Y_FINE] = ((Y_FINE,), lines[0].points)
        attrs = {"method": self.method, "caution": CAUTIONS[self.method]}
        attrs["carrier"] = NO_CARRIER if self._full else CARRIER
        attrs |= {"packet_curvature": gamma, "entry_limit": ENTRY_LIMIT}
        attrs |= provenance(setup, model=self.rays.dynamics)
        return dataset("semiclassical", variables, coords, attrs)

    def _screens(self, launch, part: CoherentPart, lines, fields: bool):
        """Yield, screen by screen, what one launch gives on it for each of its wavenumbers.

        A thread works on a whole screen while the next ones are marched: threads that meet after every sum would
        wait for each other on a busy machine.
        """
        workers = threads()
        with ThreadPoolExecutor(workers) as pool:
            waiting = collections.deque()
            for state in self.rays.marcher.march(launch.rays, matrix=launch.matrix):
                waiting.append(pool.submit(self._screen, launch, part, lines, fields, state))
                if len(waiting) > 2 * workers:
                    yield waiting.popleft().result()
            while waiting:
                yield waiting.popleft().result()

    def _screen(self, launch, part: CoherentPart, lines, fields: bool, state: RayState) -> list[_OnScreen]:
        """Return what one launch gives on the screen of a ray state, for each of its wavenumbers."""
        screen = launch.on(state)
        sent = screen.flux(0.5 * self.setup.width)
        found = []
        for j, line in enumerate(lines):
            k, field, apart = launch.k[j], screen.field(j, line, alone=True), 0.0
            if launch.packets and state.x == 0.0:
                given = part.entry(line.points, np.array([k]))[0]
                rebuilt = launch.on(self._entering(launch.rays)).field(j, line, alone=True) if self._full else field
                off, given = self._cells(rebuilt - given).sum(), self._cells(given).sum()
                apart = off / max(given, 1e-300)
            psi = field * np.exp(1j * k * part.tilt * line.points) if fields else None
            found.append(_OnScreen(self._cells(field), sent, screen.unresolved(j, line), apart, psi))
        return found

    def _entering(self, rays) -> RayState:
        """Return full rays as they would cross x = 0 in the mean medium, where the entry field is given."""
        one, zero = np.ones_like(rays.y), np.zeros_like(rays.y)
        square = self._index**2 - rays.p**2
        status = np.where(square > 0.0, OK, NOT_FINITE)
        px = np.sqrt(np.where(square > 0.0, square, 1.0))
        tangents = (rays.dy, rays.dp, zero, status, zero, one)
        return RayState(0.0, rays.y, rays.p, rays.action, *tangents, px, zero)

    @property
    def _full(self) -> bool:
        return self.rays.dynamics == FULL

    @property
    def _index(self) -> float:
        """Index of the mean medium."""
        return background_index(self.setup)

    @property
    def _reach(self) -> float:
        """Packet radius, in units of 1/sqrt(k gamma)."""
        return math.sqrt(-2.0 * math.log(self.tolerance))

    def _lines(self, k, gamma: float, *, common: bool) -> list[Line]:
        """Return the transverse grid of each wavenumber."""
        window, angle = self.setup.window, self._steepest() / GRID_SHARE
        # a packet narrower than a third of the pitch would overflow its recurrence and could miss every point
        points = [self.setup.fine_points(one, max(angle, 0.5 * math.sqrt(gamma / one))) for one in k]
        if common:
            points = [max(points)] * len(points)
        return [Line(window.start, window.span / n, n, self.setup.sides == "periodic") for n in points]

    def _steepest(self) -> float:
        """Return the largest transverse momentum, beyond the tilt, that the grid must carry."""
        if not self._full:
            return self.setup.angle_bound()
        largest = 0.0
        for part in self.rays.parts:
            rays, _ = launch_rays(part, PILOT_RAYS)
            for state in self.rays.marcher.march(rays):
                largest = max(largest, np.abs(state.p - part.tilt)[~gone(state)].max(initial=0.0))
        return PILOT_MARGIN * largest

    def _cells(self, field) -> np.ndarray:
        """Return the mean intensity over each cell of the setup, shape (y,)."""
        means = (field.real**2 + field.imag**2).reshape(self.setup.cells_in_span(), -1).mean(axis=1)
        pad = (means.size - self.setup.y.size) // 2
        return means[pad : pad + self.setup.y.size]

    def _launches(self, parts: tuple[CoherentPart, ...], k, box: Line, gamma: float):
        """Yield what is sent: (launch, part, indices of the wavenumbers it serves)."""
        if self.method != "herman-kluk":
            for part in parts:
                count = self.front_rays or self._count(part, k.max(), gamma)
                launch = FrontLaunch(part, k, self.method, gamma, self._reach, count, self._index)
                yield launch, part, range(k.size)
            return
        order = np.argsort(k)
        groups, first = [], 0
        for i in range(1, k.size + 1):
            if i == k.size or k[order[i]] > SHARED * k[order[first]]:
                groups.append(order[first:i])
                first = i
        for part in parts:
            spacing = self.spacing or self._spacing(part, gamma)
            for group in groups:
                index = self._index if self._full else None
                yield PhaseSpaceLaunch(part, k[group], box, gamma, self._reach, spacing, index), part, group

    def _count(self, part: CoherentPart, k: float, gamma: float) -> int:
        """Return how many rays a front needs, from a few sent ahead."""
        rays, ds = launch_rays(part, FEWEST_RAYS)
        needed = FEWEST_RAYS
        for state in self.rays.marcher.march(rays):
            frozen = FrozenGaussians(manifold_on(part, rays, ds, state, self._index), gamma, self._reach)
            flux = max(float(frozen.manifold.flux.sum()), 1e-300)
            # thinning goes with ds**2: four times the wavenumber is twice the step
            while needed < MOST_RAYS and frozen.unresolved(k * (FEWEST_RAYS / needed) ** 2) > THINNED * flux:
                needed *= 2
        return needed

    def _spacing(self, part: CoherentPart, gamma: float) -> float:
        """Return the step of the phase-space grid from the growth of the stability matrix, rays sent ahead."""
        rays, _ = launch_rays(part, PILOT_RAYS)
        one = np.ones(PILOT_RAYS)
        rays = rays._replace(dy=one, dp=0.0 * one)
        for state in self.rays.marcher.march(rays, matrix=True):  # noqa: B007  (the last screen counts)
            pass
        norm = np.sqrt(0.5 * (state.A**2 + state.D**2 + (gamma * state.B) ** 2 + (state.C / gamma) ** 2))
        growth = np.nanmedian(norm) if np.isfinite(norm).any() else 1.0
        return float(np.clip(0.3 / math.sqrt(growth), 0.02, 0.3))


def _optional(check, name: str, value):
    """Apply a check to a value that may be None."""
    return None if value is None else check(name, value)
