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
from fieldmover.grids.axes import SNAP
from fieldmover.grids.grid import Grid
from fieldmover.grids.kerr import KerrSchildMap
from fieldmover.grids.maps import WarpedMap
from fieldmover.grids.placement import placement, unplaced
from fieldmover.interpolation.locate import margins
from fieldmover.interpolation.splines import AxisSpline, fit_form, grid_splines

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

_GAUSS = np.polynomial.legendre.leggauss(3)  # exact on the pieces of all orders


def same_coordinates(source: Grid, target: Grid) -> bool:
    """Whether both grids have the same map."""
    where, there = placement(source), placement(target)
    if where is not None and there is not None:
        same_place = all(np.array_equal(a, b) for a, b in zip(where, there, strict=True))
        return same_place and same_coordinates(unplaced(source), unplaced(target))
    if isinstance(source.map, WarpedMap) and isinstance(target.map, WarpedMap):
        return source.map.function == target.map.function
    return source.map == target.map


def nodes_in(source: Grid, target: Grid) -> list[Array] | None:
    """Nodes of a target in the coordinates of a source with the same map, moved by whole turns.

    None if the maps differ, or if the target leaves a wedge at one end and comes back into it at the other.
    """
    if not same_coordinates(source, target):
        return None
    found = []
    for axis, (own, q) in enumerate(zip(source.nodes, target.nodes, strict=True)):
        first, last = own[0], own[-1]
        seam, azimuth = source.periodic[axis], axis == azimuth_of(source)
        if not (seam or azimuth):
            found.append(q)
            continue
        turn = last - first if seam else 2.0 * np.pi
        q = q - np.floor((q[0] - first) / turn + 1e-12) * turn
        low, high = (-np.inf, np.inf) if seam else (last - turn - SNAP, first + turn + SNAP)
        if q[-1] > high:
            q = q - turn
        if q[0] < low or q[-1] > high:
            return None
        found.append(q)
    return found


def azimuth_of(grid: Grid) -> int | None:
    """Which coordinate is an azimuth, after a turn of which points are the same."""
    known = {"cylindrical": 1, "spherical": 2}
    return 2 if isinstance(unplaced(grid).map, KerrSchildMap) else known.get(grid.kind)


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
        For which there are `nodes_in`.
    """

    def __init__(self, source: Grid, target: Grid) -> None:
        self.source, self.target = source, target
        nodes = nodes_in(source, target)
        assert nodes is not None
        self.nodes = nodes
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
        axes = list(zip(splines, way.nodes, source.periodic, strict=True))
        self._at_nodes = [_values_at(spline, q, seam) for spline, q, seam in axes]
        self._over_edges = [_integrals_over(spline, q, seam) for spline, q, seam in axes]
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


def _reached(q: Array, source: Grid, axis: int) -> Mask:
    low, high = margins(source.nodes[axis])
    return np.full(q.shape, True) if source.periodic[axis] else (q >= low) & (q <= high)


def _values_at(spline: AxisSpline, q: Array, seam: bool) -> Array:
    """Matrix from the coefficients of node values to values at points."""
    return _matrix(spline.nodes, spline.value_pieces, spline.value_first, _on_nodes(spline, q, seam))


def _integrals_over(spline: AxisSpline, q: Array, seam: bool) -> Array:
    """Matrix from the coefficients of cell integrals to integrals between neighbouring points."""
    cuts = spline.nodes
    if seam:
        span = np.ptp(cuts)
        turns = np.arange(np.floor((q[-1] - cuts[0]) / span) + 1.0)
        cuts = (cuts[:-1] + turns[:, None] * span).ravel()
    cuts = cuts[(cuts > q[0]) & (cuts < q[-1])]
    ends = np.union1d(q, cuts)
    half, middle = 0.5 * np.diff(ends), 0.5 * (ends[1:] + ends[:-1])
    points = [
        weight
        * half[:, None]
        * _matrix(
            spline.nodes, spline.cell_pieces, spline.cell_first, _on_nodes(spline, middle + abscissa * half, seam)
        )
        for abscissa, weight in zip(*_GAUSS, strict=True)
    ]
    return np.add.reduceat(np.sum(points, axis=0), np.searchsorted(ends, q[:-1]), axis=0)


def _on_nodes(spline: AxisSpline, q: Array, seam: bool) -> Array:
    """Points brought between the ends of an axis: by whole turns, or to the wall they are beyond."""
    first, last = spline.nodes[0], spline.nodes[-1]
    if not seam:
        return np.clip(q, first, last)
    return np.where(q > last, q - np.floor((q - first) / (last - first)) * (last - first), q)


def _matrix(nodes: Array, pieces: Array, first: NDArray[np.int64], q: Array) -> Array:
    cell = np.clip(np.searchsorted(nodes, q, side="right") - 1, 0, nodes.size - 2)
    s = (q - nodes[cell]) / np.diff(nodes)[cell]
    basis = (pieces[cell] * s[:, None, None] ** np.arange(pieces.shape[2])).sum(axis=2)
    width = int(first.max()) + pieces.shape[1]
    matrix = np.zeros((q.size, width))
    for m in range(pieces.shape[1]):
        matrix[np.arange(q.size), first[cell] + m] += basis[:, m]
    return matrix
