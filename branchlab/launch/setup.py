"""The geometry of a run: which source, through which window of which medium, seen on which screens."""

import functools
import math

import attrs
import numpy as np

from branchlab.conventions import SIDES
from branchlab.errors import InputError, RangeError, check_choice, check_integer, check_memory, check_positive
from branchlab.launch.part import CoherentPart
from branchlab.launch.sources import Source
from branchlab.launch.window import Window
from branchlab.media.base import Medium
from branchlab.values import ValueObject, value

FADE_SCALES = 3.0  # seam and taper in medium scales: degree-9 steps this long are resolved at scale/8
PAD_SCALES = 6.0  # thinnest absorbing pad in medium scales
PAD_SHARE = 0.125  # absorbing pad as a share of the width
GRID_SHARE = 0.6  # of the grid's largest angle the rays' largest may take: intensities are resolved too


def _is(cls):
    def convert(thing, field):
        if not isinstance(thing, cls):
            raise InputError(f"{field.name} must be a {cls.__name__}; got {type(thing).__name__} {thing!r:.60}.")
        return thing

    return attrs.Converter(convert, takes_field=True)


def smooth_number(n: int) -> int:
    """Return the smallest whole number >= n whose prime factors are 2, 3 and 5."""
    best = 1 << max(n - 1, 1).bit_length()
    five = 1
    while five < best:
        three = five
        while three < best:
            rest = -(-n // three)
            best = min(best, three << max(rest - 1, 0).bit_length())
            three *= 3
        five *= 5
    return best


def _check_count(n: int, what: str, side: float, scale: float, name: str) -> None:
    """Refuse an axis that does not fit into memory, with ten numbers to a place: what marchers keep at the least."""
    check_memory(
        80.0 * n,
        f"an axis of {n:.4g} {what} ({side:g} long, in a medium of scale {scale:g})",
        f"Use fewer {name}, or a smaller window.",
    )


@value
class Setup(ValueObject):
    """A source sent along x through a window of a medium.

    The window is 0 <= x <= length, -width/2 <= y < width/2. Rays, semiclassical sum and wave are compared on
    the same screens x and in the same cells y.

    Parameters
    ----------
    medium : Medium
    source : Source
    length, width : float
        Size of the window, in the length unit of the medium.
    sides : {"periodic", "absorbing"}
        What the sides do. Periodic sides cross-fade a medium that does not repeat after the width by itself.
    screens : int, optional
        Number of screens, equidistant, the first at x = 0 and the last at x = length. Default: no further
        apart than half the medium's scale.
    cells : int, optional
        Number of transverse cells; every intensity is the mean over one. Default: no wider than scale/16, and 64 at least.
    length_unit : str
        Unit that is written to results, for example "mm"; "1" if lengths are plain numbers.
    """

    medium: Medium = attrs.field(converter=_is(Medium))
    source: Source = attrs.field(converter=_is(Source))
    length: float = attrs.field(converter=lambda s: check_positive("length", s))
    width: float = attrs.field(converter=lambda s: check_positive("width", s))
    sides: str = attrs.field(default="periodic", converter=lambda s: check_choice("sides", s, SIDES))
    screens: int | None = attrs.field(
        default=None, kw_only=True, converter=lambda n: n if n is None else check_integer("screens", n, low=2)
    )
    cells: int | None = attrs.field(
        default=None, kw_only=True, converter=lambda n: n if n is None else check_integer("cells", n, low=8)
    )
    length_unit: str = attrs.field(default="1", kw_only=True, converter=str)

    def __attrs_post_init__(self):
        x0, x1, y0, y1 = self.medium.extent
        slack = 1e-9 * max(self.length, self.width)
        if x0 > slack or x1 < self.length - slack:
            raise InputError(
                f"length {self.length:g} does not fit the medium, which is defined for {x0:g} <= x <= {x1:g}; "
                f"the window is 0 <= x <= length. Use length <= {x1:g}, and shift the medium's x axis so that the "
                "wave enters at x = 0."
            )
        low, high = self.window.reach
        if y0 > low + slack or y1 < high - slack:
            fit = self._widest(y0, y1)
            raise InputError(
                f"width {self.width:g} does not fit the medium, which is defined for {y0:g} <= y <= {y1:g}; with "
                f"{self.sides} sides the window needs {low:g} <= y <= {high:g} (width and a fade of "
                f"{self.window.fade:g}). Use width <= {fit:.4g}, or shift the medium's y axis to be centred on 0."
            )
        box = self.medium.repeats_after
        if self.length > box[0] * (1 + 1e-9) or self.width > box[1] * (1 + 1e-9):
            raise InputError(
                f"a window of {self.length:g} x {self.width:g} is larger than the random medium's super-box of "
                f"{box[0]:g} x {box[1]:g}, after which the medium repeats itself. Use "
                f"box=({max(self.length, box[0]):g}, {max(self.width, box[1]):g}) in the medium."
            )
        self._counts  # noqa: B018  (refuses axes that do not fit into memory)
        self.parts()  # refuses a source that does not fit the window

    def _widest(self, y0: float, y1: float) -> float:
        """Return the largest centred width that fits between y0 and y1 (0 if none does)."""
        fade = self.window.fade
        return max(0.0, 2.0 * (min(-y0, y1) - fade))

    @functools.cached_property
    def window(self) -> Window:
        """The periodic box in y that every marcher uses."""
        scale = min(self.medium.scale, self.width / 4.0)
        if self.sides == "absorbing":
            thinnest = max(PAD_SHARE * self.width, PAD_SCALES * scale)
            pad = math.ceil(thinnest / self.cell) * self.cell  # whole cells: block means of the box line up
            return Window(self.medium, self.width, pad, min(FADE_SCALES * scale, 0.5 * pad))
        period = self.medium.period_y
        repeats = period == 0 or (
            period is not None
            and math.isclose(self.width / period, round(self.width / period), rel_tol=1e-9, abs_tol=0.0)
        )
        return Window(self.medium, self.width, 0.0, 0.0 if repeats else min(FADE_SCALES * scale, 0.25 * self.width))

    @functools.cached_property
    def _counts(self) -> tuple[int, int]:
        """Numbers of screens and cells."""
        scale = self.medium.scale
        screens = self.screens or 1 + math.ceil(self.length / min(0.5 * scale, self.length) - 1e-9)
        _check_count(screens, "screens", self.length, scale, "screens")
        cells = self.cells or smooth_number(math.ceil(16.0 * self.width / min(scale, 0.25 * self.width) - 1e-9))
        _check_count(cells, "transverse cells", self.width, scale, "cells")
        return screens, cells

    @functools.cached_property
    def x(self) -> np.ndarray:
        """Screens, shape (x,): from the entry x = 0 to x = length."""
        screens = np.linspace(0.0, self.length, self._counts[0])
        screens.setflags(write=False)
        return screens

    @functools.cached_property
    def y(self) -> np.ndarray:
        """Centres of the transverse cells, shape (y,)."""
        n = self._counts[1]
        centres = (np.arange(n) + 0.5) * (self.width / n) - 0.5 * self.width
        centres.setflags(write=False)
        return centres

    @property
    def cell(self) -> float:
        """Width of a transverse cell."""
        return self.width / self.y.size

    def parts(self) -> tuple[CoherentPart, ...]:
        """Return the coherent parts of the source in this window; their weights sum to 1."""
        return self.source.parts(self)

    def steps_per_screen(self, longest: float) -> int:
        """Return how many equal steps, none longer than `longest`, lie between two screens."""
        return max(1, math.ceil((self.x[1] - self.x[0]) / longest - 1e-9))

    def cells_in_span(self) -> int:
        """Return how many cells of the setup's width the whole box is divided into (pads included)."""
        return round(self.window.span / self.cell)

    def fine_points(self, wavenumber: float, angle: float) -> int:
        """Return how many points of the box resolve exp(i k angle y).

        The pitch is at most pi/(k angle), and the number a multiple of `cells_in_span`, so that cell means
        are block means.
        """
        needed = math.ceil(self.window.span * wavenumber * angle / math.pi)
        cells = self.cells_in_span()
        return cells * smooth_number(max(1, math.ceil(needed / cells)))

    @functools.cached_property
    def _scouted(self) -> float:
        """Largest |p - tilt| of a few thousand roughly traced rays."""
        window, scale = self.window, self.medium.scale
        n = max(64, math.ceil(8 * window.span / scale))
        steps = self.steps_per_screen(scale / 4.0) * (self.x.size - 1)
        h = self.length / steps
        largest = 0.0
        states = []
        for part in self.parts():
            s = np.linspace(*part.front.span, 1024)
            rays = part.front.at(s)
            states.append((rays.y.copy(), rays.p.copy(), part.tilt))
            largest = max(largest, float(np.abs(rays.p - part.tilt).max()))
        for block in range(0, steps, 64):
            x = (np.arange(block, min(block + 64, steps)) + 0.5) * h
            v = window.rows(x, n)
            slope = (np.roll(v, -1, axis=1) - np.roll(v, 1, axis=1)) * (n / (2.0 * window.span))
            for row in slope:
                for y, p, tilt in states:
                    y += h * p
                    p -= 0.5 * h * row[((y - window.start) * (n / window.span)).astype(np.int64) % n]
                    largest = max(largest, float(np.abs(p - tilt).max()))
        return largest

    def angle_bound(self) -> float:
        """Return an estimate of the largest transverse momentum, beyond the tilt, that any ray gets.

        From a few thousand roughly traced rays: right to some ten percent, meant for the first choice of a
        grid. Marchers of waves check their spectra and refine.

        Raises
        ------
        RangeError
            The rays turn so far that a paraxial description has no meaning.
        """
        if not self._scouted < 10.0:
            raise RangeError(
                f"rays reach a transverse momentum of {self._scouted:.3g}; |p| must stay below 1 (p is the sine of "
                "the angle to x). Reduce the medium's strength or the length."
            )
        return self._scouted
