"""ParaxialWave from the outside: layout, precision, progress, cancelling, and every slip refused."""

import numpy as np
import pytest

from branchlab import errors
from branchlab.errors import BranchlabWarning, InputError, ResourceError
from branchlab.launch import AngularSpread, Band, Beam, FieldSource, PlaneWave
from branchlab.media import SampledMedium
from branchlab.results import check
from branchlab.waves import ParaxialWave
from tests.canon import SOURCES, setup_with


@pytest.mark.filterwarnings("ignore:.*limit 1e-05")  # the field source ends sharply at absorbing sides
@pytest.mark.parametrize("source", SOURCES, ids=lambda s: type(s).__name__)
@pytest.mark.parametrize("sides", ["periodic", "absorbing"])
def test_every_source_marches(source, sides):
    setup = setup_with(source=source, sides=sides, length=3.0)
    result = ParaxialWave(setup).solve([0.3, 0.15])
    check(result, "wave")
    assert result.intensity.shape == (2, setup.x.size, setup.y.size)
    assert (result.numerical_error < 2e-3).all()
    flux = result.flux.values
    if sides == "periodic":
        assert np.allclose(flux, flux[:, :1], rtol=2e-6)
    else:
        assert (np.diff(flux, axis=1) < 1e-3 * flux.max()).all()  # what leaves is not seen again


def test_single_precision_is_close():
    setup = setup_with(length=6.0)
    double = ParaxialWave(setup).solve(0.1)
    single = ParaxialWave(setup, precision="single").solve(0.1)
    assert np.abs(single.intensity - double.intensity).max() < 1e-4 * double.intensity.max()


def test_a_band_is_its_wavelengths():
    setup = setup_with(length=2.0)
    band = Band(0.2, 0.2, nodes=5)
    result = ParaxialWave(setup).solve(band)
    assert np.array_equal(result.wavelength.values, band.wavelengths())


def test_incoherent_parts_add():
    """Intensity of a spread source = weighted sum of those of its plane waves."""
    spread = AngularSpread(PlaneWave(), 0.05, nodes=3)
    together = ParaxialWave(setup_with(source=spread, length=3.0), tolerance=1.0).solve(0.2)
    total = 0.0
    for part in setup_with(source=spread).parts():
        alone = setup_with(source=PlaneWave(float(np.arcsin(part.tilt))), length=3.0)
        total = total + part.weight * ParaxialWave(alone, tolerance=1.0).solve(0.2).intensity
    assert np.abs(together.intensity - total).max() < 1e-4


def test_progress_rises_and_cancels():
    seen = []
    ParaxialWave(setup_with(length=3.0)).solve(0.2, progress=seen.append)
    assert seen[-1] == 1.0
    assert all(a <= b for a, b in zip(seen[:-1], seen[1:], strict=True))

    def stop(fraction):
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        ParaxialWave(setup_with(length=3.0)).solve(0.2, progress=stop)


@pytest.mark.parametrize(
    ("act", "message"),
    [
        (lambda: ParaxialWave(setup_with(), precision="singel"), "Did you mean 'single'"),
        (lambda: ParaxialWave(setup_with(), tolerance=0.0), r"tolerance must be in \(0, 1\]; got 0.0"),
        (lambda: ParaxialWave(setup_with()).solve(-0.1), "wavelength must be positive; got"),
        (lambda: ParaxialWave(setup_with()).solve([]), "wavelengths needs at least 1"),
        (
            lambda: ParaxialWave(setup_with(source=SOURCES[-1])).solve(0.2, fields=True),
            "fields=True needs a source of one coherent part; this one has 5",
        ),
    ],
)
def test_slips_are_named(act, message):
    with pytest.raises(InputError, match=message):
        act()


def test_a_wavelength_too_short_for_rough_samples_is_refused(rng):
    x = np.linspace(0.0, 10.0, 101)
    y = np.linspace(-10.0, 10.0, 201)
    rough = SampledMedium(0.02 * rng.normal(size=(101, 201)), x, y)
    setup = setup_with(medium=rough, width=12.0, length=5.0)
    with pytest.raises(InputError, match=r"wavelength 0.02 .*needs a spacing <= 0.00333.*has 0.1.*wavelength >= 0.6"):
        ParaxialWave(setup).solve(0.02)


def test_no_room_is_refused_before_it_is_taken(monkeypatch):
    wave = ParaxialWave(setup_with())
    monkeypatch.setattr(errors, "available_memory", lambda: 10**4)
    with pytest.raises(ResourceError, match="a march of 1 wavelengths on .* GiB are free.*Use fewer wavelengths"):
        wave.solve(0.2)


def test_a_spectrum_that_does_not_end_is_told():
    """A sharp-edged slit: its spectrum falls as 1/q, no grid holds it."""
    y = np.linspace(-2.0, 2.0, 101)
    setup = setup_with(source=FieldSource(y, 1.0), length=1.0, sides="absorbing")
    with pytest.warns(BranchlabWarning, match="lies beyond 90 % of the grid's largest wavenumber"):
        ParaxialWave(setup).solve(0.3)


def test_error_bar_covers_the_truth_cell_by_cell():
    """The misplaced flux against a march of eight times the steps is below the stated numerical error."""
    setup = setup_with(source=Beam(1.5), length=8.0)
    rough = ParaxialWave(setup, steps_per_scale=4, tolerance=1.0).solve(0.08)
    fine = ParaxialWave(setup, steps_per_scale=32, tolerance=1.0).solve(0.08)
    off = 0.5 * np.abs(rough.intensity - fine.intensity).sum("y") * setup.cell
    stated = rough.numerical_error
    assert (off[:, 1:] < 1.3 * stated[:, 1:]).all()
    assert float(stated[0, -1]) < 20 * float(off[0, -1])
