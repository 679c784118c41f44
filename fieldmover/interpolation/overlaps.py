"""Which cells of two grids overlap, by how much, and where in the source cell.

A target cell is seen in the index coordinates of the source: its corners are located there and joined by trilinear
interpolation. Unless it is smaller than half a source cell it is cut into sub-boxes, at least two along each axis
and none much wider than a source cell; a sub-box becomes the upright box with the same centre and the same variance
along every source axis, and that box is shared out among the source cells it reaches. On aligned grids this is the
exact overlap; on turned ones the upright boxes overlap each other a little and leave small gaps, an error of short
wavelength that balancing (`fieldmover.interpolation.fluid`) removes.

Where a target cell is not nearly a parallelepiped in those coordinates (round a pole of the source, where it lies
partly outside a source without closed form, where it spans much of a ring, or many source cells), the source cells
are the smaller or the smoother ones and are seen in the index coordinates of the target instead. What is irregular
from both sides is cut into parcels (`fieldmover.interpolation.parcels`).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.interpolation.corners import (
    corner_coordinates,
    corners_of,
    expand,
    is_regular,
    is_regular_after_all,
    jacobian,
    value,
)
from fieldmover.interpolation.view import ON_POLE, Block, View

Array = NDArray[np.float64]
Flags = NDArray[np.bool_]
Index = NDArray[np.int64]

OFFSET_SCALE = 65534.0
"""Offsets of -1/2 to 1/2 of a source cell are stored as 16-bit integers, this many steps a cell."""

TINY = 1e-6
"""Parts of a cell below this are round-off."""

TURN = 0.4
"""Part of a ring that a cell may span."""

_LEAST = 1e-7  # parts of a cell up to this are left out
_TABLE = 1 << 15  # source cells that one target cell may span before the source is cut instead
_SMALL = 0.5  # a cell up to this size along an axis of its own grid, in cells of the other, is no further divided
_WIDTH = 1.0  # widest sub-box along an axis of its own grid, in cells of the other


@dataclass(frozen=True, eq=False)
class Overlaps:
    """Overlaps of some target cells, row by row; 14 bytes an overlap.

    Attributes
    ----------
    rows : ndarray of int64, shape (m,)
        Flat indices of the target cells.
    start : ndarray of int64, shape (m + 1,)
        Row n owns the overlaps from start[n] to start[n + 1].
    cell : ndarray of uint32
        Flat index of the source cell of each overlap.
    part : ndarray of float32
        Volume of the overlap in units of the target cell's.
    offset : ndarray of int16, shape (number, 3)
        Centroid of the overlap relative to the middle of the source cell, in steps of 1 / OFFSET_SCALE of it.
    """

    rows: Index
    start: Index
    cell: NDArray[np.uint32]
    part: NDArray[np.float32]
    offset: NDArray[np.int16]

    @property
    def arrays(self) -> tuple:
        return self.rows, self.start, self.cell, self.part, self.offset


def overlaps(view: View, block: Block, volumes: Array, chosen: Flags | None = None) -> tuple[Overlaps, Array, Flags]:
    """Overlaps of a block of cells, as far as they are regular.

    Parameters
    ----------
    view : View
    block : tuple of three slices
        Of the cells of the view's grid.
    volumes : ndarray
        Of all cells.
    chosen : ndarray of bool, optional
        Shape of the block: leave the other cells out, and measure offsets in the cells themselves instead of those
        of the other grid.

    Returns
    -------
    overlaps : Overlaps
    reach : ndarray, shape of the block
        Part of each regular cell that lies in the other grid.
    irregular : ndarray of bool
        Cells left out because they are not near enough to parallelepipeds.
    """
    x, corners = view.corners(block)
    volume = np.ascontiguousarray(volumes[block])
    own = chosen is not None
    chosen = np.ones(volume.shape, dtype=np.bool_) if chosen is None else np.ascontiguousarray(chosen)
    start = np.empty(volume.size + 1, dtype=np.int64)
    reach, irregular = np.empty(volume.shape), np.empty(volume.shape, dtype=np.bool_)
    capacity = 32 * volume.size
    while True:
        cell, part = np.empty(capacity, dtype=np.uint32), np.empty(capacity, dtype=np.float32)
        offset = np.empty((capacity, 3), dtype=np.int16)
        count = _overlaps(
            x,
            corners,
            volume,
            chosen,
            own,
            view.aligned,
            view.grid.kind == "cartesian",
            _plain(view, corners),
            view.shape,
            *view.closure,
            start,
            cell,
            part,
            offset,
            reach,
            irregular,
        )
        if count <= capacity:
            break
        capacity = count
    n1, n2, n3 = (np.arange(part.start, part.stop) for part in block)
    rows = (n1[:, None, None] * view.grid.shape[1] + n2[None, :, None]) * view.grid.shape[2] + n3
    found = Overlaps(rows.reshape(-1), start, cell[:count].copy(), part[:count].copy(), offset[:count].copy())
    return found, reach, irregular


def collect(receiver: Index, giver: Index, part: Array, offset: NDArray[np.int16]) -> Overlaps:
    """Bring overlaps into rows."""
    order = np.argsort(receiver, kind="stable")
    rows, first = np.unique(receiver[order], return_index=True)
    return Overlaps(
        rows,
        np.append(first, order.size).astype(np.int64),
        giver[order].astype(np.uint32),
        part[order].astype(np.float32),
        offset[order],
    )


def _plain(view: View, corners: Array) -> bool:
    """Whether index coordinates of corners mean what they say: none is missing, on a pole, or across a seam."""
    if view.aligned:
        return not bool(np.isnan(corners).any())
    turns, rings, ends = view.closure
    low, high = corners.min(axis=(1, 2, 3)), corners.max(axis=(1, 2, 3))
    plain = high - low < np.where(turns > 0, 0.5 * turns, np.inf)  # NaN is not
    for axis, ring in enumerate(rings):
        if ring >= 0:
            plain[axis] &= not (ends[axis, 0] and low[axis] < ON_POLE)
            plain[axis] &= not (ends[axis, 1] and high[axis] > view.shape[axis] - ON_POLE)
    return bool(plain.all())


@compute.kernel
def _overlaps(
    x,
    xi,
    volume,
    chosen,
    own,
    aligned,
    upright,
    plain,
    shape,
    turns,
    rings,
    ends,
    start,
    cell,
    part,
    offset,
    reach,
    irregular,
):
    """Overlaps of the cells of a slab; the number of overlaps, of which only as many are stored as there is room.

    `upright`: the cells themselves are boxes; `plain`: see `_plain`.
    """
    c, p, y = np.empty((8, 3)), np.empty((8, 3)), np.empty((8, 3))
    low, high, width, split = np.empty(3), np.empty(3), np.empty(3), np.empty(3, np.int64)
    base, size = np.empty(3, np.int64), np.empty(3, np.int64)
    pieces, first = np.empty(3, np.int64), np.empty(3, np.int64)
    length, centre = np.empty((3, 4)), np.empty((3, 4))
    place, steps = np.empty((3, 2), np.int64), np.empty((3, 2), np.int16)
    table = np.zeros((_TABLE, 4))
    count, row = 0, 0
    start[0] = 0
    for i in range(volume.shape[0]):
        for j in range(volume.shape[1]):
            for k in range(volume.shape[2]):
                row += 1
                start[row] = count
                reach[i, j, k] = 0.0
                irregular[i, j, k] = False
                if not chosen[i, j, k]:
                    continue
                regular = True
                if plain:
                    corners_of(xi, i, j, k, c)
                else:
                    regular = corner_coordinates(xi, i, j, k, shape, turns, rings, ends, c)
                outside, far, entries = False, False, 1
                for d in range(3):
                    low[d], high[d] = c[0, d], c[0, d]
                    for n in range(1, 8):
                        low[d], high[d] = min(low[d], c[n, d]), max(high[d], c[n, d])
                    span = high[d] - low[d]
                    if not span < _TABLE - 2 or (turns[d] > 0 and span > TURN * turns[d]):
                        regular = False
                        break
                    if turns[d] == 0:
                        gap = max(low[d] - shape[d], -high[d])
                        outside = outside or gap >= 0
                        far = far or gap > span
                    base[d] = np.int64(np.floor(low[d]))
                    size[d] = np.int64(np.floor(high[d])) - base[d] + 1
                    entries *= size[d]
                    if entries > _TABLE:
                        regular = False
                        break
                if not regular or far:
                    irregular[i, j, k] = not regular
                    continue
                expand(c, p)
                here = (volume[i, j, k], 0.0, 0.0, 0.0)
                if not upright:
                    corners_of(x, i, j, k, c)
                    expand(c, y)
                    here = jacobian(y)
                regular = is_regular(jacobian(p), here, volume[i, j, k])
                if not (regular or aligned):
                    regular = is_regular_after_all(p, y, here, volume[i, j, k], upright)
                if not regular:
                    irregular[i, j, k] = not aligned
                    if not aligned:
                        continue
                    here = (1.0, 0.0, 0.0, 0.0)
                if outside:
                    continue
                small = not own
                for d in range(3):
                    widest = max(abs(p[d + 1, 0]), abs(p[d + 1, 1]), abs(p[d + 1, 2]))
                    # not where a wall cuts it: the box has no corners that stick out
                    small = small and widest <= _SMALL and (turns[d] > 0 or (low[d] >= 0 and high[d] <= shape[d]))
                    split[d] = max(2, int(np.ceil(widest / _WIDTH - 1e-6)))
                if small:
                    if count + 8 > cell.size:
                        count += 8
                        start[row] = count
                        continue
                    m1, m2, m3 = here[1] / (12 * here[0]), here[2] / (12 * here[0]), here[3] / (12 * here[0])
                    for d in range(3):
                        # the middle of the volume, not of the corners: at a pole of its own grid a cell is a wedge
                        middle = p[0, d] + m1 * p[1, d] + m2 * p[2, d] + m3 * p[3, d]
                        half = 0.5 * np.sqrt(p[1, d] ** 2 + p[2, d] ** 2 + p[3, d] ** 2)
                        half = min(half, middle - low[d], high[d] - middle)
                        begin, length[d, 0], length[d, 1], centre[d, 0], centre[d, 1] = _halves(
                            max(middle - half, low[d]), min(middle + half, high[d])
                        )
                        for m in range(2):
                            place[d, m] = begin + m if turns[d] == 0 else _wrapped(begin + m, shape[d])
                            steps[d, m] = np.int16(np.rint(OFFSET_SCALE * centre[d, m]))
                    for n in range(8):  # without branches: which cells are reached is not to be foreseen
                        f, g, h = n >> 2, n >> 1 & 1, n & 1
                        amount = length[0, f] * length[1, g] * length[2, h]
                        cell[count] = (place[0, f] * shape[1] + place[1, g]) * shape[2] + place[2, h]
                        part[count] = amount
                        offset[count, 0], offset[count, 1], offset[count, 2] = steps[0, f], steps[1, g], steps[2, h]
                        count += amount > _LEAST
                    reach[i, j, k] = 1.0
                    start[row] = count
                    continue
                for d in range(3):
                    square = (p[1, d] / split[0]) ** 2 + (p[2, d] / split[1]) ** 2 + (p[3, d] / split[2]) ** 2
                    width[d] = 0.5 * np.sqrt(square)
                total, kept = 0.0, 0.0
                for n1 in range(split[0]):
                    a = (n1 + 0.5) / split[0] - 0.5
                    for n2 in range(split[1]):
                        b = (n2 + 0.5) / split[1] - 0.5
                        for n3 in range(split[2]):
                            e = (n3 + 0.5) / split[2] - 0.5
                            share = here[0] + a * here[1] + b * here[2] + e * here[3]
                            total += share
                            for d in range(3):
                                middle = value(p, d, a, b, e)
                                left, right = max(middle - width[d], low[d]), min(middle + width[d], high[d])
                                if ends[d, 0]:
                                    left = max(left, 0.0)
                                if ends[d, 1]:
                                    right = min(right, np.float64(shape[d]))
                                begin, end = np.int64(np.floor(left)), np.int64(np.floor(right))
                                first[d], pieces[d] = begin - base[d], end - begin + 1
                                if begin == end:
                                    length[d, 0], centre[d, 0] = 1.0, 0.5 * (left + right) - begin - 0.5
                                else:
                                    scale = 1.0 / (right - left)
                                    for m in range(pieces[d]):
                                        cut_left = max(left, np.float64(begin + m))
                                        cut_right = min(right, begin + m + 1.0)
                                        length[d, m] = (cut_right - cut_left) * scale
                                        centre[d, m] = 0.5 * (cut_left + cut_right) - (begin + m) - 0.5
                                if turns[d] == 0 and (begin < 0 or end >= shape[d]):
                                    for m in range(pieces[d]):
                                        if not 0 <= begin + m < shape[d]:
                                            length[d, m] = 0.0
                                if own:
                                    for m in range(pieces[d]):
                                        centre[d, m] = a if d == 0 else b if d == 1 else e
                            for f in range(pieces[0]):
                                for g in range(pieces[1]):
                                    plane = share * length[0, f] * length[1, g]
                                    line = ((first[0] + f) * size[1] + first[1] + g) * size[2] + first[2]
                                    for h in range(pieces[2]):
                                        amount = plane * length[2, h]
                                        kept += amount
                                        table[line + h, 0] += amount
                                        table[line + h, 1] += amount * centre[0, f]
                                        table[line + h, 2] += amount * centre[1, g]
                                        table[line + h, 3] += amount * centre[2, h]
                reach[i, j, k] = 1.0 if kept > (1 - TINY) * total else kept / total
                n = 0
                for f in range(size[0]):
                    for g in range(size[1]):
                        for h in range(size[2]):
                            amount = table[n, 0]
                            if amount > _LEAST * total:
                                if count < cell.size:
                                    cell[count] = (
                                        _wrapped(base[0] + f, shape[0]) * shape[1] + _wrapped(base[1] + g, shape[1])
                                    ) * shape[2] + _wrapped(base[2] + h, shape[2])
                                    part[count] = amount / total
                                    scale = OFFSET_SCALE / amount
                                    for d in range(3):
                                        offset[count, d] = np.int16(np.rint(table[n, d + 1] * scale))
                                count += 1
                            table[n, 0], table[n, 1], table[n, 2], table[n, 3] = 0.0, 0.0, 0.0, 0.0
                            n += 1
                start[row] = count
    return count


@compute.kernel
def _halves(left, right):
    """A stretch of at most one cell's width: its first cell, the parts in that and in the next, and their middles."""
    begin = np.floor(left)
    edge = min(right, begin + 1)
    part = (edge - left) / (right - left)
    middle, beyond = 0.5 * (left + edge) - begin - 0.5, 0.5 * (edge + right) - begin - 1.5
    return np.int64(begin), part, 1.0 - part, middle, max(beyond, -0.5)


@compute.kernel
def _wrapped(place, number):
    """A place brought into 0 to number - 1; divisions are slow, and few places are beyond."""
    return place if 0 <= place < number else place % number
