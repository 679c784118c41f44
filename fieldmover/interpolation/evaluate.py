"""The spline of a potential at points, and its integral along lines.

At a point the potential has components A_i per unit of grid coordinate; along a curve its integral is that of
A_i dq^i. At order 3 one point costs 240 multiply-adds on as many coefficients (1.9 kB), mostly in cache because
neighbouring points share them.
"""

from __future__ import annotations

import numpy as np
from llvmlite import ir
from numba import types
from numba.core import cgutils
from numba.extending import intrinsic
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
        coefficients = np.empty((3, *(max(sizes) for sizes in zip(*shapes, strict=True))))
        for axis, (a, (m1, m2, m3)) in enumerate(zip(pot.edges, shapes, strict=True)):
            fit_form(pot.grid, splines, a, (axis,), coefficients[axis, :m1, :m2, :m3])
        self._tables = tuple(_table(spline) for spline in splines)
        self._coefficients = coefficients.ravel()
        self._strides = np.array(coefficients.strides[:3], dtype=np.int64) // coefficients.itemsize
        self._sizes = (0.0,) * (order + 1), (0.0,) * cell_shape(order, sharp=True)[0]

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
        _covectors(q, *self._tables, self._coefficients, self._strides, self._sizes, out)
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
        _straight(start, end, np.array(turns), *self._tables, self._coefficients, self._strides, self._sizes, out)
        return out


def _table(spline: AxisSpline) -> tuple:
    """Arrays of one axis as the kernels take them: powers, of both kinds as many, before basis functions."""
    values, cells = (pieces.transpose(0, 2, 1) for pieces in (spline.value_pieces, spline.cell_pieces))
    more = values.shape[1] - cells.shape[1]
    return (
        spline.nodes,
        np.ascontiguousarray(values),
        np.ascontiguousarray(np.pad(cells, ((0, 0), (0, more), (0, 0)))),
        spline.value_first.astype(np.int64),
        spline.cell_first.astype(np.int64),
    )


_FLAGS = ("contract", "reassoc")


@intrinsic
def _polynomials(typing, pieces, cell, s, powers, functions):  # type: ignore[no-untyped-def]
    """Sums of pieces[cell, power, m] s^power over the powers, a tuple of one for each m.

    Only the lengths of the tuples `powers` and `functions` are used: they are part of the type, so the compiler knows
    them. All m are one vector, and stay in registers.
    """

    def generate(context, builder, signature, arguments):  # type: ignore[no-untyped-def]
        count = len(functions)
        vector = ir.VectorType(ir.DoubleType(), count)
        x = _everywhere(builder, vector, arguments[2])
        place = builder.mul(arguments[1], ir.IntType(64)(len(powers) * count))
        rows = _rows(builder, vector, _data(context, builder, pieces, arguments[0]), place, count, len(powers))
        total = rows.pop()
        while rows:
            total = builder.fadd(builder.fmul(total, x, flags=_FLAGS), rows.pop(), flags=_FLAGS)
        numbers = [builder.extract_element(total, ir.IntType(32)(m)) for m in range(count)]
        return context.make_tuple(builder, signature.return_type, numbers)

    return types.UniTuple(types.float64, len(functions))(pieces, cell, s, powers, functions), generate


@intrinsic
def _product_sum(typing, a, start, first, second, u, v, w):  # type: ignore[no-untyped-def]
    """Sum of u[r] v[s] w[t] a[start + first r + second s + t] over all r, s and t, which tuples give the numbers of.

    What has the same r and s is one vector.
    """

    def generate(context, builder, signature, arguments):  # type: ignore[no-untyped-def]
        data, (place, first, second) = _data(context, builder, a, arguments[0]), arguments[1:4]
        us, vs, ws = (cgutils.unpack_tuple(builder, values) for values in arguments[4:])
        vector = ir.VectorType(ir.DoubleType(), len(ws))
        vs = [_everywhere(builder, vector, factor) for factor in vs]
        planes = []
        for factor in us:
            rows = _rows(builder, vector, data, place, second, len(vs))
            planes.append((_everywhere(builder, vector, factor), _scalar_product(builder, vs, rows)))
            place = builder.add(place, first)
        total = _scalar_product(builder, *zip(*planes, strict=True))
        return _scalar_product(builder, ws, [builder.extract_element(total, ir.IntType(32)(t)) for t in range(len(ws))])

    return types.float64(a, start, first, second, u, v, w), generate


def _data(context, builder, kind, array):  # type: ignore[no-untyped-def]
    """Pointer to the first element of an array."""
    return context.make_array(kind)(context, builder, array).data


def _rows(builder, vector, data, place, step, count):  # type: ignore[no-untyped-def]
    """Vectors of what lies side by side in memory, at some distance from each other."""
    rows = []
    step = ir.IntType(64)(step) if isinstance(step, int) else step
    for _ in range(count):
        rows.append(builder.load(builder.bitcast(builder.gep(data, [place]), vector.as_pointer()), align=8))
        place = builder.add(place, step)
    return rows


def _everywhere(builder, vector, number):  # type: ignore[no-untyped-def]
    """Vector with one number in all places."""
    nothing, first = ir.Constant(vector, ir.Undefined), ir.IntType(32)(0)
    places = ir.Constant(ir.VectorType(ir.IntType(32), vector.count), None)  # zeros
    return builder.shuffle_vector(builder.insert_element(nothing, number, first), nothing, places)


def _scalar_product(builder, factors, values):  # type: ignore[no-untyped-def]
    total = None
    for factor, value in zip(factors, values, strict=True):
        product = builder.fmul(factor, value, flags=_FLAGS)
        total = product if total is None else builder.fadd(total, product, flags=_FLAGS)
    return total


@compute.kernel
def hunt(value, nodes, cell):
    """Cell that holds a value, by steps from one nearby; the outermost ones reach beyond the ends."""
    while cell > 0 and value < nodes[cell]:
        cell -= 1
    while cell < nodes.size - 2 and value >= nodes[cell + 1]:
        cell += 1
    return cell


@compute.inlined
def _basis(value, table, cell, sizes):
    """Basis functions of values and of cells that do not vanish at a place along an axis."""
    nodes, value_pieces, cell_pieces = table[0], table[1], table[2]
    s = (value - nodes[cell]) / (nodes[cell + 1] - nodes[cell])
    values, cells = sizes
    return (
        _polynomials(value_pieces, cell, s, values, values),  # type: ignore[call-arg]
        _polynomials(cell_pieces, cell, s, values, cells),  # type: ignore[call-arg]
    )


@compute.inlined
def _covector(q1, q2, q3, cell1, cell2, cell3, t1, t2, t3, a, strides, sizes):
    (b1, c1), (b2, c2), (b3, c3) = (
        _basis(q1, t1, cell1, sizes),
        _basis(q2, t2, cell2, sizes),
        _basis(q3, t3, cell3, sizes),
    )
    part, first, second = strides[0], strides[1], strides[2]
    i, j, k = first * t1[3][cell1], second * t2[3][cell2], t3[3][cell3]
    ic, jc, kc = first * t1[4][cell1], second * t2[4][cell2], t3[4][cell3]
    return (
        _product_sum(a, ic + j + k, first, second, c1, b2, b3),  # type: ignore[call-arg]
        _product_sum(a, part + i + jc + k, first, second, b1, c2, b3),  # type: ignore[call-arg]
        _product_sum(a, 2 * part + i + j + kc, first, second, b1, b2, c3),  # type: ignore[call-arg]
    )


@compute.fast_kernel
def _covectors(q, t1, t2, t3, a, strides, sizes, out):
    i, j, k = 0, 0, 0
    for n in range(q.shape[1]):
        if np.isnan(q[0, n]):
            out[0, n], out[1, n], out[2, n] = np.nan, np.nan, np.nan
            continue
        i, j, k = hunt(q[0, n], t1[0], i), hunt(q[1, n], t2[0], j), hunt(q[2, n], t3[0], k)
        out[0, n], out[1, n], out[2, n] = _covector(q[0, n], q[1, n], q[2, n], i, j, k, t1, t2, t3, a, strides, sizes)


@compute.kernel
def _crossing(start, change, nodes, cell, offset):
    """Parameter at which a line leaves a cell; past the walls it never does."""
    if change > 0.0 and (cell < nodes.size - 2 or offset[1] > 0.0):
        return (nodes[cell + 1] + offset[0] - start) / change
    if change < 0.0 and (cell > 0 or offset[1] > 0.0):
        return (nodes[cell] + offset[0] - start) / change
    return np.inf


@compute.kernel
def _next_cell(change, nodes, cell, offset):
    cell += 1 if change > 0.0 else -1
    if cell > nodes.size - 2:
        offset[0] += offset[1]
        return 0
    if cell < 0:
        offset[0] -= offset[1]
        return nodes.size - 2
    return cell


@compute.kernel
def _straight(start, end, turns, t1, t2, t3, a, strides, sizes, out):
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
            s1 = _crossing(start[0, n], change[0], t1[0], i, offset[0])
            s2 = _crossing(start[1, n], change[1], t2[0], j, offset[1])
            s3 = _crossing(start[2, n], change[2], t3[0], k, offset[2])
            there = max(here, min(s1, s2, s3, 1.0))
            for side in range(2):  # two Gauss points: exact for the products of order 1
                s = here + (there - here) * (0.5 + (side - 0.5) * 0.5773502691896257645)
                for d in range(3):
                    at[d] = start[d, n] + s * change[d] - offset[d, 0]
                one, two, three = _covector(at[0], at[1], at[2], i, j, k, t1, t2, t3, a, strides, sizes)
                total += 0.5 * (there - here) * (one * change[0] + two * change[1] + three * change[2])
            here = there
            if here < 1.0:
                if s1 <= here:
                    i = _next_cell(change[0], t1[0], i, offset[0])
                if s2 <= here:
                    j = _next_cell(change[1], t2[0], j, offset[1])
                if s3 <= here:
                    k = _next_cell(change[2], t3[0], k, offset[2])
        out[n] = total
