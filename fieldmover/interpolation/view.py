"""One grid seen in the index coordinates of another: node i of an axis has coordinate i.

Corners joined by straight lines cut the bulge off curved edges. They are moved out by a twelfth of the second
difference, the mean distance of a parabola from its chord, which makes volumes fourth-order accurate.
"""

from __future__ import annotations

from functools import cached_property
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.grids.grid import Grid
from fieldmover.interpolation.aligned import nodes_in
from fieldmover.interpolation.evaluate import hunt
from fieldmover.interpolation.locate import Locator

Array = NDArray[np.float64]
Block = tuple[slice, slice, slice]
Coordinates = TypeVar("Coordinates", Array, list[Array])

ON_POLE = 1e-4
"""A corner this part of a cell from a pole has no azimuth."""

_BLOCK = 32  # cells a side: what a block touches in the other grid stays in the second-level cache
_ROW = _BLOCK + 8  # room for the nodes of a row with its margins; a multiple of 8, faster to read vectors from
_NEVER = 1e30  # a turn that no cell makes
_LARGEST_SHIFT = 0.1  # of a cell: larger ones are no curvature but lead across a pole


class View:
    """One grid seen in the index coordinates of another.

    Parameters
    ----------
    grid, onto : Grid

    Attributes
    ----------
    blocks : list of tuples of three slices
        The cells of `grid`, cut into blocks.
    shape : ndarray of int64
        Of `onto`.
    aligned : bool
        Whether both grids are in the same coordinates, see `nodes_in`.
    closure : tuple of three ndarrays
        Of `onto`, for each axis: cells round a seam (0 without), the axis of the ring that shrinks at its poles (-1
        without), whether its low and high ends are poles.
    """

    def __init__(self, grid: Grid, onto: Grid) -> None:
        self.grid, self.onto = grid, onto
        self.shape = np.array(onto.shape, dtype=np.int64)
        own = nodes_in(onto, grid)
        self.aligned = own is not None
        self._own = None if own is None else self._to_index([q.copy() for q in own])
        # In the same coordinates nothing has to be made continuous: no corner is without azimuth, no turn too long.
        turns = [
            0.0 if not seam else _NEVER if self.aligned else float(n)
            for n, seam in zip(onto.shape, onto.periodic, strict=True)
        ]
        rings = [-1 if ring is None or self.aligned else ring for ring in onto.ring_axis]
        ends = [[pole in ("low", "both"), pole in ("high", "both")] for pole in onto.poles]
        self.closure = (np.array(turns), np.array(rings, dtype=np.int64), np.array(ends))
        self.blocks = [
            (one, two, three)
            for one in compute.slabs(grid.shape[0], _BLOCK)
            for two in compute.slabs(grid.shape[1], _BLOCK)
            for three in compute.slabs(grid.shape[2], _BLOCK)
        ]

    @cached_property
    def locator(self) -> Locator:
        return Locator(self.onto)

    def nodes(self, block: Block, margin: int) -> tuple[Array, Array, list[int]]:
        """Positions and index coordinates of the nodes of a block, with up to `margin` more all round."""
        first = [max(part.start - margin, 0) for part in block]
        here = [slice(begin, part.stop + 1 + margin) for begin, part in zip(first, block, strict=True)]
        q1, q2, q3 = (nodes[part] for nodes, part in zip(self.grid.nodes, here, strict=True))
        x = np.stack(self.grid.map.to_cartesian(q1[:, None, None], q2[None, :, None], q3[None, None, :]))
        if self._own is not None:  # exactly: cells of one grid may be parts of those of the other
            same = (own[part] for own, part in zip(self._own, here, strict=True))
            xi = np.stack(np.meshgrid(*same, indexing="ij"))
        else:
            xi = self._to_index(self.locator.coordinates(x.reshape(3, -1))).reshape(x.shape)
        return x, xi, [part.start - begin for part, begin in zip(block, first, strict=True)]

    def _to_index(self, q: Coordinates) -> Coordinates:
        """Replace coordinates of the other grid, one array per axis, by index coordinates."""
        for values, nodes, seam in zip(q, self.onto.nodes, self.onto.periodic, strict=True):
            to_index(values, nodes, seam)
        return q

    def _lost(self, xi: Array) -> NDArray[np.int8]:
        """For each node the axis whose coordinate means nothing because the node lies on a pole; -1 elsewhere."""
        lost = np.full(xi.shape[1:], -1, dtype=np.int8)
        _, rings, ends = self.closure
        for axis, ring in enumerate(rings):
            if ring >= 0:
                for end, place in zip(ends[axis], (0.0, float(self.shape[axis])), strict=True):
                    if end:
                        lost[np.abs(xi[axis] - place) < ON_POLE] = ring
        return lost

    def corners(self, block: Block) -> tuple[Array, Array]:
        """Positions and straightened index coordinates of the corners of the cells of one of the `blocks`.

        Both of shape (3, m1, m2, m3).
        """
        if self.aligned:
            x, xi, _ = self.nodes(block, 0)
            return x, xi
        x, xi, first = self.nodes(block, 1)
        assert xi.shape[3] < _ROW
        shape = [part.stop - part.start + 1 for part in block]
        straight = np.empty((3, *shape))
        _straighten(xi, self._lost(xi), self.closure[0], np.array(first), straight)
        inner = tuple(slice(begin, begin + n) for begin, n in zip(first, shape, strict=True))
        return np.ascontiguousarray(x[(slice(None), *inner)]), straight


def bounds(marked: NDArray[np.bool_], block: Block) -> Block | None:
    """The smallest block that holds the marked cells of a block; None without any."""
    inside = marked[block]
    if not inside.any():
        return None
    where = []
    for axis, part in enumerate(block):
        lines = np.flatnonzero(inside.any(axis=tuple(d for d in range(3) if d != axis)))
        where.append(slice(part.start + int(lines[0]), part.start + int(lines[-1]) + 1))
    return where[0], where[1], where[2]


@compute.kernel
def to_index(q, nodes, seam):
    """Replace coordinates along an axis by index coordinates, in a straight line beyond walls, periodic at a seam."""
    first, last, cells = nodes[0], nodes[-1], nodes.size - 1
    cell = 0
    for n in range(q.size):
        value, turns = q[n], 0.0
        if seam and (value < first or value > last):
            turns = np.floor((value - first) / (last - first))
            value -= turns * (last - first)
        cell = hunt(value, nodes, cell)  # neighbours in memory are neighbours in space
        q[n] = cell + (value - nodes[cell]) / (nodes[cell + 1] - nodes[cell]) + turns * cells


@compute.kernel
def _straighten(xi, lost, turns, first, out):
    """Move nodes so that chords lie as much outside as inside of curved edges: by a twelfth of the second difference.

    A parabola deviates from its chord by that much on average. The part of the second difference along the edge
    itself is no curvature but uneven spacing and stays. Nodes on a pole stay too, and their azimuth counts for
    nothing. On walls differences are those at the next node inward.
    """
    n1, n2, n3 = lost.shape
    near_pole, last = lost.max() >= 0, max(1, n3 - 2)
    # Row by row through a buffer whose shape the compiler knows: it then takes several nodes at once.
    rows = np.empty((7, 3, _ROW))
    t, bend, moved = rows[:3], rows[3:6], rows[6]
    for i in range(first[0], first[0] + out.shape[1]):
        low1, here1, high1 = _neighbours(i, n1)
        for j in range(first[1], first[1] + out.shape[2]):
            low2, here2, high2 = _neighbours(j, n2)
            for d in range(3):
                turn = turns[d]
                for k in range(n3):
                    left = _short(xi[d, here1, j, k] - xi[d, low1, j, k], turn)
                    right = _short(xi[d, high1, j, k] - xi[d, here1, j, k], turn)
                    t[0, d, k], bend[0, d, k] = left + right, right - left
                    left = _short(xi[d, i, here2, k] - xi[d, i, low2, k], turn)
                    right = _short(xi[d, i, high2, k] - xi[d, i, here2, k], turn)
                    t[1, d, k], bend[1, d, k] = left + right, right - left
                    moved[d, k] = xi[d, i, j, k]
                moved[d, n3] = moved[d, n3 - 1]  # read only where a row has no more than two nodes
                for k in range(1, last + 1):
                    left = _short(moved[d, k] - moved[d, k - 1], turn)
                    right = _short(moved[d, k + 1] - moved[d, k], turn)
                    t[2, d, k], bend[2, d, k] = left + right, right - left
                for end, inward in ((0, 1), (n3 - 1, last)):  # used on walls only: margins cover other ends
                    t[2, d, end], bend[2, d, end] = t[2, d, inward], bend[2, d, inward]
            for axis in range(3):
                if lost.shape[axis] == 2:  # with two nodes there is but one difference
                    bend[axis] = 0.0
            if near_pole:
                _forget(lost, i, j, t, bend)
            for axis in range(3):
                f, g = (axis + 1) % 3, (axis + 2) % 3
                for k in range(n3):
                    t0, t1, t2 = t[axis, 0, k], t[axis, 1, k], t[axis, 2, k]
                    b0, b1, b2 = bend[axis, 0, k], bend[axis, 1, k], bend[axis, 2, k]
                    normal0 = t[f, 1, k] * t[g, 2, k] - t[f, 2, k] * t[g, 1, k]
                    normal1 = t[f, 2, k] * t[g, 0, k] - t[f, 0, k] * t[g, 2, k]
                    normal2 = t[f, 0, k] * t[g, 1, k] - t[f, 1, k] * t[g, 0, k]
                    det = normal0 * t0 + normal1 * t1 + normal2 * t2
                    if not det > 0:  # on a pole of the grid itself: there the axes are at right angles
                        normal0, normal1, normal2 = t0, t1, t2
                        det = t0 * t0 + t1 * t1 + t2 * t2
                    along = (normal0 * b0 + normal1 * b1 + normal2 * b2) / det if det > 0 else 0.0
                    most = _LARGEST_SHIFT * max(1.0, 0.5 * max(abs(t0), abs(t1), abs(t2)))
                    moved[0, k] -= _small((b0 - along * t0) / 12, most)
                    moved[1, k] -= _small((b1 - along * t1) / 12, most)
                    moved[2, k] -= _small((b2 - along * t2) / 12, most)
            for d in range(3):
                for k in range(out.shape[3]):
                    out[d, i - first[0], j - first[1], k] = moved[d, k + first[2]]


@compute.kernel
def _neighbours(here, count):
    """Indices of a node of an axis and of those next to it; instead of the first and last nodes the next inward."""
    here = max(1, min(here, count - 2))
    return here - 1, here, min(here + 1, count - 1)


@compute.kernel
def _short(step, turn):
    """A difference of coordinates, across a seam the short way."""
    half = 0.5 * turn
    return step + turn * ((step < -half) - (step > half)) if half > 0 else step


@compute.kernel
def _small(shift, most):
    """A shift unless it is no curvature."""
    return shift if abs(shift) < most else 0.0


@compute.kernel
def _forget(lost, i, j, t, bend):
    """Leave the azimuths of nodes on a pole out of the differences along a row, and such nodes where they are."""
    n1, n2, n3 = lost.shape
    (low1, _, high1), (low2, _, high2) = _neighbours(i, n1), _neighbours(j, n2)
    for k in range(n3):
        low3, _, high3 = _neighbours(k, n3)
        below = lost[low1, j, k], lost[i, low2, k], lost[i, j, low3]
        above = lost[high1, j, k], lost[i, high2, k], lost[i, j, high3]
        for axis in range(3):
            for d in range(3):
                if d in (below[axis], above[axis]):  # the difference on the other side stands for both
                    t[axis, d, k] += bend[axis, d, k] * (int(d == below[axis]) - int(d == above[axis]))
                    bend[axis, d, k] = 0.0
        if lost[i, j, k] >= 0:
            bend[:, :, k] = 0.0
