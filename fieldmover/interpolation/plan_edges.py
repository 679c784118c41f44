"""Circulations along single edges, by points of their own.

For edges on which the rate at the nodes does not resolve the potential, and for all at order 1, whose form jumps from
cell to cell.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from fieldmover.grids.grid import Grid
from fieldmover.interpolation.evaluate import PotentialSpline
from fieldmover.interpolation.locate import Locator, inside

Array = NDArray[np.float64]
Index = NDArray[np.int64]

_MOST_PIECES = 16


def cells_allowed(source: Grid) -> Array:
    """How many cells of the source an edge may span before it is cut in pieces.

    Along the ring of a pole cells are narrower than the field varies, so more of them.
    """
    return np.array([8.0 if axis in source.ring_axis else 2.0 for axis in range(3)])


def single_edges(
    spline: PotentialSpline, locator: Locator, allowed: Array, target: Grid, axis: int, places: Index
) -> Array:
    """Circulations along the edges of a target at `places`, shape (N, 3), in as many pieces as each needs.

    NaN where an edge leaves the source.
    """
    start = [nodes[place] for nodes, place in zip(target.nodes, places.T, strict=True)]
    edges = _Edges(target, axis, start, target.nodes[axis][places[:, axis] + 1] - start[axis])
    integrate = _by_lines if spline.order == 1 else _by_points
    value, pieces = integrate(spline, locator, allowed, edges, 1)
    for count in np.unique(pieces[pieces > 1]):
        group = np.flatnonzero(pieces == count)
        value[group], _ = integrate(spline, locator, allowed, edges.some(group), int(count))
    return value


@dataclass(frozen=True, eq=False)
class _Edges:
    """Edges along one axis: where each starts in the target's coordinates, and its length there."""

    target: Grid
    axis: int
    start: list[Array]
    step: Array

    def some(self, group: NDArray[np.int64]) -> _Edges:
        return replace(self, start=[s[group] for s in self.start], step=self.step[group])

    def at_parts(self, where: Array) -> tuple[Array, Array]:
        """Positions at the parts `where` of each edge, tangents per edge: shape (3, edges, len(where))."""
        q = [np.repeat(s[:, None], where.size, axis=1) for s in self.start]
        q[self.axis] = q[self.axis] + self.step[:, None] * where
        position = np.stack(self.target.map.to_cartesian(*q))
        return position, self.target.map.jacobian(*q)[:, self.axis] * self.step[:, None]


def _by_points(
    spline: PotentialSpline, locator: Locator, allowed: Array, edges: _Edges, pieces: int
) -> tuple[Array, Index]:
    """Three Gauss points in each piece of each edge; how many pieces it needs."""
    abscissae, weights = np.polynomial.legendre.leggauss(3)
    where = (np.arange(pieces)[:, None] + 0.5 * (1.0 + abscissae)).ravel() / pieces
    position, tangent = edges.at_parts(where)
    q, dq = locator.pull_back(position.reshape(3, -1), tangent.reshape(3, 1, -1))
    locator.close(q)
    q[:, ~inside(spline.grid, q)] = np.nan
    rates = (spline.covectors(q) * dq[:, 0]).sum(axis=0).reshape(-1, where.size)
    needed = _pieces(spline.grid, allowed, q.reshape(3, -1, where.size), where[-1] - where[0])
    return np.asarray((rates * np.tile(0.5 * weights / pieces, pieces)).sum(axis=1)), needed


def _by_lines(
    spline: PotentialSpline, locator: Locator, allowed: Array, edges: _Edges, pieces: int
) -> tuple[Array, Index]:
    """Two lines straight in the source's coordinates for each piece of each edge; how many pieces it needs."""
    where = np.linspace(0.0, 1.0, 2 * pieces + 1)
    position, _ = edges.at_parts(where)
    q = locator.coordinates(position.reshape(3, -1))
    locator.close(q)
    q[:, ~inside(spline.grid, q)] = np.nan
    q = q.reshape(3, -1, where.size)
    begin, end = q[:, :, :-1].reshape(3, -1), q[:, :, 1:].reshape(3, -1)
    for d, nodes in enumerate(spline.grid.nodes):
        if spline.grid.periodic[d]:  # the short way round
            turn = np.ptp(nodes)
            end[d] += turn * np.round((begin[d] - end[d]) / turn)
    sums = spline.straight(begin, end).reshape(-1, 2 * pieces).sum(axis=1)
    return np.asarray(sums), _pieces(spline.grid, allowed, q, 1.0)


def _pieces(source: Grid, most_cells: Array, q: Array, part: float) -> Index:
    """How often to cut each edge, from the coordinates q, shape (3, edges, points), of points on a part of it."""
    most = np.ones(q.shape[1])
    for d, (nodes, allowed) in enumerate(zip(source.nodes, most_cells, strict=True)):
        change = np.abs(np.diff(q[d], axis=1))
        if source.periodic[d]:
            change = np.minimum(change, np.abs(nodes[-1] - nodes[0] - change))
        cell = np.clip(np.searchsorted(nodes, q[d, :, q.shape[2] // 2]) - 1, 0, nodes.size - 2)
        spanned = change.sum(axis=1) / (part * np.diff(nodes)[cell])
        most = np.fmax(most, spanned / allowed)
    return np.asarray(2 ** np.ceil(np.log2(np.minimum(most, _MOST_PIECES))), dtype=np.int64)
