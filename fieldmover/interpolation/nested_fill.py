"""The field that boxes within boxes carry where the source does not reach.

The boxes are one mesh: the cells that no finer box covers, joined by the faces between them, where walls of finer
boxes are met by the fine faces alone. On it the unknown fluxes are those of least energy whose net flux out of every
cell vanishes with the known ones (as `projection.project` has it on one grid): a sparse system for one number per
cell. Fluxes of coarser faces are sums, so no identity between levels needs any care.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from fieldmover.forms.fields import Three
from fieldmover.forms.incidence import d2
from fieldmover.grids.grid import at
from fieldmover.grids.nested import NestedGrid, Whole
from fieldmover.interpolation.coverage import Masks, Outside
from fieldmover.interpolation.mesh import least_energy, near, settle

Array = NDArray[np.float64]
Index = NDArray[np.int64]
Along = tuple[bool, bool, bool]

_ZERO_REACH = 2  # cells beyond the known ones in which outside="zero" closes the field lines


def kinds(what: str) -> tuple[Along, Along, Along]:
    """Whether the three arrays of "edges" or "faces" have cells along each axis, or nodes."""
    one = what == "edges"
    return (one, not one, not one), (not one, one, not one), (not one, not one, one)


def coarsened(fine: NDArray, ratio: Whole, along: Along) -> NDArray:
    """Sums of fine values over the coarse cells along each axis, or those at coarse nodes."""
    for axis, (r, cells) in enumerate(zip(ratio, along, strict=True)):
        if cells:
            shape = fine.shape
            fine = fine.reshape(*shape[:axis], shape[axis] // r, r, *shape[axis + 1 :]).sum(axis=axis + 1)
        else:
            fine = fine[at(axis, slice(None, None, r))]
    return fine


def sum_up(nested: NestedGrid, arrays: Sequence[tuple[Array, ...]], along: Sequence[Along]) -> None:
    """Replace what lies under finer boxes or on their walls by the sum of the fine values, in place."""
    for n in reversed(range(len(nested.boxes))):
        for m, low, high in nested.finer(n):
            ratio, ends = nested.ratio[nested.level[m]], nested.scaled(m, low, high)
            for own, fine, cells in zip(arrays[n], arrays[m], along, strict=True):
                part = fine[nested.window(m, *ends, cells)]
                if part.size:
                    own[nested.window(n, low, high, cells)] = coarsened(part, ratio, cells)


def fill_nested(
    nested: NestedGrid, faces: list[Three], known: list[Masks], outside: Outside, quantum: float
) -> list[Three]:
    """Complete fluxes known on some faces only.

    Parameters
    ----------
    nested : NestedGrid
    faces : list of tuples of three ndarrays
        Known fluxes, multiples of `quantum`, those of coarse faces sums of the fine ones; the others are not looked
        at.
    known : list of tuples of three bool ndarrays
    outside : {"least energy", "zero"}
    quantum : float
        Power of two.

    Returns
    -------
    list of tuples of three ndarrays
        Multiples of `quantum` with no divergence; known fluxes bit for bit, unless they are sums over unknown ones.

    Raises
    ------
    ChargeError
        If known faces enclose a part of the mesh and carry net flux into it.
    NotConverged
        If the iteration does not reach its tolerance.
    """
    mesh = _Mesh(nested, known)
    start = [
        tuple(np.where(i >= 0, 0.0, f) for i, f in zip(ids, fs, strict=True))
        for ids, fs in zip(mesh.ids, faces, strict=True)
    ]
    filled: list[Three] = [(a, b, c) for a, b, c in start]
    sum_up(nested, filled, kinds("faces"))
    net = np.concatenate([d2(f).reshape(-1) for f in filled])[mesh.cells]
    values = np.zeros(mesh.conductance.size)
    everywhere = outside == "least energy"
    free = np.ones(values.size, dtype=bool) if everywhere else near(mesh.incidence, mesh.touched, _ZERO_REACH)
    part = mesh.incidence[:, free].tocsr()
    x = least_energy(part, mesh.conductance[free], net)
    if quantum > 0:
        x = np.rint(x / quantum) * quantum
    settle(part, net, x)
    values[free] = x
    for box, ids in zip(filled, mesh.ids, strict=True):
        for f, i in zip(box, ids, strict=True):
            f[i >= 0] = values[i[i >= 0]]
    sum_up(nested, filled, kinds("faces"))
    return filled


class _Mesh:
    """The unknown faces that no finer box covers, and the cells they belong to.

    Attributes
    ----------
    ids : list of lists of three ndarrays of int64
        For each box the numbers of its unknown faces, -1 for all others.
    cells : ndarray of int64
        Numbers, counted through all boxes, of the cells that have unknown faces.
    touched : ndarray of bool
        Which of these cells have known faces too.
    incidence : sparse array, shape (cells, unknown faces)
        As in `mesh`.
    conductance : ndarray
        Area over distance between the centres on both sides, of every unknown face.
    """

    def __init__(self, nested: NestedGrid, known: list[Masks]) -> None:
        self.ids, area = _number(nested, known)
        touched = _touched(nested, known)
        rows, columns, signs, half = [], [], [], []
        offset = np.cumsum([0, *(int(np.prod(box.shape)) for box in nested.boxes)])
        entries: dict[tuple[int, int], tuple[Index, Index]] = {}
        for n in reversed(range(len(nested.boxes))):
            box, leaf = nested.boxes[n], ~nested.covered(n)
            for axis in range(3):
                place, ids = entries[n, axis] = _entries(nested, n, axis, self.ids[n][axis], entries)
                for side, sign in ((-1, 1.0), (0, -1.0)):  # it leaves the cell below and enters the one above
                    cell = place.copy()
                    cell[axis] += side
                    inside = (cell[axis] >= 0) & (cell[axis] < box.shape[axis])
                    inside[inside] = leaf[tuple(cell[:, inside])]
                    rows.append(offset[n] + np.ravel_multi_index(tuple(cell[:, inside]), box.shape))
                    columns.append(ids[inside])
                    signs.append(np.full(int(inside.sum()), sign))
                    half.append(0.5 * np.diff(box.nodes[axis])[cell[axis, inside]])
        self.cells, row = np.unique(np.concatenate(rows), return_inverse=True)
        self.touched = touched[self.cells]
        column = np.concatenate(columns)
        shape = (self.cells.size, area.size)
        self.incidence = sparse.csc_array((np.concatenate(signs), (row, column)), shape=shape)
        self.conductance = area / np.bincount(column, np.concatenate(half), minlength=area.size)


def _number(nested: NestedGrid, known: list[Masks]) -> tuple[list[list[Index]], Array]:
    """Numbers of the unknown faces of every box, equal where boxes share one; their areas."""
    numbers: list[list[Index]] = []
    areas, count = [], 0
    for n, box in enumerate(nested.boxes):
        before = [m for m in nested.on_level(nested.level[n]) if m < n]
        own = []
        for axis, (mask, along, area) in enumerate(zip(known[n], kinds("faces"), box.face_areas(), strict=True)):
            unknown = ~mask & ~nested.covered(n, along)
            shared = [(m, meeting) for m in reversed(before) if (meeting := nested.meeting(n, m)) is not None]
            for _, meeting in shared:
                unknown[nested.window(n, *meeting, along)] = False
            ids = np.full(mask.shape, -1, dtype=np.int64)
            ids[unknown] = count + np.arange(int(unknown.sum()))
            for m, meeting in shared:
                ids[nested.window(n, *meeting, along)] = numbers[m][axis][nested.window(m, *meeting, along)]
            areas.append(area[unknown])
            count += areas[-1].size
            own.append(ids)
        numbers.append(own)
    return numbers, np.concatenate(areas)


def _entries(
    nested: NestedGrid, n: int, axis: int, own: Index, entries: dict[tuple[int, int], tuple[Index, Index]]
) -> tuple[Index, Index]:
    """Places among the faces of box n normal to an axis, shape (3, N), and the unknown faces that are there.

    A face that finer boxes cover is there as often as it has unknown parts.
    """
    places, ids = [np.stack(np.nonzero(own >= 0))], [own[own >= 0]]
    along = kinds("faces")[axis]
    for m, low, high in nested.finer(n):
        place, fine = entries[m, axis]
        ratio = nested.ratio[nested.level[m]]
        scale, first = np.array(ratio)[:, None], np.array(nested.first[m])[:, None]
        where = place + first
        here = where[axis] % ratio[axis] == 0
        coarse = where // scale
        for d in range(3):
            here &= (coarse[d] >= low[d]) & (coarse[d] < high[d] + (not along[d]))
        places.append(coarse[:, here] - np.array(nested.first[n])[:, None])
        ids.append(fine[here])
    place, number = np.concatenate(places, axis=1), np.concatenate(ids)
    flat = np.ravel_multi_index(tuple(place), own.shape)
    _, once = np.unique(np.stack([flat, number]), axis=1, return_index=True)  # finer boxes that touch agree
    return place[:, once], number[once]


def _touched(nested: NestedGrid, known: list[Masks]) -> NDArray[np.bool_]:
    """Cells, counted through all boxes, that have a known face."""
    has = [(a.astype(np.float64), b.astype(np.float64), c.astype(np.float64)) for a, b, c in known]
    sum_up(nested, has, kinds("faces"))
    cells = []
    for box in has:
        touched = np.zeros(box[0][1:].shape, dtype=bool)
        for axis, f in enumerate(box):
            touched |= (f[at(axis, slice(None, -1))] > 0) | (f[at(axis, slice(1, None))] > 0)
        cells.append(touched.reshape(-1))
    return np.concatenate(cells)
