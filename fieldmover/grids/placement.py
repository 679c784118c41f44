"""Grids turned and moved in space.

A placed grid has the cells, areas, fluxes and circulations of the grid as its own code knows it; only where they are in
the common Cartesian frame differs. So a field is read and written on the grid itself, in the frame of its code, and
put into the common frame by giving the same numbers to the placed grid.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover.errors import GridError
from fieldmover.grids.grid import Grid
from fieldmover.grids.maps import Map, Triple

Array = NDArray[np.float64]

_ORTHONORMAL = 1e-9


@dataclass(frozen=True, eq=False)
class PlacedMap:
    """A map followed by a rotation and a translation: x = turn @ base(q) + origin."""

    base: Map
    origin: Array
    turn: Array

    @property
    def kind(self) -> str:
        return self.base.kind

    @property
    def names(self) -> tuple[str, str, str]:
        return self.base.names

    def to_cartesian(self, q1: Array, q2: Array, q3: Array) -> Triple:
        own = self.base.to_cartesian(q1, q2, q3)
        x, y, z = (
            sum(t * c for t, c in zip(row, own, strict=True)) + shift
            for row, shift in zip(self.turn, self.origin, strict=True)
        )
        return x, y, z

    def jacobian(self, q1: Array, q2: Array, q3: Array) -> Array:
        return turned(self.turn, self.base.jacobian(q1, q2, q3))


def placed(grid: Grid, origin: ArrayLike = (0.0, 0.0, 0.0), turn: ArrayLike | None = None) -> Grid:
    """A grid turned about its origin, then moved.

    Parameters
    ----------
    grid : Grid
        May be placed already; the placements follow one another.
    origin : array_like, shape (3,)
        Where the origin of the grid's own frame lies in the common frame.
    turn : array_like, shape (3, 3), optional
        Rotation matrix from the grid's own frame to the common one (`turn_about` makes it): its columns are the grid's
        axes in the common frame.

    Returns
    -------
    Grid
        Same kind, nodes and cells. Fluxes, circulations and contents are the same numbers on both grids.

    Raises
    ------
    GridError
        If the origin is not three finite numbers, or `turn` is not a rotation.

    Examples
    --------
    >>> from fieldmover import cartesian_grid
    >>> grid = placed(cartesian_grid([0, 1], [0, 1], [0, 1]), (5, 0, 0), turn_about((0, 0, 1), np.pi / 2))
    >>> grid.node_positions()[:, 1, 0, 0].round(12)
    array([5., 1., 0.])
    """
    shift = np.array(origin, dtype=np.float64)
    matrix = np.eye(3) if turn is None else np.array(turn, dtype=np.float64)
    if shift.shape != (3,) or not np.isfinite(shift).all():
        raise GridError(f"origin: {origin!r}, expected three finite numbers")
    if matrix.shape != (3, 3):
        raise GridError(f"turn: shape {matrix.shape}, expected a rotation matrix of shape (3, 3)")
    gap = float(np.abs(matrix @ matrix.T - np.eye(3)).max())
    if not gap < _ORTHONORMAL or np.linalg.det(matrix) < 0:
        raise GridError(
            f"turn: its columns differ from a right-handed orthonormal triple by {gap:.3g} (determinant "
            f"{np.linalg.det(matrix):.3g}), expected a rotation"
        )
    if isinstance(grid.map, PlacedMap):
        inner = grid.map
        return replace(grid, map=PlacedMap(inner.base, matrix @ inner.origin + shift, matrix @ inner.turn))
    return replace(grid, map=PlacedMap(grid.map, shift, matrix))


def unplaced(grid: Grid) -> Grid:
    """The grid in its own frame: what `placed` was given."""
    return replace(grid, map=grid.map.base) if isinstance(grid.map, PlacedMap) else grid


def placement(grid: Grid) -> tuple[Array, Array] | None:
    """Origin (3,) and rotation (3, 3) of a placed grid, None for any other."""
    return (grid.map.origin, grid.map.turn) if isinstance(grid.map, PlacedMap) else None


def turn_about(axis: ArrayLike, angle: float) -> Array:
    """Rotation matrix about an axis, right-handed (Rodrigues 1840).

    Parameters
    ----------
    axis : array_like, shape (3,)
        Of any length but 0.
    angle : float
        Radians.

    Raises
    ------
    GridError
        If the axis has no direction.

    Examples
    --------
    >>> turn_about((0, 0, 2), np.pi / 2).round(12) + 0.0
    array([[ 0., -1.,  0.],
           [ 1.,  0.,  0.],
           [ 0.,  0.,  1.]])
    """
    direction = np.array(axis, dtype=np.float64)
    length = float(np.linalg.norm(direction)) if direction.shape == (3,) else 0.0
    if not 0.0 < length < np.inf or not np.isfinite(angle):
        raise GridError(f"turn about {axis!r} by {angle!r}: expected an axis of three numbers, not all 0, and an angle")
    a, b, c = direction / length
    cross = np.array([[0.0, -c, b], [c, 0.0, -a], [-b, a, 0.0]])
    return np.asarray(np.eye(3) + np.sin(angle) * cross + (1.0 - np.cos(angle)) * cross @ cross)


def turned(turn: Array, vectors: Array) -> Array:
    """Cartesian components of vectors, shape (3, ...), after a rotation; its transpose turns them back."""
    return np.asarray(np.einsum("ij,j...->i...", turn, vectors))
