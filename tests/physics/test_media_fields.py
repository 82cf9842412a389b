"""Realisations: statistics of the fields against their laws, with the sampling error as tolerance."""

import math
import subprocess
import sys
from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest

from branchlab.errors import BranchlabWarning
from branchlab.media import BumpMedium, RandomMedium, SampledMedium
from branchlab.media.hashing import complex_normal, uniform

BOX = (24.0, 24.0)
FAMILIES = {
    "gaussian": {},
    "matern": {"smoothness": 2.5},
    "power-law": {"exponent": 3.0, "inner_scale": 0.3},
    "donor-layer": {},
}


def medium_of(family, seed, **more):
    return RandomMedium(0.1, 1.0, seed, family, box=BOX, **FAMILIES[family], **more)


def mean_and_error(samples):
    samples = np.asarray(samples)
    return samples.mean(axis=0), samples.std(axis=0, ddof=1) / math.sqrt(len(samples))


@pytest.mark.parametrize("family", FAMILIES)
def test_measured_correlation(family):
    """40 realisations: C along x, along y and along the diagonal is that of the family within 4 standard errors.

    What is expected of a periodic box without a mean: the sum over its modes, sum S cos(q.r)/sum S.
    """
    lags = np.array([0.0, 0.5, 1.0, 2.0, 4.0])
    found = []
    for seed in range(40):
        medium = medium_of(family, seed)
        x = np.arange(96) * 0.25
        v = medium.rows(x, x)
        shifts = (lags / 0.25).astype(int)
        along = [(v * np.roll(v, m, 0)).mean() for m in shifts]
        across = [(v * np.roll(v, m, 1)).mean() for m in shifts]
        skew = [(v * np.roll(v, (m, m), (0, 1))).mean() for m in shifts]
        found.append(np.concatenate([along, across, skew]) / medium.strength**2)
    mean, error = mean_and_error(found)
    q = 2 * np.pi * np.fft.fftfreq(512, BOX[0] / 512)
    weight = medium.spectrum.density(np.hypot(q[:, None], q[None, :]))
    weight[0, 0] = 0.0
    weight /= weight.sum()
    expected = [(weight * np.cos(q[:, None] * r)).sum() for r in lags]
    tilted = [(weight * np.cos((q[:, None] + q[None, :]) * r)).sum() for r in lags]
    expected = np.concatenate([expected, expected, tilted])
    assert (np.abs(mean - expected) < 4.0 * error + 1e-6).all()
    # the box changes the family's own correlation by its mean only: S(0)/box area
    own = medium.spectrum.correlation(lags)
    missing = float(medium.spectrum.density(0.0)) / math.prod(BOX)
    assert np.abs(expected[:5] - own).max() < 1.2 * missing + 0.01


@pytest.mark.parametrize("family", FAMILIES)
def test_measured_spectrum(family):
    """Power per octave of wavenumber over 20 realisations: 1 within 4 standard errors, sqrt(1/modes)."""
    ratios = []
    for seed in range(20):
        medium = medium_of(family, 100 + seed)
        n = 192
        v = medium.rows(np.arange(n) * BOX[0] / n, np.arange(n) * BOX[1] / n)
        power = np.abs(np.fft.fft2(v) / n**2) ** 2
        q = 2 * np.pi * np.fft.fftfreq(n, BOX[0] / n)
        q = np.hypot(q[:, None], q[None, :])
        expected = medium.strength**2 * medium.spectrum.density(q) / math.prod(BOX)
        octaves = [(q > low) & (q <= 2 * low) for low in (0.5, 1.0, 2.0, 4.0)]
        ratios.append([(power[some] / expected[some]).mean() for some in octaves])
    mean, error = mean_and_error(ratios)
    # the strength is that of the box, whose mean is left out: all modes are raised by 1/(1 - S(0)/area) or a little less
    raised = 1.0 / (1.0 - float(medium.spectrum.density(0.0)) / math.prod(BOX))
    assert (mean > 1.0 - 4.0 * error).all()
    assert (mean < raised + 4.0 * error).all()


@pytest.mark.parametrize("family", FAMILIES)
def test_ensemble_rms_is_the_strength(family):
    rms = [medium_of(family, seed).realised_rms for seed in range(200)]
    mean, error = mean_and_error(np.square(rms))
    assert mean == pytest.approx(0.01, abs=4.0 * error)
    v = medium_of(family, 3).rows(np.arange(240) * 0.1, np.arange(240) * 0.1)
    assert v.std() == pytest.approx(rms[3], rel=1e-5)  # the modes that are left out on no grid: round-off and aliases
    assert abs(v.mean()) < 1e-12


def test_gaussian_statistics():
    """Kurtosis 3, skewness 0; rms slope sqrt(2) strength/l; zero crossings of a line sqrt(2)/(pi l) (Rice, Bell Syst. Tech.
    J. 23 (1944) 282); maxima 1/(sqrt(3) pi l**2) (Longuet-Higgins, Phil. Trans. A 249 (1957) 321). For
    exp(-r**2/(2 l**2)) these are 1/(pi l) and 1/(2 sqrt(3) pi l**2). Sampling: 4 standard errors; grid l/16: 1 %.
    """
    found = []
    step = 1.0 / 16.0
    for seed in range(40):
        medium = RandomMedium(0.1, 1.0, seed, box=(32.0, 32.0))
        axis = np.arange(512) * step
        v = medium.rows(axis, axis)
        slope = medium.rows(axis, axis, dy=1)
        crossings = (np.diff(np.sign(np.hstack([v, v[:, :1]])), axis=1) != 0).sum() / (512 * 32.0)
        shifts = [(i, j) for i in (-1, 0, 1) for j in (-1, 0, 1) if (i, j) != (0, 0)]
        maxima = np.all([v > np.roll(v, shift, (0, 1)) for shift in shifts], axis=0).sum() / 32.0**2
        found.append([(v**4).mean() / v.var() ** 2, (v**3).mean() / v.std() ** 3, (slope**2).mean(), crossings, maxima])
    mean, error = mean_and_error(found)
    expected = np.array([3.0, 0.0, 2.0 * 0.1**2, math.sqrt(2.0) / math.pi, 1.0 / (math.sqrt(3.0) * math.pi)])
    assert (np.abs(mean - expected) < 4.0 * error + 0.01 * expected).all()
    assert (4.0 * error[2:] < 0.04 * expected[2:]).all()


def test_bumps_obey_campbells_theorem():
    """Cumulants of shot noise: density height**n int b**n = density height**n pi radius**2/n (Campbell 1909; Rice, Bell
    Syst. Tech. J. 23 (1944) 282, sec. 1.5); correlation exp(-r**2/(2 radius**2)).
    """
    for sign in ("hills", "wells"):
        found = []
        for seed in range(60):
            medium = BumpMedium(0.1, 1.0, 0.4, seed, sign=sign)
            axis = np.arange(64) * 0.5 - 11.0
            v = medium.rows(axis, axis)
            found.append([v.mean(), (v**2).mean(), (v**3).mean(), (v**4).mean(), (v[:, 3:] * v[:, :-3]).mean()])
        mean, error = mean_and_error(found)
        cumulant = [medium.density * medium.height**n * math.pi / n for n in range(1, 5)]
        expected = [0.0, 0.1**2, cumulant[2], cumulant[3] + 3.0 * 0.1**4, 0.1**2 * math.exp(-(1.5**2) / 2.0)]
        assert (np.abs(mean - expected) < 4.0 * error).all()
        assert abs(mean[2]) > 5.0 * error[2]  # the skewness shows
        assert medium.skewness == pytest.approx(cumulant[2] / cumulant[1] ** 1.5)


@pytest.mark.parametrize(
    "medium",
    [RandomMedium(0.08, 1.0, 7), medium_of("power-law", 3), BumpMedium(0.1, 1.0, 0.5, 4)],
    ids=["gaussian", "power-law", "bumps"],
)
def test_realisation_does_not_depend_on_the_grid(medium):
    """Three grids and two windows: equal at shared points to 1e-14 of the rms."""
    coarse = medium.rows(np.arange(0, 20.5, 0.5), np.arange(-8, 8.5, 0.5))
    for step in (0.25, 0.125):
        every = round(0.5 / step)
        fine = medium.rows(np.arange(0, 20 + step / 2, step), np.arange(-8, 8 + step / 2, step))
        assert np.abs(fine[::every, ::every] - coarse).max() <= 1e-14 * medium.strength
    part = medium.rows(np.arange(10, 12.5, 0.5), np.arange(-2, 3.5, 0.5))
    assert np.abs(part - coarse[20:25, 12:23]).max() <= 1e-14 * medium.strength


def test_realisation_does_not_depend_on_the_cut_off():
    """More modes leave those that are there as they are; the field changes by the variance that is added."""
    for family in ("matern", "power-law", "donor-layer"):
        few, many = medium_of(family, 5, lost_variance=1e-3), medium_of(family, 5, lost_variance=1e-5)
        qx, qy, amplitude = few._table
        wide_x, wide_y, wide = many._table
        there = np.ix_(np.isin(wide_x, qx), np.isin(wide_y, qy))
        kept = amplitude != 0
        assert kept.sum() > 200
        assert np.array_equal(amplitude[kept], wide[there][kept])
        axis = np.arange(96) * 0.25
        change = few.rows(axis, axis) - many.rows(axis, axis)
        assert 0.7 < change.std() / (0.1 * math.sqrt(1e-3 - 1e-5)) < 1.3


def test_realisation_is_the_same_in_threads_and_other_processes():
    medium = RandomMedium(0.08, 1.0, 7)
    x, y = np.linspace(0.0, 20.0, 64), np.linspace(-8.0, 8.0, 33)
    whole = medium.rows(x, y)
    with ThreadPoolExecutor(4) as pool:
        parts = list(pool.map(lambda rows: medium.with_().rows(rows, y), np.split(x, 8)))
    assert np.abs(np.concatenate(parts) - whole).max() < 1e-14
    code = (
        "import numpy, sys; from branchlab.media import RandomMedium; m = RandomMedium(0.08, 1.0, 7); "
        "print(*[repr(float(v)) for v in m.rows([0.0, 20.0], [-8.0, 8.0]).ravel()])"
    )
    told = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout.split()
    assert np.abs(np.array(told, float) - whole[np.ix_([0, -1], [0, -1])].ravel()).max() < 1e-14


PINNED = [0.03678829841448185, -0.021241121440115453, -0.12649741994799954]


def test_realisations_are_pinned():
    """Seeds keep their meaning from version to version: values of 2026-12-01."""
    found = [
        RandomMedium(0.08, 1.0, 7).rows([3.0], [1.0])[0, 0],
        RandomMedium(0.08, 1.0, 2**62 + 1).rows([3.0], [1.0])[0, 0],
        BumpMedium(0.1, 1.0, 0.5, 4).rows([3.0], [1.0])[0, 0],
    ]
    assert found == pytest.approx(PINNED, rel=1e-12)


def test_hash_is_uniform_and_independent():
    """Numbers of neighbouring modes, seeds and streams: uniform (chi-square of 64 bins) and uncorrelated (4/sqrt(n))."""
    m, n = np.arange(-300, 300)[:, None], np.arange(400)[None, :]
    base = uniform(5, m, n)
    counts = np.histogram(base, 64, (0.0, 1.0))[0]
    mean = base.size / 64
    chi = ((counts - mean) ** 2 / mean).sum()
    assert abs(chi - 63.0) < 4.0 * math.sqrt(2 * 63.0)
    others = [uniform(6, m, n), uniform(5, m + 1, n), uniform(5, m, n + 1), uniform(5, m, n, 1), uniform(5, n, m)]
    others += [uniform(5 + 2**32, m, n), uniform(5 + 2**62, m, n)]
    for other in others:
        assert abs(np.corrcoef(base.ravel(), other.ravel())[0, 1]) < 4.0 / math.sqrt(base.size)
    z = complex_normal(5, m, n)
    tolerance = 4.0 / math.sqrt(z.size)
    assert abs((np.abs(z) ** 2).mean() - 1.0) < tolerance
    assert abs((z**2).mean()) < tolerance
    assert abs((np.abs(z) ** 4).mean() - 2.0) < 4.5 * tolerance  # standard deviation sqrt(20)


def test_a_sampled_medium_is_the_medium_it_samples():
    """Quintic splines: value falls with the 6th power of the spacing, second derivative with the 4th."""
    medium = RandomMedium(0.08, 1.0, 7)
    rng = np.random.default_rng(1)
    px, py = rng.uniform(3, 12, 60), rng.uniform(-4, 4, 50)
    errors = []
    for step in (0.25, 0.125):
        x, y = np.arange(0, 15 + step / 2, step), np.arange(-7, 7 + step / 2, step)
        sampled = SampledMedium(medium.rows(x, y), x, y)
        errors.append(
            [
                np.sqrt(((sampled.rows(px, py, dy=n) - medium.rows(px, py, dy=n)) ** 2).mean()) / medium.strength
                for n in (0, 1, 2)
            ]
        )
    orders = np.log2(np.array(errors[0]) / np.array(errors[1]))
    assert (orders > [5.5, 4.5, 3.5]).all()
    assert (np.array(errors[1]) < [1e-6, 2e-5, 4e-4]).all()
    assert sampled.scale == pytest.approx(1.0, rel=0.1)


def test_families_without_a_ray_limit_warn():
    for options in ({"family": "exponential"}, {"family": "matern", "smoothness": 1.5}):
        with pytest.warns(BranchlabWarning, match="have no limit"):
            RandomMedium(0.1, 1.0, 1, **options)


def test_exponential_correlation():
    """exp(-r/l) within 4 standard errors and the 2 % that the cut-off leaves out."""
    found = []
    for seed in range(12):
        with pytest.warns(BranchlabWarning):
            medium = RandomMedium(0.1, 1.0, seed, "exponential", box=BOX)
        axis = np.arange(96) * 0.25
        v = medium.rows(axis, axis)
        found.append([(v * np.roll(v, m, 1)).mean() / 0.01 for m in (0, 2, 4, 8)])
    mean, error = mean_and_error(found)
    missing = 2.0 * math.pi / math.prod(BOX)
    assert (np.abs(mean - np.exp([0.0, -0.5, -1.0, -2.0])) < 4.0 * error + 0.021 + missing).all()
