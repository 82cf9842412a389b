"""Sampled media: conversions, files made by others, and every slip refused with its place."""

import pathlib
import subprocess
import sys

import numpy as np
import pytest
import xarray as xr

from branchlab.errors import InputError, RangeError, ResourceError
from branchlab.media import Medium, SampledMedium
from branchlab.media.sampled import read_samples

REFERENCE = pathlib.Path(__file__).parents[2] / "reference"
X = np.linspace(0.0, 10.0, 41)
Y = np.linspace(-5.0, 5.0, 33)
V = 0.05 * np.outer(np.cos(X), np.sin(Y))


def changed(array, place, value):
    array = np.array(array, dtype=float)
    array[place] = value
    return array


def grid(values=V + 1.3, **options):
    axes = {"x": ("x", X, {"units": "mm"}), "y": ("y", Y, {"units": "mm"})}
    return xr.DataArray(values, coords=axes, dims=("x", "y"), name="n", attrs=options)


@pytest.mark.parametrize(
    ("kind", "values", "reference", "expected"),
    [
        ("v", V, None, V),
        ("index", 1.3 + V, 1.3, 1.0 - (1.0 + V / 1.3) ** 2),
        ("speed", 1500.0 + 100.0 * V, 1500.0, 1.0 - 1.0 / (1.0 + V / 15.0) ** 2),
        ("depth", 40.0 + 20.0 * V, 40.0, 1.0 - 1.0 / (1.0 + V / 2.0)),
    ],
)
def test_conversions(kind, values, reference, expected):
    """n**2 = 1 - v with n = index/reference, reference speed/speed, (reference depth/depth)**(1/2) (c = (g h)**(1/2))."""
    medium = SampledMedium(values, X, Y, kind, reference)
    assert np.allclose(medium.rows(X, Y), expected, rtol=0, atol=1e-14)
    assert medium.mean == pytest.approx(expected.mean())


def test_depth_and_the_speed_it_makes_are_one_medium():
    """c = (g h)**(1/2) (Lamb, Hydrodynamics, 1932, sec. 170)."""
    depth = 40.0 + 20.0 * V
    from_depth = SampledMedium(depth, X, Y, "depth", 38.0)
    from_speed = SampledMedium(np.sqrt(9.80665 * depth), X, Y, "speed", np.sqrt(9.80665 * 38.0))
    assert np.allclose(from_depth.v, from_speed.v, rtol=0, atol=1e-14)


def test_reference_is_the_mean_unless_given():
    medium = SampledMedium(1.3 + V, X, Y, "index")
    assert medium.reference == pytest.approx(1.3 + V.mean())
    assert f"reference={medium.reference:.6g}" in repr(medium)


def test_unsorted_points_give_unsorted_rows():
    medium = SampledMedium(V, X, Y)
    assert np.array_equal(medium.rows(X[[7, 2, 30]], Y[[5, 1]]), medium.rows(X, Y)[np.ix_([7, 2, 30], [5, 1])])


def test_input_arrays_are_copied():
    values = V.copy()
    medium = SampledMedium(values, X, Y)
    values[:] = 9.0
    assert np.array_equal(medium.values, V)


def test_single_precision_axes_are_even_enough():
    x = (X * 20.0 / 7.0).astype(np.float32)
    medium = SampledMedium(V, x, Y)
    assert np.abs(np.diff(medium.x, 2)).max() < 1e-13
    assert SampledMedium.from_json(medium.to_json()) == medium


SLIPS = {
    "nan": (lambda: SampledMedium(changed(V, (12, 7), np.nan), X, Y), r"values\[12, 7\] = nan at x = 3, y = -2.8125"),
    "infinite": (lambda: SampledMedium(changed(V, (0, 3), np.inf), X, Y), r"values\[0, 3\] = inf .* \(1 of 1353"),
    "masked": (lambda: SampledMedium(np.ma.masked_greater(V, 0.0499), X, Y), r"= nan at x = 0"),
    "transposed": (lambda: SampledMedium(V.T, X, Y), r"shape \(x, y\) = \(41, 33\); got \(33, 41\).*pass values.T"),
    "wrong shape": (lambda: SampledMedium(V[:9], X, Y), r"got \(9, 33\)\.$"),
    "reversed": (lambda: SampledMedium(V, X[::-1], Y), r"x falls from 10 to 0; it must rise.*sortby\('x'\)"),
    "disordered": (lambda: SampledMedium(V, changed(X, 5, 2.5), Y), r"x\[5\] = 2.5 is followed by x\[6\] = 1.5"),
    "uneven": (lambda: SampledMedium(V, X, changed(Y, 4, -3.7)), r"y must be equidistant to 0.001 .* after y\[3\]"),
    "gap": (
        lambda: SampledMedium(V, np.delete(np.linspace(0, 11, 45), [9, 10, 11, 12]), Y),
        r"after x\[8\] = 2 is 1.25: 4 missing there",
    ),
    "v of 1": (lambda: SampledMedium(changed(V, (3, 4), 1.0), X, Y), r"values\[3, 4\] = 1 .*v = 1 - n\*\*2 reach 1"),
    "speed 0": (
        lambda: SampledMedium(changed(V + 1500, (3, 4), 0), X, Y, "speed"),
        r"\[3, 4\] = 0 .*a wave speed must",
    ),
    "dry land": (lambda: SampledMedium(changed(V + 40, (3, 4), -2), X, Y, "depth"), r"\[3, 4\] = -2 .*a depth"),
    "index -1": (lambda: SampledMedium(changed(V + 1, (3, 4), -1), X, Y, "index"), r"a refractive index must be"),
    "kind": (lambda: SampledMedium(V, X, Y, "indx"), "kind 'indx' is not known.*Did you mean 'index'"),
    "reference": (lambda: SampledMedium(V + 1, X, Y, "index", -1.0), "reference must be positive; got -1"),
    "reference of v": (lambda: SampledMedium(V, X, Y, "v", 2.0), "kind 'v' takes no reference"),
    "out of proportion": (lambda: SampledMedium(V * 0 + 1e-200, X, Y, "speed", 1.0), "out of all proportion"),
    "few": (lambda: SampledMedium(V[:5], X[:5], Y), "x needs at least 6 values; got 5"),
    "text": (lambda: SampledMedium("gel", X, Y), "array of real numbers"),
    "ragged": (lambda: SampledMedium([[1.0, 2.0], [3.0]], X, Y), "array of real numbers"),
    "complex": (lambda: SampledMedium(V + 0.1j, X, Y), "array of real numbers"),
    "dates": (lambda: SampledMedium(V, X.astype("datetime64[s]"), Y), "x must be positions"),
    "no array": (lambda: SampledMedium.from_dataarray(V, "v"), "expected an xarray.DataArray; got ndarray"),
    "no dimension": (lambda: SampledMedium.from_dataarray(grid(), "index", x="xx"), "no dimension 'xx'.*mean 'x'"),
    "no coordinate": (lambda: SampledMedium.from_dataarray(grid().drop_vars("y"), "index"), "'y' has no coordinate"),
    "one dimension twice": (lambda: SampledMedium.from_dataarray(grid(), "index", x="y"), "same dimension, 'y'"),
    "three dimensions": (
        lambda: SampledMedium.from_dataarray(grid().expand_dims(month=12), "index"),
        r"select one value along month \(12\)",
    ),
    "unit of an index": (
        lambda: SampledMedium.from_dataarray(grid(units="m/s"), "index"),
        "in 'm/s', and kind 'index'",
    ),
}


@pytest.mark.parametrize("slip", SLIPS)
def test_slips_are_refused_with_their_place(slip):
    build, words = SLIPS[slip]
    with pytest.raises(InputError, match=words):
        build()


def test_nothing_is_told_of_places_outside():
    medium = SampledMedium(V, X, Y)
    with pytest.raises(RangeError, match=r"y\[1\] = 5.2 lies outside the samples, -5 <= y <= 5"):
        medium.rows([1.0], [0.0, 5.2])


def test_dataarrays_in_either_order_and_with_single_dimensions():
    plain = SampledMedium.from_dataarray(grid(), "index")
    assert plain == SampledMedium(V + 1.3, X, Y, "index", length_unit="mm")
    assert SampledMedium.from_dataarray(grid().transpose("y", "x"), "index") == plain
    assert SampledMedium.from_dataarray(grid().expand_dims(time=1), "index") == plain
    renamed = grid().rename(x="range", y="cross")
    assert SampledMedium.from_dataarray(renamed, "index", x="range", y="cross") == plain


@pytest.mark.parametrize(
    ("x", "y", "unit"),
    [
        ("km", "km", "km"),
        ("metres", "m", "m"),
        ("Kilometers", "km", "km"),
        ("mm", None, "mm"),
        (None, None, "1"),
        ("1", "1", "1"),
    ],
)
def test_units_of_the_axes_are_kept(x, y, unit):
    samples = grid()
    for name, one in (("x", x), ("y", y)):
        samples[name].attrs = {} if one is None else {"units": one}
    medium = SampledMedium.from_dataarray(samples, "index")
    assert medium.length_unit == unit
    assert medium.statistics().correlation_length_y.attrs["units"] == unit


@pytest.mark.parametrize(
    ("x", "y", "words"),
    [
        ("km", "m", "x is in 'km' and y in 'm'; both must be in one unit"),
        ("degrees_east", "degrees_north", "x is in 'degrees_east'; the axes must be lengths"),
    ],
)
def test_units_that_do_not_fit_are_refused(x, y, words):
    samples = grid()
    samples.x.attrs["units"], samples.y.attrs["units"] = x, y
    with pytest.raises(InputError, match=words):
        SampledMedium.from_dataarray(samples, "index")


def test_scale_is_found_on_either_axis():
    """cos(q y) has rms/slope = 1/q: scale sqrt(2)/q; not below 4 spacings, not above an eighth of the range."""
    x, y = np.linspace(0, 40, 81), np.linspace(-20, 20, 401)
    across = SampledMedium(0.05 * np.tile(np.cos(2.0 * y), (81, 1)), x, y)
    assert across.scale == pytest.approx(np.sqrt(2.0) / 2.0, rel=0.02)
    along = SampledMedium(0.05 * np.tile(np.cos(0.6 * x), (401, 1)).T, x, y)
    assert along.scale == pytest.approx(np.sqrt(2.0) / 0.6, rel=0.02)
    assert SampledMedium(np.zeros((81, 401)), x, y).scale == pytest.approx(5.0)
    rough = 0.05 * np.random.default_rng(3).standard_normal((81, 401))
    assert SampledMedium(rough, x, y).scale == pytest.approx(4 * 0.1)


def test_rough_samples_limit_the_wavelength():
    rough = 0.05 * np.random.default_rng(3).standard_normal((41, 33))
    assert SampledMedium(rough, X, Y).shortest_wavelength == pytest.approx(6 * Y[1] - 6 * Y[0])
    assert SampledMedium(V, X, Y).shortest_wavelength == 0.0


# -- files -------------------------------------------------------------------------------------------------------------


def basin_v(east, north, reference):
    sys.path.insert(0, str(REFERENCE))
    try:
        from make_basin import depth
    finally:
        sys.path.pop(0)
    return 1.0 - reference / depth(east, north).T


def test_a_file_of_another_process():
    """netCDF-4 of the netCDF4 library: packed, north first, single precision axes; formula of make_basin.py."""
    medium = SampledMedium.from_netcdf(REFERENCE / "basin.nc", "depth", "depth", reference=40.0, x="east", y="north")
    assert medium.length_unit == "km"
    assert medium.extent == pytest.approx((0.0, 30.0, -10.0, 10.0))
    east, north = np.linspace(1.0, 29.0, 40), np.linspace(-9.0, 9.0, 30)
    # packing in steps of 0.002 m: 0.001 m of 40 m; the splines' overshoot of that noise stays below 2
    assert np.abs(medium.rows(east, north) - basin_v(east, north, 40.0)).max() < 2 * 0.001 / 35.0


def test_a_classic_file():
    medium = SampledMedium.from_netcdf(
        REFERENCE / "basin-classic.nc", "speed", "speed", reference=np.sqrt(9.80665 * 40)
    )
    assert medium.values.shape == (121, 81)
    assert np.abs(medium.v - basin_v(medium.x, medium.y, 40.0)).max() < 1e-13


def test_the_files_are_those_of_their_script(tmp_path):
    subprocess.run([sys.executable, REFERENCE / "make_basin.py", tmp_path], check=True)
    for name, variable in (("basin.nc", "depth"), ("basin.nc", "surveyed_depth"), ("basin-classic.nc", "speed")):
        again, kept = read_samples(tmp_path / name, variable), read_samples(REFERENCE / name, variable)
        xr.testing.assert_allclose(again, kept, rtol=1e-6)
        assert (REFERENCE / name).stat().st_size < 100_000


def test_a_hole_in_a_file_is_found():
    with pytest.raises(InputError, match=r"values\[50, 30\] = nan at x = 12.5, y = -2.5 .* \(3 of 9801"):
        SampledMedium.from_netcdf(REFERENCE / "basin.nc", "surveyed_depth", "depth", x="east", y="north")


def test_a_variable_with_months_is_refused():
    with pytest.raises(InputError, match=r"select one value along month \(2\)"):
        SampledMedium.from_netcdf(REFERENCE / "basin.nc", "monthly_depth", "depth", x="east", y="north")


def test_a_missing_variable_is_told_with_those_there_are():
    with pytest.raises(
        InputError, match="no variable 'dept'; it has depth, surveyed_depth, monthly_depth.*mean 'depth'"
    ):
        read_samples(REFERENCE / "basin.nc", "dept")


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (b"x y depth\n0 0 40\n", "is not a netCDF file that can be read: .* this starts with b'x y dept'"),
        (b"", "is not a netCDF file"),
        (b"\x89HDF\r\n\x1a\n" + b"\0" * 64, "is not a netCDF file"),
        (b"CDF\x01" + b"\0" * 11, "is not a netCDF file"),
        (b"CDF\x05" + b"\0" * 60, "64-bit data form"),
    ],
    ids=["text", "empty", "damaged HDF", "damaged classic", "CDF-5"],
)
def test_what_is_not_netcdf_is_refused(tmp_path, content, words):
    path = tmp_path / "medium.nc"
    path.write_bytes(content)
    with pytest.raises(InputError, match=words):
        read_samples(path, "v")


@pytest.mark.parametrize("name", ["basin.nc", "basin-classic.nc"])
def test_cut_off_files_are_refused(tmp_path, name):
    path = tmp_path / name
    path.write_bytes((REFERENCE / name).read_bytes()[:9000])
    with pytest.raises(InputError, match="is not a netCDF file that can be read"):
        SampledMedium.from_netcdf(path, "depth" if name == "basin.nc" else "speed", "v")


def test_no_file_and_a_folder(tmp_path):
    with pytest.raises(InputError, match="there is no file"):
        read_samples(tmp_path / "none.nc", "v")
    with pytest.raises(InputError, match="cannot be read"):
        read_samples(tmp_path, "v")


def test_no_room_in_memory(monkeypatch):
    monkeypatch.setattr("branchlab.errors.available_memory", lambda: 100_000)
    with pytest.raises(ResourceError, match=r"'depth' of .* needs about .* GiB"):
        read_samples(REFERENCE / "basin.nc", "depth")


def test_netcdf_round_trip_of_a_sample(tmp_path):
    """What `sample` gives is what `from_netcdf` takes."""
    medium = SampledMedium(V, X, Y, length_unit="mm")
    medium.sample(X, Y, length_unit="mm").to_netcdf(tmp_path / "v.nc", engine="h5netcdf")
    again = SampledMedium.from_netcdf(tmp_path / "v.nc", "v", "v")
    assert np.abs(again.values - V).max() < 1e-15
    assert again.length_unit == "mm"
    assert isinstance(Medium.from_json(again.to_json()), SampledMedium)
