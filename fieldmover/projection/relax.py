"""Cleaning by relaxation: divergence leaves in waves that are damped as they go.

The mixed hyperbolic and parabolic correction of Dedner, Kemm, Kroener, Munz, Schnitzer & Wesenberg (2002,
Hyperbolic divergence cleaning for the MHD equations) with nothing else going on,

    dB/dt = -grad psi,   dpsi/dt = -c^2 div B - (c^2 / c_p^2) psi,

on the faces and cells of the grid. Time counts in c, so that the damping length c_p^2 / c is all there is to
choose. What it changes is W^-1 d2^T of something, so with ever more steps it ends at what `project` finds at
once; before that, divergence is left, and long waves of it longest. It is for those who must match a field that
was relaxed.
"""

from __future__ import annotations

import math
import time
from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover import compute
from fieldmover.errors import FieldError, NotConverged
from fieldmover.forms.fields import FaceFlux
from fieldmover.forms.measures import energy, face_conductances, near_volumes
from fieldmover.grids.grid import Grid
from fieldmover.projection.operator import ProjectionOperator
from fieldmover.projection.plan import Hole, make_plan, sums_over_faces
from fieldmover.projection.record import Cleaned, Record, record_of
from fieldmover.projection.request import WallsLike, WeightsLike, checked_flux, checked_tolerance, region_masks

Array = NDArray[np.float64]

_DAMPING = 0.09  # of the largest extent: 0.18 in a box of side 2, as the authors have it (from memory)


def relax(
    flux: FaceFlux,
    walls: WallsLike = "open",
    tolerance: float = 1e-3,
    steps: int | None = None,
    limit: int = 20_000,
    damping: float | None = None,
    weights: WeightsLike | None = None,
    frozen: Sequence[ArrayLike] | None = None,
    excised: ArrayLike | None = None,
    hole: Hole = "neutral",
    regions: Mapping[str, ArrayLike] | None = None,
) -> tuple[FaceFlux, Record]:
    """Let the divergence of a flux travel to the walls and decay.

    Parameters
    ----------
    flux : FaceFlux
    walls, weights, frozen, excised, hole, regions
        As for `project`.
    tolerance : float
        Stop when the largest net flux is this part of that at the beginning.
    steps : int, optional
        Do so many steps instead, whatever they leave. A step lasts sqrt(1/2) of the longest stable one.
    limit : int
        Most steps to do for the tolerance.
    damping : float, optional
        Length c_p^2 / c over which waves decay; by default 0.09 of the largest extent of the grid along x, y or z.

    Returns
    -------
    flux : FaceFlux
        With less divergence than the one given.
    record : Record

    Raises
    ------
    FieldError
        If an argument does not fit the grid, or leaves nothing to change.
    NotConverged
        If `limit` steps do not reach the tolerance.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> grid = fm.cartesian_grid(*[np.linspace(0, 1, 9)] * 3)
    >>> flux = fm.flux_from_function(grid, lambda x, y, z: (x * x, y, z))
    >>> relaxed, record = relax(flux, tolerance=1e-2)
    >>> record.method, record.stopped, record.iterations < 200
    ('relaxation', 'tolerance reached', True)
    """
    started = time.perf_counter()
    checked_tolerance(tolerance)
    checked_flux(flux)
    if steps is not None and steps < 1:
        raise FieldError(f"steps: {steps}, expected at least 1")
    if damping is None:
        damping = _DAMPING * _extent(flux.grid)
    if not (math.isfinite(damping) and damping > 0):
        raise FieldError(f"damping: {damping!r}, expected a positive length")
    inside = region_masks(flux.grid, regions)
    plan = make_plan(flux, walls, weights, frozen, excised, hole)
    enough = (tolerance, limit) if steps is None else (0.0, steps)
    done = _relaxed(flux, plan.operator, damping, *enough)
    if done.stopped == "steps done" and steps is None:
        raise NotConverged(
            f"relaxation: after {limit} steps the largest net flux is {done.history[-1]:.3g} of that at the "
            f"beginning, expected {tolerance:g}; allow more steps, or use project()",
            done.history,
        )
    metric = plan.operator.conductances if plan.metric else face_conductances(flux.grid)
    record = record_of(flux, done, metric, inside, plan.counts, started)
    return FaceFlux(flux.grid, done.faces), record


def side_by_side(flux: FaceFlux, projected: FaceFlux, relaxed: FaceFlux) -> dict[str, float]:
    """What projection and relaxation changed, one beside the other.

    Parameters
    ----------
    flux : FaceFlux
        Before.
    projected, relaxed : FaceFlux
        After `project` and after `relax`.

    Returns
    -------
    dict
        ``energy_of_projection``, ``energy_of_relaxation``: those of the changes, unit B^2 L^3;
        ``energy_of_difference``: that of the difference of the results; ``correlation`` of the changes, 1 where one
        is a multiple of the other (0 if there is none).
    """
    g, seams = face_conductances(flux.grid), flux.grid.periodic

    def apart(one: FaceFlux, other: FaceFlux) -> float:
        a, b, c = (x - y for x, y in zip(one.faces, other.faces, strict=True))
        return energy((a, b, c), g, seams)

    p, r, d = apart(projected, flux), apart(relaxed, flux), apart(projected, relaxed)
    return {
        "energy_of_projection": p,
        "energy_of_relaxation": r,
        "energy_of_difference": d,
        "correlation": (p + r - d) / (2.0 * math.sqrt(p * r)) if p * r > 0 else 0.0,
    }


def _relaxed(flux: FaceFlux, operator: ProjectionOperator, damping: float, tolerance: float, steps: int) -> Cleaned:
    """Steps of the scheme, psi and B in turn, until the tolerance is reached or the steps are done."""
    faces = (flux.f1.copy(), flux.f2.copy(), flux.f3.copy())
    net, pull = np.empty(flux.grid.shape), near_volumes(flux.grid, slice(0, flux.grid.shape[0]))
    before = after = operator.source(faces, net)
    if before.largest == 0:
        return Cleaned(faces, "none", [], "divergence-free already", before, before)
    # Gershgorin: no eigenvalue of the operator over the volumes is larger than twice its diagonal.
    largest = 2.0 * float((sums_over_faces(operator.conductances) / pull)[operator.active].max())
    step = math.sqrt(2.0 / largest)
    kept = math.exp(-step / damping)
    np.divide(step * step, pull, out=pull)
    p, history = np.zeros_like(net), []  # p is psi times the length of a step

    def advance(rows: slice) -> None:
        p[rows] *= kept
        p[rows] += pull[rows] * net[rows]

    stopped = "steps done"
    for _ in range(steps):
        compute.for_each(advance, compute.slabs(p.shape[0], max(1, (1 << 16) // p[0].size)))
        operator.correct(faces, p)
        after = operator.source(faces, net)
        history.append(after.largest / before.largest)
        if history[-1] <= tolerance:
            stopped = "tolerance reached"
            break
    return Cleaned(faces, "relaxation", history, stopped, before, after)


def _extent(grid: Grid) -> float:
    """Largest distance of two cell centres along x, y or z."""
    return float(max(np.ptp(x) for x in grid.centres()))
