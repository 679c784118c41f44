"""The spline of a potential at points, and its integral along lines.

At a point the potential has components A_i per unit of grid coordinate; along a curve its integral is that of
A_i dq^i. At order 3 one point costs 240 multiply-adds on as many coefficients (1.9 kB), mostly in cache because
neighbouring points share them.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import cache

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.forms.fields import EdgePotential
from fieldmover.grids.grid import Grid
from fieldmover.interpolation.splines import AxisSpline, cell_shape, fit_form, grid_splines

Array = NDArray[np.float64]


class PotentialSpline:
    """Spline 1-form of an edge potential.

    Parameters
    ----------
    pot : EdgePotential
    order : {1, 3, 5}
        Degree of the splines along the axes where a component is interpolated; 1 is Whitney's form (Whitney 1957,
        Geometric integration theory).
    """

    def __init__(self, pot: EdgePotential, order: int) -> None:
        self.grid: Grid = pot.grid
        self.order = order
        splines = grid_splines(pot.grid, order, sharp=True)
        shapes = [
            [spline.cells.take.size if axis == d else spline.values.take.size for d, spline in enumerate(splines)]
            for axis in range(3)
        ]
        # The three components lie side by side, so that those of a point share cache lines.
        coefficients = np.empty((*(max(sizes) for sizes in zip(*shapes, strict=True)), 3))
        for axis, (a, (m1, m2, m3)) in enumerate(zip(pot.edges, shapes, strict=True)):
            fit_form(pot.grid, splines, a, (axis,), coefficients[:m1, :m2, :m3, axis])
        self._tables = tuple(_table(spline) for spline in splines)
        self._coefficients = coefficients.ravel()
        self._strides = np.array(coefficients.strides[:2], dtype=np.uint64) // np.uint64(8)

    def covectors(self, q: Array) -> Array:
        """Components A_i of the potential at points.

        Parameters
        ----------
        q : ndarray, shape (3, N)
            Grid coordinates inside the grid; NaN for points to leave out.

        Returns
        -------
        ndarray, shape (3, N)
            Per unit of grid coordinate; NaN where left out.
        """
        out = np.empty_like(q)
        _kernels(self.order)[0](q, *self._tables, self._coefficients, self._strides, out)
        return out

    def straight(self, start: Array, end: Array) -> Array:
        """Integrals along lines that are straight in grid coordinates, cut where they cross from cell to cell.

        Exact for order 1, whose form jumps there.

        Parameters
        ----------
        start, end : ndarrays, shape (3, N)
            Grid coordinates inside the grid; NaN in `start` for lines to leave out. Across a seam `end` may lie a
            turn beyond the nodes.

        Returns
        -------
        ndarray, shape (N,)
            NaN where left out.
        """
        out = np.empty(start.shape[1])
        turns = [np.ptp(n) if seam else 0.0 for n, seam in zip(self.grid.nodes, self.grid.periodic, strict=True)]
        _kernels(self.order)[1](start, end, np.array(turns), *self._tables, self._coefficients, self._strides, out)
        return out


def _table(spline: AxisSpline) -> tuple:
    """Arrays of one axis as the kernels take them: powers before basis functions."""
    return (
        spline.nodes,
        np.ascontiguousarray(spline.value_pieces.transpose(0, 2, 1)),
        np.ascontiguousarray(spline.cell_pieces.transpose(0, 2, 1)),
        spline.value_first.astype(np.uint64),
        spline.cell_first.astype(np.uint64),
    )


@compute.kernel
def hunt(value, nodes, cell):
    """Cell that holds a value, by steps from one nearby; the outermost ones reach beyond the ends."""
    while cell > 0 and value < nodes[cell]:
        cell -= 1
    while cell < nodes.size - 2 and value >= nodes[cell + 1]:
        cell += 1
    return cell


@cache
def _kernels(order: int) -> tuple[Callable, Callable]:
    """The kernels for one order: with a constant number of basis functions the compiler unrolls its loops.

    Indices into coefficients are unsigned, which spares the test for negative ones (a third of the time). The
    kernels call `covector` at one place only, so that it is inlined.
    """
    width = order + 1
    cells, powers = cell_shape(order, sharp=True)

    @compute.fast_kernel
    def basis(value, table, cell, b, c):
        nodes, value_pieces, cell_pieces = table[0], table[1], table[2]
        s = (value - nodes[cell]) / (nodes[cell + 1] - nodes[cell])
        for m in range(width):
            x = value_pieces[cell, width - 1, m]
            for power in range(width - 2, -1, -1):
                x = x * s + value_pieces[cell, power, m]
            b[m] = x
        for m in range(cells):
            x = cell_pieces[cell, powers - 1, m]
            for power in range(powers - 2, -1, -1):
                x = x * s + cell_pieces[cell, power, m]
            c[m] = x

    @compute.fast_kernel
    def covector(q1, q2, q3, cell1, cell2, cell3, t1, t2, t3, a, strides, b1, b2, b3, c1, c2, c3):
        basis(q1, t1, cell1, b1, c1)
        basis(q2, t2, cell2, b2, c2)
        basis(q3, t3, cell3, b3, c3)
        i, j, k = t1[3][cell1], t2[3][cell2], t3[3][cell3]
        ic, jc, kc = t1[4][cell1], t2[4][cell2], t3[4][cell3]
        first, second, third = strides[0], strides[1], np.uint64(3)
        i, j, k = first * i, second * j, third * k
        ic, jc, kc = first * ic, second * jc, third * kc
        one, two, three = 0.0, 0.0, 0.0
        for r in range(cells):
            x = 0.0
            for s in range(width):
                at, line = ic + first * np.uint64(r) + j + second * np.uint64(s) + k, 0.0
                for t in range(width):
                    line += b3[t] * a[at + np.uint64(3 * t)]
                x += b2[s] * line
            one += c1[r] * x
        for r in range(width):
            row, y, z = i + first * np.uint64(r), 0.0, 0.0
            for s in range(cells):
                at, line = row + jc + second * np.uint64(s) + k + np.uint64(1), 0.0
                for t in range(width):
                    line += b3[t] * a[at + np.uint64(3 * t)]
                y += c2[s] * line
            for s in range(width):
                at, line = row + j + second * np.uint64(s) + kc + np.uint64(2), 0.0
                for t in range(cells):
                    line += c3[t] * a[at + np.uint64(3 * t)]
                z += b2[s] * line
            two += b1[r] * y
            three += b1[r] * z
        return one, two, three

    @compute.fast_kernel
    def covectors(q, t1, t2, t3, a, strides, out):
        b1, b2, b3 = np.empty(width), np.empty(width), np.empty(width)
        c1, c2, c3 = np.empty(cells), np.empty(cells), np.empty(cells)
        i, j, k = 0, 0, 0
        for n in range(q.shape[1]):
            if np.isnan(q[0, n]):
                out[0, n], out[1, n], out[2, n] = np.nan, np.nan, np.nan
                continue
            i, j, k = hunt(q[0, n], t1[0], i), hunt(q[1, n], t2[0], j), hunt(q[2, n], t3[0], k)
            out[0, n], out[1, n], out[2, n] = covector(
                q[0, n], q[1, n], q[2, n], i, j, k, t1, t2, t3, a, strides, b1, b2, b3, c1, c2, c3
            )

    @compute.kernel
    def crossing(start, change, nodes, cell, offset):
        """Parameter at which a line leaves a cell; past the walls it never does."""
        if change > 0.0 and (cell < nodes.size - 2 or offset[1] > 0.0):
            return (nodes[cell + 1] + offset[0] - start) / change
        if change < 0.0 and (cell > 0 or offset[1] > 0.0):
            return (nodes[cell] + offset[0] - start) / change
        return np.inf

    @compute.kernel
    def next_cell(change, nodes, cell, offset):
        cell += 1 if change > 0.0 else -1
        if cell > nodes.size - 2:
            offset[0] += offset[1]
            return 0
        if cell < 0:
            offset[0] -= offset[1]
            return nodes.size - 2
        return cell

    @compute.kernel
    def straight(start, end, turns, t1, t2, t3, a, strides, out):
        b1, b2, b3 = np.empty(width), np.empty(width), np.empty(width)
        c1, c2, c3 = np.empty(cells), np.empty(cells), np.empty(cells)
        offset, change, at = np.empty((3, 2)), np.empty(3), np.empty(3)
        i, j, k = 0, 0, 0
        for n in range(out.size):
            out[n] = np.nan
            if np.isnan(start[0, n]):
                continue
            for d in range(3):
                change[d] = end[d, n] - start[d, n]
                offset[d, 0], offset[d, 1] = 0.0, turns[d]
            i, j, k = hunt(start[0, n], t1[0], i), hunt(start[1, n], t2[0], j), hunt(start[2, n], t3[0], k)
            total, here = 0.0, 0.0
            while here < 1.0:
                s1 = crossing(start[0, n], change[0], t1[0], i, offset[0])
                s2 = crossing(start[1, n], change[1], t2[0], j, offset[1])
                s3 = crossing(start[2, n], change[2], t3[0], k, offset[2])
                there = max(here, min(s1, s2, s3, 1.0))
                for side in range(2):  # two Gauss points: exact for the products of order 1
                    s = here + (there - here) * (0.5 + (side - 0.5) * 0.5773502691896257645)
                    for d in range(3):
                        at[d] = start[d, n] + s * change[d] - offset[d, 0]
                    one, two, three = covector(
                        at[0], at[1], at[2], i, j, k, t1, t2, t3, a, strides, b1, b2, b3, c1, c2, c3
                    )
                    total += 0.5 * (there - here) * (one * change[0] + two * change[1] + three * change[2])
                here = there
                if here < 1.0:
                    if s1 <= here:
                        i = next_cell(change[0], t1[0], i, offset[0])
                    if s2 <= here:
                        j = next_cell(change[1], t2[0], j, offset[1])
                    if s3 <= here:
                        k = next_cell(change[2], t3[0], k, offset[2])
            out[n] = total

    return covectors, straight
