"""What is outside the source, and how the gas goes over into it."""

import numpy as np
import pytest

from fieldmover.errors import FieldError
from fieldmover.forms.fields import CellContent
from fieldmover.grids import cartesian_grid, cylindrical_grid, spherical_grid
from fieldmover.interpolation.background import Blend, power_law, wall_distance
from fieldmover.interpolation.fluid import FluidPlan
from fieldmover.interpolation.points import move_points
from tests.test_fluid import ball, cube, line, wavy, wedge


def test_distance_from_the_walls_of_a_wedge():
    points = np.random.default_rng(1).uniform([0.5, -1.5, -1.5], [2.5, 1.5, 1.5], (400, 3)).T
    x, y, z = points
    r, rho = np.sqrt((points**2).sum(axis=0)), np.hypot(x, y)
    theta, phi = np.arctan2(rho, z), np.arctan2(y, x)
    gaps = [r - 1, 3 - r, r * (theta - 0.8), r * (2.2 - theta), rho * (phi + 0.8), rho * (0.8 - phi)]
    np.testing.assert_allclose(wall_distance(wedge(6), points), np.maximum(np.min(gaps, axis=0), 0), atol=1e-12)


def test_seams_and_poles_are_no_walls():
    x = np.array([[0.3, 1e-3, -0.2], [0.1, 0.0, 0.4], [0.2, 0.9, -0.3]])
    r = np.sqrt((x**2).sum(axis=0))
    np.testing.assert_allclose(wall_distance(ball(8), x), np.minimum(r - 0.2, 1 - r), atol=1e-12)
    can = cylindrical_grid(line(0, 2, 4), line(0, 2 * np.pi, 8), line(-1, 1, 4))
    np.testing.assert_allclose(wall_distance(can, x), np.minimum(2 - np.hypot(*x[:2]), 1 - np.abs(x[2])), atol=1e-12)
    box = cartesian_grid(*[line(-1, 1, 4)] * 3, periodic=(True, True, True))
    assert np.isinf(wall_distance(box, x)).all()


def test_distance_in_a_warped_grid_is_right_to_first_order():
    """Points a small way along the inner normal from the wall q1 = -1/2, whose tangents are taken by differences."""
    grid, d = wavy(16), 1e-3
    to = grid.map.to_cartesian
    b, c = np.random.default_rng(2).uniform(-0.3, 0.3, (2, 20))
    a, h = np.full(20, -0.5), 1e-5
    tangents = [
        (np.stack(to(a, b + h, c)) - np.stack(to(a, b - h, c))) / (2 * h),
        (np.stack(to(a, b, c + h)) - np.stack(to(a, b, c - h))) / (2 * h),
    ]
    normal = np.cross(*tangents, axis=0)
    normal /= np.sqrt((normal**2).sum(axis=0))
    np.testing.assert_allclose(wall_distance(grid, np.stack(to(a, b, c)) + d * normal), d, rtol=2e-2)
    assert (wall_distance(grid, np.stack(to(a, b, c)) - d * normal) == 0).all()
    assert wall_distance(grid, np.array([[5.0], [5.0], [5.0]])) == 0


@pytest.mark.parametrize("width", [0.0, 0.15])
def test_mass_is_counted_and_stays_between_the_two_densities(width):
    source, target = ball(16), cube(20, 1.2)
    plan = FluidPlan(source, target)
    moved = plan.move(CellContent(source, 3.0 * source.cell_volumes()))
    blend = Blend(plan, width)
    mixed, totals = blend.content(moved, 0.5)
    volume = target.cell_volumes()
    assert mixed.cells.sum() == pytest.approx(moved.cells.sum() + totals["added"] - totals["removed"], rel=1e-13)
    assert (totals["removed"] == 0) == (width == 0)
    density = mixed.cells / volume
    assert density.min() >= 0.5 * (1 - 1e-12)
    assert density.max() <= 3.0 * (1 + 1e-12)
    assert (density[plan.coverage == 0] == 0.5).all()
    r = np.sqrt((target.centres() ** 2).sum(axis=0))
    deep = (plan.coverage == 1) & (r - 0.2 >= width) & (1 - r >= width)
    np.testing.assert_allclose(density[deep], 3.0, rtol=1e-12)
    if width == 0:  # part of a cell, by volume
        np.testing.assert_allclose(density, 3.0 * plan.coverage + 0.5 * (1 - plan.coverage), rtol=1e-12)


def test_the_transition_is_monotone_and_smooth():
    source = cartesian_grid(line(0, 4, 400), [0, 1], [0, 1], periodic=(False, True, True))
    blend = Blend(FluidPlan(source, source), 1.0)
    share = blend.share[:, 0, 0]
    x = (np.arange(400) + 0.5) / 100
    assert (np.diff(share[:200]) >= 0).all()
    assert np.abs(np.diff(share, 2)).max() < 6e-4  # the second derivative is at most 10 / sqrt(3)
    np.testing.assert_allclose(share, share[::-1], atol=1e-12)
    assert share[x < 0.02].max() < 1e-4
    assert (share[(x > 1) & (x < 3)] == 1).all()
    assert np.interp(0.5, x, share) == pytest.approx(0.5, abs=1e-3)


def test_values_by_mass_mix_by_mass():
    source, target = ball(12), cube(14, 1.2)
    plan = FluidPlan(source, target)
    rng = np.random.default_rng(3)
    mass = CellContent(source, source.cell_volumes() * rng.uniform(1, 2, source.shape))
    moved, value = plan.move_by_mass(mass, rng.uniform(2, 3, source.shape))
    blend, density = Blend(plan, 0.1), power_law(target, 0.2, 1.0, -2.0, (0.01, 0, 0))
    mixed, totals = blend.content(moved, density)
    result = blend.by_mass(value, moved, density, -1.0)
    momentum = (moved.cells * blend.part * value).sum() - totals["added"]
    assert (mixed.cells * result).sum() == pytest.approx(momentum, rel=1e-12)
    assert (result[plan.coverage == 0] == -1).all()
    assert result.min() >= -1 - 1e-12
    assert result.max() <= 3 + 1e-12
    nothing = blend.by_mass(value, moved, 0.0, 7.0)
    assert (nothing[(moved.cells * blend.part) == 0] == 7).all()
    kept = moved.cells * blend.part > 0
    np.testing.assert_allclose(nothing[kept], value[kept], rtol=1e-12)


def test_values_at_points():
    source, target = ball(12), cube(15, 1.2)
    plan = FluidPlan(source, target)
    values, known = move_points(np.full(source.shape, 4.0), source, target)
    sharp = Blend(plan).points(values, known, 1.0)
    assert np.array_equal(sharp == 1.0, ~known)
    soft = Blend(plan, 0.3).points(values, known, np.full(target.shape, 1.0))
    assert np.isfinite(soft).all()
    assert ((soft >= 1) & (soft <= 4 * (1 + 1e-12))).all()
    assert ((soft > 1.1) & (soft < 3.9)).any()


def test_power_law():
    grid = spherical_grid([1, 3, 5], line(0, np.pi, 2), line(0, 2 * np.pi, 4))
    np.testing.assert_allclose(power_law(grid, 3.0, 2.0, -1.5)[:, 0, 0], [3.0, 3.0 * 2**-1.5], rtol=1e-14)


def test_bad_backgrounds_are_refused():
    source, target = ball(6), cube(5, 1.2)
    plan = FluidPlan(source, target)
    moved = plan.move(CellContent(source, source.cell_volumes()))
    with pytest.raises(FieldError, match=r"width of the transition: -0\.1"):
        Blend(plan, -0.1)
    blend = Blend(plan, 0.1)
    with pytest.raises(FieldError, match="its least is -1, expected 0 or more"):
        blend.content(moved, -1.0)
    with pytest.raises(FieldError, match=r"shape \(2,\), expected a number or \(5, 5, 5\)"):
        blend.content(moved, np.ones(2))
    bad = np.ones((5, 5, 5))
    bad[1, 2, 3] = np.nan
    with pytest.raises(FieldError, match=r"nan at cell \[1, 2, 3\]"):
        blend.by_mass(moved.cells, moved, 1.0, bad)
    with pytest.raises(FieldError, match=r"inf at cell \[2, 2, 2\]"):
        power_law(target, 1.0, 1.0, -2.0)
    with pytest.raises(FieldError, match="radius 0, expected above 0"):
        power_law(target, 1.0, 0, -2.0)
