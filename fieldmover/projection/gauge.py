"""The gauge function that makes a potential smooth: d0^T W (a - d0 g) = 0 on the nodes.

Solved directly, by separation of variables. Grids without closed form take the weights W of a plain one with the same
poles and seams: what is smooth there is smooth here, since the map from one to the other is.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.forms.fields import Three
from fieldmover.forms.measures import Factors, edge_factors
from fieldmover.grids.grid import Grid, at, cartesian_grid, spherical_grid
from fieldmover.projection.separable import for_nodes

Array = NDArray[np.float64]

_ROWS = 8  # planes per task
_SAMPLES = 9  # lines per axis that tell how long another is
_WIDEST = 1.8  # of the mean radius: largest difference between the radii of the plain sphere


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
    factors = edge_factors(grid) or _plain_factors(grid)
    once = _divergence(grid, edges, factors)
    for_nodes(factors, grid.periodic, grid.poles).solve(once, once)
    if not any(grid.periodic):
        _close(grid, once)
        return once
    g = np.empty(grid.node_shape())
    inside = g[unique]
    compute.for_each(lambda rows: np.copyto(inside[rows], once[rows]), compute.slabs(once.shape[0], _ROWS))
    _close(grid, g)
    return g


def _plain_factors(grid: Grid) -> Factors:
    """Edge weights of a box, or with poles of a shell, of about the size of the grid.

    Its coordinates are smooth functions of the grid's: mean distances, or angles with poles in proportion.
    """
    away = [_mean_distances(grid, axis) for axis in range(3)]
    order = (0, 1, 2)
    plain = cartesian_grid(away[0], away[1], away[2], grid.periodic)
    for axis, ring in enumerate(grid.ring_axis):
        if ring is None:
            continue
        order = (3 - axis - ring, axis, ring)
        first, last = {"low": (0.0, 0.5), "high": (0.5, 1.0)}.get(grid.poles[axis] or "", (0.0, 1.0))
        part, round_it = ((q - q[0]) / np.ptp(q) for q in (grid.nodes[axis], grid.nodes[ring]))
        radius = away[axis][-1] / (np.pi * (last - first))
        depth = away[order[0]] * min(1.0, _WIDEST * radius / away[order[0]][-1])
        turn = 2.0 * np.pi if grid.periodic[ring] else min(6.0, 2.0 * away[ring][-1] / radius)
        polar = np.pi * (first + (last - first) * part)
        plain = spherical_grid(radius + depth - 0.5 * depth[-1], polar, turn * round_it)
    weights = edge_factors(plain)
    assert weights is not None  # closed forms
    place = np.argsort(order)
    one, two, three = ((w[place[0]], w[place[1]], w[place[2]]) for w in (weights[place[d]] for d in range(3)))
    return one, two, three


def _mean_distances(grid: Grid, axis: int) -> Array:
    """Distance of each node of an axis from the first along lines of that axis, mean over some of them."""
    q = [
        nodes if d == axis else nodes[np.unique(np.linspace(0, nodes.size - 1, _SAMPLES).round().astype(int))]
        for d, nodes in enumerate(grid.nodes)
    ]
    x = np.stack(grid.map.to_cartesian(q[0][:, None, None], q[1][None, :, None], q[2][None, None, :]))
    steps = np.sqrt((np.diff(x, axis=axis + 1) ** 2).sum(axis=0)).mean(axis=tuple(d for d in range(3) if d != axis))
    return np.concatenate([[0.0], np.cumsum(steps)])


def _close(grid: Grid, g: Array) -> None:
    """One value at each pole; the last along a seam from the first."""
    for axis, seam in enumerate(grid.periodic):
        if seam:
            g[at(axis, -1)] = g[at(axis, 0)]
    for axis, end, ring in _poles(grid):
        on_pole = np.moveaxis(g[at(axis, end)], ring - (axis < ring), 0)
        on_pole[:] = on_pole[0].copy()


def _poles(grid: Grid) -> list[tuple[int, int, int]]:
    """(axis, node index, ring axis) of every pole."""
    rings = grid.ring_axis
    return [(axis, end, ring) for axis, ring in enumerate(rings) if ring is not None for end in grid.pole_ends(axis)]


def _divergence(grid: Grid, edges: Three, factors: Factors) -> Array:
    """d0^T W a at the nodes, those of a seam once."""
    out = np.empty([n - seam for n, seam in zip(grid.node_shape(), grid.periodic, strict=True)])
    weights = [tuple(np.ascontiguousarray(f) for f in products) for products in factors]
    seams = np.array(grid.periodic)
    compute.for_each(
        lambda rows: _balance_nodes(*edges, *weights, seams, rows.start, rows.stop, out),
        compute.slabs(out.shape[0], _ROWS),
    )
    return out


@compute.kernel
def _balance_nodes(a1, a2, a3, w1, w2, w3, seams, start, stop, out):  # type: ignore[no-untyped-def]
    """What flows into each node less what flows out of it, along each axis in turn."""
    _, m2, m3 = out.shape
    n1, n2, n3 = a1.shape[0], a2.shape[1], a3.shape[2]
    for i in range(start, stop):
        for j in range(m2):
            row = out[i, j]
            row[:] = 0.0
            if j > 0 or seams[1]:
                _add(row, a2[i, (j - 1) % n2], w2[0][i] * w2[1][(j - 1) % n2], w2[2])
            if j < n2:
                _add(row, a2[i, j], -w2[0][i] * w2[1][j], w2[2])
            along, w, factor = a3[i, j], w3[2], w3[0][i] * w3[1][j]
            for k in range(1, m3):
                row[k] += factor * w[k - 1] * along[k - 1]
            for k in range(min(m3, n3)):
                row[k] -= factor * w[k] * along[k]
            if seams[2]:
                row[0] += factor * w[n3 - 1] * along[n3 - 1]
            if i > 0 or seams[0]:
                _add(row, a1[(i - 1) % n1, j], w1[0][(i - 1) % n1] * w1[1][j], w1[2])
            if i < n1:
                _add(row, a1[i, j], -w1[0][i] * w1[1][j], w1[2])


@compute.kernel
def _add(row, a, factor, weight):  # type: ignore[no-untyped-def]
    for k in range(row.size):
        row[k] += factor * weight[k] * a[k]
