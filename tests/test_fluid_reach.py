"""A small target in a large source: only a part of the source is worked with, and that changes nothing."""

import numpy as np
import pytest

from fieldmover.forms.fields import CellContent
from fieldmover.grids import cartesian_grid, cylindrical_grid, placed, spherical_grid, warped_grid
from fieldmover.grids.part import part_of
from fieldmover.grids.placement import turn_about
from fieldmover.interpolation import fluid
from fieldmover.interpolation.fluid import FluidPlan
from fieldmover.interpolation.locate import Locator
from fieldmover.interpolation.reach import reached
from tests.test_fluid import ball, cube, line, smooth, wavy, wedge


def can():
    return cylindrical_grid(line(0, 2, 20), line(0, 2 * np.pi, 48), line(-1, 1, 20))


def bent(n):
    """Curved on every side, well away from the origin."""
    return warped_grid(
        *[line(-0.1, 0.1, n)] * 3, lambda a, b, c: (0.55 + a + 0.8 * b * b, 0.3 + b + c * c, 0.2 + c - a * b)
    )


PARTS = {
    "corner of a sphere": lambda: (ball(24), cube(12, 0.15, (0.4, 0.3, 0.3))),
    "beside the pole": lambda: (ball(24), cube(9, 0.1, (-0.12, 0.05, 0.6))),
    "across the outer wall": lambda: (ball(24), cube(9, 0.2, (0.6, 0.6, 0.2))),
    "bent piece of a sphere": lambda: (ball(24), bent(10)),
    "sphere in a box": lambda: (cube(24, 1.0), placed(ball(6, 0.05, 0.2), origin=(0.4, -0.3, 0.2))),
    "box in a box": lambda: (cube(30, 1.0), cube(10, 0.2, (0.3, 0.1, 0.2))),
    "sphere of the same coordinates": lambda: (
        ball(24),
        spherical_grid(line(0.4, 0.6, 9), line(1.0, 1.6, 9), line(2.0, 3.0, 12)),
    ),
    "shell round the axis of a box": lambda: (cube(30, 2.0), ball(8, 0.2, 0.5)),
    "slice of a cylinder": lambda: (can(), cube(7, 0.2, (-1.0, 0.8, 0.3))),
    "piece of a wedge": lambda: (wedge(24), cube(8, 0.2, (2.0, 0.2, 0.1))),
    "three cells": lambda: (ball(24), cube(3, 0.3, (0.4, 0.6, 0.1))),
    "one cell": lambda: (cube(30, 1.0), placed(cube(1, 0.2), origin=(0.3, 0.1, 0.2), turn=turn_about((0, 0, 1), 0.6))),
    "beside the seam": lambda: (ball(24), cube(9, 0.05, (0.5, 0.06, 0.1))),
    "turned and shifted sphere": lambda: (
        placed(ball(24), origin=(0.3, 0.2, 0.1), turn=turn_about((1, 0, 0), 0.7)),
        cube(9, 0.12, (0.8, 0.5, 0.4)),
    ),
}


@pytest.mark.parametrize("name", PARTS)
def test_a_part_holds_all_the_target_reaches_and_a_layer_more(name):
    source, target = PARTS[name]()
    part = reached(source, target)
    assert part is not None
    rng = np.random.default_rng(3)
    q = [rng.uniform(nodes[0], nodes[-1], 20000) for nodes in target.nodes]
    place = Locator(source).cells(np.stack(target.map.to_cartesian(*q)))
    for found, cells, n in zip(np.unravel_index(place[place >= 0], source.shape), part, source.shape, strict=True):
        assert found.min() >= min(cells.start + 1, n - 1) or cells.start == 0
        assert found.max() <= cells.stop - 2 or cells.stop == n


@pytest.mark.parametrize("name", PARTS)
def test_a_part_does_as_well_as_the_whole(name, monkeypatch):
    source, target = PARTS[name]()
    content = CellContent(source, source.cell_volumes() * smooth(*source.centres()))
    values = np.stack([source.centres()[0], smooth(*source.centres())])
    plan = FluidPlan(source, target)
    moved, carried = plan.move_by_mass(content, values)
    monkeypatch.setattr(fluid, "reached", lambda *grids: None)
    whole = FluidPlan(source, target)
    expected, wanted = whole.move_by_mass(content, values)
    # volumes of overlaps are kept in single precision, their centroids to 1 / 65534 of a cell
    np.testing.assert_allclose(moved.cells, expected.cells, rtol=2e-6, atol=1e-9 * expected.cells.max())
    np.testing.assert_allclose(carried, wanted, rtol=2e-5, atol=1e-9)
    np.testing.assert_allclose(plan.coverage, whole.coverage, rtol=0, atol=1e-6)
    assert np.array_equal(plan.contained, whole.contained)


def test_a_part_that_is_too_small_is_noticed(monkeypatch):
    source, target = PARTS["corner of a sphere"]()
    content = CellContent(source, source.cell_volumes() * smooth(*source.centres()))
    expected = FluidPlan(source, target).move(content).cells
    cells = reached(source, target)
    for axis in range(3):
        small = list(cells)
        small[axis] = slice(cells[axis].start + 4, cells[axis].stop)
        monkeypatch.setattr(fluid, "reached", lambda *grids, part=tuple(small): part)
        np.testing.assert_allclose(FluidPlan(source, target).move(content).cells, expected, rtol=2e-6)


@pytest.mark.parametrize(
    ("source", "target"),
    [
        pytest.param(ball(24), cube(8, 0.3, (0.1, 0.1, 0.0)), id="the axis is inside"),
        pytest.param(ball(24), cube(3, 0.2, (0.05, 0.1, 0.5)), id="the axis goes through one cell"),
        pytest.param(ball(24), cube(8, 0.1, (0.5, 0.0, 0.0)), id="across the seam"),
        pytest.param(cube(8, 1.0), cube(8, 0.9), id="most of the source"),
        pytest.param(wavy(8), cube(8, 0.1), id="no closed form"),
        pytest.param(
            cartesian_grid(*[line(0, 1, 30)] * 3, periodic=(True, False, False)), ball(8, 0.1, 0.2), id="periodic box"
        ),
        pytest.param(ball(24), ball(5, 0.4, 0.5), id="all round"),
    ],
)
def test_the_whole_source_is_taken_where(source, target):
    assert reached(source, target) is None


def test_a_ring_stays_whole_where_a_pole_is_near():
    source, target = PARTS["beside the pole"]()
    part = reached(source, target)
    assert part[1].start == 0
    assert part[2] == slice(0, 48)
    inner = part_of(source, part)
    assert inner.poles == (None, "low", None)
    assert inner.periodic == (False, False, True)
    assert part_of(source, (slice(0, 24), slice(3, 24), slice(1, 40))).poles == (None, "high", None)
    volumes = source.cell_volumes()[part]
    np.testing.assert_array_equal(inner.cell_volumes(), volumes)


def test_what_lies_between_the_places_looked_at_counts():
    """A plane 2 from the origin, of which no node of any usual division of its 12 is nearer than 2.01."""
    source = spherical_grid(line(1, 7, 3000), line(0.3, 2.8, 6), line(0, 2 * np.pi, 96))
    across = np.array([-6.1875, 5.8125])
    part = reached(source, cartesian_grid([-6.0, -2.0], across, across))
    assert source.nodes[0][part[0].start + 1] <= 2.0


def test_what_lies_between_places_outside_counts():
    """The sphere bulges into a target of one cell between the places looked at, which are all beyond its wall."""
    source = spherical_grid(line(1, 2, 400), line(1.0, 2.1, 6), line(-1.1, 1.1, 12))
    across = np.array([-6.1875, 5.8125])
    part = reached(source, cartesian_grid([1.99, 8.0], across, across))
    assert source.nodes[0][part[0].start + 2] <= 1.99


def test_slopes_beside_a_seam_look_across_it():
    """In the first cell of the ring a slope needs the last one."""
    source = spherical_grid(line(0.2, 1, 12), line(0, np.pi, 12), line(0, 2 * np.pi, 24))
    target = spherical_grid(line(0.5, 0.6, 6), line(1.2, 1.6, 6), line(0.01, 0.24, 6))
    part = reached(source, target)
    assert part[2] == slice(0, 24)
    content = CellContent(source, source.cell_volumes() * (2 + np.sin(3 * source.centres()[1])))
    moved = FluidPlan(source, target).move(content).cells / target.cell_volumes()
    np.testing.assert_allclose(moved, 2 + np.sin(3 * target.centres()[1]), rtol=0.02)
