"""Inversion of a front on a grid against a root finder, and the bookkeeping of branches, folds and indices."""

import numpy as np

from branchlab.semiclassics.branches import find_branches
from branchlab.semiclassics.manifold import Line, Manifold
from tests.oracles import sum_twins as twins

TAU = 2.0


def sine_front(rays=400, shift=0.0, tau=TAU, closed=True):
    """A sinusoidal front after unit distance in empty space: three branches between its folds."""
    ds = 2 * np.pi / rays
    s = -np.pi + (np.arange(rays) + 0.5) * ds
    c, p = np.cos(s - shift), -tau * np.sin(s - shift)
    a = 1 - tau * c
    return Manifold(s + p, p, tau * c + 0.5 * p * p, a, -tau * c, (a < 0) * 1.0, np.ones(rays), ds, closed * 2 * np.pi)


def test_landings_equal_those_of_a_root_finder():
    front = sine_front(60, closed=False)
    line = Line(-4.0, 0.11, 73, False)
    found = find_branches(front, line)
    for column in range(line.n):
        expected = twins.landings(front.y, front.A, front.ds, line.points[column])
        here = found.column == column
        assert here.sum() == expected.size
        # the same cubic: round-off of the inversion, amplified by 1/slope
        s = -np.pi + (expected + 0.5) * front.ds
        size = np.sort(1 / np.sqrt(np.abs(1 - TAU * np.cos(s))))
        # dy/ds of the cubic differs from the exact one by O(ds**3)
        np.testing.assert_allclose(np.sort(found.size[here]), size, rtol=0.05)


def test_every_point_of_a_closed_front_is_reached_an_odd_number_of_times():
    for shift in np.linspace(0, 6, 13):  # the seam wanders through the folds
        front, line = sine_front(500, shift), Line(-np.pi, 2 * np.pi / 240, 240, True)
        found = find_branches(front, line)
        times = np.bincount(found.column % line.n, minlength=line.n)
        assert set(times) == {1, 3}
        assert found.folds.shape[0] == 2
        assert not found.torn.any()
        # columns of one branch are consecutive, and each is found again
        index, there = found.find(found.branch, found.column)
        assert there.all()
        np.testing.assert_array_equal(index, np.arange(index.size))


def test_fold_place_of_the_sinusoidal_screen():
    # X_c = sqrt(tau**2 - 1) - arccos(1/tau): thin-screen geometry (0.6848533 for tau = 2)
    front, line = sine_front(1000), Line(-np.pi, 2 * np.pi / 240, 240, True)
    folds = find_branches(front, line).folds
    np.testing.assert_allclose(np.sort(folds[:, 1]), [-0.6848532563722796, 0.6848532563722796], atol=1e-9)


def test_a_branch_between_two_rays_gets_its_index_from_the_fold():
    coarse = sine_front(7)  # one ray or none on the middle branch
    found = find_branches(coarse, Line(-np.pi, 2 * np.pi / 240, 240, True))
    late = found.maslov[found.branch]
    assert set(late) <= {0, 1}
    assert (late == 1).any()


def test_missing_rays_interrupt_the_front():
    front = sine_front(400, closed=False)
    y = front.y.copy()
    y[180:220] = np.nan
    found = find_branches(front._replace(y=y), Line(-4.0, 0.05, 160, False))
    whole = find_branches(front, Line(-4.0, 0.05, 160, False))
    assert 0 < found.column.size < whole.column.size
    assert np.isfinite(found.path).all()
    assert not found.torn.any()


def test_the_action_gap_shows_a_front_that_is_too_coarse():
    # closure of S against int p dy is of fourth order in the step
    gaps = [np.abs(find_branches(sine_front(n), Line(-np.pi, 0.1, 60, True)).gaps).max() for n in (50, 100, 200)]
    assert 12 < gaps[0] / gaps[1] < 40
    assert 12 < gaps[1] / gaps[2] < 40
