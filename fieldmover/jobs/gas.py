"""Figures of the gas: sums over what the source covers, before and after, and extremes."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fieldmover.conventions.derived import figures
from fieldmover.diagnostics import fluid_extremes, fluid_sums, squares
from fieldmover.diagnostics.limits import finite
from fieldmover.forms.fields import CellContent
from fieldmover.grids.grid import Grid
from fieldmover.interpolation.fluid import FluidPlan
from fieldmover.jobs.health import field_of
from fieldmover.jobs.names import SUMS
from fieldmover.jobs.read import State
from fieldmover.jobs.schema import MASS, PRESSURE, VELOCITY

Array = NDArray[np.float64]

ENERGY = "internal energy"
"""Per mass; the quantity that the energy is summed from."""


def extreme_figures(state: State) -> tuple[dict[str, float | None], dict[str, dict[str, Any]]]:
    """Extremes of the gas and the field, and where they are; None where the job has no such quantity.

    In a metric b^2 is that in the frame of the gas, rho stands for rho c^2, and Eulerian observers see the speeds.
    """
    fluid, space = state.fluid, state.space
    density, pressure, velocity = (fluid.get(name) for name in (MASS, PRESSURE, VELOCITY))
    square: Array | None = squares(state.flux)
    speed, lorentz = None, None
    if space.geometry is None:
        speed = None if velocity is None else np.sqrt((velocity**2).sum(axis=0))
    else:
        square = None
        density = None if density is None else density * space.geometry.light**2
        if velocity is not None:
            motion = space.motion(velocity)
            square = figures(motion, field_of(state), geometry=space.geometry).b2
            lorentz = motion.lorentz
            speed = np.sqrt(space.geometry.dot(motion.eulerian, motion.eulerian))
    found = fluid_extremes(state.grid, square, density, pressure, speed, lorentz)
    values = {name: None if extreme is None else finite(extreme.value) for name, extreme in found.items()}
    places: dict[str, dict[str, Any]] = {
        name: {"cell": list(extreme.cell), "position": list(extreme.position)}
        for name, extreme in found.items()
        if extreme is not None
    }
    return values, places


def gas_sums(state: State) -> dict[str, Any]:
    """Sums over the gas of the whole grid; empty without density."""
    if MASS not in state.fluid:
        return {}
    mass = CellContent(state.grid, state.fluid[MASS] * state.elements)
    velocity = state.fluid.get(VELOCITY) if state.space.geometry is None else None
    found = fluid_sums(mass, velocity, state.fluid.get(ENERGY)).as_dict()
    return {name: _plain(name, None if sums is None else np.atleast_1d(sums)) for name, sums in found.items()}


def gas_figures(source: State, stored: State, plan: FluidPlan) -> dict[str, dict[str, Any]]:
    """Sums over the gas of the cells that the source covers wholly, before and after.

    In a metric those of velocities have no Newtonian meaning and are left out.

    Returns
    -------
    dict
        "before": what the source holds there; "stored": the numbers in the file; "change": relative for mass and
        energies; of the vectors the length of the difference over the sum of lengths, m |v| and m |x x v|.
        Empty without density on both sides.
    """
    if MASS not in source.fluid or MASS not in stored.fluid:
        return {}
    names = (ENERGY,) if stored.space.geometry is not None else (VELOCITY, ENERGY)
    shared = {name: q for name, q in source.fluid.items() if name in names and name in stored.fluid}
    whole = plan.coverage >= 1.0
    mass = CellContent(source.grid, source.fluid[MASS] * source.elements)
    arrived = plan.move(mass).cells[whole]
    sums = {"mass": np.array([arrived.sum()])}
    for name, values in _per_mass(source.grid, shared).items():
        carried = plan.move_by_mass(mass, values)[1][..., whole]
        sums[name] = np.atleast_1d((carried * arrived).sum(axis=-1))
    after = fluid_sums(
        CellContent(stored.grid, np.where(whole, stored.fluid[MASS] * stored.elements, 0.0)),
        stored.fluid[VELOCITY] if VELOCITY in shared else None,
        stored.fluid[ENERGY] if ENERGY in shared else None,
    ).as_dict()
    found: dict[str, dict[str, Any]] = {"before": {}, "stored": {}, "change": {}}
    for name in SUMS:
        if (old := sums.get(name)) is None:
            new, change = None, None
        else:
            new = np.atleast_1d(np.array(after[name], dtype=np.float64))
            change = _change(old, new, sums.get(f"size of {name}"))
        found["before"][name], found["stored"][name] = _plain(name, old), _plain(name, new)
        found["change"][name] = change
    return found


def _per_mass(grid: Grid, shared: Mapping[str, Array]) -> dict[str, Array]:
    """What a unit of mass carries in each cell."""
    found: dict[str, Array] = {}
    if VELOCITY in shared:
        v = shared[VELOCITY]
        spin = np.cross(grid.centres(), v, axis=0)
        found["momentum"], found["angular_momentum"] = v, spin
        found["kinetic_energy"] = 0.5 * (v**2).sum(axis=0)
        found["size of momentum"] = np.sqrt((v**2).sum(axis=0))
        found["size of angular_momentum"] = np.sqrt((spin**2).sum(axis=0))
    if ENERGY in shared:
        found["internal_energy"] = shared[ENERGY]
    return found


def _plain(name: str, sums: Array | None) -> Any:
    """A number, or the components of a vector by name."""
    if "momentum" not in name:
        return None if sums is None else finite(float(sums[0]))
    return {axis: None if sums is None else finite(float(sums[d])) for d, axis in enumerate("xyz")}


def _change(old: Array, new: Array, size: Array | None) -> float | None:
    """Relative change, of a vector its length over the size given."""
    change = float(new[0] - old[0]) if size is None else float(np.sqrt(((new - old) ** 2).sum()))
    scale = abs(float((old if size is None else size)[0]))
    if scale == 0:
        return 0.0 if change == 0 else None
    return finite(change / scale)
