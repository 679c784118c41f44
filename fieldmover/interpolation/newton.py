"""Inverse of a map without closed form: Newton's method on the spline of its node positions.

Points come along lines, so each starts where the polynomial through the six before it leads, or, where a line
begins, a chord step away from its neighbour. Newton's error is the square of its step, so a step below 2e-6 of a cell
is the last, and one evaluation of the spline a point is the rule. Beside a pole the step is taken in the plane of the
ring, where the map is smooth though its coordinates are not. Points not found from their neighbour start again from
the nearest of some thousand places in the grid (a k-d tree, Bentley 1975, Multidimensional binary search trees used
for associative searching), with steps halved until the residual falls.
"""

from __future__ import annotations

from dataclasses import dataclass
from weakref import WeakKeyDictionary

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from fieldmover import compute
from fieldmover.errors import GridError
from fieldmover.grids.grid import Grid
from fieldmover.grids.position_spline import PositionSpline, evaluate
from fieldmover.grids.tabulated import TabulatedMap
from fieldmover.interpolation.splines import crosses_pole

Array = NDArray[np.float64]
State = NDArray[np.int8]

_LOST, _FOUND, _OUTSIDE = 0, 1, 2
_BLOCKS = 16  # along each axis, each with a place to start from
_CANDIDATES = 6  # places tried for a point
_STEPS = 40
_LAST_STEP, _LONGEST_STEP = 2e-6, 16.0  # in cells
_ENOUGH = 1e-4  # last step from a place that is given: the error, its square, is far below that of polynomials
_TRAIL = 6  # points that are extrapolated from
_ASTRAY = 0.3  # of a cell: largest difference between that and the chord step
_POLAR = 4.0  # within so many cells of a pole steps are taken in the plane of the ring
_BLOCK = 64  # points whose tangents are done together
_LEAST_RING = 3  # cells
_CLOSED = 1e-9  # of the size of the grid: a line whose ends are nearer than this is a ring
_ROUND_OFF = 1e-15  # of the size of the grid: no residual is expected below it
_ON_POLE = 1e-6  # of the first cell: nearer to a pole tangents are taken at this distance, where they are finite


_splines: WeakKeyDictionary[Grid, PositionSpline] = WeakKeyDictionary()


class NewtonInverse:
    """Coordinates of Cartesian points in a grid of any map.

    Parameters
    ----------
    grid : Grid
    """

    def __init__(self, grid: Grid) -> None:
        _refuse_coarse_rings(grid)
        self.spline = grid.map.spline if isinstance(grid.map, TabulatedMap) else _spline_of(grid)
        self._starts = _Starts.of(self.spline)
        rings = [-1 if ring is None or not grid.periodic[ring] else ring for ring in grid.ring_axis]
        ends = [[pole in ("low", "both"), pole in ("high", "both")] for pole in grid.poles]
        self._frame = np.array(
            [
                [q[0], q[-1], q[1] - q[0], q[-1] - q[-2], turn, ring, *pole]
                for q, turn, ring, pole in zip(self.spline.nodes, self.spline.turns, rings, ends, strict=True)
            ]
        )

    def pull_back(self, x: Array, tangents: Array, start: Array | None = None) -> tuple[Array, Array]:
        """Coordinates and components of tangents, as `Locator.pull_back`; NaN outside the grid."""
        q, dq = np.empty_like(x), np.empty_like(tangents)
        state = np.zeros(x.shape[1], dtype=np.int8)
        if start is None:
            _, first = self._starts.tree.query(x[:, :1].T)
            self._run(x, tangents, self._starts.q[:, first], True, q, dq, state)
        else:
            self._run(x, tangents, start, False, q, dq, state, _ENOUGH)
        open_points = np.flatnonzero(state != _FOUND)
        if open_points.size:
            self._search(x, tangents, open_points, q, dq, state)
        return q, dq

    def _search(self, x: Array, tangents: Array, points: NDArray[np.intp], q: Array, dq: Array, state: State) -> None:
        """Try points again from places near them; those near none are outside."""
        count = min(_CANDIDATES, self._starts.reach.size)
        found = self._starts.tree.query(x[:, points].T, k=count, distance_upper_bound=self._starts.reach.max())
        distances, places = (np.reshape(a, (points.size, count)) for a in found)
        places = np.minimum(places, self._starts.reach.size - 1)  # one too large where no place is near enough
        near = distances <= self._starts.reach[places]
        for candidate in range(count):
            again = near[:, candidate] & (state[points] != _FOUND)
            if candidate > 0:  # a wall met twice, coming from different sides, is believed
                again &= state[points] == _LOST
            chosen = points[again]
            if chosen.size:
                here, vectors = np.ascontiguousarray(x[:, chosen]), np.ascontiguousarray(tangents[:, :, chosen])
                found_q, found_dq = np.empty_like(here), np.empty_like(vectors)
                now = np.zeros(chosen.size, dtype=np.int8)
                starts = self._starts.q[:, places[again, candidate]]
                self._run(here, vectors, starts, False, found_q, found_dq, now)
                q[:, chosen], dq[:, :, chosen], state[chosen] = found_q, found_dq, now
        lost = points[near.any(axis=1) & (state[points] == _LOST)]
        if lost.size:
            place = ", ".join(f"{c:.9g}" for c in x[:, lost[0]])
            raise GridError(
                f"Newton's method finds no coordinates for {lost.size} points near the grid, the first at ({place}): "
                "expected a map that is smooth on the scale of a cell and one-to-one"
            )

    def _run(
        self,
        x: Array,
        tangents: Array,
        start: Array,
        chained: bool,
        q: Array,
        dq: Array,
        state: State,
        last_step: float = _LAST_STEP,
    ) -> None:
        spline = (*self.spline.table, self.spline.coefficients.reshape(-1), self.spline.strides)
        stop = (_ROUND_OFF * self._starts.size, last_step)
        _newton(x, tangents, np.ascontiguousarray(start), chained, spline, self._frame, stop, q, dq, state)


def _refuse_coarse_rings(grid: Grid) -> None:
    """Refuse rings of so few cells that the spline of their nodes is no ring."""
    for axis, (seam, n) in enumerate(zip(grid.periodic, grid.shape, strict=True)):
        if seam and n < _LEAST_RING:
            q = [np.full(2, 0.5 * (nodes[0] + nodes[-1])) for nodes in grid.nodes]
            q[axis] = grid.nodes[axis][[0, -1]]
            x = np.stack(grid.map.to_cartesian(q[0], q[1], q[2]))
            if np.ptp(x, axis=1).max() < _CLOSED * np.abs(x).max():
                raise GridError(
                    f"{grid!r}: {n} cells round {grid.map.names[axis]}, expected at least {_LEAST_RING} to find "
                    "coordinates of points in a grid without closed form"
                )


def _spline_of(grid: Grid) -> PositionSpline:
    """The spline of a grid's nodes, kept as long as the grid is."""
    spline = _splines.get(grid)
    if spline is None:
        one, two, three = (grid.ring_axis[axis] if crosses_pole(grid, axis) else None for axis in range(3))
        spline = PositionSpline(grid.nodes, grid.node_positions(), grid.periodic, grid.poles, (one, two, three))
        _splines[grid] = spline
    return spline


@dataclass(frozen=True, eq=False)
class _Starts:
    """Places to start from: middles of blocks of cells.

    `q` (3, M) are their coordinates, `reach` (M,) how far from each a point of its block can be, `size` the largest
    Cartesian coordinate.
    """

    q: Array
    reach: Array
    tree: cKDTree
    size: float

    @classmethod
    def of(cls, spline: PositionSpline) -> _Starts:
        lattice = []
        for nodes in spline.nodes:
            n = nodes.size - 1
            edges = nodes[np.unique(np.linspace(0, n, min(n, _BLOCKS) + 1).round().astype(int))]
            both = np.empty(2 * edges.size - 1)
            both[::2], both[1::2] = edges, 0.5 * (edges[1:] + edges[:-1])
            lattice.append(both)
        x = np.stack(spline.positions(lattice[0][:, None, None], lattice[1][None, :, None], lattice[2][None, None, :]))
        middle = x[:, 1::2, 1::2, 1::2]
        m1, m2, m3 = ((c.size - 1) // 2 for c in lattice)
        reach = np.zeros((m1, m2, m3))
        for a, b, c in np.ndindex(3, 3, 3):
            corner = x[:, a : a + 2 * m1 - 1 : 2, b : b + 2 * m2 - 1 : 2, c : c + 2 * m3 - 1 : 2]
            reach = np.maximum(reach, np.sqrt(((corner - middle) ** 2).sum(axis=0)))
        q = np.stack([c.ravel() for c in np.meshgrid(*(c[1::2] for c in lattice), indexing="ij")])
        return cls(q, 1.25 * reach.ravel(), cKDTree(middle.reshape(3, -1).T), float(np.abs(x).max()))


# In the kernels `spline` is a position spline's table, coefficients and strides; `stop` the residual and the step (in
# cells) below which a point is found; `frame` holds for each axis its ends (0, 1), the widths of its outermost cells
# (2, 3), the length of its seam or 0 (4), the axis of the ring at its poles or -1 (5), and which ends are poles (6, 7).


@compute.kernel
def _newton(x, tangents, start, chained, spline, frame, stop, q, dq, state):
    """Solve X(q) = x for every point; chained: each starts from the one before."""
    nodes, pieces, first, offsets, coefficients, strides = spline
    cells, b, work = offsets[:3].copy(), np.empty((3, 2, 6)), np.empty((3, 18))
    value, jacobian, step, old = np.empty(3), np.empty((3, 3)), np.empty(3), np.empty(3)
    g, known, inverse = np.empty(3), np.empty(3), np.empty((3, 3))
    trail, here = np.empty((_TRAIL, 3)), np.empty(3)
    length = 0  # how many points of the trail there are
    line_g, line_known, line_inverse = np.empty(3), np.empty(3), np.empty((3, 3))
    inverses = np.empty((3, 3, _BLOCK))
    linked, begins, before = False, True, 0.0
    for n in range(x.shape[1]):
        along, back = 0.0, 0.0
        for d in range(3):
            along += (x[d, n] - here[d]) ** 2 if n > 0 else 0.0
            back += (x[d, n] - line_known[d]) ** 2
            here[d] = x[d, n]
        along, back = np.sqrt(along), np.sqrt(back)
        found = _LOST
        if linked:
            begins = along > 2.0 * before and back < along
            if begins:
                _copy(line_g, g)
                _copy(line_known, known)
                inverse[:] = line_inverse
            _multiply(inverse, here, known, step)
            _advance(g, step, 1.0, frame)
            if begins or abs(along - before) > 0.1 * before:
                length = 0
            elif length > 2 and _extrapolate(trail, length, g, step, frame):
                # the rule, kept apart from the rest because calls with many arrays cost as much as the evaluation
                evaluate(g, nodes, pieces, first, offsets, coefficients, strides, cells, b, work, value, jacobian)
                _invert(jacobian, inverse)
                _multiply(inverse, here, value, step)
                found = _FOUND
                for d in range(3):
                    if not abs(step[d]) <= _LAST_STEP * (nodes[cells[d] + 1] - nodes[cells[d]]):
                        found = _LOST
                if found == _FOUND:
                    for d in range(3):
                        g[d] = _on_turn(g[d] + step[d], frame[d, 0], frame[d, 4])
                    _copy(here, known)
                    if _clamp(g, frame) > 0:  # far outside, where the spline means nothing
                        found = _LOST
        else:
            for d in range(3):
                g[d] = start[d, 0] if chained else start[d, n]
            length = 0
        before = along
        if found == _LOST:
            found = _solve(g, known, inverse, here, spline, frame, stop, (cells, b, work, value, jacobian, step, old))
        state[n] = found
        linked = chained and found != _LOST
        length = _remember(trail, length, g, frame) if found == _FOUND else 0
        if begins and linked:
            _copy(g, line_g)
            _copy(known, line_known)
            line_inverse[:], begins = inverse, False
        column = n % _BLOCK
        for d in range(3):
            q[d, n] = g[d] if found == _FOUND else np.nan
            for i in range(3):
                inverses[d, i, column] = inverse[d, i]
        if column == _BLOCK - 1 or n == x.shape[1] - 1:
            _components(inverses, tangents, n - column, column + 1, dq)


@compute.inlined
def _components(inverses, tangents, begin, count, dq):
    """Components of the tangents at a block of points: one pair at a time, since memory follows few streams at once."""
    for d in range(3):
        for t in range(tangents.shape[1]):
            for n in range(count):
                dq[d, t, begin + n] = (
                    inverses[d, 0, n] * tangents[0, t, begin + n]
                    + inverses[d, 1, n] * tangents[1, t, begin + n]
                    + inverses[d, 2, n] * tangents[2, t, begin + n]
                )


@compute.inlined
def _remember(trail, length, g, frame):
    """Put g in front of the trail, on the same turn round a seam; a trail ends beside a pole. Returns its length."""
    for d in range(3):
        for end in range(2):
            is_pole = frame[d, 5] >= 0.0 and frame[d, 6 + end] > 0.0
            if is_pole and abs(g[d] - frame[d, end]) < _POLAR * frame[d, 2 + end]:
                return 0
    for d in range(3):
        for m in range(_TRAIL - 1, 0, -1):
            trail[m, d] = trail[m - 1, d]
        trail[0, d] = g[d]
        if length > 0 and frame[d, 4] > 0.0:
            trail[0, d] += frame[d, 4] * np.round((trail[1, d] - g[d]) / frame[d, 4])
    return min(length + 1, _TRAIL)


@compute.inlined
def _extrapolate(trail, length, g, place, frame):
    """The next place of a trail into g, unless that is far from it; returns whether it was done."""
    for d in range(3):
        factor, place[d] = 1.0, 0.0
        for m in range(length):  # signed binomial coefficients of length
            factor *= (length - m) / (m + 1.0)
            place[d] += factor * trail[m, d]
            factor = -factor
        shift = place[d] - g[d]
        if frame[d, 4] > 0.0:
            shift -= frame[d, 4] * np.round(shift / frame[d, 4])
        if abs(shift) > _ASTRAY * abs(trail[0, d] - trail[1, d]) + _ASTRAY * max(frame[d, 2], frame[d, 3]):
            return False
    for d in range(3):
        g[d] = _on_turn(place[d], frame[d, 0], frame[d, 4])
    return True


@compute.kernel
def _on_turn(value, low, turn):
    """A coordinate brought back between its seam's ends."""
    return value if turn == 0.0 else value - turn * np.floor((value - low) / turn)


@compute.kernel
def _solve(g, known, inverse, x, spline, frame, stop, scratch):
    """Newton's method from g; `known` becomes the position that belongs to g, `inverse` dq/dx there."""
    nodes, pieces, first, offsets, coefficients, strides = spline
    tiny, last_step = stop
    cells, b, work, value, jacobian, step, old = scratch
    _leave_poles(g, frame, 1e-3)
    worst, scale, last_walls, arrived = np.inf, 1.0, 0, False
    for _ in range(_STEPS):
        walls = 0 if arrived else _clamp(g, frame)
        evaluate(g, nodes, pieces, first, offsets, coefficients, strides, cells, b, work, value, jacobian)
        _invert(jacobian, inverse)
        if arrived:
            _copy(old, g)
            return _FOUND
        error = max(abs(x[0] - value[0]), abs(x[1] - value[1]), abs(x[2] - value[2]))
        if not error < np.inf:
            return _LOST
        if walls == 0 and last_walls == 0 and error > worst and error > 100.0 * tiny and scale > 0.02:
            scale *= 0.5
            _copy(old, g)
            _advance(g, step, scale, frame)
            continue
        _multiply(inverse, x, value, step)
        size, inner = 0.0, 0.0
        for d in range(3):
            part = abs(step[d]) / (nodes[cells[d] + 1] - nodes[cells[d]])
            size = max(size, part)
            if not (walls >> d) & 1:
                inner = max(inner, part)
        if error <= tiny or size <= last_step:
            if error > tiny:
                _advance(g, step, 1.0, frame)
            _copy(x, known)
            _copy(g, old)
            if not _leave_poles(g, frame, _ON_POLE):
                return _FOUND
            arrived = True  # once more, for tangents beside the pole
            continue
        if walls > 0 and walls == last_walls and inner < 0.1:
            _copy(value, known)
            return _OUTSIDE
        worst, last_walls = error, walls
        _copy(g, old)
        scale = min(1.0, _LONGEST_STEP / size)
        _advance(g, step, scale, frame)
    _copy(value, known)
    return _OUTSIDE if last_walls > 0 else _LOST


@compute.kernel
def _advance(g, step, scale, frame):
    """g += scale x step, brought back into seams; near a pole in the plane of the ring."""
    for d in range(3):
        move = scale * step[d]
        ring = int(frame[d, 5])
        if ring < 0:
            g[d] += move
            continue
        end = 1 if frame[d, 7] > 0.0 and (frame[d, 6] == 0.0 or 2.0 * g[d] > frame[d, 0] + frame[d, 1]) else 0
        sign = 1.0 - 2.0 * end
        radius, half = sign * (g[d] - frame[d, end]), 0.5 * frame[ring, 4]
        out = radius + sign * move
        if radius < _POLAR * frame[d, 2 + end]:
            round_it = radius * np.pi / half * scale * step[ring]
            g[ring] += half / np.pi * np.arctan2(round_it, out) - scale * step[ring]
            out = np.sqrt(out * out + round_it * round_it)
        elif out < 0.0:  # a long step over the pole comes down on the other side of the ring
            g[ring] += half
            out = -out
        g[d] = frame[d, end] + sign * out
    for d in range(3):
        g[d] = _on_turn(g[d], frame[d, 0], frame[d, 4])


@compute.kernel
def _clamp(g, frame):
    """Keep g within half a cell of the walls; returns which axes had to be (bit d)."""
    walls = 0
    for d in range(3):
        if frame[d, 4] == 0.0:
            low, high = frame[d, 0] - 0.5 * frame[d, 2], frame[d, 1] + 0.5 * frame[d, 3]
            if g[d] <= low or g[d] >= high:
                g[d] = min(max(g[d], low), high)
                walls |= 1 << d
    return walls


@compute.kernel
def _leave_poles(g, frame, part):
    """Move g away from poles it is on, to `part` of a cell; returns whether it was."""
    moved = False
    for d in range(3):
        for end in range(2):
            if frame[d, 5] >= 0.0 and frame[d, 6 + end] > 0.0:
                sign = 1.0 - 2.0 * end
                if sign * (g[d] - frame[d, end]) < part * frame[d, 2 + end]:
                    g[d] = frame[d, end] + sign * part * frame[d, 2 + end]
                    moved = True
    return moved


@compute.kernel
def _copy(a, out):
    out[0], out[1], out[2] = a[0], a[1], a[2]


@compute.kernel
def _multiply(inverse, x, value, out):
    """inverse (x - value)."""
    a, b, c = x[0] - value[0], x[1] - value[1], x[2] - value[2]
    for d in range(3):
        out[d] = inverse[d, 0] * a + inverse[d, 1] * b + inverse[d, 2] * c


@compute.inlined
def _invert(m, out):
    """Inverse of a 3 x 3 matrix by cofactors; zero for a singular one."""
    out[0, 0] = m[1, 1] * m[2, 2] - m[1, 2] * m[2, 1]
    out[1, 0] = m[1, 2] * m[2, 0] - m[1, 0] * m[2, 2]
    out[2, 0] = m[1, 0] * m[2, 1] - m[1, 1] * m[2, 0]
    out[0, 1] = m[0, 2] * m[2, 1] - m[0, 1] * m[2, 2]
    out[1, 1] = m[0, 0] * m[2, 2] - m[0, 2] * m[2, 0]
    out[2, 1] = m[0, 1] * m[2, 0] - m[0, 0] * m[2, 1]
    out[0, 2] = m[0, 1] * m[1, 2] - m[0, 2] * m[1, 1]
    out[1, 2] = m[0, 2] * m[1, 0] - m[0, 0] * m[1, 2]
    out[2, 2] = m[0, 0] * m[1, 1] - m[0, 1] * m[1, 0]
    det = m[0, 0] * out[0, 0] + m[0, 1] * out[1, 0] + m[0, 2] * out[2, 0]
    factor = 1.0 / det if det != 0.0 else 0.0
    for i in range(3):
        for j in range(3):
            out[i, j] *= factor
