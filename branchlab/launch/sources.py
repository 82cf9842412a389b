"""Sources: what is sent into the medium at x = 0, as coherent parts with an entry wave and a launching front."""

import abc
import functools

import attrs
import numpy as np
from scipy.interpolate import make_interp_spline

from branchlab.errors import (
    InputError,
    RangeError,
    check_axis,
    check_integer,
    check_number,
    check_positive,
)
from branchlab.launch.part import CoherentPart, Front, FrontRays
from branchlab.launch.window import smooth_step
from branchlab.values import ValueObject, read_only, value


def _angle(angle) -> float:
    """Check an angle in radians from the x axis: forward only."""
    return check_number("angle", angle, low=-0.5 * np.pi, high=0.5 * np.pi, open_low=True, open_high=True)


class Source(ValueObject, abc.ABC):
    """What is sent into the window of a setup."""

    normalisation = "intensity 1"
    """What is 1: the incoming intensity of a wide wave, or the flux of a localised one."""

    @abc.abstractmethod
    def parts(self, setup) -> tuple[CoherentPart, ...]:
        """Return the coherent parts of the source in the window of a `Setup`."""


def _plane_front(span, closed, amplitude, path) -> Front:
    """Return the front of a field amplitude(y) exp(ik path(y)); s = y.

    `amplitude` is called as f(y), `path` as f(y, order of the derivative).
    """

    def at(s):
        s = np.asarray(s, dtype=np.float64)
        return FrontRays(s, s, path(s, 1), path(s, 0), np.ones_like(s), path(s, 2), amplitude(s))

    return Front(span, closed, at)


@value
class PlaneWave(Source):
    """A plane wave of intensity 1, sent at an angle to the x axis.

    With absorbing sides it is a soft-edged slab: the amplitude rises from 0 to 1 over the window's fade,
    inside the sides, so that rays and wave enter alike and nothing starts inside the absorber.

    Parameters
    ----------
    angle : float
        Radians; the transverse momentum is sin(angle).
    """

    angle: float = attrs.field(default=0.0, converter=_angle)

    def parts(self, setup) -> tuple[CoherentPart, ...]:
        """Return the one coherent part (see `Source.parts`)."""
        window, tilt = setup.window, float(np.sin(self.angle))
        half = 0.5 * setup.width

        def amplitude(y):
            return smooth_step((half - np.abs(y)) / window.fade) if window.pad else np.ones_like(y)

        def path(y, order):
            return (tilt * y, np.full_like(y, tilt), np.zeros_like(y))[order]

        def entry(y, k):
            return np.broadcast_to(amplitude(y).astype(np.complex128), (np.size(k), y.size)).copy()

        front = _plane_front((-half, half), not window.pad, amplitude, path)
        return (CoherentPart(1.0, tilt, entry, front, endless=True),)


@value
class PointSource(Source):
    """A point source of unit flux at x <= 0 that fills a fan of directions evenly, with soft edges.

    Entry wave: u = sqrt(k/2pi) int a(p) exp(ik[p (y - y0) + p**2 x0/2]) dp, with int a**2 dp = 1: the paraxial
    field at x = 0 of a source at (x0, y0). a is constant to 0.8 half_angle and falls smoothly to 0 at half_angle.

    Parameters
    ----------
    x, y : float
        Position; x must not be positive (the window starts at 0).
    half_angle : float
        Largest transverse momentum of the fan (sine of the angle), below 1.
    """

    normalisation = "flux 1"

    x: float = attrs.field(default=0.0, converter=lambda s: check_number("x", s, high=0.0))
    y: float = attrs.field(default=0.0, converter=lambda s: check_number("y", s))
    half_angle: float = attrs.field(
        default=0.3,
        kw_only=True,
        converter=lambda s: check_number("half_angle", s, low=0.0, high=1.0, open_low=True),
    )

    @functools.cached_property
    def _height(self) -> float:
        """a(0): makes int a**2 dp = 1 (Gauss-Legendre over the polynomial edge is exact)."""
        t, w = np.polynomial.legendre.leggauss(16)
        edge = float(np.sum(0.5 * w * smooth_step(0.5 * (t + 1.0)) ** 2))
        return 1.0 / np.sqrt(2.0 * self.half_angle * (0.8 + 0.2 * edge))

    def fan(self, p):
        """Return a(p)."""
        return self._height * smooth_step((1.0 - np.abs(p) / self.half_angle) / 0.2)

    def parts(self, setup) -> tuple[CoherentPart, ...]:
        """Return the one coherent part (see `Source.parts`)."""
        lit = abs(self.y) - self.x * self.half_angle
        if lit > 0.5 * setup.width:
            raise RangeError(
                f"the fan of the point source lights |y| <= {lit:g} at x = 0; the window ends at "
                f"{0.5 * setup.width:g} (half the width). Use a wider window, a smaller half_angle or a nearer source."
            )

        def at(s):
            s = np.asarray(s, dtype=np.float64)
            y = self.y - s * self.x
            return FrontRays(s, y, s, -0.5 * self.x * s**2, np.full_like(s, -self.x), np.ones_like(s), self.fan(s))

        span = setup.window.span

        def entry(y, k):
            field = np.empty((np.size(k), y.size), dtype=np.complex128)
            for row, one in zip(field, np.atleast_1d(k), strict=True):
                top = int(one * self.half_angle * span / (2.0 * np.pi))
                q = 2.0 * np.pi * np.arange(-top, top + 1) / span
                amplitude = self.fan(q / one)
                # the box's modes as nodes of int a**2 dp = 1: weights made exact, so that the flux is 1
                amplitude /= np.sqrt(span * (amplitude**2).sum())
                row[:] = np.exp(1j * np.outer(y - self.y, q)) @ (amplitude * np.exp(0.5j * q**2 * self.x / one))
            return field

        front = Front((-self.half_angle, self.half_angle), False, at, phase=-0.25 * np.pi)
        return (CoherentPart(1.0, 0.0, entry, front),)


@value
class Beam(Source):
    """A Gaussian sheet beam of unit flux.

    Entry wave: (2/(pi waist**2))**(1/4) exp(-(y-y0)**2/waist**2) exp(-ik (y-y0)**2/(2 focus)) exp(ik sin(angle) y)
    (Siegman, Lasers, 1986, ch. 17, one transverse dimension). Its rays leave at right angles to that front with
    the beam's intensity: they know nothing of its diffraction.

    Parameters
    ----------
    waist : float
        Radius at which the intensity is down to exp(-2), at x = 0.
    y : float
        Transverse position of the axis at x = 0.
    angle : float
        Radians; the transverse momentum of the axis is sin(angle).
    focus : float, optional
        Distance at which the rays of the beam meet; negative for a beam that spreads; None for a flat front.
    """

    normalisation = "flux 1"

    waist: float = attrs.field(converter=lambda s: check_positive("waist", s))
    y: float = attrs.field(default=0.0, kw_only=True, converter=lambda s: check_number("y", s))
    angle: float = attrs.field(default=0.0, kw_only=True, converter=_angle)
    focus: float | None = attrs.field(
        default=None, kw_only=True, converter=lambda s: s if s is None else check_number("focus", s)
    )

    def __attrs_post_init__(self):
        if self.focus == 0:
            raise InputError("focus must not be 0: a beam that meets at x = 0 is a PointSource; use that.")

    def parts(self, setup) -> tuple[CoherentPart, ...]:
        """Return the one coherent part (see `Source.parts`)."""
        reach = 4.0 * self.waist  # the intensity left out is exp(-32)
        if abs(self.y) + 3.0 * self.waist > 0.5 * setup.width:
            raise RangeError(
                f"a beam of waist {self.waist:g} at y = {self.y:g} needs |y| <= {abs(self.y) + 3 * self.waist:g} "
                f"(three waists); the window ends at {0.5 * setup.width:g} (half the width). Use a narrower beam or "
                "a wider window."
            )
        tilt = float(np.sin(self.angle))
        bend = 0.0 if self.focus is None else -1.0 / self.focus
        height = (2.0 / (np.pi * self.waist**2)) ** 0.25

        def amplitude(y):
            return height * np.exp(-(((y - self.y) / self.waist) ** 2))

        def path(y, order):
            u = y - self.y
            return (0.5 * bend * u**2 + tilt * y, bend * u + tilt, np.full_like(u, bend))[order]

        def entry(y, k):
            u = y - self.y
            return amplitude(y) * np.exp(0.5j * bend * np.multiply.outer(np.atleast_1d(k), u**2))

        front = _plane_front((self.y - reach, self.y + reach), False, amplitude, path)
        return (CoherentPart(1.0, tilt, entry, front),)


@value
class FieldSource(Source):
    """A measured or computed entry field: amplitude(y) exp(ik path(y)), with its rays.

    Amplitude and path are quintic splines through the samples. The field is taken as given, nothing is
    normalised: its flux is int amplitude**2 dy. With periodic sides, samples that span exactly one width
    (last y = first y + width, with equal values) make a periodic field; otherwise the field is 0 outside
    the samples.

    Parameters
    ----------
    y : array_like, shape (n,)
        Rising positions, at least 6.
    amplitude : array_like, shape (n,) or float
        Real amplitude.
    path : array_like, shape (n,) or float
        Length whose wavenumber multiple is the phase; its slope is the transverse momentum of the rays.
    """

    y: np.ndarray = attrs.field(converter=lambda a: read_only(check_axis("y", a, minimum=6)))
    amplitude: np.ndarray = attrs.field(default=1.0)
    path: np.ndarray = attrs.field(default=0.0)

    def __attrs_post_init__(self):
        if not (np.diff(self.y) > 0).all():
            at = int(np.flatnonzero(np.diff(self.y) <= 0)[0])
            raise InputError(f"y must rise; y[{at}] = {self.y[at]:g} is followed by y[{at + 1}] = {self.y[at + 1]:g}.")
        for name in ("amplitude", "path"):
            given = np.asarray(getattr(self, name))
            if np.iscomplexobj(given):
                raise InputError(f"{name} must be real; put a phase phi into path as phi/k (path is a length).")
            if given.shape not in ((), self.y.shape):
                raise InputError(f"{name} must have one value per y: {self.y.shape}; got shape {given.shape}.")
            full = np.broadcast_to(given, self.y.shape)
            object.__setattr__(self, name, read_only(check_axis(name, full)))

    def _closed(self, setup) -> bool:
        return setup.sides == "periodic" and bool(
            np.isclose(self.y[-1] - self.y[0], setup.width, rtol=1e-9, atol=0.0)
            and np.isclose(self.amplitude[0], self.amplitude[-1], atol=1e-12 * np.abs(self.amplitude).max())
            and np.isclose(self.path[0], self.path[-1], atol=1e-12 * max(np.abs(self.path).max(), 1e-300))
        )

    def parts(self, setup) -> tuple[CoherentPart, ...]:
        """Return the one coherent part (see `Source.parts`)."""
        low, high = float(self.y[0]), float(self.y[-1])
        edge = 0.5 * setup.width * (1.0 + 1e-9)
        closed = self._closed(setup)
        if not closed and (low < -edge or high > edge):
            raise RangeError(
                f"the field's samples reach from {low:g} to {high:g}; the window from {-edge:g} to {edge:g} "
                "(half the width). Use a wider window or cut the samples."
            )
        ends = "periodic" if closed else None

        def through(samples):
            if closed:
                samples = np.append(samples[:-1], samples[0])  # equal to round-off: made equal to the last bit
            return make_interp_spline(self.y, samples, k=5, bc_type=ends)

        amplitude_spline, path_spline = through(self.amplitude), through(self.path)

        def wrapped(y):
            return low + np.mod(y - low, high - low) if closed else y

        def amplitude(y):
            return amplitude_spline(wrapped(y))

        def path(y, order):
            return path_spline(wrapped(y), order)

        def entry(y, k):
            inside = np.ones(y.shape, bool) if closed else (y >= low) & (y <= high)
            field = np.zeros((np.size(k), y.size), dtype=np.complex128)
            turn = np.multiply.outer(np.atleast_1d(k), path(y[inside], 0))
            field[:, inside] = amplitude(y[inside]) * np.exp(1j * turn)
            return field

        return (CoherentPart(1.0, 0.0, entry, _plane_front((low, high), closed, amplitude, path)),)


@value
class AngularSpread(Source):
    """An incoherent mixture of one source turned to many angles: an extended source far away.

    The transverse momenta are Gaussian with rms sin(rms_angle), on equidistant nodes out to 3.7 rms (the
    trapezoid rule converges faster than any power of their number).

    Parameters
    ----------
    source : Source
    rms_angle : float
        Root mean square of the angle, radians.
    nodes : int
        Number of coherent parts, odd. The nodes must be closer than the angle that the medium's structure
        resolves; compare with twice as many.
    """

    source: Source = attrs.field()
    rms_angle: float = attrs.field(converter=lambda s: check_positive("rms_angle", s))
    nodes: int = attrs.field(default=15, kw_only=True, converter=lambda n: check_integer("nodes", n, low=3))

    def __attrs_post_init__(self):
        if not isinstance(self.source, Source):
            raise InputError(f"source must be a Source; got {type(self.source).__name__}.")
        _angle(self.rms_angle)
        if self.nodes % 2 == 0:
            raise InputError(f"nodes must be odd, so that the middle is among them; got {self.nodes}.")

    @property
    def normalisation(self) -> str:
        """That of the source that is turned."""
        return self.source.normalisation

    def parts(self, setup) -> tuple[CoherentPart, ...]:
        """Return one coherent part per angle (and per part of the source)."""
        t = np.linspace(-3.7, 3.7, self.nodes)
        weights = np.exp(-0.5 * t**2)
        weights /= weights.sum()
        turns = float(np.sin(self.rms_angle)) * t
        return tuple(
            part.turned(float(turn), float(weight) * part.weight)
            for part in self.source.parts(setup)
            for turn, weight in zip(turns, weights, strict=True)
        )
