"""Which cells of two grids overlap, by how much, and where in the source cell.

A target cell is seen in the index coordinates of the source: its corners are located there and joined by trilinear
interpolation. It is cut into sub-boxes, at least two along each axis and none much wider than a source cell; a
sub-box becomes the upright box with the same centre and the same variance along every source axis, and that box
is shared out among the source cells it reaches. On aligned grids this is the exact overlap; on turned ones
the upright boxes overlap each other a little and leave small gaps, an error of short wavelength that balancing
(`fieldmover.interpolation.fluid`) removes.

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

_TABLE = 1 << 15  # source cells that one target cell may span before the source is cut instead
_SPLIT = 2  # least number of sub-boxes along each axis of a cell
_WIDTH = 1.0  # widest sub-box along an axis of its own grid, in cells of the other
_UNEVEN = 1.25  # largest ratio of Jacobians within the middle half of a cell that counts as a parallelepiped
_BULGE = 0.05  # largest difference between the volume of a cell and that of its eight corners


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


@compute.kernel
def corner_coordinates(xi, i, j, k, shape, turns, rings, ends, c):
    """Index coordinates of the corners of a cell (corner number: 4 a + 2 b + c), made continuous; False if NaN.

    A corner on a pole has no azimuth of its own and takes that of the corners it shares an edge with.
    """
    fine = True
    for n in range(8):
        for d in range(3):
            c[n, d] = xi[d, i + (n >> 2), j + ((n >> 1) & 1), k + (n & 1)]
            fine = fine and not np.isnan(c[n, d])
    for axis in range(3):
        ring = rings[axis]
        if ring < 0 or not fine:
            continue
        on_pole = 0
        for n in range(8):
            low, high = abs(c[n, axis]) < ON_POLE, abs(c[n, axis] - shape[axis]) < ON_POLE
            if (ends[axis, 0] and low) or (ends[axis, 1] and high):
                on_pole |= 1 << n
        for n in range(8):
            if on_pole >> n & 1:
                total, count, reference = 0.0, 0, 0.0
                for step in (1, 2, 4):
                    other = n ^ step
                    if not on_pole >> other & 1:
                        value = c[other, ring]
                        if count == 0:
                            reference = value
                        elif turns[ring] > 0:
                            value -= turns[ring] * np.round((value - reference) / turns[ring])
                        total += value
                        count += 1
                if count > 0:
                    c[n, ring] = total / count
    for axis in range(3):
        if turns[axis] > 0:
            for n in range(1, 8):
                c[n, axis] -= turns[axis] * np.round((c[n, axis] - c[0, axis]) / turns[axis])
    return fine


@compute.kernel
def _polynomial(c, p):
    """Coefficients of the trilinear function with the corners c: 1, a, b, e, ab, ae, be, abe."""
    for d in range(3):
        c0, c1, c2, c3, c4, c5, c6, c7 = c[0, d], c[1, d], c[2, d], c[3, d], c[4, d], c[5, d], c[6, d], c[7, d]
        p[0, d] = c0
        p[1, d], p[2, d], p[3, d] = c4 - c0, c2 - c0, c1 - c0
        p[4, d], p[5, d], p[6, d] = c6 - c4 - c2 + c0, c5 - c4 - c1 + c0, c3 - c2 - c1 + c0
        p[7, d] = c7 - c6 - c5 - c3 + c4 + c2 + c1 - c0


@compute.kernel
def _value(p, d, a, b, e):
    """Component d of a trilinear function."""
    return (
        p[0, d] + a * p[1, d] + b * (p[2, d] + a * p[4, d]) + e * (p[3, d] + a * p[5, d] + b * (p[6, d] + a * p[7, d]))
    )


@compute.kernel
def _tangents(p, a, b, e, t):
    """Derivatives t[:, axis] of a trilinear function at (a, b, e); their determinant."""
    for d in range(3):
        t[d, 0] = p[1, d] + b * p[4, d] + e * (p[5, d] + b * p[7, d])
        t[d, 1] = p[2, d] + a * p[4, d] + e * (p[6, d] + a * p[7, d])
        t[d, 2] = p[3, d] + a * p[5, d] + b * (p[6, d] + a * p[7, d])
    return (
        t[0, 0] * (t[1, 1] * t[2, 2] - t[1, 2] * t[2, 1])
        - t[0, 1] * (t[1, 0] * t[2, 2] - t[1, 2] * t[2, 0])
        + t[0, 2] * (t[1, 0] * t[2, 1] - t[1, 1] * t[2, 0])
    )


@compute.kernel
def _overlaps(
    x, xi, volume, chosen, own, aligned, shape, turns, rings, ends, start, cell, part, offset, reach, irregular
):
    """Overlaps of the cells of a slab; the number of overlaps, of which only as many are stored as there is room."""
    c, p, y = np.empty((8, 3)), np.empty((8, 3)), np.empty((8, 3))
    t = np.empty((3, 3))
    low, high, width, split = np.empty(3), np.empty(3), np.empty(3), np.empty(3, np.int64)
    base, size = np.empty(3, np.int64), np.empty(3, np.int64)
    pieces, first = np.empty(3, np.int64), np.empty(3, np.int64)
    length, centre = np.empty((3, 4)), np.empty((3, 4))
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
                _polynomial(c, p)
                for n in range(8):
                    for d in range(3):
                        c[n, d] = x[d, i + (n >> 2), j + ((n >> 1) & 1), k + (n & 1)]
                _polynomial(c, y)
                if not _regular(p, y, volume[i, j, k], t, c):
                    irregular[i, j, k] = not aligned
                    if not aligned:
                        continue
                    c[0, 0], c[1, 0], c[2, 0], c[3, 0] = 1.0, 0.0, 0.0, 0.0
                if outside:
                    continue
                _tangents(p, 0.5, 0.5, 0.5, t)
                for d in range(3):
                    widest = max(abs(t[0, d]), abs(t[1, d]), abs(t[2, d]))
                    split[d] = max(_SPLIT, int(np.ceil(widest / _WIDTH - 1e-6)))
                for d in range(3):
                    square = (t[d, 0] / split[0]) ** 2 + (t[d, 1] / split[1]) ** 2 + (t[d, 2] / split[2]) ** 2
                    width[d] = 0.5 * np.sqrt(square)
                total, kept = 0.0, 0.0
                for n1 in range(split[0]):
                    a = (n1 + 0.5) / split[0]
                    for n2 in range(split[1]):
                        b = (n2 + 0.5) / split[1]
                        for n3 in range(split[2]):
                            e = (n3 + 0.5) / split[2]
                            share = c[0, 0] + (a - 0.5) * c[1, 0] + (b - 0.5) * c[2, 0] + (e - 0.5) * c[3, 0]
                            total += share
                            for d in range(3):
                                middle = _value(p, d, a, b, e)
                                left, right = max(middle - width[d], low[d]), min(middle + width[d], high[d])
                                if ends[d, 0]:
                                    left = max(left, 0.0)
                                if ends[d, 1]:
                                    right = min(right, np.float64(shape[d]))
                                begin, end = np.int64(np.floor(left)), np.int64(np.floor(right))
                                first[d] = begin - base[d]
                                if begin == end:
                                    length[d, 0], centre[d, 0] = 1.0, 0.5 * (left + right) - begin - 0.5
                                else:
                                    scale = 1.0 / (right - left)
                                    for m in range(end - begin + 1):
                                        cut_left = max(left, np.float64(begin + m))
                                        cut_right = min(right, begin + m + 1.0)
                                        length[d, m] = (cut_right - cut_left) * scale
                                        centre[d, m] = 0.5 * (cut_left + cut_right) - (begin + m) - 0.5
                                pieces[d] = end - begin + 1
                                if turns[d] == 0 and (begin < 0 or end >= shape[d]):
                                    for m in range(pieces[d]):
                                        if not 0 <= begin + m < shape[d]:
                                            length[d, m] = 0.0
                                if own:
                                    for m in range(pieces[d]):
                                        centre[d, m] = (a if d == 0 else b if d == 1 else e) - 0.5
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
                for n in range(entries):
                    amount = table[n, 0]
                    if amount > 1e-7 * total:
                        if count < cell.size:
                            f = base[0] + n // (size[1] * size[2])
                            g = base[1] + n // size[2] % size[1]
                            h = base[2] + n % size[2]
                            cell[count] = (f % shape[0] * shape[1] + g % shape[1]) * shape[2] + h % shape[2]
                            part[count] = amount / total
                            for d in range(3):
                                offset[count, d] = np.int16(np.round(table[n, d + 1] / amount * OFFSET_SCALE))
                        count += 1
                    table[n, 0], table[n, 1], table[n, 2], table[n, 3] = 0.0, 0.0, 0.0, 0.0
                start[row] = count
    return count


@compute.kernel
def _regular(p, y, volume, t, own):
    """Whether a cell is near enough to a parallelepiped, or at least changes its shape as its volume does.

    At a pole of its own grid a cell is a wedge, and seen in another grid without one, so is its image. A linear fit
    of the Jacobian of the cell itself is left in own[:4, 0]: value in the middle and three slopes.
    """
    least, most, least_ratio, most_ratio = np.inf, 0.0, np.inf, 0.0
    for m in range(4):
        own[m, 0] = 0.0
    for n in (0, 3, 5, 6):  # the corners of a tetrahedron
        a, b, e = 0.25 + 0.5 * (n >> 2), 0.25 + 0.5 * (n >> 1 & 1), 0.25 + 0.5 * (n & 1)
        here, seen = _tangents(y, a, b, e, t), _tangents(p, a, b, e, t)
        if not (here > 0 and seen > 0):
            return False
        own[0, 0] += 0.25 * here
        own[1, 0] += (4 * a - 2) * here
        own[2, 0] += (4 * b - 2) * here
        own[3, 0] += (4 * e - 2) * here
        ratio = seen / here
        least, most = min(least, seen), max(most, seen)
        least_ratio, most_ratio = min(least_ratio, ratio), max(most_ratio, ratio)
    even = most <= _UNEVEN * least or most_ratio <= _UNEVEN * least_ratio
    return even and abs(own[0, 0] - volume) <= _BULGE * volume
