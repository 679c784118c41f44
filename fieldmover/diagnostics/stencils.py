"""Divergence of values at cell centres, as the receiving code's own stencil takes it."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover.diagnostics.divergence import Index, Norms, Point
from fieldmover.diagnostics.limits import finite
from fieldmover.errors import FieldError
from fieldmover.grids.grid import Grid, at
from fieldmover.projection.cells import CellDivergence, Stencil

Array = NDArray[np.float64]


@dataclass(frozen=True)
class StencilDivergence:
    """Divergence at the points of a stencil: cell centres ("central") or corners.

    Attributes
    ----------
    stencil : {"central", "corners"}
    points : int
        Points that have all the cells the stencil needs.
    relative : Norms
        |div B| / (sum of the sizes of the terms that make it up), 0 where all vanish. At most 1.
    scaled : Norms
        h |div B| / |B|, with h the cube root of the cell volume and |B| the root of the mean square over the cells
        that the stencil touches; 0 where they hold no field.
    net_flux : float
        Largest |div B| times the cell volume, unit B L^2.
    worst : tuple of three int
        Where `relative` is largest: the cell, or the cell at the low side of the corner.
    position : tuple of three float
        Cartesian position of that cell centre or corner, unit L.
    """

    stencil: Stencil
    points: int
    relative: Norms
    scaled: Norms
    net_flux: float
    worst: Index
    position: Point

    def as_dict(self) -> dict[str, object]:
        """Plain JSON, finite numbers only; the names are those that `Diagnosis` has for the balance of faces."""
        relative, scaled = (
            {"linf": finite(norms.linf), "l1": finite(norms.l1), "l2": finite(norms.l2)}
            for norms in (self.relative, self.scaled)
        )
        return {
            "stencil": self.stencil,
            **relative,
            "scaled": scaled,
            "net_flux": finite(self.net_flux),
            "cell": list(self.worst),
            "position": [finite(x) for x in self.position],
        }


def stencil_divergence(grid: Grid, b: ArrayLike, stencil: Stencil = "central") -> StencilDivergence:
    """Measure the divergence of values at cell centres with the stencil of a code that evolves them.

    Parameters
    ----------
    grid : Grid
        Cartesian with even steps along each axis.
    b : array_like, shape (3, n1, n2, n3)
        Components of B along the grid's axes.
    stencil : {"central", "corners"}
        As in `fieldmover.projection.cells.project_cells`: differences between the cells before and after, or
        differences of cells averaged over the other two axes.

    Returns
    -------
    StencilDivergence

    Raises
    ------
    GridError
        If the grid is not Cartesian with even steps, or has too few cells between two walls.
    FieldError
        If the shape does not fit.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> grid = fm.cartesian_grid(*[np.linspace(0, 1, 9)] * 3)
    >>> x, y, z = grid.centres()
    >>> found = stencil_divergence(grid, np.stack([x * x, 1 + 0 * y, 0 * z]))
    >>> found.points, found.worst, round(8**3 * found.net_flux, 12)  # 2 x at the last cell that has a neighbour
    (216, (6, 1, 1), 1.625)
    """
    operator = CellDivergence(grid, stencil)
    field = np.asarray(b, dtype=np.float64)
    if field.shape != (3, *grid.shape):
        raise FieldError(f"b: shape {field.shape}, expected {(3, *grid.shape)}")
    with np.errstate(invalid="ignore", over="ignore"):  # values that are not finite are told as such
        net, sizes = np.abs(operator.of(field)), operator.sizes(field)
        relative = np.divide(net, sizes, out=np.zeros_like(net), where=sizes != 0)
        steps = [float(nodes[-1] - nodes[0]) / n for nodes, n in zip(grid.nodes, grid.shape, strict=True)]
        volume = math.prod(steps)
        strength = np.sqrt(_mean_square(operator, (field**2).sum(axis=0)))
        scaled = np.divide(math.cbrt(volume) * net, strength, out=np.zeros_like(net), where=strength != 0)
        worst = int(np.argmax(np.where(np.isnan(relative), np.inf, relative)))
        point = np.unravel_index(worst, net.shape)
        low = [0 if axis.seam else operator.reach - 1 for axis in operator.axes]
        cell = _cell(grid, [int(i) + shift for i, shift in zip(point, low, strict=True)])
        return StencilDivergence(
            stencil, net.size, _norms(relative), _norms(scaled), float(net.max()) * volume, cell,
            _place(grid, cell, operator.reach),
        )  # fmt: skip


def _norms(values: Array) -> Norms:
    return Norms(float(values.max()), float(values.mean()), math.sqrt(float((values**2).mean())))


def _mean_square(operator: CellDivergence, square: Array) -> Array:
    """Mean over the cells that the stencil touches at each of its points: eight, or six."""
    x = np.pad(square, [axis.pad for axis in operator.axes], mode="wrap")
    if operator.reach == 1:
        for d in range(3):
            x = 0.5 * (x[at(d, slice(None, -1))] + x[at(d, slice(1, None))])
        return np.asarray(x)
    inner = tuple(slice(1, -1) for _ in range(3))
    total = np.zeros_like(x[inner])
    for d in range(3):
        for part in (slice(None, -2), slice(2, None)):
            total += x[tuple(part if e == d else slice(1, -1) for e in range(3))]
    return np.asarray(total / 6.0)


def _cell(grid: Grid, index: list[int]) -> Index:
    i, j, k = (place % n for place, n in zip(index, grid.shape, strict=True))
    return i, j, k


def _place(grid: Grid, cell: Index, reach: int) -> Point:
    """Centre of a cell, or its high corner."""
    q = [
        np.array([0.5 * (nodes[i] + nodes[i + 1]) if reach == 2 else nodes[i + 1]])
        for nodes, i in zip(grid.nodes, cell, strict=True)
    ]
    x, y, z = (float(c[0]) for c in grid.map.to_cartesian(q[0], q[1], q[2]))
    return x, y, z
