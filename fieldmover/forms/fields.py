"""The three kinds of numbers a field is made of, and the rules at seams and poles."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover.errors import FieldError
from fieldmover.grids.grid import Grid, at

Array = NDArray[np.float64]
Three = tuple[Array, Array, Array]


def _checked(grid: Grid, values: tuple[ArrayLike, ArrayLike, ArrayLike], shapes: list, what: str) -> Three:
    arrays = tuple(np.ascontiguousarray(v, dtype=np.float64) for v in values)
    if len(arrays) != 3:
        raise FieldError(f"{what}: {len(arrays)} arrays, expected 3")
    for axis, (array, shape) in enumerate(zip(arrays, shapes, strict=True)):
        if array.shape != shape:
            raise FieldError(
                f"{what} of axis {axis + 1}: shape {array.shape}, expected {shape} on a grid of {grid.shape} cells"
            )
    return arrays[0], arrays[1], arrays[2]


def _check_seams(grid: Grid, arrays: Three, what: str) -> None:
    for axis, seam in enumerate(grid.periodic):
        for d, array in enumerate(arrays):
            if not seam or array.shape[axis] == grid.shape[axis]:
                continue
            if not np.array_equal(array[at(axis, 0)], array[at(axis, -1)], equal_nan=True):
                gap = float(np.abs(array[at(axis, 0)] - array[at(axis, -1)]).max())
                raise FieldError(
                    f"{what} of axis {d + 1}: first and last along the seam of axis {axis + 1} differ by {gap:.3g}, "
                    "expected equal bits"
                )


@dataclass(frozen=True, eq=False)
class FaceFlux:
    """Magnetic flux through every face of a grid (a 2-form).

    Parameters
    ----------
    grid : Grid
    faces : tuple of three arrays
        Fluxes through the faces normal to axes 1, 2, 3, unit B L^2, positive along the axis; shapes
        (n1 + 1, n2, n3), (n1, n2 + 1, n3), (n1, n2, n3 + 1). First and last agree bit for bit along a seam.

    Raises
    ------
    FieldError
        If a shape does not fit the grid, or a seam does not close.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> grid = fm.cartesian_grid([0, 1], [0, 1], [0, 1])
    >>> fm.FaceFlux(grid, (np.ones((2, 1, 1)), np.zeros((1, 2, 1)), np.zeros((1, 1, 2))))
    <face fluxes on <cartesian grid: x 0..1 (1 cells); y 0..1 (1 cells); z 0..1 (1 cells)>>
    """

    grid: Grid
    faces: Three

    def __post_init__(self) -> None:
        shapes = [self.grid.face_shape(d) for d in range(3)]
        object.__setattr__(self, "faces", _checked(self.grid, self.faces, shapes, "face fluxes"))
        _check_seams(self.grid, self.faces, "face fluxes")

    @property
    def f1(self) -> Array:
        return self.faces[0]

    @property
    def f2(self) -> Array:
        return self.faces[1]

    @property
    def f3(self) -> Array:
        return self.faces[2]

    def __repr__(self) -> str:
        return f"<face fluxes on {self.grid!r}>"


@dataclass(frozen=True, eq=False)
class EdgePotential:
    """Circulation of the vector potential along every edge of a grid (a 1-form).

    Parameters
    ----------
    grid : Grid
    edges : tuple of three arrays
        Integrals of A.dl along the edges of axes 1, 2, 3, unit B L^2; shapes (n1, n2 + 1, n3 + 1),
        (n1 + 1, n2, n3 + 1), (n1 + 1, n2 + 1, n3). First and last agree bit for bit along a seam.

    Raises
    ------
    FieldError
        If a shape does not fit the grid, or a seam does not close.
    """

    grid: Grid
    edges: Three

    def __post_init__(self) -> None:
        shapes = [self.grid.edge_shape(d) for d in range(3)]
        object.__setattr__(self, "edges", _checked(self.grid, self.edges, shapes, "edge potential"))
        _check_seams(self.grid, self.edges, "edge potential")

    @property
    def a1(self) -> Array:
        return self.edges[0]

    @property
    def a2(self) -> Array:
        return self.edges[1]

    @property
    def a3(self) -> Array:
        return self.edges[2]

    def __repr__(self) -> str:
        return f"<edge potential on {self.grid!r}>"


@dataclass(frozen=True, eq=False)
class CellContent:
    """Content of every cell, mass say (a 3-form).

    Parameters
    ----------
    grid : Grid
    cells : array, shape (n1, n2, n3)
        Unit rho L^3.

    Raises
    ------
    FieldError
        If the shape does not fit the grid.
    """

    grid: Grid
    cells: Array

    def __post_init__(self) -> None:
        cells = np.ascontiguousarray(self.cells, dtype=np.float64)
        if cells.shape != self.grid.shape:
            raise FieldError(f"cell contents: shape {cells.shape}, expected {self.grid.shape}")
        object.__setattr__(self, "cells", cells)

    def __repr__(self) -> str:
        return f"<cell contents on {self.grid!r}>"


def close_edges(grid: Grid, edges: Three) -> None:
    """Make edge values obey seams and poles, in place.

    Ring edges at a pole become 0; the edges of the third axis that coincide on it take the first one's value;
    the last edge along a seam takes the first one's value.
    """
    for axis, ring in enumerate(grid.ring_axis):
        if ring is None:
            continue
        other = 3 - axis - ring
        for end in grid.pole_ends(axis):
            edges[ring][at(axis, end)] = 0.0
            on_pole = np.moveaxis(edges[other][at(axis, end)], ring - (axis < ring), 0)
            on_pole[:] = on_pole[0].copy()
    _close_seams(grid, edges)


def close_faces(grid: Grid, faces: Three) -> None:
    """Make face values obey seams and poles, in place: collapsed faces 0, last along a seam equal to first."""
    for axis in range(3):
        for end in grid.pole_ends(axis):
            faces[axis][at(axis, end)] = 0.0
    _close_seams(grid, faces)


def _close_seams(grid: Grid, arrays: Three) -> None:
    for axis, seam in enumerate(grid.periodic):
        for array in arrays:
            if seam and array.shape[axis] == grid.shape[axis] + 1:
                array[at(axis, -1)] = array[at(axis, 0)]
