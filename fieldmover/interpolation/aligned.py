"""Moves between grids in the same coordinates: refinement, coarsening, restarts on other nodes.

Target edges then run along the source's coordinate lines, and the integral of the spline over one is a product of
one number per axis: exact, in three matrix products. A target whose nodes contain the source's keeps every coarse
flux; coarsening by whole factors adds fluxes up.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from fieldmover.forms.fields import EdgePotential, Three
from fieldmover.grids.grid import Grid
from fieldmover.grids.maps import WarpedMap
from fieldmover.interpolation.locate import margins
from fieldmover.interpolation.splines import AxisSpline, fit_form, grid_splines

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

_GAUSS = np.polynomial.legendre.leggauss(3)  # exact on the pieces of all orders


def same_coordinates(source: Grid, target: Grid) -> bool:
    """Whether both grids have the same map."""
    if isinstance(source.map, WarpedMap) and isinstance(target.map, WarpedMap):
        return source.map.function is target.map.function
    return source.map == target.map


def move_aligned(pot: EdgePotential, target: Grid, order: int) -> tuple[Three, tuple[Mask, Mask, Mask]]:
    """Circulations along the target's edges and which of them lie in the source; arguments as `move_potential`."""
    source, splines = pot.grid, grid_splines(pot.grid, order)
    nodes = [_into_range(q, source, axis) for axis, q in enumerate(target.nodes)]
    at_nodes = [_values_at(spline, q) for spline, q in zip(splines, nodes, strict=True)]
    over_edges = [
        _integrals_over(spline, q, source, axis) for axis, (spline, q) in enumerate(zip(splines, nodes, strict=True))
    ]
    reached = [_reached(q, source, axis) for axis, q in enumerate(nodes)]
    edges, known = [], []
    for d, a in enumerate(pot.edges):
        values = fit_form(source, splines, a, (d,))
        mask = np.ones((1, 1, 1), dtype=bool)
        for axis in range(3):
            matrix = over_edges[axis] if axis == d else at_nodes[axis]
            values = np.moveaxis(np.tensordot(matrix, values, axes=(1, axis)), 0, axis)
            here = reached[axis][1:] & reached[axis][:-1] if axis == d else reached[axis]
            mask = mask & here.reshape([-1 if e == axis else 1 for e in range(3)])
        edges.append(np.where(mask, values, 0.0))
        known.append(np.broadcast_to(mask, values.shape).copy())
    return (edges[0], edges[1], edges[2]), (known[0], known[1], known[2])


def _into_range(q: Array, source: Grid, axis: int) -> Array:
    """Nodes moved by whole turns so that the first lies in the source's range."""
    if not source.periodic[axis]:
        return q
    first, last = source.nodes[axis][0], source.nodes[axis][-1]
    return np.asarray(q - np.floor((q[0] - first) / (last - first) + 1e-12) * (last - first))


def _reached(q: Array, source: Grid, axis: int) -> Mask:
    low, high = margins(source.nodes[axis])
    return np.full(q.shape, True) if source.periodic[axis] else (q >= low) & (q <= high)


def _values_at(spline: AxisSpline, q: Array) -> Array:
    """Matrix from the coefficients of node values to values at points."""
    return _matrix(spline.nodes, spline.value_pieces, spline.value_first, q)


def _integrals_over(spline: AxisSpline, q: Array, source: Grid, axis: int) -> Array:
    """Matrix from the coefficients of cell integrals to integrals between neighbouring points."""
    cuts = spline.nodes[1:-1] if not source.periodic[axis] else spline.nodes[:-1]
    if source.periodic[axis]:
        cuts = np.concatenate([cuts, cuts + np.ptp(spline.nodes)])
    cuts = cuts[(cuts > q[0]) & (cuts < q[-1])]
    ends = np.union1d(q, cuts)
    half, middle = 0.5 * np.diff(ends), 0.5 * (ends[1:] + ends[:-1])
    points = [
        weight * half[:, None] * _matrix(spline.nodes, spline.cell_pieces, spline.cell_first, middle + abscissa * half)
        for abscissa, weight in zip(*_GAUSS, strict=True)
    ]
    return np.add.reduceat(np.sum(points, axis=0), np.searchsorted(ends, q[:-1]), axis=0)


def _matrix(nodes: Array, pieces: Array, first: NDArray[np.int64], q: Array) -> Array:
    if q.max() > nodes[-1] or q.min() < nodes[0]:  # beyond a seam by whole turns, beyond walls by round-off
        span = np.ptp(nodes)
        q = np.where(q > nodes[-1], np.where(q > nodes[-1] + 1e-9 * span, q - span, nodes[-1]), q)
    cell = np.clip(np.searchsorted(nodes, q, side="right") - 1, 0, nodes.size - 2)
    s = (q - nodes[cell]) / np.diff(nodes)[cell]
    basis = (pieces[cell] * s[:, None, None] ** np.arange(pieces.shape[2])).sum(axis=2)
    width = int(first.max()) + pieces.shape[1]
    matrix = np.zeros((q.size, width))
    for m in range(pieces.shape[1]):
        matrix[np.arange(q.size), first[cell] + m] += basis[:, m]
    return matrix
