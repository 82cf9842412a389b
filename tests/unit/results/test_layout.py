"""The layout check lists every fault; what is saved is loaded equal."""

import numpy as np
import pytest
import xarray as xr

from branchlab.errors import InputError
from branchlab.results import check, dataset, load, provenance, save
from branchlab.results.layout import faults
from tests.canon import SOURCES, setup_with


def density(setup=None):
    setup = setup or setup_with()
    nx, ny = setup.x.size, setup.y.size
    curves = {name: (("x",), np.zeros(nx)) for name in ("flux", "lost_flux", "unresolved_flux", "numerical_error")}
    return dataset(
        "density",
        {"intensity": (("x", "y"), np.ones((nx, ny))), **curves},
        {"x": (("x",), setup.x), "y": (("y",), setup.y)},
        provenance(setup, model="paraxial"),
    )


def test_units_follow_setup_and_source():
    plane = density(setup_with(length_unit="mm"))
    assert (plane.x.units, plane.intensity.units, plane.flux.units) == ("mm", "1", "mm")
    point = density(setup_with(length_unit="mm", source=SOURCES[2]))
    assert (point.intensity.units, point.flux.units) == ("mm-1", "1")


def test_every_fault_is_listed():
    wrong = density().drop_vars("flux").rename(intensity="brightness")
    del wrong.brightness.attrs["units"], wrong.attrs["setup"]
    found = "; ".join(faults(wrong, "density"))
    for words in ("'flux' is missing", "'intensity' is missing", "'brightness' is not in", "no units", "'setup' is"):
        assert words in found
    with pytest.raises(InputError, match="'flux' is missing.*'brightness' is not in"):
        check(wrong, "density")


def test_realisation_dimension_is_allowed():
    stacked = density().expand_dims("realisation")
    assert not [f for f in faults(stacked, "density") if "dimensions" in f]


def test_wrong_kind_and_wrong_type_are_refused():
    with pytest.raises(InputError, match="wanted 'wave'"):
        check(density(), "wave")
    with pytest.raises(InputError, match="expected an xarray.Dataset"):
        check(np.zeros(3), "wave")


def test_netcdf_round_trip(tmp_path, rng):
    result = density()
    result["psi"] = (("x", "y"), rng.normal(size=result.intensity.shape) * (1 + 2j))
    result["trusted"] = (("x",), result.x.values > 1)
    path = save(result, tmp_path / "result.nc")
    xr.testing.assert_identical(load(path), result)
    assert not list(tmp_path.glob("*.part"))


def test_file_slips_are_named(tmp_path):
    with pytest.raises(InputError, match="there is no file"):
        load(tmp_path / "none.nc")
    (tmp_path / "text.nc").write_text("not netCDF")
    with pytest.raises(InputError, match="not a netCDF file"):
        load(tmp_path / "text.nc")
    with pytest.raises(InputError, match="cannot be written"):
        save(density(), tmp_path / "none" / "result.nc")
