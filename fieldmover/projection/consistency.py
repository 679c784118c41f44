"""Whether a divergence can be removed: what flows into a closed-off part of the grid must flow out of it."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.errors import ChargeError
from fieldmover.forms.fields import Three
from fieldmover.forms.incidence import d2
from fieldmover.grids.grid import Grid, at
from fieldmover.projection.exact import Forest
from fieldmover.projection.operator import ProjectionOperator

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

_ROUNDING = 1e-12  # net flux through held faces, over the sum of their fluxes, that counts as rounding
_SLAB = 1 << 15  # cells worked on at a time


def check_held_cells(grid: Grid, faces: Three, active: Mask, excised: Mask | None) -> None:
    """Refuse divergence in a cell none of whose faces may change.

    Raises
    ------
    ChargeError
    """
    held = ~active if excised is None else ~active & ~excised
    if not held.any():
        return

    def work(rows: slice) -> list[tuple[tuple[int, ...], float]]:
        part = faces[0][rows.start : rows.stop + 1], faces[1][rows], faces[2][rows]
        net = d2(part)
        bad = held[rows] & (np.abs(net) > _ROUNDING * _sums([np.abs(f) for f in part]))
        return [((int(i) + rows.start, int(j), int(k)), float(net[i, j, k])) for i, j, k in np.argwhere(bad)]

    found = [cell for part in compute.for_each(work, _slabs(grid)) for cell in part]
    if found:
        cell, net = found[0]
        raise ChargeError(
            f"{len(found)} cells with divergence have only faces that must not change, the first is {list(cell)} "
            f"with a net flux of {net:.9g}; free a face of each, or excise them",
            net,
        )


def check_islands(
    grid: Grid,
    faces: Three,
    operator: ProjectionOperator,
    free: tuple[Mask, Mask, Mask] | None,
    forest: Forest | None,
    net: Array,
) -> float:
    """Check that the net fluxes of each island add up to zero; take out of `net` what rounding leaves.

    Without a forest there are no masks, and the grid is one island or none.

    Returns
    -------
    float
        For `balance_walls`: that rounding relative to the flux through fixed walls; 0 with masks.

    Raises
    ------
    ChargeError
        If an island has net flux.
    """
    if forest is None:
        islands: list = [] if operator.exits else [slice(None)]
    else:
        islands = [forest.order[island] for island in forest.islands]
    if not islands:
        return 0.0
    excess = 0.0
    through = None if free is None else _held_flux(grid, faces, free)
    for cells in islands:
        total = float(net.reshape(-1)[cells].sum())
        held = _wall_flux(faces, operator) if through is None else float(through.reshape(-1)[cells].sum())
        if held == 0:  # nothing but seams: the sum is zero but for its own rounding
            continue
        if abs(total) > _ROUNDING * held:
            raise ChargeError(_message(grid, cells, total, held), total)
        excess = total / held if through is None else 0.0
        net.reshape(-1)[cells] -= total / net.reshape(-1)[cells].size
    return excess


def balance_walls(faces: Three, operator: ProjectionOperator, excess: float) -> None:
    """Take a small part of its flux from or to every face of the fixed walls, so that they balance."""
    if excess == 0:
        return
    for axis, end, outward in _fixed_walls(operator):
        wall = faces[axis][at(axis, end)]
        wall -= outward * excess * np.abs(wall)


def _message(grid: Grid, cells: slice | NDArray, total: float, held: float) -> str:
    where = "the grid"
    if not isinstance(cells, slice):
        first = [int(i) for i in np.unravel_index(int(cells[0]), grid.shape)]
        where = f"the {cells.size} cells around cell {first}"
    return (
        f"a net flux of {total:.9g} flows out of {where} through walls or faces that must not change (of "
        f"{held:.6g} in and out), expected 0: no field without divergence has it; open a wall or free a face"
    )


def _held_flux(grid: Grid, faces: Three, free: tuple[Mask, Mask, Mask]) -> Array:
    """Sum of |flux| through the faces of each cell that must not change."""
    total = np.empty(grid.shape)

    def work(rows: slice) -> None:
        size = [np.abs(f) for f in (faces[0][rows.start : rows.stop + 1], faces[1][rows], faces[2][rows])]
        for f, mask in zip(size, (free[0][rows.start : rows.stop + 1], free[1][rows], free[2][rows]), strict=True):
            f[mask] = 0.0
        total[rows] = _sums(size)

    compute.for_each(work, _slabs(grid))
    return total


def _slabs(grid: Grid) -> list[slice]:
    n1, n2, n3 = grid.shape
    return compute.slabs(n1, _SLAB // (n2 * n3))


def _sums(faces: list[Array]) -> Array:
    """Sum over the six faces of every cell."""
    f1, f2, f3 = faces
    return np.asarray(f1[1:] + f1[:-1] + f2[:, 1:] + f2[:, :-1] + f3[:, :, 1:] + f3[:, :, :-1])


def _fixed_walls(operator: ProjectionOperator) -> list[tuple[int, int, float]]:
    """Axis, index and outward sign of each fixed wall."""
    return [
        (axis, -side, 2.0 * side - 1.0)
        for axis in range(3)
        for side in (0, 1)
        if not operator.periodic[axis] and not operator.open_walls[axis][side]
    ]


def _wall_flux(faces: Three, operator: ProjectionOperator) -> float:
    return float(sum(np.abs(faces[axis][at(axis, end)]).sum() for axis, end, _ in _fixed_walls(operator)))
