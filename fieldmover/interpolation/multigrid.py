"""Solving for one number per cell whose differences drive flows between neighbours.

Source: Wesseling (1988), Cell-centered multigrid for interface problems. Blocks of 2 x 2 x 2 cells make the next
coarser grid, with linear interpolation down and sums up; holes and walls only cut links.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute

Array = NDArray[np.float64]
Level = tuple[Array, Array, Array]  # links, room, diagonal

_CYCLES = 4
_COARSEST = 60  # sweeps over the smallest grid
_CHUNK = 1 << 17  # cells per task


def solve(links: Array, room: Array, r: Array) -> Array:
    """Solve nearly, by four V-cycles: room p + sum over neighbours of link (p - p of the neighbour) = r.

    Parameters
    ----------
    links : ndarray, shape (3, n1, n2, n3)
        Conductance from every cell to its upper neighbour along each axis, from the last cell to the first; 0 at
        walls.
    room, r : ndarrays, shape (n1, n2, n3)

    Returns
    -------
    ndarray, shape (n1, n2, n3)
        0 in cells with neither links nor room.

    Examples
    --------
    >>> import numpy as np
    >>> links, room = np.zeros((3, 2, 1, 1)), np.ones((2, 1, 1))
    >>> links[0, 0] = 2.0
    >>> solve(links, room, np.array([1.0, 3.0]).reshape(2, 1, 1))[:, 0, 0].round(6)
    array([1.8, 2.2])
    """
    p, levels = np.zeros(r.shape), _levels(links, room)
    for _ in range(_CYCLES):
        _cycle(levels, 0, p, r)
    return p


def in_slabs(work: Callable[[int, int], None], shape: tuple[int, ...]) -> None:
    """Call work(first, last) on slabs of axis 1 of an array of that shape."""
    parts = compute.slabs(shape[0], _CHUNK // (shape[1] * shape[2]))
    compute.for_each(lambda part: work(part.start, part.stop), parts)


def _levels(links: Array, room: Array) -> list[Level]:
    """The grid and coarser ones of blocks of 2 x 2 x 2 cells."""
    levels = [(links, room, _diagonal(links, room))]
    while room.size > 8:
        links, room = _coarser(links, room)
        levels.append((links, room, _diagonal(links, room)))
    return levels


def _diagonal(links: Array, room: Array) -> Array:
    total = np.empty(room.shape)
    in_slabs(lambda a, b: _sums(a, b, links, room, total), room.shape)
    return total


def _coarser(links: Array, room: Array) -> tuple[Array, Array]:
    coarse = [(n + 1) // 2 for n in room.shape]
    coarse_links, coarse_room = np.zeros((3, *coarse)), np.zeros(coarse)
    in_slabs(lambda a, b: _coarsen(a, b, links, room, coarse_links, coarse_room), coarse_room.shape)
    return coarse_links, coarse_room


def _cycle(levels: list[Level], n: int, p: Array, r: Array) -> None:
    """One V-cycle for (sum of links times differences + room) p = r."""
    links, _, total = levels[n]
    if n == len(levels) - 1:
        for _ in range(_COARSEST):
            _relax(0, p.shape[0], 0, links, total, r, p)
            _relax(0, p.shape[0], 1, links, total, r, p)
        return

    def relax(colour: int) -> None:
        if p.shape[0] % 2 and links[0, -1].any():  # neighbours of one colour across the seam
            _relax(0, p.shape[0], colour, links, total, r, p)
        else:
            in_slabs(lambda a, b: _relax(a, b, colour, links, total, r, p), p.shape)

    relax(0)
    relax(1)
    coarse = np.zeros(levels[n + 1][1].shape)
    rest = np.empty(coarse.shape)
    in_slabs(lambda a, b: _restrict(a, b, links, total, r, p, rest), rest.shape)
    _cycle(levels, n + 1, coarse, rest)
    in_slabs(lambda a, b: _prolong(a, b, total, levels[n + 1][0], levels[n + 1][2], coarse, p), p.shape)
    relax(1)
    relax(0)


@compute.kernel
def _sums(first, last, links, room, total):
    """Diagonal of the equations."""
    _, n2, n3 = room.shape
    for i in range(first, last):
        for j in range(n2):
            for k in range(n3):
                total[i, j, k] = (
                    room[i, j, k]
                    + links[0, i, j, k]
                    + links[0, i - 1, j, k]
                    + links[1, i, j, k]
                    + links[1, i, j - 1, k]
                    + links[2, i, j, k]
                    + links[2, i, j, k - 1]
                )


@compute.kernel
def _around(links, p, i, j, k):
    """Sum over the neighbours of link times value; index -1 is the last, whose link to the first is 0 at walls."""
    n1, n2, n3 = p.shape
    up1 = i + 1 if i + 1 < n1 else 0
    up2 = j + 1 if j + 1 < n2 else 0
    up3 = k + 1 if k + 1 < n3 else 0
    return (
        links[0, i, j, k] * p[up1, j, k]
        + links[0, i - 1, j, k] * p[i - 1, j, k]
        + links[1, i, j, k] * p[i, up2, k]
        + links[1, i, j - 1, k] * p[i, j - 1, k]
        + links[2, i, j, k] * p[i, j, up3]
        + links[2, i, j, k - 1] * p[i, j, k - 1]
    )


@compute.kernel
def _relax(first, last, colour, links, total, r, p):
    """Gauss and Seidel's step on the cells of one colour."""
    _, n2, n3 = p.shape
    for i in range(first, last):
        for j in range(n2):
            for k in range((i + j + colour) % 2, n3, 2):
                if total[i, j, k] > 0:
                    p[i, j, k] = (r[i, j, k] + _around(links, p, i, j, k)) / total[i, j, k]


@compute.kernel
def _coarsen(first, last, links, room, coarse_links, coarse_room):
    """Links between blocks are half the sum of those across: twice as far apart."""
    n1, n2, n3 = room.shape
    for a in range(first, last):
        for i in range(2 * a, min(2 * a + 2, n1)):
            for j in range(n2):
                for k in range(n3):
                    b, c = j // 2, k // 2
                    coarse_room[a, b, c] += room[i, j, k]
                    if i % 2 == 1 or i == n1 - 1:
                        coarse_links[0, a, b, c] += 0.5 * links[0, i, j, k]
                    if j % 2 == 1 or j == n2 - 1:
                        coarse_links[1, a, b, c] += 0.5 * links[1, i, j, k]
                    if k % 2 == 1 or k == n3 - 1:
                        coarse_links[2, a, b, c] += 0.5 * links[2, i, j, k]
        for b in range(coarse_room.shape[1]):
            for c in range(coarse_room.shape[2]):
                if coarse_room.shape[0] == 1:
                    coarse_links[0, a, b, c] = 0.0
                if coarse_room.shape[1] == 1:
                    coarse_links[1, a, b, c] = 0.0
                if coarse_room.shape[2] == 1:
                    coarse_links[2, a, b, c] = 0.0


@compute.kernel
def _restrict(first, last, links, total, r, p, rest):
    """What is left of r in every block."""
    n1, n2, n3 = p.shape
    for a in range(first, last):
        rest[a] = 0.0
        for i in range(2 * a, min(2 * a + 2, n1)):
            for j in range(n2):
                for k in range(n3):
                    left = r[i, j, k] + _around(links, p, i, j, k) - total[i, j, k] * p[i, j, k]
                    rest[a, j // 2, k // 2] += left


@compute.kernel
def _beside(i, m, seam):
    """The block on the nearer side of cell i out of m blocks; its own at a wall."""
    own = i // 2
    other = own + 1 if i % 2 else own - 1
    if 0 <= other < m:
        return other
    return other % m if seam else own


@compute.kernel
def _prolong(first, last, total, coarse_links, coarse_total, coarse, p):
    """Add the linear interpolation of the blocks' values; where a block ends at a wall or a hole, its own value."""
    _, n2, n3 = p.shape
    m1, m2, m3 = coarse.shape
    seam1, seam2, seam3 = coarse_links[0, -1].any(), coarse_links[1, :, -1].any(), coarse_links[2, :, :, -1].any()
    for i in range(first, last):
        a, x = i // 2, _beside(i, m1, seam1)
        for j in range(n2):
            b, y = j // 2, _beside(j, m2, seam2)
            for k in range(n3):
                if total[i, j, k] == 0.0:
                    continue
                c, z = k // 2, _beside(k, m3, seam3)
                own, value = coarse[a, b, c], 0.0
                for n in range(8):
                    f, g, h = x if n & 1 else a, y if n & 2 else b, z if n & 4 else c
                    weight = (0.25 if n & 1 else 0.75) * (0.25 if n & 2 else 0.75) * (0.25 if n & 4 else 0.75)
                    value += weight * (coarse[f, g, h] if coarse_total[f, g, h] > 0 else own)
                p[i, j, k] += value
