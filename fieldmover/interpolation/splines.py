"""Splines of the forms on a grid: tensor products of the splines of its axes (`grids.axis_splines`)."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from fieldmover.grids.axis_splines import (
    AxisSpline,
    axis_spline,
    cell_shape,
    fit,
    opposite_lines,
    unfolded,
    unfolded_sources,
)
from fieldmover.grids.grid import Grid

__all__ = [
    "AxisSpline",
    "axis_spline",
    "cell_shape",
    "crosses_pole",
    "fit",
    "fit_form",
    "grid_splines",
    "unfolded",
    "unfolded_sources",
]

Array = NDArray[np.float64]


def grid_splines(grid: Grid, degree: int, sharp: bool = False) -> tuple[AxisSpline, AxisSpline, AxisSpline]:
    """Splines of the three axes of a grid.

    Parameters
    ----------
    grid : Grid
    degree : int
        Odd degree p of the splines of node values. Axes shorter than p cells use the largest degree they allow.
    sharp : bool
        See `axis_spline`.

    Returns
    -------
    tuple of three AxisSpline

    Notes
    -----
    Fitting across a pole needs the opposite of every meridian to be a meridian: an even number of ring cells, equal
    after half a turn. Where that does not hold the pole is treated as a wall of the axis, at some loss of
    accuracy beside it.
    """
    first, second, third = (
        axis_spline(
            grid.nodes[axis],
            degree,
            grid.periodic[axis],
            grid.poles[axis] if crosses_pole(grid, axis) else None,
            sharp,
        )
        for axis in range(3)
    )
    return first, second, third


def crosses_pole(grid: Grid, axis: int) -> bool:
    """Whether meridians along `axis` can be joined to their opposites."""
    ring = grid.ring_axis[axis]
    if ring is None or not grid.periodic[ring] or grid.shape[ring] % 2:
        return False
    nodes, half = grid.nodes[ring], grid.shape[ring] // 2
    turn = nodes[half:] - nodes[: half + 1]
    if np.abs(turn - turn[0]).max() > 1e-9 * abs(turn[0]):
        return False
    return all(_straight_across(grid, axis, end, ring) for end in grid.pole_ends(axis))


def _straight_across(grid: Grid, axis: int, end: int, ring: int) -> bool:
    """Whether a meridian and its opposite leave a pole in opposite directions, as a smooth map makes them."""
    q = [nodes[:, None, None] if d == ring else nodes[None, :, None] for d, nodes in enumerate(grid.nodes)]
    q[axis] = grid.nodes[axis][end].reshape(1, 1, 1)
    tangents = grid.map.jacobian(*q)[:, axis, :-1]
    gap = tangents + np.roll(tangents, grid.shape[ring] // 2, axis=1)
    return bool(np.abs(gap).max() < 1e-6 * np.abs(tangents).max())


def fit_form(
    grid: Grid, splines: tuple[AxisSpline, AxisSpline, AxisSpline], data: Array, along: tuple[int, ...]
) -> Array:
    """Spline coefficients of one component of a form.

    Parameters
    ----------
    grid : Grid
    splines : tuple of three AxisSpline
    data : ndarray
        Integrals over the cells of the axes `along`, point values at the nodes of the others, seams with their last
        node: () for a node function, (d,) for edges, two axes for faces, three for cells.
    along : tuple of int

    Returns
    -------
    ndarray
        Coefficients, axis by axis as many as the splines have.
    """
    crossing = [crosses_pole(grid, axis) for axis in range(3)]
    for axis in sorted(range(3), key=lambda d: not crossing[d]):  # poles first: they pair columns of the ring
        line = splines[axis].cells if axis in along else splines[axis].values
        if crossing[axis]:
            ring = grid.ring_of(axis)
            opposite = opposite_lines(data.shape, axis, ring, grid.shape[ring])
            data = fit(data, line, axis, opposite, -1.0 if axis in along else 1.0)
        else:
            data = fit(data, line, axis)
    return data
