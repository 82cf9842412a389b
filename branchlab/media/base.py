"""What every medium is: a frozen object that gives v(x, y) and its derivatives on product grids."""

import abc
import math
import warnings

import attrs
import numpy as np
import xarray as xr

from branchlab.conventions import X, Y
from branchlab.errors import BranchlabWarning, InputError, check_axis
from branchlab.media.statistics import measured
from branchlab.values import ValueObject, value


class Medium(ValueObject, abc.ABC):
    """A medium v(x, y) = V/E = 1 - n**2, dimensionless and below 1 wherever rays go.

    Subclasses give `rows` and `scale`; the other attributes have defaults that suit an analytic medium.
    """

    extent = (-math.inf, math.inf, -math.inf, math.inf)
    """(x0, x1, y0, y1): where the medium is defined."""
    period_y = None
    """Exact transverse period, or None; 0 if the medium does not depend on y, so that any period will do."""
    repeats_after = (math.inf, math.inf)
    """(x, y): lengths after which a random medium is the same again: no window may be larger."""
    shortest_wavelength = 0.0
    """Wavelength below which a wave would see structure that the medium does not hold."""
    mean = 0.0
    """The value that v fluctuates about: what a taper at the sides leads to."""

    def __add__(self, other) -> "Medium":
        if not isinstance(other, Medium):
            return NotImplemented
        return SumMedium((self, other))

    @property
    @abc.abstractmethod
    def scale(self) -> float:
        """Shortest structural length of the medium; grids and steps are fractions of it."""

    @abc.abstractmethod
    def rows(self, x, y, *, dx: int = 0, dy: int = 0) -> np.ndarray:
        """Return v, or a derivative of it, on the product grid of two axes.

        Parameters
        ----------
        x, y : array_like, shapes (nx,), (ny,)
            Any coordinates inside `extent`, in any order.
        dx : {0, 1}
            Order of the derivative along x.
        dy : {0, 1, 2}
            Order of the derivative along y.

        Returns
        -------
        ndarray, float64, shape (nx, ny)
            In 1/length**(dx + dy). Derivatives are those of the same function, not of a second fit.
        """

    def with_seed(self, seed: int) -> "Medium":
        """Return another realisation of a random medium.

        Raises
        ------
        InputError
            The medium is not random.
        """
        raise InputError(
            f"a {type(self).__name__} is not random: it has no realisation {seed!r}. Use one realisation, or add a random "
            "medium to it."
        )

    def statistics(self, *, length: float | None = None, width: float | None = None) -> xr.Dataset:
        """Return measured statistics of the medium beside the requested ones (see `branchlab.media.statistics`).

        Parameters
        ----------
        length, width : float, optional
            Window 0 <= x <= length, abs(y) <= width/2 in which they are measured. Default: the super-box
            of a random medium, else 64 scales by 64 scales or what the medium has.
        """
        return measured(self, length, width)

    def sample(self, x, y, *, length_unit: str = "1") -> xr.DataArray:
        """Return v(x, y) on the product grid of two axes as a DataArray.

        Parameters
        ----------
        x, y : array_like, shapes (nx,), (ny,)
            Coordinates inside `extent`.
        length_unit : str
            Written to the coordinates; "1" means "in the unit of the medium's own lengths".
        """
        x, y = check_axis("x", x), check_axis("y", y)
        axis = {"units": length_unit}
        return xr.DataArray(
            self.rows(x, y),
            coords={
                X: (X, x, {"long_name": "range", **axis}),
                Y: (Y, y, {"long_name": "transverse position", **axis}),
            },
            dims=(X, Y),
            name="v",
            attrs={"units": "1", "long_name": "v = V/E = 1 - n**2", "medium": self.to_json()},
        )


def _flat(parts) -> tuple[Medium, ...]:
    """Return the members of a sum, sums inside it taken apart."""
    flat = []
    for part in parts:
        if not isinstance(part, Medium):
            raise InputError(f"a sum of media holds media; got {type(part).__name__} {part!r:.60}.")
        flat += part.parts if isinstance(part, SumMedium) else [part]
    return tuple(flat)


@value
class SumMedium(Medium):
    """The sum of media, as made by `medium_a + medium_b`.

    Parameters
    ----------
    parts : tuple of Medium
        Sums inside it are taken apart.
    """

    parts: tuple[Medium, ...] = attrs.field(converter=_flat)

    def __attrs_post_init__(self):
        seen = set()
        for part in self.parts:
            drawn = type(part).__name__, getattr(part, "seed", None)
            if drawn[1] is not None and drawn in seen:
                warnings.warn(
                    f"two parts of the sum are {drawn[0]}s of the same seed, {drawn[1]}: they are drawn from the same numbers "
                    "and fluctuate together. Give each its own seed.",
                    BranchlabWarning,
                    stacklevel=4,
                )
            seen.add(drawn)

    @property
    def scale(self) -> float:
        """The shortest scale of the parts."""
        return min(part.scale for part in self.parts)

    @property
    def extent(self) -> tuple[float, float, float, float]:
        """Where all parts are defined."""
        x0, x1, y0, y1 = zip(*(part.extent for part in self.parts), strict=True)
        return max(x0), min(x1), max(y0), min(y1)

    @property
    def repeats_after(self) -> tuple[float, float]:
        """The shortest super-box of the parts."""
        return tuple(min(one) for one in zip(*(part.repeats_after for part in self.parts), strict=True))

    @property
    def period_y(self) -> float | None:
        """The parts' common period, if they have one; parts that do not depend on y have any."""
        periods = {part.period_y for part in self.parts}
        own = periods - {0.0} or {0.0}
        return own.pop() if len(own) == 1 else None

    @property
    def shortest_wavelength(self) -> float:
        """The longest of the parts'."""
        return max(part.shortest_wavelength for part in self.parts)

    @property
    def mean(self) -> float:
        """The sum of the parts' means."""
        return sum(part.mean for part in self.parts)

    def with_seed(self, seed: int) -> "SumMedium":
        """Return another realisation: the random parts get the seeds seed, seed + 2**32, ..."""
        renewed, number = [], 0
        for part in self.parts:
            if type(part).with_seed is Medium.with_seed:
                renewed.append(part)
            else:
                renewed.append(part.with_seed(seed + number * 2**32))
                number += 1
        if not number:
            return super().with_seed(seed)
        return SumMedium(tuple(renewed))

    def rows(self, x, y, *, dx: int = 0, dy: int = 0) -> np.ndarray:
        """Return the sum of the parts' rows (see `Medium.rows`)."""
        return sum(part.rows(x, y, dx=dx, dy=dy) for part in self.parts)
