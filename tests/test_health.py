"""Floors and ceilings: what breaks them, where, and what curing it adds."""

from __future__ import annotations

import json
from dataclasses import replace

import numpy as np
import pytest

import fieldmover as fm
from fieldmover.conventions.derived import energy_density, figures
from fieldmover.conventions.health import Gas, Limits, apply, examine
from fieldmover.conventions.metrics import FlatMetric, KerrSchildMetric, geometry, volume_elements
from fieldmover.conventions.velocity import motion, stored_velocity
from fieldmover.errors import DataError, FieldError
from fieldmover.expressions import Expression

GRID = fm.cartesian_grid([3, 4, 5, 6, 7], [1, 2, 3], [0, 2])
SHAPE = GRID.shape
VOLUMES = GRID.cell_volumes()
HOLE = geometry(KerrSchildMetric(1.0, 0.9), GRID)
PROPER = volume_elements(KerrSchildMetric(1.0, 0.9), GRID)
RULES = ("finite", "speed", "density", "magnetisation", "pressure")


def some_gas(**changes):
    rng = np.random.default_rng(3)
    eulerian = rng.uniform(-0.3, 0.3, (3, *SHAPE))
    gas = Gas(
        rng.uniform(1, 2, SHAPE),
        rng.uniform(0.1, 0.2, SHAPE),
        motion(GRID, eulerian, "eulerian", geometry=HOLE).velocity,
        rng.uniform(-0.5, 0.5, (3, *SHAPE)),
    )
    return replace(gas, **changes)


def with_value(array, place, value):
    changed = array.copy()
    changed[..., *place] = value
    return changed


def test_sound_gas_is_left_alone():
    gas = some_gas()
    cured, found = apply(gas, Limits(1e-3, 1e-5, 50.0, 10.0), PROPER, HOLE, 4 / 3)
    assert found.healthy
    assert [rule.rule for rule in found.rules] == list(RULES)
    for name in ("density", "pressure", "velocity", "field"):
        assert np.array_equal(getattr(cured, name), getattr(gas, name))
    moving = motion(GRID, gas.velocity, geometry=HOLE)
    assert found.mass == pytest.approx((gas.density * moving.lorentz * PROPER).sum(), rel=1e-13)
    energy = energy_density(gas.density, gas.pressure, moving, gas.field, HOLE, 4 / 3)
    assert found.energy == pytest.approx((energy * PROPER).sum(), rel=1e-13)


def test_floors_are_counted_located_and_weighed():
    """Newtonian: mass added is floor less density times volume, energy half of that times v^2."""
    gas = some_gas()
    gas = replace(gas, density=with_value(with_value(gas.density, (1, 0, 0), 1e-9), (2, 1, 0), -0.5))
    gas = replace(gas, pressure=with_value(gas.pressure, (3, 1, 0), 1e-9))
    found = examine(gas, Limits(density_floor=1e-3, pressure_floor=0.01), VOLUMES, gamma=1.5)
    rho = found["density"]
    assert (rho.count, rho.first, rho.worst, rho.value, rho.limit) == (2, (1, 0, 0), (2, 1, 0), -0.5, 1e-3)
    added = np.array([1e-3 - 1e-9, 1e-3 + 0.5]) * 2.0  # cells of volume 2
    squares = (gas.velocity**2).sum(axis=0)
    assert rho.mass_added == pytest.approx(added.sum(), rel=1e-12)
    assert rho.energy_added == pytest.approx(0.5 * (added * [squares[1, 0, 0], squares[2, 1, 0]]).sum(), rel=1e-9)
    p = found["pressure"]
    assert (p.count, p.worst, p.mass_added) == (1, (3, 1, 0), 0.0)
    assert p.energy_added == pytest.approx((0.01 - 1e-9) / 0.5 * 2.0, rel=1e-9)
    assert gas.density[2, 1, 0] == -0.5  # nothing is changed in place


def test_a_floor_may_vary_from_cell_to_cell():
    floor = np.broadcast_to(1.9 - 0.3 * np.arange(4).reshape(4, 1, 1), SHAPE)
    gas = Gas(np.full(SHAPE, 1.5))
    cured, found = apply(gas, Limits(density_floor=floor), VOLUMES)
    assert found["density"].count == 4
    assert found["density"].worst == (0, 0, 0)
    np.testing.assert_array_equal(cured.density, np.maximum(floor, 1.5))
    law = Expression("4 * r ** -0.5", {"r"}).evaluate({"r": np.sqrt((GRID.centres() ** 2).sum(axis=0))})
    cured, _ = apply(gas, Limits(density_floor=law), VOLUMES)
    np.testing.assert_array_equal(cured.density, np.maximum(law, 1.5))


def test_a_negative_density_breaks_the_rule_without_any_limit():
    found = examine(Gas(with_value(np.ones(SHAPE), (0, 1, 0), -1e-12)), Limits(), VOLUMES)
    assert found["density"].first == (0, 1, 0)
    assert not found.healthy


def test_the_ceiling_of_the_magnetisation_adds_mass():
    gas = some_gas(field=with_value(some_gas().field, (2, 0, 0), (30.0, 0.0, 0.0)))
    moving = motion(GRID, gas.velocity, geometry=HOLE)
    before = figures(moving, gas.field, gas.density, geometry=HOLE)
    cured, found = apply(gas, Limits(magnetisation_ceiling=20.0), PROPER, HOLE, 4 / 3)
    rule = found["magnetisation"]
    assert (rule.count, rule.worst, rule.limit) == (1, (2, 0, 0), 20.0)
    assert rule.value == pytest.approx(before.magnetisation[2, 0, 0], rel=1e-13)
    after = figures(moving, cured.field, cured.density, geometry=HOLE).magnetisation
    assert after.max() == pytest.approx(20.0, rel=1e-13)
    mass = ((cured.density - gas.density) * moving.lorentz * PROPER).sum()
    assert rule.mass_added == pytest.approx(mass, rel=1e-12)
    gained = [energy_density(g.density, g.pressure, moving, g.field, HOLE, 4 / 3) for g in (gas, cured)]
    assert rule.energy_added == pytest.approx(((gained[1] - gained[0]) * PROPER).sum(), rel=1e-11)
    assert apply(cured, Limits(magnetisation_ceiling=20.0 * (1 + 1e-13)), PROPER, HOLE)[1].healthy


def test_field_without_gas_gets_gas():
    gas = Gas(with_value(np.ones(SHAPE), (1, 1, 0), 0.0), field=np.full((3, *SHAPE), 1.0))
    cured, found = apply(gas, Limits(magnetisation_ceiling=6.0), VOLUMES)
    assert found["magnetisation"].count == 1
    assert cured.density[1, 1, 0] == 0.5  # B^2 = 3
    assert json.loads(json.dumps(found.as_dict(), allow_nan=False))["rules"]["magnetisation"]["value"] is None


def test_fast_gas_is_slowed_down_in_its_direction():
    """Curved space with c = 2."""
    hole = geometry(KerrSchildMetric(1.0, 0.9, light=2.0), GRID)
    fast = np.zeros((3, *SHAPE))
    fast[:, 1, 1, 0] = (100.0, -50.0, 20.0)
    gas = some_gas(
        velocity=stored_velocity(GRID, motion(GRID, fast, "W eulerian", geometry=hole).velocity, geometry=hole)
    )
    cured, found = apply(gas, Limits(lorentz_ceiling=5.0), PROPER, hole)
    rule = found["speed"]
    assert (rule.count, rule.worst) == (1, (1, 1, 0))
    assert rule.limit == pytest.approx(1 - 1 / 25)
    after = motion(GRID, cured.velocity, geometry=hole)
    assert after.lorentz[1, 1, 0] == pytest.approx(5.0, rel=1e-12)
    direction = after.eulerian[:, 1, 1, 0]
    np.testing.assert_allclose(np.cross(direction, fast[:, 1, 1, 0]), 0, atol=1e-10)
    assert rule.mass_added < 0  # rho W falls
    assert rule.energy_added < 0
    assert np.array_equal(cured.velocity[:, 0], gas.velocity[:, 0])
    assert apply(cured, Limits(lorentz_ceiling=5.0), PROPER, hole)[1].healthy


def test_gas_faster_than_light_needs_a_ceiling():
    flat = geometry(FlatMetric(), GRID)
    gas = Gas(np.ones(SHAPE), velocity=with_value(np.zeros((3, *SHAPE)), (3, 0, 0), (1.5, 0, 0)))
    found = examine(replace(gas, density=with_value(gas.density, (3, 0, 0), -1.0)), Limits(), VOLUMES, flat)
    assert found["density"].count == 0  # that cell is left out
    found = examine(gas, Limits(), VOLUMES, flat)
    rule = found["speed"]
    assert (rule.count, rule.first, rule.value, rule.limit, rule.curable) == (1, (3, 0, 0), 2.25, 1.0, False)
    assert found.mass == pytest.approx(VOLUMES.sum() - 2.0)  # the others
    with pytest.raises(DataError, match=r"1 cells break the rule 'speed', the first at \(3, 0, 0\); .* ceiling"):
        apply(gas, Limits(), VOLUMES, flat)
    cured, found = apply(gas, Limits(lorentz_ceiling=1.25), VOLUMES, flat)
    np.testing.assert_allclose(cured.velocity[:, 3, 0, 0], [0.6, 0, 0], rtol=1e-14)
    assert found["speed"].energy_added == 0.0  # there was none to compare with
    assert examine(gas, Limits(), VOLUMES).healthy  # Newtonian gas may


@pytest.mark.parametrize("name", ["density", "pressure", "velocity", "field"])
@pytest.mark.parametrize("value", [np.nan, np.inf])
def test_values_that_are_not_finite(name, value):
    gas = some_gas()
    gas = replace(gas, **{name: with_value(getattr(gas, name), (2, 1, 0), value)})
    found = examine(gas, Limits(1e-3, 1e-5, 50.0, 10.0), PROPER, HOLE)
    assert (found["finite"].count, found["finite"].first) == (1, (2, 1, 0))
    assert not any(found[rule].count for rule in RULES[1:])
    assert np.isfinite(found.energy)
    assert json.loads(json.dumps(found.as_dict(), allow_nan=False))["rules"]["finite"]["worst"] == [2, 1, 0]
    with pytest.raises(DataError, match=r"'finite', the first at \(2, 1, 0\); expected finite values"):
        apply(gas, Limits(), PROPER, HOLE)


def test_rules_follow_one_another():
    """The floor is what the ceiling of b^2 / rho sees: here it is enough."""
    gas = Gas(with_value(np.ones(SHAPE), (0, 0, 0), 1e-9), field=np.full((3, *SHAPE), 1.0))
    found = examine(gas, Limits(density_floor=0.1, magnetisation_ceiling=100.0), VOLUMES)
    assert found["density"].count == 1
    assert found["magnetisation"].count == 0


@pytest.mark.parametrize(
    ("changes", "limits", "space", "message"),
    [
        ({"pressure": np.ones((1, 1, 1))}, Limits(), None, r"pressure of shape \(1, 1, 1\)"),
        ({"velocity": np.ones(SHAPE)}, Limits(), None, r"velocity of shape \(4, 2, 1\), expected \(3, 4, 2, 1\)"),
        ({}, Limits(density_floor=-1.0), None, "floor of the density"),
        ({}, Limits(pressure_floor=np.ones(3)), None, "floor of the pressure"),
        ({}, Limits(lorentz_ceiling=1.0), HOLE, r"ceiling 1\.0 of the Lorentz factor, expected more than 1"),
        ({}, Limits(lorentz_ceiling=5.0), None, "without metric or velocity"),
        ({}, Limits(magnetisation_ceiling=0.0), None, r"ceiling 0\.0 of b\^2 / rho"),
        ({"field": None}, Limits(magnetisation_ceiling=1.0), None, "without a field"),
        (
            {},
            Limits(),
            geometry(FlatMetric(), fm.cartesian_grid([0, 1], [0, 1], [0, 1])),
            r"metric of shape \(1, 1, 1\)",
        ),
    ],
)
def test_limits_that_make_no_sense_are_refused(changes, limits, space, message):
    with pytest.raises(FieldError, match=message):
        examine(some_gas(**changes), limits, VOLUMES, space)
    with pytest.raises(FieldError, match="adiabatic index 1"):
        examine(some_gas(), Limits(), VOLUMES, gamma=1)
