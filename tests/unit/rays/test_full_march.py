"""Full rays from screen to screen: the kernel against a plain twin, what is handed out, status."""

import numpy as np
import pytest

from branchlab.conventions import FULL
from branchlab.errors import InputError, RangeError
from branchlab.launch import PlaneWave, PointSource, Setup
from branchlab.launch.part import FrontRays
from branchlab.media import Lens, Ramp, RandomMedium
from branchlab.rays import RayEnsemble, full_march
from branchlab.rays.full_march import FullMarcher
from branchlab.rays.march import LEFT, NOT_FINITE, OK, TURNED
from tests.canon import MEDIA, SOURCES, setup_with
from tests.oracles.empty import Empty
from tests.oracles.full_ray_twins import PlainFullRay, TensorSpline


def launch(y, p, dp=0.0):
    y, p = np.broadcast_arrays(np.asarray(y, float), np.asarray(p, float))
    one, zero = np.ones(y.shape), np.zeros(y.shape)
    return FrontRays(y.copy(), y.copy(), p.copy(), zero, one, zero + dp, one)


def walk(setup, y, p, **options):
    return list(FullMarcher(setup).march(launch(y, p), **options))


def plain_spline(marcher):
    """The marcher's own samples through scipy's splines."""
    nx, ny = marcher.table.grid[:2]
    cells = marcher.table.flat.reshape(nx, ny, 6, -1)
    x0, y0, inverse_x, inverse_y = marcher.table.box
    return TensorSpline(cells[:, :, 0, 0], (x0, y0), (1 / inverse_x, 1 / inverse_y))


@pytest.mark.parametrize("matrix", [False, True])
def test_kernel_against_its_plain_twin(matrix):
    setup = setup_with(medium=RandomMedium(0.2, 1.0, seed=7), length=2.0, width=6.0, screens=4)
    marcher = FullMarcher(setup)
    step, face = marcher.table.step, marcher.plane.face
    y, p = 0.4, 0.3
    px = np.sqrt(1 - p**2)
    back = -0.5 * face / px
    tangents = np.array([[0, -back * p / px], [1, back], [0, -p / px], [0, 1]]) * 1.0
    tangents = tangents if matrix else tangents[:, :1]
    ray = PlainFullRay(plain_spline(marcher), step, (-0.5 * face, y + back * p), (px, p), back, tangents)
    for state in marcher.march(launch([y], [p]), matrix=matrix):
        while ray.r[0] + 0.5 * step * ray.p[0] < state.x:
            ray.steps(1)
        y_exact, p_exact, action, px_exact, (a, c) = ray.on_screen(state.x)
        # the twin lands by a root of its step, the kernel by a predicted length and a short free fall
        found = [getattr(state, name)[0] for name in ("y", "p", "action", "px", "A", "C")]
        np.testing.assert_allclose(found, [y_exact, p_exact, action, px_exact, a[0], c[0]], rtol=0, atol=1e-9)
        if matrix:
            np.testing.assert_allclose([state.B[0], state.D[0]], [a[1], c[1]], rtol=0, atol=1e-9)


@pytest.mark.parametrize("matrix", [False, True])
def test_a_state_for_every_screen(matrix):
    setup = setup_with()
    states = walk(setup, np.linspace(-7, 7, 300), 0.5, matrix=matrix)
    assert [s.x for s in states] == list(setup.x)
    for state in states:
        assert all(column.shape == (300,) for column in (*state[1:8], state.px, state.turn))
        assert (state.B is None) == (not matrix)
        assert (state.status == OK).all()


def test_states_may_be_kept_and_screens_come_in_portions(monkeypatch):
    setup = setup_with()
    y = np.linspace(-7, 7, 90)
    at_once = walk(setup, y, 0.2)
    monkeypatch.setattr(full_march, "SCREENS_BYTES", 1)
    portions = walk(setup, y, 0.2)
    for one, other in zip(at_once, portions, strict=True):
        for a, b in zip(one[1:8], other[1:8], strict=True):
            np.testing.assert_array_equal(a, b)


def test_front_tangent_is_the_combination_of_the_matrix():
    setup = setup_with(medium=RandomMedium(0.2, 1.0, seed=7))
    rays = launch(np.linspace(-7, 7, 90), 0.3, dp=0.2)
    marcher = FullMarcher(setup, 16)
    for front, full in zip(marcher.march(rays), marcher.march(rays, matrix=True), strict=True):
        # they differ by the fourth order of the step: the matrix is carried along a flow that keeps its area
        for found, exact in ((front.A, full.A + 0.2 * full.B), (front.C, full.C + 0.2 * full.D)):
            np.testing.assert_allclose(found, exact, rtol=0, atol=1e-3 * np.abs(exact).max())
        np.testing.assert_array_equal(front.y, full.y)


def test_other_screens_show_the_same_rays():
    """A ray does not know where it is looked at."""
    marcher = FullMarcher(setup_with(medium=RandomMedium(0.2, 1.0, seed=7)), 16)
    rays = launch(np.linspace(-7, 7, 90), 0.3)
    *_, last = marcher.march(rays)
    (alone,) = marcher.on([last.x]).march(rays)
    ok = last.status == OK
    np.testing.assert_array_equal(alone.status, last.status)
    np.testing.assert_array_equal(alone.y[ok], last.y[ok])
    *_, near = marcher.on(np.linspace(0, last.x, 117)).march(rays)
    np.testing.assert_array_equal(near.y[ok], last.y[ok])


def test_what_leaves_flies_on_and_what_comes_in_is_not_gone():
    setup = Setup(Empty(), PlaneWave(), 6.0, 8.0, "absorbing")
    edge = 0.5 * setup.window.span
    first, *_, last = walk(setup, [0.0, edge - 1.0, edge + 2.0, -edge - 1.0], [0.0, 0.8, -0.8, 0.8])
    np.testing.assert_array_equal(first.status, [OK, OK, OK, OK])
    np.testing.assert_array_equal(last.status, [OK, LEFT, OK, OK])
    np.testing.assert_allclose(last.y, np.array([0, edge - 1, edge + 2, -edge - 1]) + [0, 8, -8, 8], atol=1e-12)
    np.testing.assert_allclose(last.action, 6.0 / np.sqrt(1 - last.p**2), atol=1e-12)


def test_what_turns_back_or_cannot_travel_is_told():
    """v = x/4 - 1/2 rises to p_x = 0; |p| >= 1 does not travel; both keep their last numbers."""
    setup = Setup(Ramp(slope_x=0.25), PlaneWave(), 3.9, 8.0, screens=40)
    states = walk(setup, [0.0, 0.0, 0.0], [0.0, 0.8, 1.2])
    status = np.array([s.status for s in states])
    assert (status[:, 0] == OK).all()
    x = setup.x
    turn = (1 - 0.64) / 0.25  # there v = 1 - p**2
    np.testing.assert_array_equal(status[:, 1] == TURNED, x > turn)
    assert (status[:, 2] == NOT_FINITE).all()
    y = np.array([s.y for s in states])
    assert np.isfinite(y).all()
    assert (y[x > turn, 1] == y[x < turn, 1][-1]).all()


def test_a_wall_sends_rays_back():
    """v = 2 in the middle of a bump: rays on its axis turn, those beside pass."""
    wall = Lens(-0.999, 1.0, x=3.0) + Lens(-0.999, 1.0, x=3.0)
    last = walk(Setup(wall, PlaneWave(), 6.0, 16.0, "absorbing"), [0.0, 0.1, 5.0], 0.0)[-1]
    np.testing.assert_array_equal(last.status, [TURNED, TURNED, OK])


def test_mean_medium_must_carry_rays():
    marcher = FullMarcher
    setup = Setup(_Offset(1.2), PlaneWave(), 4.0, 8.0)
    with pytest.raises(RangeError, match="must be below 1"):
        marcher(setup)


class _Offset(Empty):
    """v constant."""

    def __init__(self, level):
        super().__init__()
        object.__setattr__(self, "mean", level)

    def rows(self, x, y, *, dx=0, dy=0):
        return super().rows(x, y) + (0.0 if dx or dy else self.mean)


def test_dynamics_is_checked():
    with pytest.raises(InputError, match="dynamics"):
        RayEnsemble(setup_with(), dynamics="fulll")
    assert RayEnsemble(setup_with()).dynamics == "paraxial"


@pytest.mark.parametrize("source", SOURCES, ids=lambda s: type(s).__name__)
@pytest.mark.parametrize("sides", ["periodic", "absorbing"])
def test_every_source_and_result(source, sides):
    """Flux that arrives, turned and left is what was sent, to round-off; every result says which rays it is of."""
    setup = setup_with(medium=RandomMedium(0.15, 1.0, seed=3), source=source, sides=sides, width=20.0)
    rays = RayEnsemble(setup, dynamics=FULL, most_rays=4096)
    density = rays.density()
    total = (density.flux + density.turned_flux + density.lost_flux).values
    np.testing.assert_allclose(total, total[0], rtol=1e-12)
    sent = sum(part.weight * _flux(part.front) for part in rays.parts)
    np.testing.assert_allclose(total, sent, rtol=1e-6)  # sums of other nodes: Gauss in tubes, the middle rule here
    assert (density.turned_flux >= -1e-12).all()
    for result in (density, rays.trace(16), rays.caustics(64), rays.section(3.0, 16)):
        assert result.attrs["model"] == FULL


def _flux(front):
    low, high = front.span
    s = low + (np.arange(20000) + 0.5) * (high - low) / 20000
    return np.sum(front.at(s).amplitude ** 2) * (high - low) / 20000


@pytest.mark.parametrize("medium", MEDIA, ids=lambda m: type(m).__name__)
def test_every_medium(medium):
    setup = setup_with(medium=medium, length=4.0, width=12.0, sides="absorbing")
    last = walk(setup, np.linspace(-4, 4, 64), 0.2, matrix=True)[-1]
    ok = last.status == OK
    assert ok.mean() > 0.9
    np.testing.assert_allclose((last.A * last.D - last.B * last.C)[ok], 1.0, atol=1e-10)


@pytest.mark.parametrize(
    ("medium", "half_angle"), [(Empty(), 1.0), (RandomMedium(0.01, 1.0, seed=1), 0.9)], ids=["empty", "weak"]
)
def test_focus_of_a_source_on_the_entry_is_not_counted(medium, half_angle):
    """A point on x = 0, where free rays meet before they start, is no caustic; to the right angle, in an empty window."""
    rays = RayEnsemble(Setup(medium, PointSource(half_angle=half_angle), 6.0, 12.0), dynamics=FULL)
    traced = rays.trace(64)
    assert (traced.maslov[1:].where(traced.status[1:] == OK, 0) == 0).all()
    found = rays.caustics(400)
    assert found.caustic.size == 0
    assert np.isnan(found.first_caustic).all()
    density = rays.density()
    np.testing.assert_allclose(density.flux + density.turned_flux + density.lost_flux, 1.0, rtol=1e-9)
