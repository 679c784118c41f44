"""The part of a source that a target sees, with a margin: splines need be fitted no further.

What a spline takes from a value shrinks with the distance by 0.27 a cell at order 3 and 0.43 at order 5 (largest roots
of the Euler-Frobenius polynomials, 2 - sqrt 3 at order 3; Schoenberg 1973, Cardinal Spline Interpolation, lecture 4;
from memory): to some 1e-12 within the margin. Smooth fields feel a new end of the spline far less.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fieldmover.forms.fields import EdgePotential
from fieldmover.grids.grid import Grid
from fieldmover.grids.part import part_of, poles_at
from fieldmover.interpolation.plan_nodes import NodePlaces

Mask = NDArray[np.bool_]

_MARGIN = {1: 3, 3: 20, 5: 34}  # cells
_WORTH = 0.75  # part of all cells: more are not worth leaving the others out


@dataclass(frozen=True, eq=False)
class SourcePart:
    """Some cells of a source: `cells[axis]` of them along each axis from cell `first[axis]` on, across a seam too.

    `grid` is the source's part there.
    """

    grid: Grid
    first: list[int]
    cells: list[int]

    @classmethod
    def seen(cls, places: NodePlaces, order: int) -> SourcePart:
        """What a target sees of a source at an order; all of it where leaving out the rest is not worth it."""
        source, margin = places.locator.grid, _MARGIN[order]
        first, cells = [0, 0, 0], list(source.shape)
        for axis in sorted(range(3), key=lambda d: d in source.ring_axis):  # rings last: they stay whole at a pole
            low, count = _hull(places.touched(axis), source.periodic[axis])
            n = source.shape[axis]
            if not source.periodic[axis]:
                first[axis] = max(low - margin, 0)
                cells[axis] = min(low + count + margin, n) - first[axis]
            elif 2 * count <= n and 0 < count + 2 * margin < n and not _at_pole(source, axis, first, cells):
                first[axis], cells[axis] = low - margin, count + 2 * margin
        if np.prod(cells) > _WORTH * np.prod(source.shape):
            return cls(source, [0, 0, 0], list(source.shape))
        one, two, three = (slice(begin, begin + count) for begin, count in zip(first, cells, strict=True))
        return cls(part_of(source, (one, two, three)), first, cells)

    def cut(self, pot: EdgePotential) -> EdgePotential:
        """A potential of the source on this part of it."""
        if pot.grid is self.grid:
            return pot
        edges = []
        for d, a in enumerate(pot.edges):
            for axis, n in enumerate(pot.grid.shape):
                first, last = self.first[axis], self.first[axis] + self.cells[axis] + (axis != d)
                if first >= 0 and last <= a.shape[axis]:
                    a = a[tuple(slice(first, last) if e == axis else slice(None) for e in range(3))]
                else:  # across a seam
                    a = np.take(a, np.arange(first, last) % n, axis=axis)
            edges.append(a)
        return EdgePotential(self.grid, (edges[0], edges[1], edges[2]))


def _hull(touched: Mask, seam: bool) -> tuple[int, int]:
    """First cell and number of cells of the shortest range that holds all cells touched."""
    places = np.flatnonzero(touched)
    if places.size == 0:
        return 0, 0
    if not seam:
        return int(places[0]), int(places[-1] - places[0] + 1)
    gaps = np.diff(places, append=places[0] + touched.size)
    widest = int(np.argmax(gaps))
    return int(places[(widest + 1) % places.size]), int(touched.size - gaps[widest] + 1)


def _at_pole(source: Grid, ring: int, first: list[int], cells: list[int]) -> bool:
    """Whether a part reaches a pole where this ring shrinks to a point."""
    return any(
        source.ring_axis[axis] == ring
        and poles_at(source, axis, slice(first[axis], first[axis] + cells[axis])) is not None
        for axis in range(3)
    )
