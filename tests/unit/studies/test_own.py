"""A study of somebody's own medium: what is chosen for it, and that it is studied as it stands."""

import numpy as np
import pytest

from branchlab.errors import InputError
from branchlab.media import RandomMedium, SampledMedium
from branchlab.studies import own_study, table
from tests.small_study import small_result

RANDOM = RandomMedium(0.1, 1.0, seed=4)
X, Y = np.linspace(5.0, 17.0, 97), np.linspace(100.0, 124.0, 193)
SAMPLED = SampledMedium(RANDOM.rows(X - 5.0, Y - 112.0), X, Y, length_unit="mm")


def test_axes_are_moved_and_the_window_fits():
    study = own_study(SAMPLED, [0.3, 0.15])
    medium = study.setup.medium
    assert medium.x[0] == 0.0
    assert medium.y[0] == -medium.y[-1]
    assert study.setup.length == pytest.approx(12.0)
    assert study.setup.length_unit == "mm"
    assert study.resolution == pytest.approx(medium.scale / 10, rel=0.01)  # three digits
    assert study.setup.width + 2 * study.setup.window.fade <= 24.0 * (1 + 1e-9)
    assert study.setup.width > 0.6 * 24.0  # the rest is fade
    assert [band.centre for band in study.bands] == [0.3, 0.15]
    assert study.setup.cell <= study.resolution


@pytest.mark.parametrize("sides", ["periodic", "absorbing"])
@pytest.mark.parametrize("share", [1.0, 0.4])
def test_default_width_fits_also_where_the_samples_are_narrow(sides, share):
    kept = np.abs(Y - 112.0) <= 12.0 * share
    narrow = SAMPLED.with_(values=SAMPLED.values[:, kept], y=Y[kept])
    study = own_study(narrow, 0.3, sides=sides, bandwidth=None)
    assert study.wavelengths == (0.3,)
    low, high = study.setup.window.reach
    assert low >= narrow.y[0] - 112.0 - 1e-9
    assert high <= narrow.y[-1] - 112.0 + 1e-9


def test_samples_are_met_in_their_place():
    """Away from the seam, rays and wave through splines over samples at l/8 are those of the medium itself.

    Quintic splines at this spacing have slopes right to 1e-5, so intensities to some 1e-4; a shift by one sample or a
    mirrored axis would be of order 1. The seam (3 scales on the upper side) cannot be felt below y = 1.5 at x <= 5.
    """
    study = own_study(SAMPLED, 0.3, length=5.0, width=12.0, bandwidth=None, resolution=0.2)
    study = study.with_(setup=study.setup.with_(screens=6), measures=(), model="paraxial")
    sampled = study.run().sel(y=slice(-1.5, 1.5))
    analytic = study.with_(setup=study.setup.with_(medium=RANDOM)).run().sel(y=slice(-1.5, 1.5))
    for name in ("intensity_ray", "intensity_wave"):
        assert float(analytic[name].max() - analytic[name].min()) > 1.0
        np.testing.assert_allclose(sampled[name], analytic[name], atol=1e-3, err_msg=name)


def test_too_wide_is_refused_with_the_widest():
    with pytest.raises(InputError, match="Use width <="):
        own_study(SAMPLED, 0.3, width=24.0)
    with pytest.raises(InputError, match="length 20 does not fit.*Use length <= 12"):
        own_study(SAMPLED, 0.3, length=20.0)


def test_table_holds_the_numbers_of_the_result():
    result = small_result()
    head, *lines = table(result).splitlines()
    assert len(lines) == result.sizes["wavelength"] + 1
    for name in ("wavelength [mm]", "kappa", "range [mm]", "band average [mm]", "misplaced at 12 mm", "= removable"):
        assert name in head
    last = result["misplaced_flux"].isel(x=-1, wavelength=1).mean("realisation").item()
    assert f"{100 * last:.0f} %" in lines[1]
    assert f"{result['reach'].values[0]:.3g}"[:4] in lines[0]
    parts = [f"misplaced_{name}" for name in ("removable", "caustic", "diffraction")]
    total = sum(result[name].isel(x=-1).mean("realisation") for name in parts)
    np.testing.assert_allclose(total, result["misplaced_flux"].isel(x=-1).mean("realisation"), atol=1e-12)
