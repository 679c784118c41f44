"""Integrals along grid lines from values at nodes only.

The rate of a potential along a line of the target is smooth in the target's own coordinate, wherever the line
runs in the source, across its axis too. So the integral over an edge is that of the polynomial through the six
nodes nearest to it: each node is located and evaluated once for the three edges that meet there, where Gauss points
would cost two or three of each per edge. The error is of order 7 in the edge (191/60480 of the sixth derivative on
even nodes). Where the polynomial through the inner four nodes says otherwise, the rate is not resolved on the
target's nodes, and the edge is left to points of its own.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute

Array = NDArray[np.float64]

_STENCIL, _INNER = 6, 4
_RESOLVED = 1e-4  # largest difference between the two polynomials' integrals, over range of the rate x edge
_ROWS = 4


def edge_weights_of(nodes: Array, periodic: bool, size: int = _STENCIL) -> tuple[NDArray[np.int64], Array]:
    """Weights of the nodes in the integral over each edge of a line.

    Parameters
    ----------
    nodes : ndarray, shape (n + 1,)
    periodic : bool
        Stencils may reach across the seam.
    size : int
        Nodes in a stencil, at most n + 1.

    Returns
    -------
    places : int ndarray, shape (n, size)
        Nodes of each edge's stencil.
    weights : ndarray, shape (n, size)

    Examples
    --------
    >>> places, weights = edge_weights_of(np.arange(8.0), False)
    >>> (1440 * weights[3]).round(9)
    array([ 11., -93., 802., 802., -93.,  11.])
    """
    n = nodes.size - 1
    first = np.arange(n) - (size - 2) // 2
    if not periodic:
        first = np.clip(first, 0, n + 1 - size)
    offsets = first[:, None] + np.arange(size)
    turns, places = np.divmod(offsets, n) if periodic else (np.zeros_like(offsets), offsets)
    step = np.diff(nodes)
    # positions in units of the edge, from its start; moments of 1, s, s^2, ... over [0, 1]
    s = (nodes[places] + turns * (nodes[-1] - nodes[0]) - nodes[:-1, None]) / step[:, None]
    powers = np.arange(size)
    vandermonde = s[:, None, :] ** powers[None, :, None]
    moments = np.broadcast_to(1.0 / (powers + 1), (n, size))
    return places.astype(np.int64), step[:, None] * np.linalg.solve(vandermonde, moments[:, :, None])[:, :, 0]


@dataclass(frozen=True, eq=False)
class LineRule:
    """What the integrals over the edges of one axis take of the nodes.

    Attributes
    ----------
    places : int ndarray, shape (n, 6)
        Nodes of each edge's stencil; none on axes of fewer than five cells.
    weights : ndarray, shape (n, 6)
    doubts : ndarray, shape (n, 6)
        Their difference from the weights of the inner four nodes.
    steps : ndarray, shape (n,)
        Lengths of the edges.
    """

    places: NDArray[np.int64]
    weights: Array
    doubts: Array
    steps: Array

    @classmethod
    def of(cls, nodes: Array, periodic: bool) -> LineRule:
        """The rule of an axis."""
        if nodes.size < _STENCIL:
            none = np.empty((nodes.size - 1, 0))
            return cls(none.astype(np.int64), none, none, np.diff(nodes))
        places, weights = edge_weights_of(nodes, periodic)
        inner_places, inner_weights = edge_weights_of(nodes, periodic, _INNER)
        doubts = weights.copy()
        for m in range(_INNER):
            row, column = np.nonzero(places == inner_places[:, m : m + 1])
            doubts[row, column] -= inner_weights[row, m]
        return cls(places, weights, doubts, np.diff(nodes))

    def part(self, edges: slice, position: Callable[[NDArray[np.int64]], NDArray[np.int64]]) -> LineRule:
        """The rule of some edges, for nodes that stand elsewhere."""
        return LineRule(position(self.places[edges]), self.weights[edges], self.doubts[edges], self.steps[edges])


def integrate_lines(rates: Array, axis: int, rule: LineRule, floor: float, out: Array) -> None:
    """Integrals over the edges along one axis of rates given at the nodes.

    Parameters
    ----------
    rates : ndarray, shape (m1, m2, m3)
        Per unit of the coordinate along `axis`; NaN where not known.
    axis : int
    rule : LineRule
        Of that axis.
    floor : float
        Integrals below it are round-off and need not be resolved.
    out : ndarray
        As long as the rule along `axis`, otherwise as `rates`. NaN where the stencil holds one, where the rate is not
        resolved, and everywhere on axes of fewer than five cells.
    """
    if rule.places.shape[1] == 0:
        out[...] = np.nan
        return
    tables = (rule.places, rule.weights, rule.doubts, rule.steps, floor)
    if axis == 0:  # planes of edges are independent
        compute.for_each(
            lambda part: _across_planes(rates, *tables, part.start, part.stop, out), compute.slabs(out.shape[0], _ROWS)
        )
    else:
        kernel = _across_rows if axis == 1 else _along_rows
        compute.for_each(lambda part: kernel(rates[part], *tables, out[part]), compute.slabs(out.shape[0], _ROWS))


@compute.kernel
def _integral(v0, v1, v2, v3, v4, v5, weights, doubts, step, floor):
    """Weighted sum, or NaN where the sum of doubts is too large beside the range of the values."""
    total = weights[0] * v0 + weights[1] * v1 + weights[2] * v2 + weights[3] * v3 + weights[4] * v4 + weights[5] * v5
    doubt = doubts[0] * v0 + doubts[1] * v1 + doubts[2] * v2 + doubts[3] * v3 + doubts[4] * v4 + doubts[5] * v5
    low, high = (
        _less(_less(_less(v0, v1), _less(v2, v3)), _less(v4, v5)),
        _more(_more(_more(v0, v1), _more(v2, v3)), _more(v4, v5)),
    )
    allowed = step * _RESOLVED * (high - low) + floor
    return total if abs(doubt) <= allowed else np.nan


@compute.kernel
def _less(a, b):
    return a if a < b else b


@compute.kernel
def _more(a, b):
    return a if a > b else b


@compute.kernel
def _row(r0, r1, r2, r3, r4, r5, weights, doubts, step, floor, out):
    for k in range(out.size):
        out[k] = _integral(r0[k], r1[k], r2[k], r3[k], r4[k], r5[k], weights, doubts, step, floor)


@compute.kernel
def _across_planes(rates, places, weights, doubts, steps, floor, start, stop, out):
    for i in range(start, stop):
        p, w, d = places[i], weights[i], doubts[i]
        for j in range(out.shape[1]):
            _row(
                rates[p[0], j],
                rates[p[1], j],
                rates[p[2], j],
                rates[p[3], j],
                rates[p[4], j],
                rates[p[5], j],
                w,
                d,
                steps[i],
                floor,
                out[i, j],
            )


@compute.kernel
def _across_rows(rates, places, weights, doubts, steps, floor, out):
    for i in range(out.shape[0]):
        r = rates[i]
        for j in range(out.shape[1]):
            p, w, d = places[j], weights[j], doubts[j]
            _row(r[p[0]], r[p[1]], r[p[2]], r[p[3]], r[p[4]], r[p[5]], w, d, steps[j], floor, out[i, j])


@compute.kernel
def _along_rows(rates, places, weights, doubts, steps, floor, out):
    for i in range(out.shape[0]):
        for j in range(out.shape[1]):
            r = rates[i, j]
            for k in range(out.shape[2]):
                p = places[k]
                out[i, j, k] = _integral(
                    r[p[0]], r[p[1]], r[p[2]], r[p[3]], r[p[4]], r[p[5]], weights[k], doubts[k], steps[k], floor
                )
