"""Diagonal metric weights: what turns fluxes and circulations into energies.

The energy of a flux is half the sum of w F^2 with w = dual length / face area, the continuous form of which is in
Brackbill & Barnes (1980), The effect of nonzero div B on the numerical solution of the magnetohydrodynamic
equations. The solvers need the reciprocals, called conductances here, because they stay finite (zero) on collapsed
faces. On Cartesian, cylindrical and spherical grids every conductance is a product of one number per axis.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import reduce

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.forms.fields import Three
from fieldmover.grids.axes import centres_of, dual_lengths
from fieldmover.grids.grid import Grid, at, cosine_drop, outer, sines, volume_factors

Array = NDArray[np.float64]
Factors = tuple[Three, Three, Three]
Conductances = Sequence["Array | Products"]

_SLAB = 1 << 14  # cells worked on at a time


def face_factors(grid: Grid) -> Factors | None:
    """Conductances of faces, area / dual length, as products of 1-D arrays.

    Parameters
    ----------
    grid : Grid

    Returns
    -------
    tuple or None
        ``factors[d][e]``: the factor of axis e for faces normal to axis d; length n_d + 1 along d, n_e elsewhere;
        unit L in all. None where the map has no such form.

    Examples
    --------
    >>> import fieldmover as fm
    >>> face_factors(fm.cartesian_grid([0, 1, 2], [0, 1], [0, 1]))[0][0]
    array([2., 1., 2.])
    """
    steps = [np.diff(q) for q in grid.nodes]
    inverse = [1.0 / dual_lengths(q, seam) for q, seam in zip(grid.nodes, grid.periodic, strict=True)]
    (d1, d2, d3), (i1, i2, i3) = steps, inverse
    centre = [centres_of(q) for q in grid.nodes]
    if grid.kind == "cartesian":
        return (i1, d2, d3), (d1, i2, d3), (d1, d2, i3)
    if grid.kind == "cylindrical":
        R = grid.nodes[0]
        return (R * i1, d2, d3), (d1 / centre[0], i2, d3), (d1 * centre[0], d2, i3)
    if grid.kind == "spherical":
        r = grid.nodes[0]
        belt = cosine_drop(grid.nodes[1])
        return (r**2 * i1, belt, d3), (d1, sines(grid) * i2, d3), (d1, d2 / np.sin(centre[1]), i3)
    return None


class Products:
    """Products of one number per axis, worked out where they are asked for: what takes the place of a large array.

    Parameters
    ----------
    factors : tuple of three ndarrays

    Examples
    --------
    >>> Products((np.arange(3.0), np.arange(4.0), np.ones(2)))[1:, 2]
    array([[2., 2.],
           [4., 4.]])
    """

    def __init__(self, factors: Three) -> None:
        self._factors = factors

    def __getitem__(self, index: int | slice | tuple[int | slice, ...]) -> Array:
        given = index if isinstance(index, tuple) else (index,)
        whole = (*given, *[slice(None)] * (3 - len(given)))
        return np.asarray(reduce(np.multiply.outer, (f[i] for f, i in zip(self._factors, whole, strict=True))))


def face_conductances(grid: Grid) -> Three:
    """Conductances of all faces, area / dual length, unit L; 0 on collapsed faces.

    The dual length is the distance between the two cell centres beside the face, at a wall from the centre to
    the wall. On warped grids the area is that of the shadow which the four corners cast along the normal, half
    the cross product of the diagonals: second order, as the dual length is.

    Parameters
    ----------
    grid : Grid

    Returns
    -------
    tuple of three ndarrays
        Shapes of the faces.
    """
    factors = face_factors(grid)
    if factors is not None:
        return outer(factors[0]), outer(factors[1]), outer(factors[2])
    result = np.empty(grid.face_shape(0)), np.empty(grid.face_shape(1)), np.empty(grid.face_shape(2))
    middles = [_dual_nodes(grid, axis) for axis in range(3)]

    def work(rows: slice) -> None:
        x, y = _positions(grid, grid.nodes, rows, 1), _positions(grid, middles, rows, 2)
        for axis in range(3):
            # The middles of the other two axes that are no walls.
            inner = tuple(slice(None) if d == axis else slice(1, -1) for d in range(3))
            step = np.diff(y[(slice(None), *inner)], axis=axis + 1)
            faces = slice(rows.start, rows.stop + (axis == 0))
            result[axis][faces] = _shadows(x, axis) / _lengths(step)

    compute.for_each(work, _slabs(grid))
    for axis, g in enumerate(result):
        for end in grid.pole_ends(axis):
            g[at(axis, end)] = 0.0
        if grid.periodic[axis]:  # half cells on both sides, one after the other
            with np.errstate(divide="ignore"):  # of faces without area, which stay at 0
                g[at(axis, 0)] = g[at(axis, -1)] = 1.0 / (1.0 / g[at(axis, 0)] + 1.0 / g[at(axis, -1)])
    return result


def near_volumes(grid: Grid, rows: slice) -> Array:
    """Volumes of the cells in rows of axis 1: closed forms, or to second order the product of their mean edges.

    Parameters
    ----------
    grid : Grid
    rows : slice

    Returns
    -------
    ndarray, shape (rows, n2, n3)
        Unit L^3.
    """
    factors = volume_factors(grid)
    if factors is not None:
        return outer((factors[0][rows], factors[1], factors[2]))
    x = _positions(grid, grid.nodes, rows, 1)
    a, b, c = (_mean_edges(x, axis) for axis in range(3))
    return np.asarray(_dot(a, _cross(b, c)))


def _slabs(grid: Grid) -> list[slice]:
    n1, n2, n3 = grid.shape
    return compute.slabs(n1, _SLAB // (n2 * n3))


def _positions(grid: Grid, q: Sequence[Array], rows: slice, beyond: int) -> Array:
    """Cartesian positions at the products of three lists of coordinates, of axis 1 a part and `beyond` more."""
    part = q[0][rows.start : rows.stop + beyond]
    return np.stack(grid.map.to_cartesian(part[:, None, None], q[1][None, :, None], q[2][None, None, :]))


def _shadows(x: Array, axis: int) -> Array:
    """Areas of the faces normal to an axis as their corners give them."""
    a, b = (d for d in range(3) if d != axis)

    def corner(high_a: bool, high_b: bool) -> Array:
        return x[(slice(None), *_side(a, high_a))][(slice(None), *_side(b, high_b))]

    rise, fall = corner(True, True) - corner(False, False), corner(True, False) - corner(False, True)
    return np.asarray(0.5 * _lengths(_cross(rise, fall)))


def _mean_edges(x: Array, axis: int) -> Array:
    """Mean of the four edges of each cell along an axis."""
    edges = np.diff(x, axis=axis + 1)
    for d in range(3):
        if d != axis:
            edges = 0.5 * (edges[(slice(None), *_side(d, True))] + edges[(slice(None), *_side(d, False))])
    return edges


def _side(axis: int, high: bool) -> tuple[int | slice, ...]:
    return at(axis, slice(1, None) if high else slice(None, -1))


def _cross(a: Array, b: Array) -> Array:
    (x, y, z), (u, v, w) = a, b
    return np.stack((y * w - z * v, z * u - x * w, x * v - y * u))


def _dot(a: Array, b: Array) -> Array:
    (x, y, z), (u, v, w) = a, b
    return np.asarray(x * u + y * v + z * w)


def _lengths(a: Array) -> Array:
    return np.asarray(np.sqrt(_dot(a, a)))


def edge_factors(grid: Grid) -> Factors | None:
    """Weights of edges, dual area / edge length, as products of 1-D arrays.

    Parameters
    ----------
    grid : Grid

    Returns
    -------
    tuple or None
        ``factors[d][e]``: the factor of axis e for edges along axis d; length n_d along d, n_e + 1 elsewhere; unit
        L in all. Ring edges at a pole, which have no length, have weight 0. None where the map has no such form.
    """
    steps = [1.0 / np.diff(q) for q in grid.nodes]
    dual = [dual_lengths(q, seam) for q, seam in zip(grid.nodes, grid.periodic, strict=True)]
    (s1, s2, s3), (d1, d2, d3) = steps, dual
    centre = [centres_of(q) for q in grid.nodes]
    if grid.kind == "cartesian":
        return (s1, d2, d3), (d1, s2, d3), (d1, d2, s3)
    if grid.kind == "cylindrical":
        ring = np.divide(d1, grid.nodes[0], out=np.zeros_like(d1), where=grid.nodes[0] > 0)
        return (centre[0] * s1, d2, d3), (ring, s2, d3), (_dual_half_squares(grid, 0), d2, s3)
    if grid.kind == "spherical":
        across = _dual_half_squares(grid, 0) / grid.nodes[0]
        sine = sines(grid)
        ring = np.divide(d2, sine, out=np.zeros_like(d2), where=sine > 0)
        belt = cosine_drop(_dual_nodes(grid, 1))
        return (centre[0] ** 2 * s1, belt, d3), (across, np.sin(centre[1]) * s2, d3), (across, ring, s3)
    return None


def _dual_nodes(grid: Grid, axis: int) -> Array:
    """Cell centres with the two walls: the ends of the dual cells of an axis without seam."""
    nodes = grid.nodes[axis]
    return np.concatenate([nodes[:1], centres_of(nodes), nodes[-1:]])


def _dual_half_squares(grid: Grid, axis: int) -> Array:
    """(b^2 - a^2) / 2 over the dual cell of each node."""
    ends = _dual_nodes(grid, axis)
    return np.asarray(np.diff(ends) * centres_of(ends))


def energy(faces: Three, conductances: Three, periodic: tuple[bool, bool, bool]) -> float:
    """Half the sum of F^2 / conductance over all faces, each face of a seam once (Heaviside-Lorentz: B^2 / 2).

    Parameters
    ----------
    faces : tuple of three ndarrays
        Fluxes, unit B L^2.
    conductances : tuple of three ndarrays
        As `face_conductances` gives them; faces of conductance 0 are left out.
    periodic : tuple of three bool

    Returns
    -------
    float
        Unit B^2 L^3.
    """
    total = 0.0
    for axis in range(3):
        part = slice(None, -1) if periodic[axis] else slice(None)
        f, c = faces[axis][at(axis, part)], conductances[axis][at(axis, part)]
        for start in range(0, f.shape[0], 16):
            rows = slice(start, start + 16)
            ratio = np.divide(f[rows] ** 2, c[rows], out=np.zeros_like(f[rows]), where=c[rows] > 0)
            total += float(ratio.sum())
    return 0.5 * total
