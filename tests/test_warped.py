"""Warped grids: as source and as target, with maps of parameters, from files, and round two bodies."""

from __future__ import annotations

from functools import partial

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import fieldmover as fm
from fieldmover.errors import GridError, JobError
from fieldmover.grids import crowded_grid, crowded_map, least_jacobian, load_map
from fieldmover.interpolation.locate import Locator
from tests import reference
from tests.cases import bent, box, largest_error
from tests.fields import HOPF, WAVE, uniform


def squeezed(q1, q2, q3, tilt: float = 0.1):
    """Spherical coordinates about no pole of space: a smooth warp of space follows them."""
    r, sine = np.exp(q1), np.sin(q2)
    x, y, z = r * sine * np.cos(q3), r * sine * np.sin(q3), r * np.cos(q2)
    return x + tilt * np.sin(y + 0.5 * z), y + 0.12 * np.sin(z - 0.3 * x), z + tilt * np.cos(x) * np.sin(0.7 * y)


def squeezed_shell(n: int) -> fm.Grid:
    q = np.linspace(0, np.log(3), n + 1), np.linspace(0, np.pi, n + 1), np.linspace(0, 2 * np.pi, 2 * n + 1)
    return fm.warped_grid(*q, partial(squeezed, tilt=0.15), (False, False, True), (None, "both", None))


def two_bodies(n: int) -> fm.Grid:
    q = np.geomspace(0.5, 4, n + 1), np.linspace(0, np.pi, n + 1), np.linspace(0, 2 * np.pi, 2 * n + 1)
    return crowded_grid(*q, separation=2.4, phase=0.4, strength=0.5, width=0.5, share=0.4)


def moved_error(source: fm.Grid, target: fm.Grid, field) -> float:
    flux = fm.curl(fm.potential_from_function(source, field.a))
    if target.kind == "warped":
        exact = list(fm.curl(fm.potential_from_function(target, field.a)).faces)
    else:
        exact = reference.circulation_round_faces(reference.circulations(target, field.a, points=4))
    moved = fm.move_flux(flux, target)
    assert np.abs(fm.divergence(moved).cells).max() == 0.0
    return largest_error(moved, exact)


off_axis = box((1.2, 2.1), (-0.7, 0.6), (-0.6, 0.7))
on_axis = box((-0.6, 0.7), (-0.7, 0.6), (1.2, 2.1))


@pytest.mark.parametrize(
    ("source", "target", "field", "order", "ceiling"),
    [
        (bent, box((0.5, 1.5), (-0.6, 0.6), (-0.6, 0.6)), WAVE, 2.7, 4e-5),
        (squeezed_shell, off_axis, WAVE, 2.7, 8e-4),
        (squeezed_shell, on_axis, WAVE, 1.9, 2.5e-2),
        (two_bodies, off_axis, WAVE, 2.7, 8e-4),
        (two_bodies, on_axis, HOPF, 1.9, 1e-2),
        (box((-0.2, 2.3), (-1.5, 1.5), (-1.5, 1.5)), bent, WAVE, 2.7, 3e-4),
    ],
    ids=["bent", "squeezed", "squeezed, on axis", "bodies", "bodies, on axis", "onto bent"],
)
def test_order_of_the_move(source, target, field, order, ceiling):
    """Third order, and at least second beside an axis."""
    errors = [moved_error(source(n), target(n), field) for n in (16, 32)]
    assert errors[1] < ceiling, errors
    assert np.log2(errors[0] / errors[1]) > order, errors


def test_uniform_field_stays_uniform():
    """Free stream: on a warped grid, and moved from it, every closed sum of a uniform field is zero."""
    source = squeezed_shell(16)
    field = uniform(0.3, -0.4, 1.1)
    flux = fm.curl(fm.potential_from_function(source, field.a))
    assert np.abs(fm.divergence(flux).cells).max() < 1e-15
    target = off_axis(8)
    moved = fm.move_flux(flux, target)
    for found, area, b in zip(moved.faces, target.face_areas(), (0.3, -0.4, 1.1), strict=True):
        np.testing.assert_allclose(found / area, b, atol=5e-3)


def test_round_trip_through_a_warp():
    """Sphere -> warped -> Cartesian -> sphere, the last inside all others."""

    def shell(r, n):
        theta, phi = np.linspace(1.2, 1.9, n + 1), np.linspace(-0.4, 0.4, n + 1)
        return fm.spherical_grid(np.linspace(*r, n + 1), theta, phi)

    def error(n):
        wide = fm.spherical_grid(
            np.geomspace(0.8, 3.5, n + 1), np.linspace(0.5, 2.6, n + 1), np.linspace(-1.2, 1.2, n + 1)
        )
        q = np.linspace(-1, 1, n + 1)
        warped = fm.warped_grid(
            q, q, q, lambda a, b, c: (1.7 + 0.75 * a + 0.05 * np.sin(2 * b), 1.1 * b + 0.06 * c * a, 1.1 * c)
        )
        inner = fm.cartesian_grid(np.linspace(1.05, 2.3, n + 1), *[np.linspace(-0.98, 0.98, n + 1)] * 2)
        last = shell((1.5, 1.9), n)
        flux = fm.curl(fm.potential_from_function(wide, WAVE.a))
        for grid in (warped, inner, last):
            flux = fm.move_flux(flux, grid, outside="refuse")
        exact = reference.circulation_round_faces(reference.circulations(last, WAVE.a, points=4))
        return largest_error(flux, exact)

    errors = [error(16), error(32)]
    assert errors[1] < 1e-3, errors
    assert errors[0] / errors[1] > 2**2.5, errors


@settings(max_examples=40, deadline=None)
@given(st.tuples(st.floats(0.01, 0.99), st.floats(0, 1), st.floats(0, 1)), st.sampled_from(["squeezed", "bodies"]))
def test_inverse(part, which):
    """to_cartesian(from_cartesian(x)) is x, on the axis too."""
    locator = LOCATORS[which]
    q = [nodes[0] + p * np.ptp(nodes) for nodes, p in zip(locator.grid.nodes, part, strict=True)]
    x = np.array(locator._newton.spline.positions(*(np.array([c]) for c in q)))
    found = locator.coordinates(x)
    back = np.stack(locator._newton.spline.positions(*found))
    np.testing.assert_allclose(back, x, atol=4e-12)


LOCATORS = {"squeezed": Locator(squeezed_shell(8)), "bodies": Locator(two_bodies(12))}


@pytest.mark.parametrize("order", ["lattice", "shuffled"])
def test_inverse_of_many_points(order):
    """Along lines that cross axis, seam and walls, and in no order at all."""
    locator = LOCATORS["squeezed"]
    box_nodes = box((-3.3, 3.3), (-3.3, 3.3), (-3.3, 3.3))(24).node_positions().reshape(3, -1)
    if order == "shuffled":
        box_nodes = np.random.default_rng(0).permutation(box_nodes, axis=1)
    tangents = np.random.default_rng(1).normal(size=(3, 2, box_nodes.shape[1]))
    q, dq = locator.pull_back(box_nodes, tangents)
    found = np.isfinite(q[0])
    spline = locator._newton.spline
    np.testing.assert_allclose(np.stack(spline.positions(*q[:, found])), box_nodes[:, found], atol=4e-12)
    off_poles = found & (q[1] > 1e-3) & (q[1] < np.pi - 1e-3)
    back = np.einsum("ian,atn->itn", spline.jacobian(*q[:, off_poles]), dq[:, :, off_poles])
    np.testing.assert_allclose(back, tangents[:, :, off_poles], atol=1e-5)
    # which points the shell holds, by its smallest and largest extent
    r = np.sqrt((box_nodes**2).sum(axis=0))
    assert found[(r > 1.45) & (r < 2.6)].all()
    assert not found[r > 3.5].any()


def test_parameters_from_a_file(tmp_path):
    file = tmp_path / "warp.py"
    file.write_text(
        "from numpy import cos, sin\n"
        "def turn(r, phi, z, phase):\n    return r * cos(phi + phase), r * sin(phi + phase), z\n"
    )
    to_cartesian = load_map(file, "turn", {"phase": 0.5})
    grid = fm.warped_grid([1, 2, 3], np.linspace(0, 1, 5), [0, 1], to_cartesian)
    expected = fm.cylindrical_grid([1, 2, 3], np.linspace(0.5, 1.5, 5), [0, 1])
    np.testing.assert_allclose(grid.node_positions(), expected.node_positions(), atol=1e-15)


@pytest.mark.parametrize(
    ("text", "name", "parameters", "message"),
    [
        (None, "f", {}, "there is no file"),
        ("def g(a, b, c): return a, b, c", "f", {}, "holds no function 'f'; it holds g"),
        ("def f(a, b, c): return a, b, c", "f", {"phase": 1}, "unexpected keyword argument 'phase'"),
        ("def f(a, b, c, phase): return a, b, c", "f", {}, "missing a required argument: 'phase'"),
        ("1 / 0", "f", {}, "cannot be run: ZeroDivisionError"),
    ],
)
def test_refused_files(tmp_path, text, name, parameters, message):
    file = tmp_path / "warp.py"
    if text is not None:
        file.write_text(text)
    with pytest.raises(JobError, match=message):
        load_map(file, name, parameters)


def test_cells_crowd_at_the_bodies():
    """By 1 - strength in each direction, and nowhere else; one-to-one, and closed at seam and poles."""
    n, strength = 32, 0.4
    nodes = np.geomspace(0.2, 5, n + 1), np.linspace(0, np.pi, n + 1), np.linspace(0, 2 * np.pi, 2 * n + 1)
    plain = fm.spherical_grid(*nodes)
    grid = crowded_grid(*nodes, separation=2.0, phase=1.0, strength=strength, width=0.25, share=0.3)
    smallest, _, where = least_jacobian(grid, reference=plain)
    assert smallest == pytest.approx((1 - strength) ** 3, rel=0.1)
    body = {0.6: np.array([np.cos(1.0), np.sin(1.0), 0]), 1.4: -np.array([np.cos(1.0), np.sin(1.0), 0])}
    assert min(np.linalg.norm(where - radius * m) / radius for radius, m in body.items()) < 0.1
    ratio = grid.cell_volumes() / plain.cell_volumes()
    assert ratio.max() < 2.5
    far = np.linalg.norm(grid.centres(), axis=0) > 3
    np.testing.assert_allclose(ratio[far], 1, atol=0.05)
    assert grid.cell_volumes().sum() == pytest.approx(plain.cell_volumes().sum(), rel=1e-3)


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"strength": 1.0}, "strength: 1.0, expected at least 0 and less than 1"),
        ({"width": 0.0}, "width: 0.0, expected more than 0"),
        ({"share": 1.0}, "share: 1.0"),
        ({"phase": np.nan}, "phase: nan"),
    ],
)
def test_refused_crowding(options, message):
    with pytest.raises(GridError, match=message):
        crowded_map(2.0, **options)


def test_folded_map_is_refused():
    q = np.linspace(0, 1, 9)
    with pytest.raises(GridError, match=r"Jacobian is -.* in cell \[\d, \d, \d\]"):
        fm.warped_grid(q, q, q, lambda a, b, c: (a - 0.3 * np.sin(2 * np.pi * a), b, c))


def test_a_map_without_volume_is_refused():
    q = np.linspace(0, 1, 4)
    with pytest.raises(GridError, match="Jacobian is 0"):
        fm.warped_grid(q, q, q, lambda a, b, c: (1 + 0 * (a + b + c), 2 + 0 * a, 3 + 0 * a))
