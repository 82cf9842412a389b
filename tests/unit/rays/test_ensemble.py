"""The public object: layout, parts, resolution, slips."""

import numpy as np
import pytest

from branchlab.errors import InputError, RangeError, ResourceError
from branchlab.launch import AngularSpread, Beam, PlaneWave, PointSource
from branchlab.media import RandomMedium
from branchlab.rays import RayEnsemble
from branchlab.results import setup_of
from branchlab.results.layout import faults
from tests.canon import SOURCES, setup_with
from tests.oracles.empty import Bowl, Empty

STRONG = {"medium": RandomMedium(0.1, 1.0, seed=7), "length": 14.0}


def rays_of(**options):
    return RayEnsemble(setup_with(**options))


@pytest.mark.parametrize("source", SOURCES, ids=lambda s: type(s).__name__)
def test_layout_of_every_result(source):
    rays = rays_of(source=source, sides="absorbing")
    results = {
        "density": rays.density(), "trace": rays.trace(40), "caustics": rays.caustics(40), "section": rays.section(2.3, 40),
    }  # fmt: skip
    for kind, result in results.items():
        assert faults(result, kind) == []
        assert setup_of(result) == rays.setup
        assert result.attrs["model"] == "paraxial"
    parts = len(rays.setup.parts())
    assert results["trace"].sizes["ray"] == 40 * parts
    np.testing.assert_array_equal(results["trace"].part, np.repeat(np.arange(parts), 40))


# ---- density


@pytest.mark.parametrize("sides", ["periodic", "absorbing"])
def test_flux_is_closed(sides):
    """Sum over cells, and what left, against what was sent: round-off."""
    density = rays_of(sides=sides, **STRONG).density()
    sent = float(density.flux[0] + density.lost_flux[0])
    np.testing.assert_allclose(density.flux + density.lost_flux, sent, rtol=1e-12)
    cell = 16.0 / density.sizes["y"]
    np.testing.assert_allclose(density.intensity.sum("y") * cell, density.flux, rtol=1e-12)
    if sides == "periodic":
        assert sent == pytest.approx(16.0, rel=1e-13)


def test_entry_density_is_the_incoming_intensity():
    density = rays_of().density()
    np.testing.assert_allclose(density.intensity[0], 1.0, atol=1e-12)
    assert float(density.rays_per_point[0]) == pytest.approx(1.0)


def test_density_does_not_depend_on_the_rays_it_began_with():
    """Twice the rays and half the step change it by less than its error says."""
    setup = setup_with(**STRONG)
    plain, fine = RayEnsemble(setup).density(), RayEnsemble(setup, rays_per_scale=111.0, steps_per_scale=8).density()
    moved = 0.5 * np.abs(plain.intensity - fine.intensity).mean("y")
    assert (moved <= plain.numerical_error + 1e-12).all()
    assert float(moved[-1]) > 0.0
    assert (fine.numerical_error[5:] < plain.numerical_error[5:]).all()


def test_coarser_resolution_needs_fewer_rays_and_says_what_it_costs():
    rays = rays_of(**STRONG)
    fine, coarse = rays.density(), rays.density(resolution=0.5)
    assert float(coarse.numerical_error[-1]) > float(fine.numerical_error[-1])
    smooth = np.ones(8) / 8  # cells of half a correlation length: what was asked for
    means = [d.intensity[-1].to_numpy().reshape(-1, 8) @ smooth for d in (fine, coarse)]
    assert 0.5 * np.abs(means[0] - means[1]).mean() < 0.02
    assert float(rays.density(resolution=2.0).unresolved_flux.max()) == 0.0  # 32 cells: what was asked for is there


def test_unresolved_flux_is_told():
    setup = setup_with(**STRONG)
    few = RayEnsemble(setup, rays_per_scale=2.0, most_rays=128).density()
    assert float(few.unresolved_flux[-1]) > 0.1 * 16
    assert float(few.unresolved_flux[0]) == 0.0
    assert float(few.flux[-1]) == pytest.approx(16.0, rel=1e-12)
    assert float(RayEnsemble(setup).density().unresolved_flux[-1]) == 0.0


def test_parts_are_summed_with_their_weights():
    source = AngularSpread(PlaneWave(), 0.05, nodes=3)
    setup = setup_with(source=source)
    total = RayEnsemble(setup).density()
    expected = 0.0
    for part in setup.parts():
        angle = float(np.arcsin(part.tilt))
        expected += part.weight * RayEnsemble(setup.with_(source=PlaneWave(angle))).density().intensity
    np.testing.assert_allclose(total.intensity, expected, atol=1e-9)


def test_everything_meets_in_one_cell_at_a_focus():
    """A flat front in a duct, at the focus: intensity is finite and the flux is there."""
    rays = RayEnsemble(setup_with(medium=Bowl(), sides="absorbing", length=np.pi / 0.16, screens=21, width=12.0))
    density = rays.density()
    last = density.intensity[-1].to_numpy()
    assert last.argmax() in (last.size // 2 - 1, last.size // 2)
    middle = slice(last.size // 2 - 1, last.size // 2 + 1)
    assert last[middle].sum() > 0.8 * last.sum()


# ---- trace


def test_trace_of_empty_space():
    trace = rays_of(medium=Empty(), source=PlaneWave(0.1)).trace(32)
    p, x, s = np.sin(0.1), trace.x.to_numpy()[:, None], trace.s.to_numpy()
    np.testing.assert_allclose(trace.position, s + p * x, atol=1e-12)
    np.testing.assert_allclose(trace.action, p * s + 0.5 * p**2 * x, atol=1e-12)
    np.testing.assert_allclose(trace.dydp, x + 0 * s, atol=1e-12)
    assert (trace.maslov == 0).all()
    np.testing.assert_allclose(trace.ray_flux.sum(), 16.0)


def test_trace_columns_fit_together():
    """The front's tangent is the matrix applied to the launch; the index has the sign of dy/ds."""
    trace = rays_of(source=PointSource(-2.0, 0.3), sides="absorbing", **STRONG).trace(200)
    start, turn = trace.dyds[0], trace.dpds[0]
    size = np.hypot(np.hypot(trace.dydy, trace.dydp), np.hypot(trace.dpdy, trace.dpdp))
    np.testing.assert_allclose(trace.dyds / size, (trace.dydy * start + trace.dydp * turn) / size, atol=1e-12)
    assert (trace.dyds * (-1.0) ** trace.maslov > 0).all()
    assert int(trace.maslov.max()) >= 1


# ---- caustics and sections


def test_caustics_agree_with_the_index_of_the_trace():
    rays = rays_of(**STRONG)
    caustics, trace = rays.caustics(500), rays.trace(500)
    assert (np.diff(caustics.caustic_x) >= 0).all()
    counted = np.bincount(caustics.ray_number, minlength=500)
    assert (counted == trace.maslov[-1]).mean() > 0.99
    first = caustics.first_caustic.to_numpy()
    assert (np.isnan(first) == (counted == 0)).all()
    for ray in np.flatnonzero(counted)[:20]:
        mine = caustics.ray_number == ray
        np.testing.assert_array_equal(caustics.order[mine], np.arange(1, counted[ray] + 1))
        assert float(caustics.caustic_x[mine].min()) == first[ray]


def test_a_focus_exactly_on_a_screen_is_counted_once():
    """A = 1 - x/8 is 0.0 to the last bit on the screen x = 8."""
    rays = rays_of(medium=Empty(), source=Beam(1.0, focus=8.0), length=16.0, sides="absorbing")
    caustics, trace = rays.caustics(50), rays.trace(50)
    assert (trace.dyds.sel(x=8.0) == 0.0).all()
    np.testing.assert_array_equal(caustics.caustic_x, np.full(50, 8.0))
    np.testing.assert_array_equal(trace.maslov, np.where(trace.x.to_numpy()[:, None] > 8.0, 1, 0) + np.zeros((1, 50)))


def test_a_point_source_on_the_entry_is_no_caustic():
    caustics = rays_of(medium=Empty(), source=PointSource(0.0, 0.0)).caustics(50)
    assert caustics.sizes["caustic"] == 0
    assert caustics.first_caustic.isnull().all()


def test_only_caustics_inside_open_sides_are_listed():
    """A focus at y = 10 lies outside a window of half width 8."""
    inside = RayEnsemble(setup_with(medium=Bowl(), source=PlaneWave(0.0), length=24.0, sides="absorbing", width=12.0))
    found = inside.caustics(64)
    assert (np.abs(found.caustic_y) <= 6.0).all()


def test_a_section_lies_between_screens():
    rays = rays_of(**STRONG)
    x = rays.setup.x
    trace = rays.trace(64)
    at_screen = rays.section(float(x[10]), 64)
    np.testing.assert_allclose(at_screen.position, trace.position[10], atol=2e-3)  # steps end elsewhere
    between = rays.section(0.5 * float(x[10] + x[11]), 64)
    assert (np.abs(between.position - 0.5 * (trace.position[10] + trace.position[11])) < 0.05).all()
    entry = rays.section(0.0, 64)
    np.testing.assert_array_equal(entry.position, entry.s)
    assert between.attrs["x"] == 0.5 * float(x[10] + x[11])


# ---- slips


def test_wrong_input(monkeypatch):
    setup = setup_with()
    with pytest.raises(InputError, match="rays_per_scale must be positive; got -1"):
        RayEnsemble(setup, rays_per_scale=-1)
    with pytest.raises(InputError, match="most_rays must be a whole number of at least 64; got 3"):
        RayEnsemble(setup, most_rays=3)
    with pytest.raises(InputError, match="setup must be a Setup; got str"):
        RayEnsemble("setup")
    rays = RayEnsemble(setup)
    with pytest.raises(InputError, match=r"resolution 0.01 is finer than the setup's cells, 0.0625 \(width 16 over"):
        rays.density(resolution=0.01)
    with pytest.raises(InputError, match="resolution must be positive; got -1"):
        rays.density(resolution=-1)
    with pytest.raises(InputError, match=r"x must be in \[0, 6\]; got 7"):
        rays.section(7)
    with pytest.raises(InputError, match="rays must be a whole number of at least 1; got 0"):
        rays.trace(0)
    monkeypatch.setattr("branchlab.errors.available_memory", lambda: 2**28)
    for call in (rays.trace, rays.caustics, lambda n: rays.section(2.0, n)):
        with pytest.raises(ResourceError, match="100000000 rays for each of 1 coherent parts needs about .* GiB"):
            call(10**8)


@pytest.mark.parametrize("ask", ["density", "caustics", "section"])
def test_media_too_strong_for_paraxial_rays_are_refused(ask):
    rays = rays_of(medium=RandomMedium(0.25, 1.0, seed=7), length=20.0)
    with pytest.raises(RangeError, match="of the flux has a transverse momentum .* must stay below 1"):
        getattr(rays, ask)(*([20.0] if ask == "section" else []))


def test_a_trace_tells_which_rays_turned():
    trace = rays_of(medium=RandomMedium(0.25, 1.0, seed=7), length=20.0).trace(200)
    turned = trace.status == 2
    assert turned.any()
    assert (np.diff(turned.astype(int), axis=0) >= 0).all()  # once turned, always
