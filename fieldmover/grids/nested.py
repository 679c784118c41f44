"""Boxes within boxes: Cartesian grids in levels, each finer by a whole factor than the one before."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import combinations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover.errors import GridError
from fieldmover.grids.grid import Grid, cartesian_grid
from fieldmover.grids.placement import placed

Array = NDArray[np.float64]
Whole = tuple[int, int, int]
Window = tuple[slice, slice, slice]
BoxNodes = tuple[ArrayLike, ArrayLike, ArrayLike]

_SAME = 1e-6  # nodes nearer than this part of the smallest cell are one, and take the bits of the coarser level


@dataclass(frozen=True, eq=False)
class NestedGrid:
    """Boxes in levels, made by `nested_grid`.

    Every level has a lattice of nodes, counted along each axis by whole numbers: node i of a level is node
    i x ratio of the next finer one.

    Attributes
    ----------
    boxes : tuple of Grid
        Coarsest level first.
    level : tuple of int
        Of each box; 0 is the coarsest.
    first : tuple of three int each
        Of each box, where its first node lies in the lattice of its level.
    ratio : tuple of three int each
        Of each level, into how many of its cells one of the next coarser level is cut along each axis; 1 for level 0.
    """

    boxes: tuple[Grid, ...]
    level: tuple[int, ...]
    first: tuple[Whole, ...]
    ratio: tuple[Whole, ...]

    def __repr__(self) -> str:
        lines = [f"  level {lev}: {box!r}" for lev, box in zip(self.level, self.boxes, strict=True)]
        return "\n".join([f"<nested grid: {len(self.boxes)} boxes in {len(self.ratio)} levels", *lines]) + ">"

    def on_level(self, level: int) -> list[int]:
        """Numbers of the boxes of a level."""
        return [n for n, lev in enumerate(self.level) if lev == level]

    def last(self, n: int) -> Whole:
        """Where the last node of box n lies in the lattice of its level."""
        i, j, k = (f + cells for f, cells in zip(self.first[n], self.boxes[n].shape, strict=True))
        return i, j, k

    def meeting(self, a: int, b: int) -> tuple[Whole, Whole] | None:
        """First and last node that two boxes have in common, in the lattice of a.

        Box b is of the level of a, or the next finer one. None if they do not even touch.
        """
        r = self.ratio[self.level[b]] if self.level[b] > self.level[a] else (1, 1, 1)
        # The ends of a finer box are nodes of the coarser level, so nothing is lost in these divisions.
        low = [max(p, q // s) for p, q, s in zip(self.first[a], self.first[b], r, strict=True)]
        high = [min(p, q // s) for p, q, s in zip(self.last(a), self.last(b), r, strict=True)]
        if any(h < lo for lo, h in zip(low, high, strict=True)):
            return None
        return (low[0], low[1], low[2]), (high[0], high[1], high[2])

    def window(self, n: int, low: Whole, high: Whole, along: Sequence[bool]) -> Window:
        """Index of what lies between two nodes of the lattice in an array on box n.

        `along` says for each axis whether the array has cells along it, or nodes.
        """
        one, two, three = (
            slice(lo - f, hi - f + (not cells))
            for lo, hi, f, cells in zip(low, high, self.first[n], along, strict=True)
        )
        return one, two, three

    def finer(self, n: int) -> list[tuple[int, Whole, Whole]]:
        """Boxes of the next finer level that meet box n, and first and last node they share in its lattice."""
        found = []
        for m in self.on_level(self.level[n] + 1):
            shared = self.meeting(n, m)
            if shared is not None:
                found.append((m, *shared))
        return found

    def scaled(self, m: int, low: Whole, high: Whole) -> tuple[Whole, Whole]:
        """Nodes of the next coarser level in the lattice of box m."""
        r = self.ratio[self.level[m]]
        a, b = ([i * s for i, s in zip(nodes, r, strict=True)] for nodes in (low, high))
        return (a[0], a[1], a[2]), (b[0], b[1], b[2])

    def covered(self, n: int, along: Sequence[bool] = (True, True, True)) -> NDArray[np.bool_]:
        """What of box n lies under finer boxes or on their walls.

        Parameters
        ----------
        n : int
        along : three bool
            Whether to look at cells along each axis, or nodes: all True for cells, one False for the faces normal to
            that axis.

        Examples
        --------
        >>> x = np.arange(5.0)
        >>> nested = nested_grid([[(x, x, x)], [(np.arange(1, 2.1, 0.5),) * 3]])
        >>> int(nested.covered(0).sum()), int(nested.covered(0, (False, True, True)).sum())
        (1, 2)
        """
        shape = [cells + (not a) for cells, a in zip(self.boxes[n].shape, along, strict=True)]
        mask = np.zeros(shape, dtype=bool)
        for _, low, high in self.finer(n):
            mask[self.window(n, low, high, along)] = True
        return mask

    def placed(self, origin: ArrayLike = (0.0, 0.0, 0.0), turn: ArrayLike | None = None) -> NestedGrid:
        """All boxes turned about the origin and moved together; arguments and errors as `placed`."""
        return replace(self, boxes=tuple(placed(box, origin, turn) for box in self.boxes))


def nested_grid(levels: Sequence[Sequence[BoxNodes]]) -> NestedGrid:
    """Boxes within boxes.

    Parameters
    ----------
    levels : sequence of sequences of (x, y, z)
        For each level, coarsest first, its boxes, each given by three 1-D arrays of nodes. The ends of a box are nodes
        of the next coarser level, whose cells it cuts into the same whole number of parts, 2 or more, as the other
        boxes of its level do (along x, y and z these numbers may differ). It must not leave the boxes of the next
        coarser level; it may reach over several. Boxes of one level may touch, and then share their nodes, but must
        not overlap.

    Returns
    -------
    NestedGrid

    Raises
    ------
    GridError
        If a box breaks one of these rules.

    Examples
    --------
    >>> x = np.linspace(-4, 4, 9)
    >>> nested_grid([[(x, x, x)], [(np.linspace(-1, 1, 5),) * 3]])
    <nested grid: 2 boxes in 2 levels
      level 0: <cartesian grid: x -4..4 (8 cells); y -4..4 (8 cells); z -4..4 (8 cells)>
      level 1: <cartesian grid: x -1..1 (4 cells); y -1..1 (4 cells); z -1..1 (4 cells)>>
    """
    grids = [[_box(nodes, level, b) for b, nodes in enumerate(boxes)] for level, boxes in enumerate(levels)]
    if not grids or not all(grids):
        raise GridError(f"nested grid: {[len(g) for g in grids]} boxes in its levels, expected at least one in each")
    boxes: list[Grid] = []
    places: list[Whole] = []
    ratios: list[Whole] = []
    below: list[_Lattice] = []
    for level, own in enumerate(grids):
        lattices = [_Lattice(level, axis) for axis in range(3)]
        if level == 0:
            for axis, lattice in enumerate(lattices):
                lattice.number_freely([grid.nodes[axis] for grid in own])
            ratio = [1, 1, 1]
            firsts = [
                [lattice.place(grid.nodes[d], b) for d, lattice in enumerate(lattices)] for b, grid in enumerate(own)
            ]
        else:
            ratio, firsts = _refine(lattices, below, own)
        for grid, first in zip(own, firsts, strict=True):
            x, y, z = (lattice.nodes(f, cells) for lattice, f, cells in zip(lattices, first, grid.shape, strict=True))
            boxes.append(cartesian_grid(x, y, z))
            places.append((first[0], first[1], first[2]))
        ratios.append((ratio[0], ratio[1], ratio[2]))
        below = lattices
    numbers = tuple(level for level, own in enumerate(grids) for _ in own)
    nested = NestedGrid(tuple(boxes), numbers, tuple(places), tuple(ratios))
    _refuse_overlaps(nested)
    _refuse_leaving(nested)
    return nested


def _box(nodes: BoxNodes, level: int, b: int) -> Grid:
    arrays = tuple(nodes)
    if len(arrays) != 3:
        raise GridError(f"{_name(level, b)}: {len(arrays)} node arrays, expected three, for x, y and z")
    try:
        return cartesian_grid(*arrays)
    except GridError as error:
        raise GridError(f"{_name(level, b)}: {error}") from None


def _name(level: int, b: int) -> str:
    return f"box {b} of level {level} (counted from 0)"


class _Lattice:
    """The known nodes along one axis of a level: their numbers, increasing, and coordinates."""

    def __init__(self, level: int, axis: int) -> None:
        self.level, self.axis = level, "xyz"[axis]
        self.index, self.q = np.empty(0, dtype=np.int64), np.empty(0)

    def number_freely(self, all_nodes: list[Array]) -> None:
        """Number the nodes of all boxes of the coarsest level."""
        nodes = np.sort(np.concatenate(all_nodes))
        near = _SAME * min(float(np.diff(q).min()) for q in all_nodes)
        self.q = nodes[np.append(True, np.diff(nodes) > near)]
        self.index = np.arange(self.q.size)

    def place(self, nodes: Array, b: int) -> int:
        """Number of the first of the nodes of box b, which follow one another here."""
        found, _ = self.nearest(nodes)
        first = int(self.index[found[0]])
        if not np.array_equal(self.index[found], first + np.arange(nodes.size)):
            extra = int(np.argmax(np.diff(self.index[found]) != 1))
            raise GridError(
                f"{_name(self.level, b)}: between its nodes {self.axis} = {nodes[extra]:.9g} and "
                f"{nodes[extra + 1]:.9g} lies a node of another box of that level, expected the same nodes where their "
                "ranges meet"
            )
        return first

    def nearest(self, q: Array) -> tuple[NDArray[np.int64], Array]:
        """Position here of the node nearest to each coordinate, and its distance in parts of the smallest cell."""
        right = np.clip(np.searchsorted(self.q, q), 1, self.q.size - 1)
        found = np.where(q - self.q[right - 1] < self.q[right] - q, right - 1, right)
        return found, np.asarray(np.abs(self.q[found] - q) / np.diff(self.q).min())

    def add(self, first: int, nodes: Array, b: int) -> None:
        """Number the nodes of box b from `first` on."""
        numbers = first + np.arange(nodes.size)
        shared, here, there = np.intersect1d(self.index, numbers, return_indices=True)
        if shared.size:
            apart = np.abs(self.q[here] - nodes[there])
            worst = int(np.argmax(apart))
            if apart[worst] > _SAME * float(np.diff(nodes).min()):
                raise GridError(
                    f"{_name(self.level, b)}: a node at {self.axis} = {nodes[there][worst]:.9g} where another box of "
                    f"that level has {self.q[here][worst]:.9g}, expected the same nodes where their ranges meet"
                )
        new = ~np.isin(numbers, shared)
        order = np.argsort(index := np.concatenate([self.index, numbers[new]]))
        self.index, self.q = index[order], np.concatenate([self.q, nodes[new]])[order]

    def nodes(self, first: int, cells: int) -> Array:
        start = int(np.searchsorted(self.index, first))
        return self.q[start : start + cells + 1]


def _refine(lattices: list[_Lattice], below: list[_Lattice], own: list[Grid]) -> tuple[list[int], list[list[int]]]:
    """Number the nodes of the boxes of a level by those of the next coarser one."""
    level = lattices[0].level
    ratio: list[int] = []
    firsts: list[list[int]] = [[] for _ in own]
    for axis, (lattice, coarse) in enumerate(zip(lattices, below, strict=True)):
        for b, grid in enumerate(own):
            nodes, name, x = grid.nodes[axis].copy(), _name(level, b), lattice.axis
            ends, gap = coarse.nearest(nodes[[0, -1]])
            if gap.max() > _SAME:
                side = int(np.argmax(gap))
                raise GridError(
                    f"{name}: its {('low', 'high')[side]} wall {x} = {nodes[-side]:.9g} is no node of level "
                    f"{level - 1} (the nearest is {coarse.q[ends[side]]:.9g}), expected walls on faces of the next "
                    "coarser level"
                )
            low, high = (int(i) for i in coarse.index[ends])
            parts, left = divmod(nodes.size - 1, max(high - low, 1))
            if left or parts < 2:
                raise GridError(
                    f"{name}: {nodes.size - 1} cells along {x} where level {level - 1} has {high - low}, expected "
                    "twice as many, or another whole factor above 1"
                )
            if axis == len(ratio):
                ratio.append(parts)
            if parts != ratio[axis]:
                raise GridError(
                    f"{name}: it cuts the cells of level {level - 1} into {parts} along {x}, box 0 of the same level "
                    f"into {ratio[axis]}; expected one number for a level"
                )
            expected = coarse.q[ends[0] : ends[1] + 1]
            if expected.size - 1 != high - low:
                raise GridError(f"{name}: it leaves the boxes of level {level - 1} along {x}, expected it inside them")
            apart = np.abs(nodes[::parts] - expected)
            worst = int(np.argmax(apart))
            if apart[worst] > _SAME * float(np.diff(nodes).min()):
                raise GridError(
                    f"{name}: its node {worst * parts} along {x} is {nodes[worst * parts]:.9g}, expected that of level "
                    f"{level - 1}, {expected[worst]:.9g}, with a ratio of {parts}"
                )
            nodes[::parts] = expected
            lattice.add(low * parts, nodes, b)
            firsts[b].append(low * parts)
    return ratio, firsts


def _refuse_overlaps(nested: NestedGrid) -> None:
    for a, b in combinations(range(len(nested.boxes)), 2):
        shared = nested.meeting(a, b) if nested.level[a] == nested.level[b] else None
        if shared is not None and all(h > lo for lo, h in zip(*shared, strict=True)):
            own = nested.on_level(nested.level[a])
            x = [
                f"{name} {nested.boxes[a].nodes[d][shared[0][d] - nested.first[a][d]]:.9g}.."
                f"{nested.boxes[a].nodes[d][shared[1][d] - nested.first[a][d]]:.9g}"
                for d, name in enumerate("xyz")
            ]
            raise GridError(
                f"{_name(nested.level[b], own.index(b))}: it overlaps box {own.index(a)} in {', '.join(x)}, expected "
                "boxes of one level that touch at most"
            )


def _refuse_leaving(nested: NestedGrid) -> None:
    for m, box in enumerate(nested.boxes):
        level = nested.level[m]
        if level == 0:
            continue
        wanted = np.prod([cells // r for cells, r in zip(box.shape, nested.ratio[level], strict=True)])
        found = 0
        for n in nested.on_level(level - 1):
            shared = nested.meeting(n, m)
            if shared is not None:
                found += int(np.prod([h - lo for lo, h in zip(*shared, strict=True)]))
        if found != wanted:
            raise GridError(
                f"{_name(level, nested.on_level(level).index(m))}: only {found} of the {wanted} cells of level "
                f"{level - 1} that it covers belong to a box, expected it inside the boxes of the next coarser level"
            )
