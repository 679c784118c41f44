"""Whether the receiving code can evolve what it gets."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fieldmover.conventions.health import Findings, Gas, Limits, apply, examine
from fieldmover.conventions.velocity import motion
from fieldmover.errors import DataError, FieldError, JobError
from fieldmover.interpolation.cells import cells_from_flux
from fieldmover.jobs.load import Loaded
from fieldmover.jobs.read import State
from fieldmover.jobs.schema import MASS, PRESSURE, VELOCITY

Array = NDArray[np.float64]


def field_of(state: State) -> Array:
    """B^i at cell centres along x, y, z."""
    return np.asarray(cells_from_flux(state.flux, basis="cartesian") / state.space.density_factor)


def cured(loaded: Loaded, state: State) -> tuple[State, list[dict[str, Any]]]:
    """A state that keeps to the rules of `[health]`, and what each rule found.

    Parameters
    ----------
    loaded : Loaded
    state : State
        To be written.

    Returns
    -------
    state : State
        The same one unless the job has rules, a cell breaks one, and they are to be applied.
    found : list of dict
        For each rule what `conventions.health.Finding` says, and whether it was applied. Empty without rules.

    Raises
    ------
    DataError
        If a cell breaks a rule and the job says "refuse", or nothing cures it.
    JobError
        If the rules lack something.
    """
    wanted = loaded.job.health
    if wanted is None:
        return state, []
    names = ("density_floor", "pressure_floor", "magnetisation_ceiling", "lorentz_ceiling")
    limits = Limits(**{name: getattr(wanted, name) for name in names})
    space, gas = state.space, _gas(state)
    try:
        found = examine(gas, limits, space.volumes, space.geometry, wanted.gamma)
        if not found.healthy and wanted.cure == "apply":
            gas, found = apply(gas, limits, space.volumes, space.geometry, wanted.gamma)
            state = replace(state, fluid=_with(state, gas))
    except FieldError as error:
        raise JobError(f"{loaded.path}: {error}") from None
    if not found.healthy and wanted.cure == "refuse":
        raise DataError(f"{loaded.target}: refused, the receiving code could not evolve it: {_told(found)}")
    return state, [
        {"rule": name, **figures, "applied": wanted.cure == "apply" and figures["count"] > 0}
        for name, figures in found.as_dict()["rules"].items()
    ]


def mass_added(found: list[dict[str, Any]]) -> float:
    """By all rules that were applied."""
    return float(sum(rule["mass_added"] for rule in found if rule["applied"]))


def _gas(state: State) -> Gas:
    fluid, velocity = state.fluid, state.fluid.get(VELOCITY)
    if velocity is not None:
        velocity = state.space.motion(velocity).velocity
    return Gas(fluid[MASS], fluid.get(PRESSURE), velocity, field_of(state))


def _with(state: State, gas: Gas) -> dict[str, Array]:
    fluid = {**state.fluid, MASS: gas.density}
    if gas.pressure is not None:
        fluid[PRESSURE] = gas.pressure
    if gas.velocity is not None and state.space.geometry is not None:
        found = motion(state.space.own, gas.velocity, "coordinate", "cartesian", state.space.geometry)
        fluid[VELOCITY] = found.eulerian if found.lorentz is None else found.eulerian * found.lorentz
    return fluid


def _told(found: Findings) -> str:
    broken = [
        f"{rule.rule} in {rule.count} cells, the worst at {list(rule.worst or ())} with {rule.value:.6g} where "
        f"{rule.limit:.6g} is the limit (a cure would add mass {rule.mass_added:.6g}, energy {rule.energy_added:.6g})"
        for rule in found.rules
        if rule.count
    ]
    return f'{"; ".join(broken)}; health.cure = "apply" changes these cells, "report" writes them as they are'
