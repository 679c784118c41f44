"""Splines of the forms on a grid: tensor products of the splines of its axes (`grids.axis_splines`)."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.grids.axis_splines import (
    AxisSpline,
    axis_spline,
    cell_shape,
    fit,
    fit_lines,
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
Index = NDArray[np.int64]


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
    grid: Grid,
    splines: tuple[AxisSpline, AxisSpline, AxisSpline],
    data: Array,
    along: tuple[int, ...],
    out: Array | None = None,
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

    out : ndarray, optional
        Where to put the coefficients: any view, 3-D.

    Returns
    -------
    ndarray
        Coefficients, axis by axis as many as the splines have.

    Notes
    -----
    After axis 1 the rest is done plane by plane, each staying in cache: two reads and writes of all values instead of
    three.
    """
    lines = [spline.cells if axis in along else spline.values for axis, spline in enumerate(splines)]
    crossing = [crosses_pole(grid, axis) for axis in range(3)]
    if out is None:
        out = np.empty([line.take.size for line in lines])

    def pair(axis: int, shape: tuple[int, ...]) -> tuple[Index | None, float]:
        """Lines across the pole, and what their values are multiplied by."""
        if not crossing[axis]:
            return None, 1.0
        ring = grid.ring_of(axis)
        return opposite_lines(shape, axis, ring, grid.shape[ring]), -1.0 if axis in along else 1.0

    # An axis with poles pairs lines of its ring, so it goes before the ring.
    within = (2, 1) if crossing[2] else (1, 2)
    first = [axis for axis in range(3) if crossing[axis] and grid.ring_of(axis) == 0] + [0]
    for axis in first:
        data = fit(data, lines[axis], axis, *pair(axis, data.shape))
    rest = [axis for axis in within if axis not in first]
    planes = (1, *data.shape[1:])
    pairs = [pair(axis, planes) for axis in rest]
    flat, strides = _flat(out)

    def work(i: int) -> None:
        plane = np.ascontiguousarray(data[i : i + 1])
        for axis, (opposite, sign) in zip(rest, pairs, strict=True):
            every = slice(0, plane.size // plane.shape[axis])
            if axis == rest[-1]:
                fit_lines(plane, lines[axis], axis, every, flat, strides, i * strides[0], opposite, sign)
                return
            shape = list(plane.shape)
            shape[axis] = lines[axis].take.size
            fitted = np.empty(shape)
            steps = tuple(step // fitted.itemsize for step in fitted.strides)
            fit_lines(plane, lines[axis], axis, every, fitted.reshape(-1), steps, 0, opposite, sign)
            plane = fitted

    compute.for_each(work, range(data.shape[0]))
    return out


def _flat(view: Array) -> tuple[Array, tuple[int, ...]]:
    """The memory from the first element of a view on, 1-D, and the view's steps in it."""
    strides = tuple(step // view.itemsize for step in view.strides)
    length = 1 + sum((n - 1) * step for n, step in zip(view.shape, strides, strict=True))
    return np.lib.stride_tricks.as_strided(view, (length,), (view.itemsize,)), strides
