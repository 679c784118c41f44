"""Contents and values by mass on other grids: what is kept, how accurate, how bounded."""

from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest

from fieldmover import compute
from fieldmover.errors import FieldError, GridError
from fieldmover.forms.fields import CellContent
from fieldmover.grids import cartesian_grid, cylindrical_grid, placed, spherical_grid, warped_grid
from fieldmover.grids.kerr import kerr_schild_grid
from fieldmover.grids.placement import turn_about
from fieldmover.interpolation import fluid
from fieldmover.interpolation.fluid import FluidPlan, move_content
from fieldmover.interpolation.overlaps import overlaps
from fieldmover.interpolation.view import View
from tests.reference import _slabs


def line(low, high, n):
    return np.linspace(low, high, n + 1)


def ball(n, inner=0.2, outer=1.0):
    return spherical_grid(np.geomspace(inner, outer, n + 1), line(0, np.pi, n), line(0, 2 * np.pi, 2 * n))


def wedge(n):
    return spherical_grid(np.geomspace(1, 3, n + 1), line(0.8, 2.2, n), line(-0.8, 0.8, n))


def cube(n, half, centre=(0.0, 0.0, 0.0)):
    return cartesian_grid(*[line(c - half, c + half, n) for c in centre])


def can(n, radius, half):
    return cylindrical_grid(line(0, radius, n), line(0, 2 * np.pi, 2 * n), line(-half, half, n))


def wavy(n):
    def to_cartesian(a, b, c):
        return a + 0.06 * np.sin(3 * b), b - 0.2 * a + 0.05 * np.sin(4 * c), c + 0.05 * np.sin(3 * a)

    return warped_grid(*[line(-0.5, 0.5, n)] * 3, to_cartesian)


def turned_box(n, half):
    return warped_grid(*[line(-half, half, n)] * 3, lambda a, b, c: (0.8 * a - 0.6 * b, 0.6 * a + 0.8 * b, c + 0 * a))


# source and target of every pair; the first six have the whole source in the target
INSIDE = {
    "sphere to box": lambda n: (ball(n), cube(n, 1.05)),
    "box to sphere without hole": lambda n: (cube(n, 0.4, (0.6, 0.5, 0.1)), ball(n, 0.05, 1.6)),
    "cylinder to box": lambda n: (can(n, 0.9, 0.8), cube(n + 3, 1.0)),
    "sphere to cylinder": lambda n: (ball(n), can(n, 1.02, 1.01)),
    "warped to box": lambda n: (wavy(n), cube(n, 0.8)),
    "box in a finer, larger box": lambda n: (cube(n, 0.5, (0.03, 0.01, 0.02)), cube(3 * n, 0.7)),
    "fine sphere to coarse box": lambda n: (ball(2 * n), cube(5, 1.05)),
    "coarse sphere to fine box": lambda n: (ball(4), cube(2 * n, 1.05)),
}
ACROSS = {
    "wedge to box": lambda n: (wedge(n), cartesian_grid(line(1.5, 2.3, n), line(-0.5, 0.5, n), line(-0.5, 0.6, n))),
    "sphere to box with pole": lambda n: (ball(n), cube(n, 0.45, (0.02, 0.01, 0.5))),
    "box to full sphere": lambda n: (cube(n, 1.05), ball(n)),
    "box to warped": lambda n: (cube(n, 1.0), wavy(n)),
}


def integral(grid, density, points=3):
    """Contents of cells by Gauss points."""
    out = np.zeros(grid.shape)
    for rows, q, weight in _slabs(grid, (0, 1, 2), points):
        x = grid.map.to_cartesian(*q)
        j = grid.map.jacobian(*q)
        det = np.abs(np.einsum("i...,i...", j[:, 0], np.cross(j[:, 1], j[:, 2], axis=0)))
        out[rows] += density(*x) * det * weight
    return CellContent(grid, out)


def smooth(x, y, z):
    return 2 + np.sin(2.1 * x + 0.3) * np.cos(1.7 * y) * np.cos(2.3 * z - 0.4) + 0.3 * np.sin(3 * z)


def total(content):
    return float(content.cells.sum())


@pytest.mark.parametrize("name", INSIDE)
def test_total_is_kept_to_round_off(name):
    source, target = INSIDE[name](12)
    rng = np.random.default_rng(5)
    content = CellContent(source, source.cell_volumes() * 10 ** rng.uniform(-3, 3, source.shape))
    moved = move_content(content, target)
    assert abs(total(moved) / total(content) - 1) < 1e-13
    assert moved.cells.min() >= 0


@pytest.mark.parametrize("name", [*INSIDE, *ACROSS])
def test_constant_density_stays_constant(name):
    source, target = {**INSIDE, **ACROSS}[name](24)
    plan = FluidPlan(source, target)
    density = plan.move(CellContent(source, source.cell_volumes())).cells / target.cell_volumes()
    assert (plan.coverage == 1).sum() > 10
    np.testing.assert_allclose(density, plan.coverage, rtol=0, atol=1e-13)


@pytest.mark.parametrize("name", INSIDE)
def test_covered_volume_is_that_of_the_source(name):
    source, target = INSIDE[name](12)
    plan = FluidPlan(source, target)
    assert plan.contained.all()
    assert (plan.coverage * target.cell_volumes()).sum() == pytest.approx(source.cell_volumes().sum(), rel=1e-13)


@pytest.mark.parametrize("name", ACROSS)
def test_second_order_on_a_smooth_density(name):
    errors = []
    for n in (12, 24, 48):
        source, target = ACROSS[name](n)
        plan = FluidPlan(source, target)
        moved, exact = plan.move(integral(source, smooth)).cells, integral(target, smooth).cells
        covered = plan.coverage == 1
        errors.append(np.abs(moved - exact)[covered].sum() / exact[covered].sum())
    assert np.log2(errors[0] / errors[2]) / 2 > 1.85
    assert errors[2] < 4e-4


def test_small_wedges_at_an_axis_get_the_density_of_their_middle():
    """The centroid of a wedge is at two thirds of its length, not at half."""
    source = cube(16, 0.6)
    target = cylindrical_grid(line(0, 0.5, 24), line(0, 2 * np.pi, 12), line(-0.5, 0.5, 48))
    moved = move_content(integral(source, lambda x, y, z: 3 + x + 0 * y), target).cells / target.cell_volumes()
    error = moved - integral(target, lambda x, y, z: 3 + x + 0 * y).cells / target.cell_volumes()
    assert np.abs(error[0]).max() < 1e-3


def test_cells_that_narrow_along_two_axes_are_regular():
    """At an axis, and with a radius that changes by half: the slopes of the Jacobian alone do not tell its shape."""
    small = spherical_grid([0.02, 0.044, 0.06], line(0, np.pi, 10), line(0, 2 * np.pi, 22))
    target = placed(small, (0.3, 0.1, 0.2), turn_about((1, 0, 0), 0.7))
    view = View(target, ball(8))
    (block,) = view.blocks
    assert not overlaps(view, block, target.cell_volumes())[2].any()


def test_coverage_of_small_cells_that_a_wall_cuts():
    """Half of a turned box lies in the source; its cells at the wall are sampled."""
    source = cube(4, 1.0)
    target = placed(cube(12, 0.3), (1.0, 0.1, 0.2), turn_about((1, 2, 3), 0.7))
    place = (np.arange(8) + 0.5) / 8
    q = [(nodes[:-1, None] + np.diff(nodes)[:, None] * place).reshape(-1) for nodes in target.nodes]
    x = target.map.to_cartesian(q[0][:, None, None], q[1][None, :, None], q[2][None, None, :])[0]
    exact = (x < 1).reshape(12, 8, 12, 8, 12, 8).mean(axis=(1, 3, 5))
    coverage = FluidPlan(source, target).coverage
    assert not (coverage[exact < 0.99] == 1).any()
    assert np.abs(coverage - exact).max() < 0.02


@pytest.mark.parametrize("radius", [0.49, 0.5, 0.503])
def test_wide_and_thin_cells_of_a_ring_hold_a_constant(radius):
    """Twelve cells round an axis, thinner than their arcs bulge, over a fine box."""
    source = cube(24, 0.6)
    target = cylindrical_grid(line(0, radius, 48), line(0, 2 * np.pi, 12), line(-0.5, 0.5, 12))
    one = move_content(CellContent(source, source.cell_volumes()), target).cells / target.cell_volumes()
    np.testing.assert_allclose(one, 1, rtol=1e-12)


def test_a_grid_onto_itself_or_a_refinement_is_exact():
    source = ball(8)
    content = integral(source, smooth)
    np.testing.assert_allclose(move_content(content, source).cells, content.cells, rtol=1e-13)
    fine = move_content(content, ball(16)).cells
    coarse = fine.reshape(8, 2, 8, 2, 16, 2).sum(axis=(1, 3, 5))
    np.testing.assert_allclose(coarse, content.cells, rtol=1e-12)


def test_coarsening_adds_up_cells():
    fine = ball(16)
    content = CellContent(fine, np.random.default_rng(2).uniform(0, 1, fine.shape))
    sums = content.cells.reshape(8, 2, 8, 2, 16, 2).sum(axis=(1, 3, 5))
    np.testing.assert_allclose(move_content(content, ball(8)).cells, sums, rtol=1e-12)


def test_periodic_box():
    source = cartesian_grid(*[line(0, 1, 9)] * 3, periodic=(True,) * 3)
    target = cartesian_grid(*[line(0, 1, 7)] * 3, periodic=(True,) * 3)
    content = integral(source, lambda x, y, z: 2 + np.sin(2 * np.pi * x) * np.cos(2 * np.pi * y) + 0 * z)
    moved = move_content(content, target)
    assert abs(total(moved) / total(content) - 1) < 1e-14
    exact = integral(target, lambda x, y, z: 2 + np.sin(2 * np.pi * x) * np.cos(2 * np.pi * y) + 0 * z)
    assert np.abs(moved.cells / exact.cells - 1).max() < 0.05


def sheared(x, y, z):
    return x + np.sin(2 * y), y + 0.3 * np.sin(z), z + x * y


UNEVEN = np.array([0, 0.05, 0.2, 0.45, 0.5, 0.8, 1.0])


@pytest.mark.parametrize(("low", "high"), [(0.3, 1.3), (-2.0, 1.0), (3.7, 4.2)])
@pytest.mark.parametrize("seam", [False, True])
def test_a_target_beyond_a_periodic_box_sees_it_repeated(low, high, seam):
    source = cartesian_grid(UNEVEN, line(0, 1, 4), line(0, 1, 4), periodic=(True,) * 3)
    target = cartesian_grid(line(low, high, 15), line(0, 1, 5), line(0.25, 1.25, 4), periodic=(seam, True, True))
    plan = FluidPlan(source, target)
    assert (plan.coverage == 1).all()
    one = plan.move(CellContent(source, source.cell_volumes())).cells / target.cell_volumes()
    np.testing.assert_allclose(one, 1, rtol=1e-12)
    mass = CellContent(source, source.cell_volumes() * np.random.default_rng(1).uniform(0, 9, source.shape))
    moved, velocity = plan.move_by_mass(mass, np.random.default_rng(2).uniform(-1, 1, source.shape))
    periods = high - low
    if periods == round(periods):
        assert plan.contained.any()
        assert total(moved) == pytest.approx(periods * total(mass), rel=1e-12 if seam else 3e-2)
    assert np.abs(velocity).max() <= 1


@pytest.mark.parametrize("origin", [(0.5, 0.5, 0.5), (0, 0, 0), (0.1, 0.9, 2.3)])
def test_a_small_sphere_anywhere_in_a_coarse_periodic_box(origin):
    """Its cells beside the axis are far smaller than those of the box."""
    source = cartesian_grid(*[line(0, 1, 8)] * 3, periodic=(True,) * 3)
    target = placed(spherical_grid(line(0.05, 0.4, 8), line(0, np.pi, 8), line(0, 2 * np.pi, 16)), origin)
    plan = FluidPlan(source, target)
    assert plan.coverage.min() == 1
    one = plan.move(CellContent(source, source.cell_volumes())).cells / target.cell_volumes()
    np.testing.assert_allclose(one, 1, rtol=1e-12)
    wave = CellContent(source, source.cell_volumes() * (2 + np.sin(2 * np.pi * source.centres()[0])))
    exact = 2 + np.sin(2 * np.pi * target.centres()[0])
    np.testing.assert_allclose(plan.move(wave).cells / target.cell_volumes(), exact, rtol=0.15)


@pytest.mark.parametrize("turn", [None, turn_about((1, 2, 3), 0.5)])
def test_a_periodic_target_in_a_larger_source_is_a_box(turn):
    source = cube(10, 2.0)
    content = CellContent(source, source.cell_volumes() * (3 + source.centres()[0]))
    nodes = [line(-0.5, 0.5, 4), line(-0.6, 0.4, 3), line(-0.5, 0.5, 4)]
    walls, seams = (placed(cartesian_grid(*nodes, periodic=(seam,) * 3), turn=turn) for seam in (False, True))
    assert np.array_equal(move_content(content, seams).cells, move_content(content, walls).cells)


def test_a_target_in_another_unit_of_length_is_named():
    source = cartesian_grid([0, 1], [0, 1], [0, 1], periodic=(True, False, False))
    with pytest.raises(GridError, match="spans 100 periods of the source along x"):
        FluidPlan(source, cube(4, 50.0))


@pytest.mark.parametrize("parts", [2, 3])
@pytest.mark.parametrize(
    "grid",
    [
        lambda a, b, c: kerr_schild_grid(1 + a, np.pi * b, 2 * np.pi * c, 0.7),
        lambda a, b, c: cylindrical_grid(a, 2 * np.pi * c, b),
        lambda a, b, c: warped_grid(a, b, c, sheared),
    ],
    ids=["spheroidal", "cylindrical", "warped"],
)
@pytest.mark.parametrize("cells", [(1, 1, 1), (2, 1, 3), (3, 4, 5)])
def test_restarts_keep_coarse_masses_on_few_cells(grid, cells, parts):
    """However bent the cells are, those of one grid are parts of those of the other."""
    rng = np.random.default_rng(4)
    nodes = [np.concatenate([[0], np.sort(rng.uniform(0, 1, n - 1)), [1]]) for n in cells]
    finer = [np.append((q[:-1, None] + np.diff(q)[:, None] * np.arange(parts) / parts).ravel(), 1) for q in nodes]
    coarse, fine = grid(*nodes), grid(*finer)
    content = CellContent(coarse, rng.uniform(0, 1, coarse.shape) * coarse.cell_volumes())
    moved = move_content(content, fine)
    shape = [n for cells_along in coarse.shape for n in (cells_along, parts)]
    np.testing.assert_allclose(moved.cells.reshape(shape).sum(axis=(1, 3, 5)), content.cells, rtol=1e-13)
    np.testing.assert_allclose(move_content(moved, coarse).cells, content.cells, rtol=1e-13)


@pytest.mark.parametrize("ring", [1, 2])
def test_rings_of_one_or_two_cells_that_leave_the_target(ring):
    """All corners of such cells may lie in the target and most of the cell not."""
    source = cylindrical_grid(line(1, 3, 6), line(-np.pi, np.pi, ring), [-1, 0])
    target = cube(9, 1.0, (-1.6, 0.1, -0.2))
    plan = FluidPlan(source, target)
    one = plan.move(CellContent(source, source.cell_volumes())).cells / target.cell_volumes()
    assert not plan.contained.any()
    assert one.max() < 1 + 1e-12
    np.testing.assert_allclose(one, plan.coverage, rtol=0, atol=1e-12)


def test_a_wedge_into_a_full_turn_that_begins_within_it():
    """Target cells a turn further on are in the wedge too."""
    source = spherical_grid([1, 1.5], line(1, np.pi, 5), line(0.3, 0.3 + np.pi, 2))
    target = spherical_grid(line(1, 1.5, 3), line(1, np.pi, 5), line(1, 1 + 2 * np.pi, 16))
    plan = FluidPlan(source, target)
    one = plan.move(CellContent(source, source.cell_volumes())).cells / target.cell_volumes()
    azimuth = (target.nodes[2] - 0.3) % (2 * np.pi)
    inside = (azimuth[:-1] < np.pi) & (azimuth[1:] < np.pi) & (azimuth[1:] > azimuth[:-1])
    assert plan.contained.all()
    assert one.max() < 1 + 1e-12
    np.testing.assert_allclose(one[:, :, inside], 1, rtol=1e-12)
    shifted = spherical_grid([1, 1.5], line(1, np.pi, 5), line(0.3 - 2 * np.pi, 0.3 - np.pi, 2))
    moved = move_content(CellContent(shifted, source.cell_volumes()), source)
    np.testing.assert_allclose(moved.cells, source.cell_volumes(), rtol=1e-13)


@pytest.mark.parametrize("ring", [9, 10, 16])
def test_a_constant_on_coarse_rings(ring):
    """Cells of 40 degrees are far from parallelepipeds, in both grids."""
    source = cylindrical_grid(line(0, 1.5, 13), line(0, 2 * np.pi, 10), line(-1, 1, 12))
    target = spherical_grid(line(0.1, 2.1, 8), line(0, np.pi, 12), line(0.3, 0.3 + 2 * np.pi, ring))
    plan = FluidPlan(source, target)
    one = plan.move(CellContent(source, source.cell_volumes())).cells / target.cell_volumes()
    np.testing.assert_allclose(one, plan.coverage, rtol=0, atol=1e-12)


@pytest.mark.parametrize(
    ("source", "target"),
    [
        (ball(24), cube(3, 1.05)),
        (ball(12), cube(1, 1.1)),
        (ball(8), cartesian_grid([-3, 0.1, 3], [-2, 0.05, 2], [-2, 2])),
        (cube(12, 0.5), cylindrical_grid(line(0, 0.8, 6), line(0, 2 * np.pi, 1), line(-0.6, 0.6, 5))),
        (cartesian_grid(line(0, 1, 400), line(0, 1, 2), line(0, 1, 2)), cube(6, 1.0)),
        (ball(6, 0.2, 0.8), spherical_grid(np.geomspace(0.1, 1, 6), line(0, np.pi, 5), line(0, 2 * np.pi, 7))),
        (cube(40, 0.5), cube(2, 0.6)),
        (cube(3, 0.5), turned_box(50, 0.8)),
        (ball(2), cube(40, 1.05)),
        (ball(40), cube(2, 1.05)),
    ],
    ids=[
        "many in one",
        "one target cell",
        "small source",
        "one cell round the axis",
        "slivers",
        "few cells",
        "20 to 1",
        "1 to 20 turned",
        "1 to 20 from a sphere",
        "20 to 1 from a sphere",
    ],
)
def test_very_unequal_cells(source, target):
    content = CellContent(source, source.cell_volumes() * np.random.default_rng(1).uniform(0, 9, source.shape))
    plan = FluidPlan(source, target)
    moved = plan.move(content)
    assert abs(total(moved) / total(content) - 1) < 1e-13
    assert moved.cells.min() >= 0
    one = plan.move(CellContent(source, source.cell_volumes())).cells / target.cell_volumes()
    np.testing.assert_allclose(one, plan.coverage, rtol=0, atol=1e-12)
    for cell in np.random.default_rng(2).integers(0, source.cell_volumes().size, 3):  # none is lost
        single = np.zeros(source.shape)
        single.flat[cell] = 1.0
        assert total(plan.move(CellContent(source, single))) == pytest.approx(1.0, rel=1e-12)


def disc_with_slot(x, y):
    """Zalesak (1979), Fully multidimensional flux-corrected transport algorithms for fluids: the usual form."""
    return ((x - 0.5) ** 2 + (y - 0.75) ** 2 < 0.15**2) & ((np.abs(x - 0.5) >= 0.025) | (y >= 0.85))


def test_slotted_disc_stays_between_0_and_1():
    n, sub = 100, 10
    source = cartesian_grid(line(0.25, 0.75, n), line(0.5, 1, n), line(0, 0.02, 2))
    x = 0.25 + 0.5 * (np.arange(n * sub) + 0.5) / (n * sub)
    inside = disc_with_slot(x[:, None], x[None, :] + 0.25).reshape(n, sub, n, sub).mean(axis=(1, 3))
    content = CellContent(source, inside[:, :, None] * source.cell_volumes())
    area = 0.0582207030588900779  # closed form
    assert total(content) / 0.02 == pytest.approx(area, rel=2e-3)

    def turned(a, b, c):
        return 0.5 + 0.8 * a - 0.6 * b, 0.75 + 0.6 * a + 0.8 * b, c

    target = warped_grid(line(-0.17, 0.17, 61), line(-0.17, 0.17, 61), line(0, 0.02, 1), turned)
    plan = FluidPlan(source, target)
    moved = plan.move(content)
    density = moved.cells / target.cell_volumes()
    assert density.min() >= 0
    assert 1 - 1e-13 < density.max() <= 1 + 1e-13
    assert total(moved) == pytest.approx(total(content), rel=1e-13)


def test_six_decades_do_not_undershoot():
    source, target = ball(24), cube(20, 0.55)

    def cliff(x, y, z):
        return np.where(np.sqrt(x**2 + y**2 + z**2) < 0.45, 1.0, 1e-6)

    plan = FluidPlan(source, target)
    content = CellContent(source, cliff(*source.centres()) * source.cell_volumes())
    density = (plan.move(content).cells / target.cell_volumes())[plan.coverage == 1]
    assert density.min() > 1e-6 * (1 - 1e-12)
    assert density.max() < 1 + 1e-12
    assert (density < 1.1e-6).any()


def test_blast_profile_keeps_its_mass_and_does_not_overshoot():
    """Sedov (1959), Similarity and dimensional methods in mechanics: adiabatic index 1.4, density 6 at the shock."""
    x = [0.0, 0.5, 0.8, 0.9, 0.95, 1.0]
    rho = [1e-4, 0.01031114, 0.39268649, 1.23219696, 2.46347126, 6.0]
    source = spherical_grid(line(0.02, 0.9, 90), line(0, np.pi, 24), line(0, 2 * np.pi, 48))
    radius = np.sqrt((source.centres() ** 2).sum(axis=0)) / 0.7
    density = np.where(radius < 1, np.exp(np.interp(radius, x, np.log(rho))), 1.0)
    content = CellContent(source, density * source.cell_volumes())
    target = cube(45, 0.92)
    plan = FluidPlan(source, target)
    moved = plan.move(content)
    assert abs(total(moved) / total(content) - 1) < 1e-13
    after = (moved.cells / target.cell_volumes())[plan.coverage == 1]
    assert density.min() * (1 - 1e-12) < after.min()
    assert 0.6 * density.max() < after.max() < density.max() * (1 + 1e-12) < 6


@pytest.mark.parametrize(
    ("centre", "source", "target", "mass", "tolerance"),
    [
        ((0, 0, 0), cube(60, 0.8), cube(23, 0.3), 0.0156223918229433595, 1e-4),
        ((0, 0, 0), ball(64, 1e-3, 1.0), cube(23, 0.3), 0.0156223918229433595, 1e-3),
        ((0, 0, 0), cube(60, 0.8), ball(32, 1e-2, 0.3), 0.0152882899078335171 - 4e-6 * np.pi / 3, 1e-3),
        ((0.5, 0, 0), cube(60, 0.5, (0.5, 0, 0)), ball(24, 0.2, 0.9), 0.0157413891905381315, 1e-4),
    ],
    ids=["box in box", "box in sphere", "ball in box", "shell in box off centre"],
)
def test_mass_of_a_gaussian_blob(centre, source, target, mass, tolerance):
    """exp(-r^2 / (2 s^2)), s = 0.1, over a cube, a ball and a shell: closed forms with the error function."""

    def blob(x, y, z):
        square = (x - centre[0]) ** 2 + (y - centre[1]) ** 2 + (z - centre[2]) ** 2
        return np.exp(-square / 0.02)

    assert total(move_content(integral(source, blob), target)) == pytest.approx(mass, rel=tolerance)


def test_coverage_of_a_box_by_a_ball():
    """Volume common to the cube [-1, 1]^3 and the ball of radius 1.2: spherical caps, closed form."""
    plan = FluidPlan(ball(48, 1e-3, 1.2), cube(32, 1.0))
    common = (plan.coverage * plan.target.cell_volumes()).sum()
    assert common == pytest.approx(6.3837162720944598606, rel=1e-3)
    assert plan.coverage.min() == 0
    assert plan.coverage.max() == 1


def test_same_bits_for_any_number_of_threads_and_any_memory(monkeypatch):
    source, target = ball(40), cube(40, 0.9)
    content = CellContent(source, np.random.default_rng(3).uniform(0, 1, source.shape))
    before = compute.threads()
    try:
        compute.set_threads(1)
        one = move_content(content, target).cells
        compute.set_threads(2)
        two = move_content(content, target).cells
        monkeypatch.setattr(fluid, "_KEEP", 0)
        lean = move_content(content, target).cells
    finally:
        compute.set_threads(before)
    assert np.array_equal(one, two)
    assert np.array_equal(one, lean)


def test_a_cell_that_no_overlap_caught_is_not_lost(monkeypatch):
    source, target = cube(6, 0.5), cube(5, 0.6)
    found = fluid.overlaps

    def blind(*arguments):
        block, reach, irregular = found(*arguments)
        block.part[block.cell == 43] = 0.0
        return block, reach, irregular

    monkeypatch.setattr(fluid, "overlaps", blind)
    content = CellContent(source, np.where(np.arange(216) == 43, 7.0, 0.0).reshape(6, 6, 6))
    plan = FluidPlan(source, target)
    moved = plan.move(content)
    one = plan.move(CellContent(source, source.cell_volumes())).cells / target.cell_volumes()
    np.testing.assert_allclose(one, plan.coverage, rtol=0, atol=1e-12)
    assert total(moved) == pytest.approx(7.0, rel=1e-14)
    assert moved.cells[1, 1, 1] > 3


def state(grid):
    x, y, z = grid.centres()
    rng = np.random.default_rng(8)
    mass = CellContent(grid, grid.cell_volumes() * 10 ** rng.uniform(-3, 3, grid.shape))
    return mass, np.stack([-y, x, x * y - z, 1 + rng.uniform(0, 1, grid.shape), np.full(grid.shape, -2.5)])


@pytest.mark.parametrize("name", INSIDE)
def test_values_by_mass_keep_momentum_and_range(name):
    source, target = INSIDE[name](10)
    mass, values = state(source)
    plan = FluidPlan(source, target)
    moved, carried = plan.move_by_mass(mass, values)
    assert np.array_equal(moved.cells, plan.move(mass).cells)
    for before, after in zip(values, carried, strict=True):
        assert abs((moved.cells * after).sum() - (mass.cells * before).sum()) < 1e-12 * (mass.cells * abs(before)).sum()
        full = moved.cells > 0
        assert after[full].min() >= before.min() - 1e-12
        assert after[full].max() <= before.max() + 1e-12
    assert (carried[:, ~(moved.cells > 0)] == 0).all()


def test_values_by_mass_are_second_order():
    errors = []
    for n in (10, 20, 40):
        source, target = wedge(n), cartesian_grid(line(1.5, 2.3, n), line(-0.5, 0.5, n), line(-0.5, 0.6, n))
        mass = integral(source, smooth)
        value = integral(source, lambda x, y, z: smooth(x, y, z) * np.sin(x + 2 * y - z)).cells / mass.cells
        exact = integral(target, lambda x, y, z: smooth(x, y, z) * np.sin(x + 2 * y - z)).cells
        exact /= integral(target, smooth).cells
        errors.append(np.abs(FluidPlan(source, target).move_by_mass(mass, value)[1] - exact).mean())
    assert np.log2(errors[0] / errors[2]) / 2 > 1.8
    assert errors[2] < 1e-3


def test_what_a_plan_remembers_of_a_mass_follows_its_values():
    source, target = INSIDE["sphere to box"](8)
    plan, value = FluidPlan(source, target), smooth(*source.centres())
    mass = CellContent(source, source.cell_volumes() * value)
    first, carried = plan.move_by_mass(mass, value)
    first.cells[...] = -1.0  # a copy is the caller's own
    again, same = plan.move_by_mass(mass, value)
    assert np.array_equal(again.cells, plan.move(mass).cells)
    assert np.array_equal(again.cells, FluidPlan(source, target).move(mass).cells)
    assert np.array_equal(carried, same)
    mass.cells[3, 4, 5] *= 1.5
    other, _ = plan.move_by_mass(mass, value)
    assert np.array_equal(other.cells, FluidPlan(source, target).move(mass).cells)
    assert not np.array_equal(other.cells, again.cells)


def test_one_plan_serves_several_threads():
    source, target = INSIDE["sphere to box"](8)
    plan = FluidPlan(source, target)
    masses = [CellContent(source, source.cell_volumes() * k * smooth(*source.centres()) ** k) for k in range(1, 9)]
    expected = [plan.move_by_mass(mass, source.centres())[1] for mass in masses]
    with ThreadPoolExecutor(4) as pool:
        found = list(pool.map(lambda mass: plan.move_by_mass(mass, source.centres())[1], masses * 4))
    assert all(np.array_equal(a, b) for a, b in zip(found, expected * 4, strict=True))


def test_bad_contents_are_refused():
    source, target = cube(4, 0.5), cube(3, 0.5)
    cells = np.ones((4, 4, 4))
    cells[1, 2, 3], cells[3, 0, 0] = -0.25, -1.0
    with pytest.raises(FieldError, match=r"2 are negative or not finite, the first -0.25 at cell \[1, 2, 3\]"):
        move_content(CellContent(source, cells), target)
    cells = np.ones((4, 4, 4))
    cells[0, 0, 2] = np.nan
    with pytest.raises(FieldError, match=r"1 are negative or not finite, the first nan at cell \[0, 0, 2\]"):
        move_content(CellContent(source, cells), target)
    plan, good = FluidPlan(source, target), CellContent(source, np.ones((4, 4, 4)))
    with pytest.raises(FieldError, match=r"1 are not finite, the first nan at cell \[0, 0, 2\]"):
        plan.move_by_mass(good, cells)
    with pytest.raises(FieldError, match=r"shape \(4, 4\), expected"):
        plan.move_by_mass(good, np.ones((4, 4)))
    with pytest.raises(FieldError, match="expected on the source of the plan"):
        plan.move(CellContent(target, np.ones((3, 3, 3))))
