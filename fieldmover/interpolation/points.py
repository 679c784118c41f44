"""Plain interpolation of cell values: for quantities that are neither densities nor carried by mass.

Values belong to the middles of cells in grid coordinates. Along each axis a polynomial goes through the nearest of
them (Lagrange's form), on across seams and poles; beyond the last middle before a wall it is continued.
"""

from __future__ import annotations

from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover import compute
from fieldmover.errors import FieldError
from fieldmover.grids.axes import centres_of
from fieldmover.grids.grid import Grid
from fieldmover.interpolation.locate import Locator, inside
from fieldmover.interpolation.reconstruct import with_neighbours
from fieldmover.interpolation.splines import crosses_pole

Array = NDArray[np.float64]
Flags = NDArray[np.bool_]
Index = NDArray[np.int64]

_GHOSTS = 2
_SLAB = 1 << 16  # target cells per task


def move_points(
    values: ArrayLike, source: Grid, target: Grid, order: Literal[1, 3] = 3, limited: bool = False
) -> tuple[Array, Flags]:
    """Interpolate cell values at the cell centres of another grid.

    Parameters
    ----------
    values : array_like, shape (..., n1, n2, n3)
        One or several values per source cell. Vectors go by Cartesian components.
    source, target : Grid
    order : {1, 3}
        Degree of the polynomials: linear, or cubic (fourth order on smooth data).
    limited : bool
        Bring values beyond the range of the eight surrounding cells to its nearer end: no new extrema, at second
        order where the data have theirs. Without effect between cells at order 1.

    Returns
    -------
    values : ndarray, shape (..., m1, m2, m3)
        NaN where the centre lies outside the source.
    known : ndarray of bool, shape (m1, m2, m3)
        Where it lies inside.

    Raises
    ------
    FieldError
        If the order is unknown, a shape does not fit or a value is not finite.

    Notes
    -----
    Axes with fewer middles than the polynomial needs use the highest degree they allow. A pole whose meridians have
    no opposite (`splines.grid_splines`) counts as a wall.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> line = fm.cartesian_grid([0, 1, 2, 3, 4], [0, 1], [0, 1])
    >>> cubes = (np.arange(4) + 0.5).reshape(4, 1, 1) ** 3
    >>> moved, known = move_points(cubes, line, fm.cartesian_grid([0.5, 1.5, 4.5], [0, 1], [0, 1]))
    >>> moved[:, 0, 0].round(12), known[:, 0, 0]
    (array([ 1., 27.]), array([ True,  True]))
    """
    values = np.asarray(values, dtype=np.float64)
    if order not in (1, 3):
        raise FieldError(f"order: {order!r}, expected 1 or 3")
    if values.shape[-3:] != source.shape:
        raise FieldError(f"values at points: shape {values.shape}, expected (..., *{source.shape})")
    if not np.isfinite(values).all():
        bad = ~np.isfinite(values)
        place = [int(i) for i in np.argwhere(bad)[0]]
        raise FieldError(
            f"values at points: {int(bad.sum())} are not finite, the first {values[tuple(place)]} at index {place}"
        )
    lead = values.shape[:-3]
    padded = [np.ascontiguousarray(with_neighbours(source, values[n], _GHOSTS)) for n in np.ndindex(lead)]
    axes = [_Axis(source, axis, order) for axis in range(3)]
    locator, centres = Locator(source), [centres_of(q) for q in target.nodes]
    out = np.full((len(padded), *target.shape), np.nan)
    known = np.zeros(target.shape, dtype=np.bool_)

    def work(rows: slice) -> None:
        q = centres[0][rows, None, None], centres[1][None, :, None], centres[2][None, None, :]
        x = np.stack(target.map.to_cartesian(*q))
        place = locator.coordinates(x.reshape(3, -1))
        locator.close(place)
        here = inside(source, place)
        known[rows] = here.reshape(x.shape[1:])
        place = place[:, here]
        found = [axis.weights(place[d]) for d, axis in enumerate(axes)]
        first, low = (np.stack([part[n] for part in found]) for n in (0, 1))
        weight = np.stack([part[2] for part in found])
        for n, field in enumerate(padded):
            result = np.empty(place.shape[1])
            _sum(field, first, low, weight, limited, result)
            out[n, rows][known[rows]] = result

    compute.for_each(work, compute.slabs(target.shape[0], _SLAB // (target.shape[1] * target.shape[2])))
    return out.reshape(*lead, *target.shape), known


class _Axis:
    """Middles of the cells of one axis, with those across its seam or poles."""

    def __init__(self, grid: Grid, axis: int, order: int) -> None:
        nodes, n = grid.nodes[axis], grid.shape[axis]
        middles, span = centres_of(nodes), float(nodes[-1] - nodes[0])
        self.places = np.pad(middles, _GHOSTS)
        low, high = False, False
        for g in range(_GHOSTS):
            if grid.periodic[axis]:
                low = high = True
                self.places[_GHOSTS - 1 - g] = middles[(-1 - g) % n] - span * (1 + g // n)
                self.places[_GHOSTS + n + g] = middles[g % n] + span * (1 + g // n)
            elif crosses_pole(grid, axis) and n >= _GHOSTS:
                if 0 in grid.pole_ends(axis):
                    low = True
                    self.places[_GHOSTS - 1 - g] = 2 * nodes[0] - middles[g]
                if n in grid.pole_ends(axis):
                    high = True
                    self.places[_GHOSTS + n + g] = 2 * nodes[-1] - middles[n - 1 - g]
        self.begin = 0 if low else _GHOSTS  # the middles that exist
        self.end = n + 2 * _GHOSTS if high else n + _GHOSTS
        self.points = min(order + 1, self.end - self.begin)

    def weights(self, q: Array) -> tuple[Index, Index, Array]:
        """First middle of the polynomial, the middle below the point, and the weights; (N,), (N,), (N, 4)."""
        places = self.places[self.begin : self.end]
        below = np.clip(np.searchsorted(places, q, side="right") - 1, 0, max(places.size - 2, 0))
        first = np.clip(below - (self.points // 2 - 1 if self.points > 1 else 0), 0, places.size - self.points)
        weight = np.zeros((q.size, 4))
        for m in range(self.points):
            weight[:, m] = 1.0
            for other in range(self.points):
                if other != m:
                    weight[:, m] *= (q - places[first + other]) / (places[first + m] - places[first + other])
        return first + self.begin, below + self.begin, weight


@compute.kernel
def _sum(field, first, low, weight, limited, out):
    """Products of three weights times values; limited to the range of the eight cells around."""
    for n in range(out.size):
        total = 0.0
        for a in range(4):
            for b in range(4):
                both = weight[0, n, a] * weight[1, n, b]
                if both == 0.0:
                    continue
                for c in range(4):
                    factor = both * weight[2, n, c]
                    if factor != 0.0:
                        total += factor * field[first[0, n] + a, first[1, n] + b, first[2, n] + c]
        if limited:
            least, most = np.inf, -np.inf
            for corner in range(8):
                i, j, k = low[0, n] + (corner >> 2), low[1, n] + (corner >> 1 & 1), low[2, n] + (corner & 1)
                least, most = min(least, field[i, j, k]), max(most, field[i, j, k])
            total = min(max(total, least), most)
        out[n] = total
