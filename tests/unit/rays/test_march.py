"""Marching from screen to screen: what is handed out, status, refusals."""

import numpy as np
import pytest

from branchlab.errors import RangeError, ResourceError
from branchlab.launch import PlaneWave, Setup
from branchlab.launch.part import FrontRays
from branchlab.media import Lens, RandomMedium
from branchlab.rays import march, table
from branchlab.rays.march import LEFT, NOT_FINITE, OK, TURNED, Marcher, refuse_turned
from tests.canon import MEDIA, setup_with
from tests.oracles.empty import Empty


def launch(y, p):
    y, p = np.broadcast_arrays(np.asarray(y, float), np.asarray(p, float))
    one, zero = np.ones(y.shape), np.zeros(y.shape)
    return FrontRays(y.copy(), y.copy(), p.copy(), zero, one, zero, one)


def walk(setup, y, p, **options):
    return list(Marcher(setup).march(launch(y, p), **options))


@pytest.mark.parametrize("matrix", [False, True])
def test_a_state_for_every_screen_the_entry_first(matrix):
    setup = setup_with()
    states = walk(setup, np.linspace(-7, 7, 300), 0.02, matrix=matrix)
    assert [s.x for s in states] == list(setup.x)
    for state in states:
        assert all(column.shape == (300,) for column in state[1:8])
        assert (state.B is None) == (not matrix)
    np.testing.assert_array_equal(states[0].y, np.linspace(-7, 7, 300))
    assert (states[0].A == 1).all()
    assert (states[0].status == OK).all()


def test_states_may_be_kept():
    """What is handed out does not change when the march goes on."""
    marcher = Marcher(setup_with())
    kept, copies = [], []
    for state in marcher.march(launch(np.linspace(-7, 7, 100), 0.0)):
        kept.append(state)
        copies.append(state.y.copy())
    for state, copy in zip(kept, copies, strict=True):
        np.testing.assert_array_equal(state.y, copy)


def test_batches_of_screens_do_not_matter(monkeypatch):
    setup, y = setup_with(length=12.0), np.linspace(-7, 7, 600)
    together = walk(setup, y, 0.0)
    monkeypatch.setattr(march, "SCREENS_BYTES", 1)
    apart = walk(setup, y, 0.0)
    for one, other in zip(together, apart, strict=True):
        np.testing.assert_array_equal(np.array(one[1:8]), np.array(other[1:8]))


@pytest.mark.parametrize("medium", MEDIA, ids=lambda m: type(m).__name__)
def test_every_medium_carries_rays(medium):
    """Symplectic and finite, periodic or not."""
    for sides in ("periodic", "absorbing"):
        setup = setup_with(medium=medium, sides=sides, length=5.0, width=12.0)
        last = walk(setup, np.linspace(-5, 5, 64), 0.0, matrix=True)[-1]
        size = last.A**2 + last.B**2 + last.C**2 + last.D**2
        assert (np.abs(last.A * last.D - last.B * last.C - 1) < 1e-12 * size).all()


def test_status_and_where_it_begins():
    setup = Setup(Empty(), PlaneWave(), 10.0, 16.0, "absorbing", screens=11)
    y, p = [0.0, 0.0, 7.0, np.nan], [0.1, 1.2, 0.9, 0.0]
    states = walk(setup, y, p)
    np.testing.assert_array_equal(states[0].status, [OK, TURNED, OK, NOT_FINITE])
    np.testing.assert_array_equal(states[-1].status, [OK, TURNED, LEFT, NOT_FINITE])
    gone = next(s.x for s in states if s.status[2] == LEFT)
    assert gone == np.ceil((setup.window.span / 2 - 7.0) / 0.9)


def test_nothing_leaves_periodic_sides():
    states = walk(Setup(Empty(), PlaneWave(), 40.0, 16.0), 0.0, 0.9)
    assert states[-1].status[0] == OK
    assert states[-1].y[0] == pytest.approx(36.0)  # not wrapped


def test_few_turned_rays_are_told_not_refused():
    setup = Setup(Empty(), PlaneWave(), 2.0, 16.0)
    *_, last = Marcher(setup).march(launch(np.zeros(200), np.r_[1.1, np.zeros(199)]))
    refuse_turned(last)  # 0.5 % of the flux
    with pytest.raises(RangeError, match="10 % of the flux .* must stay below 1.* at most 1 %"):
        refuse_turned(last, np.r_[199 / 9, np.ones(199)])


def test_turned_rays_are_refused_with_angle_and_place():
    setup = setup_with(medium=RandomMedium(0.25, 1.0, seed=7), length=20.0)
    last = walk(setup, np.linspace(-8, 8, 256), 0.0)[-1]
    with pytest.raises(RangeError, match=r"steepest: p = -?\d\.\d+ at y = .*; rms angle \d\d degrees"):
        refuse_turned(last)


def test_v_above_one_is_refused_with_its_place():
    wall = Lens(-0.9, 1.0, x=3.0, y=2.0) + Lens(-0.4, 1.0, x=3.0, y=2.0)
    with pytest.raises(RangeError, match=r"v = 1\.\d+ at x = [23]\.\d+, y = [12]\.\d+; rays exist only where v < 1"):
        walk(setup_with(medium=wall), 0.0, 0.0)


def test_a_table_that_does_not_fit_is_refused_before_it_is_made(monkeypatch):
    monkeypatch.setattr("branchlab.errors.available_memory", lambda: 2**18)
    with pytest.raises(ResourceError, match="rays' table of .* steps .* GiB.*Use a smaller window"):
        _ = Marcher(setup_with()).table


def test_tables_resolve_the_taper_of_the_window():
    """A medium smoother than the window's own taper gets a grid for the taper."""
    setup = setup_with(medium=Lens(0.01, 40.0, x=3.0), sides="absorbing")
    made = table.KickTable(setup, 2)
    pitch = setup.window.span / made.cells
    assert pitch <= setup.window.fade / 24
    assert made.cells & (made.cells - 1) == 0
