"""A band: an incoherent mixture over wavelengths, and the few wavelengths that stand for it."""

import math

import attrs
import numpy as np

from branchlab.errors import InputError, check_axis, check_choice, check_integer, check_positive
from branchlab.values import ValueObject, value

SHAPES = ("flat", "gaussian")
KINDS = ("fixed-rays",)
CUT = 3.0  # a Gaussian band ends at three standard deviations: 0.27 % of its weight is left out
WIDTH_OF_SIGMA = 2.0 * math.sqrt(2.0 * math.log(2.0))  # full width at half maximum of a Gaussian of deviation 1


def _kind(kind) -> str:
    """Accept "fixed-rays"; say what is missing for "energy"."""
    if kind == "energy":
        raise InputError(
            "kind 'energy' (v and the wavelength change together, so the rays change too) is not supported yet; "
            "supported now: 'fixed-rays' (the wavelength changes, v and its rays stay). Use kind='fixed-rays'."
        )
    return check_choice("kind", kind, KINDS)


@value
class Band(ValueObject):
    """A band of wavelengths about a centre, averaged incoherently: intensities add, not fields.

    Parameters
    ----------
    centre : float
        Wavelength of the band's centre wavenumber k0 = 2 pi / centre, in the setup's length unit.
    width : float
        Full width in wavenumber relative to k0 (0.2 = 20 %): of the whole band if flat, at half maximum if
        gaussian.
    shape : {"flat", "gaussian"}
        Weight over wavenumber. Flat: constant for abs(k - k0) <= width k0 / 2. Gaussian: cut at 3 standard
        deviations.
    kind : {"fixed-rays"}
        What changes with the wavelength. At fixed rays v stays, as in a medium without dispersion.
    nodes : int, optional
        Number of wavelengths that stand for the band, odd (the centre is one of them). Default: the smallest
        odd number of at least 5 + 10 width if flat (9 for width 0.4, 17 for 1.2), 5 + 20 width if gaussian,
        see Notes.

    Notes
    -----
    A pair of rays whose paths differ by s makes a fringe cos(k s); the flat band leaves sin(z)/z of it,
    z = width k0 s / 2. The nodes of the flat band are those of Gauss and Legendre: n of them give that factor
    to 0.01 for z <= 1.4 n (below, it is right to round-off within a few units). The default thus serves phase
    differences k0 s up to 65 rad at width 0.4 and 46 rad at width 1.2, where the fringe is down to 8 % and 4 %; a
    longer difference is left with noise of about 0.7/sqrt(n) of the fringe instead of zero.
    The gaussian band leaves exp(-(sigma k0 s)**2 / 2). Its nodes are equidistant, h sigma k0 apart, with weights
    exp(-(k - k0)**2 / (2 (sigma k0)**2)): the trapezoid rule, right to the 0.3 % of the cut for sigma k0 s <=
    2 pi/h - 3. It reaches 2.5 times as far from the centre as the flat band of equal width, hence more nodes; the
    default serves k0 s up to 50 rad at least.

    Examples
    --------
    >>> band = Band(0.1, 0.2)
    >>> band.wavelengths().round(4).tolist()
    [0.0913, 0.0931, 0.0961, 0.1, 0.1042, 0.108, 0.1105]
    >>> float(band.weights().sum().round(12))
    1.0
    """

    centre: float = attrs.field(converter=lambda s: check_positive("centre", s))
    width: float = attrs.field(converter=lambda s: check_positive("width", s))
    shape: str = attrs.field(default="flat", converter=lambda s: check_choice("shape", s, SHAPES))
    kind: str = attrs.field(default="fixed-rays", kw_only=True, converter=_kind)
    nodes: int | None = attrs.field(
        default=None, kw_only=True, converter=lambda n: n if n is None else check_integer("nodes", n, low=3)
    )

    def __attrs_post_init__(self):
        widest = 1.99 if self.shape == "flat" else 0.98 * WIDTH_OF_SIGMA / CUT
        reach = "half its width" if self.shape == "flat" else "3 standard deviations"
        if self.width > widest:
            raise InputError(
                f"width {self.width:g} is too wide for a {self.shape} band: it reaches {reach} to either side "
                "of the centre and must stay at positive wavenumbers. "
                f"Use width <= {widest:.3g}."
            )
        if self.nodes is not None and self.nodes % 2 == 0:
            raise InputError(
                f"nodes must be odd, so that the centre is one of them; got {self.nodes}. "
                f"Use {self.nodes - 1} or {self.nodes + 1}."
            )

    def _rule(self) -> tuple[np.ndarray, np.ndarray]:
        """Return the nodes k/k0 - 1, falling, and their weights, which sum to 1."""
        per_width = 10.0 if self.shape == "flat" else 20.0
        n = self.nodes or 2 * math.ceil(2.0 + 0.5 * per_width * self.width - 1e-9) + 1
        if self.shape == "flat":
            t, weight = np.polynomial.legendre.leggauss(n)
            offset = 0.5 * self.width * t
        else:
            t = np.linspace(-CUT, CUT, n)
            weight = np.exp(-0.5 * t**2)
            offset = self.width / WIDTH_OF_SIGMA * t
        offset = 0.5 * (offset - offset[::-1])  # symmetric, and exactly 0 in the middle
        return offset[::-1], weight / weight.sum()

    def wavelengths(self) -> np.ndarray:
        """Return the wavelengths of the nodes, rising, shape (n,); the middle one is `centre` exactly."""
        return self.centre / (1.0 + self._rule()[0])

    def weights(self) -> np.ndarray:
        """Return the weights of the nodes, shape (n,), in the order of `wavelengths`; they sum to 1."""
        return self._rule()[1]


def wavelength_axis(wavelengths) -> np.ndarray:
    """Return positive wavelengths, shape (wavelength,), from a number, a sequence or a `Band`."""
    given = wavelengths.wavelengths() if isinstance(wavelengths, Band) else wavelengths
    axis = check_axis("wavelengths", np.atleast_1d(given))
    return np.array([check_positive("wavelength", one) for one in axis])
