"""How the cells of one grid lie in another, without measuring overlaps."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.interpolation.aligned import azimuth_of
from fieldmover.interpolation.corners import corner_coordinates
from fieldmover.interpolation.overlaps import TINY, TURN
from fieldmover.interpolation.parcels import parcels
from fieldmover.interpolation.view import Block, View

Array = NDArray[np.float64]
Flags = NDArray[np.bool_]

_WIDE = 2.0  # radians
_FINEST = 16  # parcels along an axis of a source cell


def seen(view: View, marked: Flags) -> tuple[Flags, Flags, NDArray[np.int8]]:
    """How the cells of a view lie in the other grid.

    Parameters
    ----------
    view : View
    marked : ndarray of bool
        Cells of the other grid.

    Returns
    -------
    whole : ndarray of bool, shape of the grid
        All eight corners are inside; of cells of more than 2 radians of azimuth, all parcels.
    near : ndarray of bool
        The cell may touch one of the `marked` cells.
    split : ndarray of int8, shape (n1, n2, n3, 3)
        Parcels along each axis that make a parcel at most half a cell of the other grid.
    """
    table = np.zeros([n + 1 for n in marked.shape], dtype=np.int32)
    table[1:, 1:, 1:] = marked
    for axis in range(3):
        np.cumsum(table, axis=axis, out=table)
    whole, near = np.empty(view.grid.shape, dtype=np.bool_), np.zeros(view.grid.shape, dtype=np.bool_)
    split = np.ones((*view.grid.shape, 3), dtype=np.int8)

    def work(block: Block) -> None:
        _, eta, _ = view.nodes(block, 0)
        low, high = eta.min(axis=(1, 2, 3)), eta.max(axis=(1, 2, 3))
        whole[block] = inside = bool(((low >= -TINY) & (high <= view.shape + TINY)).all())
        outside = ((view.closure[0] == 0) & ((low > view.shape) | (high < 0))).any()
        if (inside or outside) and not _marks(table, low, high):
            return  # the whole block lies inside or outside, and far from marked cells
        _seen(eta, view.shape, *view.closure, table, whole[block], near[block], split[block])

    compute.for_each(work, view.blocks)
    ring = azimuth_of(view.grid)
    if ring is not None and not view.aligned and np.diff(view.grid.nodes[ring]).max() > _WIDE:
        split[..., ring] = _FINEST  # its corners say little of where such a cell is
        near[...] = marked.any()
        cells = np.flatnonzero(whole)
        _, giver, _, _ = parcels(view, cells, split.reshape(-1, 3)[cells], view.grid.cell_volumes())
        number = np.bincount(giver, minlength=whole.size)
        whole &= number.reshape(whole.shape) == split.prod(axis=-1, dtype=np.int64)
    return whole, near, split


def _marks(table: NDArray[np.int32], low: Array, high: Array) -> bool:
    """Whether there are marks in a box of index coordinates, widened by half its size."""
    last = np.array(table.shape) - 1
    pad = 0.5 * (high - low)
    a1, a2, a3 = np.clip(np.floor(low - pad), 0, last).astype(int)
    b1, b2, b3 = np.clip(np.ceil(high + pad), 0, last).astype(int)
    corner = np.diff(np.diff(np.diff(table[np.ix_([a1, b1], [a2, b2], [a3, b3])], axis=0), axis=1), axis=2)
    return bool(corner.item() > 0)


@compute.kernel
def _seen(eta, shape, turns, rings, ends, table, whole, near, split):
    """See `seen`; table is the sum of the marks over all lower indices."""
    c = np.empty((8, 3))
    low, high = np.empty(3, np.int64), np.empty(3, np.int64)
    marks = table[-1, -1, -1] > 0
    for i in range(whole.shape[0]):
        for j in range(whole.shape[1]):
            for k in range(whole.shape[2]):
                inside = corner_coordinates(eta, i, j, k, shape, turns, rings, ends, c)
                some = True
                for d in range(3):
                    left, right = np.inf, -np.inf
                    for n in range(8):
                        if not np.isnan(c[n, d]):
                            left, right = min(left, c[n, d]), max(right, c[n, d])
                    if left > right:
                        some = False
                        break
                    if turns[d] == 0 and not (left >= -TINY and right <= shape[d] + TINY):
                        inside = False
                    pad = 0.5 * (right - left)
                    if turns[d] > 0 and (left < pad or right > shape[d] - pad or right - left > TURN * turns[d]):
                        low[d], high[d] = 0, shape[d]
                    else:
                        low[d] = np.int64(min(max(np.floor(left - pad), 0.0), shape[d]))
                        high[d] = np.int64(min(max(np.ceil(right + pad), 0.0), shape[d]))
                whole[i, j, k] = inside
                near[i, j, k] = False
                if some and marks:
                    number = (
                        table[high[0], high[1], high[2]]
                        - table[low[0], high[1], high[2]]
                        - table[high[0], low[1], high[2]]
                        - table[high[0], high[1], low[2]]
                        + table[low[0], low[1], high[2]]
                        + table[low[0], high[1], low[2]]
                        + table[high[0], low[1], low[2]]
                        - table[low[0], low[1], low[2]]
                    )
                    near[i, j, k] = number > 0
                for d in range(3):
                    step, widest = 4 >> d, 0.0
                    for n in range(8):
                        if not n & step:
                            for f in range(3):
                                span = abs(c[n | step, f] - c[n, f])
                                if span > widest:
                                    widest = span
                    parts = 1
                    while parts < 4 * widest and parts < _FINEST:
                        parts *= 2
                    split[i, j, k, d] = parts
