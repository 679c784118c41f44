"""The uniform field of Wald round a spinning hole, and tori of gas, in both charts of Kerr-Schild coordinates.

G = c = M = 1. R. M. Wald 1974, *Black hole in a uniform magnetic field*, Phys. Rev. D 10, 1680: the potential is
B0 / 2 times (psi + 2 a eta), where psi and eta are the covariant rotation and time translation (equation number from
memory). Fluxes are circulations of it; no metric enters them but through the potential.
"""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import fieldmover as fm
from fieldmover.conventions.components import flux_from_faces
from fieldmover.conventions.metrics import KerrSchildMetric, centre_jacobian, geometry, volume_elements
from fieldmover.conventions.velocity import motion
from fieldmover.errors import GridError
from fieldmover.grids.kerr import KerrSchildMap, kerr_schild_grid
from fieldmover.projection import record as record_module

TURN = 2 * np.pi


def horizon(a):
    return 1 + np.sqrt(1 - a**2)


# -- The map -------------------------------------------------------------------------------------------------

places = st.floats(-5, 5)


@given(places, places, places, st.sampled_from([0.0, 0.5, 0.998, -0.9]))
def test_coordinates_and_back(x, y, z, a):
    chart = KerrSchildMap(a)
    point = np.array([[x], [y], [z]])
    r, theta, phi = chart.from_cartesian(*point)
    if r[0] > 1e-3:  # not on the disc within the ring, where the chart ends
        np.testing.assert_allclose(chart.to_cartesian(r, theta, phi), point, rtol=0, atol=1e-11)
    # the spheroid through the point: (x^2 + y^2) / (r^2 + a^2) + z^2 / r^2 = 1
    if r[0] > 1e-3:
        assert (x**2 + y**2) / (r[0] ** 2 + a**2) + z**2 / r[0] ** 2 == pytest.approx(1, rel=1e-9)


def test_tangents_are_those_of_a_map_without_closed_form():
    nodes = [1.2, 1.7, 2.3], [0.3, 1.1, 2.0], [-0.4, 0.3, 1.5]
    grid = kerr_schild_grid(*nodes, 0.9)
    other = fm.warped_grid(*nodes, grid.map.to_cartesian)
    np.testing.assert_allclose(centre_jacobian(grid), centre_jacobian(other), atol=1e-10)


def test_its_volume_is_that_of_flat_space_between_spheroids():
    """Integral of Sigma sin(theta): 4 pi (56/3 + 2 a^2 / 3) for 2 < r < 4."""
    grid = kerr_schild_grid([2, 3, 4], np.linspace(0, np.pi, 13), np.linspace(0, TURN, 4), 0.9)
    assert grid.cell_volumes().sum() == pytest.approx(241.35809159979184853, rel=1e-8)
    flat = fm.spherical_grid([2, 3, 4], np.linspace(0, np.pi, 13), np.linspace(0, TURN, 4))
    without = kerr_schild_grid(*flat.nodes, 0.0)
    np.testing.assert_allclose(without.node_positions(), flat.node_positions(), atol=1e-15)


@pytest.mark.parametrize(
    ("r", "spin", "message"),
    [([0, 1], 0.9, "expected r > 0"), ([1, 2], np.inf, "spin: inf, expected a finite length")],
)
def test_grids_that_cannot_be_are_refused(r, spin, message):
    with pytest.raises(GridError, match=message):
        kerr_schild_grid(r, [0.5, 1], [0, 1], spin)


# -- Wald's field --------------------------------------------------------------------------------------------


def wald(a):
    """Covariant components along x, y, z: psi = x d/dy - y d/dx turns about the axis in both charts."""
    hole = KerrSchildMetric(1.0, a)

    def potential(x, y, z):
        g = hole.at(x, y, z)
        psi = np.stack(np.broadcast_arrays(-y, x, np.zeros_like(z)))
        along_t = np.einsum("ij...,j...->i...", g.gamma, g.shift)  # g_ti
        lower = 0.5 * np.einsum("ij...,j...->i...", g.gamma, psi) + a * along_t
        return lower[0], lower[1], lower[2]

    return potential


def spheroidal_potential(r, theta, a):
    """A_r and A_phi of the same field by hand; A_theta is 0."""
    sine = np.sin(theta) ** 2
    z = 2 * r / (r**2 + a**2 * np.cos(theta) ** 2)
    g_phi = sine * (r**2 + a**2 * np.cos(theta) ** 2 + a**2 * sine * (1 + z))
    return 0.5 * (-a * sine * (1 + z) + 2 * a * z), 0.5 * (g_phi - 2 * a**2 * z * sine)


def flux_round(grid, a):
    return fm.curl(fm.potential_from_function(grid, wald(a)))


def test_circulations_are_the_same_in_both_charts():
    a, theta = 0.9, np.array([0.9, 1.0, 1.1])
    grid = kerr_schild_grid(np.linspace(2, 4, 9), theta, np.linspace(0, TURN, 7), a)
    pot = fm.potential_from_function(grid, wald(a))
    np.testing.assert_allclose(pot.a1[:, 1].sum(axis=0), 0.14381858880903192791, rtol=1e-11)  # integral of A_r dr
    np.testing.assert_allclose(pot.a1[:, 2].sum(axis=0), 0.020834292602696581427, rtol=1e-10)
    np.testing.assert_allclose(pot.a2, 0, atol=1e-14)
    _, a_phi = spheroidal_potential(grid.nodes[0][:, None, None], theta[None, :, None], a)
    np.testing.assert_allclose(pot.a3, np.broadcast_to(a_phi * TURN / 6, pot.a3.shape), rtol=1e-12)


POINTS = {
    (2.3, 0.7, 0.9): (
        (2.603520485456072, -1.031779684668801, 0.7185326849158323),
        (0.522892292871446, -0.2072231227172919, 0.1443104462659528),
        0.6928146175970436,
    ),
    (3.0, 1.2, 0.5): (
        (3.107763720635182, -2.63309255209448, 0.2775217979615478),
        (0.2861420853623203, -0.2424375407968005, 0.02555234990193767),
        0.6619345979143082,
    ),
    (1.5, 1 / 3, 0.9): (
        (0.480879485349353, -0.1889324278592642, 0.4142453499864584),
        (0.3487427422082148, -0.1370173088914951, 0.3004184285306476),
        0.2900068867050315,
    ),
}


@pytest.mark.parametrize("place", POINTS)
def test_the_field_at_points(place):
    """Flux densities, B^i and B^2 of a small cell beside the closed form (derivatives of the potential)."""
    r, theta, a = place
    dense, field, square = POINTS[place]
    h = 1e-3
    grid = kerr_schild_grid([r - h, r + h], [theta - h, theta + h], [0.4 - h, 0.4 + h], a)
    flux = flux_round(grid, a)
    means = [float(face.mean()) / (2 * h) ** 2 for face in flux.faces]
    np.testing.assert_allclose(means, dense, rtol=0, atol=2e-5)
    hole = geometry(KerrSchildMetric(1.0, a, "spheroidal"), grid)
    cartesian = fm.cells_from_flux(flux, basis="cartesian") / hole.sqrt_gamma
    own = np.linalg.solve(centre_jacobian(grid)[..., 0, 0, 0], cartesian[:, 0, 0, 0])
    np.testing.assert_allclose(own, field, rtol=0, atol=1e-5)
    assert hole.dot(cartesian, cartesian).item() == pytest.approx(square, abs=1e-5)


def test_the_field_at_a_point_of_the_other_chart():
    """r = 2.3, theta = 0.7, phi = 0.4, a = 0.9: densities and B^i along x, y, z, in extended precision."""
    x, h = KerrSchildMap(0.9).to_cartesian(2.3, 0.7, 0.4), 1e-3
    box = fm.cartesian_grid(*[[c - h, c + h] for c in x])
    dense = fm.cells_from_flux(flux_round(box, 0.9), basis="cartesian")
    expected = [-0.174692441956477159, 0.0297702311055776967, 0.947997314466822705]
    np.testing.assert_allclose(dense.ravel(), expected, atol=1e-6)
    expected = [-0.130277575881604701, 0.0222012669720197123, 0.706972726969942011]
    hole = geometry(KerrSchildMetric(1.0, 0.9), box)
    np.testing.assert_allclose((dense / hole.sqrt_gamma).ravel(), expected, atol=1e-6)


@pytest.mark.parametrize(
    ("spin", "flux"),
    [
        (0.0, 12.56637061435917),
        (0.5, 10.88279618540531),
        (0.9, 5.477553959507076),
        (0.9375, 4.372911904796463),
        (0.998, 0.7943695783374696),
        (1.0, 0.0),
    ],
)
def test_a_fast_hole_expels_the_flux(spin, flux):
    """4 pi sqrt(1 - a^2) through half of the horizon (King, Lasota & Kundt 1975, Phys. Rev. D 12, 3037; from memory),
    and 4 pi r+ sin^2 (r+ - a^2) / (r+^2 + a^2 cos^2) through a cap of it."""
    edge = horizon(spin)
    grid = kerr_schild_grid([edge, edge + 0.1], np.linspace(0, np.pi, 9), np.linspace(0, TURN, 13), spin)
    through = flux_round(grid, spin).f1[0].sum(axis=1)
    caps = np.cumsum(through)
    assert caps[3] == pytest.approx(flux, rel=1e-12, abs=2e-13)
    assert caps[-1] == pytest.approx(0, abs=1e-13)
    theta = grid.nodes[1][1:]
    sine, cosine = np.sin(theta) ** 2, np.cos(theta) ** 2
    expected = 2 * TURN * edge * sine * (edge - spin**2) / (edge**2 + spin**2 * cosine)
    np.testing.assert_allclose(caps, expected, rtol=0, atol=3e-13)


def test_hemispheres_and_the_toroidal_field():
    a = 0.9
    grid = kerr_schild_grid([2, 2.5, 3, 4, 6, 10], np.linspace(0, np.pi, 9), np.linspace(0, TURN, 5), a)
    flux = flux_round(grid, a)
    north = flux.f1[:, :4].sum(axis=(1, 2))
    np.testing.assert_allclose(north[[2, 5]], [29.1225638987773833, 316.195017398505510], rtol=1e-12)
    assert np.abs(fm.divergence(flux).cells).max() < 1e-13 * north[-1]
    # the spin twists the field: flux of B^phi through 2 < r < 4, 0 < theta < pi / 2
    toroidal = flux.f3[:3, :4].sum(axis=(0, 1))
    exact = a * np.log((16 + a**2) / (4 + a**2)) + a - a * np.log(2)
    np.testing.assert_allclose(toroidal, exact, rtol=1e-8)


@pytest.mark.parametrize(("spin", "energy"), [(0.0, 111.2024799927), (0.5, 111.2071241604), (0.9, 111.6611916622)])
def test_the_energy_in_curved_space(spin, energy):
    """Half of the integral of gamma_ij B^i B^j over 2 < r < 4, from fluxes: second order."""
    errors = []
    for n in (8, 16, 32):
        grid = kerr_schild_grid(np.linspace(2, 4, n + 1), np.linspace(0, np.pi, n + 1), np.linspace(0, TURN, 9), spin)
        metric = KerrSchildMetric(1.0, spin, "spheroidal")
        hole = geometry(metric, grid)
        b = fm.cells_from_flux(flux_round(grid, spin), basis="cartesian") / hole.sqrt_gamma
        errors.append(0.5 * (hole.dot(b, b) * volume_elements(metric, grid)).sum() / energy - 1)
    assert abs(errors[-1]) < 2e-4
    assert errors[0] / errors[1] > 3
    assert errors[1] / errors[2] > 3.5


def test_stored_components_become_fluxes():
    """A file that holds B^i on faces without sqrt(gamma): read as fluxes, the field is free of divergence to second
    order, as its point values are."""
    a, errors = 0.9, []
    for n in (8, 16, 32):
        grid = kerr_schild_grid(np.linspace(2, 4, n + 1), np.linspace(0.3, 1.5, n + 1), [0.0, 0.1], a)
        arrays = []
        for axis in range(3):
            q = [0.5 * (x[1:] + x[:-1]) for x in grid.nodes]
            q[axis] = grid.nodes[axis]
            r, theta = q[0][:, None, None], q[1][None, :, None]
            arrays.append(np.broadcast_to(wald_components(r, theta, a)[axis], grid.face_shape(axis)))
        metric = KerrSchildMetric(1.0, a, "spheroidal")
        found = flux_from_faces(grid, tuple(arrays), "coordinate", metric=metric)
        exact = flux_round(grid, a)
        errors.append(max(np.abs(f / e - 1).max() for f, e in zip(found.faces[:2], exact.faces[:2], strict=True)))
    assert np.log2(errors[1] / errors[2]) == pytest.approx(2, abs=0.2)
    assert errors[-1] < 1e-3


def wald_components(r, theta, a):
    """B^i, from derivatives of the potential (fourth-order differences) over sqrt(gamma)."""
    h = 1e-3

    def slope(function):
        return (8 * (function(h) - function(-h)) - function(2 * h) + function(-2 * h)) / (12 * h)

    root = (r**2 + a**2 * np.cos(theta) ** 2) * np.sin(theta)
    root = root * np.sqrt(1 + 2 * r / (r**2 + a**2 * np.cos(theta) ** 2))
    by_theta = slope(lambda s: spheroidal_potential(r, theta + s, a)[1])
    by_r = slope(lambda s: spheroidal_potential(r + s, theta, a)[1])
    toroidal = slope(lambda s: spheroidal_potential(r, theta + s, a)[0])
    return by_theta / root, -by_r / root, -toroidal / root


# -- From chart to chart -------------------------------------------------------------------------------------


def worst(moved, exact):
    scale = max(np.abs(face).max() for face in exact.faces)
    return max(np.abs(m - e).max() for m, e in zip(moved.faces, exact.faces, strict=True)) / scale


def test_from_spheroids_to_a_box_beside_the_hole():
    """Cubic splines: at least third order where the field is smooth, divergence at round-off."""
    a, errors = 0.9, []
    for n in (16, 32, 64):
        source = kerr_schild_grid(
            np.geomspace(horizon(a), 6, n + 1), np.linspace(0, np.pi, n + 1), np.linspace(0, TURN, n + 1), a
        )
        box = fm.cartesian_grid(*[np.linspace(low, low + 2, 17) for low in (2.2, -1.0, -1.2)])
        moved = fm.move_flux(flux_round(source, a), box)
        errors.append(worst(moved, flux_round(box, a)))
        assert np.abs(fm.divergence(moved).cells).max() < 1e-14 * np.abs(moved.f3).max()
    assert np.log2(errors[0] / errors[-1]) / 2 > 2.5
    assert errors[-1] < 1e-4


def test_from_a_box_to_spheroids():
    a, errors = 0.9, []
    for n in (12, 24, 48):
        box = fm.cartesian_grid(*[np.linspace(low, low + 3, n + 1) for low in (1.5, -1.5, -1.5)])
        target = kerr_schild_grid(np.linspace(2.6, 3.4, 5), np.linspace(1.2, 1.9, 5), np.linspace(-0.5, 0.0, 5), a)
        errors.append(worst(fm.move_flux(flux_round(box, a), target), flux_round(target, a)))
    assert np.log2(errors[0] / errors[-1]) / 2 > 2.5
    assert errors[-1] < 1e-5


def test_finer_spheroids_keep_every_flux():
    a = 0.9
    nodes = np.geomspace(1.5, 4, 9), np.linspace(0, np.pi, 9), np.linspace(0, TURN, 13)
    coarse = flux_round(kerr_schild_grid(*nodes, a), a)
    finer = kerr_schild_grid(*(np.sort(np.append(q, 0.5 * (q[1:] + q[:-1]))) for q in nodes), a)
    moved = fm.move_flux(coarse, finer)
    summed = moved.f1[::2].reshape(9, 8, 2, 12, 2).sum(axis=(2, 4))
    np.testing.assert_allclose(summed, coarse.f1, rtol=0, atol=1e-12 * np.abs(coarse.f1).max())


# -- Tori of gas ---------------------------------------------------------------------------------------------

GAMMA, ENTROPY = 4 / 3, 1e-3  # adiabatic index, p / rho^gamma


def density_of(enthalpy):
    return np.where(enthalpy > 1, (GAMMA - 1) / (GAMMA * ENTROPY) * np.maximum(enthalpy - 1, 0), 0) ** (1 / (GAMMA - 1))


def fishbone_moncrief(r, theta, a=0.9375, inner=6.0, momentum=4.2812844685319):
    """Density and dphi/dt: L. G. Fishbone & V. Moncrief 1976, ApJ 207, 962, eq. 3.6 (from memory), constant u^t u_phi;
    pressure maximum at r = 12."""

    def log_enthalpy(r, theta):
        sigma, delta, area = terms(r, theta, a)
        q = np.sqrt(1 + 4 * momentum**2 * sigma**2 * delta / (area * np.sin(theta)) ** 2)
        return 0.5 * np.log((1 + q) * area / (sigma * delta)) - 0.5 * q - 2 * a * r * momentum / area

    enthalpy = np.exp(log_enthalpy(r, theta) - log_enthalpy(inner, np.pi / 2))
    sigma, delta, area = terms(r, theta, a)
    rate = 2 * a * r / area  # of observers without angular momentum
    # u^t u_phi = l makes v^2 W^2 a root of x (1 + x) = l^2 sigma^2 delta / (area sin)^2; Omega = rate + speed over them
    x = 0.5 * (np.sqrt(1 + 4 * momentum**2 * sigma**2 * delta / (area * np.sin(theta)) ** 2) - 1)
    speed = np.sqrt(x / (1 + x))
    omega = rate + speed * np.sqrt(sigma * delta / area) / (np.sqrt(area / sigma) * np.sin(theta))
    return np.where(r >= inner, density_of(enthalpy), 0), omega


def doughnut(r, theta, momentum=3.9, inner=6.0):
    """Constant -u_phi / u_t without spin: Kozlowski, Jaroszynski & Abramowicz 1978, A&A 63, 209."""

    def energy(r, theta):
        g = np.sin(theta) ** 2 * r**2 - momentum**2 * (1 - 2 / r)
        return np.sqrt((r**2 - 2 * r) * np.sin(theta) ** 2 / np.where(g > 0, g, np.nan))

    enthalpy = np.nan_to_num(energy(inner, np.pi / 2) / energy(r, theta))
    omega = momentum * (1 - 2 / r) / (r * np.sin(theta)) ** 2
    return np.where(r >= inner, density_of(enthalpy), 0), omega


def terms(r, theta, a):
    sigma, delta = r**2 + (a * np.cos(theta)) ** 2, r**2 - 2 * r + a**2
    return sigma, delta, (r**2 + a**2) ** 2 - delta * (a * np.sin(theta)) ** 2


def gas_in(grid, torus, a):
    """Density, u^t and rest mass of every cell, with our own lapse, shift and velocities."""
    metric = KerrSchildMetric(1.0, a, "spheroidal")
    r, theta = (0.5 * (q[1:] + q[:-1]) for q in grid.nodes[:2])
    rho, omega = torus(r[:, None, None], theta[None, :, None])
    gas = rho > 0
    stored = np.zeros((3, *grid.shape))
    stored[2] = np.where(gas, omega, 0.0)
    rest = -geometry(metric, grid).in_coordinates(centre_jacobian(grid)).shift  # where there is no gas
    stored = np.where(gas, stored, rest)
    found = motion(grid, stored, "coordinate", "coordinate", geometry(metric, grid))
    return rho, found, rho * found.lorentz * volume_elements(metric, grid)


@pytest.mark.parametrize(
    ("torus", "a", "ends", "mass"),
    [
        (fishbone_moncrief, 0.9375, (6.0, 42.0), 831137.928164),
        (doughnut, 0.0, (6.0, 18.25), 16853.49648413),
    ],
)
def test_rest_mass_of_a_torus(torus, a, ends, mass):
    """Integral of rho u^t sqrt(-g): the figures are those of two quadratures in Boyer-Lindquist coordinates."""
    nodes = np.geomspace(*ends, 161), np.linspace(np.pi / 2 - 1.2, np.pi / 2 + 1.2, 161), [0.0, 1.0]
    _, _, content = gas_in(kerr_schild_grid(*nodes, a), torus, a)
    assert TURN * content.sum() == pytest.approx(mass, rel=1e-4)


@pytest.mark.parametrize(
    ("torus", "a", "place", "ratio", "u_t", "omega"),
    [
        (fishbone_moncrief, 0.9375, (8.0, 1.4), 0.14796705471152, 1.2556376888811, 0.046557574387165),
        (fishbone_moncrief, 0.9375, (12.0, np.pi / 2), 1.0, 1.1467621305524, 0.02352569227988),
        (doughnut, 0.0, (9.4568747326834, np.pi / 2), 1.0, 1.2102152960101, 0.034385753496222),
        (doughnut, 0.0, (8.0, 1.4), None, 1.2779184163374, 0.047062711660773),
    ],
)
def test_gas_at_points_of_a_torus(torus, a, place, ratio, u_t, omega):
    r, theta = place
    grid = kerr_schild_grid([r - 0.1, r + 0.1], [theta - 0.1, theta + 0.1], [0, 1], a)
    rho, found, _ = gas_in(grid, torus, a)
    peak = {fishbone_moncrief: 76.742453615033, doughnut: 13.526594609634}[torus]
    assert torus(r, theta)[1] == pytest.approx(omega, rel=1e-11)
    assert found.u_t.item() == pytest.approx(u_t, rel=1e-11)
    if ratio is not None:
        assert rho.item() / peak == pytest.approx(ratio, rel=1e-11)


def test_a_torus_keeps_its_mass_from_chart_to_chart():
    """rho u^t sqrt(-g) is a content of cells: it moves like any density, and needs no metric on the way."""
    a = 0.9375
    nodes = np.geomspace(6, 30, 17), np.linspace(0, np.pi, 17), np.linspace(0, TURN, 25)
    source = kerr_schild_grid(*nodes, a)
    _, _, mass = gas_in(source, fishbone_moncrief, a)
    box = fm.cartesian_grid(*[np.linspace(-32, 32, 17)] * 3)
    moved = fm.move_content(fm.CellContent(source, mass), box)
    assert moved.cells.sum() == pytest.approx(mass.sum(), rel=1e-12)
    assert moved.cells.min() >= 0


@pytest.mark.parametrize("ring", [1, 2])
def test_rings_of_too_few_cells_are_no_rings(ring):
    """Points in a grid without closed form are found by a spline of its nodes, which one or two do not bend."""
    chart = kerr_schild_grid([1, 2, 3], np.linspace(0.5, 2, 5), np.linspace(0, TURN, ring + 1), 0.5)
    box = fm.cartesian_grid(*[np.linspace(-2, 2, 5)] * 3)
    with pytest.raises(GridError, match=f"{ring} cells round phi, expected at least 3"):
        fm.move_content(fm.CellContent(box, box.cell_volumes()), chart)
    flux = fm.flux_from_function(box, lambda x, y, z: (0 * x, 0 * x, 1 + 0 * x))
    moved = fm.move_flux(flux, chart)  # as a target it need not be searched
    assert np.abs(fm.divergence(moved).cells).max() == 0


def test_a_record_on_rings_whose_edges_cancel(monkeypatch):
    """The mean edges of one or two cells round an axis are nothing but round-off, which may come out as 0."""
    chart = kerr_schild_grid([1, 2, 3], np.linspace(0, np.pi, 6), np.linspace(0, TURN, 3), 0.5)
    monkeypatch.setattr(record_module, "near_volumes", lambda grid, rows: np.zeros((rows.stop - rows.start, 5, 2)))
    flux = fm.FaceFlux(chart, (np.ones((3, 5, 2)), np.zeros((2, 6, 2)), np.zeros((2, 5, 3))))
    flux.f1[1] = 0.5
    clean, record = fm.project(flux)
    assert np.abs(fm.divergence(clean).cells).max() == 0
    assert np.isfinite([record.largest_change, record.rms_change]).all()
