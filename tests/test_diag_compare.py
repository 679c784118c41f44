"""Fields on two grids side by side, extremes of the gas, cells where a formula holds."""

from __future__ import annotations

import math

import numpy as np
import pytest

import fieldmover as fm
from fieldmover.diagnostics import compare_fields, expression_cells, fluid_extremes, shell_cells, squares
from fieldmover.diagnostics.cells import mean_field
from fieldmover.errors import FieldError, GridError, JobError
from tests import fields
from tests.test_diagnostics import GRIDS, TURN, solenoidal, sphere

# -- Two fields ----------------------------------------------------------------------------------------------
# Definitions: Schrijver et al., Solar Phys. 235, 161 (2006), from memory; answers by hand.


def box(n=12, side=0.6, at=1.4):
    q = np.linspace(at - side / 2, at + side / 2, n + 1)
    return fm.cartesian_grid(q, q - at + 0.1, q - at)


@pytest.mark.parametrize("other", ["sphere", "warped", "coarse box"])
def test_one_field_on_two_grids(other):
    """They differ by the error of the splines, fourth order in the cells of both."""

    def grid(n):
        if other == "sphere":
            return sphere(n, 2 * n, 2 * n)
        if other == "coarse box":
            return box(2 * n // 3, 0.8)
        q = np.linspace(-0.5, 0.5, n + 1)
        return fm.warped_grid(q, q, q, lambda a, b, c: (1.4 + a + 0.1 * np.sin(3 * b), b - 0.1 * np.sin(c), c))

    def error(n):
        found = compare_fields(solenoidal(grid(n)), solenoidal(box(n)))
        assert found.points == n**3
        assert found.overlap == pytest.approx(1, rel=1e-12)
        assert 1 - found.figures.cosine < found.figures.mean_error
        return found.figures.normalised_error

    coarse, fine = error(9), error(18)
    assert np.log2(coarse / fine) > 3.3, (coarse, fine)
    assert fine < 3e-4


def test_a_field_turned_by_ten_degrees_on_another_grid():
    c, s = math.cos(math.radians(10)), math.sin(math.radians(10))
    one = solenoidal(sphere(8, 12, 16), fields.uniform(0, 0, 1))
    other = solenoidal(box(), fields.uniform(s, 0, c))
    found = compare_fields(one, other)
    expected = (0.9848077530122081, 0.9848077530122081, 0.1743114854953163, 0.1743114854953163, 1.0)
    np.testing.assert_allclose(list(found.figures.as_dict().values()), expected, rtol=1e-3)
    assert list(found.as_dict()) == [*found.figures.as_dict(), "overlap"]


def test_only_what_overlaps_counts():
    """A shell 1 < r < 2 and the cube 0 < x, y, z < 2: by the volumes (pi / 6)(8 - 1) / 8 of the cube."""
    q = np.linspace(0, 2, 25)
    found = compare_fields(solenoidal(sphere(12, 16, 24)), solenoidal(fm.cartesian_grid(q, q, q)))
    np.testing.assert_allclose(found.overlap, np.pi / 6 * 7 / 8, rtol=5e-3)
    assert found.figures.normalised_error < 1e-2
    few = compare_fields(solenoidal(sphere(12, 16, 24)), solenoidal(fm.cartesian_grid(q, q, q)), most=500)
    assert few.points == pytest.approx(500 * found.overlap, rel=0.1)
    assert few.overlap == pytest.approx(found.overlap, rel=0.1)
    np.testing.assert_allclose(few.figures.normalised_error, found.figures.normalised_error, rtol=0.5)
    inner = np.zeros((24, 24, 24), dtype=bool)
    inner[10:14, 10:14, 10:14] = True
    some = compare_fields(solenoidal(sphere(12, 16, 24)), solenoidal(fm.cartesian_grid(q, q, q)), inner)
    assert (some.points, some.overlap) == (64, pytest.approx(1 / 6**3))
    with pytest.raises(FieldError, match="no cell centre that is wanted in"):
        compare_fields(solenoidal(sphere(3, 4, 6)), solenoidal(box(4)), np.zeros((4, 4, 4), dtype=bool))
    with pytest.raises(FieldError, match="no cell centre in"):
        compare_fields(solenoidal(sphere(3, 4, 6)), solenoidal(box(at=9.0)))


def test_the_mean_field_of_cells():
    """Exact for a uniform field in cells bounded by parallelograms."""
    q = np.linspace(0, 1, 5) ** 1.2
    grid = fm.warped_grid(
        q, q, q, lambda a, b, c: (a + 0.5 * b + 0.1 * c, b + 0.3 * c + 0.2 * a, c - 0.2 * a + 0.1 * b)
    )
    b, volumes = mean_field(solenoidal(grid, fields.uniform(0.3, -0.4, 1.1)), slice(1, 3))
    for part, exact in zip(b, (0.3, -0.4, 1.1), strict=True):
        np.testing.assert_allclose(part, exact, rtol=1e-12)
    np.testing.assert_allclose(volumes, grid.cell_volumes()[1:3], rtol=1e-12)


# -- The gas -------------------------------------------------------------------------------------------------


def test_extremes_of_a_known_gas():
    """B = (0, 0, 2) everywhere, so b^2 = 4; the rest is set cell by cell."""
    grid = fm.cartesian_grid([0, 1, 2], [0, 2], [0, 1, 3])
    flux = solenoidal(grid, fields.uniform(0, 0, 2))
    density = np.array([[[4.0, 1.0]], [[0.0, 8.0]]])
    pressure = np.array([[[3.0, 2.0]], [[0.5, 2.0]]])
    speed = np.array([[[0.0, 0.0]], [[0.0, 13.0]]])
    lorentz = np.array([[[1.0, 3.0]], [[2.0, 1.0]]])
    found = fluid_extremes(grid, squares(flux), density, pressure, speed, lorentz)
    assert {name: (round(e.value, 12), e.cell) for name, e in found.items()} == {
        "b2_over_rho_largest": (4.0, (0, 0, 1)),  # not where there is no gas
        "beta_smallest": (0.25, (1, 0, 0)),
        "beta_largest": (1.5, (0, 0, 0)),
        "speed_largest": (13.0, (1, 0, 1)),
        "lorentz_largest": (3.0, (0, 0, 1)),
    }
    assert found["speed_largest"].position == (1.5, 1.0, 2.0)
    where = np.array([[[True, False]], [[True, False]]])
    part = fluid_extremes(grid, squares(flux), density, pressure, speed, where=where)
    assert part["b2_over_rho_largest"].value == pytest.approx(1)
    assert part["speed_largest"].value == 0
    empty = fluid_extremes(grid, np.zeros(grid.shape), 0 * density, pressure)
    assert set(empty.values()) == {None}


@pytest.mark.parametrize("name", ["density", "pressure", "speed"])
def test_a_gas_that_does_not_fit(name):
    with pytest.raises(FieldError, match=name):
        fluid_extremes(box(4), **{name: np.ones(3)})


# -- Regions -------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", GRIDS)
def test_formulas_against_plain_numpy(kind):
    grid = GRIDS[kind]()
    x, y, z = grid.centres()
    r, R = np.sqrt(x**2 + y**2 + z**2), np.sqrt(x**2 + y**2)
    phi = np.where(np.arctan2(y, x) < 0, np.arctan2(y, x) + TURN, np.arctan2(y, x))
    weight = np.random.default_rng(8).random(grid.shape)
    for text, expected in (
        ("r > 0.9 and theta < 1.6", (r > 0.9) & (np.arccos(z / r) < 1.6)),
        ("not (x < 0.3) or R**2 < 0.4", ~(x < 0.3) | (R**2 < 0.4)),
        ("0.1 < phi < 0.9*pi", (phi > 0.1) & (phi < 0.9 * np.pi)),
        ("phi > 3.3 or x > 0.2", (phi > 3.3) | (x > 0.2)),
        ("w * abs(y) > 0.02", weight * np.abs(y) > 0.02),
    ):
        np.testing.assert_array_equal(expression_cells(grid, text, {"w": weight}), expected)
    np.testing.assert_array_equal(expression_cells(grid, "r >= 0.2 and r < 1.4"), shell_cells(grid, 0.2, 1.4))


def test_formulas_that_hold_nowhere_or_are_none():
    with pytest.raises(GridError, match=r"where 'r > 99': no cell centre"):
        expression_cells(GRIDS["box"](), "r > 99")
    with pytest.raises(JobError, match="unknown name 'w'"):
        expression_cells(GRIDS["box"](), "w > 0")
    with pytest.raises(JobError, match="expected a comparison"):
        expression_cells(GRIDS["box"](), "x + 1")
