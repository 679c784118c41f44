"""The fluid travels as contents of cells: masses, and what each cell's mass carries.

A density becomes the content of its cell, which is moved so that the total stays. A quantity per unit mass
travels as mass times quantity and is divided by the mass that arrived, so its mass-weighted sum stays too. Others are
interpolated. Where the source does not reach, a background fills the part of each cell that is left, over a
transition if the job wants one; what that adds and removes is counted.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from fieldmover.errors import FieldError, JobError
from fieldmover.expressions import Expression
from fieldmover.forms.fields import CellContent, FaceFlux
from fieldmover.interpolation.angular import AngularMomentum, move_velocity
from fieldmover.interpolation.background import Blend
from fieldmover.interpolation.fluid import FluidPlan
from fieldmover.interpolation.points import move_points
from fieldmover.jobs.formulas import Values, background, evaluated
from fieldmover.jobs.read import State
from fieldmover.jobs.schema import MASS, VELOCITY, Job, formula_names, plain
from fieldmover.jobs.space import Space

Array = NDArray[np.float64]


def move_fluid(
    job: Job, source: State, space: Space, plan: FluidPlan, flux: FaceFlux
) -> tuple[dict[str, Array], AngularMomentum | None]:
    """Every quantity that the target asks for, on the target; vectors in Cartesian components.

    Parameters
    ----------
    job : Job
    source : State
    space : Space
        Of the target.
    plan : FluidPlan
        From the source's grid to the target's.
    flux : FaceFlux
        On the target, for formulas.

    Returns
    -------
    fluid : dict
    angular : AngularMomentum or None
        Of the velocity, if one was moved by mass.
    """
    moved = _Moved(job, source, space, plan)
    fluid = {name: moved.quantity(name) for name in _to_move(job, space)}
    return with_formulas(job, fluid, flux), moved.angular


def with_formulas(job: Job, fluid: dict[str, Array], flux: FaceFlux) -> dict[str, Array]:
    """What the target holds, from quantities on its grid: some of them, those made of them by formulas, the velocity.

    Raises
    ------
    JobError
        If a value of a formula is not finite.
    """
    values, made = Values(fluid, flux), dict(fluid)
    for name, wanted in job.target.fluid.items():
        if wanted.formula is not None:
            made[name] = evaluated(Expression(wanted.formula, values.names), values, f"target.fluid.{name}")
    kept = [*job.target.fluid, *([VELOCITY] if VELOCITY in made else [])]
    return {name: made[name] for name in dict.fromkeys(kept)}


def totals(
    job: Job, source: State, plan: FluidPlan, stored: State, cured_mass: float = 0.0
) -> dict[str, dict[str, Any]]:
    """What became of the total of every conserved scalar.

    Parameters
    ----------
    job, source, plan
        As `move_fluid`.
    stored : State
        The numbers in the file.
    cured_mass : float
        What floors and ceilings have added to the mass, which is told apart.

    Returns
    -------
    dict
        For each: "source", all of it; "moved", what arrived; "added_outside", what the background added;
        "removed_by_blend", what the transition to it took away; "added_by_cure"; "stored", the total of the numbers in
        the file; "change", of stored less what was added and removed, against moved.
    """
    found = {}
    moved = _Moved(job, source, stored.space, plan)
    for name in job.conserved:
        content = source.fluid[name] * source.elements
        arrived = float(moved.content(name).sum())
        added = float(np.sum(moved.outside(name) * moved.left))
        removed = float((moved.content(name) * (1.0 - moved.blend.part)).sum())
        cured = cured_mass if name == MASS else 0.0
        kept = float((stored.fluid[name] * stored.elements).sum())
        found[name] = {
            "source": float(content.sum()),
            "moved": arrived,
            "added_outside": added,
            "removed_by_blend": removed,
            "added_by_cure": cured,
            "stored": kept,
            "change": abs(kept - added + removed - cured - arrived) / arrived if arrived > 0 else None,
        }
    return found


def _to_move(job: Job, space: Space) -> list[str]:
    """Names of what is moved, the velocity first: densities are told from contents by its Lorentz factor."""
    carried = job.source.fluid
    names = {name for name, wanted in job.target.fluid.items() if wanted.formula is None}
    used = {
        part
        for wanted in job.target.fluid.values()
        if wanted.formula is not None
        for part in Expression(wanted.formula, formula_names(dict(carried))).names
    }
    for name, quantity in carried.items():
        parts = [f"{plain(name)}_{axis}" for axis in "xyz"] if quantity.vector else [plain(name)]
        if used.intersection(parts):
            names.add(name)
    if space.geometry is not None and VELOCITY in carried and any(carried[n].carry == "conserve" for n in names):
        names.add(VELOCITY)
    return sorted(names, key=lambda name: name != VELOCITY)


class _Moved:
    """Quantities as they arrive, each moved once."""

    def __init__(self, job: Job, source: State, space: Space, plan: FluidPlan) -> None:
        self._job, self._source, self._space, self._plan = job, source, space, plan
        self._contents: dict[str, Array] = {}
        self._velocity: Array | None = None
        self.blend = Blend(plan, job.move.blend)
        self.angular: AngularMomentum | None = None

    @property
    def left(self) -> Array:
        """Volume of each target cell that the background fills."""
        return np.asarray((1.0 - self.blend.share) * self._space.volumes)

    def outside(self, name: str) -> Array | float:
        """The background of a quantity: of a vector an array of shape (3, ...)."""
        wanted = self._job.target.fluid.get(name)
        if wanted is None:
            return 0.0
        where = f"target.fluid.{name}.outside"
        if isinstance(wanted.outside, list):
            shape = self._plan.target.shape
            parts = [background(value, self._plan.target, where) for value in wanted.outside]
            return np.stack([np.broadcast_to(part, shape) for part in parts])
        found = background(wanted.outside, self._plan.target, where)
        if self._job.source.fluid[name].carry == "conserve" and (least := float(np.min(found))) < 0:
            raise JobError(f"{where}: falls to {least:.6g}; a density is not negative")
        return found

    def content(self, name: str) -> Array:
        """Content of a density in each target cell."""
        if name not in self._contents:
            self._contents[name] = self._plan.move(self._source_content(name)).cells
        return self._contents[name]

    def quantity(self, name: str) -> Array:
        """A quantity on the target, background included."""
        carry = self._job.source.fluid[name].carry
        if carry == "conserve":
            return self._density(name)
        found = self._by_mass(name) if carry == "by mass" else self._points(name)
        if name == VELOCITY:
            self._velocity = found
        return found

    def _source_content(self, name: str) -> CellContent:
        return CellContent(self._source.grid, self._source.fluid[name] * self._source.elements)

    def _density(self, name: str) -> Array:
        whole = self.content(name) * self.blend.part + self.outside(name) * self.left
        return np.asarray(whole / self._space.elements(self._velocity))

    def _by_mass(self, name: str) -> Array:
        mass, values = self._source_content(MASS), self._source.fluid[name]
        if name == VELOCITY:
            move, about = self._job.move, self._job.move.axis
            (a, b, c), (x, y, z) = about.direction, about.centre
            try:
                arrived, values, self.angular = move_velocity(self._plan, mass, values, move.keep, (a, b, c), (x, y, z))
            except FieldError as error:
                raise JobError(f"move.axis: {error}") from None
        else:
            arrived, values = self._plan.move_by_mass(mass, values)
        self._contents[MASS] = arrived.cells
        kept = arrived.cells * self.blend.part
        added = (self.outside(MASS) if MASS in self._job.target.fluid else 0.0) * self.left
        whole, outside = kept + added, self.outside(name)
        mixed = values * kept + outside * added
        return np.divide(mixed, whole, out=np.zeros_like(values) + outside, where=whole > 0)

    def _points(self, name: str) -> Array:
        values, known = move_points(self._source.fluid[name], self._source.grid, self._plan.target)
        outside = np.broadcast_to(self.outside(name), values.shape)
        if values.ndim == 3:
            return self.blend.points(values, known, outside)
        return np.stack([self.blend.points(v, known, o) for v, o in zip(values, outside, strict=True)])
