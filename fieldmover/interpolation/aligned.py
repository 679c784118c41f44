"""Moves between grids in the same coordinates: refinement, coarsening, restarts on other nodes.

Target edges then run along the source's coordinate lines, and the integral of the spline over one is a product of
one number per axis: exact, in three matrix products. A target whose nodes contain the source's keeps every coarse
flux; coarsening by whole factors adds fluxes up.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
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
        return source.map.function == target.map.function
    return source.map == target.map


def joins_cells(source: Grid, target: Grid) -> bool:
    """Whether cells of one grid are cells of the other joined: same map, all nodes of one are nodes of the other."""
    return same_coordinates(source, target) and all(
        np.isin(a, b).all() or np.isin(b, a).all() for a, b in zip(source.nodes, target.nodes, strict=True)
    )


class Aligned:
    """How a source's potentials are moved to a target in the same coordinates.

    Parameters
    ----------
    source, target : Grid
    """

    def __init__(self, source: Grid, target: Grid) -> None:
        self.source, self.target = source, target
        self.nodes = [_into_range(q, source, axis) for axis, q in enumerate(target.nodes)]
        self.reached = [_reached(q, source, axis) for axis, q in enumerate(self.nodes)]

    @property
    def nbytes(self) -> int:
        return sum(a.nbytes for a in (*self.nodes, *self.reached))

    def start(self, pot: EdgePotential, order: int) -> AlignedPart:
        """Fit the spline of a potential; circulations along the edges of any slab can then be asked for."""
        return AlignedPart(self, pot, order)


class AlignedPart:
    """One potential on its way."""

    def __init__(self, way: Aligned, pot: EdgePotential, order: int) -> None:
        self._way, source = way, way.source
        splines = grid_splines(source, order)
        self._at_nodes = [_values_at(spline, q) for spline, q in zip(splines, way.nodes, strict=True)]
        self._over_edges = [
            _integrals_over(spline, q, source, axis)
            for axis, (spline, q) in enumerate(zip(splines, way.nodes, strict=True))
        ]
        self._coefficients = [fit_form(source, splines, a, (d,)) for d, a in enumerate(pot.edges)]

    def edges(self, cells: slice) -> tuple[Three, tuple[Mask, Mask, Mask]]:
        """Circulations along the edges of a slab of cells along axis 1, and which of them lie in the source."""
        edges, known = [], []
        for d, coefficients in enumerate(self._coefficients):
            matrices = [self._over_edges[axis] if axis == d else self._at_nodes[axis] for axis in range(3)]
            here = [r[1:] & r[:-1] if axis == d else r for axis, r in enumerate(self._way.reached)]
            rows = slice(cells.start, cells.stop + (d > 0))
            values = np.empty((rows.stop - rows.start, matrices[1].shape[0], matrices[2].shape[0]))

            def work(row: int, matrices: list[Array] = matrices, c: Array = coefficients, out: Array = values) -> None:
                # one plane at a time: sums have the same bits whatever the slab
                taken = np.flatnonzero(matrices[0][row])
                band = slice(taken[0], taken[-1] + 1)
                plane = np.tensordot(matrices[0][row, band], c[band], axes=1)
                out[row - cells.start] = matrices[1] @ plane @ matrices[2].T

            compute.for_each(work, range(rows.start, rows.stop))
            mask = here[0][rows, None, None] & here[1][:, None] & here[2]
            edges.append(np.where(mask, values, 0.0))
            known.append(mask)
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
