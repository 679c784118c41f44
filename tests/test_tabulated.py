"""Grids given by tables of node positions.

The tables are those of grids in closed form, so that the closed forms tell what positions, areas, volumes and moved
fields must be.
"""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.interpolate import make_interp_spline

import fieldmover as fm
from fieldmover.errors import GridError
from fieldmover.grids import nodes_from_centres
from fieldmover.interpolation.locate import Locator
from tests import reference
from tests.cases import bent, box, box_inside, largest_error, pipe, sphere, wedge
from tests.fields import HOPF, SPHEROMAK, WAVE

inside_bent = box((0.5, 1.5), (-0.6, 0.6), (-0.6, 0.6))


def table_of(grid: fm.Grid) -> fm.Grid:
    return fm.tabulated_grid(*grid.node_positions(), periodic=grid.periodic, poles=grid.poles)


def test_positions_between_nodes_are_those_of_a_quintic_spline():
    """SciPy's not-a-knot spline of degree 5, axis by axis."""
    rng = np.random.default_rng(1)
    shape = (8, 9, 7)
    x = np.stack(np.meshgrid(*(np.arange(n) for n in shape), indexing="ij")) + 0.1 * rng.uniform(size=(3, *shape))
    grid = fm.tabulated_grid(*x)
    points = rng.uniform(size=(3, 20)) * (np.array(shape) - 1)[:, None]
    found = np.stack(grid.map.to_cartesian(*points))
    tangents = grid.map.jacobian(*points)
    for n in range(points.shape[1]):
        for derivative in (None, 0, 1, 2):
            value = x
            for axis in range(3):
                spline = make_interp_spline(np.arange(shape[axis]), value, k=5, axis=1)
                value = spline(points[axis, n], nu=int(axis == derivative))
            np.testing.assert_allclose(
                found[:, n] if derivative is None else tangents[:, derivative, n], value, atol=1e-12
            )
    on_nodes = grid.map.jacobian(
        *(np.arange(float(n)).reshape([-1 if e == d else 1 for e in range(3)]) for d, n in enumerate(shape))
    )
    np.testing.assert_allclose(
        on_nodes[:, :, 3, 4, 5], grid.map.jacobian(*np.array([[3.0], [4.0], [5.0]]))[..., 0], atol=1e-13
    )


@pytest.mark.parametrize("make", [wedge, sphere, pipe, bent], ids=lambda make: make.__name__)
def test_volumes_converge_to_those_of_the_map(make):
    errors = []
    for n in (8, 16):
        exact = make(n)
        grid = table_of(exact)
        errors.append(abs(grid.cell_volumes().sum() / exact.cell_volumes().sum() - 1))
        nodes = np.abs(grid.node_positions() - exact.node_positions()).max()
        assert nodes < 1e-13
    assert errors[1] < 1e-6
    assert errors[1] < errors[0] / 2**4 or errors[0] < 1e-12


@pytest.mark.parametrize(
    ("make", "target", "ceiling"),
    [(wedge, box_inside, 1.5e-4), (bent, inside_bent, 5e-5), (sphere, box_inside, 1e-3)],
    ids=["wedge", "bent", "sphere"],
)
def test_moved_like_from_the_map(make, target, ceiling):
    """Circulations along edges do not ask how the map is given; the error is that of the move."""
    n = 16 if make is sphere else 32
    exact_grid = make(n)
    edges = fm.potential_from_function(exact_grid, WAVE.a).edges
    grid, to = table_of(exact_grid), target(n)
    moved = fm.move_flux(fm.curl(fm.EdgePotential(grid, edges)), to)
    exact = reference.circulation_round_faces(reference.circulations(to, WAVE.a, points=4))
    assert largest_error(moved, exact) < ceiling
    assert np.abs(fm.divergence(moved).cells).max() == 0.0


@pytest.mark.parametrize("field", [SPHEROMAK, HOPF], ids=lambda field: field.name)
def test_second_order_at_the_pole(field):
    """Onto a box that holds a part of the axis: at least second order, and as good as from the spherical grid."""
    errors = []
    for n in (16, 64):
        shell = fm.spherical_grid(
            np.linspace(0.2, 1.0, n + 1), np.linspace(0, np.pi, n + 1), np.linspace(0, 2 * np.pi, 2 * n + 1)
        )
        edges = fm.potential_from_function(shell, field.a).edges
        to = fm.cartesian_grid(*(np.linspace(*ends, n + 1) for ends in ((-0.3, 0.25), (-0.28, 0.3), (0.4, 0.8))))
        exact = reference.circulation_round_faces(reference.circulations(to, field.a, points=4))
        from_table, from_map = (
            largest_error(fm.move_flux(fm.curl(fm.EdgePotential(grid, edges)), to), exact)
            for grid in (table_of(shell), shell)
        )
        assert from_table < 1.05 * from_map
        errors.append(from_table)
    assert np.log2(errors[0] / errors[1]) / 2 > 1.9, errors


@settings(max_examples=60, deadline=None)
@given(st.tuples(st.floats(1.02, 2.95), st.floats(-1, 1), st.floats(0, 2 * np.pi)))
def test_inverse_of_the_inverse(point):
    """Any point of the shell, on the axis and beside it too, comes back from its coordinates."""
    r, cosine, phi = point
    sine = np.sqrt(1 - cosine**2)
    x = r * np.array([[sine * np.cos(phi)], [sine * np.sin(phi)], [cosine]])
    q = LOCATOR.coordinates(x)
    back = np.stack(LOCATOR.grid.map.to_cartesian(*q))
    np.testing.assert_allclose(back, x, atol=3e-12)


LOCATOR = Locator(table_of(sphere(8)))


@pytest.mark.parametrize(
    "x", [(0, 0, 2), (0, 0, -1.5), (1e-12, 0, 2), (0, -1e-5, 2), (2, 0, 0), (2, -1e-15, 0)], ids=str
)
def test_inverse_on_axis_and_seam(x):
    point = np.array(x, dtype=float)[:, None]
    back = np.stack(LOCATOR.grid.map.to_cartesian(*LOCATOR.coordinates(point)))
    np.testing.assert_allclose(back, point, atol=3e-12)


def test_points_outside_have_no_coordinates():
    x = np.array([[0.0, 0.5, 3.3, 30.0, 1.5], [0.0, 0.0, 0.0, -30.0, 0.0], [0.0, 0.1, 0.0, 5.0, 0.0]])
    found = LOCATOR.cells(x)
    assert (found[:4] == -1).all()
    assert found[4] >= 0


def test_odd_ring_is_a_wall_at_the_pole():
    """No meridian has an opposite: still exact at nodes, fluxes without divergence, and close away from the pole."""
    shell = fm.spherical_grid(np.geomspace(1, 3, 17), np.linspace(0, np.pi, 17), np.linspace(0, 2 * np.pi, 32))
    assert shell.shape[2] == 31
    grid = table_of(shell)
    np.testing.assert_allclose(grid.node_positions(), shell.node_positions(), atol=1e-13)
    edges = fm.potential_from_function(shell, WAVE.a).edges
    to = box_inside(16)
    exact = reference.circulation_round_faces(reference.circulations(to, WAVE.a, points=4))
    moved, from_map = (fm.move_flux(fm.curl(fm.EdgePotential(g, edges)), to) for g in (grid, shell))
    assert largest_error(moved, exact) < 1.5 * largest_error(from_map, exact)
    assert np.abs(fm.divergence(moved).cells).max() == 0.0


@pytest.mark.parametrize("make", [wedge, sphere, pipe, bent], ids=lambda make: make.__name__)
def test_nodes_from_centres_converge(make):
    errors = []
    for n in (16, 32):
        grid = table_of(make(n))
        nodes = np.stack(nodes_from_centres(*grid.centres(), periodic=grid.periodic, poles=grid.poles))
        exact = grid.node_positions()
        assert nodes.shape == exact.shape
        errors.append(np.abs(nodes - exact).max())
        table_of_nodes = fm.tabulated_grid(*nodes, periodic=grid.periodic, poles=grid.poles)
        assert table_of_nodes.shape == grid.shape
    assert errors[1] < 1e-5
    assert errors[1] < errors[0] / 2**4 or errors[0] < 1e-12


def good(n: int = 4) -> np.ndarray:
    return np.stack(np.meshgrid(*[np.arange(float(n + 1))] * 3, indexing="ij"))


def spoiled(change) -> tuple:
    x = good()
    change(x)
    return tuple(x)


def _repeat(x):
    x[:, 2, 3, 1] = x[:, 2, 3, 2]


def _fold(x):
    x[0, 2, 2, 2] += 2.5


def _hole(x):
    x[1, 0, 0, 3] = np.nan


@pytest.mark.parametrize(
    ("positions", "options", "message"),
    [
        (spoiled(_repeat), {}, r"nodes \[2, 3, 1\] and \[2, 3, 2\] of the table are at the same place"),
        (
            spoiled(_fold),
            {},
            r"cell \[2, 1, 1\] of the table is folded: the least Jacobian at its corners is -1.5 .* 4 cells",
        ),
        (spoiled(_hole), {}, r"nan at index \[0, 0, 3\]"),
        (tuple(good()[[1, 0, 2]]), {}, "left-handed"),
        (tuple(good()), {"periodic": (True, False, False)}, r"axis 1 is said to be periodic, .* up to 4 apart"),
        (tuple(good()), {"poles": (None, "low", None)}, "axis 2 is said to have a pole at its low end"),
        ((good()[0], good()[1], good(3)[2]), {}, "expected three equal ones"),
        (tuple(good()), {"poles": (None, "south", None)}, "expected three of None, 'low', 'high', 'both'"),
    ],
    ids=["repeated", "folded", "nan", "left-handed", "open seam", "open pole", "shapes", "pole name"],
)
def test_refused(positions, options, message):
    with pytest.raises(GridError, match=message):
        fm.tabulated_grid(*positions, **options)
