"""Duct, lens and ramp: closed forms and slips."""

import math

import numpy as np
import pytest

from branchlab.errors import InputError
from branchlab.media import Duct, Lens, Ramp

Y = np.array([-1.7, -0.2, 0.0, 0.9, 2.4])


def test_closed_forms():
    assert np.allclose(Duct(0.2, y=0.5).rows([3.0], Y)[0], 0.04 * (Y - 0.5) ** 2, rtol=1e-14)
    index = 1.0 / np.cosh(0.3 * Y)
    assert np.allclose(Duct(0.3, profile="sech").rows([3.0], Y)[0], 1.0 - index**2, rtol=1e-13, atol=1e-16)
    r2 = (3.0 - 1.0) ** 2 + (Y - 0.5) ** 2
    assert np.allclose(Lens(0.2, 1.5, x=1.0, y=0.5).rows([3.0], Y)[0], -0.2 * np.exp(-r2 / 2.25), rtol=1e-14)
    assert np.allclose(Ramp(slope_x=0.01, slope_y=-0.02).rows([3.0], Y)[0], 0.03 - 0.02 * Y, rtol=1e-14)


def test_aperture_leaves_the_parabola_and_then_flattens():
    duct, free = Duct(0.2, y=0.5, half_aperture=2.0), Duct(0.2, y=0.5)
    inside = 0.5 + np.linspace(-2.0, 2.0, 21)
    for order in (0, 1, 2):
        assert np.array_equal(duct.rows([0.0], inside, dy=order), free.rows([0.0], inside, dy=order))
        beyond = duct.rows([0.0], [-3.6, 4.6, 30.0], dy=order)
        assert np.allclose(beyond, duct.mean if order == 0 else 0.0, atol=1e-15)
    assert duct.mean == pytest.approx((1.5 * 0.2 * 2.0) ** 2)
    rising = duct.rows([0.0], np.linspace(0.5, 6.0, 200))[0]
    assert (np.diff(rising) >= -1e-15).all()
    assert duct.scale == pytest.approx(2.0 / 3.0)


SLIPS = {
    "rate": (lambda: Duct(0.0), "rate must be positive; got 0.0"),
    "profile": (lambda: Duct(0.1, profile="sec"), "profile 'sec' is not known.*mean 'sech'"),
    "aperture of v > 1": (lambda: Duct(0.5, half_aperture=2.0), r"lets v reach 2.25; .* below 2/\(3 rate\) = 1.333"),
    "aperture of sech": (
        lambda: Duct(0.5, profile="sech", half_aperture=1.0),
        "half_aperture belongs to the parabolic",
    ),
    "opaque lens": (lambda: Lens(-1.0, 1.0, x=0.0), r"strength must be in \(-1, inf"),
    "lens without place": (lambda: Lens(0.1, 1.0), "missing a required .*'x'"),
    "radius": (lambda: Lens(0.1, math.nan, x=0.0), "radius must be positive; got nan"),
    "no ramp": (lambda: Ramp(), "needs slope_x or slope_y other than 0"),
}


@pytest.mark.parametrize("slip", SLIPS)
def test_slips_are_refused(slip):
    build, words = SLIPS[slip]
    with pytest.raises(InputError, match=words):
        build()


def test_scales_of_plain_media():
    assert Lens(0.1, 1.5, x=0.0).scale == 1.5
    assert Duct(0.1).scale == pytest.approx(5.0)
    assert Ramp(slope_x=0.03, slope_y=0.04).scale == pytest.approx(5.0)
    assert (Duct(0.1) + Ramp(slope_y=0.1)).scale == pytest.approx(2.5)
