"""Full rays where they are known in closed form: ramps, ducts, the Luneburg lens, free space at any angle."""

import attrs
import numpy as np
import pytest
from scipy.integrate import solve_ivp

from branchlab.conventions import FULL
from branchlab.errors import check_axis
from branchlab.launch import Beam, PlaneWave, PointSource, Setup
from branchlab.launch.part import FrontRays
from branchlab.media import Duct, Lens, Ramp, RandomMedium
from branchlab.media.base import Medium
from branchlab.rays import RayEnsemble
from branchlab.rays.full_march import FullMarcher
from branchlab.rays.march import OK, TURNED, Marcher
from branchlab.values import value
from tests.oracles.empty import Empty
from tests.oracles.rays_media import Mirrored


def launch(y, p):
    """Rays with unit front tangent along y."""
    y, p = np.broadcast_arrays(np.asarray(y, float), np.asarray(p, float))
    one, zero = np.ones(y.shape), np.zeros(y.shape)
    return FrontRays(y.copy(), y.copy(), p.copy(), zero, one, zero, one)


def seen(setup, screens, y, p, steps=4, points=8, matrix=True):
    """Rays on screens behind the slab's face: from the first of them to the others, laws of the medium hold exactly."""
    return list(FullMarcher(setup, steps, points).on(screens).march(launch(y, p), matrix=matrix))


def matrix_of(state):
    return np.moveaxis(np.array([[state.A, state.B], [state.C, state.D]]), -1, 0)


# ---- linear medium


def test_ramp_across():
    """n**2 = 1 + g y: parabolas y = y1 + p1 s + g s**2/4 with s = (x - x1)/p_x, path int n**2 ds.

    Kravtsov & Orlov, Geometrical Optics of Inhomogeneous Media (1990) (from memory).
    """
    g = 0.04
    setup = Setup(Ramp(slope_y=-g), PlaneWave(), 12.0, 64.0, "absorbing", screens=4, cells=640)
    first, last = seen(setup, [5.0, 11.0], np.linspace(-4, 4, 33), np.linspace(-0.8, 0.8, 33), 16, 16)
    px = first.px
    np.testing.assert_allclose(px, np.sqrt(1 + g * first.y - first.p**2), atol=1e-7)
    s = 6.0 / px
    # the far tail of the taper at the sides, as the spline sees it
    np.testing.assert_allclose(last.y, first.y + first.p * s + g * s**2 / 4, atol=1e-8)
    np.testing.assert_allclose(last.p, first.p + g * s / 2, atol=1e-9)
    path = px**2 * s + first.p**2 * s + first.p * g * s**2 / 2 + g**2 * s**3 / 12
    np.testing.assert_allclose(last.action - first.action, path, atol=1e-8)
    # derivatives of the closed form: ds/dy1 = -s g/(2 px**2), ds/dp1 = s p1/px**2
    s_y, s_p = -s * g / (2 * px**2), s * first.p / px**2
    rate = first.p + g * s / 2
    exact = np.moveaxis(np.array([[1 + rate * s_y, s + rate * s_p], [g * s_y / 2, 1 + g * s_p / 2]]), -1, 0)
    np.testing.assert_allclose(matrix_of(last), exact @ matrix_of(first), rtol=1e-5, atol=1e-6)


def test_ramp_along_turns_rays_back_where_it_must():
    """v = g x: p is kept (Snell's law) and p_x**2 = 1 - p**2 - g x, so that rays with p**2 > 1 - g x have turned.

    Of a fan that is even in angle with soft edges, the flux that has turned is the fan's beyond that angle; the intensity
    of the rest is flux/(p_x dy) with y from the closed form of the parabola.
    """
    g, length = 0.2, 4.0
    source = PointSource(-1.0, half_angle=0.9)
    setup = Setup(Ramp(slope_x=g), source, length, 24.0, screens=21)
    density = RayEnsemble(setup, dynamics=FULL, rays_per_scale=256, steps_per_scale=16).density()
    angle = (np.arange(200000) + 0.5) / 200000 * np.arcsin(0.9)
    power = source.fan(np.sin(angle)) ** 2
    for x, turned, arrived in zip(setup.x, density.turned_flux.values, density.flux.values, strict=True):
        exact = power[np.sin(angle) ** 2 > 1 - g * x].sum() / power.sum()
        assert abs(turned - exact) < 1e-4  # what passes a screen and turns within the same step counts as turned
        assert abs(turned + arrived - 1) < 1e-9
    # on the axis: dy/dangle = p_x times int dx/p_x**2 ... from dy/dx = p/(1 - p**2 - g x)**(1/2) at p = 0
    x = setup.x[10]
    spread = 1.0 + 2 * (1 - np.sqrt(1 - g * x)) / g  # one length before the entry, then the ramp
    exact = source.fan(0.0) ** 2 / (2 * power.mean() * np.arcsin(0.9)) / spread / np.sqrt(1 - g * x)
    found = density.intensity.isel(x=10).interp(y=0.0)
    assert abs(found / exact - 1) < 0.03  # the slab's face shifts the ramp's beginning by a part of itself


# ---- ducts

RATE = 0.1


def duct_setup(**options):
    return Setup(Duct(RATE), PlaneWave(), 60.0, 18.0, "absorbing", screens=31, cells=256, **options)


def test_duct_at_any_angle():
    """n**2 = 1 - a**2 y**2: y = (sin(angle)/a) sin(a s), s = x/p_x, p_x kept on every ray.

    Marcuse, Light Transmission Optics (1982); Snyder & Love (1983) (from memory). With v = 0 on the axis.
    """
    y, p = np.linspace(-1, 1, 33), np.linspace(-0.5, 0.4, 33)
    for steps, points, bound in ((4, 8, 1e-5), (24, 32, 2e-9)):
        first, last = seen(duct_setup(), [10.0, 50.0], y, p, steps, points)
        px = first.px
        np.testing.assert_allclose(px, np.sqrt(1 - first.p**2 - RATE**2 * first.y**2), atol=bound)
        np.testing.assert_allclose(last.px, px, atol=bound)
        u = RATE * 40.0 / px
        cos, sin = np.cos(u), np.sin(u)
        np.testing.assert_allclose(last.y, first.y * cos + first.p * sin / RATE, atol=10 * bound)
        np.testing.assert_allclose(last.p, first.p * cos - RATE * first.y * sin, atol=10 * bound)
        # int p dr = p_x**2 s + int p_y**2 ds
        square = 0.5 * u * (first.p**2 + RATE**2 * first.y**2) + 0.25 * np.sin(2 * u) * (
            first.p**2 - RATE**2 * first.y**2
        )
        across = (square - RATE * first.y * first.p * sin**2) / RATE
        np.testing.assert_allclose(last.action - first.action, px * 40.0 + across, atol=50 * bound)


LENSES = Lens(0.3, 1.0, x=5.0, y=-0.5) + Lens(-0.3, 0.8, x=7.0, y=0.5) + Lens(0.4, 1.0, x=9.0)


def lens_setup(medium=LENSES):
    """Empty at both ends: the slab's face and exit do nothing."""
    return Setup(medium, PlaneWave(), 14.0, 14.0, "absorbing", screens=3, cells=128)


def by_an_integrator(y, p):
    """One ray through the lenses, and its matrix, in x: scipy's Dormand-Prince method of order 8 on the closed forms."""

    def slopes(x, z):
        y, p, _, *m = z
        v, v_y, v_yy = (LENSES.rows([x], [y], dy=order)[0, 0] for order in (0, 1, 2))
        px = np.sqrt(1 - v - p**2)
        # H(y, p; x) = -px generates the motion in x: its Hessian moves the matrix
        h_yy = 0.5 * v_yy / px + 0.25 * v_y**2 / px**3
        h_yp, h_pp = 0.5 * v_y * p / px**3, 1 / px + p**2 / px**3
        m = np.reshape(m, (2, 2))
        dm = np.array([[h_yp, h_pp], [-h_yy, -h_yp]]) @ m
        return [p / px, -0.5 * v_y / px, (1 - v) / px, *dm.ravel()]

    found = solve_ivp(slopes, (0, 14), [y, p, 0, 1, 0, 0, 1], method="DOP853", rtol=1e-11, atol=1e-12)
    return found.y[:, -1]


def test_order_of_the_march_is_four():
    """Errors of y, p, action and matrix against a general integrator fall with the fourth power of the step."""
    y, p = np.array([-1.2, 0.3, 0.8]), np.array([0.3, 0.05, -0.15])
    exact = np.array([by_an_integrator(*ray) for ray in zip(y, p, strict=True)]).T
    errors, steps = [], (6, 9, 13)
    for n in steps:
        *_, last = FullMarcher(lens_setup(), n, 40).march(launch(y, p), matrix=True)
        found = np.array([last.y, last.p, last.action, last.A, last.B, last.C, last.D])
        errors.append(np.sqrt(np.mean((found - exact) ** 2, axis=1)))
    errors = np.array(errors)
    assert (errors[-1] < 1e-4 * np.abs(exact).max(axis=1)).all()
    slopes = [np.polyfit(np.log(steps), -np.log(column), 1)[0] for column in errors.T]
    np.testing.assert_allclose(slopes, 4.0, atol=0.2)


def test_duct_refocuses_later_at_smaller_angles():
    """A ray from the axis is back after pi cos(angle)/a (Marcuse 1982): the duct's aberration."""
    setup = duct_setup()
    first, *rest = seen(setup, np.linspace(6.0, 59.0, 1061), 0.0, np.sin([0.05, 0.3, 0.5]), 16, 32)
    y = np.array([first.y, *[s.y for s in rest]])
    x = np.array([first.x, *[s.x for s in rest]])
    for ray, px in enumerate(first.px):
        at = np.flatnonzero(np.diff(np.sign(y[:, ray])))
        zeros = x[at] - y[at, ray] * (x[1] - x[0]) / (y[at + 1, ray] - y[at, ray])
        np.testing.assert_allclose(np.diff(zeros), np.pi * px / RATE, atol=1e-4)  # zeros by straight lines


def test_sech_duct_has_one_period_for_all_rays():
    """n = sech(a y): every ray is back after 2 pi/a, at any angle.

    Fletcher, Murphy & Young, Proc. R. Soc. A 223 (1954) 216 (from memory).
    """
    a = 0.5
    setup = Setup(Duct(a, profile="sech"), PlaneWave(), 2 * np.pi / a + 4.0, 64.0, "absorbing", screens=9, cells=1024)
    first, half, last = seen(setup, 2.0 + np.pi / a * np.arange(3), [0.1, 0.0, -0.3], np.sin([0.1, 0.5, 1.0]), 16, 24)
    np.testing.assert_allclose(last.y, first.y, atol=1e-7)
    np.testing.assert_allclose(last.p, first.p, atol=1e-7)
    np.testing.assert_allclose(half.y, -first.y, atol=1e-7)
    np.testing.assert_allclose(half.p, -first.p, atol=1e-7)
    np.testing.assert_allclose(matrix_of(last), matrix_of(first), atol=5e-5)
    assert (last.maslov - first.maslov == 2).all()


# ---- Luneburg lens


@value
class Luneburg(Medium):
    """n**2 = 2 - r**2/R**2 inside r < R about (x0, 0), 1 outside: continuous, with a bend at the rim."""

    radius: float = attrs.field(converter=float)
    x: float = attrs.field(converter=float)

    @property
    def scale(self):
        return 0.1 * self.radius

    def rows(self, x, y, *, dx=0, dy=0):
        square = ((check_axis("x", x) - self.x) ** 2)[:, None] + check_axis("y", y)[None, :] ** 2
        return np.minimum(square / self.radius**2 - 1.0, 0.0)


def test_luneburg_lens():
    """Parallel rays meet at the far rim; the path from the tangent plane before the lens to there is R (1 + pi/2).

    Luneburg, Mathematical Theory of Optics (1944); Born & Wolf, sect. 4.2 (from memory). The spline rounds the bend at the
    rim over a hundredth of R, which is what the bounds allow for.
    """
    setup = Setup(Luneburg(1.0, 1.5), PlaneWave(), 2.5, 4.0, "absorbing", screens=11, cells=64)
    y = np.array([-0.8, -0.5, -0.1, 0.1, 0.5, 0.8])
    before, last = seen(setup, [0.4, 2.5], y, 0.0, 8, 20)
    np.testing.assert_allclose(last.y, 0.0, atol=3e-3)
    np.testing.assert_allclose(last.p, -np.sin(np.arcsin(y)), atol=5e-3)  # each comes out at its own angle
    np.testing.assert_allclose(last.action - before.action, 0.1 + 1 + np.pi / 2, atol=2e-3)


@value
class FishEye(Medium):
    """n = 2/(1 + r**2) inside r < 1 about (x0, 0), 1 outside: continuous, with a bend at the rim."""

    x: float = attrs.field(converter=float)
    scale = 0.1

    def rows(self, x, y, *, dx=0, dy=0):
        square = ((check_axis("x", x) - self.x) ** 2)[:, None] + check_axis("y", y)[None, :] ** 2
        return np.minimum(1.0 - 4.0 / (1.0 + square) ** 2, 0.0)


def test_fish_eye():
    """Rays from a point of the rim run on circles to the point opposite, all by a path of pi.

    Maxwell (1854); Born & Wolf, sect. 4.2.2 (from memory). Bounds as for the Luneburg lens.
    """
    setup = Setup(FishEye(1.6), PlaneWave(), 2.6, 4.0, "absorbing", screens=11, cells=64)
    angle = np.array([-0.7, -0.4, -0.1, 0.2, 0.6])
    first, last = seen(setup, [0.5, 2.6], -0.6 * np.tan(angle), np.sin(angle), 8, 20)
    np.testing.assert_allclose(last.y, 0.0, atol=3e-3)
    np.testing.assert_allclose(last.p, -np.sin(angle), atol=5e-3)
    np.testing.assert_allclose(last.action - first.action - 0.1 / np.cos(angle), np.pi, atol=3e-3)


# ---- any medium


def random_setup(strength=0.1, length=10.0):
    return Setup(RandomMedium(strength, 1.0, seed=5), PlaneWave(), length, 24.0, screens=21)


SPREAD = np.linspace(-12, 12, 200, endpoint=False)


def test_energy_and_area():
    """p**2 + v = 1 on every screen, det = 1 (textbook)."""
    setup = random_setup()
    for state in seen(setup, setup.x[2:], SPREAD, 0.5 * np.sin(SPREAD), 16, 16):
        y = np.mod(state.y + 12, 24) - 12
        ok = (state.status == OK) & (y < 12 - setup.window.fade)  # beyond is the seam of the sides
        v = np.array([setup.medium.rows([state.x], [one])[0, 0] for one in y])
        assert np.abs(state.px**2 + state.p**2 + v - 1)[ok].max() < 5e-5
        growth = np.abs(matrix_of(state)[ok]).max(axis=(1, 2)) ** 2
        assert (np.abs(state.A * state.D - state.B * state.C - 1)[ok] < 1e-11 * growth).all()


def test_time_reversal():
    """A ray sent back from the end comes out as it went in, with the inverse matrix."""
    y, p = np.linspace(-3, 3, 25), np.linspace(0.4, -0.4, 25)
    *_, last = FullMarcher(lens_setup(), 8, 16).march(launch(y, p), matrix=True)
    *_, back = FullMarcher(lens_setup(Mirrored(LENSES, 14.0)), 8, 16).march(launch(last.y, -last.p), matrix=True)
    np.testing.assert_allclose(back.y, y, atol=1e-6)
    np.testing.assert_allclose(back.p, -p, atol=1e-6)
    np.testing.assert_allclose(back.action, last.action, atol=1e-6)
    turn = np.diag([1.0, -1.0])
    np.testing.assert_allclose(
        turn @ matrix_of(back) @ turn @ matrix_of(last), np.tile(np.eye(2), (25, 1, 1)), atol=1e-4
    )


def test_tangents_are_derivatives():
    setup, d = random_setup(), 1e-5
    y, p = SPREAD, 0.3 * np.cos(SPREAD)
    marcher = FullMarcher(setup, 16).on([5.0])
    (state,) = marcher.march(launch(y, p), matrix=True)
    pairs = ((state.A, state.C, d, 0.0), (state.B, state.D, 0.0, d))
    for a, c, dy, dp in pairs:
        (up,), (down,) = marcher.march(launch(y + dy, p + dp)), marcher.march(launch(y - dy, p - dp))
        ok = (up.status == OK) & (down.status == OK)
        np.testing.assert_allclose(((up.y - down.y) / (2 * d))[ok], a[ok], rtol=1e-3, atol=1e-3)
        np.testing.assert_allclose(((up.p - down.p) / (2 * d))[ok], c[ok], rtol=1e-3, atol=1e-3)


def test_maslov_index_is_the_number_of_sign_changes():
    """Seen on screens forty to the scale, A changes sign as often as the index says on the coarse ones."""
    marcher = FullMarcher(random_setup(length=20.0))
    fine = list(marcher.on(np.linspace(0.5, 20.0, 1561)).march(launch(SPREAD, 0.0)))
    signs = np.array([s.A < 0 for s in fine])
    changes = (signs[1:] != signs[:-1]).sum(axis=0)
    ok = fine[-1].status == OK
    coarse = list(marcher.on([0.5, 20.0]).march(launch(SPREAD, 0.0)))
    count = coarse[-1].maslov - coarse[0].maslov
    assert (count == changes)[ok].mean() > 0.99  # two caustics between two steps go unseen
    assert changes[ok].max() >= 2


def test_small_angles_are_paraxial():
    """A weak lens in the middle: full and paraxial rays part by the second power of its strength, of what it does.

    |p|**2 = 1 - v: dp/dx = -v_y/(2 p_x) = -v_y/2 (1 + O(v, p**2)).
    """
    apart, moved = [], []
    y = np.linspace(-1.5, 1.5, 31)
    for strength in (0.02, 0.01):
        setup = Setup(Lens(strength, 1.0, x=4.0), PlaneWave(), 12.0, 16.0, "absorbing", screens=13)
        *_, full = FullMarcher(setup, 24, 24).march(launch(y, 0.0))
        *_, paraxial = Marcher(setup, 24, 24).march(launch(y, 0.0))
        apart.append(np.abs(full.y - paraxial.y).max())
        moved.append(np.abs(paraxial.y - y).max())
        assert np.abs(full.action - 12.0 - paraxial.action).max() < strength**2
    assert abs(moved[0] / moved[1] - 2) < 0.05
    assert abs(apart[0] / apart[1] - 4) < 0.2


# ---- density and caustics


@pytest.mark.parametrize("sides", ["periodic", "absorbing"])
def test_plane_wave_at_an_angle_keeps_its_intensity(sides):
    """Intensity 1 in the window at 60 degrees, flux cos(angle) per length: open sides do not cut it."""
    setup = Setup(Empty(), PlaneWave(np.pi / 3), 8.0, 12.0, sides)
    density = RayEnsemble(setup, dynamics=FULL).density()
    np.testing.assert_allclose(density.intensity, 1.0, atol=1e-11)
    np.testing.assert_allclose(density.flux, 12.0 * 0.5, rtol=1e-12)


def test_point_source_shines_evenly():
    """Unit flux in an angle: intensity 1/(angle r) on the flat part of the fan, r the distance, at any angle."""
    source = PointSource(-2.0, half_angle=0.95)
    setup = Setup(Empty(), source, 6.0, 40.0, "absorbing", screens=4, cells=640)
    density = RayEnsemble(setup, dynamics=FULL, rays_per_scale=64).density()
    angle = (np.arange(100000) + 0.5) / 100000 * np.arcsin(0.95)
    wide = 2 * np.arcsin(0.95) * (source.fan(np.sin(angle)) ** 2).mean() / source.fan(0.0) ** 2
    x, y = setup.x[:, None], setup.y[None, :]
    flat = np.abs(y) / np.hypot(x + 2, y) < 0.7
    exact = 1 / (wide * np.hypot(x + 2, y))
    np.testing.assert_allclose(
        density.intensity.values[flat], exact[flat], rtol=2e-4
    )  # mean over a cell against middle


def test_beam_sends_less_flux_at_an_angle():
    """The field on x = 0 is given; its flux through x = const goes with cos(angle)."""
    setup = Setup(Empty(), Beam(1.0, angle=0.8), 4.0, 24.0)
    density = RayEnsemble(setup, dynamics=FULL).density()
    np.testing.assert_allclose(density.flux, np.cos(0.8), rtol=1e-6)


def test_caustics_of_the_duct():
    """A flat front in n**2 = 1 - a**2 y**2: dy/dy0 = 0 behind the face, at a place the closed form gives to Newton's rule."""
    a = RATE
    setup = Setup(Duct(a), PlaneWave(), 30.0, 18.0, "absorbing", cells=256)
    found = RayEnsemble(setup, dynamics=FULL, steps_per_scale=16).caustics(rays=641)
    rays, start = FullMarcher(setup, 16, 16), 5.0
    y0 = found.s.values
    (first,) = rays.on([start]).march(launch(y0, 0.0))
    px = first.px
    # y(x) = y1 cos u + p1 sin u/a, u = a (x - x1)/p_x; d/ds with dp_x = -(p dp + a**2 y dy)/p_x
    dpx = -(first.p * first.C + a**2 * first.y * first.A) / px

    def stretch(x):
        u = a * (x - start) / px
        turn = -u / px * dpx
        moved = first.A * np.cos(u) + first.C * np.sin(u) / a
        return moved + (first.p * np.cos(u) - a * first.y * np.sin(u)) / a * turn

    middle = np.abs(y0) < 5.0
    x = found.first_caustic.values
    assert np.isfinite(x[middle]).all()
    slope = (stretch(x + 1e-5) - stretch(x - 1e-5)) / 2e-5
    assert np.abs(stretch(x) / slope)[middle].max() < 2e-4
    assert np.ptp(x[middle]) > 0.1  # the duct's aberration: paraxial rays would all meet at one range


def test_turned_rays_stay_turned():
    setup = random_setup(0.35)
    status = RayEnsemble(setup, dynamics=FULL).trace(400).status.values
    turned = status == TURNED
    assert turned[-1].any()
    assert (turned[1:] >= turned[:-1]).all()
