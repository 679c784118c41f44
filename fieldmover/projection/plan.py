"""How a cleaning is solved: the operator that walls, weights and masks make, and the way to solve it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal, get_args

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover.errors import FieldError
from fieldmover.forms.fields import FaceFlux, Three
from fieldmover.forms.measures import Conductances, Factors, Products, face_conductances, face_factors
from fieldmover.grids.grid import Grid, at
from fieldmover.projection.nearest import common_scale, nearest_factors, weakened_cells
from fieldmover.projection.operator import ProjectionOperator, Walls
from fieldmover.projection.request import (
    Masks,
    WallsLike,
    WeightsLike,
    excised_mask,
    face_weights,
    frozen_masks,
    hole_axis,
    open_walls,
)

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Hole = Literal["neutral", "free"]


@dataclass(eq=False)
class Plan:
    """The operator of a cleaning and its nearest separable one.

    Attributes
    ----------
    operator : ProjectionOperator
    factors : nested tuple of ndarrays
        Of a separable operator, near to it or equal.
    direct : bool
        Whether they are equal.
    scale, weakened
        Helps for the preconditioner where they are not (`nearest.Preconditioner`).
    metric : bool
        Whether the operator's conductances are those of the grid, on all faces.
    free : tuple of three bool ndarrays, or None
        Faces that may change; None where there are no masks, or when they have done their work.
    excised : bool ndarray or None
    counts : tuple of two int
        Numbers of frozen faces and excised cells.
    """

    operator: ProjectionOperator
    factors: Factors
    direct: bool
    scale: NDArray[np.float32] | None
    weakened: tuple[NDArray[np.intp], Array] | None
    metric: bool
    free: Masks | None = None
    excised: Mask | None = None
    counts: tuple[int, int] = (0, 0)


def make_plan(
    flux: FaceFlux,
    walls: WallsLike,
    weights: WeightsLike | None,
    frozen: Sequence[ArrayLike] | None,
    excised: ArrayLike | None,
    hole: Hole,
) -> Plan:
    """Check what a caller of `project` asks for, and plan it; arguments and errors are those of `project`."""
    if hole not in get_args(Hole):
        raise FieldError(f"hole: {hole!r}, expected 'neutral' or 'free'")
    grid = flux.grid
    is_open, frozen_faces, cut = (
        open_walls(grid, walls),
        frozen_masks(grid, frozen),
        excised_mask(grid, excised),
    )
    factors = face_factors(grid) if weights is None else None
    active = np.ones(grid.shape, dtype=bool)
    if factors is not None and frozen_faces is None and cut is None:
        operator = _operator(grid, [Products(f) for f in factors], active, is_open, hole)
        return Plan(operator, factors, True, None, None, True)
    conductances = face_conductances(grid)
    user = face_weights(flux, weights, conductances)
    if user is not None:
        for axis in range(3):
            np.divide(conductances[axis], user[axis], out=conductances[axis])
    metric = user is None and frozen_faces is None
    del user  # as large as the conductances
    free = None
    if frozen_faces is not None or cut is not None:
        free = _free_faces(conductances, frozen_faces, is_open, grid)
        active = _touched(free) if cut is None else _touched(free) & ~cut
    if factors is None:
        factors = nearest_factors(conductances, free)
    scale = None if weights is None else common_scale(conductances, factors)
    weakened = None
    if frozen_faces is not None:
        whole = sums_over_faces(conductances)
        for g, mask in zip(conductances, frozen_faces, strict=True):
            g[mask] = 0.0
        weakened = weakened_cells(whole, sums_over_faces(conductances) * active)
        is_open = _open_somewhere(is_open, conductances)
    operator = _operator(grid, conductances, active, is_open, hole)
    counts = sum(int(m.sum()) for m in frozen_faces or ()), 0 if cut is None else int(cut.sum())
    return Plan(operator, factors, False, scale, weakened, metric, free, cut, counts)


def _operator(grid: Grid, conductances: Conductances, active: Mask, is_open: Walls, hole: Hole) -> ProjectionOperator:
    around = hole_axis(grid)
    neutral = hole == "neutral" and around is not None and is_open[around][0]
    return ProjectionOperator(conductances, active, grid.periodic, is_open, around if neutral else None)


def _free_faces(conductances: Three, frozen: Masks | None, is_open: Walls, grid: Grid) -> Masks:
    """Faces that may change."""
    free = []
    for axis in range(3):
        mask = conductances[axis] > 0
        if frozen is not None:
            mask &= ~frozen[axis]
        for side in (0, 1):
            if not (is_open[axis][side] or grid.periodic[axis]):
                mask[at(axis, -side)] = False
        free.append(mask)
    return free[0], free[1], free[2]


def _open_somewhere(is_open: Walls, conductances: Three) -> Walls:
    """The walls with a face that may change."""
    pairs = [
        (low and bool(g[at(axis, 0)].any()), high and bool(g[at(axis, -1)].any()))
        for axis, (g, (low, high)) in enumerate(zip(conductances, is_open, strict=True))
    ]
    return pairs[0], pairs[1], pairs[2]


def sums_over_faces(conductances: Conductances) -> Array:
    """Sum over the six faces of every cell."""
    total = np.zeros(conductances[0][:-1].shape)
    for axis, g in enumerate(conductances):
        total += g[at(axis, slice(None, -1))]
        total += g[at(axis, slice(1, None))]
    return total


def _touched(faces: Masks) -> Mask:
    """Cells with a face in a mask."""
    touched = np.zeros(faces[0][:-1].shape, dtype=bool)
    for axis, mask in enumerate(faces):
        touched |= mask[at(axis, slice(None, -1))] | mask[at(axis, slice(1, None))]
    return touched
