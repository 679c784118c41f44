"""Fluxes between cells that are joined by faces in any way: least energy, and exact closure.

A mesh is its incidence: a sparse array with a row for every cell and a column for every face that may change, +1 where
the flux of the face, positive along its axis, leaves the cell and -1 where it enters. A face with one entry ends at an
outer wall, or at a cell that does not matter.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.sparse import csgraph

from fieldmover import compute
from fieldmover.errors import ChargeError, NotConverged
from fieldmover.projection.conjugate import conjugate_gradients

Array = NDArray[np.float64]
Index = NDArray[np.int64]

_TOLERANCE = 1e-10
_ROUND_OFF = 1e-10  # net flux of a closed part, over that of all its cells, that counts as zero
_LIMIT, _PATIENCE = 20000, 1000  # the plain preconditioner needs some iterations per cell across


def near(incidence: sparse.csc_array, touched: NDArray[np.bool_], reach: int) -> NDArray[np.bool_]:
    """Faces all of whose cells lie within `reach` cells of the touched ones."""
    joined = abs(incidence)
    border = touched.astype(np.float64)
    for _ in range(reach):
        border += joined @ (joined.T @ border) > 0
    return np.asarray(joined.T @ (border == 0).astype(np.float64) == 0)


def least_energy(incidence: sparse.csr_array, conductance: Array, net: Array) -> Array:
    """Fluxes x with incidence @ x = -net, nearly, and the least sum of x^2 / conductance.

    Parameters
    ----------
    incidence : sparse array, shape (cells, faces)
    conductance : ndarray, shape (faces,)
        Area over distance between the centres on both sides.
    net : ndarray, shape (cells,)
        Net flux out of every cell without x.

    Raises
    ------
    ChargeError
        If cells that no outer wall is joined to have net flux together.
    NotConverged
        If the iteration does not reach its tolerance.
    """
    part, closed = _closed_parts(incidence)
    sums, sizes = (np.bincount(part, values, minlength=closed.size) for values in (net, np.abs(net)))
    if (bad := closed & (np.abs(sums) > _ROUND_OFF * sizes)).any():
        number = int(np.argmax(bad))
        raise ChargeError(
            f"fill: known faces enclose {int((part == number).sum())} cells that the source does not reach, and carry "
            f"a net flux of {sums[number]:.9g} out of them, expected 0",
            float(sums[number]),
        )
    system = sparse.csr_array((incidence * conductance) @ incidence.T)
    diagonal = np.asarray(system.diagonal())
    inverse = np.divide(1.0, diagonal, out=np.zeros_like(diagonal), where=diagonal > 0)

    def apply(s: Array, out: Array) -> float:
        out[...] = system @ s
        return float(np.einsum("i,i", s, out))

    def precondition(r: Array, out: Array) -> None:
        np.multiply(r, inverse, out=out)

    solution = conjugate_gradients(apply, precondition, net.copy(), _TOLERANCE, _LIMIT, _PATIENCE)
    if solution.reason != "converged":
        raise NotConverged(
            f"fill: after {len(solution.history)} iterations the largest net flux is {solution.history[-1]:.3g} of "
            f"that at the beginning, expected {_TOLERANCE:g} ({solution.reason})",
            solution.history,
        )
    return np.asarray(-conductance * (incidence.T @ solution.p))


def settle(incidence: sparse.csr_array, net: Array, x: Array) -> None:
    """Make net fluxes exactly zero, in place, by handing what is left from cell to cell to an outer wall.

    Parameters
    ----------
    incidence : sparse array, shape (cells, faces)
    net : ndarray, shape (cells,)
        Net flux out of every cell without x, multiples of one power of two, as x are. Where no outer wall is joined
        to them, cells keep what they have together.
    x : ndarray, shape (faces,)
    """
    rest = net + incidence @ x
    tree = _tree(incidence)
    _hand_on(tree.order, tree.parent, tree.face, tree.sign, rest, x)


@dataclass(frozen=True, eq=False)
class _Tree:
    """Cells in the order of a search, each with the face by which its net flux is handed on to its parent.

    The number of a parent that stands for the outside is that of the cells; the face is -1 where there is none.
    """

    order: Index
    parent: Index
    face: Index
    sign: Array


def _closed_parts(incidence: sparse.csr_array) -> tuple[Index, NDArray[np.bool_]]:
    """The part of the mesh that each cell belongs to, and which parts no outer wall is joined to."""
    parts, part = csgraph.connected_components(abs(incidence) @ abs(incidence).T, directed=False)
    ends = incidence.tocsc()
    closed = np.ones(parts, dtype=bool)
    closed[part[ends.indices[ends.indptr[:-1][np.diff(ends.indptr) == 1]]]] = False
    return part, closed


def _tree(incidence: sparse.csr_array) -> _Tree:
    """Breadth-first trees from the faces that end at an outer wall, or from one cell of each part without any."""
    cells = incidence.shape[0]
    pairs = incidence.tocsc()
    count = np.diff(pairs.indptr)
    outer, inner = np.flatnonzero(count == 1), np.flatnonzero(count == 2)
    low, high = pairs.indices[pairs.indptr[inner]], pairs.indices[pairs.indptr[inner] + 1]
    wall, first = np.unique(pairs.indices[pairs.indptr[outer]], return_index=True)
    part, closed = _closed_parts(incidence)
    roots = np.flatnonzero(closed[part])
    roots = roots[np.unique(part[roots], return_index=True)[1]]
    child = np.concatenate([low, high, wall, roots]).astype(np.int64)
    parent = np.concatenate([high, low, np.full(wall.size + roots.size, cells)])
    face = np.concatenate([inner, inner, outer[first], np.full(roots.size, -1)])
    ends = pairs.indptr[:-1]
    sign = np.concatenate(
        [pairs.data[ends[inner]], pairs.data[ends[inner] + 1], pairs.data[ends[outer[first]]], np.zeros(roots.size)]
    )
    graph = sparse.csr_array((np.ones(child.size), (child, parent)), shape=(cells + 1, cells + 1))
    order, before = csgraph.breadth_first_order(graph, cells, directed=False)
    order, before = order[1:].astype(np.int64), before.astype(np.int64)
    key = child * (cells + 1) + parent
    ranks = np.argsort(key)
    link = ranks[np.searchsorted(key[ranks], order * (cells + 1) + before[order])]
    return _Tree(order, before[order], face[link], sign[link])


@compute.kernel
def _hand_on(order, parent, face, sign, rest, x):
    """Take what is left in every cell through its face to its parent, beginning with the cells farthest out."""
    for number in range(order.size - 1, -1, -1):
        left = rest[order[number]]
        if face[number] < 0 or left == 0:
            continue
        x[face[number]] -= sign[number] * left
        if parent[number] < rest.size:
            rest[parent[number]] += left
