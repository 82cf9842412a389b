"""The verdict in words: every number in it is one of the results."""

import numpy as np
import pytest

from branchlab.compare import compare, validity_range, verdict
from branchlab.errors import InputError
from branchlab.launch.band import Band
from tests.unit.compare import made

X = np.linspace(0.0, 20.0, 41)
OF = made.setup(length=20.0, screens=41, length_unit="mm")
Q = 2.0 * np.pi * 4 / OF.width


def grown(slope):
    """A fringe that grows along x."""
    return 1.0 + slope * np.outer(X, np.cos(Q * OF.y))


def worked(*, band=None, excess=0.04, trusted=True, error=0.001):
    """Rays even; at the centre a wave with fringe 0.03 x, a sum with 0.024 x; at the other nodes 0.012 x."""
    wavelengths = np.array([0.1]) if band is None else band.wavelengths()
    centre = wavelengths == 0.1
    wave = np.where(centre[:, None, None], grown(0.03), grown(0.012))
    total = np.where(centre[:, None, None], grown(0.024), grown(0.012))
    return compare(
        made.rays(OF, 1.0, error=error),
        made.wave(OF, wavelengths, wave, error=error),
        made.total(OF, wavelengths, total, excess=excess, trusted=trusted),
        resolution=0.2,
        band=band,
    )


def test_full_answer():
    """All parts in proportion: with weight w of the centre the sum keeps 0.012 + 0.012 w of 0.03 under the band."""
    band = Band(0.1, 0.2)
    result = worked(band=band)
    validity = validity_range(result, threshold=0.1)
    text = verdict(result, validity)
    w = band.weights()[3]
    damping = np.exp(-0.5 * (Q * 0.2) ** 2)
    reach = 0.1 * np.pi / (0.03 * damping)  # m = slope x damping / pi (mean of abs(cos) is 2/pi)
    assert f"out to x = {float(f'{reach:.3g}'):g} mm" in text
    caustic = (0.012 + 0.012 * w) / 0.03
    assert f"{100 * (0.8 - caustic):.0f} % is interference that the band removes" in text
    assert f"{100 * caustic:.0f} % sits at caustics and stays" in text
    assert "20 % is diffraction, which no sum over rays contains" in text
    assert text.startswith("At resolution 0.2 mm, rays place all but 10 % of the flux rightly\n- at wavelength 0.1 mm")
    assert "averaged over a flat band of 20 % to the end of the window, x = 20 mm, and perhaps beyond" in text
    assert "the sum carries 4 % more flux than its rays there" in text
    assert "Numerical error: at most 0.2 % of the flux." in text
    assert "one realisation" in text
    assert "at fixed rays" in text


def test_without_band_and_sum():
    result = worked().drop_vars([n for n in worked() if "interference" in n or "diffraction" in n])
    text = verdict(result, validity_range(result, threshold=0.1))
    assert "diffraction" not in text
    assert "band" not in text.lower()


def test_doubtful_sum_is_said():
    result = worked(excess=-0.3, trusted=False)
    text = verdict(result, validity_range(result, threshold=0.1))
    assert "30 % less flux than its rays there and is trusted on 0 % of the screens only" in text
    assert "80 % is interference between ray families and 20 % is diffraction" in text


def test_a_part_that_lessens_the_mismatch_is_said_so():
    result = worked()
    result["misplaced_diffraction"] = -result["misplaced_diffraction"]
    text = verdict(result, validity_range(result, threshold=0.1))
    assert "diffraction, which no sum over rays contains, lessens it by 20 %" in text


def test_interval_and_realisations():
    slope = 0.02 + 0.002 * np.random.default_rng(1).normal(size=8)
    result = made.comparison(X, slope[:, None] * X)
    validity = validity_range(result)
    text = verdict(result, validity)
    low, high = float(validity["reach_low"][0]), float(validity["reach_high"][0])
    assert f"({float(f'{low:.3g}'):g} to {float(f'{high:.3g}'):g})" in text
    assert "mean of 8 realisations, in brackets with 95 % confidence" in text


def test_open_ended_interval():
    slope = np.array([0.002, 0.004, 0.02, 0.012, 0.006, 0.012])
    result = made.comparison(X, slope[:, None] * X)
    assert " or more)" in verdict(result, validity_range(result))


def test_not_resolved_is_never_agreement():
    result = made.comparison(X, [0.002 * X], error=0.01)
    text = verdict(result, validity_range(result))
    assert "On 25 % of the screens the mismatch is below it, which is not resolved, not agreement." in text
    poor = made.comparison(X, [0.002 * X], error=0.3)
    text = verdict(poor, validity_range(poor))
    assert "not resolved, for the numerical error reaches 30 % of the flux" in text
    assert "out to" not in text


def test_nowhere():
    result = made.comparison(X, [0.3 + 0 * X])
    assert "nowhere, not even at the entry" in verdict(result, validity_range(result))


def test_refused_when_they_do_not_belong_together():
    result = worked()
    validity = validity_range(result)
    with pytest.raises(InputError, match="not found from this comparison"):
        verdict(result.assign_attrs(resolution=0.3), validity)
    with pytest.raises(InputError, match="not a result of kind 'validity'"):
        verdict(result, result)
