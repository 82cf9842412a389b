"""Refinement of a launching front."""

import numpy as np
import pytest

from branchlab.errors import ResourceError
from branchlab.launch import Beam, FieldSource, PlaneWave, PointSource
from branchlab.media import RandomMedium
from branchlab.rays.front import TracedFront
from branchlab.rays.march import Marcher
from tests.canon import SOURCES, setup_with

WILD = {"medium": RandomMedium(0.1, 1.0, seed=7), "length": 16.0}


def front_of(setup, first_rays=64, tolerance=0.03, most_rays=1 << 14):
    return TracedFront(setup.parts()[0], Marcher(setup), first_rays, tolerance, most_rays)


def sagitta(front):
    """Largest sagitta of each tube over the screens, by a plain formula."""
    steps, y, stretch = front.steps, front.y, front.A
    if front.lap:
        y = np.concatenate([y, y[:, :1] + front.lap], axis=1)
        stretch = np.concatenate([stretch, stretch[:, :1]], axis=1)
    chord = np.diff(y, axis=1)
    bend = np.abs(stretch[:, :-1] * steps - chord) + np.abs(stretch[:, 1:] * steps - chord)
    return bend.max(axis=0)


def test_no_tube_bends_more_than_the_tolerance():
    front = front_of(setup_with(**WILD))
    assert sagitta(front).max() <= 0.03
    assert 1000 < front.s.size < 1 << 14
    assert (np.diff(front.s) > 0).all()


def test_refined_rays_are_those_traced_alone():
    setup = setup_with(**WILD)
    front = front_of(setup)
    some = np.arange(0, front.s.size, 37)
    for i, state in enumerate(Marcher(setup).march(setup.parts()[0].front.at(front.s[some]))):
        np.testing.assert_array_equal(front.y[i, some], state.y)
        np.testing.assert_array_equal(front.A[i, some], state.A)


def test_when_rays_run_out_the_worst_tubes_come_first():
    setup = setup_with(**WILD)
    short, full = front_of(setup, most_rays=500), front_of(setup)
    assert short.s.size == 500
    even = front_of(setup, first_rays=500, tolerance=1e9)
    assert np.quantile(sagitta(short), 0.95) < 0.5 * np.quantile(sagitta(even), 0.95)
    assert np.isin(short.s, full.s).all()


def test_closed_and_open_fronts():
    closed = front_of(setup_with())
    assert closed.lap == 16.0
    assert closed.steps.size == closed.s.size
    assert abs(closed.steps.sum() - 16.0) < 1e-12
    opened = front_of(setup_with(source=PointSource(-1.0, 0.5), sides="absorbing"))
    assert opened.lap == 0
    assert opened.steps.size == opened.s.size - 1


@pytest.mark.parametrize("source", SOURCES, ids=lambda s: type(s).__name__)
def test_tubes_carry_the_flux_of_the_source(source):
    setup = setup_with(source=source, sides="absorbing" if isinstance(source, (PointSource, Beam)) else "periodic")
    part = setup.parts()[0]
    s = np.linspace(*part.front.span, 200_001)
    exact = np.trapezoid(part.front.at(s).amplitude ** 2, s)
    np.testing.assert_allclose(front_of(setup).tube_flux.sum(), exact, rtol=1e-6)


def test_tubes_beyond_open_sides_are_not_refined():
    """Rays sent far out of the window meet nothing that is seen."""
    y = np.linspace(-8, 8, 257)
    inside = setup_with(source=PlaneWave(), sides="absorbing", **WILD)
    outwards = setup_with(source=FieldSource(y, 1.0, 0.35 * y**2 / 16), sides="absorbing", **WILD)
    few, many = front_of(outwards), front_of(inside)
    assert few.s.size < many.s.size


def test_half_of_the_rays():
    setup = setup_with()
    front = front_of(setup)
    half = front.halved(Marcher(setup))
    np.testing.assert_array_equal(half.s, front.s[::2])
    np.testing.assert_array_equal(half.y, front.y[:, ::2])
    opened = front_of(setup_with(source=Beam(1.5), sides="absorbing"), first_rays=65)
    half = opened.halved(Marcher(setup_with(source=Beam(1.5), sides="absorbing")))
    assert half.s[-1] == opened.s[-1]  # an open front keeps its last ray
    np.testing.assert_allclose(half.tube_flux.sum(), opened.tube_flux.sum(), rtol=1e-6)


def test_a_front_that_does_not_fit_is_refused_before_it_is_traced(monkeypatch):
    setup = setup_with()
    marcher = Marcher(setup)
    _ = marcher.table
    monkeypatch.setattr("branchlab.errors.available_memory", lambda: 2**20)
    with pytest.raises(ResourceError, match="front of up to 16384 rays on 13 screens .* smaller most_rays"):
        TracedFront(setup.parts()[0], marcher, 64, 0.03, 1 << 14)
