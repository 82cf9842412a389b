"""The scintillation index."""

import numpy as np
import pytest
import xarray as xr

from branchlab.compare import scintillation
from branchlab.errors import InputError
from branchlab.launch.band import Band
from tests.unit.compare import made

OF = made.setup(screens=3, cells=512)
FRINGE = np.cos(2 * np.pi * 4 * OF.y / OF.width)


def test_of_two_beams():
    """I = 1 + c cos: S2 = c**2/2 (mean of cos**2); smoothing to d takes exp(-(q d)**2/2) of c."""
    result = made.wave(OF, [0.1], 1 + 0.6 * FRINGE)
    np.testing.assert_allclose(scintillation(result), 0.18, rtol=1e-12)
    damping = np.exp(-((2 * np.pi * 4 / OF.width * 0.2) ** 2))
    found = scintillation(result, resolution=0.2)
    np.testing.assert_allclose(found, 0.18 * damping, rtol=1e-10)
    assert found.dims == ("wavelength", "x")
    assert found.attrs["resolution"] == 0.2


def test_of_developed_speckle(rng):
    """Exponential intensity has S2 = 1 (Goodman, Speckle Phenomena in Optics, 2007, ch. 3); n of them 1/n.

    Statistical: S2 of N samples scatters by about sqrt(20/N) (fourth moments of the exponential law), 5 times
    that is allowed.
    """
    of = made.setup(screens=2, cells=16384)
    band = Band(0.1, 0.2, nodes=5)
    speckle = rng.exponential(size=(5, 2, of.y.size))
    result = made.wave(of, band.wavelengths(), speckle)
    np.testing.assert_allclose(scintillation(result), 1.0, atol=5 * np.sqrt(20 / of.y.size))
    # independent speckles with weights w: S2 = sum w**2 (Goodman, same place)
    averaged = scintillation(result, band=band)
    assert averaged.dims == ("x",)
    np.testing.assert_allclose(averaged, (band.weights() ** 2).sum(), atol=5 * np.sqrt(20 / of.y.size))


def test_mean_over_realisations_is_of_the_moments():
    """Two flat realisations of intensities 1 and 3: <I**2>/<I>**2 - 1 = 5/4 - 1."""
    both = xr.concat([made.wave(OF, [0.1], 1.0), made.wave(OF, [0.1], 3.0)], "realisation")
    np.testing.assert_allclose(scintillation(both), 0.25, rtol=1e-12)


def test_rays_need_a_resolution():
    density = made.rays(OF, 1 + 0.6 * FRINGE)
    with pytest.raises(InputError, match="diverges at folds"):
        scintillation(density)
    assert "diverges" in scintillation(density, resolution=0.2).attrs["caution"]
    with pytest.raises(InputError, match="rays do not depend on the wavelength"):
        scintillation(density, resolution=0.2, band=Band(0.1, 0.2))


def test_grows_with_the_logarithm_of_the_resolution_at_a_fold():
    """I = 1/(2 sqrt(y)) at a fold: int I**2 dy has a term -(1/4) ln(resolution), so S2 rises by equal steps.

    The fold tail I**-3: Berry, J. Phys. A 10 (1977) 2061 (from memory). Cell means of the fold are exact.
    """
    of = made.setup(screens=2, cells=65536)
    edges = np.maximum(np.append(of.y - 0.5 * of.cell, of.y[-1] + 0.5 * of.cell), 0.0)
    density = made.rays(of, np.diff(np.sqrt(edges)) / of.cell)
    index = [float(scintillation(density, resolution=d)[0]) for d in (0.08, 0.04, 0.02, 0.01)]
    mean = np.sqrt(of.y[-1] + 0.5 * of.cell) / of.width
    step = 0.25 * np.log(2.0) / of.width / mean**2
    np.testing.assert_allclose(np.diff(index), step, rtol=0.02)  # next term of order sqrt(resolution/width)


def test_refused():
    result = made.wave(OF, [0.1], 1.0)
    with pytest.raises(InputError, match=r"wave lacks 6 of the 7.*Make them with .solve\(Band"):
        scintillation(result, band=Band(0.1, 0.2))
    with pytest.raises(InputError, match="takes one band; got 2"):
        scintillation(result, band=[Band(0.1, 0.2), Band(0.2, 0.2)])
    with pytest.raises(InputError, match="kind of the result"):
        scintillation(result.assign_attrs(kind="trace"))
    with pytest.raises(InputError, match="got int"):
        scintillation(3)
