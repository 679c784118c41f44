"""The spline of node positions: a smooth map through a table, evaluated on lattices and at points.

Quintic along each axis (`axis_splines`), so that positions and tangents between nodes are off by terms of order 6
and 5 in the cells. Coefficients keep their three Cartesian components side by side, and the six lines of coefficients
that a point needs along the first axis are combined first: 18 numbers in a row each, which the compiler turns into
vector instructions.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.grids.axes import Poles
from fieldmover.grids.axis_splines import axis_spline, fit, opposite_lines

Array = NDArray[np.float64]
Triple = tuple[Array, Array, Array]
Rings = tuple[int | None, int | None, int | None]

DEGREE = 5
_WIDTH = DEGREE + 1
_ROW = 3 * _WIDTH
_POINTS = 1 << 13  # points per task
_PLANES = 4  # planes of a lattice per task


class PositionSpline:
    """Spline of positions given at the nodes of three axes.

    Parameters
    ----------
    nodes : tuple of three ndarrays
        Grid coordinates of the nodes, shapes (n1 + 1,), (n2 + 1,), (n3 + 1,).
    positions : ndarray, shape (3, n1 + 1, n2 + 1, n3 + 1)
    periodic : tuple of three bool
    poles : tuple of None, "low", "high" or "both"
    rings : tuple of int or None
        For each axis with poles, the axis of the ring there, if meridians are to be joined to their opposites; None
        where the axis ends at its poles as at a wall.

    Attributes
    ----------
    coefficients : ndarray, shape (m1, m2, m3, 3)
    table : tuple of four ndarrays
        The three axes one after the other: nodes; polynomial pieces [cell, power, basis function]; first active
        coefficient of each cell; where each axis begins, and the end. An axis of n cells has n + 1 entries in all.

    Examples
    --------
    >>> i = np.arange(7.0)
    >>> x = np.stack(np.meshgrid(i, 2 * i, i**2, indexing="ij"))
    >>> spline = PositionSpline((i, i, i), x, (False,) * 3, (None,) * 3, (None,) * 3)
    >>> [float(p[0].round(9)) for p in spline.positions(np.array([0.5]), np.array([1.0]), np.array([2.5]))]
    [0.5, 2.0, 6.25]
    """

    def __init__(
        self,
        nodes: Triple,
        positions: Array,
        periodic: tuple[bool, bool, bool],
        poles: tuple[Poles, Poles, Poles],
        rings: Rings,
    ) -> None:
        self.nodes = nodes
        self.turns = np.array([np.ptp(q) if seam else 0.0 for q, seam in zip(nodes, periodic, strict=True)])
        splines = [
            axis_spline(nodes[d], DEGREE, periodic[d], poles[d] if rings[d] is not None else None) for d in range(3)
        ]
        parts = []
        for part in positions:
            for axis in sorted(range(3), key=lambda d: rings[d] is None):  # poles first: they pair lines of the ring
                ring = rings[axis]
                cells = nodes[ring].size - 1 if ring is not None else 0
                opposite = None if ring is None else opposite_lines(part.shape, axis, ring, cells)
                part = fit(part, splines[axis].values, axis, opposite)
            parts.append(part)
        self.coefficients = np.empty((*parts[0].shape, 3))

        def interleave(rows: slice) -> None:
            for x, part in enumerate(parts):
                self.coefficients[rows, :, :, x] = part[rows]

        compute.for_each(interleave, compute.slabs(parts[0].shape[0], 2 * _PLANES))
        once_more = [np.append(np.arange(q.size - 1), q.size - 2) for q in nodes]  # as many entries as nodes
        pieces = [s.value_pieces.transpose(0, 2, 1)[cells] for s, cells in zip(splines, once_more, strict=True)]
        first = [s.value_first[cells] for s, cells in zip(splines, once_more, strict=True)]
        self.table = (
            np.concatenate(nodes),
            np.concatenate(pieces),
            np.concatenate(first).astype(np.uint64),
            np.cumsum([0, *(q.size for q in nodes)]),
        )

    @property
    def strides(self) -> NDArray[np.uint64]:
        """How far apart in `coefficients` neighbours along the first two axes are."""
        return np.array([s // 8 for s in self.coefficients.strides[:2]], dtype=np.uint64)

    def positions(self, q1: Array, q2: Array, q3: Array) -> Triple:
        """Cartesian positions at coordinates that broadcast."""
        x, y, z = self._evaluate((q1, q2, q3), 1)[:, 0]
        return x, y, z

    def jacobian(self, q1: Array, q2: Array, q3: Array) -> Array:
        """Derivatives, shape (3, 3, ...): Cartesian component, axis."""
        return self._evaluate((q1, q2, q3), 3)

    def _evaluate(self, q: Triple, rows: int) -> Array:
        """Positions (rows = 1) or tangents (rows = 3), shape (3, rows, ...)."""
        q1, q2, q3 = (self._wrapped(np.asarray(c, dtype=np.float64), d) for d, c in enumerate(q))
        shape = np.broadcast_shapes(q1.shape, q2.shape, q3.shape)
        if all(c.ndim == 3 and c.size == c.shape[d] for d, c in enumerate((q1, q2, q3))):
            return self._on_lattice((q1.ravel(), q2.ravel(), q3.ravel()), rows)
        points = np.stack([np.broadcast_to(c, shape).ravel() for c in (q1, q2, q3)])
        out = np.empty((3, rows, points.shape[1]))
        compute.for_each(
            lambda part: _at_points(
                points[:, part], *self.table, self.coefficients.reshape(-1), self.strides, out[:, :, part]
            ),
            compute.slabs(points.shape[1], _POINTS),
        )
        return out.reshape(3, rows, *shape)

    def _on_lattice(self, q: Triple, rows: int) -> Array:
        weights = [_axis_weights(c, *self.table[:3], *self.table[3][d : d + 2]) for d, c in enumerate(q)]
        out = np.empty((3, rows, *(c.size for c in q)))
        (w1, f1), second, third = weights
        compute.for_each(
            lambda part: _on_lattice(w1[part], f1[part], *second, *third, self.coefficients, rows, out[:, :, part]),
            compute.slabs(q[0].size, _PLANES),
        )
        return out

    def _wrapped(self, q: Array, axis: int) -> Array:
        turn, low = self.turns[axis], self.nodes[axis][0]
        return q if turn == 0.0 else q - turn * np.floor((q - low) / turn)


@compute.kernel
def _hunt(value, nodes, first, last, cell):
    """Cell, of first to last, that holds a value, walking from a guess; the outermost reach beyond the ends."""
    while cell > first and value < nodes[cell]:
        cell -= 1
    while cell < last and value >= nodes[cell + 1]:
        cell += 1
    return cell


@compute.inlined
def _basis(value, nodes, pieces, cell, out, place):
    """Active basis functions of a cell, out[place, 0], and their derivatives, out[place, 1], at a value."""
    step = nodes[cell + 1] - nodes[cell]
    s = (value - nodes[cell]) / step
    for m in range(_WIDTH):
        level, slope = pieces[cell, _WIDTH - 1, m], 0.0
        for k in range(_WIDTH - 2, -1, -1):
            slope = slope * s + level
            level = level * s + pieces[cell, k, m]
        out[place, 0, m], out[place, 1, m] = level, slope / step


@compute.fast_kernel
def evaluate(q, nodes, pieces, first, offsets, coefficients, strides, cells, b, work, value, tangents):
    """Position and tangents at one place.

    `cells` is where the search begins and then the cells of q, b (3, 2, 6) and work (3, 18) are scratch. Unsigned
    indices spare the test for negative ones, and without views of arrays nothing is reference-counted.
    """
    for axis in range(3):
        cells[axis] = _hunt(q[axis], nodes, offsets[axis], offsets[axis + 1] - 2, cells[axis])
        _basis(q[axis], nodes, pieces, cells[axis], b, axis)
    i, j, k = first[cells[0]], first[cells[1]], first[cells[2]]
    w0, w1, w2, w3, w4, w5 = b[0, 0, 0], b[0, 0, 1], b[0, 0, 2], b[0, 0, 3], b[0, 0, 4], b[0, 0, 5]
    d0, d1, d2, d3, d4, d5 = b[0, 1, 0], b[0, 1, 1], b[0, 1, 2], b[0, 1, 3], b[0, 1, 4], b[0, 1, 5]
    for e in range(_ROW):
        work[0, e], work[1, e], work[2, e] = 0.0, 0.0, 0.0
    for m in range(_WIDTH):
        o0 = i * strides[0] + (j + np.uint64(m)) * strides[1] + k * np.uint64(3)
        o1 = o0 + strides[0]
        o2 = o1 + strides[0]
        o3 = o2 + strides[0]
        o4 = o3 + strides[0]
        o5 = o4 + strides[0]
        w, slope = b[1, 0, m], b[1, 1, m]
        for n in range(_ROW):
            shift = np.uint64(n)
            c0, c1, c2 = coefficients[o0 + shift], coefficients[o1 + shift], coefficients[o2 + shift]
            c3, c4, c5 = coefficients[o3 + shift], coefficients[o4 + shift], coefficients[o5 + shift]
            t = w0 * c0 + w1 * c1 + w2 * c2 + w3 * c3 + w4 * c4 + w5 * c5
            u = d0 * c0 + d1 * c1 + d2 * c2 + d3 * c3 + d4 * c4 + d5 * c5
            work[0, n] += w * t
            work[1, n] += w * u
            work[2, n] += slope * t
    for x in range(3):
        v, t1, t2, t3 = 0.0, 0.0, 0.0, 0.0
        for c in range(_WIDTH):
            w, slope = b[2, 0, c], b[2, 1, c]
            v += w * work[0, 3 * c + x]
            t1 += w * work[1, 3 * c + x]
            t2 += w * work[2, 3 * c + x]
            t3 += slope * work[0, 3 * c + x]
        value[x], tangents[x, 0], tangents[x, 1], tangents[x, 2] = v, t1, t2, t3


@compute.kernel
def _at_points(q, nodes, pieces, first, offsets, coefficients, strides, out):
    b, cells, place = np.empty((3, 2, _WIDTH)), offsets[:3].copy(), np.empty(3)
    work, value, tangents = np.empty((3, _ROW)), np.empty(3), np.empty((3, 3))
    for n in range(q.shape[1]):
        place[0], place[1], place[2] = q[0, n], q[1, n], q[2, n]
        evaluate(place, nodes, pieces, first, offsets, coefficients, strides, cells, b, work, value, tangents)
        for x in range(3):
            if out.shape[1] == 1:
                out[x, 0, n] = value[x]
            else:
                for d in range(3):
                    out[x, d, n] = tangents[x, d]


@compute.kernel
def _axis_weights(q, nodes, pieces, first, begin, end):
    """Basis functions and derivatives at coordinates of one axis, shape (len(q), 2, 6), and first coefficients."""
    weights, starts, cell = np.empty((q.size, 2, _WIDTH)), np.empty(q.size, np.int64), begin
    for n in range(q.size):
        cell = _hunt(q[n], nodes, begin, end - 2, cell)
        _basis(q[n], nodes, pieces, cell, weights, n)
        starts[n] = first[cell]
    return weights, starts


@compute.kernel
def _combine(weights, first, parts, out):
    """Sum of `weights` times the lines first, first + 1, ... of `parts`."""
    out[:] = weights[0] * parts[first]
    for m in range(1, _WIDTH):
        w, part = weights[m], parts[first + m]
        for e in range(out.size):
            out[e] += w * part[e]


@compute.kernel
def _on_lattice(weights1, first1, weights2, first2, weights3, first3, coefficients, rows, out):
    """Contract one axis after the other: a plane for each i, a line for each j, a point for each k."""
    n1, n2, n3, _ = coefficients.shape
    planes, line = coefficients.reshape(n1, -1), 3 * n3
    level, slope = np.empty(n2 * line), np.empty(n2 * line)
    here, along1, along2 = np.empty(line), np.empty(line), np.empty(line)
    for i in range(weights1.shape[0]):
        _combine(weights1[i, 0], first1[i], planes, level)
        if rows == 3:
            _combine(weights1[i, 1], first1[i], planes, slope)
        for j in range(weights2.shape[0]):
            _combine(weights2[j, 0], first2[j], level.reshape(n2, line), here)
            if rows == 3:
                _combine(weights2[j, 0], first2[j], slope.reshape(n2, line), along1)
                _combine(weights2[j, 1], first2[j], level.reshape(n2, line), along2)
            for k in range(weights3.shape[0]):
                for x in range(3):
                    start = 3 * first3[k] + x
                    if rows == 1:
                        total = 0.0
                        for m in range(_WIDTH):
                            total += weights3[k, 0, m] * here[start + 3 * m]
                        out[x, 0, i, j, k] = total
                    else:
                        t1, t2, t3 = 0.0, 0.0, 0.0
                        for m in range(_WIDTH):
                            t1 += weights3[k, 0, m] * along1[start + 3 * m]
                            t2 += weights3[k, 0, m] * along2[start + 3 * m]
                            t3 += weights3[k, 1, m] * here[start + 3 * m]
                        out[x, 0, i, j, k], out[x, 1, i, j, k], out[x, 2, i, j, k] = t1, t2, t3
