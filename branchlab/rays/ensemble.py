"""The rays of a setup: traced once for every wavelength."""

import functools
import math
from collections.abc import Iterable, Iterator

import numpy as np
import xarray as xr

from branchlab.conventions import CAUSTIC, FULL, PARAXIAL, RAY, X, Y
from branchlab.errors import InputError, check_choice, check_integer, check_memory, check_number, check_positive
from branchlab.kernels.tubes import lay_tubes
from branchlab.launch import Setup
from branchlab.launch.fan import background_index, full_parts
from branchlab.launch.part import CoherentPart, FrontRays
from branchlab.rays.caustics import CausticPoints, caustic_points
from branchlab.rays.front import TracedFront
from branchlab.rays.full_march import FullMarcher
from branchlab.rays.march import Marcher, RayState, refuse_turned
from branchlab.rays.table import POINTS_PER_SCALE, STEPS_PER_SCALE
from branchlab.results import dataset, provenance

# steps of the march that the error bar is found from, as a share: at half of them the slab's face is not followed by full
# rays, and the bar was 60 times the error instead of ten
COARSER_STEPS = {PARAXIAL: 0.5, FULL: 0.75}
COARSE = 8.0  # resolutions of sagitta beyond which a tube is a straight thick line and its flux counts as unresolved


class RayEnsemble:
    """The rays that a source sends through the window of a setup; they know no wavelength.

    Parameters
    ----------
    setup : Setup
    rays_per_scale : float
        Rays per medium scale on a launching front, to begin with.
    most_rays : int
        Where the refinement of a front stops; the flux of tubes that are still too coarse is reported.
    steps_per_scale : int
        Steps per medium scale, at least.
    dynamics : {"paraxial", "full"}
        The law of motion.

    Notes
    -----
    Paraxial rays: dy/dx = p, dp/dx = -v_y/2. They are valid while |p| is well below 1, and refused beyond.

    Full rays: dr/dt = p, dp/dt = -grad v/2, p**2 = 1 - v, at any angle, in the medium as `launch.slab.Slab` has it. Their
    intensity is that of the wave's classical limit, flux/(p_x dy) in units of the mean medium's index, on a ray's first
    way through each screen; rays that turn back before it are counted, and their flux reported.
    """

    def __init__(
        self,
        setup,
        *,
        rays_per_scale: float = 32.0,
        most_rays: int = 1 << 17,
        steps_per_scale: int = STEPS_PER_SCALE,
        dynamics: str = PARAXIAL,
    ):
        if not isinstance(setup, Setup):
            raise InputError(f"setup must be a Setup; got {type(setup).__name__} {setup!r:.60}.")
        self.setup = setup
        self.rays_per_scale = check_positive("rays_per_scale", rays_per_scale)
        self.most_rays = check_integer("most_rays", most_rays, low=64)
        self.steps_per_scale = check_integer("steps_per_scale", steps_per_scale, low=2)
        self.dynamics = check_choice("dynamics", dynamics, (PARAXIAL, FULL))

    def __repr__(self):
        return (
            f"RayEnsemble({self.setup!r}, rays_per_scale={self.rays_per_scale:g}, most_rays={self.most_rays}, "
            f"dynamics={self.dynamics!r})"
        )

    def _marcher(self, steps_per_scale: int, points_per_scale: int = POINTS_PER_SCALE) -> Marcher | FullMarcher:
        """Return a marcher of this ensemble's dynamics."""
        kind = FullMarcher if self.dynamics == FULL else Marcher
        return kind(self.setup, steps_per_scale, points_per_scale)

    @functools.cached_property
    def marcher(self) -> Marcher | FullMarcher:
        """Marches rays from screen to screen; shared with the sums over rays."""
        return self._marcher(self.steps_per_scale)

    @functools.cached_property
    def parts(self) -> tuple[CoherentPart, ...]:
        """The coherent parts of the source, with the launching fronts of this ensemble's dynamics."""
        return full_parts(self.setup) if self.dynamics == FULL else self.setup.parts()

    @property
    def first_rays(self) -> int:
        """Rays on a front before it is refined."""
        wanted = math.ceil(self.rays_per_scale * self.setup.width / self.setup.medium.scale)
        return max(64, min(wanted, self.most_rays // 2))

    def density(self, resolution: float | None = None) -> xr.Dataset:
        """Return the density of rays: flux per cell on every screen.

        Parameters
        ----------
        resolution : float, optional
            The fronts are refined until no tube bends by more than half of this. Default: one cell.

        Returns
        -------
        Dataset of kind "density"
            intensity (x, y), the mean over a cell; flux, lost_flux (beyond open sides), unresolved_flux, rays_per_point
            and numerical_error (x): the misplaced flux between this density and the one of half the rays, with twice the
            step along x (full rays: 4/3 of it) and twice the pitch of the medium's spline, per cell: an upper bound for
            coarser resolutions.
            Of full rays also turned_flux (x); flux, turned_flux and lost_flux add up to what was sent.

        Raises
        ------
        RangeError
            v >= 1, or more than a hundredth of the flux turns back.
        ResourceError
            The front does not fit into memory.
        """
        setup = self.setup
        wanted = setup.cell if resolution is None else check_positive("resolution", resolution)
        if wanted < setup.cell * (1.0 - 1e-9):
            raise InputError(
                f"resolution {wanted:g} is finer than the setup's cells, {setup.cell:g} (width {setup.width:g} over "
                f"{setup.y.size} cells). Use resolution >= {setup.cell:g}, or a setup with more cells."
            )
        coarser = self._marcher(max(1, int(COARSER_STEPS[self.dynamics] * self.steps_per_scale)), POINTS_PER_SCALE // 2)
        laid = np.zeros((setup.x.size, setup.y.size))
        rough = np.zeros_like(laid)
        curves = dict.fromkeys(("flux", "lost_flux", "unresolved_flux", "rays_per_point"), 0.0)
        if self.dynamics == FULL:
            curves["turned_flux"] = 0.0
        for part in self.parts:
            front = TracedFront(part, self.marcher, self.first_rays, 0.5 * wanted, self.most_rays)
            cells, along = self._laid(front, wanted)
            laid += part.weight * cells
            rough += part.weight * self._laid(front.halved(coarser), wanted)[0]
            for name in curves:
                curves[name] = curves[name] + part.weight * along[name]
        found, twice = laid.sum(axis=1), rough.sum(axis=1)
        laid_share = laid / np.where(found > 0, found, 1.0)[:, None]
        error = 0.5 * np.abs(laid_share - rough / np.where(twice > 0, twice, 1.0)[:, None])
        variables = {
            "intensity": ((X, Y), laid / setup.cell),
            **{name: ((X,), curve) for name, curve in curves.items()},
            "numerical_error": ((X,), error.sum(axis=1)),
        }
        return dataset("density", variables, self._axes(), provenance(setup, model=self.dynamics))

    def _laid(self, front: TracedFront, resolution: float) -> tuple[np.ndarray, dict]:
        """Return the integral of intensity over each cell (x, y), and what `density` gives along x, of one front."""
        if front.px is None:
            cells, outside, unresolved = self._lay(front, front.tube_flux[None], resolution)
            along = {"flux": cells.sum(axis=1), "lost_flux": outside, "unresolved_flux": unresolved}
            return cells, along | {"rays_per_point": self._crossed(front)}
        px = np.concatenate([front.px, front.px[:, :1]], axis=1) if front.lap else front.px
        flux = np.where((px[:, :-1] > 0.0) & (px[:, 1:] > 0.0), front.tube_flux, 0.0)
        lost = np.where(np.isnan(px[:, :-1] + px[:, 1:]), front.tube_flux, 0.0).sum(axis=1)
        slow = np.divide(0.5 * background_index(self.setup), px, out=np.zeros_like(px), where=px > 0.0)
        cells, _, _ = self._lay(front, flux * (slow[:, :-1] + slow[:, 1:]), resolution)
        sent, outside, unresolved = self._lay(front, flux, resolution)
        along = {
            "flux": sent.sum(axis=1),
            "lost_flux": lost + outside,
            "turned_flux": front.tube_flux.sum() - lost - flux.sum(axis=1),
            "unresolved_flux": unresolved,
            "rays_per_point": self._crossed(front),
        }
        return cells, along

    def _lay(self, front: TracedFront, flux, resolution: float):
        """Return what tubes carry per cell (x, y), and outside and unresolved (x)."""
        setup = self.setup
        return lay_tubes(
            front.y, front.A, front.steps, flux, front.lap,
            -0.5 * setup.width, setup.cell, setup.y.size, setup.sides == "periodic", COARSE * resolution / setup.cell,
        )  # fmt: skip

    def _crossed(self, front: TracedFront) -> np.ndarray:
        """Return the mean number of rays through a point of the window (x)."""
        y = np.concatenate([front.y, front.y[:, :1] + front.lap], axis=1) if front.lap else front.y
        if self.setup.sides == "absorbing":
            y = np.clip(y, -0.5 * self.setup.width, 0.5 * self.setup.width)
        return np.nansum(np.abs(np.diff(y, axis=1)), axis=1) / self.setup.width

    def _axes(self) -> dict:
        return {X: ((X,), self.setup.x), Y: ((Y,), self.setup.y)}

    def _launched(self, rays: int | None, numbers_per_ray: int = 40):
        """Return the rays of all parts in the middles of equal steps of s: FrontRays, part numbers, flux."""
        count = self.first_rays if rays is None else check_integer("rays", rays, low=1)
        parts = self.parts
        check_memory(
            8.0 * numbers_per_ray * count * len(parts),
            f"{count} rays for each of {len(parts)} coherent parts",
            "Use fewer rays, or fewer screens.",
        )
        fronts, numbers, flux = [], [], []
        for number, part in enumerate(parts):
            low, high = part.front.span
            ds = (high - low) / count
            front = part.front.at(low + (np.arange(count) + 0.5) * ds)
            fronts.append(front)
            numbers.append(np.full(count, number))
            flux.append(part.weight * front.amplitude**2 * ds)
        joined = FrontRays(*(np.concatenate(column) for column in zip(*fronts, strict=True)))
        return joined, np.concatenate(numbers), np.concatenate(flux)

    def trace(self, rays: int | None = None) -> xr.Dataset:
        """Return every ray on every screen.

        Parameters
        ----------
        rays : int, optional
            Rays per coherent part, in the middles of equal steps of the front parameter s.

        Returns
        -------
        Dataset of kind "trace", dimensions (x, ray)
            position, momentum, action (carrier removed), maslov, status; the stability matrix dydy, dydp, dpdy, dpdp
            = d(y, p)/d(y0, p0); dyds, dpds along the front; and by ray its s, part and ray_flux. Status: 0 ok, 1 left
            the window's box, 2 turned too far, 3 lost (not finite).
        """
        launched, numbers, flux = self._launched(rays, 40 + 24 * self.setup.x.size)
        names = ("position", "momentum", "action", "dyds", "dpds", "maslov", "status")
        found = {name: [] for name in (*names, "dydy", "dpdy", "dydp", "dpdp")}
        walks = zip(self.marcher.march(launched), self.marcher.march(launched, matrix=True), strict=True)
        for front, full in walks:
            for name, row in zip(names, front[1:8], strict=True):
                found[name].append(row)
            for name, row in zip(("dydy", "dpdy", "dydp", "dpdp"), (full.A, full.C, full.B, full.D), strict=True):
                found[name].append(row)
        variables = {name: ((X, RAY), np.array(rows)) for name, rows in found.items()}
        for name in ("maslov", "status"):
            variables[name] = ((X, RAY), variables[name][1].astype(np.int64))
        variables["ray_flux"] = ((RAY,), flux)
        coords = {
            X: ((X,), self.setup.x),
            RAY: ((RAY,), np.arange(flux.size)),
            "s": ((RAY,), launched.s),
            "part": ((RAY,), numbers),
        }
        traced = dataset("trace", variables, coords, provenance(self.setup, model=self.dynamics))
        if self.dynamics == FULL:
            traced["action"].attrs["long_name"] = "action"
        return traced

    def caustics(self, rays: int | None = None) -> xr.Dataset:
        """Return every caustic point: where dy/ds passes through 0 along a ray.

        Parameters
        ----------
        rays : int, optional
            Rays per coherent part.

        Returns
        -------
        Dataset of kind "caustics"
            first_caustic (ray): its range, nan if the ray meets none in the window; and over `caustic`: position
            (caustic_x, caustic_y), momentum, ray and order of every point.
        """
        launched, numbers, flux = self._launched(rays)
        steps = self.marcher.steps_per_screen * (self.setup.x.size - 1)
        if self.dynamics == FULL:
            fine = self.marcher.on(np.linspace(0.0, self.setup.length, steps + 1))
        else:
            fine = Marcher(self.setup.with_(screens=steps + 1), self.steps_per_scale)
        points = caustic_points(_paraxial(fine.march(launched), flux))
        if self.setup.sides == "absorbing":
            seen = np.abs(points.y) <= 0.5 * self.setup.width
            points = CausticPoints(*(column[seen] for column in points))
        first = np.full(launched.s.size, np.nan)
        early = points.order == 1
        first[points.ray[early]] = points.x[early]
        variables = {
            "first_caustic": ((RAY,), first),
            "order": ((CAUSTIC,), points.order),
            "caustic_x": ((CAUSTIC,), points.x),
            "caustic_y": ((CAUSTIC,), points.y),
            "momentum": ((CAUSTIC,), points.p),
            "ray_number": ((CAUSTIC,), points.ray),
        }
        coords = {
            RAY: ((RAY,), np.arange(first.size)),
            CAUSTIC: ((CAUSTIC,), np.arange(points.x.size)),
            "s": ((RAY,), launched.s),
            "part": ((RAY,), numbers),
        }
        return dataset("caustics", variables, coords, provenance(self.setup, model=self.dynamics))

    def section(self, x: float, rays: int | None = None) -> xr.Dataset:
        """Return the rays in phase space at one range.

        Parameters
        ----------
        x : float
            Range of the section, 0 <= x <= length; it need not be a screen.
        rays : int, optional
            Rays per coherent part.

        Returns
        -------
        Dataset of kind "section", dimension ray
            position, momentum, ray_flux, dyds, dpds, maslov, status, with s and part.
        """
        x = check_number("x", x, low=0.0, high=self.setup.length)
        launched, numbers, flux = self._launched(rays)
        if self.dynamics == FULL:
            marcher = self.marcher.on([x])
        else:
            reached = self.setup if x == 0 else self.setup.with_(length=x, screens=2)
            marcher = Marcher(reached, self.steps_per_scale)
        for state in marcher.march(launched):
            if state.x == x:
                break
        refuse_turned(state, flux)
        variables = {
            "position": ((RAY,), state.y),
            "momentum": ((RAY,), state.p),
            "ray_flux": ((RAY,), flux),
            "dyds": ((RAY,), state.A),
            "dpds": ((RAY,), state.C),
            "maslov": ((RAY,), state.maslov.astype(np.int64)),
            "status": ((RAY,), state.status.astype(np.int64)),
        }
        coords = {RAY: ((RAY,), np.arange(flux.size)), "s": ((RAY,), launched.s), "part": ((RAY,), numbers)}
        attrs = {**provenance(self.setup, model=self.dynamics), "x": x}
        return dataset("section", variables, coords, attrs)


def _paraxial(states: Iterable[RayState], flux) -> Iterator[RayState]:
    """Hand states on while the rays are paraxial, else raise `RangeError`."""
    for state in states:
        refuse_turned(state, flux)
        yield state
