"""The paraxial error: what it compares, what it recommends, where paraxial rays are refused."""

import numpy as np
import pytest

import branchlab as bl
from branchlab.errors import InputError
from branchlab.results import check
from branchlab.studies.model_error import model_gap, same_entry


def setup_of(strength, *, length=8.0, source=None, sides="periodic", width=8.0):
    medium = bl.RandomMedium(strength, 1.0, seed=1, box=(16.0, 8.0))
    return bl.Setup(medium, source or bl.PlaneWave(), length, width, sides, screens=9, cells=128)


def test_a_weak_medium_is_paraxial_and_a_strong_one_is_not():
    weak, strong = (bl.paraxial_error(setup_of(s), 0.31, resolution=0.2) for s in (0.01, 0.15))
    for result in (weak, strong):
        check(result, "paraxial error")
        assert (result.misplaced_flux[0, 1:] > 0).all()
    assert not weak.crossed.any()
    assert float(weak.misplaced_flux.max()) < 0.01
    assert "the paraxial model serves: it misplaces at most" in weak.attrs["recommendation"]
    assert strong.crossed.all()
    assert 0 < float(strong.reach[0]) < 8
    assert "beyond, it misplaces up to" in strong.attrs["recommendation"]
    assert "use the full model" in strong.attrs["recommendation"]
    assert float(strong.misplaced_flux_rays[-1]) > 10 * float(weak.misplaced_flux_rays[-1])


def test_the_wave_and_its_rays_agree_on_the_error():
    """At a wavelength much shorter than the medium's structure the models part alike in the wave and in the rays."""
    result = bl.paraxial_error(setup_of(0.1, length=4.0), 0.051, resolution=0.2)
    ratio = result.misplaced_flux[0, 3:] / result.misplaced_flux_rays[3:]
    assert float(abs(np.log(ratio)).max()) < np.log(1.5)


def test_a_plane_wave_between_absorbing_sides_enters_both_models_alike():
    setup = setup_of(0.05, sides="absorbing")
    other = same_entry(setup)
    assert isinstance(other.source, bl.FieldSource)
    k, y = np.array([20.0]), setup.y
    ours, theirs = (one.parts()[0].entry(y, k) for one in (setup, other))
    assert np.abs(ours - theirs).max() < 1e-6
    assert same_entry(setup_of(0.05)).source == bl.PlaneWave()
    entry = bl.paraxial_error(setup, 0.31, resolution=0.2).misplaced_flux[0, 0]
    assert float(entry) < 0.01


def test_where_paraxial_rays_are_refused_the_waves_are_still_compared():
    setup = setup_of(0.4, length=12.0)
    result = bl.paraxial_error(setup, 0.31, resolution=0.2)
    assert result.misplaced_flux_rays.isnull().all()
    assert "paraxial rays are refused here" in result.attrs["recommendation"]
    assert result.crossed.all()


def test_models_must_come_in_order():
    setup = setup_of(0.05, length=2.0)
    rays, wave = bl.RayEnsemble(setup).density(), bl.ParaxialWave(setup).solve(0.31)
    with pytest.raises(InputError, match=r"models \(paraxial, full\), in this order; got .*paraxial.*paraxial"):
        model_gap((rays, wave), (rays, wave), resolution=0.2, threshold=0.05)
