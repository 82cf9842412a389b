import numpy as np

from branchlab.launch import PlaneWave, Setup
from branchlab.launch.slab import Slab
from branchlab.media import RandomMedium

MEDIUM = RandomMedium(0.05, 1.0, seed=4)


def test_the_face_adds_before_the_entry_what_it_takes_behind():
    slab = Slab(Setup(MEDIUM, PlaneWave(), 10.0, 8.0))
    x = np.linspace(-1.0, 1.0, 4001)
    sharp = (x > 0) + 0.5 * (x == 0)
    assert abs(np.trapezoid(slab.present(x) - sharp, x)) < 1e-12
    assert slab.present(np.array([-0.5, 0.0, 0.5])).tolist() == [0.0, 0.5, 1.0]


def test_behind_the_face_it_is_the_window_and_beyond_the_exit_the_mean():
    setup = Setup(MEDIUM, PlaneWave(), 10.0, 8.0)
    slab = Slab(setup)
    inside = np.array([0.5, 3.0, 10.0])
    assert np.array_equal(slab.rows(inside, 64), setup.window.rows(inside, 64))
    assert np.array_equal(slab.rows([-0.5, 10.0 + slab.fade], 64), np.full((2, 64), MEDIUM.mean))
