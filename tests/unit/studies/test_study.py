"""A study: its values, its run, what it keeps when something fails or the user stops it."""

import json
import warnings

import numpy as np
import pytest
import xarray as xr

import branchlab as bl
from branchlab.errors import BranchlabWarning, InputError, RangeError, ResourceError
from branchlab.media import Lens, RandomMedium
from branchlab.results import check, load, save, setup_of
from branchlab.studies import Study, default_study, study_of
from tests.small_study import SETUP, small_result, small_study


def test_json_round_trip_of_every_field():
    study = small_study()
    again = Study.from_json(study.to_json())
    assert again == study
    assert again.bands == study.bands
    assert again.fingerprint == study.fingerprint
    for change in ({"threshold": 0.2}, {"realisations": 2}, {"title": "x"}, {"setup": SETUP.with_(length=11.0)}):
        assert study.with_(**change).fingerprint != study.fingerprint


def test_a_number_of_realisations_stands_for_seeds():
    assert small_study(realisations=3).realisations == (0, 1, 2)
    assert small_study(realisations=None).realisations == ()


def test_solved_wavelengths_are_the_nodes():
    assert small_study().solved_wavelengths().size == 6
    shared = small_study(wavelengths=[bl.Band(0.3, 0.4, nodes=3), bl.Band(0.3 / 0.8, 0.1, nodes=3)])
    assert np.isin(0.3, shared.solved_wavelengths())
    assert small_study(wavelengths=0.2).solved_wavelengths().tolist() == [0.2]


def test_result_keeps_the_layout_and_tells_where_it_comes_from():
    result = small_result()
    check(result, "comparison")
    assert result.sizes == {"realisation": 3, "wavelength": 2, "x": 13, "y": 128}
    assert result["realisation"].values.tolist() == [1, 2, 3]
    assert study_of(result) == small_study()
    assert setup_of(result) == SETUP
    assert result.attrs["stopped"] == 0
    assert json.loads(result.attrs["failed"]) == {}
    for name in result.variables:
        assert {"units", "long_name"} <= result[name].attrs.keys(), name


def test_result_equals_the_chain_by_hand():
    """One realisation of the study is what its parts give when they are called one by one."""
    study, result = small_study(), small_result()
    setup = SETUP.with_(medium=RandomMedium(0.1, 1.0, seed=2, box=(16.0, 8.0)))
    solved = study.solved_wavelengths()
    rays = bl.RayEnsemble(setup)
    hand = bl.compare(
        rays.density(),
        bl.ParaxialWave(setup).solve(solved),
        bl.SemiclassicalSum(rays).solve(solved),
        resolution=0.15,
        band=list(study.bands),
    )
    one = result.sel(realisation=2)
    for name in ("mismatch", "removable", "caustic_part", "diffraction", "misplaced_flux", "numerical_error"):
        np.testing.assert_allclose(one[name], hand[name], rtol=0, atol=1e-12, err_msg=name)  # same code, same order


def test_validity_range_can_be_found_again_from_the_result():
    result = small_result()
    again = bl.validity_range(result, threshold=0.15)
    for name in ("reach", "reach_low", "reach_high", "crossed", "reach_band"):
        np.testing.assert_array_equal(result[name], again[name])
    assert bl.verdict(result, again) == result.attrs["verdict"]
    wider = bl.validity_range(result, threshold=0.3)
    assert (wider["reach"] >= again["reach"]).all()


def test_yardsticks_are_those_of_the_medium():
    """kappa = 0.873 k l strength**(2/3) and first caustic 2.395 l strength**(-2/3) in the gaussian family (DESIGN 2).

    Derived from Kulkarny & White, Phys. Fluids 25 (1982) 1770, and the gaussian's moments; three digits given.
    """
    result = small_result()
    k = 2 * np.pi / np.array([0.3, 0.15])
    np.testing.assert_allclose(result["wave_parameter"], 0.873 * k * 0.1 ** (2 / 3), rtol=2e-3)
    assert float(result["mean_first_caustic"]) == pytest.approx(2.395 * 0.1 ** (-2 / 3), rel=2e-3)
    assert small_study(setup=SETUP.with_(medium=Lens(0.1, 1.0, x=2.0)), realisations=None).yardsticks() == {}


def test_scintillation_of_the_result_is_that_of_the_sides():
    setup = small_study().realised(1)
    wave = bl.ParaxialWave(setup).solve(small_study().solved_wavelengths())
    index = bl.scintillation(wave, resolution=0.15).sel(wavelength=0.15, method="nearest")
    np.testing.assert_allclose(
        small_result()["scintillation_wave"].sel(realisation=1, wavelength=0.15), index, atol=1e-12
    )
    assert float(small_result()["scintillation_band"].mean()) < float(small_result()["scintillation_wave"].mean())


def test_without_bands_and_attribution():
    study = small_study(wavelengths=[0.3, 0.15], measures=(), realisations=[1])
    result = study.run()
    assert "diffraction" not in result
    assert "misplaced_flux_band" not in result
    np.testing.assert_allclose(
        result["misplaced_flux"].isel(realisation=0), small_result()["misplaced_flux"].sel(realisation=1), atol=1e-3
    )  # the march takes other grids and steps for other sets of wavelengths: its tolerance
    assert np.isnan(result["reach_low"]).all()


def test_a_medium_without_seeds_has_no_realisations():
    result = small_study(realisations=None, wavelengths=[0.3], measures=()).run()
    assert "realisation" not in result.dims
    assert "one realisation" in result.attrs["verdict"]


def test_progress_rises_to_one():
    told = []
    small_study(realisations=2, wavelengths=[0.3]).run(told.append)
    assert told[-1] == pytest.approx(1.0)
    assert (np.diff(told) >= -1e-12).all()
    assert len(told) > 10


def failing(*seeds, fault):
    """A replacement of `Study.compared` that fails for some seeds and else gives the small study's comparison."""

    def compared(self, seed=None, progress=None, **options):
        if seed in seeds:
            raise fault
        result = small_result().sel(realisation=seed).drop_vars("realisation")
        kept = [name for name in result.data_vars if not name.startswith(("reach", "crossed", "decided"))]
        return result[kept].drop_vars(["wave_parameter", "mean_first_caustic"])

    return compared


@pytest.mark.parametrize("fault", [RangeError("too strong"), ZeroDivisionError("ours")])
def test_a_failed_realisation_does_not_lose_the_others(monkeypatch, fault):
    monkeypatch.setattr(Study, "compared", failing(2, fault=fault))
    with pytest.warns(BranchlabWarning, match=f"1 of 3 realisations failed.*seed 2, {type(fault).__name__}"):
        result = small_study().run()
    assert result["realisation"].values.tolist() == [1, 3]
    assert json.loads(result.attrs["failed"]) == {"2": f"{type(fault).__name__}: {fault}"}
    xr.testing.assert_equal(result["mismatch"], small_result()["mismatch"].sel(realisation=[1, 3]))
    assert "mean of 2 realisations" in result.attrs["verdict"]


def test_if_all_fail_the_first_fault_is_raised(monkeypatch):
    monkeypatch.setattr(Study, "compared", failing(1, 2, 3, fault=RangeError("too strong")))
    with pytest.raises(RangeError, match="too strong"):
        small_study().run()


def test_ctrl_c_keeps_what_is_done(monkeypatch, tmp_path):
    monkeypatch.setattr(Study, "compared", failing(3, fault=KeyboardInterrupt()))
    with pytest.warns(BranchlabWarning, match="stopped after 2 of 3 realisations"):
        result = small_study().run()
    assert result["realisation"].values.tolist() == [1, 2]
    assert load(save(result, tmp_path / "part.nc")).attrs["stopped"] == 1


def test_ctrl_c_before_anything_is_done_goes_through(monkeypatch):
    monkeypatch.setattr(Study, "compared", failing(1, fault=KeyboardInterrupt()))
    with pytest.raises(KeyboardInterrupt):
        small_study().run()


def test_progress_cancels():
    class CancelledError(Exception):
        pass

    def stop(fraction):
        if fraction > 0.4:
            raise CancelledError

    with pytest.raises(CancelledError):
        small_study(wavelengths=[0.3]).run(stop)


def test_memory_is_refused_before_anything_is_computed():
    told = []
    study = small_study(setup=SETUP.with_(cells=1 << 24), resolution=0.15)
    with pytest.raises(ResourceError, match=r"a study of 3 realisations.*GiB are free.*Use fewer realisations"):
        study.run(told.append)
    assert told == []


def test_result_goes_through_a_file(tmp_path):
    again = load(save(small_result(), tmp_path / "result.nc"))
    xr.testing.assert_identical(again, small_result())


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"wavelengths": []}, "wavelengths is empty"),
        ({"wavelengths": [-0.1]}, "wavelength must be positive; got -0.1"),
        ({"wavelengths": [0.1, bl.Band(0.2, 0.1)]}, "numbers or Bands, not both"),
        ({"wavelengths": [0.1, 0.1]}, "wavelengths must differ; got 0.1, 0.1"),
        ({"wavelengths": [bl.Band(0.1, 0.1), bl.Band(0.1, 0.2)]}, "two bands have the centre 0.1"),
        ({"resolution": 0.01}, "resolution 0.01 is below one cell"),
        ({"resolution": 3.0}, "above a quarter of the width"),
        ({"threshold": 1.0}, r"threshold must be in \(0, 1\)"),
        ({"realisations": [1, 1]}, "the seed 1 stands there twice"),
        ({"realisations": 0}, "at least 1; got 0"),
        ({"realisations": [-1]}, "at least 0; got -1"),
        ({"measures": ["atribution"]}, "Did you mean 'attribution'"),
        ({"setup": "x"}, "setup must be a Setup; got str"),
        ({"setup": SETUP.with_(medium=Lens(0.1, 1.0, x=2.0))}, "Lens is not random"),
    ],
)
def test_slips_are_refused(change, message):
    with pytest.raises(InputError, match=message):
        small_study(**change)


def test_study_of_something_else():
    with pytest.raises(InputError, match="no attribute 'study'"):
        study_of(xr.Dataset())


def test_default_is_the_scenario_it_tells():
    study = default_study()
    assert study.note.startswith("Invented data")
    assert "not for navigation" in study.note
    assert study.setup.medium.strength == pytest.approx(2 * 30 / 1500)  # v = 1 - (c0/c)**2, first order
    np.testing.assert_allclose(study.centres, [1.5, 0.75, 0.3])  # mm: 1500 m/s over 1, 2, 5 MHz
    assert study.setup.window.fade == 0.0  # the block repeats after its width: no seam
    assert len(study.realisations) >= 6
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        assert Study.from_json(study.to_json()) == study


@pytest.mark.parametrize(
    ("source", "method"),
    [
        (bl.PlaneWave(), "frozen-gaussian"),
        (bl.Beam(0.6), "herman-kluk"),
        (bl.PointSource(half_angle=0.4), "herman-kluk"),
    ],
)
def test_small_sources_are_summed_over_phase_space(source, method):
    """Frozen Gaussians rebuild the entry field of a beam of four wavelengths, or of a point, to 15 % at best.

    On the first screen, x = 0.24 z_c, the medium has hardly acted, so a sum over rays must hold nearly all of the wave:
    what frozen Gaussians leave there is their own error, no diffraction.
    """
    setup = bl.Setup(RandomMedium(0.05, 1.0, seed=3), source, 6.0, 12.0, screens=7)
    result = Study(setup, [0.15], resolution=0.2, model="paraxial").run()
    assert result.attrs["sum_method"] == method
    assert result["trusted"].all()
    assert np.abs(result["misplaced_diffraction"]).max() < 0.02
    rays = bl.RayEnsemble(setup)
    frozen = bl.SemiclassicalSum(rays).solve(0.15)
    if method == "frozen-gaussian":
        assert "Herman-Kluk" not in result.attrs["verdict"]
        assert "frozen_entry_error" not in result.attrs
        return
    assert result.attrs["frozen_entry_error"] == pytest.approx(float(frozen.entry_error.max()))
    assert "Herman-Kluk was taken because frozen Gaussians would" in result.attrs["verdict"]
    with pytest.warns(BranchlabWarning, match="partly an error of the sum"):
        other = bl.compare(rays.density(), bl.ParaxialWave(setup).solve(0.15), frozen, resolution=0.2)
    assert result["share_diffraction"][0, 1] < 2e-3 < 2e-2 < other["share_diffraction"][0, 1]
    assert result["share_diffraction"].max() < 0.5 * other["share_diffraction"].max()


def test_the_sum_is_one_method_in_all_realisations():
    """A beam near the limit: frozen Gaussians rebuild it to 2.7 % in the first realisation, to 3.4 % in the second."""
    seeds = (8, 0)
    study = Study(
        bl.Setup(RandomMedium(0.05, 1.0, seed=3), bl.Beam(1.5), 3.0, 12.0, screens=4),
        [0.15],
        resolution=0.2,
        model="paraxial",
        realisations=seeds,
    )
    assert [study.compared(seed).attrs["sum_method"] for seed in seeds] == ["frozen-gaussian", "herman-kluk"]
    told = []
    result = study.run(told.append)
    assert result.attrs["sum_method"] == "herman-kluk"
    assert result["realisation"].values.tolist() == list(seeds)
    assert result["entry_error"].max() < 1e-5
    assert told == sorted(told)
    assert told[-1] == 1.0


def test_the_embedded_study_sums_frozen_gaussians():
    """Its plane wave is a front without end: its entry field is rebuilt to round-off. One realisation, few screens."""
    study = default_study()
    short = study.setup.with_(length=12.0, screens=4)
    result = study.with_(setup=short, realisations=[1], wavelengths=study.wavelengths[-1], measures="attribution").run()
    assert result.attrs["sum_method"] == "frozen-gaussian"
    assert result["entry_error"].max() < 1e-6
    assert "frozen Gaussians on the launching front" in result.attrs["verdict"]


def test_the_full_model_tells_the_paraxial_error_beside_the_mismatch():
    """Full rays with the full wave; the paraxial error of the wave grows along x and is above that at its entry."""
    setup = bl.Setup(RandomMedium(0.1, 1.0, seed=1, box=(16.0, 8.0)), bl.PlaneWave(), 8.0, 8.0, screens=9, cells=128)
    study = Study(setup, [0.3], resolution=0.15)
    assert study.model == "full"
    result = study.run()
    check(result, "comparison")
    assert result.attrs["model"] == result.attrs["wave_model"] == "full"
    error = result["paraxial_error"].values[0]
    assert error[-1] > 3 * error[1]
    assert result["paraxial_error_rays"][-1] > result["paraxial_error_rays"][1]
    assert "the paraxial rays up to" in result.attrs["verdict"]
    thin = study.with_(model="paraxial").run()
    assert "paraxial_error" not in thin
    assert float(np.abs(thin["misplaced_flux"] - result["misplaced_flux"]).max()) > 1e-3
