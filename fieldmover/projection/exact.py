"""Divergence that is exactly zero, bit for bit.

Solvers leave round-off. If all fluxes are multiples of one power of two, the quantum, and small enough
multiples, the sums of the fluxes of a cell are exact. Then what is left of the divergence can be pushed,
without any rounding, from cell to cell along a tree of faces to an open wall, or round and round until it
meets its opposite. The quantum is 2^-50 of the largest flux, so rounding to it costs half an ulp of that.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.errors import FieldError
from fieldmover.forms.fields import Three
from fieldmover.forms.measures import Products
from fieldmover.grids.grid import at
from fieldmover.projection.operator import ProjectionOperator

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

_BITS = 50  # six fluxes of this many bits add up without rounding
_UNSEEN, _ROOT, _OUT = -1, 6, 7


@dataclass(frozen=True, eq=False)
class Forest:
    """Trees of cells joined by faces that may change.

    Attributes
    ----------
    order : ndarray of int, shape (cells,)
        Flat indices of the cells of all trees, every cell after the one it hands its divergence on to.
    parent : int8 ndarray, shape (n1, n2, n3)
        The face it hands it on through: 2 x axis, + 1 for the high side; 6 for none, other values for cells
        in no tree.
    islands : list of slice
        Parts of `order` with nowhere to hand divergence to: each adds up to the flux through faces that are
        held.
    """

    order: NDArray[np.integer]
    parent: NDArray[np.int8]
    islands: list[slice]


def quantum_of(faces: Three) -> float:
    """The power of two that fluxes as large as these are rounded to.

    Examples
    --------
    >>> quantum_of((np.ones((2, 1, 1)), np.zeros((1, 2, 1)), np.zeros((1, 1, 2)))) == 2.0**-50
    True
    """
    largest = max(max(float(f.max()), -float(f.min())) for f in faces)
    return 2.0 ** (math.ceil(math.log2(largest)) - _BITS) if largest > 0 else 0.0


def close(
    faces: Three,
    operator: ProjectionOperator,
    forest: Forest,
    frozen: bool = False,
    quantum: float | None = None,
) -> float:
    """Make the divergence of fluxes that is zero to round-off exactly zero, in place.

    Parameters
    ----------
    faces : tuple of three ndarrays
        Fluxes; first and last along a seam agree.
    operator : ProjectionOperator
        Says where walls, seams and the hole are, whose net flux becomes exactly zero too.
    forest : Forest
        `lines` or `search`.
    frozen : bool
        Whether faces of conductance 0 keep their bits. Unless they are multiples of the quantum, cells they touch
        keep the rounding of one sum, and an island (see `Forest`) what its frozen faces do not balance, in one cell.
    quantum : float, optional
        Power of two of which the result holds multiples; by default `quantum_of(faces)`.

    Returns
    -------
    float
        The quantum.

    Raises
    ------
    FieldError
        If the quantum is not a power of two, or too small for these fluxes.
    """
    least = quantum_of(faces)
    if quantum is None:
        quantum = least
    elif quantum < least or math.frexp(quantum)[0] != 0.5:
        raise FieldError(f"quantum: {quantum!r}, expected a power of two not below {least!r}")
    if quantum == 0:
        return quantum
    for axis in range(3):
        _round(faces[axis], quantum, operator.conductances[axis] if frozen else None)
    if operator.hole is not None:
        wall = faces[operator.hole][at(operator.hole, 0)]
        may_change = np.unravel_index(int(np.argmax(operator.hole_wall)), wall.shape)
        wall[may_change] -= operator.charge(faces)
    _settle(*faces, forest.order, forest.parent, np.array(operator.periodic))
    return quantum


def _round(values: Array, quantum: float, held_by: Array | Products | None) -> None:
    def work(rows: slice) -> None:
        part = values[rows] / quantum
        np.rint(part, out=part)
        part *= quantum
        np.copyto(values[rows], part, where=True if held_by is None else held_by[rows] > 0)

    compute.for_each(work, compute.slabs(values.shape[0], (1 << 16) // (values.shape[1] * values.shape[2])))


def lines(operator: ProjectionOperator) -> Forest:
    """Forest of an operator without masks: straight lines to an open wall, or else to one corner."""
    shape = operator.active.shape
    count = math.prod(shape)
    order: NDArray[np.integer] = np.arange(count - 1, -1, -1, dtype=_index_type(count))
    parent = np.empty(shape, dtype=np.int8)
    if operator.exits:
        axis, side = operator.exits[0]
        parent[...] = 2 * axis + side
        return Forest(order if side == 1 else order[::-1].copy(), parent, [])
    parent[...] = 1
    parent[-1] = 3
    parent[-1, -1] = 5
    walls = [2 * axis + 1 for axis in range(3) if not operator.periodic[axis] and _has_wall(operator, axis)]
    parent[-1, -1, -1] = walls[0] if walls else _ROOT
    return Forest(order, parent, [slice(0, count)])


def _has_wall(operator: ProjectionOperator, axis: int) -> bool:
    """Whether the last cell of the grid has a face at the high end of `axis` (where a pole has none)."""
    return bool(operator.conductances[axis][-1, -1, -1] > 0)


def search(operator: ProjectionOperator, free: tuple[Mask, Mask, Mask], excised: Mask | None) -> Forest:
    """Forest of an operator with masks, by breadth-first search from open walls, excised cells and the hole.

    Parameters
    ----------
    operator : ProjectionOperator
    free : tuple of three bool ndarrays
        Faces that may change.
    excised : bool ndarray, shape (n1, n2, n3), optional
    """
    shape = operator.active.shape
    count = math.prod(shape)
    parent = np.where(operator.active, np.int8(_UNSEEN), np.int8(_OUT))
    order: NDArray[np.integer] = np.empty(count, dtype=_index_type(count))
    ground, fixed, at_hole = _exits(operator, free, excised)
    seams = np.array(operator.periodic)

    def grow(codes: NDArray[np.int8], apart: bool, size: int) -> tuple[int, list[slice]]:
        seeds = np.flatnonzero((codes >= 0) & (parent == _UNSEEN)).astype(order.dtype)
        starts = np.empty(seeds.size if apart else 1, dtype=np.int64)
        size, trees = _grow(seeds, codes, apart, order, size, parent, *free, seams, starts)
        bounds = [int(start) for start in starts[:trees]] + [size]
        return size, [slice(a, b) for a, b in pairwise(bounds)]

    size, _ = grow(ground, False, 0)
    linked = bool(((at_hole >= 0) & (parent >= 0) & (parent != _OUT)).any())
    size, round_hole = grow(at_hole, False, size)
    size, walled = grow(fixed, True, size)
    size, inner = grow(np.where(operator.active, np.int8(_ROOT), np.int8(-1)), True, size)
    islands = [part for part in ([] if linked else round_hole) + walled + inner if part.stop > part.start]
    return Forest(order[:size], parent, islands)


def _exits(
    operator: ProjectionOperator, free: tuple[Mask, Mask, Mask], excised: Mask | None
) -> tuple[NDArray[np.int8], ...]:
    """The face by which divergence can leave each cell to ground, by a fixed wall, into the hole; or -1."""
    shape = operator.active.shape
    ground, fixed, at_hole = (np.full(shape, -1, dtype=np.int8) for _ in range(3))
    for axis in range(3):
        face = free[axis]
        for side, cell in ((0, 0), (1, -1)):
            here, code = at(axis, cell), np.int8(2 * axis + side)
            if not operator.periodic[axis]:
                kind = at_hole if (axis, side) == (operator.hole, 0) else ground
                kind = kind if operator.open_walls[axis][side] else fixed
                kind[here][(operator.conductances[axis][here] > 0) & operator.active[here]] = code
            if excised is not None:
                beyond = np.roll(excised, 1 - 2 * side, axis)
                if not operator.periodic[axis]:
                    beyond[here] = False
                through = face[at(axis, slice(None, -1) if side == 0 else slice(1, None))]
                ground[beyond & through & operator.active] = code
    return ground, fixed, at_hole


def _index_type(count: int) -> type:
    return np.int32 if count < 2**31 else np.int64


@compute.kernel
def _grow(seeds, codes, apart, order, size, parent, free1, free2, free3, seams, starts):  # type: ignore[no-untyped-def]
    """Append to `order` the cells joined to the seeds; one tree for all, or one for each not yet reached."""
    n1, n2, n3 = parent.shape
    head, trees = size, 0
    if not apart:
        starts[0] = size
        trees = 1
    flat, code_of = parent.reshape(-1), codes.reshape(-1)
    for number in range(seeds.size):
        seed = seeds[number]
        if flat[seed] != -1:
            continue
        flat[seed] = code_of[seed]
        order[size] = seed
        size += 1
        if apart:
            starts[trees] = size - 1
            trees += 1
        elif number < seeds.size - 1:
            continue
        while head < size:
            cell = order[head]
            head += 1
            i, j, k = cell // (n2 * n3), cell // n3 % n2, cell % n3
            for code in range(6):
                axis, side = code // 2, code % 2
                a, b, c = i, j, k
                if axis == 0:
                    is_free = free1[i + side, j, k]
                    a += 2 * side - 1
                elif axis == 1:
                    is_free = free2[i, j + side, k]
                    b += 2 * side - 1
                else:
                    is_free = free3[i, j, k + side]
                    c += 2 * side - 1
                if not is_free:
                    continue
                if a < 0 or a == n1 or b < 0 or b == n2 or c < 0 or c == n3:
                    if not seams[axis]:
                        continue
                    a, b, c = a % n1, b % n2, c % n3
                if parent[a, b, c] == -1:
                    parent[a, b, c] = code ^ 1
                    order[size] = (a * n2 + b) * n3 + c
                    size += 1
    return size, trees


@compute.kernel
def _settle(f1, f2, f3, order, parent, seams):  # type: ignore[no-untyped-def]
    """Hand the net flux of every cell on, beginning with the cells farthest from the roots.

    The sums are those of `incidence.d2`, term by term, so that both find the same zero.
    """
    n1, n2, n3 = parent.shape
    for number in range(order.size - 1, -1, -1):
        cell = order[number]
        i, j, k = cell // (n2 * n3), cell // n3 % n2, cell % n3
        net = (f1[i + 1, j, k] - f1[i, j, k]) + (f2[i, j + 1, k] - f2[i, j, k]) + (f3[i, j, k + 1] - f3[i, j, k])
        if net == 0:
            continue
        code = parent[i, j, k]
        if code == 0:
            f1[i, j, k] += net
        elif code == 1:
            f1[i + 1, j, k] -= net
        elif code == 2:
            f2[i, j, k] += net
        elif code == 3:
            f2[i, j + 1, k] -= net
        elif code == 4:
            f3[i, j, k] += net
        elif code == 5:
            f3[i, j, k + 1] -= net
        if seams[0] and i == 0 and code == 0:
            f1[n1, j, k] = f1[0, j, k]
        if seams[0] and i == n1 - 1 and code == 1:
            f1[0, j, k] = f1[n1, j, k]
        if seams[1] and j == 0 and code == 2:
            f2[i, n2, k] = f2[i, 0, k]
        if seams[1] and j == n2 - 1 and code == 3:
            f2[i, 0, k] = f2[i, n2, k]
        if seams[2] and k == 0 and code == 4:
            f3[i, j, n3] = f3[i, j, 0]
        if seams[2] and k == n3 - 1 and code == 5:
            f3[i, j, 0] = f3[i, j, n3]
