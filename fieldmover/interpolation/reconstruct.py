"""Limited linear reconstruction of a cell field.

Source: van Leer (1977), Towards the ultimate conservative difference scheme IV.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.grids.axes import dual_lengths
from fieldmover.grids.grid import Grid, at
from fieldmover.interpolation.splines import crosses_pole

Array = NDArray[np.float64]

_CHUNK = 1 << 18  # cells per task


def reconstruct(grid: Grid, field: Array, out: Array | None = None) -> Array:
    """Limited slopes of a cell field, and the range of its neighbours.

    Slopes go on across seams and poles; at walls they are 0 along the axis that ends there.

    Parameters
    ----------
    grid : Grid
    field : ndarray, shape (n1, n2, n3)
    out : ndarray, shape (cells, 6), optional
        Used for the result.

    Returns
    -------
    ndarray, shape (cells, 6)
        For each cell its value; three slopes, as the change over the whole cell; how far the highest and how far the
        lowest of the 27 cells round it are from the value.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> reconstruct(fm.cartesian_grid([0, 1, 2, 4], [0, 1], [0, 1]), np.array([0.0, 1.0, 2.5]).reshape(3, 1, 1))[1]
    array([1. , 1. , 0. , 0. , 1.5, 1. ])
    """
    padded = with_neighbours(grid, field, 1)
    weights = [_slope_weights(grid, axis) for axis in range(3)]
    form = (np.empty((field.size, 6)) if out is None else out).reshape(*grid.shape, 6)
    compute.for_each(
        lambda rows: _slopes(rows.start, padded, weights[0], weights[1], weights[2], form[rows]),
        compute.slabs(grid.shape[0], _CHUNK // (grid.shape[1] * grid.shape[2])),
    )
    return form.reshape(-1, 6)


def with_neighbours(grid: Grid, field: Array, width: int) -> Array:
    """A cell field with more cells at every end: across the seam, across the pole; at walls the last cell repeated.

    Parameters
    ----------
    grid : Grid
    field : ndarray, shape (n1, n2, n3)
    width : int
        Cells more at each end of every axis.

    Returns
    -------
    ndarray, shape (n1 + 2 width, n2 + 2 width, n3 + 2 width)
    """
    padded = np.empty([n + 2 * width for n in grid.shape])
    padded[(slice(width, -width),) * 3] = field
    for axis in sorted(range(3), key=lambda d: not crosses_pole(grid, d)):  # poles first: they need a whole ring
        n, ring = grid.shape[axis], grid.ring_axis[axis] if crosses_pole(grid, axis) else None
        for g in range(width):
            for ghost, edge, inward, wrapped in (
                (width - 1 - g, 0, min(g, n - 1), (-1 - g) % n),
                (width + n + g, n, n - 1 - min(g, n - 1), g % n),
            ):
                across_pole = ring is not None and edge in grid.pole_ends(axis)
                place = wrapped if grid.periodic[axis] else inward if across_pole else min(edge, n - 1)
                values = padded[at(axis, width + place)]
                if across_pole and ring is not None:
                    values = values.copy()
                    along = ring - (ring > axis)
                    middle = (slice(None),) * along + (slice(width, -width),)
                    values[middle] = np.roll(values[middle], grid.shape[ring] // 2, axis=along)
                padded[at(axis, ghost)] = values
    return padded


def _slope_weights(grid: Grid, axis: int) -> Array:
    """What the differences to the neighbours below and above count in a slope per cell, shape (n, 2)."""
    width = np.diff(grid.nodes[axis])
    gaps = dual_lengths(grid.nodes[axis], grid.periodic[axis])
    if not grid.periodic[axis]:
        gaps[[0, -1]] *= 2  # to the cell across the pole; at a wall the difference is 0
    below, above = gaps[:-1], gaps[1:]
    return np.stack([width * above / (below * (below + above)), width * below / (above * (below + above))], axis=1)


@compute.kernel
def _slopes(first, padded, weights1, weights2, weights3, form):
    """See `reconstruct`; padded has one more cell at every end."""
    lows, highs = np.empty(3), np.empty(3)
    for i in range(form.shape[0]):
        p = first + i + 1
        for j in range(form.shape[1]):
            q = j + 1
            for k in range(-2, form.shape[2]):
                r = k + 1
                low, high = np.inf, -np.inf  # of the nine cells beyond this one: the next two steps need them again
                for a in range(p - 1, p + 2):
                    for b in range(q - 1, q + 2):
                        value = padded[a, b, r + 1]
                        low, high = min(low, value), max(high, value)
                lows[(k + 2) % 3], highs[(k + 2) % 3] = low, high
                if k < 0:
                    continue
                here = padded[p, q, r]
                form[i, j, k, 0] = here
                form[i, j, k, 1] = _limited(
                    here - padded[p - 1, q, r], padded[p + 1, q, r] - here, weights1[p - 1, 0], weights1[p - 1, 1]
                )
                form[i, j, k, 2] = _limited(
                    here - padded[p, q - 1, r], padded[p, q + 1, r] - here, weights2[j, 0], weights2[j, 1]
                )
                form[i, j, k, 3] = _limited(
                    here - padded[p, q, r - 1], padded[p, q, r + 1] - here, weights3[k, 0], weights3[k, 1]
                )
                form[i, j, k, 4] = max(highs[0], highs[1], highs[2]) - here
                form[i, j, k, 5] = here - min(lows[0], lows[1], lows[2])


@compute.kernel
def _limited(below, above, weight_below, weight_above):
    """Slope from the differences to both neighbours, 0 at an extremum; no face leaves the range of the neighbours."""
    if below * above <= 0:
        return 0.0
    central = weight_below * below + weight_above * above
    limit = 2 * min(abs(below), abs(above))
    return min(max(central, -limit), limit)
