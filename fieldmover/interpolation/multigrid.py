"""Solving for one number per cell whose differences drive flows between neighbours.

Source: Wesseling (1988), Cell-centered multigrid for interface problems. Blocks of 2 x 2 x 2 cells (3 at the end of an
odd axis) make the next coarser grid, with linear interpolation down and sums up; holes and walls only cut links.
Single precision: the flows are made exact afterwards.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute

Result = TypeVar("Result")
Array = NDArray[np.float64]
Flags = NDArray[np.bool_]
Single = NDArray[np.float32]
Level = tuple[Single, Single]  # links, diagonal

_CYCLES = 10  # at most
_SWEEPS = 2  # after each correction; none before
_OVER = 1.2  # relaxation
_ONE, _MORE = np.float32(1), np.float32(1.1)  # how much of a correction is added; most on the finest grid
_TWICE = 1 << 14  # cells of a coarser grid from which on a second cycle there pays
_COARSEST = 30  # sweeps over the smallest grid
_TINY = 1e-30  # of the largest volume: nothing, so that what is divided by it stays in range
_CHUNK = 1 << 18  # cells per task


def solve(links: Single, room: Single, r: Single, enough: float = 1e-4) -> Single:
    """Solve nearly, by a few cycles: room p + sum over neighbours of link (p - p of the neighbour) = r.

    Parameters
    ----------
    links : ndarray of float32, shape (3, n1, n2, n3)
        Conductance from every cell to its upper neighbour along each axis, from the last cell to the first; 0 at
        walls.
    room, r : ndarrays of float32, shape (n1, n2, n3)
    enough : float
        Part of r that may be left, added up over blocks of 2 x 2 x 2 cells, before the last cycle.

    Returns
    -------
    ndarray of float32, shape (n1, n2, n3)
        0 in cells with neither links nor room.

    Examples
    --------
    >>> import numpy as np
    >>> links, room = np.zeros((3, 2, 1, 1), np.float32), np.ones((2, 1, 1), np.float32)
    >>> links[0, 0] = 2.0
    >>> solve(links, room, np.array([1, 3], np.float32).reshape(2, 1, 1))[:, 0, 0].round(4)
    array([1.8, 2.2], dtype=float32)
    """
    p, levels = np.zeros(r.shape, np.float32), _levels(links, room)
    total, closed = levels[0][1], not room.any()
    first = _cycle(levels, p, r, True, _MORE)
    for _ in range(_CYCLES - 1):
        if closed:  # a constant in p, which nothing fixes, would grow: round-off is a part of p
            np.subtract(p, p.flat[total.argmax()], out=p, where=total > 0)
        if _cycle(levels, p, r, False, _MORE) <= enough * first:
            break
    return p


def equations(
    seams: Flags, scale: float, held: Array, missing: Array, room: Array, ease: float
) -> tuple[Single, Single, Single]:
    """Arguments of `solve` for cells that hold volumes; links are the smaller of two of them.

    Parameters
    ----------
    seams : ndarray of bool, shape (3,)
        Axes whose last cell is a neighbour of the first.
    scale : float
        Multiplies all, so that single precision can hold it.
    held, missing, room : ndarrays, shape (n1, n2, n3)
        Cells that hold less than 1e-30 / scale take no part.
    ease : float
        Multiplies `room`.

    Returns
    -------
    links, room, r : ndarrays of float32

    Examples
    --------
    >>> import numpy as np
    >>> held = np.array([2e40, 4e40]).reshape(2, 1, 1)
    >>> equations(np.zeros(3, bool), 1e-40, held, held, held, 1.0)[0][:, :, 0, 0]
    array([[2., 0.],
           [0., 0.],
           [0., 0.]], dtype=float32)
    """
    links = np.empty((3, *held.shape), np.float32)
    ours, r = np.empty(held.shape, np.float32), np.empty(held.shape, np.float32)
    in_slabs(lambda a, b: _to_single(a, b, seams, scale, held, missing, room, ease, links, ours, r), held.shape)
    return links, ours, r


def in_slabs(work: Callable[[int, int], Result], shape: tuple[int, ...], size: int = 1) -> list[Result]:
    """Call work(first, last) on slabs of axis 1 of an array of that shape, whose items stand for `size` cells each."""
    return _each(work, _slabs(shape, size))


def _slabs(shape: tuple[int, ...], size: int = 1) -> list[slice]:
    return compute.slabs(shape[0], _CHUNK // (shape[1] * shape[2] * size))


def _each(work: Callable[[int, int], Result], parts: list[slice]) -> list[Result]:
    if len(parts) == 1:  # many grids are small
        return [work(parts[0].start, parts[0].stop)]
    return compute.for_each(lambda part: work(part.start, part.stop), parts)


def _levels(links: Single, room: Single) -> list[Level]:
    """The grid and coarser ones of blocks of 2 x 2 x 2 cells."""
    levels = [(links, _diagonal(links, room))]
    while room.size > 8:
        links, room = _coarser(links, room)
        levels.append((links, _diagonal(links, room)))
    return levels


def _diagonal(links: Single, room: Single) -> Single:
    total = np.empty_like(room)
    in_slabs(lambda a, b: _sums(a, b, links, room, total), room.shape)
    return total


def _coarser(links: Single, room: Single) -> tuple[Single, Single]:
    shape = [max(1, n // 2) for n in room.shape]
    coarse_links, coarse_room = np.zeros((3, *shape), np.float32), np.zeros(shape, np.float32)
    in_slabs(lambda a, b: _coarsen(a, b, links, room, coarse_links, coarse_room), coarse_room.shape, 8)
    for axis in range(3):
        if shape[axis] == 1:
            coarse_links[axis] = 0.0
    return coarse_links, coarse_room


def _cycle(levels: list[Level], p: Single, r: Single, fresh: bool, more: np.float32 = _ONE) -> float:
    """One cycle for (sum of links times differences + room) p = r; `fresh` if p is 0. Returns what was left before."""
    links, total = levels[0]
    if len(levels) == 1:
        for _ in range(_COARSEST):
            _relax(links, total, r, p)
        return 0.0
    coarse_links, coarse_total = levels[1]
    rest, coarse = np.zeros_like(coarse_total), np.zeros_like(coarse_total)
    in_slabs(lambda a, b: _restrict(a, b, fresh, links, total, r, p, rest), rest.shape, 8)
    _cycle(levels[1:], coarse, rest, True)
    if coarse.size > _TWICE:
        _cycle(levels[1:], coarse, rest, False)
    in_slabs(lambda a, b: _prolong(a, b, total, coarse_links, coarse_total, coarse, p, more), p.shape)
    for _ in range(_SWEEPS):
        _relax(links, total, r, p)
    return float(np.abs(rest).sum())


def _relax(links: Single, total: Single, r: Single, p: Single) -> None:
    """Gauss and Seidel's step on the cells of one colour, then on those of the other."""
    odd = p.shape[0] % 2 and links[0, -1].any()  # neighbours of one colour across the seam
    parts = [slice(0, p.shape[0])] if odd else _slabs(p.shape)
    _each(lambda a, b: _sweep(a, b, links, total, r, p), parts)
    for part in parts:
        _edges(part.start, part.stop, links, total, r, p)


@compute.kernel
def _to_single(first, last, seams, scale, held, missing, room, ease, links, ours, r):
    """The equations in single precision."""
    n1, n2, n3 = held.shape
    row = np.empty(n3 + 1)
    for i in range(first, last):
        up1, open1 = i + 1 if i + 1 < n1 else 0, scale if i + 1 < n1 or seams[0] else 0.0
        for j in range(n2):
            up2, open2 = j + 1 if j + 1 < n2 else 0, scale if j + 1 < n2 or seams[1] else 0.0
            row[:n3] = held[i, j]
            row[n3] = held[i, j, 0] if seams[2] else 0.0
            for k in range(n3):
                one, two = open1 * min(row[k], held[up1, j, k]), open2 * min(row[k], held[i, up2, k])
                three = scale * min(row[k], row[k + 1])
                links[0, i, j, k] = one if one > _TINY else 0.0
                links[1, i, j, k] = two if two > _TINY else 0.0
                links[2, i, j, k] = three if three > _TINY else 0.0
                some = scale * row[k] > _TINY
                ours[i, j, k] = scale * ease * room[i, j, k] if some else 0.0
                r[i, j, k] = scale * missing[i, j, k] if some else 0.0


@compute.kernel
def _sums(first, last, links, room, total):
    """Diagonal of the equations."""
    _, n2, n3 = room.shape
    for i in range(first, last):
        for j in range(n2):
            for k in range(n3):
                total[i, j, k] = room[i, j, k] + (
                    (links[0, i, j, k] + links[0, i - 1, j, k]) + (links[1, i, j, k] + links[1, i, j - 1, k])
                )
            total[i, j, 0] += links[2, i, j, 0] + links[2, i, j, n3 - 1]
            for k in range(1, n3):
                total[i, j, k] += links[2, i, j, k] + links[2, i, j, k - 1]


@compute.kernel
def _around(i, j, links, r, p, row):
    """r and the sum over the neighbours of link times value, along a line.

    Index -1 is the last, whose link to the first is 0 at walls.
    """
    n1, n2, n3 = p.shape
    up1 = i + 1 if i + 1 < n1 else 0
    up2 = j + 1 if j + 1 < n2 else 0
    for k in range(n3):
        row[k] = (
            r[i, j, k]
            + (links[0, i, j, k] * p[up1, j, k] + links[0, i - 1, j, k] * p[i - 1, j, k])
            + (links[1, i, j, k] * p[i, up2, k] + links[1, i, j - 1, k] * p[i, j - 1, k])
        )
    for k in range(1, n3):
        row[k] += links[2, i, j, k - 1] * p[i, j, k - 1]
    for k in range(n3 - 1):
        row[k] += links[2, i, j, k] * p[i, j, k + 1]
    seam = links[2, i, j, n3 - 1]
    row[0] += seam * p[i, j, n3 - 1]
    row[n3 - 1] += seam * p[i, j, 0]


@compute.kernel
def _plane(i, colour, links, total, r, p, row, turn):
    """New values in the cells of one colour of a plane; `turn` is 0 in every other cell of a line."""
    _, n2, n3 = p.shape
    for j in range(n2):
        _around(i, j, links, r, p, row)
        first = (i + j + colour) % 2
        before, end = p[i, j, 0], p[i, j, n3 - 1]
        for k in range(n3):
            step = row[k] / total[i, j, k] - p[i, j, k] if total[i, j, k] > 0 else np.float32(0)
            p[i, j, k] += turn[k + first] * step
        seam = links[2, i, j, n3 - 1]
        if n3 % 2 and seam > 0:  # the last cell has the colour of the first, and is to see what that has become
            step = (row[n3 - 1] + seam * (p[i, j, 0] - before)) / total[i, j, n3 - 1] - end
            p[i, j, n3 - 1] = end + turn[n3 - 1 + first] * step


@compute.kernel
def _sweep(first, last, links, total, r, p):
    """One colour everywhere in a slab, the other behind it, but for the planes beside other slabs."""
    row, turn = np.empty(p.shape[2], np.float32), np.zeros(p.shape[2] + 1, np.float32)
    turn[::2] = _OVER
    for i in range(first, last):
        _plane(i, 1, links, total, r, p, row, turn)
        if i - 1 > first:
            _plane(i - 1, 0, links, total, r, p, row, turn)


@compute.kernel
def _edges(first, last, links, total, r, p):
    """The other colour in the first and last plane of a slab."""
    row, turn = np.empty(p.shape[2], np.float32), np.zeros(p.shape[2] + 1, np.float32)
    turn[::2] = _OVER
    _plane(first, 0, links, total, r, p, row, turn)
    if last - 1 > first:
        _plane(last - 1, 0, links, total, r, p, row, turn)


@compute.kernel
def _pairs(fine, factor, coarse):
    """Add pairs of cells of a line to its blocks; the last takes what is over."""
    m = coarse.size
    if fine.size > 1:
        for c in range(m):
            coarse[c] += factor * (fine[2 * c] + fine[2 * c + 1])
    if fine.size % 2:
        coarse[m - 1] += factor * fine[fine.size - 1]


@compute.kernel
def _coarsen(first, last, links, room, coarse_links, coarse_room):
    """Links between blocks are half the sum of those across: twice as far apart."""
    n1, n2, n3 = room.shape
    m1, m2, m3 = coarse_room.shape
    one, half = np.float32(1), np.float32(0.5)
    for a in range(first, last):
        end1 = 2 * a + 2 if a + 1 < m1 else n1
        for i in range(2 * a, end1):
            for j in range(n2):
                b = min(j // 2, m2 - 1)
                _pairs(room[i, j], one, coarse_room[a, b])
                if i + 1 == end1:
                    _pairs(links[0, i, j], half, coarse_links[0, a, b])
                if j + 1 == (2 * b + 2 if b + 1 < m2 else n2):
                    _pairs(links[1, i, j], half, coarse_links[1, a, b])
                for c in range(m3 - 1):
                    coarse_links[2, a, b, c] += half * links[2, i, j, 2 * c + 1]
                coarse_links[2, a, b, m3 - 1] += half * links[2, i, j, n3 - 1]


@compute.kernel
def _restrict(first, last, fresh, links, total, r, p, rest):
    """What is left of r in every block."""
    n1, n2, n3 = p.shape
    m1, m2, _ = rest.shape
    one, row = np.float32(1), np.empty(n3, np.float32)
    for a in range(first, last):
        for i in range(2 * a, 2 * a + 2 if a + 1 < m1 else n1):
            for j in range(n2):
                if fresh:
                    _pairs(r[i, j], one, rest[a, min(j // 2, m2 - 1)])
                    continue
                _around(i, j, links, r, p, row)
                for k in range(n3):
                    row[k] -= total[i, j, k] * p[i, j, k]
                _pairs(row, one, rest[a, min(j // 2, m2 - 1)])


@compute.kernel
def _beside(i, n, m, seam):
    """The block of cell i of n out of m blocks, and the one on its nearer side; its own at a wall or in the middle."""
    own = min(i // 2, m - 1)
    if n % 2 and i == n - 2:
        return own, own
    other = own + 1 if i % 2 or i // 2 == m else own - 1
    if 0 <= other < m:
        return own, other
    return own, (other % m if seam else own)


@compute.kernel
def _prolong(first, last, total, coarse_links, coarse_total, coarse, p, more):
    """Add the linear interpolation of the blocks' values; where a block ends at a wall or a hole, its own value.

    `more` times those, where they are too small: blocks are stiffer than cells.
    """
    n1, n2, n3 = p.shape
    m1, m2, m3 = coarse.shape
    seam1, seam2, seam3 = coarse_links[0, -1].any(), coarse_links[1, :, -1].any(), coarse_links[2, :, :, -1].any()
    near, far = np.float32(0.75), np.float32(0.25)
    row, there, across = np.zeros(m3 + 2, np.float32), np.zeros(m3 + 2, np.float32), np.empty(2 * m3 + 1, np.float32)
    for i in range(first, last):
        a, x = _beside(i, n1, m1, seam1)
        for j in range(n2):
            b, y = _beside(j, n2, m2, seam2)
            for c in range(m3):
                own = coarse[a, b, c]
                one = coarse[x, b, c] if coarse_total[x, b, c] > 0 else own
                two = coarse[a, y, c] if coarse_total[a, y, c] > 0 else own
                three = coarse[x, y, c] if coarse_total[x, y, c] > 0 else own
                row[c + 1] = more * (near * (near * own + far * one) + far * (near * two + far * three))
                there[c + 1] = coarse_total[a, b, c]
            if seam3:
                row[0], row[m3 + 1], there[0], there[m3 + 1] = row[m3], row[1], there[m3], there[1]
            for c in range(1, m3 + 1):
                across[2 * c - 2] = near * row[c] + far * (row[c - 1] if there[c - 1] > 0 else row[c])
                across[2 * c - 1] = near * row[c] + far * (row[c + 1] if there[c + 1] > 0 else row[c])
            if n3 > 1 and n3 % 2:
                across[n3 - 2], across[n3 - 1] = row[m3], across[n3 - 2]
            for k in range(n3):
                p[i, j, k] += across[k] if total[i, j, k] > 0 else np.float32(0)
