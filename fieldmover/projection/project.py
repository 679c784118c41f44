"""Remove the divergence of a flux by the least change, on every grid, with any walls and masks.

Of all fluxes without divergence the result is nearest to the one given, in the norm sum of w (F' - F)^2 with
w = dual length / face area times the user's weight (Brackbill & Barnes 1980, The effect of nonzero div B on
the numerical solution of the magnetohydrodynamic equations, is the continuous form).
"""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover.errors import NotConverged
from fieldmover.forms.fields import FaceFlux, Three
from fieldmover.forms.measures import Factors, Products, face_conductances
from fieldmover.grids.grid import at
from fieldmover.projection.conjugate import conjugate_gradients
from fieldmover.projection.consistency import balance_walls, check_held_cells, check_islands
from fieldmover.projection.exact import close, lines, search
from fieldmover.projection.nearest import Preconditioner
from fieldmover.projection.operator import ProjectionOperator
from fieldmover.projection.plan import Hole, Plan, make_plan
from fieldmover.projection.record import Cleaned, Record, record_of
from fieldmover.projection.request import WallsLike, WeightsLike, checked_flux, checked_tolerance, region_masks

Array = NDArray[np.float64]

_CLEAN = 4e-15  # net flux of a cell, over the sum of its fluxes, that needs no cleaning
_DIRECT_ENOUGH = 1e-11  # largest net flux, over that at the beginning, where a direct solve is not repeated
_RESTARTS = 3


def project(
    flux: FaceFlux,
    walls: WallsLike = "open",
    tolerance: float = 1e-10,
    weights: WeightsLike | None = None,
    frozen: Sequence[ArrayLike] | None = None,
    excised: ArrayLike | None = None,
    hole: Hole = "neutral",
    quantum: float | None = None,
    regions: Mapping[str, ArrayLike] | None = None,
) -> tuple[FaceFlux, Record]:
    """Remove the divergence of a flux by the least change.

    Parameters
    ----------
    flux : FaceFlux
    walls : "open", "fixed", sequence or mapping
        Whether fluxes through walls may change: one word for all, or for each axis a word or a pair (low,
        high), or a mapping from axis names, ``{"r": ("fixed", "open")}``, where axes left out are open. Fixed
        walls keep their fluxes to round-off; freeze them to keep every bit.
    tolerance : float
        Where the solver iterates: largest net flux left relative to the largest at the beginning. It decides
        how close the change is to the least one; the divergence ends at zero whatever it is.
    weights : sequence of three arrays, or callable, optional
        Positive factors of w for all faces (a face of large weight changes less), in the shapes of
        `flux.faces`; or a function that returns them for an array of field strengths |B| at the faces.
    frozen : sequence of three bool arrays, optional
        Faces that must not change, in the shapes of `flux.faces`. They keep their bits.
    excised : bool array, shape (n1, n2, n3), optional
        Cells whose divergence does not matter.
    hole : {"neutral", "free"}
        On a shell round a hole: whether an open inner wall must end up with no net flux, as it must where the
        hole has no monopole in it, or may carry any.
    quantum : float, optional
        Power of two of which the result holds multiples; by default 2^-50 of the largest flux. With it every
        divergence is exactly zero, except where frozen faces are no such multiples.
    regions : mapping of str to bool arrays, shape (n1, n2, n3), optional
        Cells of which the record says what share of the change is in them.

    Returns
    -------
    flux : FaceFlux
        The one given, if it has no divergence to begin with.
    record : Record

    Raises
    ------
    FieldError
        If an argument does not fit the grid, or leaves nothing to change.
    ChargeError
        If a part of the grid is closed off by fixed walls and frozen faces that carry net flux.
    NotConverged
        If the iteration does not reach the tolerance.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> grid = fm.cartesian_grid(*[np.linspace(0, 1, 5)] * 3)
    >>> flux = fm.flux_from_function(grid, lambda x, y, z: (x * x, y, z))
    >>> clean, record = fm.project(flux)
    >>> float(abs(fm.divergence(clean).cells).max())
    0.0
    >>> bool(record.energy_removed > 0)
    True
    """
    started = time.perf_counter()
    checked_tolerance(tolerance)
    checked_flux(flux)
    inside = region_masks(flux.grid, regions)
    plan = make_plan(flux, walls, weights, frozen, excised, hole)
    done = _clean(flux, plan, tolerance, quantum)
    metric = plan.operator.conductances if plan.metric else None
    counts = plan.counts
    del plan
    record = record_of(flux, done, metric or face_conductances(flux.grid), inside, counts, started)
    return flux if done.method == "none" else FaceFlux(flux.grid, done.faces), record


def _clean(flux: FaceFlux, plan: Plan, tolerance: float, quantum: float | None) -> Cleaned:
    operator, net, frozen = plan.operator, np.empty(flux.grid.shape), plan.counts[0] > 0
    if plan.free is not None:
        check_held_cells(flux.grid, flux.faces, operator.active, plan.excised)
    before = operator.source(flux.faces, net)
    if before.linf <= _CLEAN and _is_neutral(operator, flux.faces):
        return Cleaned(flux.faces, "none", [], "divergence-free already", before, before)
    forest = None if plan.free is None else search(operator, plan.free, plan.excised)
    excess = check_islands(flux.grid, flux.faces, operator, plan.free, forest, net)
    plan.free = None  # large, and no longer needed

    def start() -> Three:
        faces = (flux.f1.copy(), flux.f2.copy(), flux.f3.copy())
        balance_walls(faces, operator, excess)
        return faces

    if plan.direct:
        faces = start()
        history = _direct(operator, plan.factors, faces, net, before.largest)
        method, stopped = "direct", "round-off"
    else:
        precondition = Preconditioner(operator, plan.factors, plan.scale, plan.weakened)
        faces, history = _iterate(operator, precondition, start, net, before.largest, tolerance)
        method, stopped = "conjugate gradients", "tolerance reached"
        if forest is None:
            # What the tolerance leaves goes in the weights of the nearest separable operator.
            products = replace(operator, conductances=[Products(f) for f in plan.factors])
            _direct(products, plan.factors, faces, net, before.largest)
    del net  # makes room for the forest
    close(faces, operator, forest or lines(operator), frozen, quantum)
    return Cleaned(faces, method, history, stopped, before, operator.source(faces, np.empty(flux.grid.shape)))


def _is_neutral(operator: ProjectionOperator, faces: Three) -> bool:
    if operator.hole is None:
        return True
    wall = faces[operator.hole][at(operator.hole, 0)]
    return abs(operator.charge(faces)) <= _CLEAN * float(np.abs(wall).sum())


def _direct(operator: ProjectionOperator, factors: Factors, faces: Three, net: Array, first: float) -> list[float]:
    """Solve with an operator that has these factors; again, while that makes the divergence much smaller."""
    solve, largest = Preconditioner(operator, factors), [first]
    while largest[-1] > _DIRECT_ENOUGH * first and (len(largest) < 2 or largest[-1] < 0.1 * largest[-2]):
        solve(net, net)
        operator.correct(faces, net)
        largest.append(operator.source(faces, net).largest)
    return [value / first for value in largest[1:]]


def _iterate(
    operator: ProjectionOperator,
    precondition: Preconditioner,
    start: Callable[[], Three],
    net: Array,
    first: float,
    tolerance: float,
) -> tuple[Three, list[float]]:
    """Conjugate gradients, begun again with the true residual where that lags behind the recursion's.

    To save memory the faces are made when the vectors of the iteration are gone, and p takes the place of `net`.
    """
    faces, left, history, enough = None, first, [], tolerance * first
    for _ in range(_RESTARTS):
        solution = conjugate_gradients(operator.apply, precondition, net, enough / left)
        history += [value * left / first for value in solution.history]
        net[...], reason = solution.p, solution.reason
        del solution
        if faces is None:
            faces = start()
            # A field that was nearly clean cannot be told from a clean one below the rounding of its fluxes.
            enough = max(enough, _CLEAN * max(max(float(f.max()), -float(f.min())) for f in faces))
        operator.correct(faces, net)
        left = operator.source(faces, net).largest
        history[-1:] = [left / first]
        if left <= enough:
            return faces, history
        if reason != "converged":
            break
    raise NotConverged(
        f"projection: after {len(history)} iterations the largest net flux is {left / first:.3g} of that at "
        f"the beginning, expected {tolerance:g} ({reason}); give a larger tolerance, or weights of "
        "less contrast",
        history,
    )
