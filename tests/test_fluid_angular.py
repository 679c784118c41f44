"""Momentum and angular momentum on other grids."""

import numpy as np
import pytest

from fieldmover.errors import FieldError
from fieldmover.forms.fields import CellContent
from fieldmover.grids import cartesian_grid
from fieldmover.interpolation.angular import angular_momentum, move_velocity
from fieldmover.interpolation.fluid import FluidPlan
from tests.test_fluid import ACROSS, INSIDE, ball, cube, integral, line, wedge

PAIRS = {
    **{name: INSIDE[name] for name in INSIDE if "fine" not in name},
    "wedge in a box": lambda n: (wedge(n), cartesian_grid(line(0, 3.1, n), line(-2.3, 2.3, n), line(-2.2, 2.2, n))),
}


def ring(x, y, z):
    """Gas between 0.4 and 0.8 from the z axis."""
    return np.exp(-((np.hypot(x, y) - 0.6) ** 2 + z**2) / (2 * 0.1**2))


def rotation(x, y, z):
    """Circular velocity round a point mass: v^2 = 1 / R."""
    rate = np.hypot(x, y) ** -1.5
    return -rate * y, rate * x, 0 * z


def rotating_ring(grid):
    mass = integral(grid, ring, 2)
    momentum = [integral(grid, lambda x, y, z, d=d: ring(x, y, z) * rotation(x, y, z)[d], 2).cells for d in range(3)]
    return mass, np.divide(momentum, mass.cells, out=np.zeros((3, *grid.shape)), where=mass.cells > 0)


def random_state(grid, seed):
    rng = np.random.default_rng(seed)
    mass = CellContent(grid, grid.cell_volumes() * 10 ** rng.uniform(-2, 2, grid.shape))
    return mass, rng.standard_normal((3, *grid.shape))


def sums(mass, velocity):
    return (mass.cells * velocity).sum(axis=(1, 2, 3)), (mass.cells * np.abs(velocity)).sum()


@pytest.mark.parametrize("name", PAIRS)
@pytest.mark.parametrize("keep", [None, "angular momentum"])
def test_momentum_is_kept_and_angular_momentum_on_request(name, keep):
    source, target = PAIRS[name](12)
    mass, velocity = random_state(source, 3)
    axis, centre = (0.3, -0.5, 1.0), (0.2, 0.1, -0.3)
    moved, result, record = move_velocity(FluidPlan(source, target), mass, velocity, keep, axis, centre)
    before, scale = sums(mass, velocity)
    after, _ = sums(moved, result)
    assert np.abs(after - before).max() < 1e-12 * scale
    size = np.abs(source.node_positions()).max()
    assert abs(record.arrived - record.source) < 1e-12 * scale * size
    assert record.source == pytest.approx(angular_momentum(mass, velocity, axis, centre), rel=1e-12)
    assert record.stored == angular_momentum(moved, result, axis, centre)
    if keep:
        assert abs(record.stored - record.source) < 1e-12 * scale * size
    else:
        assert record.stored == record.moved
    assert (result[:, moved.cells == 0] == 0).all()


def test_rotating_ring_from_a_sphere_to_a_box():
    """What is lost without keeping falls at second order; the exact angular momentum is int rho R v dV."""
    lost = []
    for n in (10, 20, 40):
        source, target = ball(n, 0.3, 1.0), cube(n, 1.05, (0.013, 0.021, 0.007))
        plan, (mass, velocity) = FluidPlan(source, target), rotating_ring(source)
        exact = integral(source, lambda x, y, z: ring(x, y, z) * np.hypot(x, y) ** 0.5, 2).cells.sum()
        _, _, record = move_velocity(plan, mass, velocity)
        lost.append(abs(record.stored / exact - 1))
        assert record.turn == 0
        moved, turned, record = move_velocity(plan, mass, velocity, "angular momentum")
        assert abs(angular_momentum(moved, turned) / angular_momentum(mass, velocity) - 1) < 1e-12
        assert np.abs((moved.cells * turned).sum(axis=(1, 2, 3))).max() < 1e-12 * (mass.cells * abs(velocity)).sum()
        assert abs(record.turn) < 0.1
    assert lost[2] < lost[0] / 8, lost
    assert lost[2] < 1e-3, lost


def test_only_the_part_that_lies_in_the_target_counts():
    source, target = ACROSS["sphere to box with pole"](16)
    mass, velocity = random_state(source, 4)
    plan = FluidPlan(source, target)
    _, _, record = move_velocity(plan, mass, velocity, "angular momentum", axis=(1, 0, 0))
    assert record.arrived != pytest.approx(record.source, rel=0.1)
    assert record.stored == pytest.approx(record.arrived, rel=1e-11)


def test_the_turn_is_the_smallest_change():
    """Adding any other change that moves neither sum makes the sum of m dv^2 larger (Lagrange's condition)."""
    source, target = ball(8), cube(8, 1.05)
    mass, velocity = random_state(source, 5)
    plan = FluidPlan(source, target)
    moved, plain, _ = move_velocity(plan, mass, velocity)
    _, turned, _ = move_velocity(plan, mass, velocity, "angular momentum")
    change, m = turned - plain, moved.cells
    other = np.random.default_rng(6).standard_normal(change.shape) * (m > 0)
    x = target.centres()
    basis = [np.stack([m * (d == e) for d in range(3)]) for e in range(3)] + [np.stack([-m * x[1], m * x[0], 0 * m])]
    basis = np.stack([part.ravel() for part in basis], axis=1)
    other = other.ravel() - np.linalg.pinv(basis).T @ (basis.T @ other.ravel())
    assert np.abs(basis.T @ other).max() < 1e-10 * np.abs(basis).sum()
    weight = np.broadcast_to(m, change.shape).ravel()
    assert abs((weight * change.ravel() * other).sum()) < 1e-10 * np.sqrt(
        (weight * change.ravel() ** 2).sum() * (weight * other**2).sum()
    )


def test_what_cannot_be_kept_is_refused():
    source, target = cube(4, 0.5), cube(1, 0.6)
    mass = CellContent(source, source.cell_volumes())
    x, y, z = source.centres()
    with pytest.raises(FieldError, match="all 1 cells with mass lie on one line along the axis"):
        move_velocity(FluidPlan(source, target), mass, np.stack([-y, x, 0 * z]), "angular momentum")
    with pytest.raises(FieldError, match="'energy', expected None or 'angular momentum'"):
        move_velocity(FluidPlan(source, target), mass, np.stack([-y, x, 0 * z]), "energy")
    with pytest.raises(FieldError, match="has no direction"):
        angular_momentum(mass, np.stack([-y, x, 0 * z]), axis=(0, 0, 0))
    with pytest.raises(FieldError, match="three finite numbers"):
        angular_momentum(mass, np.stack([-y, x, 0 * z]), centre=(0, 0, np.inf))
    with pytest.raises(FieldError, match=r"velocity: shape \(4, 4, 4\), expected \(3, 4, 4, 4\)"):
        angular_momentum(mass, x)
