"""Cells in a part of space: a box, a shell, or wherever a formula holds."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover.diagnostics.cells import Mask
from fieldmover.errors import GridError
from fieldmover.expressions import Expression
from fieldmover.grids.grid import Grid

Array = NDArray[np.float64]

PLACES = ("x", "y", "z", "r", "R", "theta", "phi")
"""Names of the position of a cell centre in formulas: Cartesian; distances from the origin and the z axis; angles."""


def box_cells(grid: Grid, low: ArrayLike, high: ArrayLike) -> Mask:
    """Cells whose centre lies in the box between two Cartesian corners.

    Raises
    ------
    GridError
        If there are none.

    Examples
    --------
    >>> import fieldmover as fm
    >>> box_cells(fm.cartesian_grid([0, 1, 2], [0, 1], [0, 1]), (0, 0, 0), (1, 1, 1)).ravel()
    array([ True, False])
    """
    a, b = (np.asarray(corner, dtype=np.float64)[:, None, None, None] for corner in (low, high))
    x = grid.centres()
    inside = np.asarray(((x >= a) & (x <= b)).all(axis=0))
    return _some(inside, grid, f"box from {low!r} to {high!r}")


def shell_cells(grid: Grid, inner: float, outer: float, centre: ArrayLike = (0.0, 0.0, 0.0)) -> Mask:
    """Cells whose centre lies between two spheres; a ball with inner = 0.

    Raises
    ------
    GridError
        If there are none.

    Examples
    --------
    >>> import fieldmover as fm
    >>> shell_cells(fm.cartesian_grid([0, 1, 2], [-1, 1], [-1, 1]), 1.0, 2.0).ravel()
    array([False,  True])
    """
    r = distance(grid, centre)
    return _some((r >= inner) & (r < outer), grid, f"shell of radii {inner} and {outer} round {centre!r}")


def expression_cells(grid: Grid, text: str, values: Mapping[str, Array] | None = None) -> Mask:
    """Cells where a formula holds.

    Parameters
    ----------
    grid : Grid
    text : str
        A comparison, or several joined by and, or, not (`fieldmover.expressions`), of the positions of cell centres in
        the common Cartesian frame: x, y, z; r and R, the distances from the origin and from the z axis; theta in
        [0, pi], from the z axis; phi in [0, 2 pi).
    values : mapping of str to ndarray, shape (n1, n2, n3), optional
        More names.

    Raises
    ------
    JobError
        If the text is no such formula.
    GridError
        If it holds nowhere.

    Examples
    --------
    >>> import fieldmover as fm
    >>> line = fm.cartesian_grid([-1, 0, 1, 2], [-1, 1], [-1, 1])
    >>> expression_cells(line, "R < 1 and phi > 3").ravel()
    array([ True, False, False])
    """
    known = dict(values or {})
    formula = Expression(text, {*PLACES, *known})
    if formula.names & set(PLACES):
        known = {**known, **places(grid)}
    return _some(formula.mask(known, grid.shape), grid, f"where {text!r}")


def places(grid: Grid) -> dict[str, Array]:
    """The position of every cell centre by the names that formulas have for it; phi in [0, 2 pi)."""
    x, y, z = grid.centres()
    R = np.hypot(x, y)
    found = (x, y, z, np.hypot(R, z), R, np.arctan2(R, z), np.mod(np.arctan2(y, x), 2 * np.pi))
    return dict(zip(PLACES, found, strict=True))


def distance(grid: Grid, centre: ArrayLike) -> Array:
    """Distance of every cell centre from a point."""
    gap = grid.centres() - np.asarray(centre, dtype=np.float64)[:, None, None, None]
    return np.asarray(np.sqrt((gap**2).sum(axis=0)))


def _some(mask: Mask, grid: Grid, what: str) -> Mask:
    if not mask.any():
        raise GridError(f"{what}: no cell centre of {grid!r} lies inside")
    return mask
