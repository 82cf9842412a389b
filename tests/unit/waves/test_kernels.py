"""Wave kernels against plain twins, and both ways of transforming against each other."""

import numpy as np
import pytest

from branchlab.kernels import fourier, screens
from branchlab.launch import AngularSpread, PlaneWave, Setup
from branchlab.media import RandomMedium
from branchlab.waves.march import March
from branchlab.waves.table import ScreenTable
from tests.oracles import wave_twins

DTYPES = [(np.complex128, 1e-13), (np.complex64, 3e-6)]


def complex_rows(rng, rows, n, dtype):
    return (rng.normal(size=(rows, n)) + 1j * rng.normal(size=(rows, n))).astype(dtype)


@pytest.mark.parametrize("way", ["", "scipy"])
@pytest.mark.parametrize(("dtype", "tolerance"), DTYPES)
def test_both_ways_of_transforming_equal_numpy(way, dtype, tolerance, rng, monkeypatch):
    """Round-off: a few units in the last place times log2 n."""
    monkeypatch.setenv("BRANCHLAB_FFT", way)
    if not way:
        pytest.importorskip("pyfftw", reason="the extra `fast` is not installed: only one way exists")
    assert fourier.planned() == (way != "scipy")
    block = fourier.RowBlock(3, 480, dtype)
    given = complex_rows(rng, 3, 480, dtype)
    block.data[...] = given
    block.forward()
    assert np.abs(block.data - np.fft.fft(given)).max() < 480**0.5 * 10 * tolerance
    block.inverse()
    assert np.abs(block.data / 480 - given).max() < 10 * tolerance


@pytest.mark.parametrize("order", [1, 2, 3])
@pytest.mark.parametrize("n", [64, 75])
def test_periodic_derivative_is_exact_for_harmonics(order, n):
    span = 7.0
    y = (np.arange(n) + 0.5) * span / n
    q = 2 * np.pi * 5 / span
    exact = (np.sin(q * y), q * np.cos(q * y), -(q**2) * np.sin(q * y), -(q**3) * np.cos(q * y))[order]
    assert np.abs(fourier.periodic_derivative(np.sin(q * y), span, order) - exact).max() < 1e-10 * q**order


@pytest.mark.parametrize(("m", "n"), [(32, 32), (32, 96), (32, 45), (45, 64), (45, 81)])
def test_resampled_rows_are_the_same_function(m, n):
    span = 3.0

    def function(count):
        y = (np.arange(count) + 0.5) * span / count
        return 0.3 + np.cos(2 * np.pi * 3 * y / span) + 0.5 * np.sin(2 * np.pi * 11 * y / span)

    assert np.abs(fourier.resampled(function(m)[None], n)[0] - function(n)).max() < 1e-12


@pytest.mark.parametrize(("dtype", "tolerance"), DTYPES)
def test_screens_equal_exponentials(dtype, tolerance, rng):
    """To round-off for phases up to 100 radians (in single precision the phase itself is known to 1e-5)."""
    field = complex_rows(rng, 4, 200, dtype)
    real = field.real.dtype
    path, keep = rng.normal(size=200).astype(real), rng.uniform(0.5, 1.0, 200).astype(real)
    turn = np.array([0.1, 1.0, 5.0, 25.0], real)
    expected = wave_twins.screened(field.astype(complex), path.astype(float), turn.astype(float), keep.astype(float))
    kernel = screens.screen64 if dtype == np.complex128 else screens.screen32
    kernel(field.view(real), path, turn, keep)
    assert np.abs(field - expected).max() < 10 * tolerance


def test_nan_is_not_hidden(rng):
    field = complex_rows(rng, 1, 16, np.complex128)
    path = np.zeros(16)
    path[3] = np.nan
    screens.screen64(field.view(float), path, np.ones(1), np.ones(16))
    assert np.isnan(field[0, 3])
    assert np.isfinite(np.delete(field[0], 3)).all()


def test_cell_means_and_shares_equal_their_twins(rng):
    field, slope = complex_rows(rng, 3, 60, complex), complex_rows(rng, 3, 60, complex)
    across, bend = rng.normal(size=60), rng.normal(size=60)
    out = np.empty((3, 12))
    screens.cell_intensity(out, field, slope, across, bend, 0.01)
    assert np.allclose(out, wave_twins.cell_means(field, slope, across, bend, 0.01, 12), rtol=1e-13)
    power = np.abs(field) ** 2
    assert np.allclose(screens.outer_share(field, 20, 30), power[:, 20:30].sum(1) / power.sum(1), rtol=1e-13)
    made = np.empty_like(field)
    screens.differentiate(made, field, across, bend[:3])
    assert np.allclose(made, 1j * (across + bend[:3, None]) * field, rtol=1e-13)
    screens.multiply_into(made, field, slope)
    assert np.allclose(made, field * slope, rtol=1e-13)
    screens.multiply(field, slope)
    assert np.allclose(field, made, rtol=1e-13)


@pytest.mark.parametrize("sides", ["periodic"])
@pytest.mark.parametrize("source", [PlaneWave(), PlaneWave(0.1)], ids=["straight", "tilted"])
def test_march_equals_the_plain_one(sides, source):
    """Third-order against tenth-order series of the processor: 1e-9 of the field."""
    setup = Setup(RandomMedium(0.05, 1.0, 7), source, 4.0, 16.0, sides, screens=3, cells=256)
    k = np.array([25.0, 40.0, 61.0])
    march = March(setup, setup.parts()[0], k, ScreenTable(setup, 512, 8), np.complex128)
    *_, seen = march.run()
    field = march.true_field(seen.field, seen.screen)
    for i, one in enumerate(k):
        plain = wave_twins.plain_march(setup, setup.parts()[0], one, 512, 16)
        assert np.abs(field[i] - plain).max() < 1e-8
        means = (np.abs(plain) ** 2).reshape(256, 2).mean(axis=1)
        assert np.abs(seen.intensity[i] - means).max() < 1e-5


def test_one_table_serves_all_parts_and_many_blocks_equal_one():
    setup = Setup(
        RandomMedium(0.05, 1.0, 7), AngularSpread(PlaneWave(), 0.05, nodes=3), 4.0, 16.0, screens=3, cells=256
    )
    table = ScreenTable(setup, 512, 4)
    k = np.linspace(20.0, 60.0, 19)
    for part in setup.parts():
        *_, together = March(setup, part, k, table, np.complex128).run()
        for i in (0, 9, 18):
            *_, alone = March(setup, part, k[i : i + 1], table, np.complex128).run()
            assert np.abs(together.field[i] - alone.field[0]).max() < 1e-12
