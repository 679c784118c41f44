"""The fluid travels as contents of cells: masses, and what each cell's mass carries.

A density becomes the content of its cell, which is moved so that the total stays. A quantity per unit mass
travels as mass times quantity and is divided by the mass that arrived, so its mass-weighted sum stays too.
Where the source does not reach, a constant fills the part of each cell that is left, and what that adds is
counted.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from fieldmover.forms.fields import CellContent
from fieldmover.interpolation.fluid import FluidPlan
from fieldmover.jobs.read import State
from fieldmover.jobs.schema import MASS, Job

Array = NDArray[np.float64]


def move_fluid(job: Job, source: State, plan: FluidPlan) -> dict[str, Array]:
    """Every quantity that the target asks for, on the target; vectors in Cartesian components.

    Parameters
    ----------
    job : Job
    source : State
    plan : FluidPlan
        From the source's grid to the target's.
    """
    wanted, carry = job.target.fluid, {name: quantity.carry for name, quantity in job.source.fluid.items()}
    fluid = {
        name: _density(source, plan, name, wanted[name].outside)
        for name in wanted
        if carry[name] == "conserve"
    }
    by_mass = [name for name in wanted if carry[name] == "by mass"]
    if by_mass:
        background = wanted[MASS].outside if MASS in wanted else 0.0
        mass = _content(source, MASS)
        for name in by_mass:
            arrived, values = plan.move_by_mass(mass, source.fluid[name])
            added = background * _left(plan)
            whole = arrived.cells + added
            mixed = values * arrived.cells + wanted[name].outside * added
            outside = np.full_like(values, wanted[name].outside)
            fluid[name] = np.divide(mixed, whole, out=outside, where=whole > 0)
    return fluid


def totals(job: Job, source: State, plan: FluidPlan, stored: dict[str, Array]) -> dict[str, dict[str, Any]]:
    """What became of the total of every conserved scalar.

    Returns
    -------
    dict
        For each: "source", all of it; "moved", what arrived; "added_outside", what the constant outside the
        source added; "stored", the total of the numbers in the file; "change", of stored less added against
        moved.
    """
    found = {}
    volumes = plan.target.cell_volumes()
    for name, wanted in job.target.fluid.items():
        if job.source.fluid[name].carry != "conserve":
            continue
        content = _content(source, name)
        moved = float(plan.move(content).cells.sum())
        added = wanted.outside * float(_left(plan).sum())
        kept = float((stored[name] * volumes).sum())
        found[name] = {
            "source": float(content.cells.sum()),
            "moved": moved,
            "added_outside": added,
            "stored": kept,
            "change": abs(kept - added - moved) / moved if moved > 0 else None,
        }
    return found


def _content(source: State, name: str) -> CellContent:
    return CellContent(source.grid, source.fluid[name] * source.grid.cell_volumes())


def _left(plan: FluidPlan) -> Array:
    """Volume of each target cell that the source does not reach."""
    return np.asarray((1.0 - plan.coverage) * plan.target.cell_volumes())


def _density(source: State, plan: FluidPlan, name: str, outside: float) -> Array:
    moved = plan.move(_content(source, name)).cells
    return np.asarray((moved + outside * _left(plan)) / plan.target.cell_volumes())
