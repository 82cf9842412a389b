"""Ray kernels against plain twins; serial against parallel; what is not finite stays where it is."""

import numba
import numpy as np
import pytest

from branchlab.kernels.ray_step import BLOCK, FRONT_ROWS, MATRIX_ROWS, from_true, march_screens
from branchlab.kernels.spline import CELL, empty_cells, quintic_cells
from branchlab.kernels.tubes import lay_tubes, worst_sagitta
from tests.oracles import rays_plain as plain

N, SPAN, START, STEP = 64, 8.0, -4.0, 0.25


@pytest.fixture
def rows(rng):
    """Smooth random samples: 6 kicks, then W and W_x on 4 screens."""
    q = 2 * np.pi * np.fft.rfftfreq(N, SPAN / N)
    waves = rng.standard_normal((14, q.size)) + 1j * rng.standard_normal((14, q.size))
    v = np.fft.irfft(waves * np.exp(-(q**2) / 4) * (q > 0), N)
    return 0.1 * v / v.std()


def test_spline_is_that_of_scipy(rng):
    samples = rng.standard_normal((3, 16))
    cells = quintic_cells(samples)
    assert cells.shape == (3, 16, CELL)
    t = np.linspace(0, 1, 7)[:-1]
    for row, values in zip(cells, samples, strict=True):
        exact = plain.PeriodicSpline(values, 0.0, 16.0)
        for j in range(16):
            found = np.polynomial.polynomial.polyval(t, row[j])
            np.testing.assert_allclose(found, exact(j + t), atol=1e-12)


def test_cells_lie_on_cache_lines():
    for shape in ((5, 7), (1, 1), (33, 128)):
        room = empty_cells(*shape)
        assert room.shape == (*shape, CELL)
        assert room.flags.c_contiguous
        assert room.__array_interface__["data"][0] % 64 == 0


def started(rng, rows_of_state, count=BLOCK):
    state = np.zeros((rows_of_state, count))
    state[0], state[1] = rng.uniform(-12, 12, count), rng.uniform(-0.3, 0.3, count)
    state[2] = rng.uniform(-1, 1, count)
    state[3], state[4] = rng.uniform(0, 1, count), rng.uniform(-1, 1, count)  # fronts start with dy/ds >= 0
    if rows_of_state == MATRIX_ROWS:
        state[6], state[7] = rng.uniform(-1, 1, (2, count))
    return state


def tables(rows):
    cells = quintic_cells(rows).reshape(rows.shape[0], -1)
    return np.ascontiguousarray(cells[:6]).ravel(), cells[6:10].copy(), cells[10:14].copy()


@pytest.mark.parametrize("rows_of_state", [FRONT_ROWS, MATRIX_ROWS])
def test_march_is_that_of_the_plain_twin(rng, rows, rows_of_state):
    """Three screens of two steps each, every ray alone, in true coordinates on every screen."""
    kicks, potential, gradient = tables(rows)
    splines = [plain.PeriodicSpline(row, START, SPAN) for row in rows]
    c, inverse = STEP**2 / 24, N / SPAN
    state = started(rng, rows_of_state)
    first = state.copy()
    true = np.empty((3, *state.shape))
    from_true(state, potential[0], gradient[0], N, START, inverse, c)
    march_screens(state, true, kicks, potential, gradient, N, START, inverse, STEP, c, 2, 0)
    order = [0, 1, 2, 3, 4] if rows_of_state == FRONT_ROWS else [0, 1, 2, 3, 4, 6, 7]
    for i in range(0, BLOCK, 8):
        ray = np.zeros(7)
        ray[: len(order)] = first[order, i]
        ray, turns = plain.from_true(ray, splines[6], splines[10], c), 0
        for screen in range(3):
            for step in range(2):
                ray, passed = plain.kernel_step(ray, splines[2 * screen + step], STEP)
                turns += passed
            exact = plain.to_true(ray, splines[7 + screen], splines[11 + screen], c)
            np.testing.assert_allclose(true[screen, order, i], exact[: len(order)], rtol=1e-11, atol=1e-12)
            # the index is the twin's, put right by the sign of the true A
            assert abs(true[screen, 5, i] - turns) <= 1
            assert true[screen, 3, i] * (-1) ** int(true[screen, 5, i]) > 0
    assert true[-1, 5].max() >= 1


def test_a_tangent_that_stops_on_zero_has_passed_one_caustic():
    """Kicks that do nothing: A = 1, 0, -2, -3, back behind one caustic as -1, 0, 2, 3; a start on zero is none."""
    state = np.zeros((FRONT_ROWS, BLOCK))
    state[3, :4], state[4, :4] = [1.0, -1.0, 0.0, -0.0], [-8.0, 8.0, 1.0, 1.0]
    state[5, 1] = 1.0
    true = np.empty((1, *state.shape))
    flat = np.zeros((2, N * CELL))
    march_screens(state, true, flat.ravel(), flat, flat, N, START, N / SPAN, 0.25, 0.0, 2, 0)
    np.testing.assert_array_equal(state[3, :4], [-3.0, 3.0, 0.5, 0.5])
    np.testing.assert_array_equal(state[5, :4], [1, 2, 0, 0])
    np.testing.assert_array_equal(true[0, 5, :4], [1, 2, 0, 0])


def test_processor_undoes_itself(rng, rows):
    """Zero steps of no length: from true coordinates to the kernel map's and back, to round-off."""
    kicks, potential, gradient = tables(rows)
    state = started(rng, MATRIX_ROWS)
    true, first = np.empty((1, *state.shape)), state.copy()
    from_true(state, potential[1], gradient[1], N, START, N / SPAN, 0.01)
    assert np.abs(state - first).max() > 1e-4
    march_screens(state, true, 0 * kicks, potential, gradient, N, START, N / SPAN, 0.0, 0.01, 1, 0)
    np.testing.assert_allclose(true[0], first, atol=1e-13)


@pytest.mark.parametrize("rows_of_state", [FRONT_ROWS, MATRIX_ROWS])
def test_serial_is_parallel(rng, rows, rows_of_state):
    kicks, potential, gradient = tables(rows)
    start = started(rng, rows_of_state, 8 * BLOCK)
    threads, found = numba.get_num_threads(), []
    try:
        for count in (1, threads):
            numba.set_num_threads(count)
            state, true = start.copy(), np.empty((3, *start.shape))
            from_true(state, potential[0], gradient[0], N, START, N / SPAN, 0.01)
            march_screens(state, true, kicks, potential, gradient, N, START, N / SPAN, STEP, 0.01, 2, 0)
            found.append(true)
    finally:
        numba.set_num_threads(threads)
    np.testing.assert_array_equal(*found)


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf, 1e300])
def test_what_is_not_finite_spoils_nothing_else(rng, rows, bad):
    """Look-ups stay inside the table, the other rays are untouched, and nan stays nan."""
    kicks, potential, gradient = tables(rows)
    found = []
    for spoilt in (False, True):
        state = started(np.random.default_rng(1), MATRIX_ROWS)
        if spoilt:
            state[0, 3] = bad
        true = np.empty((3, *state.shape))
        from_true(state, potential[0], gradient[0], N, START, N / SPAN, 0.01)
        march_screens(state, true, kicks, potential, gradient, N, START, N / SPAN, STEP, 0.01, 2, 0)
        found.append(np.delete(true, 3, axis=2))
        if spoilt and abs(bad) != 1e300:
            assert not np.isfinite(true[-1, 0, 3])
    np.testing.assert_array_equal(*found)


def wild_tubes(rng, count=60):
    y = np.cumsum(rng.uniform(-1, 1.5, count))
    stretch = rng.uniform(-6, 6, count)
    return y[None], stretch[None], rng.uniform(0.2, 1.0, count - 1), rng.uniform(0.1, 1.0, count - 1)


@pytest.mark.parametrize("periodic", [True, False])
def test_tubes_are_those_of_the_plain_twin(rng, periodic):
    for _ in range(5):
        y, stretch, steps, flux = wild_tubes(rng)
        laid, outside, unresolved = lay_tubes(y, stretch, steps, flux[None], 0.0, -2.0, 0.25, 64, periodic, 1e9)
        exact, beyond = plain.lay_tubes(y[0], stretch[0], steps, flux, -2.0, 0.25, 64, periodic)
        np.testing.assert_allclose(laid[0], exact, atol=1e-9)
        np.testing.assert_allclose(outside[0], beyond, atol=1e-9)
        assert unresolved[0] == 0
        assert abs(laid.sum() + outside.sum() - flux.sum()) < 1e-13 * flux.sum()


def test_coarse_tubes_are_straight_and_counted():
    y, stretch = np.array([[0.1, 3.9]]), np.array([[40.0, -40.0]])
    one = np.ones(1)
    laid, _, unresolved = lay_tubes(y, stretch, one, one[None], 0.0, 0.0, 1.0, 4, False, 8.0)
    np.testing.assert_allclose(laid[0] * 3.8, [0.9, 1.0, 1.0, 0.9])
    assert unresolved[0] == 1.0


def test_tubes_that_are_not_finite_are_lost_not_hidden():
    y, stretch = np.array([[0.5, np.nan, 1.5, np.inf]]), np.ones((1, 4))
    laid, outside, unresolved = lay_tubes(y, stretch, np.ones(3), np.ones((1, 3)), 0.0, 0.0, 1.0, 4, True, 8.0)
    assert laid.sum() == 0
    assert outside[0] == unresolved[0] == 3.0


def test_tubes_on_edges_of_cells():
    """Rays that sit on edges, and tubes of no width, are laid once."""
    y, stretch = np.array([[0.0, 1.0, 1.0, 0.0, 2.0, 4.0]]), np.array([[1.0, 1.0, 0.0, -1.0, 2.0, 2.0]])
    laid, outside, _ = lay_tubes(y, stretch, np.ones(5), np.ones((1, 5)), 0.0, 0.0, 1.0, 4, False, 8.0)
    assert abs(laid.sum() + outside.sum() - 5.0) < 1e-14
    assert laid[0, 0] > 1.0


def test_a_closed_front_comes_round():
    """Two rays of a closed front: the last tube runs to the first ray, one lap on."""
    y, stretch = np.array([[0.0, 2.0]]), np.ones((1, 2))
    laid, _, _ = lay_tubes(y, stretch, np.full(2, 2.0), np.full((1, 2), 2.0), 4.0, 0.0, 0.5, 8, True, 8.0)
    np.testing.assert_allclose(laid[0], 0.5)


def test_worst_sagitta(rng):
    y0, y1, a0, a1 = rng.uniform(-4, 4, (4, 3, 700))
    steps = rng.uniform(0.1, 1, 700)
    chord = y1 - y0
    sagitta = np.abs(a0 * steps - chord) + np.abs(a1 * steps - chord)
    np.testing.assert_allclose(worst_sagitta(y0, y1, a0, a1, steps, np.inf), sagitta.max(axis=0), rtol=1e-14)
    beyond = np.minimum(y0, y1) > 1.0 + sagitta
    beyond |= np.maximum(y0, y1) < -1.0 - sagitta
    assert beyond.any()
    exact = np.where(beyond, 0.0, sagitta).max(axis=0)
    np.testing.assert_allclose(worst_sagitta(y0, y1, a0, a1, steps, 1.0), exact, rtol=1e-14)
