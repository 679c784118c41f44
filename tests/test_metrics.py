"""Metrics beside their published forms, volumes in curved space, and what follows for field and gas."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import fieldmover as fm
from fieldmover.conventions.components import cell_density, faces_from_flux, flux_from_faces
from fieldmover.conventions.derived import energy_density, figures, ideal_gas_pressure
from fieldmover.conventions.metrics import (
    FlatMetric,
    KerrSchildMetric,
    centre_jacobian,
    face_elements,
    geometry,
    geometry_from_arrays,
    named_metric,
    volume_elements,
)
from fieldmover.conventions.velocity import motion
from fieldmover.errors import DataError, FieldError
from fieldmover.grids.kerr import KerrSchildMap, kerr_schild_grid
from fieldmover.grids.placement import placed


def spheroidal(r, theta, a):
    """Lapse, shift, gamma along r, theta, phi for M = 1 (Komissarov 2004, Electrodynamics of black hole magnetospheres,
    appendix A; from memory): the same hole in its other chart."""
    sigma, sine = r**2 + a**2 * np.cos(theta) ** 2, np.sin(theta) ** 2
    z = 2 * r / sigma
    gamma = np.array([
        [1 + z, 0, -a * sine * (1 + z)],
        [0, sigma, 0],
        [-a * sine * (1 + z), 0, sine * (sigma + a**2 * sine * (1 + z))],
    ])  # fmt: skip
    return (1 + z) ** -0.5, np.array([z / (1 + z), 0, 0]), gamma


@given(
    st.floats(0.2, 20), st.floats(0.01, np.pi - 0.01), st.floats(-np.pi, np.pi), st.sampled_from([0, 0.5, 0.9, -0.7, 1])
)
def test_both_charts_hold_the_same_metric(r, theta, phi, a):
    chart = KerrSchildMap(a)
    q = np.array([r]), np.array([theta]), np.array([phi])
    found = KerrSchildMetric(1.0, a).at(*chart.to_cartesian(*q)).in_coordinates(chart.jacobian(*q))
    lapse, shift, gamma = spheroidal(r, theta, a)
    np.testing.assert_allclose(found.lapse, lapse, rtol=1e-12)
    scale = np.sqrt(np.diag(gamma))
    np.testing.assert_allclose(found.shift[:, 0] * scale, shift * scale, rtol=0, atol=1e-11)
    np.testing.assert_allclose(found.gamma[..., 0] / np.outer(scale, scale), gamma / np.outer(scale, scale), atol=1e-11)
    sigma = r**2 + a**2 * np.cos(theta) ** 2
    root = sigma * np.sin(theta) * np.sqrt(1 + 2 * r / sigma)
    np.testing.assert_allclose(found.sqrt_gamma, root, rtol=1e-11)
    alone = KerrSchildMetric(1.0, a).sqrt_gamma(*chart.to_cartesian(*q)) * np.linalg.det(chart.jacobian(*q)[..., 0])
    np.testing.assert_allclose(alone, root, rtol=1e-11)


def test_figures_at_a_point():
    """r = 2.3, theta = 0.7, phi = 0.4, a = 0.9 in extended precision, from the line element of Kerr 1963."""
    x = KerrSchildMap(0.9).to_cartesian(2.3, 0.7, 0.4)
    np.testing.assert_allclose(x, [1.13895353626617827, 1.11102882788028164, 1.75913703075432338], rtol=1e-15)
    found = KerrSchildMetric(1.0, 0.9).at(*x)
    assert found.lapse == pytest.approx(0.745753934300500711, rel=1e-14)
    np.testing.assert_allclose(
        found.shift, [0.263365149832876562, 0.111348999401300127, 0.339476022806066602], rtol=1e-14
    )
    assert found.sqrt_gamma == pytest.approx(1.3409248734811918843, rel=1e-14)


def test_lengths_scale_with_the_mass():
    one, seven = KerrSchildMetric(1.0, 0.9).at(3.0, 1.0, 2.0), KerrSchildMetric(7.0, 6.3).at(21.0, 7.0, 14.0)
    np.testing.assert_allclose(one.gamma, seven.gamma, rtol=1e-14)
    np.testing.assert_allclose(one.shift, seven.shift, rtol=1e-14)
    assert KerrSchildMetric(7.0, 6.3).horizon == pytest.approx(7 * (1 + np.sqrt(0.19)))


@pytest.mark.parametrize(
    ("spin", "volume"), [(0.0, 300.45435357962594056), (0.5, 302.6214611112), (0.9, 307.46784874875805957)]
)
def test_proper_volumes(spin, volume):
    """2 < r < 4; at spin 0 it is 4 pi [sqrt(r (r + 2)) (r^2/3 + r/6 - 1/2) + ln(sqrt r + sqrt(r + 2))]."""
    grid = kerr_schild_grid(np.linspace(2, 4, 9), np.linspace(0, np.pi, 17), np.linspace(0, 2 * np.pi, 3), spin)
    found = volume_elements(KerrSchildMetric(1.0, spin, "spheroidal"), grid).sum()
    assert found == pytest.approx(volume, rel=1e-9)


def test_a_static_slice_from_arrays():
    """Schwarzschild's own coordinates, 3 < r < 6: 4 pi [sqrt(r (r - 2)) (r^2/3 + 5 r/6 + 5/2) + 5 ln(sqrt r + sqrt(r -
    2))]. Cells are summed by the midpoint rule: second order."""
    errors = []
    for n in (20, 40):
        grid = fm.spherical_grid(np.linspace(3, 6, n + 1), np.linspace(0, np.pi, n + 1), np.linspace(0, 2 * np.pi, 5))
        r, theta = (0.5 * (q[1:] + q[:-1]) for q in grid.nodes[:2])
        r, theta = r[:, None, None], theta[None, :, None]
        zero, one = np.zeros(grid.shape), np.ones(grid.shape)
        six = np.stack([one / (1 - 2 / r), zero, zero, one * r**2, zero, one * (r * np.sin(theta)) ** 2])
        slice_ = geometry_from_arrays(grid, one * np.sqrt(1 - 2 / r), None, six)
        steps = np.diff(grid.nodes[0])[:, None, None] * np.diff(grid.nodes[1])[:, None] * np.diff(grid.nodes[2])
        own = slice_.in_coordinates(centre_jacobian(grid))
        np.testing.assert_allclose(own.gamma[0, 0], six[0], rtol=1e-13)
        errors.append((own.sqrt_gamma * steps).sum() / 1056.9873144438589991 - 1)
        by_cells = (slice_.sqrt_gamma * fm.spherical_grid(*grid.nodes).cell_volumes()).sum()
        assert by_cells == pytest.approx(1056.9873144438589991, rel=2 / n**2)
    assert errors[0] / errors[1] == pytest.approx(4, rel=0.02)
    assert abs(errors[1]) < 1e-3


def test_a_metric_stored_in_arrays_is_the_one_in_closed_form():
    grid = kerr_schild_grid(np.linspace(1.2, 4, 4), np.linspace(0, np.pi, 5), np.linspace(0, 2 * np.pi, 6), 0.9)
    closed = geometry(KerrSchildMetric(1.0, 0.9, "spheroidal"), grid)
    r, theta = (0.5 * (q[1:] + q[:-1]) for q in grid.nodes[:2])
    lapse, shift, gamma = np.empty(grid.shape), np.empty((3, *grid.shape)), np.empty((3, 3, *grid.shape))
    for i, j in np.ndindex(*grid.shape[:2]):
        one = spheroidal(r[i], theta[j], 0.9)
        lapse[i, j], shift[:, i, j], gamma[:, :, i, j] = one[0], one[1][:, None], one[2][:, :, None]
    six = np.stack([gamma[i, j] for i, j in ((0, 0), (0, 1), (0, 2), (1, 1), (1, 2), (2, 2))])
    stored = geometry_from_arrays(grid, lapse, shift, six)
    for name in ("lapse", "shift", "gamma", "sqrt_gamma"):
        np.testing.assert_allclose(getattr(stored, name), getattr(closed, name), rtol=1e-11, atol=1e-13)


def test_flat_space():
    grid = fm.spherical_grid([1, 2], [0.5, 1.5], [0, 1])
    for found in (geometry(FlatMetric(), grid), geometry_from_arrays(grid), geometry(named_metric("flat"), grid)):
        assert found.is_flat()
        assert found.sqrt_gamma == pytest.approx(1)
    assert not geometry(KerrSchildMetric(), grid).is_flat()
    np.testing.assert_allclose(volume_elements(FlatMetric(), grid), grid.cell_volumes(), rtol=1e-6)
    warped = fm.warped_grid(*grid.nodes, grid.map.to_cartesian)
    np.testing.assert_allclose(cell_density(warped), cell_density(grid), rtol=1e-9)


@pytest.mark.parametrize("chart", ["cartesian", "spheroidal"])
def test_fluxes_of_a_field_without_density(chart):
    """B^i is multiplied by the integral of sqrt(gamma), the same field with density by steps of coordinates."""
    if chart == "cartesian":
        grid = fm.cartesian_grid([2, 2.01], [1, 1.01], [0.5, 0.51])
    else:
        grid = kerr_schild_grid([2, 2.01], [0.7, 0.71], [0.4, 0.41], 0.9)
    metric = KerrSchildMetric(1.0, 0.9, chart)
    own = geometry(metric, grid).in_coordinates(centre_jacobian(grid))
    ones = tuple(np.ones(grid.face_shape(axis)) for axis in range(3))
    plain = flux_from_faces(grid, ones, "coordinate", metric=metric)
    dense = flux_from_faces(grid, ones, "coordinate", densitised=True)
    for a, b, element in zip(plain.faces, dense.faces, face_elements(metric, grid), strict=True):
        np.testing.assert_allclose(a, element, rtol=1e-15)
        np.testing.assert_allclose((a / b).mean(), own.sqrt_gamma.item(), rtol=1e-4)
    for back in faces_from_flux(plain, "coordinate", metric=metric):
        np.testing.assert_allclose(back, 1.0, rtol=1e-14)


def test_faces_on_a_pole_carry_nothing():
    grid = kerr_schild_grid([2, 3], np.linspace(0, np.pi, 3), np.linspace(0, 2 * np.pi, 5), 0.9)
    _, second, _ = face_elements(KerrSchildMetric(1.0, 0.9, "spheroidal"), grid)
    assert not second[:, [0, -1]].any()
    assert (second[:, 1] > 0).all()


# -- Derived figures -----------------------------------------------------------------------------------------


def cells(*values):
    return np.array(values, dtype=float).reshape(-1, 1, 1, 1)


def test_the_comoving_field_of_special_relativity():
    """b^2 = B^2 - E^2 with E = -v x B, an invariant of the field (Jackson 1999, section 11.9; from memory)."""
    grid = fm.cartesian_grid([0, 1], [0, 1], [0, 1])
    flat = geometry(FlatMetric(), grid)
    v, b = np.array([0.6, -0.3, 0.2]), np.array([1.5, 2.0, -0.5])
    moving = motion(grid, cells(*v), geometry=flat)
    expected = b @ b - np.square(np.cross(v, b)).sum()
    found = figures(moving, cells(*b), cells(2.0)[0], cells(0.3)[0], flat)
    assert found.b2.item() == pytest.approx(expected, rel=1e-14)
    assert found.magnetisation.item() == pytest.approx(expected / 2.0, rel=1e-14)
    assert found.beta.item() == pytest.approx(0.6 / expected, rel=1e-14)
    assert found.lorentz.item() == pytest.approx((1 - v @ v) ** -0.5, rel=1e-14)


def test_b2_in_a_curved_space_is_that_of_the_whole_field_tensor():
    """The dual field tensor written out in four dimensions, at one event near a hole (Gourgoulhon 2012)."""
    grid = fm.cartesian_grid([2, 2.2], [1, 1.2], [0.5, 0.7])
    hole = geometry(KerrSchildMetric(1.0, 0.9), grid)
    v, b = np.array([0.2, -0.1, 0.3]), np.array([1.5, 2.0, -0.5])
    moving = motion(grid, cells(*v), "eulerian", geometry=hole)
    lapse, beta, gamma = hole.lapse.item(), hole.shift.ravel(), hole.gamma.reshape(3, 3)
    g = np.zeros((4, 4))
    g[1:, 1:], g[0, 1:] = gamma, gamma @ beta
    g[1:, 0], g[0, 0] = g[0, 1:], -(lapse**2) + beta @ gamma @ beta
    u = moving.u_t.item() * np.array([1.0, *moving.velocity.ravel()])
    assert u @ g @ u == pytest.approx(-1, rel=1e-13)
    n, four_b = np.array([1.0, *-beta]) / lapse, np.array([0.0, *b])
    lorentz = -(u @ g @ n)
    small_b = (four_b + (four_b @ g @ u) * u) / lorentz
    dual = np.outer(u, small_b) - np.outer(small_b, u)  # no electric field in the frame of the gas
    np.testing.assert_allclose(dual @ g @ n, four_b, rtol=1e-12, atol=1e-13)  # whose magnetic part is B
    assert small_b @ g @ u == pytest.approx(0, abs=1e-13)
    found = figures(moving, cells(*b), geometry=hole)
    assert found.b2.item() == pytest.approx(small_b @ g @ small_b, rel=1e-12)


def test_newtonian_figures():
    found = figures(field=cells(3.0, 0.0, 4.0), density=cells(5.0)[0], pressure=cells(2.0)[0])
    assert (found.b2.item(), found.magnetisation.item(), found.beta.item()) == (25.0, 5.0, 4.0 / 25.0)
    assert found.lorentz is None
    empty = figures(field=cells(0.0, 0.0, 0.0), density=cells(0.0)[0], pressure=cells(1.0)[0])
    assert np.isinf(empty.beta).all()


def test_energies_agree_where_both_descriptions_hold():
    """Slow gas: the relativistic energy less that of the rest mass is the Newtonian one, to order v^2 / c^2."""
    grid = fm.cartesian_grid([0, 1], [0, 1], [0, 1])
    flat = geometry(FlatMetric(light=1e4), grid)
    moving, field, rho, p = motion(grid, cells(3, 4, 0), geometry=flat), cells(1, 2, 3), cells(2.0)[0], cells(0.5)[0]
    slow = energy_density(rho, p, motion(grid, cells(3, 4, 0)), field, None, 1.4)
    assert slow.item() == pytest.approx(0.5 * 2 * 25 + 0.5 / 0.4 + 7)
    fast = energy_density(rho, p, moving, field, flat, 1.4) - rho * 1e8 * moving.lorentz
    assert fast.item() == pytest.approx(slow.item(), rel=1e-6)


def test_the_energy_of_a_field_in_moving_gas():
    """(E^2 + B^2) / 2 with E = -v x B (Jackson 1999, section 6.7; from memory), and b^2 / (rho c^2), with c = 2."""
    grid = fm.cartesian_grid([0, 1], [0, 1], [0, 1])
    flat = geometry(FlatMetric(light=2.0), grid)
    v, b = np.array([0.6, -0.3, 0.2]), np.array([1.5, 2.0, -0.5])
    moving, nothing = motion(grid, cells(*(2 * v)), geometry=flat), np.zeros((1, 1, 1))
    electric = np.square(np.cross(v, b)).sum()
    found = energy_density(nothing, None, moving, cells(*b), flat, 1.4).item()
    assert found == pytest.approx(0.5 * (electric + b @ b), rel=1e-14)
    ratio = figures(moving, cells(*b), cells(3.0)[0], geometry=flat).magnetisation.item()
    assert ratio == pytest.approx((b @ b - electric) / (3.0 * 4.0), rel=1e-14)


def test_ideal_gas():
    assert ideal_gas_pressure(2.0, 3.0, 5 / 3) == pytest.approx(4.0)
    with pytest.raises(FieldError, match="adiabatic index 1, expected more than 1"):
        ideal_gas_pressure(1.0, 1.0, 1)


# -- What does not fit ---------------------------------------------------------------------------------------

BOX = fm.cartesian_grid([2, 3, 4], [0, 1], [0, 1])
SHELL = fm.spherical_grid([2, 3], [0.5, 1.0], [0, 1])


@pytest.mark.parametrize(
    ("grid", "spin", "found"),
    [
        (BOX, 0.9, "a cartesian grid, expected kerr_schild_grid of spin 0.9"),
        (SHELL, 0.9, "a spherical grid, expected kerr_schild_grid of spin 0.9"),
        (BOX, 0.0, "a cartesian grid, expected kerr_schild_grid of spin 0.0 or spherical_grid"),
        (kerr_schild_grid([2, 3], [0.5, 1.0], [0, 1], 0.5), 0.9, "kerr_schild_grid of spin 0.5, expected"),
        (placed(SHELL, (1, 0, 0)), 0.0, "a spherical grid that is moved or turned"),
    ],
)
def test_a_chart_that_is_not_that_of_the_metric(grid, spin, found):
    with pytest.raises(DataError, match=f"spheroidal Kerr-Schild coordinates on {found}"):
        geometry(KerrSchildMetric(1.0, spin, "spheroidal"), grid)


def test_charts_that_fit():
    geometry(KerrSchildMetric(1.0, 0.0, "spheroidal"), SHELL)
    geometry(KerrSchildMetric(1.0, 0.5, "spheroidal"), kerr_schild_grid([2, 3], [0.5, 1.0], [0, 1], 0.5))
    geometry(KerrSchildMetric(1.0, 0.5), BOX)


def test_a_singular_metric_is_refused():
    box = fm.cartesian_grid([-1, 1, 3], [-1, 1], [-1, 1])
    with pytest.raises(DataError, match=r"not finite in 1 cells, the first \[0, 0, 0\] .* leaves out the ring"):
        geometry(KerrSchildMetric(1.0, 0.9), box)
    with pytest.raises(DataError, match="singular within the grid"):
        volume_elements(KerrSchildMetric(1.0, 0.9), box)


@pytest.mark.parametrize(
    ("name", "arguments", "message"),
    [
        ("kerr", {"spin": 1.1}, r"spin 1\.1, expected a length of at most the mass"),
        ("kerr", {"mass": 0.0}, r"mass 0\.0, expected a positive length"),
        ("kerr", {"chart": "polar"}, "chart 'polar'"),
        ("schwarzschild", {"spin": 0.1}, r"schwarzschild with spin 0\.1"),
        ("minkowski", {}, "'minkowski', expected flat, schwarzschild or kerr"),
    ],
)
def test_metrics_that_make_no_sense_are_refused(name, arguments, message):
    with pytest.raises(DataError, match=message):
        named_metric(name, **arguments)


SIX = np.array([1.0, 0, 0, 1, 0, 1]).reshape(6, 1, 1, 1) * np.ones((6, 2, 1, 1))


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"lapse": np.ones((3, 1, 1))}, r"lapse of shape \(3, 1, 1\), expected \(2, 1, 1\)"),
        ({"shift": np.ones((2, 1, 1))}, r"shift of shape \(2, 1, 1\), expected \(3, 2, 1, 1\)"),
        ({"gamma": SIX[:5]}, r"gamma of shape \(5, 2, 1, 1\), expected \(6, 2, 1, 1\)"),
        ({"lapse": np.array([1.0, 0.0]).reshape(2, 1, 1)}, r"lapse not positive in 1 cells, the first \[1, 0, 0\]"),
        ({"lapse": np.full((2, 1, 1), np.nan)}, "not finite in 2 cells"),
        ({"gamma": -SIX}, "gamma not positive definite in 2 cells"),
        ({"gamma": SIX + np.array([0, 2, 0, 0, 0, 0]).reshape(6, 1, 1, 1)}, "gamma not positive definite in 2 cells"),
        ({"gamma": SIX * np.array([1, 1, 1, 1, 1, -1]).reshape(6, 1, 1, 1)}, "gamma not positive definite"),
    ],
)
def test_arrays_that_are_no_metric_are_refused(arguments, message):
    with pytest.raises(DataError, match=message):
        geometry_from_arrays(BOX, **arguments)


def test_what_does_not_fit_is_refused():
    hole = geometry(KerrSchildMetric(), BOX)
    with pytest.raises(FieldError, match="expected one beside the field"):
        figures(field=np.zeros((3, 2, 1, 1)), geometry=hole)
    with pytest.raises(FieldError, match=r"density: shape \(1, 1, 1\), expected that of the cells, \(2, 1, 1\)"):
        figures(field=np.zeros((3, 2, 1, 1)), density=np.zeros((1, 1, 1)))
    ones = tuple(np.ones(SHELL.face_shape(axis)) for axis in range(3))
    with pytest.raises(FieldError, match="physical components on faces of a spherical grid in curved space"):
        flux_from_faces(SHELL, ones, "physical", metric=KerrSchildMetric())
