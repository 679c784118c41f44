"""Grids given by a table of node positions."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover.errors import GridError
from fieldmover.grids.axes import Poles
from fieldmover.grids.axis_splines import axis_spline, fit, unfolded
from fieldmover.grids.folds import least_corner
from fieldmover.grids.grid import Grid, at, checked_ends
from fieldmover.grids.maps import Triple
from fieldmover.grids.position_spline import PositionSpline

Array = NDArray[np.float64]
Seams = tuple[bool, bool, bool]
Ends = tuple[Poles, Poles, Poles]

_SAME = 1e-9  # of the size of the grid: nodes nearer than this are the same
_OPPOSITE = 1e-2  # by how much the directions of two meridians may differ at a pole and still be joined


@dataclass(frozen=True, eq=False)
class TabulatedMap:
    """The spline of a table of positions; node (i, j, k) has the coordinates i, j, k."""

    spline: PositionSpline
    kind: str = "tabulated"
    names: tuple[str, str, str] = ("i", "j", "k")

    def to_cartesian(self, q1: Array, q2: Array, q3: Array) -> Triple:
        return self.spline.positions(q1, q2, q3)

    def jacobian(self, q1: Array, q2: Array, q3: Array) -> Array:
        return self.spline.jacobian(q1, q2, q3)


def tabulated_grid(
    x: ArrayLike,
    y: ArrayLike,
    z: ArrayLike,
    periodic: Seams = (False, False, False),
    poles: Ends = (None, None, None),
) -> Grid:
    """Grid given by the positions of its nodes.

    Parameters
    ----------
    x, y, z : array_like, shape (n1 + 1, n2 + 1, n3 + 1)
        Cartesian positions of the nodes, right-handed: moving along axis 1, then 2, then 3.
    periodic : tuple of three bool
        Axes with a seam: the last layer of nodes is the first again.
    poles : tuple of None, "low", "high" or "both"
        Ends of an axis where the ring of another axis shrinks to a point: all nodes of a ring there coincide.

    Returns
    -------
    Grid
        Its coordinates are the indices of the nodes, its map the quintic spline of their positions (exact at nodes to
        round-off).

    Raises
    ------
    GridError
        If the arrays differ in shape or hold values that are not finite, a seam or pole does not close, two neighbours
        are at the same place, or a cell is folded or left-handed.

    See Also
    --------
    nodes_from_centres : where a file holds the centres of the cells only.

    Notes
    -----
    Across a pole meridians are joined to their opposites if the ring is closed, has an even number of cells, and
    they leave the pole in opposite directions. Otherwise, with an odd number for one, the spline ends at the pole as
    at a wall, with one-sided formulas: no error, but positions between the nodes are less accurate there.

    Examples
    --------
    >>> import numpy as np
    >>> i = np.arange(5.0)
    >>> x, y, z = np.meshgrid(i, i, i, indexing="ij")
    >>> grid = tabulated_grid(x + 0.1 * y, y, z)
    >>> grid
    <tabulated grid: i 0..4 (4 cells); j 0..4 (4 cells); k 0..4 (4 cells)>
    >>> float(grid.cell_volumes().sum().round(12))
    64.0
    """
    table = _checked_table((x, y, z), 2, "node positions")
    seams, ends = checked_ends(periodic, poles)
    size = _size(table)
    for axis in range(3):
        if seams[axis]:
            _close_seam(table, axis, size)
    rings = [_close_poles(table, axis, ends[axis], size) for axis in range(3)]
    _refuse_repeats(table, rings, ends, size)
    _refuse_folds(table)
    nodes = tuple(_indices(n) for n in table.shape[1:])
    joined = tuple(
        ring if ring is not None and _joins(table, axis, ring, ends[axis], seams[ring]) else None
        for axis, ring in enumerate(rings)
    )
    spline = PositionSpline((nodes[0], nodes[1], nodes[2]), table, seams, ends, (joined[0], joined[1], joined[2]))
    return Grid(TabulatedMap(spline), spline.nodes, seams, ends)


def nodes_from_centres(
    x: ArrayLike,
    y: ArrayLike,
    z: ArrayLike,
    periodic: Seams = (False, False, False),
    poles: Ends = (None, None, None),
) -> Triple:
    """Positions of the nodes of a grid of which only the centres of the cells are known.

    Parameters
    ----------
    x, y, z : array_like, shape (n1, n2, n3)
        Cartesian positions of the centres, half-way between nodes along lines on which the positions are smooth
        functions of the index. (In logarithmic steps of r that is the geometric mean, not the arithmetic one.)
    periodic, poles
        As `tabulated_grid` takes them. No centre is repeated.

    Returns
    -------
    tuple of three ndarrays, shape (n1 + 1, n2 + 1, n3 + 1)
        By quintic splines along each axis, joined at seams and across poles, extrapolated by half a cell at walls; the
        nodes of a pole take their mean.

    Raises
    ------
    GridError
        If the arrays differ in shape or are not finite; if the ring of a pole cannot be told.

    Examples
    --------
    >>> import numpy as np
    >>> x, y, z = np.meshgrid([0.5, 1.5, 2.5], [1.0, 3.0], [0.0], indexing="ij")
    >>> nodes_from_centres(x, y, z)[0][:, 0, 0]
    array([0., 1., 2., 3.])
    """
    table = _checked_table((x, y, z), 1, "positions of cell centres")
    seams, ends = checked_ends(periodic, poles)
    rings = [_ring_of_centres(table, axis, ends[axis], seams) for axis in range(3)]
    parts: list[Array] = list(table)
    cells = table.shape[1:]
    for axis in sorted(range(3), key=lambda d: rings[d] is None):
        ring = rings[axis]
        joined = ring is not None and seams[ring] and cells[ring] % 2 == 0
        own, across = _centres_to_nodes(cells[axis], seams[axis], ends[axis] if joined else None)
        for d, part in enumerate(parts):
            out = np.tensordot(own, part, axes=(1, axis))
            if joined and ring is not None:
                opposite = np.roll(part, cells[ring] // 2, axis=ring)
                out = out + np.tensordot(across, opposite, axes=(1, axis))
            parts[d] = np.moveaxis(out, 0, axis)
    nodes = np.stack(parts)
    for axis, ring in enumerate(rings):
        for end in _pole_indices(ends[axis]):
            if ring is not None:
                _collapse(nodes, axis, end, ring)
    return nodes[0], nodes[1], nodes[2]


def _checked_table(positions: tuple[ArrayLike, ArrayLike, ArrayLike], least: int, what: str) -> Array:
    arrays = [np.asarray(p, dtype=np.float64) for p in positions]
    shapes = [a.shape for a in arrays]
    if len(set(shapes)) > 1 or len(shapes[0]) != 3 or min(shapes[0]) < least:
        raise GridError(
            f"{what}: shapes {', '.join(map(str, shapes))}, expected three equal ones of three dimensions with at "
            f"least {least} along each"
        )
    table = np.stack(arrays)
    if not np.isfinite(table).all():
        place = np.argwhere(~np.isfinite(table))[0]
        raise GridError(f"{what}: {table[tuple(place)]} at index {place[1:].tolist()}, expected finite numbers")
    return table


def _size(table: Array) -> float:
    return float(np.abs(table - table.mean(axis=(1, 2, 3), keepdims=True)).max())


def _indices(n: int) -> Array:
    nodes = np.arange(float(n))
    nodes.flags.writeable = False
    return nodes


def _layer(table: Array, axis: int, index: int) -> Array:
    """View of one layer of nodes, shape (3, ...)."""
    return table[(slice(None), *at(axis, index))]


def _apart(a: Array, b: Array) -> Array:
    return np.asarray(np.sqrt(((a - b) ** 2).sum(axis=0)))


def _close_seam(table: Array, axis: int, size: float) -> None:
    gap = _apart(_layer(table, axis, 0), _layer(table, axis, -1))
    place = np.unravel_index(int(np.argmax(gap)), gap.shape)
    if gap[place] > _SAME * size:
        at_node: list[object] = [int(i) for i in place]
        at_node.insert(axis, "0 and last")
        raise GridError(
            f"axis {axis + 1} is said to be periodic, but its first and last nodes are up to {gap[place]:.3g} apart "
            f"(at node [{', '.join(map(str, at_node))}]); expected the first layer again as the last"
        )
    _layer(table, axis, -1)[...] = _layer(table, axis, 0)


def _pole_indices(pole: Poles) -> list[int]:
    return [0] * (pole in ("low", "both")) + [-1] * (pole in ("high", "both"))


def _close_poles(table: Array, axis: int, pole: Poles, size: float) -> int | None:
    """Make the nodes of each ring at the poles of an axis one; returns the axis of the ring."""
    found: int | None = None
    for end in _pole_indices(pole):
        layer = _layer(table, axis, end)
        spreads = {}
        for ring in (d for d in range(3) if d != axis):
            along = 1 + ring - (axis < ring)
            spreads[ring] = float(_apart(layer, layer.mean(axis=along, keepdims=True)).max())
        ring = min(spreads, key=lambda d: spreads[d])
        if spreads[ring] > _SAME * size:
            raise GridError(
                f"axis {axis + 1} is said to have a pole at its {'low' if end == 0 else 'high'} end, but the nodes of "
                f"a ring along axis {ring + 1} are {spreads[ring]:.3g} from their middle there, expected one point"
            )
        if found is not None and ring != found:
            raise GridError(
                f"axis {axis + 1}: the ring runs along axis {found + 1} at one pole and along axis {ring + 1} at the "
                "other, expected the same"
            )
        found = ring
        _collapse(table, axis, end, ring)
    return found


def _collapse(table: Array, axis: int, end: int, ring: int) -> None:
    layer = _layer(table, axis, end)
    layer[...] = layer.mean(axis=1 + ring - (axis < ring), keepdims=True)


def _refuse_repeats(table: Array, rings: list[int | None], ends: Ends, size: float) -> None:
    for axis in range(3):
        length = np.sqrt((np.diff(table, axis=axis + 1) ** 2).sum(axis=0))
        for pole_axis, ring in enumerate(rings):
            if ring == axis:
                for end in _pole_indices(ends[pole_axis]):
                    length[at(pole_axis, end)] = np.inf
        place = np.unravel_index(int(np.argmin(length)), length.shape)
        if length[place] <= 1e-3 * _SAME * size:
            first = [int(i) for i in place]
            second = [i + (d == axis) for d, i in enumerate(first)]
            raise GridError(f"nodes {first} and {second} of the table are at the same place, expected different ones")


def _refuse_folds(table: Array) -> None:
    """Refuse cells with a corner at which the three edges are not right-handed."""
    value, cell, right, wrong = least_corner(table)
    if value >= 0.0:
        return
    if right == 0:
        raise GridError(
            "node positions: the axes are left-handed (the Jacobian is negative everywhere), expected a right-handed "
            "order; exchange two axes or reverse one"
        )
    raise GridError(
        f"cell {list(cell)} of the table is folded: the least Jacobian at its corners is {value:.3g} (volume per "
        f"cell), expected positive; {wrong} cells are folded or inverted in all"
    )


def _joins(table: Array, axis: int, ring: int, pole: Poles, closed: bool) -> bool:
    """Whether meridians can be joined to their opposites, judged by the first steps from the pole."""
    n = table.shape[1 + ring] - 1
    if not closed or n % 2:
        return False
    for end in _pole_indices(pole):
        layers = [_layer(table, axis, i if end == 0 else -1 - i) for i in range(min(5, table.shape[1 + axis]))]
        weights = _one_sided(len(layers))
        slope = np.moveaxis(np.tensordot(weights, np.stack(layers), axes=1), 1 + ring - (axis < ring), 1)[:, :-1]
        gap = slope + np.roll(slope, n // 2, axis=1)
        if np.abs(gap).max() > _OPPOSITE * np.abs(slope).max():
            return False
    return True


def _one_sided(points: int) -> Array:
    """Weights of values at 0, 1, 2, ... in the derivative at 0 of their polynomial."""
    powers = np.arange(points)
    return np.asarray(np.linalg.solve((powers[:, None] ** powers[None, :]).T, np.eye(points)[1 % points]))


def _ring_of_centres(table: Array, axis: int, pole: Poles, seams: Seams) -> int | None:
    """Axis of the ring at the poles of an axis: the closed one, or the one whose cells shrink towards the pole."""
    if pole is None:
        return None
    others = [d for d in range(3) if d != axis and table.shape[1 + d] > 1]
    if not others:
        raise GridError(f"axis {axis + 1} is said to have a pole, but no other has more than one cell for its ring")
    closed = [d for d in others if seams[d]]
    if len(closed) == 1:
        return closed[0]
    end = _pole_indices(pole)[0]

    def shrinks(d: int) -> float:
        steps = np.sqrt((np.diff(table, axis=1 + d) ** 2).sum(axis=0))
        beside, middle = (steps[at(axis, i)].mean() for i in (end, table.shape[1 + axis] // 2))
        return float(beside / middle)

    return min(closed or others, key=shrinks)


def _centres_to_nodes(cells: int, periodic: bool, poles: Poles) -> tuple[Array, Array]:
    """Matrices from values at centres to values at nodes: of the line itself, and of the one across the pole."""
    line, offset = unfolded(np.arange(cells + 1.0), poles)
    centres = 0.5 * (line[1:] + line[:-1])
    cyclic = periodic or poles == "both"
    if centres.size == 1:
        return np.ones((2, 1)), np.zeros((2, 1))
    knots = np.append(centres, centres[0] + line.size - 1) if cyclic else centres
    spline = axis_spline(knots, 5, periodic=cyclic)
    coefficients = fit(np.eye(centres.size)[None], spline.values, axis=1)[0]
    points = line[offset : offset + cells + 1]
    if cyclic:
        points = knots[0] + np.mod(points - knots[0], line.size - 1)
    matrix = np.zeros((points.size, centres.size))
    for row, point in enumerate(points):
        cell = int(np.clip(np.searchsorted(knots, point, side="right") - 1, 0, knots.size - 2))
        values = spline.value_pieces[cell] @ (point - knots[cell]) ** np.arange(6)
        matrix[row] = values @ coefficients[spline.value_first[cell] :][:6]
    own, across = np.zeros((points.size, cells)), np.zeros((points.size, cells))
    folded = _folded(cells, poles)
    for column, (source, opposite) in enumerate(folded):
        (across if opposite else own)[:, source] += matrix[:, column]
    return own, across


def _folded(cells: int, poles: Poles) -> list[tuple[int, bool]]:
    """For each cell of the unfolded line, the cell of the data and whether it is the opposite meridian's."""
    up = [(i, False) for i in range(cells)]
    down = [(i, True) for i in range(cells - 1, -1, -1)]
    return {None: up, "low": down + up, "high": up + down, "both": up + down}[poles]
