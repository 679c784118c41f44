"""The gauge function that makes a potential smooth: d0^T W (a - d0 g) = 0 on the nodes.

Direct on Cartesian, cylindrical and spherical grids. Elsewhere conjugate gradients, preconditioned by the nearest
separable operator; where they stop only decides how close to smoothest the gauge is.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.forms.fields import Three
from fieldmover.forms.measures import edge_factors, edge_weights
from fieldmover.grids.grid import Grid, at, outer
from fieldmover.projection.conjugate import conjugate_gradients
from fieldmover.projection.nearest import nearest_factors
from fieldmover.projection.separable import for_nodes

Array = NDArray[np.float64]
Weight = Callable[[int, slice], Array]

_ROWS = 8  # planes per task
_TOLERANCE = 1e-8


def smoothing_gauge(grid: Grid, edges: Three) -> Array:
    """Node function g for which a - d0 g has the least weighted norm.

    Parameters
    ----------
    grid : Grid
    edges : tuple of three ndarrays
        Circulations a.

    Returns
    -------
    ndarray, shape (n1 + 1, n2 + 1, n3 + 1)
        One value at each pole node; the last along a seam is the first.
    """
    unique = tuple(slice(None, -1) if seam else slice(None) for seam in grid.periodic)
    g = np.empty(grid.node_shape())
    factors = edge_factors(grid)
    if factors is not None:
        rhs = _divergence(grid, edges, lambda axis, rows: _part(factors[axis], rows))
        g[unique] = for_nodes(factors, grid.periodic, grid.poles).solve(rhs)
    else:
        weights = edge_weights(grid)

        def weight(axis: int, rows: slice) -> Array:
            return weights[axis][rows]

        rhs = _divergence(grid, edges, weight)
        _gather_poles(grid, rhs)
        direct = for_nodes(nearest_factors(weights), grid.periodic, grid.poles)
        full = np.empty(grid.node_shape())

        def apply(s: Array, out: Array) -> float:
            full[unique] = s
            _close(grid, full)
            slopes = tuple(np.diff(full, axis=axis) for axis in range(3))
            out[...] = _divergence(grid, (slopes[0], slopes[1], slopes[2]), weight)
            _gather_poles(grid, out)
            return float(np.vdot(s, out))

        g[unique] = conjugate_gradients(apply, direct.solve, rhs, _TOLERANCE).p
    _close(grid, g)
    return g


def _part(factors: Three, rows: slice) -> Array:
    """Rows of the weights that are products of one number per axis."""
    return outer((factors[0][rows], factors[1], factors[2]))


def _close(grid: Grid, g: Array) -> None:
    """One value at each pole; the last along a seam from the first."""
    for axis, seam in enumerate(grid.periodic):
        if seam:
            g[at(axis, -1)] = g[at(axis, 0)]
    for axis, end, ring in _poles(grid):
        on_pole = np.moveaxis(g[at(axis, end)], ring - (axis < ring), 0)
        on_pole[:] = on_pole[0].copy()


def _gather_poles(grid: Grid, values: Array) -> None:
    """Give the nodes of each pole equal shares of their sum."""
    for axis, end, ring in _poles(grid):
        on_pole = np.moveaxis(values[at(axis, end)], ring - (axis < ring), 0)
        on_pole[:] = on_pole.mean(axis=0)


def _poles(grid: Grid) -> list[tuple[int, int, int]]:
    """(axis, node index, ring axis) of every pole."""
    rings = grid.ring_axis
    return [(axis, end, ring) for axis, ring in enumerate(rings) if ring is not None for end in grid.pole_ends(axis)]


def _divergence(grid: Grid, edges: Three, weight: Weight) -> Array:
    """d0^T W a at the nodes, those of a seam once."""
    n1, n2, n3 = grid.node_shape()
    out = np.empty((n1, n2, n3))

    def work(rows: slice) -> None:
        part = out[rows]
        part[...] = 0.0
        for axis in (1, 2):
            flow = weight(axis, rows) * edges[axis][rows]
            part[at(axis, slice(1, None))] += flow
            part[at(axis, slice(None, -1))] -= flow
            if grid.periodic[axis]:
                part[at(axis, 0)] += flow[at(axis, -1)]
        before, after = (
            slice(max(rows.start - 1, 0), rows.stop - 1),
            slice(rows.start, min(rows.stop, n1 - 1)),
        )
        part[before.start + 1 - rows.start :] += weight(0, before) * edges[0][before]
        part[: after.stop - rows.start] -= weight(0, after) * edges[0][after]

    compute.for_each(work, compute.slabs(n1, _ROWS))
    if grid.periodic[0]:
        out[0] += (weight(0, slice(n1 - 2, n1 - 1)) * edges[0][-1:])[0]
    return np.ascontiguousarray(out[tuple(slice(None, -1) if seam else slice(None) for seam in grid.periodic)])
