"""Some cells of a grid as a grid of their own."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from fieldmover.grids.axes import Poles
from fieldmover.grids.grid import Grid

Part = tuple[slice, slice, slice]


def part_of(grid: Grid, part: Part) -> Grid:
    """Some cells of a grid.

    Parameters
    ----------
    grid : Grid
    part : tuple of three slices
        From cell to cell along each axis; across a seam from below 0 or to beyond the last.

    Returns
    -------
    Grid
        With the seams that still close, and the poles that are still at its ends.

    Examples
    --------
    >>> from fieldmover.grids.grid import cartesian_grid
    >>> part_of(cartesian_grid([0, 1, 3], [0, 1], [0, 1]), (slice(1, 2), slice(0, 1), slice(0, 1))).nodes[0]
    array([1., 3.])
    """
    q1, q2, q3 = (_nodes(grid, axis, cells) for axis, cells in enumerate(part))
    p1, p2, p3 = (poles_at(grid, axis, cells) for axis, cells in enumerate(part))
    s1, s2, s3 = (
        seam and cells.stop - cells.start == n for seam, cells, n in zip(grid.periodic, part, grid.shape, strict=True)
    )
    return replace(grid, nodes=(q1, q2, q3), periodic=(s1, s2, s3), poles=(p1, p2, p3))


def poles_at(grid: Grid, axis: int, cells: slice) -> Poles:
    """The poles at the ends of some cells of an axis."""
    ends = grid.pole_ends(axis)
    low, high = 0 in ends and cells.start == 0, grid.shape[axis] in ends and cells.stop == grid.shape[axis]
    return "both" if low and high else "low" if low else "high" if high else None


def _nodes(grid: Grid, axis: int, cells: slice) -> NDArray[np.float64]:
    nodes, n = grid.nodes[axis], grid.shape[axis]
    if not grid.periodic[axis] or cells.stop - cells.start == n:
        return nodes[cells.start : cells.stop + 1]
    turns, places = np.divmod(np.arange(cells.start, cells.stop + 1), n)
    return np.asarray(nodes[places] + turns * np.ptp(nodes))
