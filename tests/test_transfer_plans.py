"""Plans kept for many snapshots: the bits of a single move; what they rest on against the slow way."""

from __future__ import annotations

import numpy as np
import pytest

import fieldmover as fm
from fieldmover.errors import FieldError
from fieldmover.forms.fields import close_edges
from fieldmover.grids import crowded_grid
from fieldmover.grids.placement import turn_about
from fieldmover.interpolation import plan_across, plan_part
from fieldmover.interpolation.locate import Locator
from fieldmover.interpolation.plan import FluxPlan
from fieldmover.interpolation.plan_nodes import NodePlaces
from tests.cases import bent, box, brick, inner_shell, sphere
from tests.fields import HOPF, WAVE

off_axis = box((1.3, 2.2), (-0.7, 0.6), (-0.6, 0.7))
across_axis = box((-0.6, 0.7), (-0.7, 0.6), (1.2, 2.1))
half_out = box((0.2, 1.7), (-0.6, 0.6), (-0.6, 0.6))


def flux_on(grid: fm.Grid, field) -> fm.FaceFlux:
    return fm.curl(fm.potential_from_function(grid, field.a))


def table(grid: fm.Grid) -> fm.Grid:
    return fm.tabulated_grid(*grid.node_positions(), grid.periodic, grid.poles)


@pytest.mark.parametrize(
    ("source", "target", "order"),
    [
        (sphere(8), off_axis(24), 3),
        (sphere(8), off_axis(24), "limited"),
        (sphere(8), half_out(16), 3),
        (bent(10), box((0.6, 1.4), (-0.5, 0.5), (-0.5, 0.5))(24), 5),
        (brick(10), inner_shell(8), 1),
        (brick(8), brick(16), 3),
    ],
    ids=["sphere", "limited", "half outside", "bent", "order 1", "restart"],
)
def test_a_plan_moves_any_number_of_fluxes_as_move_flux_does(source, target, order):
    plan = FluxPlan(source, target, order)
    for field in (WAVE, HOPF, WAVE):
        flux = flux_on(source, field)
        for planned, alone in zip(plan.move(flux).faces, fm.move_flux(flux, target, order).faces, strict=True):
            np.testing.assert_array_equal(planned, alone)


def test_the_source_may_be_read_again():
    plan = FluxPlan(table(bent(6)), box((0.6, 1.4), (-0.5, 0.5), (-0.5, 0.5))(6))
    flux = flux_on(table(bent(6)), WAVE)
    assert plan.move(flux).grid is plan.target
    with pytest.raises(FieldError, match="expected the source of the plan, <tabulated grid"):
        plan.move(flux_on(table(bent(7)), WAVE))
    with pytest.raises(FieldError, match="the flux is on <warped grid"):
        plan.move(flux_on(bent(6), WAVE))
    moved = fm.placed(flux.grid, (0.1, 0, 0))
    with pytest.raises(FieldError, match="expected the source of the plan"):
        plan.move(fm.FaceFlux(moved, flux.faces))


def test_bad_arguments():
    with pytest.raises(FieldError, match="order: 4, expected one of 1, 3, 5, 'limited'"):
        FluxPlan(brick(4), inner_shell(4), 4)
    plan = FluxPlan(brick(4), inner_shell(4))
    with pytest.raises(FieldError, match="outside: 'fill', expected one of"):
        plan.move(flux_on(brick(4), WAVE), outside="fill")


def test_a_plan_is_small_where_coordinates_are_smooth():
    target = off_axis(64)
    nodes = np.prod(target.node_shape())
    assert FluxPlan(sphere(16), target).nbytes < 6 * nodes
    assert FluxPlan(sphere(8), across_axis(32)).nbytes > 12 * nodes / 8  # where bricks cross the axis: node by node


@pytest.mark.parametrize(
    ("source", "target", "least"),
    [
        (sphere(16), off_axis(40), 1.0),
        (table(sphere(16)), off_axis(40), 0.5),
        (bent(20), box((0.5, 1.5), (-0.6, 0.6), (-0.6, 0.6))(40), 1.0),
        (crowded_grid(*sphere(16).nodes, separation=3.0), off_axis(72), 0.2),
        (brick(20), inner_shell(20), 1.0),
        (sphere(8), across_axis(20), 0.0),
    ],
    ids=["sphere", "table", "bent", "bodies", "into a sphere", "across the axis"],
)
def test_nodes_lie_where_they_are_found_one_by_one(source, target, least):
    """Polynomials on bricks of nodes are good to 1e-6 of a cell; at least so many bricks have one."""
    locator = Locator(source)
    places = NodePlaces(locator, target)
    bricks = [brick for row in places.bricks for brick in row]
    seen = np.zeros(target.node_shape(), dtype=int)
    polynomials = 0
    for brick_ in bricks:
        seen[brick_.part] += 1
        polynomials += brick_.coefficients is not None
        nodes = [q[part] for q, part in zip(target.nodes, brick_.part, strict=True)]
        nodes = nodes[0][:, None, None], nodes[1][None, :, None], nodes[2][None, None, :]
        x, tangents = np.stack(target.map.to_cartesian(*nodes)), target.map.jacobian(*nodes)
        exact, rates = locator.pull_back(x.reshape(3, -1), tangents.reshape(3, 3, -1))
        q, dq = places.at_nodes(brick_)
        locator.close(q)
        for d, axis_nodes in enumerate(source.nodes):
            width, turn = np.diff(axis_nodes).min(), np.ptp(axis_nodes)
            gap = np.abs(q[d].ravel() - exact[d])
            assert np.minimum(gap, np.abs(gap - turn)).max() < 1e-6 * width
            for e in range(3):
                step = np.diff(target.nodes[e]).max()
                assert np.abs(dq[d, e].ravel() - rates[d, e]).max() * step < 1e-6 * width
    assert (seen == 1).all()
    assert polynomials >= least * len(bricks)
    assert least or polynomials < len(bricks)


@pytest.mark.parametrize("turn", [0.0, 2.0, 3.0])
@pytest.mark.parametrize("order", [1, 3, 5])
def test_what_the_target_does_not_see_makes_no_difference(order, turn, monkeypatch):
    """Across the seam of the source or not: the same fluxes as from a spline fitted to all of it, of noise too."""
    n = 28 if order < 5 else 44
    source = fm.spherical_grid(np.linspace(1, 2, 9), np.linspace(0.8, 2.2, 9), np.linspace(0, 2 * np.pi, 4 * n + 1))
    nodes = np.linspace(1.2, 1.6, 9), np.linspace(-0.2, 0.2, 9), np.linspace(-0.2, 0.2, 9)
    target = fm.placed(fm.cartesian_grid(*nodes), turn=turn_about((0, 0, 1), turn))
    noise = np.random.default_rng(0)
    edges = tuple(noise.normal(size=source.edge_shape(d)) for d in range(3))
    close_edges(source, edges)
    flux = fm.curl(fm.EdgePotential(source, edges))
    seen = fm.move_flux(flux, target, order)
    part = plan_part.SourcePart.seen(FluxPlan(source, target)._way.places, order)
    assert part.cells[2] < source.shape[2]
    monkeypatch.setattr(plan_part, "_WORTH", 0.0)
    for a, b in zip(seen.faces, fm.move_flux(flux, target, order).faces, strict=True):
        np.testing.assert_allclose(a, b, atol=1e-10 * np.abs(b).max())


def test_components_that_vanish_are_not_integrated_edge_by_edge(monkeypatch):
    """A dipole along z has no A_z: its round-off is no sign of a field that is not resolved."""
    counts = []
    slow = plan_across.single_edges
    monkeypatch.setattr(plan_across, "single_edges", lambda *args: counts.append(len(args[-1])) or slow(*args))

    def dipole(x, y, z):
        r3 = (x**2 + y**2 + z**2) ** 1.5
        return -y / r3, x / r3, 0 * z

    source, target = sphere(16), off_axis(32)
    fm.move_flux(fm.curl(fm.potential_from_function(source, dipole)), target)
    assert sum(counts) < 0.05 * 3 * 32**3


@pytest.mark.parametrize("outside", ["least energy", "zero"])
@pytest.mark.parametrize("target", [sphere(6), box((3, 4), (3, 4), (3, 4))(3)])
def test_nothing_arrives_where_the_source_does_not_reach(target, outside):
    source = box((7, 8), (7, 8), (7, 8))(4)
    moved = fm.move_flux(flux_on(source, WAVE), target, outside=outside)
    assert not any(f.any() for f in moved.faces)


@pytest.mark.parametrize("outside", ["least energy", "zero"])
def test_a_target_round_a_wedge_that_begins_within_it(outside):
    """Its last cells are in the wedge too, a turn further on."""
    shell, theta = np.linspace(1, 2, 9), np.linspace(0.8, 2.2, 9)
    source = fm.spherical_grid(shell, theta, np.linspace(0.3, 0.3 + np.pi, 13))
    target = fm.spherical_grid(shell, theta, np.linspace(0.3, 0.3 + 2 * np.pi, 25) + np.pi / 4)
    flux = flux_on(source, WAVE)
    moved = fm.move_flux(flux, target, outside=outside)
    size = np.abs(flux.f1).max()
    np.testing.assert_allclose(moved.f1[:, :, -3:], flux.f1[:, :, :3], atol=2e-3 * size)
    np.testing.assert_allclose(moved.f1[:, :, :9], flux.f1[:, :, 3:], atol=2e-3 * size)
    a_turn_on = fm.spherical_grid(shell, theta, source.nodes[2] + 2 * np.pi)
    np.testing.assert_allclose(fm.move_flux(flux, a_turn_on, outside="refuse").f1, flux.f1, atol=1e-13 * size)


def test_restarts_in_a_frame_of_their_own():
    """Grids placed alike are in the same coordinates, although each was placed for itself."""
    nodes = np.linspace(1, 2, 5), np.linspace(0, np.pi, 7), np.linspace(0, 2 * np.pi, 9)
    finer = [np.sort(np.append(q, 0.5 * (q[1:] + q[:-1]))) for q in nodes]
    source, target = (fm.placed(fm.spherical_grid(*q), (1, 2, 3), turn_about((1, 1, 0), 0.4)) for q in (nodes, finer))
    flux = flux_on(source, WAVE)
    moved = fm.move_flux(flux, target)
    coarse = moved.f1[::2].reshape(5, 6, 2, 8, 2).sum(axis=(2, 4))
    np.testing.assert_allclose(coarse, flux.f1, atol=1e-14 * np.abs(flux.f1).max())
