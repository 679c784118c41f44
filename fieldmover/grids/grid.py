"""The grid: node arrays of three axes, a map to Cartesian positions, seams and poles."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import cached_property
from itertools import groupby

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover import compute
from fieldmover.errors import GridError
from fieldmover.grids.axes import Poles, angle_with_seam, centres_of, checked_nodes, polar_angle
from fieldmover.grids.folds import least_corner
from fieldmover.grids.maps import CartesianMap, CylindricalMap, Map, SphericalMap, Triple, WarpedMap

Array = NDArray[np.float64]
Points = list[tuple[slice, list[Array], Array]]

_GAUSS3 = ((-(0.6**0.5), 5 / 9), (0.0, 8 / 9), (0.6**0.5, 5 / 9))
_SLAB = 1 << 14  # cells whose positions are in memory at a time


@dataclass(frozen=True, eq=False)
class Grid:
    """A block of cells in grid coordinates q = (q1, q2, q3).

    Made by `cartesian_grid`, `cylindrical_grid`, `spherical_grid`, `warped_grid` or `tabulated_grid`.

    Attributes
    ----------
    map : Map
        Grid coordinates to Cartesian positions.
    nodes : tuple of three ndarrays
        Node coordinates of each axis, shapes (n1 + 1,), (n2 + 1,), (n3 + 1,), read-only.
    periodic : tuple of three bool
        Axes with a seam: their last node is their first again.
    poles : tuple
        For each axis None, "low", "high" or "both": ends where the ring of another axis shrinks to a point.
    """

    map: Map
    nodes: tuple[Array, Array, Array]
    periodic: tuple[bool, bool, bool]
    poles: tuple[Poles, Poles, Poles]

    @property
    def kind(self) -> str:
        """Name of the coordinates: "cartesian", "cylindrical", "spherical", "warped" or "tabulated"."""
        return self.map.kind

    @property
    def shape(self) -> tuple[int, int, int]:
        """Number of cells along each axis."""
        n1, n2, n3 = (nodes.size - 1 for nodes in self.nodes)
        return n1, n2, n3

    def __repr__(self) -> str:
        axes = []
        for name, nodes, seam, pole in zip(self.map.names, self.nodes, self.periodic, self.poles, strict=True):
            marks = (", seam" if seam else "") + (f", poles {pole}" if pole else "")
            axes.append(f"{name} {nodes[0]:.6g}..{nodes[-1]:.6g} ({nodes.size - 1} cells{marks})")
        return f"<{self.kind} grid: {'; '.join(axes)}>"

    def node_shape(self) -> tuple[int, int, int]:
        """Number of nodes along each axis."""
        n1, n2, n3 = self.shape
        return n1 + 1, n2 + 1, n3 + 1

    def edge_shape(self, axis: int) -> tuple[int, ...]:
        """Shape of the edges along `axis` (0, 1 or 2)."""
        return tuple(n if d == axis else n + 1 for d, n in enumerate(self.shape))

    def face_shape(self, axis: int) -> tuple[int, ...]:
        """Shape of the faces normal to `axis` (0, 1 or 2)."""
        return tuple(n + 1 if d == axis else n for d, n in enumerate(self.shape))

    def node_positions(self) -> Array:
        """Cartesian positions of the nodes, shape (3, n1 + 1, n2 + 1, n3 + 1), unit of length of the grid."""
        q1, q2, q3 = _open(*self.nodes)
        out = np.empty((3, *self.node_shape()))

        def work(rows: slice) -> None:
            out[0, rows], out[1, rows], out[2, rows] = self.map.to_cartesian(q1[rows], q2, q3)

        compute.for_each(work, compute.slabs(q1.size, max(1, _SLAB // (q2.size * q3.size))))
        return out

    def centres(self) -> Array:
        """Cartesian positions of the cell centres (middle of the cell in q), shape (3, n1, n2, n3)."""
        return np.stack(self.map.to_cartesian(*_open(*(centres_of(nodes) for nodes in self.nodes))))

    @cached_property
    def ring_axis(self) -> tuple[int | None, int | None, int | None]:
        """For each axis with poles, the axis of the ring that shrinks to a point there; None elsewhere."""
        rings: list[int | None] = [None, None, None]
        for axis, pole in enumerate(self.poles):
            if pole is not None:
                rings[axis] = _ring_of(self, axis)
        return rings[0], rings[1], rings[2]

    def ring_of(self, axis: int) -> int:
        """The axis of the ring that shrinks to a point at the poles of `axis`.

        Raises
        ------
        GridError
            If the axis has no pole.
        """
        ring = self.ring_axis[axis]
        if ring is None:
            raise GridError(f"axis {axis + 1} has no pole")
        return ring

    def pole_ends(self, axis: int) -> list[int]:
        """Node indices along `axis` that are poles (0, the last, both or none)."""
        pole = self.poles[axis]
        return [0] * (pole in ("low", "both")) + [self.shape[axis]] * (pole in ("high", "both"))

    def face_areas(self) -> tuple[Array, Array, Array]:
        """Areas of the faces normal to axes 1, 2, 3, unit length^2; closed forms where there are any.

        Collapsed faces have area 0.

        Examples
        --------
        >>> import numpy as np
        >>> grid = spherical_grid([1, 2], np.linspace(0, np.pi, 5), np.linspace(0, 2 * np.pi, 9))
        >>> float(grid.face_areas()[0][0].sum() / (4 * np.pi))
        1.0
        """
        factors = area_factors(self)
        if factors is not None:
            a1, a2, a3 = (outer(f) for f in factors)
            return a1, a2, a3
        areas = []
        for axis in range(3):
            area = np.zeros(self.face_shape(axis))
            others = [d for d in range(3) if d != axis]

            def add(points: Points, others: list[int] = others, area: Array = area) -> None:
                for rows, q, weight in points:
                    tangents = self.map.jacobian(*_open(*q))
                    normal = np.cross(tangents[:, others[0]], tangents[:, others[1]], axis=0)
                    area[rows] += np.sqrt((normal**2).sum(axis=0)) * weight

            compute.for_each(add, _by_slabs(quadrature(self, others, [(g, h) for g in _GAUSS3 for h in _GAUSS3])))
            areas.append(area)
        for axis in range(3):
            for end in self.pole_ends(axis):
                areas[axis][at(axis, end)] = 0.0
            if self.periodic[axis]:
                areas[axis][at(axis, -1)] = areas[axis][at(axis, 0)]
        return areas[0], areas[1], areas[2]

    def cell_volumes(self) -> Array:
        """Volumes of the cells, shape (n1, n2, n3), unit length^3; closed forms where there are any.

        Examples
        --------
        >>> import numpy as np
        >>> grid = cylindrical_grid([0, 1], np.linspace(0, 2 * np.pi, 9), [0, 2])
        >>> float(grid.cell_volumes().sum() / (2 * np.pi))
        1.0
        """
        factors = volume_factors(self)
        if factors is not None:
            return outer(factors)
        volume = np.zeros(self.shape)
        points: list[tuple[tuple[float, float], ...]] = [(f, g, h) for f in _GAUSS3 for g in _GAUSS3 for h in _GAUSS3]

        def add(points: Points) -> None:
            for rows, q, weight in points:
                j = self.map.jacobian(*_open(*q))
                volume[rows] += np.einsum("i...,i...", j[:, 0], np.cross(j[:, 1], j[:, 2], axis=0)) * weight

        compute.for_each(add, _by_slabs(quadrature(self, [0, 1, 2], points)))
        return volume


def at(axis: int, index: int | slice) -> tuple[int | slice, ...]:
    """Index that picks `index` along `axis` of a three-dimensional array."""
    return tuple(index if d == axis else slice(None) for d in range(3))


def outer(factors: tuple[Array, Array, Array]) -> Array:
    """Product of one array per axis, shape (len1, len2, len3)."""
    f1, f2, f3 = _open(*factors)
    return np.asarray(f1 * f2 * f3)


def _open(q1: Array, q2: Array, q3: Array) -> Triple:
    return q1[:, None, None], q2[None, :, None], q3[None, None, :]


def _by_slabs(points: Iterator[tuple[slice, list[Array], Array]]) -> list[Points]:
    """The points of `quadrature`, those of each slab together."""
    return [list(group) for _, group in groupby(points, key=lambda point: point[0].start)]


def quadrature(
    grid: Grid, along: list[int], points: list[tuple[tuple[float, float], ...]]
) -> Iterator[tuple[slice, list[Array], Array]]:
    """Yield (rows, q, weight) for every slab of axis 1 and every quadrature point of a face, edge or cell.

    `along` are the axes integrated over; `points` holds, for each point, one (abscissa in [-1, 1], weight) per
    such axis. q are 1-D coordinate arrays (midpoint-based along the axes integrated, nodes elsewhere); weight is
    an array that broadcasts, and includes half the cell lengths.
    """
    full = [centres_of(grid.nodes[d]) if d in along else grid.nodes[d] for d in range(3)]
    half = {d: 0.5 * np.diff(grid.nodes[d]) for d in along}
    rows_each = max(1, _SLAB // (full[1].size * full[2].size))
    for start in range(0, full[0].size, rows_each):
        rows = slice(start, min(start + rows_each, full[0].size))
        for point in points:
            q, weight = [c.copy() for c in full], np.ones((1, 1, 1))
            for d, (abscissa, w) in zip(along, point, strict=True):
                q[d] += abscissa * half[d]
                scale = w * half[d]
                scale = scale[rows] if d == 0 else scale
                weight = weight * scale.reshape([-1 if e == d else 1 for e in range(3)])
            q[0] = q[0][rows]
            yield rows, q, weight


def area_factors(grid: Grid) -> tuple[tuple[Array, Array, Array], ...] | None:
    """Face areas as products of 1-D arrays: [normal axis][axis]; None for maps without closed forms."""
    q1, q2, _ = grid.nodes
    d1, d2, d3 = (np.diff(q) for q in grid.nodes)
    one1, one2, one3 = (np.ones(q.size) for q in grid.nodes)
    if grid.kind == "cartesian":
        return (one1, d2, d3), (d1, one2, d3), (d1, d2, one3)
    if grid.kind == "cylindrical":
        return (q1, d2, d3), (d1, one2, d3), (_half_squares(q1), d2, one3)
    if grid.kind == "spherical":
        belt = _half_squares(q1)
        return (q1**2, cosine_drop(q2), d3), (belt, sines(grid), d3), (belt, d2, one3)
    return None


def volume_factors(grid: Grid) -> tuple[Array, Array, Array] | None:
    """Cell volumes as a product of 1-D arrays; None for maps without closed forms."""
    q1, q2, _ = grid.nodes
    d1, d2, d3 = (np.diff(q) for q in grid.nodes)
    if grid.kind == "cartesian":
        return d1, d2, d3
    if grid.kind == "cylindrical":
        return _half_squares(q1), d2, d3
    if grid.kind == "spherical":
        cubes = d1 * (q1[1:] ** 2 + q1[1:] * q1[:-1] + q1[:-1] ** 2) / 3.0
        return cubes, cosine_drop(q2), d3
    return None


def _half_squares(nodes: Array) -> Array:
    """(b^2 - a^2) / 2 of every cell, without cancellation."""
    return np.asarray(np.diff(nodes) * centres_of(nodes))


def cosine_drop(theta: Array) -> Array:
    """cos(a) - cos(b) between neighbouring angles, without cancellation."""
    return np.asarray(2.0 * np.sin(centres_of(theta)) * np.sin(0.5 * np.diff(theta)))


def sines(grid: Grid) -> Array:
    """sin(theta) at the nodes of a spherical grid, exactly 0 at poles."""
    values = np.sin(grid.nodes[1])
    values[grid.pole_ends(1)] = 0.0
    return np.asarray(values)


def _ring_of(grid: Grid, axis: int) -> int:
    """The axis whose edges have no length at the pole of `axis`."""
    end = grid.pole_ends(axis)[0]
    q = [centres_of(nodes) for nodes in grid.nodes]
    q[axis] = grid.nodes[axis][end : end + 1] if end == 0 else grid.nodes[axis][-1:]
    tangents = grid.map.jacobian(*_open(*q))
    others = [d for d in range(3) if d != axis]
    lengths = [float(np.sqrt((tangents[:, d] ** 2).sum(axis=0)).max()) * np.diff(grid.nodes[d]).mean() for d in others]
    ring, other = (others[0], others[1]) if lengths[0] < lengths[1] else (others[1], others[0])
    if min(lengths) > 1e-6 * max(lengths):
        raise GridError(
            f"axis {axis + 1} is said to have a pole, but edges along axis {ring + 1} there are as long as "
            f"{min(lengths):.3g} ({min(lengths) / max(lengths):.1e} of those along axis {other + 1}), expected 0"
        )
    return ring


def cartesian_grid(
    x: ArrayLike, y: ArrayLike, z: ArrayLike, periodic: tuple[bool, bool, bool] = (False, False, False)
) -> Grid:
    """Grid of boxes.

    Parameters
    ----------
    x, y, z : array_like, 1-D
        Node positions, increasing, any unit of length.
    periodic : tuple of three bool
        Axes whose last node is their first again.

    Raises
    ------
    GridError
        If an axis is not increasing, not finite or shorter than two nodes.

    Examples
    --------
    >>> cartesian_grid([0, 1, 2], [0, 1], [0, 1, 4]).shape
    (2, 1, 2)
    """
    nodes = (checked_nodes(x, "x"), checked_nodes(y, "y"), checked_nodes(z, "z"))
    return Grid(CartesianMap(), nodes, _three(periodic, "periodic", (True, False)), (None, None, None))


def cylindrical_grid(R: ArrayLike, phi: ArrayLike, z: ArrayLike) -> Grid:
    """Grid in distance from the axis, azimuth and height.

    Parameters
    ----------
    R : array_like, 1-D
        Not negative; R[0] = 0 is the axis.
    phi : array_like, 1-D
        Radians; a span of 2 pi makes a seam.
    z : array_like, 1-D

    Raises
    ------
    GridError
        As `cartesian_grid`; if R is negative; if phi spans more than a full turn.

    Examples
    --------
    >>> import numpy as np
    >>> cylindrical_grid([0, 1, 2], np.linspace(0, 2 * np.pi, 9), [0, 1])
    <cylindrical grid: R 0..2 (2 cells, poles low); phi 0..6.28319 (8 cells, seam); z 0..1 (1 cells)>
    """
    radius = checked_nodes(R, "R")
    if radius[0] < 0:
        raise GridError(f"nodes of R: they begin at {radius[0]:.17g}, expected no negative distance")
    azimuth, seam = angle_with_seam(phi, "phi")
    pole: Poles = "low" if radius[0] == 0 else None
    return Grid(CylindricalMap(), (radius, azimuth, checked_nodes(z, "z")), (False, seam, False), (pole, None, None))


def spherical_grid(r: ArrayLike, theta: ArrayLike, phi: ArrayLike) -> Grid:
    """Grid in radius, angle from the z axis and azimuth.

    Parameters
    ----------
    r : array_like, 1-D
        Positive.
    theta : array_like, 1-D
        Radians in [0, pi]; an end at 0 or pi is a pole.
    phi : array_like, 1-D
        Radians; a span of 2 pi makes a seam.

    Raises
    ------
    GridError
        As `cartesian_grid`; if r is not positive; if an angle leaves its range.

    Examples
    --------
    >>> import numpy as np
    >>> grid = spherical_grid([1, 2], np.linspace(0, np.pi, 5), np.linspace(0, 2 * np.pi, 9))
    >>> grid.periodic, grid.poles
    ((False, False, True), (None, 'both', None))
    """
    radius = checked_nodes(r, "r")
    if radius[0] <= 0:
        raise GridError(
            f"nodes of r: they begin at {radius[0]:.17g}, expected r > 0 (cut the grid at a small positive radius)"
        )
    polar, poles = polar_angle(theta, "theta")
    azimuth, seam = angle_with_seam(phi, "phi")
    return Grid(SphericalMap(), (radius, polar, azimuth), (False, False, seam), (None, poles, None))


def warped_grid(
    q1: ArrayLike,
    q2: ArrayLike,
    q3: ArrayLike,
    to_cartesian: Callable[[Array, Array, Array], Triple],
    periodic: tuple[bool, bool, bool] = (False, False, False),
    poles: tuple[Poles, Poles, Poles] = (None, None, None),
) -> Grid:
    """Grid in the coordinates of any smooth one-to-one map.

    Parameters
    ----------
    q1, q2, q3 : array_like, 1-D
        Nodes in grid coordinates, increasing.
    to_cartesian : callable
        ``to_cartesian(q1, q2, q3) -> (x, y, z)`` with NumPy broadcasting in float64. It is also called a fiftieth
        of a cell beyond the ends, for derivatives.
    periodic : tuple of three bool
        Axes whose last node is their first again; the map must agree there.
    poles : tuple of None, "low", "high" or "both"
        Ends of an axis where the ring of another axis shrinks to a point.

    Raises
    ------
    GridError
        If nodes are bad, if the map does not return three arrays, gives a position that is not finite, does not
        close at a seam or pole, or turns a cell inside out.

    Examples
    --------
    >>> import numpy as np
    >>> q = np.linspace(0, 1, 5)
    >>> grid = warped_grid(q, q, q, lambda a, b, c: (a + 0.1 * np.sin(b), b, c))
    >>> float(grid.cell_volumes().sum().round(12))
    1.0
    """
    nodes = (checked_nodes(q1, "q1"), checked_nodes(q2, "q2"), checked_nodes(q3, "q3"))
    seams, ends = checked_ends(periodic, poles)
    steps = tuple(float(0.01 * np.diff(q).min()) for q in nodes)
    grid = Grid(WarpedMap(to_cartesian, (steps[0], steps[1], steps[2])), nodes, seams, ends)
    _check_map(grid)
    return grid


def checked_ends(periodic: tuple, poles: tuple) -> tuple[tuple[bool, bool, bool], tuple[Poles, Poles, Poles]]:
    """The arguments `periodic` and `poles`, or an error that says what is wrong with them."""
    return _three(periodic, "periodic", (True, False)), _three(poles, "poles", (None, "low", "high", "both"))


def _three(values: tuple, name: str, allowed: tuple) -> tuple:
    """Three values out of `allowed`, or an error that names the argument."""
    values = tuple(values)
    if len(values) != 3 or any(v not in allowed for v in values):
        raise GridError(f"{name}: {values!r}, expected three of {', '.join(map(repr, allowed))}")
    return values


def _check_map(grid: Grid) -> None:
    """Refuse a map that is not finite, does not close or turns cells inside out."""
    x = grid.node_positions()
    if not np.isfinite(x).all():
        place = np.argwhere(~np.isfinite(x))[0]
        raise GridError(f"to_cartesian gives {x[tuple(place)]} at node {place[1:].tolist()}, expected finite positions")
    size = float(np.abs(x - x.mean(axis=(1, 2, 3), keepdims=True)).max())
    for axis in range(3):
        if grid.periodic[axis]:
            gap = float(np.abs(np.take(x, 0, axis + 1) - np.take(x, -1, axis + 1)).max())
            if gap > 1e-9 * size:
                raise GridError(
                    f"axis {axis + 1} is said to be periodic, but its first and last nodes are {gap:.3g} apart"
                )
    _ = grid.ring_axis
    if 0 < least_corner(x)[0] < np.inf:  # infinite where no corner has a volume
        return
    j = grid.map.jacobian(*_open(*(centres_of(q) for q in grid.nodes)))
    det = np.einsum("i...,i...", j[:, 0], np.cross(j[:, 1], j[:, 2], axis=0))
    if not (det > 0).all():
        place = np.unravel_index(int(np.argmin(det)), det.shape)
        raise GridError(
            f"the map's Jacobian is {det[place]:.3g} in cell {[int(p) for p in place]}, expected positive everywhere "
            "(right-handed and one-to-one)"
        )
