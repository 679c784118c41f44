"""One grid seen in the index coordinates of another: node i of an axis has coordinate i.

Corners joined by straight lines cut the bulge off curved edges. They are moved out by a twelfth of the second
difference, the mean distance of a parabola from its chord, which makes volumes fourth-order accurate.
"""

from __future__ import annotations

from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.grids.grid import Grid
from fieldmover.interpolation.aligned import nodes_in
from fieldmover.interpolation.locate import Locator

Array = NDArray[np.float64]
Block = tuple[slice, slice, slice]

ON_POLE = 1e-4
"""A corner this part of a cell from a pole has no azimuth."""

_BLOCK = 32  # cells a side: what a block touches in the other grid stays in the second-level cache
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
        self._own = nodes_in(onto, grid)
        self.aligned = self._own is not None
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
            same = (nodes[part] for nodes, part in zip(self._own, here, strict=True))
            xi = np.stack(np.meshgrid(*same, indexing="ij")).reshape(3, -1)
        else:
            xi = self.locator.coordinates(x.reshape(3, -1))
        turns = [self._turns(axis, xi[axis]) for axis in range(3)]
        _to_index(xi, *self.onto.nodes)
        for axis, turn in enumerate(turns):
            xi[axis] += turn * self.shape[axis]
        return x, xi.reshape(x.shape), [part.start - begin for part, begin in zip(block, first, strict=True)]

    def _turns(self, axis: int, q: Array) -> Array | float:
        """Bring coordinates between the ends of a seam, in place; by how many turns."""
        nodes = self.onto.nodes[axis]
        if not self.onto.periodic[axis]:
            return 0.0
        span, beyond = nodes[-1] - nodes[0], (q < nodes[0]) | (q > nodes[-1])
        turns = np.where(beyond, np.floor((q - nodes[0]) / span), 0.0)
        q -= turns * span
        return turns

    def _lost(self, xi: Array) -> NDArray[np.int64]:
        """For each node the axis whose coordinate means nothing because the node lies on a pole; -1 elsewhere."""
        lost = np.full(xi[0].size, -1)
        _, rings, ends = self.closure
        for axis, ring in enumerate(rings):
            if ring >= 0:
                for end, place in zip(ends[axis], (0.0, float(self.shape[axis])), strict=True):
                    if end:
                        lost[np.abs(xi[axis].reshape(-1) - place) < ON_POLE] = ring
        return lost

    def corners(self, block: Block) -> tuple[Array, Array]:
        """Positions and straightened index coordinates of the corners of the cells of a block, (3, m1, m2, m3) each."""
        if self.aligned:
            x, xi, _ = self.nodes(block, 0)
            return x, xi
        x, xi, first = self.nodes(block, 1)
        shape = [part.stop - part.start + 1 for part in block]
        straight = np.empty((3, *shape))
        size = np.array(xi.shape[1:])
        _straighten(xi.reshape(3, -1), self._lost(xi), self.closure[0], np.array(first), size, straight)
        inner = tuple(slice(begin, begin + n) for begin, n in zip(first, shape, strict=True))
        return np.ascontiguousarray(x[(slice(None), *inner)]), straight


@compute.kernel
def _to_index(q, nodes1, nodes2, nodes3):
    """Replace grid coordinates by index coordinates, continued in a straight line beyond the ends."""
    for axis in range(3):
        nodes = nodes1 if axis == 0 else nodes2 if axis == 1 else nodes3
        last = nodes.size - 2
        cell = 0
        for n in range(q.shape[1]):
            value = q[axis, n]
            if not (nodes[cell] <= value <= nodes[cell + 1]):  # neighbours in memory are neighbours in space
                low, high = 0, last
                while low < high:
                    half = (low + high + 1) // 2
                    if nodes[half] <= value:
                        low = half
                    else:
                        high = half - 1
                cell = low
            q[axis, n] = cell + (value - nodes[cell]) / (nodes[cell + 1] - nodes[cell])


@compute.kernel
def _straighten(xi, lost, turns, first, size, out):
    """Move nodes so that chords lie as much outside as inside of curved edges: by a twelfth of the second difference.

    A parabola deviates from its chord by that much on average. The part of the second difference along the edge
    itself is no curvature but uneven spacing and stays. Nodes on a pole stay too, and their azimuth counts for
    nothing. xi is flat, (3, nodes); size is its shape in nodes.
    """
    strides = (size[1] * size[2], size[2], 1)
    here, t, bend = np.empty(3, np.int64), np.empty((3, 3)), np.empty((3, 3))
    normal = np.empty(3)
    for i in range(out.shape[1]):
        for j in range(out.shape[2]):
            for k in range(out.shape[3]):
                here[0], here[1], here[2] = first[0] + i, first[1] + j, first[2] + k
                node = here[0] * strides[0] + here[1] * strides[1] + here[2]
                for d in range(3):
                    out[d, i, j, k] = xi[d, node]
                if lost[node] >= 0:
                    continue
                for axis in range(3):
                    step, last = strides[axis], size[axis] - 1
                    middle = node
                    if here[axis] == 0:
                        middle = node + step
                    elif here[axis] == last and last > 1:
                        middle = node - step
                    for d in range(3):
                        left = xi[d, middle] - xi[d, middle - step]
                        right = xi[d, middle + step] - xi[d, middle] if last > 1 else left
                        half = 0.5 * turns[d]
                        if half > 0:
                            left += turns[d] * ((left < -half) - (left > half))
                            right += turns[d] * ((right < -half) - (right > half))
                        t[axis, d], bend[axis, d] = left + right, right - left
                    below = lost[middle - step]
                    above = lost[middle + step] if last > 1 else -1
                    for d in range(3):
                        if d in (below, above):
                            t[axis, d] += bend[axis, d] * (int(d == below) - int(d == above))
                            bend[axis, d] = 0.0
                for axis in range(3):
                    f, g = (axis + 1) % 3, (axis + 2) % 3
                    normal[0] = t[f, 1] * t[g, 2] - t[f, 2] * t[g, 1]
                    normal[1] = t[f, 2] * t[g, 0] - t[f, 0] * t[g, 2]
                    normal[2] = t[f, 0] * t[g, 1] - t[f, 1] * t[g, 0]
                    det = normal[0] * t[axis, 0] + normal[1] * t[axis, 1] + normal[2] * t[axis, 2]
                    if not det > 0:  # on a pole of the grid itself: there the axes are at right angles
                        normal[0], normal[1], normal[2] = t[axis, 0], t[axis, 1], t[axis, 2]
                        det = t[axis, 0] ** 2 + t[axis, 1] ** 2 + t[axis, 2] ** 2
                    along = normal[0] * bend[axis, 0] + normal[1] * bend[axis, 1] + normal[2] * bend[axis, 2]
                    along = along / det if det > 0 else 0.0
                    for d in range(3):
                        shift = (bend[axis, d] - along * t[axis, d]) / 12
                        if abs(shift) < _LARGEST_SHIFT:
                            out[d, i, j, k] -= shift
