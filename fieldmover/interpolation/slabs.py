"""Moves in slabs of the target along axis 1, for targets larger than memory."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from fieldmover.errors import FieldError, GridError
from fieldmover.forms.fields import FaceFlux, Three
from fieldmover.grids.grid import Grid
from fieldmover.grids.part import part_of
from fieldmover.interpolation.coverage import known_cells, known_faces
from fieldmover.interpolation.plan import FluxOnItsWay, FluxPlan, Order
from fieldmover.interpolation.plan_exact import exact_faces, quantum_for, sizes
from fieldmover.interpolation.plan_nodes import BRICK, brick_starts


def move_flux_in_slabs(
    flux: FaceFlux, target: Grid, order: Order = 3, rows: int = BRICK[0]
) -> Iterator[tuple[slice, FaceFlux]]:
    """Move magnetic flux to a grid of which only a slab is in memory at a time.

    Parameters
    ----------
    flux : FaceFlux
        Divergence-free to round-off; `project` makes it so.
    target : Grid
        Wholly within the source: what is filled outside depends on all of it.
    order : {1, 3, 5}
        As for `move_flux`.
    rows : int
        Cells of a slab along axis 1, rounded up to a multiple of 16.

    Returns
    -------
    iterator of (slice, FaceFlux)
        The cells of each slab along axis 1, and the flux on the target's part there, in order. Faces that two slabs
        share are in both. All have the bits that `move_flux` gives.

    Raises
    ------
    FieldError
        At the call: as `move_flux`; if the target leaves the source; at order "limited", which looks around.
    GridError
        If axis 1 is the ring of the target's poles, whose edges belong to all slabs.
    ChargeError
        As `move_flux`.

    Notes
    -----
    Everything is computed twice: the largest circulation has to be known before one can be rounded so that sums are
    exact, and a target that leaves the source is refused before the first slab is handed out.

    Examples
    --------
    >>> import fieldmover as fm
    >>> source = fm.cartesian_grid(*[np.linspace(-1, 1, 9)] * 3)
    >>> flux = fm.curl(fm.potential_from_function(source, lambda x, y, z: (-y / 2, x / 2, 0 * z)))
    >>> ball = fm.spherical_grid(np.linspace(0.1, 0.9, 41), np.linspace(1, 2, 9), np.linspace(0, 1, 9))
    >>> [(cells.start, cells.stop, part.f1.shape) for cells, part in move_flux_in_slabs(flux, ball)]
    [(0, 16, (17, 8, 8)), (16, 32, (17, 8, 8)), (32, 40, (9, 8, 8))]
    """
    if order == "limited":
        raise FieldError(
            "order: 'limited' looks around and cannot be moved in slabs, expected 1, 3 or 5 (or move_flux)"
        )
    if rows < 1:
        raise FieldError(f"rows: {rows}, expected at least 1")
    if 0 in target.ring_axis:
        raise GridError("axis 1 of the target is the ring of its poles, expected another axis to move it in slabs")
    way = FluxOnItsWay(FluxPlan(flux.grid, target, order), flux)
    slabs = _slabs(target, rows)
    largest, missing = np.zeros(3), 0
    for cells in slabs:
        edges, known, uniform = way.slab(_part(target, cells), cells)
        largest = np.maximum(largest, sizes(edges, uniform))
        missing += int((~known_cells(known_faces(known))).sum())
    if missing:
        raise FieldError(
            f"the target leaves the source: {missing} of its {np.prod(target.shape)} cells are not covered, expected "
            "none to move it in slabs (move_flux fills them)"
        )
    return _moved(way, target, slabs, quantum_for(*(float(x) for x in largest)))


def _moved(way: FluxOnItsWay, target: Grid, slabs: list[slice], quantum: float) -> Iterator[tuple[slice, FaceFlux]]:
    first: Three | None = None  # the edges of the first plane, which those of the last one equal along a seam
    for cells in slabs:
        grid = _part(target, cells)
        edges, _, uniform = way.slab(grid, cells)
        if target.periodic[0]:
            if first is None:
                first = (edges[0][:1], edges[1][:1].copy(), edges[2][:1].copy())
            if cells.stop == target.shape[0]:
                for axis in (1, 2):
                    edges[axis][-1:] = first[axis]
        yield cells, FaceFlux(grid, exact_faces(edges, uniform, quantum)[0])


def _slabs(target: Grid, rows: int) -> list[slice]:
    """Slabs that begin where bricks of nodes do."""
    n = target.shape[0]
    starts = brick_starts(n + 1, BRICK[0])[: -1 : -(-rows // BRICK[0])].tolist()
    return [slice(a, b) for a, b in zip(starts, [*starts[1:], n], strict=True)]


def _part(target: Grid, cells: slice) -> Grid:
    """The target's part on some cells along axis 1."""
    _, n2, n3 = target.shape
    return part_of(target, (cells, slice(0, n2), slice(0, n3)))
