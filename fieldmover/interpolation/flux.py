"""Moving magnetic flux between grids: potential, spline 1-form, circulation along every target edge, d1.

The divergence of the result is zero bit for bit: edge values are rounded to multiples of one power of two, small
enough to lie at the round-off of the largest of them, and large enough for all sums of d1 and d2 to be exact in
double precision.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import partial
from itertools import product
from typing import Literal, get_args

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.errors import FieldError
from fieldmover.forms.fields import EdgePotential, FaceFlux, Three, close_edges
from fieldmover.forms.incidence import d1
from fieldmover.grids.grid import Grid, at
from fieldmover.interpolation.aligned import move_aligned, same_coordinates
from fieldmover.interpolation.coverage import Outside, fill, known_faces
from fieldmover.interpolation.evaluate import PotentialSpline, hunt
from fieldmover.interpolation.limited import move_limited
from fieldmover.interpolation.lines import integrate_lines
from fieldmover.interpolation.locate import Locator, inside
from fieldmover.interpolation.uniform import split_uniform, uniform_edges, uniform_faces
from fieldmover.projection.potential import potential

Array = NDArray[np.float64]
Known = tuple[NDArray[np.bool_], NDArray[np.bool_], NDArray[np.bool_]]
Order = Literal[1, 3, 5, "limited"]

_BRICK = (16, 16, 32)  # nodes located together: their part of the source's coefficients stays in cache
_EDGES = 1 << 12  # edges that are not on the lattice of nodes, at a time
_MOST_PIECES = 16


def move_flux(flux: FaceFlux, target: Grid, order: Order = 3, outside: Outside = "least energy") -> FaceFlux:
    """Move magnetic flux to another grid with zero divergence.

    Parameters
    ----------
    flux : FaceFlux
        Divergence-free to round-off; `project` makes it so.
    target : Grid
        In the same Cartesian frame and unit of length.
    order : {1, 3, 5, "limited"}
        Degree of the spline. 3 for smooth fields, 5 where they are very well resolved; 1 never overshoots, but smears;
        "limited" is 3 where the field is resolved and between 1 and 3 at sheets and shocks (see `limited`).
    outside : {"least energy", "zero", "refuse"}
        What the target's faces carry where the source does not reach: the divergence-free field of least energy that
        matches the known faces; nothing, but for a layer of two cells that closes the field lines; or an error.

    Returns
    -------
    FaceFlux
        Fluxes on the target, unit as those of the source. The net flux out of every cell is exactly zero.

    Raises
    ------
    FieldError
        If the flux has divergence, the order is unknown, or the target leaves the source with outside="refuse".
    ChargeError
        If the flux has no potential because a closed surface carries net flux. (The mean field of a periodic box is no
        obstacle: it is moved apart.)

    Notes
    -----
    Kreeft, Palha & Gerritsma (2011) and Buffa, Sangalli & Vazquez (2010): the spline 1-form commutes with d, so that
    a gradient added to the potential changes the result by the error of quadrature only.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> source = fm.cylindrical_grid(np.linspace(0, 2, 9), np.linspace(0, 2 * np.pi, 17), np.linspace(-1, 1, 9))
    >>> flux = fm.curl(fm.potential_from_function(source, lambda x, y, z: (-y / 2, x / 2, 0 * z)))
    >>> box = fm.cartesian_grid(*[np.linspace(-0.5, 0.5, 5)] * 3)
    >>> moved = fm.move_flux(flux, box)
    >>> bool(abs(moved.f3 - 1 / 16).max() < 1e-3), float(abs(fm.divergence(moved).cells).max())
    (True, 0.0)
    """
    if order not in get_args(Order):
        raise FieldError(f"order: {order!r}, expected one of {', '.join(map(repr, get_args(Order)))}")
    if outside not in get_args(Outside):
        raise FieldError(f"outside: {outside!r}, expected one of {', '.join(map(repr, get_args(Outside)))}")
    mean, rest = split_uniform(flux)
    edges, known = move_potential(potential(rest), target, order)
    uniform = uniform_faces(target, mean) if mean.any() else None
    if mean.any() and uniform is None:
        for a, b in zip(edges, uniform_edges(target, mean), strict=True):
            a += b
    faces, quantum = _exact_curl(edges, 0.0 if uniform is None else _largest(uniform))
    if uniform is not None:
        _round(uniform, quantum)
        for f, u in zip(faces, uniform, strict=True):
            f += u
    covered = known_faces(known)
    if all(c.all() for c in covered):
        return FaceFlux(target, faces)
    return fill(FaceFlux(target, faces), covered, outside, quantum)


def move_potential(pot: EdgePotential, target: Grid, order: Order = 3) -> tuple[Three, Known]:
    """Circulation of a source's potential along every edge of another grid.

    Parameters
    ----------
    pot : EdgePotential
        In a smooth gauge: a rough one costs accuracy near poles.
    target : Grid
    order : {1, 3, 5, "limited"}

    Returns
    -------
    edges : tuple of three ndarrays
        Circulations; 0 on edges that leave the source.
    known : tuple of three bool ndarrays
        Edges that lie wholly in the source.
    """
    if order == "limited":
        return move_limited(pot, target, move_potential)
    move = move_aligned if same_coordinates(pot.grid, target) else _move_across
    edges, known = move(pot, target, order)
    close_edges(target, edges)
    for axis in range(3):
        for mask in known:
            if target.periodic[axis] and mask.shape[axis] > target.shape[axis]:
                mask[at(axis, 0)] &= mask[at(axis, -1)]
                mask[at(axis, -1)] = mask[at(axis, 0)]
    return edges, known


def _move_across(pot: EdgePotential, target: Grid, order: int) -> tuple[Three, Known]:
    """Edges of a grid in other coordinates: from nodes where that is good enough, else from points of their own."""
    spline, locator = PotentialSpline(pot, order), Locator(pot.grid)
    edges = [np.full(target.edge_shape(d), np.nan) for d in range(3)]
    reached = _from_nodes(spline, locator, target, edges)
    known = []
    for axis, values in enumerate(edges):
        both = reached[at(axis, slice(None, -1))] & reached[at(axis, slice(1, None))]
        missing = np.argwhere(np.isnan(values) & both)
        parts = compute.slabs(len(missing), _EDGES)
        found = compute.for_each(partial(_direct, spline, locator, target, axis), [missing[part] for part in parts])
        for part, integrals in zip(parts, found, strict=True):
            values[tuple(missing[part].T)] = integrals
        known.append(np.isfinite(values))
        values[~known[axis]] = 0.0
    return (edges[0], edges[1], edges[2]), (known[0], known[1], known[2])


def _from_nodes(spline: PotentialSpline, locator: Locator, target: Grid, edges: list[Array]) -> NDArray[np.bool_]:
    """Find the nodes in the source; from them integrate along the edges on which the potential is resolved.

    Edges left over keep their NaN. At order 1, whose form jumps from cell to cell, all do.
    """
    rates = [np.empty(target.node_shape()) for _ in range(3)] if spline.order > 1 else []
    reached = np.empty(target.node_shape(), dtype=bool)
    longest = [np.maximum(np.diff(q, append=q[-1]), np.diff(q, prepend=q[0])) for q in target.nodes]
    allowed = _cells_allowed(spline.grid)

    def work(brick: tuple[slice, ...]) -> None:
        first, second, third = (q[part] for q, part in zip(target.nodes, brick, strict=True))
        nodes = (first[:, None, None], second[None, :, None], third[None, None, :])
        x = np.stack(target.map.to_cartesian(*nodes))
        shape = x.shape[1:]
        q, dq = locator.pull_back(x.reshape(3, -1), target.map.jacobian(*nodes).reshape(3, 3, -1))
        here = inside(spline.grid, q)
        reached[brick] = here.reshape(shape)
        if not rates:
            return
        q[:, ~here] = np.nan
        covectors = spline.covectors(q).reshape(3, *shape)
        steps = (step[part] for step, part in zip(longest, brick, strict=True))
        corner = (part.start for part in brick)
        _rates(
            q.reshape(3, *shape),
            dq.reshape(3, 3, *shape),
            covectors,
            *steps,
            *spline.grid.nodes,
            allowed,
            *corner,
            *rates,
        )

    bricks = product(*(compute.slabs(n, size) for n, size in zip(target.node_shape(), _BRICK, strict=True)))
    compute.for_each(work, bricks)
    for axis, rate in enumerate(rates):
        integrate_lines(rate, axis, target.nodes[axis], target.periodic[axis], edges[axis])
    return reached


def _cells_allowed(source: Grid) -> Array:
    """How many cells of the source an edge may span before it is cut in pieces.

    Along the ring of a pole cells are narrower than the field varies, so more of them.
    """
    return np.array([8.0 if axis in source.ring_axis else 2.0 for axis in range(3)])


@dataclass(frozen=True, eq=False)
class _Edges:
    """Single target edges along one axis: where each starts in the target's coordinates, and its length there."""

    target: Grid
    axis: int
    start: list[Array]
    step: Array

    def some(self, group: NDArray[np.int64]) -> _Edges:
        return replace(self, start=[s[group] for s in self.start], step=self.step[group])

    def at_parts(self, where: Array) -> tuple[Array, Array]:
        """Positions at the parts `where` of each edge, tangents per edge: shape (3, edges, len(where))."""
        q = [np.repeat(s[:, None], where.size, axis=1) for s in self.start]
        q[self.axis] = q[self.axis] + self.step[:, None] * where
        position = np.stack(self.target.map.to_cartesian(*q))
        return position, self.target.map.jacobian(*q)[:, self.axis] * self.step[:, None]


def _direct(spline: PotentialSpline, locator: Locator, target: Grid, axis: int, places: NDArray[np.int64]) -> Array:
    """Integrals along single edges by points that are each located, in as many pieces as each needs; NaN outside."""
    start = [nodes[place] for nodes, place in zip(target.nodes, places.T, strict=True)]
    edges = _Edges(target, axis, start, target.nodes[axis][places[:, axis] + 1] - start[axis])
    integrate = _by_lines if spline.order == 1 else _by_points
    value, pieces = integrate(spline, locator, edges, 1)
    for count in np.unique(pieces[pieces > 1]):
        group = np.flatnonzero(pieces == count)
        value[group], _ = integrate(spline, locator, edges.some(group), int(count))
    return value


def _by_points(
    spline: PotentialSpline, locator: Locator, edges: _Edges, pieces: int
) -> tuple[Array, NDArray[np.int64]]:
    """Three Gauss points in each piece of each edge; how many pieces it needs."""
    abscissae, weights = np.polynomial.legendre.leggauss(3)
    where = (np.arange(pieces)[:, None] + 0.5 * (1.0 + abscissae)).ravel() / pieces
    position, tangent = edges.at_parts(where)
    q, dq = locator.pull_back(position.reshape(3, -1), tangent.reshape(3, 1, -1))
    q[:, ~inside(spline.grid, q)] = np.nan
    rates = (spline.covectors(q) * dq[:, 0]).sum(axis=0).reshape(-1, where.size)
    needed = _pieces(spline.grid, q.reshape(3, -1, where.size), where[-1] - where[0])
    return np.asarray((rates * np.tile(0.5 * weights / pieces, pieces)).sum(axis=1)), needed


def _by_lines(spline: PotentialSpline, locator: Locator, edges: _Edges, pieces: int) -> tuple[Array, NDArray[np.int64]]:
    """Two lines straight in the source's coordinates for each piece of each edge; how many pieces it needs."""
    where = np.linspace(0.0, 1.0, 2 * pieces + 1)
    position, _ = edges.at_parts(where)
    q = locator.coordinates(position.reshape(3, -1))
    q[:, ~inside(spline.grid, q)] = np.nan
    q = q.reshape(3, -1, where.size)
    begin, end = q[:, :, :-1].reshape(3, -1), q[:, :, 1:].reshape(3, -1)
    for d, nodes in enumerate(spline.grid.nodes):
        if spline.grid.periodic[d]:  # the short way round
            turn = np.ptp(nodes)
            end[d] += turn * np.round((begin[d] - end[d]) / turn)
    sums = spline.straight(begin, end).reshape(-1, 2 * pieces).sum(axis=1)
    return np.asarray(sums), _pieces(spline.grid, q, 1.0)


def _pieces(source: Grid, q: Array, part: float) -> NDArray[np.int64]:
    """How often to cut each edge, from the coordinates q, shape (3, edges, points), of points on a part of it."""
    most = np.ones(q.shape[1])
    for d, (nodes, allowed) in enumerate(zip(source.nodes, _cells_allowed(source), strict=True)):
        change = np.abs(np.diff(q[d], axis=1))
        if source.periodic[d]:
            change = np.minimum(change, np.abs(nodes[-1] - nodes[0] - change))
        cell = np.clip(np.searchsorted(nodes, q[d, :, q.shape[2] // 2]) - 1, 0, nodes.size - 2)
        spanned = change.sum(axis=1) / (part * np.diff(nodes)[cell])
        most = np.fmax(most, spanned / allowed)
    return np.asarray(2 ** np.ceil(np.log2(np.minimum(most, _MOST_PIECES))), dtype=np.int64)


def _exact_curl(edges: Three, more: float) -> tuple[Three, float]:
    """Round edge values, in place, so that d1 and d2 add them without rounding; faces and the quantum.

    Sums of four edges and of six faces, to which fluxes up to `more` will be added, must stay below 2^53 quanta.
    """
    largest = _largest(edges)
    if max(largest, more) == 0.0:
        return d1(edges), 0.0
    quantum = 2.0 ** (np.ceil(np.log2(max(largest, more))) - 51)
    _round(edges, quantum)
    faces = d1(edges)
    least = 2.0 ** (np.ceil(np.log2(max(_largest(faces) + more, quantum))) - 50)
    if least > quantum:  # fluxes as large as circulations: noise, or a grid of few cells
        quantum = 2.0 * least
        _round(edges, quantum)
        faces = d1(edges)
    return faces, float(quantum)


def _largest(arrays: Three) -> float:
    return max(max(float(a.max()), -float(a.min())) for a in arrays)


def _round(edges: Three, quantum: float) -> None:
    def work(part: Array) -> None:
        part /= quantum
        np.rint(part, out=part)
        part *= quantum

    compute.for_each(work, [a[rows] for a in edges for rows in compute.slabs(a.shape[0], 8)])


@compute.kernel
def _rates(q, dq, covectors, steps1, steps2, steps3, nodes1, nodes2, nodes3, allowed, i0, j0, k0, out1, out2, out3):
    """A_i dq^i along each target axis; NaN where an edge there spans too many cells of the source."""
    cells, widths = np.zeros(3, np.int64), np.empty(3)
    for i in range(covectors.shape[1]):
        for j in range(covectors.shape[2]):
            for k in range(covectors.shape[3]):
                a, b, c = covectors[0, i, j, k], covectors[1, i, j, k], covectors[2, i, j, k]
                if np.isnan(a):
                    for out in (out1, out2, out3):
                        out[i0 + i, j0 + j, k0 + k] = np.nan
                    continue
                cells[0] = hunt(q[0, i, j, k], nodes1, cells[0])
                cells[1] = hunt(q[1, i, j, k], nodes2, cells[1])
                cells[2] = hunt(q[2, i, j, k], nodes3, cells[2])
                widths[0] = allowed[0] * (nodes1[cells[0] + 1] - nodes1[cells[0]])
                widths[1] = allowed[1] * (nodes2[cells[1] + 1] - nodes2[cells[1]])
                widths[2] = allowed[2] * (nodes3[cells[2] + 1] - nodes3[cells[2]])
                for d in range(3):
                    step = steps1[i] if d == 0 else steps2[j] if d == 1 else steps3[k]
                    x, y, z = dq[0, d, i, j, k], dq[1, d, i, j, k], dq[2, d, i, j, k]
                    rate = a * x + b * y + c * z
                    if abs(x) * step > widths[0] or abs(y) * step > widths[1] or abs(z) * step > widths[2]:
                        rate = np.nan
                    if d == 0:
                        out1[i0 + i, j0 + j, k0 + k] = rate
                    elif d == 1:
                        out2[i0 + i, j0 + j, k0 + k] = rate
                    else:
                        out3[i0 + i, j0 + j, k0 + k] = rate
