"""A medium from samples: an array, a DataArray or a netCDF file of v, index, speed or depth."""

import functools
import math
import pathlib

import attrs
import numpy as np
import xarray as xr
from scipy.interpolate import RectBivariateSpline

from branchlab.errors import InputError, check_axis, check_choice, check_positive, suggestion
from branchlab.media.base import Medium
from branchlab.values import read_only, value

KINDS = {
    "v": "v = V/E = 1 - n**2",
    "index": "refractive index n",
    "speed": "wave speed c, n = reference/c",
    "depth": "depth h of shallow water, n = sqrt(reference/h)",
}
EVEN = 1e-6  # of the spacing: how far coordinates may be from equidistant
FEWEST = 6  # samples along an axis: the splines are quintic
POINTS_PER_WAVELENGTH = 6
ROUGH = 0.01  # share of variance in the upper half of the samples' wavenumbers: beyond, structure is being missed


def _axis(name: str, values) -> np.ndarray:
    """Return a rising equidistant axis, or say where it is not."""
    axis = check_axis(name, values, minimum=FEWEST)
    steps = np.diff(axis)
    if (steps < 0).all():
        raise InputError(
            f"{name} falls from {axis[0]:g} to {axis[-1]:g}; it must rise. Reverse the axis and the samples together: "
            f"da.sortby({name!r})."
        )
    if not (steps > 0).all():
        at = int(np.flatnonzero(steps <= 0)[0])
        raise InputError(
            f"{name} must rise; {name}[{at}] = {axis[at]:g} is followed by {name}[{at + 1}] = {axis[at + 1]:g}. Sort the "
            "samples and drop repeated coordinates."
        )
    mean = (axis[-1] - axis[0]) / (axis.size - 1)
    off = np.abs(steps - mean)
    if off.max() > EVEN * mean + 1e-12 * np.abs(axis).max():
        at = int(np.argmax(off))
        raise InputError(
            f"{name} must be equidistant to {EVEN:g} of its spacing {mean:.6g}; the step after {name}[{at}] = {axis[at]:g} "
            f"is {steps[at]:.6g}. A gap? Interpolate the samples to even spacing first."
        )
    return read_only(axis)


@value
class SampledMedium(Medium):
    """A medium given by samples on an even grid; quintic splines between them.

    Parameters
    ----------
    values : array_like, shape (nx, ny)
        Samples, x first.
    x, y : array_like, shapes (nx,), (ny,)
        Rising, equidistant; at least 6 each. The wave enters at x = 0, the window is centred on y = 0.
    kind : {"v", "index", "speed", "depth"}
        What the samples are: v itself; the refractive index n, v = 1 - (n/reference)**2; a wave speed c,
        v = 1 - (reference/c)**2; the depth h of shallow water, v = 1 - reference/h.
    reference : float, optional
        The value where v = 0; it defines the wavelength. Default: the samples' mean (not for "v").

    Raises
    ------
    InputError
        NaN, gaps, uneven or falling axes, shapes that do not fit, v >= 1, speeds or depths that are not positive:
        each with its place.

    Notes
    -----
    Value and derivatives are those of one spline. Structure between the samples is not known: where the samples are
    rough (1 % of their variance in the upper half of the wavenumbers they hold), waves shorter than 6 spacings are
    refused.
    """

    values: np.ndarray = attrs.field(converter=read_only)
    x: np.ndarray = attrs.field(converter=lambda a: _axis("x", a))
    y: np.ndarray = attrs.field(converter=lambda a: _axis("y", a))
    kind: str = attrs.field(default="v", converter=lambda s: check_choice("kind", s, KINDS))
    reference: float | None = attrs.field(
        default=None, converter=lambda s: s if s is None else check_positive("reference", s)
    )

    def __attrs_post_init__(self):
        shape = (self.x.size, self.y.size)
        if self.values.shape != shape:
            turned = " They are transposed: pass values.T." if self.values.shape == shape[::-1] else ""
            raise InputError(f"values must have the shape (x, y) = {shape}; got {self.values.shape}.{turned}")
        self._refuse(~np.isfinite(self.values), "is not finite; fill gaps (for example da.interpolate_na) first")
        if self.kind == "v":
            if self.reference is not None:
                raise InputError(f"kind 'v' takes no reference: v is 0 where it is 0; got {self.reference:g}.")
        else:
            self._refuse(self.values <= 0, f"is not positive; a {KINDS[self.kind]} must be")
            if self.reference is None:
                object.__setattr__(self, "reference", float(self.values.mean()))
        self._refuse(
            self.v >= 1,
            "makes v = 1 - n**2 reach 1: no wave goes there. Check kind and reference, or cut the place out",
        )

    def _refuse(self, where, what: str) -> None:
        """Raise `InputError` with the first place and the number of samples for which `where` holds."""
        if where.any():
            i, j = (int(n[0]) for n in np.nonzero(where))
            raise InputError(
                f"values[{i}, {j}] = {self.values[i, j]:g} at x = {self.x[i]:g}, y = {self.y[j]:g} {what} "
                f"({np.count_nonzero(where)} of {where.size} samples)."
            )

    @classmethod
    def from_dataarray(
        cls, samples: xr.DataArray, kind: str, *, reference: float | None = None, x: str = "x", y: str = "y"
    ) -> "SampledMedium":
        """Return the medium that a DataArray holds.

        Parameters
        ----------
        samples : DataArray
            Two-dimensional, with coordinates; units of the two must be the same if both are given.
        kind, reference :
            See `SampledMedium`.
        x, y : str
            Names of the dimensions along and across the way of the wave.
        """
        if not isinstance(samples, xr.DataArray):
            raise InputError(f"expected an xarray.DataArray; got {type(samples).__name__}.")
        for role, name in (("x", x), ("y", y)):
            if name not in samples.dims:
                raise InputError(
                    f"the samples have no dimension {name!r} for {role}; they have {', '.join(map(str, samples.dims))}. "
                    f"Name it: {role}=...{suggestion(name, samples.dims)}"
                )
            if name not in samples.coords:
                raise InputError(f"the dimension {name!r} has no coordinate: positions are needed.")
        if samples.ndim != 2:
            extra = [str(d) for d in samples.dims if d not in (x, y)]
            raise InputError(f"the samples must have two dimensions; select one value along {', '.join(extra)}.")
        units = [samples[name].attrs.get("units") for name in (x, y)]
        if None not in units and units[0] != units[1]:
            raise InputError(
                f"{x} is in {units[0]!r} and {y} in {units[1]!r}; both must be in one unit. Convert one of them."
            )
        turned = samples.transpose(x, y)
        return cls(turned.values, turned[x].values, turned[y].values, kind, reference)

    @classmethod
    def from_netcdf(
        cls, path, variable: str, kind: str, *, reference: float | None = None, x: str = "x", y: str = "y"
    ) -> "SampledMedium":
        """Return the medium that a variable of a netCDF file holds (see `from_dataarray`)."""
        return cls.from_dataarray(read_samples(path, variable), kind, reference=reference, x=x, y=y)

    @functools.cached_property
    def v(self) -> np.ndarray:
        """The samples as v, shape (nx, ny)."""
        if self.kind == "v":
            return self.values
        ratio = self.values / self.reference
        index_squared = {"index": lambda: ratio**2, "speed": lambda: ratio**-2.0, "depth": lambda: 1.0 / ratio}
        return read_only(1.0 - index_squared[self.kind]())

    @property
    def spacing(self) -> tuple[float, float]:
        """Distance of samples along x and y."""
        return float(self.x[1] - self.x[0]), float(self.y[1] - self.y[0])

    @functools.cached_property
    def mean(self) -> float:
        """Mean of v over the samples."""
        return float(self.v.mean())

    @functools.cached_property
    def scale(self) -> float:
        """sqrt(2) rms(v)/rms(slope): l of exp(-r**2/l**2); at least 4 spacings, at most an eighth of the samples."""
        longest = min(self.x[-1] - self.x[0], self.y[-1] - self.y[0]) / 8.0
        lengths = [longest]
        for axis, step in enumerate(self.spacing):
            slope = float(np.sqrt((np.diff(self.v, axis=axis) ** 2).mean())) / step
            if slope > 0:
                lengths.append(math.sqrt(2.0) * float(self.v.std()) / slope)
        return max(min(lengths), 4.0 * max(self.spacing)) if 4.0 * max(self.spacing) < longest else longest

    @property
    def extent(self) -> tuple[float, float, float, float]:
        """The samples' range."""
        return float(self.x[0]), float(self.x[-1]), float(self.y[0]), float(self.y[-1])

    @functools.cached_property
    def shortest_wavelength(self) -> float:
        """6 spacings where the samples are rough, else 0."""
        power = (
            np.abs(np.fft.fft2((self.v - self.mean) * np.outer(np.hanning(self.x.size), np.hanning(self.y.size)))) ** 2
        )
        upper = np.zeros(power.shape, bool)
        for axis in (0, 1):
            high = np.abs(np.fft.fftfreq(power.shape[axis])) > 0.25
            upper |= high[:, None] if axis == 0 else high[None, :]
        rough = power[upper].sum() > ROUGH * power.sum()
        return POINTS_PER_WAVELENGTH * max(self.spacing) if rough else 0.0

    @functools.cached_property
    def _spline(self) -> RectBivariateSpline:
        return RectBivariateSpline(self.x, self.y, self.v, kx=5, ky=5, s=0)

    def rows(self, x, y, *, dx: int = 0, dy: int = 0) -> np.ndarray:
        """Return v or a derivative of it (see `Medium.rows`)."""
        x, y = check_axis("x", x), check_axis("y", y)
        order_x, order_y = np.argsort(x, kind="stable"), np.argsort(y, kind="stable")
        rows = np.empty((x.size, y.size))
        rows[np.ix_(order_x, order_y)] = self._spline(x[order_x], y[order_y], dx=dx, dy=dy)
        return rows


def read_samples(path, variable: str) -> xr.DataArray:
    """Read one variable of a netCDF file, with clear words for what can be wrong with it."""
    path = pathlib.Path(path)
    if not path.exists():
        raise InputError(f"there is no file {path}.")
    try:
        with xr.open_dataset(path) as file:
            names = [str(name) for name in file.data_vars]
            if variable not in file.data_vars:
                raise InputError(
                    f"{path} has no variable {variable!r}; it has {', '.join(names) or 'none'}."
                    f"{suggestion(variable, names)}"
                )
            return file[variable].load()
    except (OSError, ValueError) as fault:
        if isinstance(fault, InputError):
            raise
        raise InputError(f"{path} is not a netCDF file that can be read ({fault}).") from None
