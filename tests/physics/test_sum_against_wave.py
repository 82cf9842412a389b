"""What the sums take out of the mismatch between rays and wave, in random media at one first-caustic distance.

Misplaced flux is measured on averages over boxes of 0.25 correlation lengths (a Gaussian of the same standard
deviation, 0.25/sqrt(12) = 0.072, gives the same numbers).
"""

import numpy as np
import pytest

from branchlab.conventions import MEAN_FIRST_CAUSTIC
from branchlab.launch import PlaneWave, Setup
from branchlab.media import RandomMedium
from branchlab.rays import RayEnsemble
from branchlab.semiclassics import SemiclassicalSum
from branchlab.waves.paraxial import ParaxialWave

STRENGTH = 0.08
Z_C = 0.573 * STRENGTH ** (-2 / 3)  # D**(-1/3) of the Gaussian family, l = 1
KAPPAS = np.array([4.5, 10.0])
# kappa = 3 k Dtheta D**(-2/3) = 0.873 k strength**(2/3) for the Gaussian family (conventions.wave_parameter)
WAVELENGTHS = 2 * np.pi * 0.873 * STRENGTH ** (2 / 3) / KAPPAS


def misplaced(a, b):
    """Half the L1 distance of two intensities in boxes of 0.25, each divided by its flux."""
    boxes = [np.asarray(one).reshape(-1, 4).sum(axis=1) for one in (a, b)]
    p, q = (one / one.sum() for one in boxes)
    return 0.5 * np.abs(p - q).sum()


@pytest.fixture(scope="module")
def mismatches():
    """Misplaced flux (wave, rays), (wave, sum) on the last screen, mean over realisations, for each kappa."""
    found = {"rays": [], "frozen-gaussian": [], "herman-kluk": []}
    for seed in (1, 2):
        medium = RandomMedium(STRENGTH, 1.0, seed=seed)
        setup = Setup(medium, PlaneWave(), MEAN_FIRST_CAUSTIC * Z_C, 32.0, screens=3, cells=512)
        rays = RayEnsemble(setup)
        wave = ParaxialWave(setup).solve(WAVELENGTHS).intensity.values[:, -1]
        density = rays.density().intensity.values[-1]
        found["rays"].append([misplaced(one, density) for one in wave])
        for method in ("frozen-gaussian", "herman-kluk"):
            summed = SemiclassicalSum(rays, method).solve(WAVELENGTHS).intensity.values[:, -1]
            found[method].append([misplaced(one, other) for one, other in zip(wave, summed, strict=True)])
    return {name: np.mean(values, axis=0) for name, values in found.items()}


def test_rays_are_off_as_measured_before(mismatches):
    # 0.27 and 0.19 in our own table of the collapse over strengths; realisations differ by some 15 %
    np.testing.assert_allclose(mismatches["rays"], [0.27, 0.19], rtol=0.25)


def test_frozen_gaussians_explain_half_of_the_mismatch(mismatches):
    """The aim set for this sum: a remainder of at most 0.55 of the mismatch for kappa >= 4.5."""
    assert (mismatches["frozen-gaussian"] <= 0.55 * mismatches["rays"]).all()


def test_herman_kluk_explains_more(mismatches):
    # 0.15 to 0.3 of the mismatch remain: it holds part of the diffraction
    assert (mismatches["herman-kluk"] <= 0.3 * mismatches["rays"]).all()


def test_the_numbers_are_not_those_of_any_smooth_map(mismatches):
    """Companion: the rays of another realisation do not explain the wave."""
    setups = [Setup(RandomMedium(STRENGTH, 1.0, seed=s), PlaneWave(), MEAN_FIRST_CAUSTIC * Z_C, 32.0, screens=3,
                    cells=512) for s in (1, 2)]  # fmt: skip
    wave = ParaxialWave(setups[0]).solve(WAVELENGTHS[0]).intensity.values[0, -1]
    other = SemiclassicalSum(RayEnsemble(setups[1])).solve(WAVELENGTHS[0]).intensity.values[0, -1]
    assert misplaced(wave, other) > mismatches["rays"][0]
