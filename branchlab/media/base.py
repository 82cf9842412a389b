"""What every medium is: a frozen object that gives v(x, y) and its derivatives on product grids."""

import abc
import math

import numpy as np
import xarray as xr

from branchlab.conventions import X, Y
from branchlab.errors import check_axis
from branchlab.values import ValueObject


class Medium(ValueObject, abc.ABC):
    """A medium v(x, y) = V/E = 1 - n**2, dimensionless and below 1 wherever rays go.

    Subclasses give `rows` and `scale`; the other attributes have defaults that suit an analytic medium.
    """

    extent = (-math.inf, math.inf, -math.inf, math.inf)
    """(x0, x1, y0, y1): where the medium is defined."""
    period_y = None
    """Exact transverse period, or None."""
    mean = 0.0
    """The value that v fluctuates about: what a taper at the sides leads to."""

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
