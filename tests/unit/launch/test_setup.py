"""Setup and window: grids, sides, and every geometry that does not fit is refused with its number."""

import numpy as np
import pytest

from branchlab.errors import InputError, RangeError, ResourceError
from branchlab.launch import Beam, FieldSource, PlaneWave, PointSource, Setup
from branchlab.launch.setup import smooth_number
from branchlab.media import Ramp, RandomMedium
from branchlab.values import ValueObject
from tests.canon import SOURCES, setup_with


def test_grids_span_the_window():
    setup = setup_with(length=6.0, width=16.0)
    assert (setup.x[0], setup.x[-1]) == (0.0, 6.0)
    assert np.diff(setup.x).max() <= 0.5 + 1e-12
    assert setup.cell <= 1 / 16
    assert np.isclose(setup.y[0] - setup.cell / 2, -8.0)
    assert np.isclose(setup.y[-1] + setup.cell / 2, 8.0)


@pytest.mark.parametrize("source", SOURCES, ids=lambda s: type(s).__name__)
def test_json_round_trip(source):
    setup = setup_with(source=source, length_unit="mm", screens=9)
    assert ValueObject.from_json(setup.to_json()) == setup


def test_smooth_numbers_are_the_smallest(rng):
    def is_smooth(n):
        for factor in (2, 3, 5):
            while n % factor == 0:
                n //= factor
        return n == 1

    for n in [1, 2, 3, *rng.integers(1, 5000, 40)]:
        found = smooth_number(int(n))
        assert is_smooth(found)
        assert not any(is_smooth(m) for m in range(int(n), found))


@pytest.mark.parametrize("sides", ["periodic", "absorbing"])
@pytest.mark.parametrize("dx", [0, 1])
def test_windowed_medium_is_smooth_and_periodic(sides, dx):
    """Its spectrum at the ray grid's end is below 1e-6 of its largest: no jump, no kink at the seam."""
    window = setup_with(sides=sides).window
    n = 2 * round(8 * window.span)
    spectrum = np.abs(np.fft.rfft(window.rows([1.0, 2.0], n, dx=dx), axis=1))
    assert spectrum[:, -n // 20 :].max() < 1e-6 * spectrum.max()


def test_medium_is_untouched_inside():
    setup = setup_with(sides="absorbing")
    window = setup.window
    n = 512
    y = window.points(n)
    inside = np.abs(y) < 8.0
    assert np.array_equal(window.rows([1.0], n)[:, inside], setup.medium.rows([1.0], y[inside]))
    assert (window.absorber(y)[inside] == 0).all()
    assert window.absorber(y).max() > 0.99


def test_seam_keeps_the_variance():
    """Over many realisations the variance inside the seam is that outside (sampling error of 400 draws: 7 %)."""
    inside, outside = [], []
    for seed in range(400):
        window = setup_with(medium=RandomMedium(0.1, 1.0, seed)).window
        v = window.rows([3.0], 64)[0]
        seam = window.points(64) > 8.0 - window.fade
        inside.append((v[seam] ** 2).mean())
        outside.append((v[~seam] ** 2).mean())
    assert np.mean(inside) == pytest.approx(0.01, rel=0.12)
    assert np.mean(outside) == pytest.approx(0.01, rel=0.05)


def test_a_medium_that_repeats_needs_no_seam():
    setup = setup_with(medium=RandomMedium(0.1, 1.0, 3, box=(32.0, 16.0)))
    assert setup.window.fade == 0
    n = 256
    assert np.allclose(setup.window.rows([1.0], n), setup.medium.rows([1.0], setup.window.points(n) + 16.0), atol=1e-12)


def test_a_medium_that_does_not_depend_on_y_needs_no_seam():
    ramp = Ramp(slope_x=0.02)
    setup = setup_with(medium=ramp)
    assert setup.window.fade == 0
    assert np.abs(setup.window.rows([3.0], 64) - 0.06).max() < 1e-15
    both = setup_with(medium=ramp + RandomMedium(0.1, 1.0, 3, box=(32.0, 16.0)))
    assert both.window.fade == 0
    assert setup_with(medium=Ramp(slope_x=0.02, slope_y=0.001)).window.fade > 0


def test_a_gentle_medium_has_cells_enough():
    assert setup_with(medium=Ramp(slope_x=0.001)).y.size >= 64


@pytest.mark.parametrize(("name", "what"), [("cells", "transverse cells"), ("screens", "screens")])
def test_an_axis_that_does_not_fit_is_refused(name, what):
    with pytest.raises(ResourceError, match=rf"1e\+15 {what} .* GiB are free.*Use fewer {name}"):
        setup_with(**{name: 10**15})


@pytest.mark.parametrize("sides", ["periodic", "absorbing"])
def test_cells_line_up_with_the_box(sides):
    setup = setup_with(sides=sides)
    assert np.isclose(setup.cells_in_span() * setup.cell, setup.window.span, rtol=1e-12)
    assert np.isclose((setup.window.pad / setup.cell) % 1.0, 0.0, atol=1e-9) or np.isclose(
        (setup.window.pad / setup.cell) % 1.0, 1.0, atol=1e-9
    )
    k, angle = 60.0, 0.7
    n = setup.fine_points(k, angle)
    assert n % setup.cells_in_span() == 0
    assert setup.window.span / n <= np.pi / (k * angle)


@pytest.mark.parametrize(
    ("change", "error", "message"),
    [
        ({"length": 200.0}, InputError, r"larger than the random medium's super-box of 128 x 64.*box=\(200, 64\)"),
        ({"width": -1}, InputError, "width must be positive; got -1"),
        ({"sides": "periodical"}, InputError, "Did you mean 'periodic'"),
        ({"screens": 1}, InputError, "whole number of at least 2; got 1"),
        ({"cells": 3.5}, InputError, "cells must be a whole number"),
        ({"source": 3}, InputError, "source must be a Source; got int"),
        ({"medium": PlaneWave()}, InputError, "medium must be a Medium; got PlaneWave"),
        ({"source": Beam(7.0)}, RangeError, "needs .y. <= 21.*window ends at 8.*wider window"),
        ({"source": PointSource(-40.0)}, RangeError, "lights .y. <= 12.*window ends at 8"),
        ({"source": FieldSource(np.linspace(-9, 9, 9))}, RangeError, "reach from -9 to 9.*window"),
        ({"lenght": 3.0}, InputError, "Did you mean 'length'"),
    ],
)
def test_what_does_not_fit_is_refused(change, error, message):
    with pytest.raises(error, match=message):
        setup_with().with_(**change)


def test_angle_scout_is_right_for_free_space_and_order_of_magnitude_right_in_a_medium():
    weak = setup_with(medium=RandomMedium(1e-9, 1.0, 1), source=PointSource(half_angle=0.25))
    assert weak.angle_bound() == pytest.approx(0.25, rel=1e-6)
    # rms angle after 20 l: strength * sqrt(2 sqrt(pi) * 20 / 4); the largest of ~20 independent rays is 2 to 5 rms
    rms = 0.05 * np.sqrt(np.sqrt(np.pi) * 20 / 2)
    found = Setup(RandomMedium(0.05, 1.0, 1), PlaneWave(), 20.0, 32.0).angle_bound()
    assert 2 * rms < found < 6 * rms


def test_turning_rays_are_refused():
    with pytest.raises(RangeError, match=r"transverse momentum of .*\|p\| must stay below 1"):
        Setup(RandomMedium(300.0, 1.0, 1), PlaneWave(), 20.0, 16.0).angle_bound()
