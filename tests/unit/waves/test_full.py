"""FullWave: kernels against plain twins, what a result holds, and slips answered in words."""

import numpy as np
import pytest

from branchlab.errors import BranchlabWarning, ConvergenceError, InputError, RangeError, ResourceError
from branchlab.kernels.native_fft import available
from branchlab.launch import AngularSpread, Beam, FieldSource, PlaneWave, PointSource, Setup
from branchlab.media import Lens, RandomMedium, SampledMedium
from branchlab.results.layout import check
from branchlab.waves import FullWave, full_problem
from branchlab.waves.flux import ScreenReader
from branchlab.waves.full_grid import SlabTable
from branchlab.waves.full_problem import FullProblem
from branchlab.waves.incoming import incoming
from branchlab.waves.team import Team, shares
from tests.oracles.empty import Empty
from tests.oracles.full_twins import direct_sum, marches, operator

MEDIUM = RandomMedium(0.08, 1.0, 4, box=(32.0, 32.0))


def small(sides="absorbing", source=None, medium=MEDIUM, length=4.0, width=5.0, **options):
    return Setup(medium, source or Beam(0.8), length, width, sides, screens=5, cells=40, **options)


@pytest.fixture(params=["native", "scipy"])
def transforms(request, monkeypatch):
    """Both doors to transforms."""
    if request.param == "scipy":
        monkeypatch.setenv("BRANCHLAB_FFT", "scipy")
    elif not available():
        pytest.skip("no planned transforms here")
    return request.param


@pytest.mark.parametrize(("dtype", "allowed"), [(np.complex128, 1e-12), (np.complex64, 1e-5)])
@pytest.mark.parametrize("sides", ["periodic", "absorbing"])
def test_operator_and_sweeps_against_twins(transforms, dtype, allowed, sides, rng):  # noqa: ARG001
    setup = small(sides, PlaneWave(0.2))
    with Team() as team:
        problem = FullProblem(SlabTable(setup), 0.5, dtype, team, resolution=1.0)
        grid, op, sweeps = problem.machinery(setup.parts()[0])
        field = (rng.normal(size=grid.shape) + 1j * rng.normal(size=grid.shape)).astype(dtype)
        out = op.empty()
        op.apply(out, field)
        u = problem.u.astype(float)
        exact = operator(field, u, grid.loss_x, grid.loss_y, grid.qx, grid.qy, grid.k, op.eps)
        assert np.abs(out - exact).max() < allowed * np.abs(exact).max()
        lines = sweeps.along
        q = np.zeros_like(field)
        q[3:-2] = field[3:-2]
        found = np.zeros_like(field)
        lines.run(found, q, lambda thread, begin, end: None)
        twin = marches(q, u, lines.screen, lines.steps[0] / 1.0, lines.bend, float(lines.curve[0]))
        assert np.abs(found - twin).max() < 10 * allowed * np.abs(twin).max()


def test_wide_sweeps_do_the_same_through_both_doors(monkeypatch, rng):
    if not available():
        pytest.skip("no planned transforms here")
    setup = small("periodic", PlaneWave(0.3))
    found = []
    noise = None
    for door in ("", "scipy"):
        monkeypatch.setenv("BRANCHLAB_FFT", door)
        with Team() as team:
            problem = FullProblem(SlabTable(setup), 0.5, complex, team, resolution=1.0)
            grid, op, sweeps = problem.machinery(setup.parts()[0])
            noise = rng.normal(size=grid.shape) + 1j * rng.normal(size=grid.shape) if noise is None else noise
            for wide in (False, True):
                out = op.empty()
                if wide:
                    sweeps.widen()
                sweeps.apply(out, noise)
                found.append(out)
    for a, b in zip(found[:2], found[2:], strict=True):
        assert np.abs(a - b).max() < 1e-12 * np.abs(a).max()


def test_sweeps_are_nearly_the_inverse():
    """M A psi is psi, nearly: what makes few iterations."""
    setup = small()
    with Team() as team:
        problem = FullProblem(SlabTable(setup), 0.25, complex, team, resolution=1.1)
        grid, op, sweeps = problem.machinery(setup.parts()[0])
        psi = incoming(grid, setup.parts()[0]).rows(grid.x) * np.exp(-(((grid.x[:, None] - 2) / 2) ** 2))
        image, back = op.empty(), op.empty()
        op.apply(image, psi)
        sweeps.apply(back, image)
        assert np.linalg.norm(back - psi) < 0.1 * np.linalg.norm(psi)


def test_screens_read_between_grid_points(rng):
    setup = small()
    grid = SlabTable(setup)
    with Team() as team:
        problem = FullProblem(grid, 0.5, complex, team, resolution=1.0)
        grid = problem.machinery(setup.parts()[0])[0]
    field = np.zeros(grid.shape, complex)
    waves = rng.normal(size=5) + 1j * rng.normal(size=5)
    orders = np.array([-7, -2, 0, 3, 9])
    turn = 2 * np.pi * orders / grid.span[0]
    field += (np.exp(1j * np.multiply.outer(grid.x, turn)) @ waves)[:, None]
    at = np.array([0.123, 1.9, 3.3])
    reader = ScreenReader(grid, at)
    exact = np.exp(1j * np.multiply.outer(at, turn))
    assert np.abs(reader.values(field)[:, 0] - exact @ waves).max() < 1e-12
    assert np.abs(reader.slopes(field)[:, 0] - exact @ (1j * turn * waves)).max() < 1e-10


def test_cell_means_are_integrals():
    """The mean of abs(psi)**2 over a cell against many points of its Fourier series."""
    setup = small("periodic", PlaneWave())
    with Team() as team:
        grid = FullProblem(SlabTable(setup), 0.5, complex, team, resolution=1.0)._grid(0.0)
    y = grid.y
    psi = (1.0 + 0.5 * np.exp(6j * np.pi * y / 5.0) - 0.3j * np.exp(-14j * np.pi * y / 5.0))[None]
    reader = ScreenReader(grid, [0.0])
    found = reader.cell_means(psi, psi).real[0]
    fine = (np.arange(40 * 200) + 0.5) / 200 * 0.125 - 2.5
    values = direct_sum(psi[0], y, 5.0, fine)
    assert np.abs(found - (np.abs(values) ** 2).reshape(40, 200).mean(axis=1)).max() < 1e-5
    assert found.sum() * 0.125 == pytest.approx(np.mean(np.abs(psi) ** 2) * 5.0, rel=1e-12)


@pytest.mark.parametrize(
    "source",
    [
        PlaneWave(0.2),
        Beam(0.8, angle=0.3),
        PointSource(-1.0, 0.2, half_angle=0.4),
        AngularSpread(PlaneWave(), 0.1, nodes=3),
    ],
)
@pytest.mark.parametrize("sides", ["periodic", "absorbing"])
def test_every_source_makes_a_result(source, sides):
    setup = small(sides, source)
    result = FullWave(setup, "single").solve([0.31, 0.4])
    check(result, "wave")
    assert result.model == "full"
    assert result.carrier == "none"
    assert result.sizes["wavelength"] == 2
    assert (result.numerical_error > 0).all()
    assert (result.intensity > -1e-9).all()
    assert (result.field_error < 1.5e-3).all()
    double = FullWave(setup).solve([0.31, 0.4])
    moved = 0.5 * np.abs(result.intensity - double.intensity).sum("y") / double.intensity.sum("y")
    assert (moved < 1e-3).all()


def test_empty_space_needs_no_iteration():
    result = FullWave(small("periodic", PlaneWave(), Empty())).solve(0.4)
    assert int(result.iterations[0]) == 0
    assert np.abs(result.intensity - 1.0).max() < 1e-12
    assert float(result.reflected[0]) == 0.0


def test_entry_field_is_the_sources():
    """In empty space the field at x = 0 is the entry wave."""
    y = np.linspace(-2.0, 2.0, 81)
    source = FieldSource(y, np.exp(-((y / 0.7) ** 2)), 0.1 * y)
    setup = small("absorbing", source, Empty())
    result = FullWave(setup).solve(0.3, fields=True)
    at = result.y_fine.values
    inside = np.abs(at) < 2.0
    exact = setup.parts()[0].entry(at, np.array([2 * np.pi / 0.3]))[0]
    assert np.abs(result.psi.values[0, 0] - exact)[inside].max() < 1e-3  # the samples end at 3e-4


def test_parts_add_as_intensities():
    setup = small("periodic", AngularSpread(PlaneWave(), 0.1, nodes=3))
    together = FullWave(setup).solve(0.4).intensity
    alone = sum(
        part.weight * FullWave(small("periodic", PlaneWave(np.arcsin(part.tilt)))).solve(0.4).intensity
        for part in setup.parts()
    )
    assert np.abs(together - alone).max() < 1e-9


def test_medium_with_a_mean():
    """v with a constant is the same problem at another wavenumber."""
    x, y = np.linspace(-1.0, 6.0, 141), np.linspace(-8.0, 8.0, 257)
    bump = 0.1 * np.exp(-((x[:, None] - 2.5) ** 2) - y**2)
    low = SampledMedium(bump - bump.mean(), x, y)
    high = SampledMedium(0.75 * (bump - bump.mean()) + 0.25, x, y)
    assert high.mean == pytest.approx(0.25, abs=1e-12)
    one = FullWave(small("periodic", PlaneWave(), low)).solve(0.4, tolerance=1e-5)
    two = FullWave(small("periodic", PlaneWave(), high)).solve(0.4 * np.sqrt(0.75), tolerance=1e-5)
    assert np.abs(one.intensity.values - two.intensity.values).max() < 2e-3
    assert two.flux.values == pytest.approx(one.flux.values, rel=1e-4)


def test_progress_and_cancel():
    told = []
    FullWave(small()).solve([0.4, 0.5], told.append)
    assert told == sorted(told)
    assert told[-1] == 1.0
    assert len(told) > 2

    def stop(share):
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        FullWave(small()).solve(0.4, stop)


def test_born_series_takes_over(monkeypatch):
    """What the sweeps do not finish, the series does, to the same answer."""
    exact = FullWave(small()).solve(0.4, tolerance=1e-5).intensity
    monkeypatch.setattr(full_problem, "SWEEPS_UP_TO", -1.0)
    result = FullWave(small()).solve(0.4, tolerance=1e-5)
    assert int(result.iterations[0]) > 50
    assert np.abs(result.intensity - exact).max() < 1e-4


def test_what_does_not_converge_raises_and_carries_the_best(monkeypatch):
    monkeypatch.setattr("branchlab.waves.full_iteration.MOST_ITERATIONS", 1)
    monkeypatch.setattr("branchlab.waves.born.LONGEST", 40)
    with pytest.raises(ConvergenceError, match="tolerance 1e-07") as caught:
        FullWave(small()).solve(0.4, tolerance=1e-7)
    check(caught.value.best, "wave")
    assert float(caught.value.best.field_error[0]) > 1e-7


def test_memory_is_refused_before_it_is_taken(monkeypatch):
    monkeypatch.setattr("branchlab.errors.available_memory", lambda: 4 << 20)
    with pytest.raises(ResourceError, match="GiB are free"):
        FullWave(small()).solve(0.1)


def test_grazing_resonance_is_told():
    with pytest.warns(BranchlabWarning, match="whole number of times"):
        FullWave(small("periodic", PlaneWave(), Lens(0.05, 0.8, x=2.0)), "single").solve(0.5)


def test_coarse_grid_is_told():
    with pytest.warns(BranchlabWarning, match="points_per_wavelength"):
        FullWave(small(), points_per_wavelength=2.45).solve(0.4)


@pytest.mark.parametrize(
    ("act", "error", "words"),
    [
        (lambda: FullWave(small(), "half"), InputError, "'double', 'single'"),
        (lambda: FullWave(small(), points_per_wavelength=0.0), InputError, r"\(0, 64\]"),
        (lambda: FullWave(small(), points_per_wavelength=1.9).solve(0.4), RangeError, "Use 3 or more"),
        (lambda: FullWave(small()).solve(0.4, tolerance=1.0), InputError, r"\[1e-08, 0.1\]"),
        (lambda: FullWave(small(), "single").solve(0.4, tolerance=1e-6), InputError, r"\[1e-05, 0.1\]"),
        (lambda: FullWave(small()).solve(-0.4), InputError, "wavelength must be positive"),
        (lambda: FullWave(small()).solve(1.5), RangeError, "wavelength <= 1.333"),
        (lambda: FullWave(small()).solve([0.4, 0.5], fields=True), InputError, "got 2 and 1"),
        (
            lambda: FullWave(small(source=AngularSpread(PlaneWave(), 0.1, nodes=3))).solve(0.4, fields=True),
            InputError,
            "got 1 and 3",
        ),
        (
            lambda: FullWave(small(source=AngularSpread(PlaneWave(1.2), 0.1, nodes=3))).solve(0.4),
            RangeError,
            "must stay below 1 in size",
        ),
    ],
)
def test_slips_are_answered_in_words(act, error, words):
    with pytest.raises(error, match=words):
        act()


def test_samples_too_coarse_for_the_wave(rng):
    axis = np.linspace(-10.0, 10.0, 41)
    rough = SampledMedium(0.05 * rng.normal(size=(41, 41)), axis, axis)
    assert rough.shortest_wavelength > 0.0
    with pytest.raises(InputError, match="6 points each"):
        FullWave(small(medium=rough)).solve(0.5 * rough.shortest_wavelength)


def test_shares():
    assert shares(10, 4) == [(0, 4), (4, 10)]
