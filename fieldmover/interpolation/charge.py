"""The field of a point charge on any grid, and moves of fields that hold one.

A field with net flux through a closed surface has no vector potential. Subtracting the field of a point charge that
carries this flux leaves one that has. The flux of a point charge through a face is the solid angle in which the face is
seen from it. It is added up from one number per edge, the solid angle of the triangle that the edge makes with a
fixed direction (van Oosterom & Strackee 1983, The solid angle of a plane triangle), so that what enters one cell leaves
its neighbour. The sum over the edges of a face is known but for whole spheres; the face is taken to fill less than half
of one. An edge that is not straight adds the solid angle between it and its chord, by quadrature. All are rounded to
multiples of one power of two, which makes the net flux out of every cell exactly zero, or exactly the charge.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover import compute
from fieldmover.errors import FieldError, GridError, PlaceError
from fieldmover.forms.fields import FaceFlux, Three, close_edges, close_faces
from fieldmover.forms.incidence import d1, d2
from fieldmover.grids.grid import Grid, at, cosine_drop
from fieldmover.grids.placement import placement
from fieldmover.interpolation.coverage import Outside
from fieldmover.interpolation.flux import Order, move_flux
from fieldmover.interpolation.locate import Locator
from fieldmover.projection.exact import close, lines, search
from fieldmover.projection.plan import make_plan
from fieldmover.projection.request import hole_axis

Array = NDArray[np.float64]

_SPHERE = 4.0 * np.pi
_BITS = 51  # of a whole sphere: sums of four edges, each at most one of it, are exact
_AXIS = np.array([0.53217, -0.26981, 0.0])
_AXIS[2] = np.sqrt(1.0 - _AXIS @ _AXIS)  # towards nothing in particular
_STRAIGHT = {"cartesian": (0, 1, 2), "cylindrical": (0, 2), "spherical": (0,)}
_SHORT, _LONGEST = 0.1, 0.5  # angles, radians, of pieces of an edge that 4 and 8 points are enough for
_MOST_PIECES = 64
_ON_FACE = 1e-9  # of a sphere: a face that fills half of it but for this holds the centre
_ON_EDGE = 1e-12  # cosine beyond -1 of the angle between the ends of an edge through the centre
_CLEAR = 0.4  # of the width of a cell: nearer to its middle than this a charge is clear of its faces
_CENTRED = 1e-12  # of the smallest radius: nearer to the origin than this the centre is there
_CHUNK = 1 << 14  # edges at a time
_NEUTRAL = 1e-10  # net flux, over the sum of the fluxes it is the balance of, that is round-off
_NOTHING = 1e-13  # of the charge's own field: what is left below this is round-off


@dataclass(frozen=True, eq=False)
class Charged:
    """What `move_charged` returns.

    Attributes
    ----------
    flux : FaceFlux
        On the target. The net flux out of every cell is exactly zero, but for the one that holds the charge.
    charge : float
        Net flux out of the hole of the source, unit as the fluxes.
    cell : tuple of three int, or None
        Cell of the target that holds the charge and has it as its net flux.
    centre : ndarray, shape (3,)
        Where the charge was put: the centre given, or the middle of the cell of the target that holds it if it is
        within a tenth of the cell's width of a face.
    """

    flux: FaceFlux
    charge: float
    cell: tuple[int, int, int] | None
    centre: Array


def point_charge_flux(grid: Grid, charge: float, centre: ArrayLike = (0.0, 0.0, 0.0)) -> FaceFlux:
    """Flux of the field of a point charge through every face.

    Parameters
    ----------
    grid : Grid
    charge : float
        Net flux out of any surface round the centre, unit B L^2. The field is charge / (4 pi r^2), away from it.
    centre : array_like, shape (3,)
        Cartesian position.

    Returns
    -------
    FaceFlux
        Solid angle over 4 pi, times the charge: to round-off where edges are straight and on spherical grids about
        the centre, by eight points of quadrature on each piece of a curved edge else. The net flux out of every cell
        is exactly zero, but for the one that holds the charge.

    Raises
    ------
    FieldError
        If the charge is not finite.
    PlaceError
        If the centre is not finite, or lies on a face, or so near to a curved one that it fills half of all directions
        or more.
    GridError
        If a Cartesian axis has a seam, through which such a field does not continue; if there are less than three
        cells round a pole.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> box = fm.cartesian_grid([-1, 1], [-1, 1], [-1, 1])
    >>> flux = point_charge_flux(box, 6.0)
    >>> flux.f1.ravel().round(12)
    array([-1.,  1.])
    >>> float(fm.divergence(flux).cells[0, 0, 0])
    6.0
    """
    place = _checked_place(centre)
    if not np.isfinite(charge):
        raise FieldError(f"point charge {charge!r}: expected a finite number")
    if grid.kind == "cartesian" and any(grid.periodic):
        raise GridError(
            f"point charge: axis {grid.map.names[grid.periodic.index(True)]} is periodic, expected a grid without such "
            "seams: the field of a charge does not come back as it leaves"
        )
    for axis, ring in enumerate(grid.ring_axis):
        if ring is not None and grid.shape[ring] < 3:
            raise GridError(
                f"point charge: {grid.shape[ring]} cells along {grid.map.names[ring]} round the pole of "
                f"{grid.map.names[axis]}, expected at least 3, to tell the two sides of their faces"
            )
    if _is_about(grid, place):
        share = cosine_drop(grid.nodes[1])[:, None] * np.diff(grid.nodes[2]) * (charge / _SPHERE)
        f1 = np.broadcast_to(share, grid.face_shape(0))
        return FaceFlux(grid, (f1, np.zeros(grid.face_shape(1)), np.zeros(grid.face_shape(2))))
    faces = _exact_fluxes(grid, charge, place)
    return FaceFlux(grid, faces)


def split_charge(flux: FaceFlux, centre: ArrayLike = (0.0, 0.0, 0.0)) -> tuple[float, FaceFlux]:
    """Take the field of a point charge out of a flux, so that what is left has a vector potential.

    Parameters
    ----------
    flux : FaceFlux
        Divergence-free.
    centre : array_like, shape (3,)
        In the hole of the grid.

    Returns
    -------
    charge : float
        Net flux out of the hole, unit B L^2; 0 on a grid that has none, or where it is round-off.
    rest : FaceFlux
        Flux without it; `flux` itself if the charge is 0.

    Raises
    ------
    PlaceError
        If the centre is not in the hole.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> shell = fm.spherical_grid([1, 2, 3], np.linspace(0, np.pi, 9), np.linspace(0, 2 * np.pi, 17))
    >>> flux = fm.flux_from_function(shell, lambda *x: tuple(c / sum(b * b for b in x) ** 1.5 for c in x))
    >>> charge, rest = split_charge(flux)
    >>> round(charge / np.pi, 8), bool(abs(rest.f1).max() < 1e-8)
    (4.0, True)
    """
    grid, around = flux.grid, hole_axis(flux.grid)
    if around is None:
        return 0.0, flux
    wall = flux.faces[around][at(around, 0)]
    charge = math.fsum(wall.ravel())
    if abs(charge) <= _NEUTRAL * float(np.abs(wall).sum()):
        return 0.0, flux
    own = point_charge_flux(grid, charge, centre)
    caught = math.fsum(own.faces[around][at(around, 0)].ravel())
    if abs(caught - charge) > 1e-6 * abs(charge):
        raise PlaceError(
            f"point charge: the centre {np.asarray(centre).tolist()} is not in the hole inside "
            f"{grid.map.names[around]} = {grid.nodes[around][0]:.6g}, whose surface carries the net flux {charge:.9g}"
        )
    largest = max(float(np.abs(f).max()) for f in own.faces)
    rest = []
    for f, g in zip(flux.faces, own.faces, strict=True):
        left = f - g
        left[np.abs(left) < _NOTHING * largest] = 0.0  # of a point charge alone nothing must be left to have a net flux
        rest.append(left)
    return charge, FaceFlux(grid, (rest[0], rest[1], rest[2]))


def move_charged(
    flux: FaceFlux,
    target: Grid,
    order: Order = 3,
    outside: Outside = "least energy",
    centre: ArrayLike = (0.0, 0.0, 0.0),
) -> Charged:
    """Move flux that has a net flux out of the hole of its grid, as the field of a point charge and a neutral rest.

    Parameters
    ----------
    flux, target, order, outside
        As for `move_flux`, which moves the rest.
    centre : array_like, shape (3,)
        Where the charge is, in the hole of the source. Near faces of the target it is moved, see `Charged`; where the
        source reaches that makes no difference.

    Returns
    -------
    Charged

    Raises
    ------
    FieldError, GridError
        As `move_flux`, `split_charge` and `point_charge_flux`.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> shell = fm.spherical_grid([1, 2, 3], np.linspace(0, np.pi, 9), np.linspace(0, 2 * np.pi, 17))
    >>> box = fm.cartesian_grid(*[np.linspace(-1.5, 1.5, 4)] * 3)
    >>> moved = move_charged(point_charge_flux(shell, 6.0), box)
    >>> round(moved.charge, 12), moved.cell, float(moved.flux.f1[2, 1, 1].round(12))
    (6.0, (1, 1, 1), 1.0)
    """
    clear = clear_centre(target, centre)
    place = np.array(centre, dtype=np.float64) if clear is None else clear
    charge, rest = split_charge(flux, place)
    moved = move_flux(rest, target, order, outside)
    if charge == 0.0:
        return Charged(moved, 0.0, None, place)
    own = point_charge_flux(target, charge, place)
    net = d2(own.faces)
    held = np.abs(net) > 0.5 * abs(charge)
    i, j, k = (int(n) for n in np.unravel_index(int(np.argmax(held)), held.shape))
    a, b, c = (f + g for f, g in zip(moved.faces, own.faces, strict=True))
    total = FaceFlux(target, (a, b, c))
    if np.abs(d2(total.faces)[~held]).any():  # multiples of two quanta, so that their sums were rounded
        plan = make_plan(total, "open", None, None, held if held.any() else None, "free")
        forest = lines(plan.operator) if plan.free is None else search(plan.operator, plan.free, plan.excised)
        close(total.faces, plan.operator, forest)
    return Charged(total, charge, (i, j, k) if held.any() else None, place)


def clear_centre(grid: Grid, centre: ArrayLike) -> Array | None:
    """The centre of a charge, or the middle of the cell that holds it if that is too near to its faces; None outside.

    Where a charge in a hole is put makes no difference outside of the hole, but faces that it comes near to would carry
    almost half of its flux each, and on a face it cannot lie.

    Examples
    --------
    >>> from fieldmover import cartesian_grid
    >>> box = cartesian_grid([-2, 0, 2], [-3, 3], [-3, 3])
    >>> clear_centre(box, (0, 0, 0)), clear_centre(box, (0.5, 0, 0)), clear_centre(box, (9, 0, 0))
    (array([1., 0., 0.]), array([0.5, 0. , 0. ]), None)
    """
    place = _checked_place(centre)
    flat, within = Locator(grid).places(place[:, None])
    if flat[0] < 0:
        return None
    if (np.abs(within) < _CLEAR).all():
        return place
    cell = np.unravel_index(flat, grid.shape)
    middle = (0.5 * (nodes[i] + nodes[i + 1]) for nodes, i in zip(grid.nodes, cell, strict=True))
    return np.concatenate(grid.map.to_cartesian(*middle))


def _checked_place(centre: ArrayLike) -> Array:
    place = np.array(centre, dtype=np.float64)
    if place.shape != (3,) or not np.isfinite(place).all():
        raise PlaceError(f"point charge at {centre!r}: expected three finite numbers")
    return place


def _is_about(grid: Grid, centre: Array) -> bool:
    """Whether a spherical grid has its origin at the centre."""
    where = placement(grid)
    origin = np.zeros(3) if where is None else where[0]
    return grid.kind == "spherical" and bool(np.abs(origin - centre).max() <= _CENTRED * grid.nodes[0][0])


def _exact_fluxes(grid: Grid, charge: float, centre: Array) -> Three:
    """Fluxes whose sums over cells are exactly 0 or the charge (rounded to as many bits)."""
    if charge == 0.0:
        return np.zeros(grid.face_shape(0)), np.zeros(grid.face_shape(1)), np.zeros(grid.face_shape(2))
    quantum = 2.0 ** (math.ceil(math.log2(abs(charge))) - _BITS)
    a, b, c = (np.rint(e / quantum) * quantum for e in edge_fluxes(grid, charge, centre))
    faces = d1((a, b, c))
    whole = unwind(faces, charge, quantum)
    close_faces(grid, faces)
    check_place(grid, faces, whole, centre)
    return faces


def edge_fluxes(grid: Grid, charge: float, centre: Array) -> Three:
    """Circulations round faces whose curl is the flux of a point charge but for multiples of the charge."""
    a, b, c = (_edge_angles(grid, axis, centre) * (charge / _SPHERE) for axis in range(3))
    close_edges(grid, (a, b, c))
    return a, b, c


def unwind(faces: Three, charge: float, quantum: float) -> float:
    """Take multiples of the charge out of fluxes, in place, so that none exceeds half of it.

    Returns the charge as a multiple of the quantum.
    """
    whole = round(charge / quantum) * quantum
    for f in faces:
        f -= whole * np.rint(f / whole)
    return whole


def check_place(grid: Grid, faces: Three, whole: float, centre: Array) -> tuple[int, int, int] | None:
    """The cell that holds the charge; an error if the fluxes do not say the same."""
    net = d2(faces).reshape(-1)
    expected = np.zeros(net.size)
    cell = int(Locator(grid).cells(centre[:, None])[0])
    if cell >= 0:
        expected[cell] = whole
    if max(float(np.abs(f).max()) for f in faces) > (0.5 - _ON_FACE) * abs(whole) or (net != expected).any():
        raise PlaceError(
            f"point charge: the centre {centre.tolist()} lies on a face, or so near to one that it fills half of all "
            "directions; expected a place well inside a cell or outside the grid (the charge of a hole may be put "
            "anywhere in the hole)"
        )
    i, j, k = (int(n) for n in np.unravel_index(max(cell, 0), grid.shape))
    return (i, j, k) if cell >= 0 else None


def _edge_angles(grid: Grid, axis: int, centre: Array) -> Array:
    """Solid angle between each edge along an axis and a fixed direction, mod 4 pi; shape of the edges."""
    shape = grid.edge_shape(axis)
    out = np.empty(int(np.prod(shape)))
    straight = axis in _STRAIGHT.get(grid.kind, ())

    def work(part: slice) -> None:
        index = np.unravel_index(np.arange(part.start, part.stop), shape)
        q = [nodes[i] for nodes, i in zip(grid.nodes, index, strict=True)]
        step = grid.nodes[axis][index[axis] + 1] - q[axis]
        if straight:
            out[part] = _angles(grid, axis, centre, q, step, 1, 0)
            return
        points, pieces = _rule(grid, axis, centre, q, step)
        for many, count in sorted(set(zip(points.tolist(), pieces.tolist(), strict=True))):
            group = (points == many) & (pieces == count)
            out[part][group] = _angles(grid, axis, centre, [c[group] for c in q], step[group], count, many)

    compute.for_each(work, compute.slabs(out.size, _CHUNK))
    return out.reshape(shape)


def _rule(
    grid: Grid, axis: int, centre: Array, q: list[Array], step: Array
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Points on each piece of each edge, and how many pieces, from the angles between its ends and its middle."""
    ends = [_directions(grid, axis, centre, q, step * part) for part in (0.0, 0.5, 1.0)]
    length = sum(np.arccos(np.clip((a * b).sum(axis=0), -1.0, 1.0)) for a, b in pairwise(ends))
    pieces = 2 ** np.ceil(np.log2(np.clip(length / _LONGEST, 1.0, _MOST_PIECES)))
    return np.where(length > _SHORT, 8, 4), pieces.astype(np.int64)


def _directions(grid: Grid, axis: int, centre: Array, q: list[Array], along: Array) -> Array:
    """Unit vectors from the centre, shape (3, N), to points of edges."""
    point = list(q)
    point[axis] = q[axis] + along
    d = np.stack(grid.map.to_cartesian(*point)) - centre[:, None]
    length = np.sqrt((d * d).sum(axis=0))
    if not length.all():
        raise PlaceError(f"point charge: the centre {centre.tolist()} lies on an edge, expected it off all faces")
    return np.asarray(d / length)


def _angles(grid: Grid, axis: int, centre: Array, q: list[Array], step: Array, pieces: int, points: int) -> Array:
    """Solid angles of edges, in pieces: triangles to the axis, and what lies between a curved piece and its chord."""
    total = np.zeros(step.size)
    rule = np.polynomial.legendre.leggauss(points) if points else ((), ())
    begin = _directions(grid, axis, centre, q, 0.0 * step)
    for piece in range(pieces):
        end = _directions(grid, axis, centre, q, step * ((piece + 1) / pieces))
        cosine = (begin * end).sum(axis=0)
        if (cosine < _ON_EDGE - 1.0).any():
            raise PlaceError(f"point charge: the centre {centre.tolist()} lies on an edge, expected it off all faces")
        volume = _AXIS @ np.cross(begin, end, axis=0)
        total += 2.0 * np.arctan2(volume, 1.0 + cosine + _AXIS @ begin + _AXIS @ end)
        middle = begin + end
        middle /= np.sqrt((middle * middle).sum(axis=0))
        for abscissa, weight in zip(*rule, strict=True):
            point = list(q)
            point[axis] = q[axis] + step * ((piece + 0.5 * (1.0 + abscissa)) / pieces)
            d = np.stack(grid.map.to_cartesian(*point)) - centre[:, None]
            tangent = grid.map.jacobian(*point)[:, axis] * (step * (0.5 * weight / pieces))
            square = (d * d).sum(axis=0)
            swept = (middle * np.cross(d, tangent, axis=0)).sum(axis=0)
            total += swept / (square + (middle * d).sum(axis=0) * np.sqrt(square))
        begin = end
    return total
