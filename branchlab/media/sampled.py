"""A medium from samples: an array, a DataArray or a netCDF file of v, index, speed or depth."""

import functools
import math
import pathlib

import attrs
import numpy as np
import xarray as xr

from branchlab.errors import InputError, RangeError, check_axis, check_choice, check_memory, check_positive, suggestion
from branchlab.media.base import Medium
from branchlab.values import read_only, value

KINDS = {
    "v": "v",
    "index": "a refractive index",
    "speed": "a wave speed",
    "depth": "a depth (counted down from the surface)",
}
PLAIN_UNITS = ("", "1", "dimensionless", "none")
EVEN = 1e-3  # of the spacing: how far coordinates may be from equidistant (single precision leaves about 1e-4)
COPIES = 6.0  # arrays that a sampled medium and its spline hold
FEWEST = 6  # samples along an axis: the splines are quintic
POINTS_PER_WAVELENGTH = 6
ROUGH = 0.01  # share of variance in the upper half of the samples' wavenumbers: beyond, structure is being missed


def _numbers(values) -> np.ndarray:
    """Return a read-only float64 copy of samples, masked ones as NaN, or say that they are no real numbers."""
    if isinstance(values, np.ma.MaskedArray):
        values = values.astype(np.float64).filled(np.nan)
    try:
        kind = np.asarray(values).dtype.kind
    except ValueError:  # rows of unequal lengths
        kind = "O"
    if kind not in "fiub":
        raise InputError("values must be an array of real numbers, x first; these are of another type.")
    return read_only(values)


def _axis(name: str, values) -> np.ndarray:
    """Return a rising equidistant axis, or say where it is not."""
    if np.asarray(values).dtype.kind in "mMSUO":
        raise InputError(f"{name} must be positions, as numbers; got {np.asarray(values).dtype}.")
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
    usual = float(np.median(steps))
    off = np.abs(steps - usual)
    if off.max() > EVEN * usual:
        at = int(np.argmax(off > EVEN * usual))
        missing = round(steps[at] / usual) - 1
        gap = f": {missing} missing there" if missing > 0 and abs(steps[at] / usual - missing - 1) < 0.01 else ""
        raise InputError(
            f"{name} must be equidistant to {EVEN:g} of its spacing {usual:.6g}; the step after {name}[{at}] = {axis[at]:g} "
            f"is {steps[at]:.6g}{gap}. Interpolate the samples to even spacing first."
        )
    return read_only(np.linspace(axis[0], axis[-1], axis.size))  # rounding of stored coordinates is not structure


def _length_unit(text) -> str:
    """Return a unit of length in its short spelling, "1" if there is none."""
    text = str(text).strip()
    short = text.lower().replace("metre", "meter").removesuffix("s")
    known = {"meter": "m", "kilometer": "km", "millimeter": "mm", "micrometer": "um", "nanometer": "nm"}
    return "1" if text.lower() in PLAIN_UNITS else known.get(short, text)


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
    length_unit : str
        Unit of x and y, "1" if they are plain numbers; `from_dataarray` and `from_netcdf` read it from the coordinates.

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

    values: np.ndarray = attrs.field(converter=_numbers)
    x: np.ndarray = attrs.field(converter=lambda a: _axis("x", a))
    y: np.ndarray = attrs.field(converter=lambda a: _axis("y", a))
    kind: str = attrs.field(default="v", converter=lambda s: check_choice("kind", s, KINDS))
    reference: float | None = attrs.field(
        default=None, converter=lambda s: s if s is None else check_positive("reference", s)
    )
    length_unit: str = attrs.field(default="1", kw_only=True, converter=_length_unit)

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
            self._refuse(self.values <= 0, f"is not positive; {KINDS[self.kind]} must be")
            if self.reference is None:
                object.__setattr__(self, "reference", float(self.values.mean()))
        self._refuse(~np.isfinite(self.v), f"is out of all proportion to the reference {self.reference}")
        else_where = "Check kind and reference, or cut the place out"
        self._refuse(self.v >= 1, f"makes v = 1 - n**2 reach 1: no wave goes there. {else_where}")

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
            Two-dimensional (dimensions of size 1 are dropped), in either order, with coordinates. The attribute `units`
            of the two coordinates must be the same length; samples of v and index have none.
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
        if x == y:
            raise InputError(f"x and y are the same dimension, {x!r}; the medium needs two.")
        samples = samples.squeeze([d for d in samples.dims if d not in (x, y) and samples.sizes[d] == 1], drop=True)
        if samples.ndim != 2:
            extra = [f"{d} ({samples.sizes[d]})" for d in samples.dims if d not in (x, y)]
            raise InputError(f"the samples must have two dimensions; select one value along {', '.join(extra)}.")
        unit = _unit_of_axes(samples, x, y)
        own = str(samples.attrs.get("units", "1")).strip()
        if kind in ("v", "index") and own.lower() not in PLAIN_UNITS:
            raise InputError(
                f"{samples.name!r} is in {own!r}, and kind {kind!r} has no unit. Use kind='speed' or kind='depth' for such "
                "values."
            )
        turned = samples.transpose(x, y)
        return cls(turned.to_masked_array(), turned[x].values, turned[y].values, kind, reference, length_unit=unit)

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
        with np.errstate(over="ignore", divide="ignore"):
            ratio = self.values / self.reference
            return read_only(1.0 - ratio ** {"index": 2.0, "speed": -2.0, "depth": -1.0}[self.kind])

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
        """sqrt(2) rms(v)/rms(slope), the l of exp(-r**2/l**2), along x or y, whichever is shorter.

        At least 4 spacings of that axis; at most an eighth of the samples' range.
        """
        lengths = [min(self.x[-1] - self.x[0], self.y[-1] - self.y[0]) / 8.0]
        for axis, step in enumerate(self.spacing):
            slope = float(np.sqrt((np.diff(self.v, axis=axis) ** 2).mean())) / step
            if slope > 0:
                lengths.append(max(math.sqrt(2.0) * float(self.v.std()) / slope, 4.0 * step))
        return float(min(lengths))

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
    def _spline(self):
        from scipy.interpolate import RectBivariateSpline  # loads slowly; few media are sampled

        return RectBivariateSpline(self.x, self.y, self.v, kx=5, ky=5, s=0)

    def rows(self, x, y, *, dx: int = 0, dy: int = 0) -> np.ndarray:
        """Return v or a derivative of it (see `Medium.rows`)."""
        x, y = check_axis("x", x), check_axis("y", y)
        for name, points, axis in (("x", x, self.x), ("y", y, self.y)):
            slack = 1e-3 * (axis[1] - axis[0])  # the spline goes on as a constant
            out = (points < axis[0] - slack) | (points > axis[-1] + slack)
            if out.any():
                at = int(np.argmax(out))
                raise RangeError(
                    f"{name}[{at}] = {points[at]:g} lies outside the samples, {axis[0]:g} <= {name} <= {axis[-1]:g}."
                )
        order_x, order_y = np.argsort(x, kind="stable"), np.argsort(y, kind="stable")
        rows = np.empty((x.size, y.size))
        rows[np.ix_(order_x, order_y)] = self._spline(x[order_x], y[order_y], dx=dx, dy=dy)
        return rows


def _unit_of_axes(samples: xr.DataArray, x: str, y: str) -> str:
    """Return the one unit of both coordinates; refuse angles and two different units."""
    units = [_length_unit(samples[name].attrs.get("units", "1")) for name in (x, y)]
    for name, unit in zip((x, y), units, strict=True):
        if unit.lower().startswith("degree"):
            raise InputError(
                f"{name} is in {unit!r}; the axes must be lengths. Project the samples to an even grid in metres or "
                "kilometres first."
            )
    if len({unit for unit in units if unit != "1"}) > 1:
        raise InputError(
            f"{x} is in {units[0]!r} and {y} in {units[1]!r}; both must be in one unit. Convert one of them."
        )
    return next((unit for unit in units if unit != "1"), "1")


def _engine(path: pathlib.Path) -> str:
    """Return what reads a file, told by its first bytes (netCDF User's Guide, file format; HDF5 specification II.A)."""
    try:
        with path.open("rb") as file:
            start = file.read(8)
    except OSError as fault:
        raise InputError(f"{path} cannot be read: {fault.strerror or fault}.") from None
    if start == b"\x89HDF\r\n\x1a\n":
        return "h5netcdf"
    if start[:3] == b"CDF" and start[3:4] in (b"\x01", b"\x02"):
        return "scipy"
    more = " (its 64-bit data form: convert it to netCDF-4)" if start[:4] == b"CDF\x05" else ""
    raise InputError(
        f"{path} is not a netCDF file that can be read{more}: netCDF-3 starts with CDF, netCDF-4 with \\x89HDF; this starts "
        f"with {start!r}. Convert the data to netCDF with coordinates x and y."
    )


def read_samples(path, variable: str) -> xr.DataArray:
    """Read one variable of a netCDF file (3 or 4).

    Parameters
    ----------
    path : path
    variable : str

    Raises
    ------
    InputError
        No such file, not netCDF, damaged, or no such variable (near names are told).
    ResourceError
        The variable does not fit into memory.
    """
    path = pathlib.Path(path)
    if not path.exists():
        raise InputError(f"there is no file {path}.")
    engine = _engine(path)
    try:
        with xr.open_dataset(path, engine=engine, decode_times=False) as file:
            names = [str(name) for name in file.data_vars]
            if variable not in file.data_vars:
                raise InputError(
                    f"{path} has no variable {variable!r}; it has {', '.join(names) or 'none'}."
                    f"{suggestion(variable, names)}"
                )
            samples = file[variable]
            check_memory(
                COPIES * 8.0 * samples.size,
                f"{variable!r} of {path} ({samples.size:.3g} samples)",
                "Thin it out first.",
            )
            return samples.load()
    except (InputError, MemoryError):
        raise
    except Exception as fault:  # whatever a reader makes of damaged bytes
        raise InputError(f"{path} is not a netCDF file that can be read: {fault!r:.200}.") from None
