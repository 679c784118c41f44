"""The projection operator d2 W^-1 d2^T on the cells of any grid, without a matrix.

With p a number per cell, F' = F - W^-1 d2^T p changes the flux through a face by its conductance (area / dual
length, over the user's weight) times the difference of p across it. Beyond an open wall p is 0, beyond a
fixed one the same as before it, beyond a seam that of the cell on the other side.

A closed inner wall, such as the inner sphere of a full shell, bounds a hole. A neutral hole is one more cell,
which all faces of that wall lead to: its p is whatever makes the net flux out of it zero, and eliminating it
leaves a change of rank one.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.forms.fields import Three
from fieldmover.forms.measures import Conductances
from fieldmover.grids.grid import at

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Walls = tuple[tuple[bool, bool], tuple[bool, bool], tuple[bool, bool]]

_SLAB = 1 << 15  # cells worked on at a time
_FIXED, _OPEN, _SEAM = 0, 1, 2


@dataclass(frozen=True, eq=False)
class Balance:
    """Norms of |net flux| / (sum of |flux| over its faces) of all cells; the largest right-hand side."""

    linf: float
    l1: float
    l2: float
    largest: float


@dataclass(frozen=True, eq=False)
class ProjectionOperator:
    """L = d2 W^-1 d2^T with its walls, masks and hole.

    Attributes
    ----------
    conductances : sequence of three ndarrays, or of three Products for all but `apply`
        Of all faces; 0 where the flux must not change.
    active : bool ndarray, shape (n1, n2, n3)
        Cells that have an equation; p is 0 in the others.
    periodic : tuple of three bool
    open_walls : three pairs of bool
        Whether the flux through the low and high wall of each axis may change.
    hole : int or None
        Axis whose low wall bounds a neutral hole.
    """

    conductances: Conductances
    active: Mask
    periodic: tuple[bool, bool, bool]
    open_walls: Walls
    hole: int | None = None

    @cached_property
    def exits(self) -> list[tuple[int, int]]:
        """Open walls, as (axis, side), but for that of a neutral hole: without any, constants are in the null space."""
        return [
            (axis, side)
            for axis in range(3)
            for side in (1, 0)
            if self.open_walls[axis][side] and not self.periodic[axis] and (axis, side) != (self.hole, 0)
        ]

    @cached_property
    def _ends(self) -> NDArray[np.int64]:
        """What lies beyond each end of each axis, shape (3, 2)."""
        walls = [[_OPEN if is_open else _FIXED for is_open in pair] for pair in self.open_walls]
        return np.array([[_SEAM] * 2 if seam else pair for seam, pair in zip(self.periodic, walls, strict=True)])

    @cached_property
    def _slabs(self) -> list[slice]:
        n1, n2, n3 = self.active.shape
        return compute.slabs(n1, _SLAB // (n2 * n3))

    @cached_property
    def hole_wall(self) -> Array:
        """Conductances between the hole and the cells at its wall; 0 for cells without equation."""
        assert self.hole is not None
        place = at(self.hole, 0)
        return np.asarray(self.conductances[self.hole][place] * self.active[place])

    @cached_property
    def hole_total(self) -> float:
        """Sum of the conductances of all faces of the hole."""
        assert self.hole is not None
        return float(self.conductances[self.hole][at(self.hole, 0)].sum())

    def apply(self, p: Array, out: Array) -> float:
        """Put L p into `out` and return the scalar product of p with it."""

        def work(rows: slice) -> float:
            _apply(p, *self.conductances, self.active, self._ends, rows.start, rows.stop, out)
            return _dot(p[rows], out[rows])

        total = math.fsum(compute.for_each(work, self._slabs))
        if self.hole is not None:
            wall = at(self.hole, 0)
            inflow = float((self.hole_wall * p[wall]).sum())
            out[wall] -= self.hole_wall * (inflow / self.hole_total)
            total -= inflow**2 / self.hole_total
        return total

    def source(self, faces: Three, net: Array) -> Balance:
        """Put the right-hand side of L p = d2 F into `net`; norms of d2 F over the active cells."""

        def work(rows: slice) -> Array:
            sums = np.zeros(5)
            _balance(*faces, self.active, rows.start, rows.stop, net, sums)
            return sums

        parts = np.array(compute.for_each(work, self._slabs))
        count, l1, l2 = (math.fsum(parts[:, i]) for i in range(3))
        largest = float(parts[:, 4].max())
        if self.hole is not None:
            wall = at(self.hole, 0)
            net[wall] += self.hole_wall * (self.charge(faces) / self.hole_total)
            largest = max(largest, float(np.abs(net[wall]).max()))
        return Balance(float(parts[:, 3].max()), l1 / max(count, 1), math.sqrt(l2 / max(count, 1)), largest)

    def charge(self, faces: Three) -> float:
        """Net flux out of the hole."""
        assert self.hole is not None
        return math.fsum(faces[self.hole][at(self.hole, 0)].ravel())

    def correct(self, faces: Three, p: Array) -> None:
        """F' = F - W^-1 d2^T p, in place."""
        beyond = np.zeros((3, 2))
        if self.hole is not None:
            inflow = float((self.hole_wall * p[at(self.hole, 0)]).sum())
            beyond[self.hole, 0] = (self.charge(faces) + inflow) / self.hole_total

        def work(rows: slice) -> None:
            part = p[rows]
            inner = slice(max(rows.start, 1), rows.stop)
            faces[0][inner] -= self.conductances[0][inner] * (p[inner.start - 1 : inner.stop - 1] - p[inner])
            for axis in (1, 2):
                inside, low, high = (at(axis, slice(*ends)) for ends in ((1, -1), (0, -1), (1, None)))
                faces[axis][rows][inside] -= self.conductances[axis][rows][inside] * (part[low] - part[high])

        compute.for_each(work, self._slabs)
        for axis, seam in enumerate(self.periodic):
            face, g = faces[axis], self.conductances[axis]
            low, high = at(axis, 0), at(axis, -1)
            if seam:
                face[low] -= g[low] * (p[high] - p[low])
                face[high] = face[low]
                continue
            for side, end, outward in ((0, low, -1.0), (1, high, 1.0)):
                if self.open_walls[axis][side]:
                    face[end] -= outward * g[end] * (p[end] - beyond[axis, side])


def _dot(a: Array, b: Array) -> float:
    """Scalar product, the same bits on any number of threads."""
    return float(np.einsum("i,i", a.reshape(-1), b.reshape(-1)))


@compute.kernel
def _apply(p, g1, g2, g3, active, ends, start, stop, out):  # type: ignore[no-untyped-def]
    n1, n2, n3 = p.shape
    zeros = np.zeros(n3)
    for i in range(start, stop):
        for j in range(n2):
            here, result, mask = p[i, j], out[i, j], active[i, j]
            ga, gb, gc, gd, ge = g1[i, j], g1[i + 1, j], g2[i, j], g2[i, j + 1], g3[i, j]
            # A fixed wall has the row itself beyond it, an open one zeros, a seam the row at the other end.
            low = p[i - 1, j] if i > 0 or ends[0, 0] == 2 else zeros if ends[0, 0] == 1 else here
            high = p[(i + 1) % n1, j] if i < n1 - 1 or ends[0, 1] == 2 else zeros if ends[0, 1] == 1 else here
            left = p[i, j - 1] if j > 0 or ends[1, 0] == 2 else zeros if ends[1, 0] == 1 else here
            right = p[i, (j + 1) % n2] if j < n2 - 1 or ends[1, 1] == 2 else zeros if ends[1, 1] == 1 else here
            for k in range(n3):
                h = here[k]
                result[k] = (
                    ga[k] * (h - low[k]) + gb[k] * (h - high[k]) + gc[k] * (h - left[k]) + gd[k] * (h - right[k])
                )
            for k in range(1, n3):
                result[k] += ge[k] * (here[k] - here[k - 1])
            for k in range(n3 - 1):
                result[k] += ge[k + 1] * (here[k] - here[k + 1])
            first, last = here[0], here[n3 - 1]
            if ends[2, 0] > 0:
                result[0] += ge[0] * (first - (last if ends[2, 0] == 2 else 0.0))
            if ends[2, 1] > 0:
                result[n3 - 1] += ge[n3] * (last - (first if ends[2, 1] == 2 else 0.0))
            for k in range(n3):
                if not mask[k]:
                    result[k] = 0.0


@compute.kernel
def _balance(f1, f2, f3, active, start, stop, net, sums):  # type: ignore[no-untyped-def]
    """Net flux of every cell; sums: cells, ratios, squares of ratios, largest ratio, largest net flux."""
    _, n2, n3 = net.shape
    smallest = 5e-324  # makes 0 / 0 a zero and leaves other quotients as they are
    ratio = np.empty(n3)
    for i in range(start, stop):
        for j in range(n2):
            for k in range(n3):
                a, b = f1[i, j, k], f1[i + 1, j, k]
                c, d = f2[i, j, k], f2[i, j + 1, k]
                e, f = f3[i, j, k], f3[i, j, k + 1]
                total = ((b - a) + (d - c)) + (f - e)
                total = total if active[i, j, k] else 0.0
                gross = ((abs(a) + abs(b)) + (abs(c) + abs(d))) + (abs(e) + abs(f))
                net[i, j, k] = total
                ratio[k] = abs(total) / (gross + smallest)
            for k in range(n3):
                if active[i, j, k]:
                    sums[0] += 1
                    sums[1] += ratio[k]
                    sums[2] += ratio[k] ** 2
                    sums[3] = max(sums[3], ratio[k])
                    sums[4] = max(sums[4], abs(net[i, j, k]))
