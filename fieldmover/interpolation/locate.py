"""Where Cartesian points lie in a grid: its coordinates, and how a tangent reads in them.

Spherical, cylindrical and Cartesian grids have closed forms. Any other grid is represented by the quintic spline of
its node positions, inverted by Newton's method: the start is the solution of the point before (points come
along edges), and where that fails the nearest cell centre (a k-d tree, Bentley 1975, Multidimensional binary search
trees used for associative searching).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from fieldmover import compute
from fieldmover.grids.axes import centres_of
from fieldmover.grids.grid import Grid
from fieldmover.interpolation.splines import fit_form, grid_splines

Array = NDArray[np.float64]

_KINDS = {"cartesian": 0, "cylindrical": 1, "spherical": 2}
_INSIDE = 1e-10  # a point this part of a cell outside the grid counts as on its wall
_ON_POLE = 1e-6  # of the first cell: nearer to a pole tangents are taken at this distance, where they are finite
_DEGREE = 5
_STEPS = 30


class Locator:
    """Inverse of a grid's map.

    Parameters
    ----------
    grid : Grid

    Examples
    --------
    >>> import numpy as np
    >>> from fieldmover import spherical_grid
    >>> grid = spherical_grid([1, 2], np.linspace(0, np.pi, 5), np.linspace(0, 2 * np.pi, 9))
    >>> point = np.array([[0.0], [1.5], [0.0]])
    >>> q = Locator(grid).coordinates(point)
    >>> q[:, 0].round(6)
    array([1.5     , 1.570796, 1.570796])
    """

    def __init__(self, grid: Grid) -> None:
        self.grid = grid
        self._middle = tuple(0.5 * (q[0] + q[-1]) for q in grid.nodes)
        first = grid.nodes[0][1] - (grid.nodes[0][0] if grid.kind == "cylindrical" else 0.0)
        self._near_axis = _ON_POLE * abs(float(first))
        self._newton = None if grid.kind in _KINDS else _Newton(grid)

    def coordinates(self, x: Array) -> Array:
        """Grid coordinates of points, as `pull_back` gives them; x of shape (3, N)."""
        return self.pull_back(x, np.empty((3, 0, x.shape[1])))[0]

    def pull_back(self, x: Array, tangents: Array) -> tuple[Array, Array]:
        """Grid coordinates of points, and tangents in them.

        Parameters
        ----------
        x : ndarray, shape (3, N)
            Cartesian positions.
        tangents : ndarray, shape (3, T, N)
            Cartesian components of T vectors at each.

        Returns
        -------
        q : ndarray, shape (3, N)
            Coordinates, angles brought into the range of the nodes. For a grid without closed form NaN outside.
        dq : ndarray, shape (3, T, N)
            Components dq^i of the tangents.
        """
        x, tangents = np.ascontiguousarray(x), np.ascontiguousarray(tangents)
        if self._newton is not None:
            return self._newton.pull_back(x, tangents)
        q, dq = np.empty_like(x), np.empty_like(tangents)
        _closed_form(_KINDS[self.grid.kind], self._middle, self._near_axis, x, tangents, q, dq)
        return q, dq

    def cells(self, x: Array) -> NDArray[np.int64]:
        """Flat index of the cell that holds each point, -1 outside the grid; x of shape (3, N)."""
        q = self.coordinates(x)
        flat = np.zeros(x.shape[1], dtype=np.int64)
        outside = ~inside(self.grid, q)
        for axis, nodes in enumerate(self.grid.nodes):
            place = np.searchsorted(nodes, q[axis], side="right") - 1
            flat = flat * self.grid.shape[axis] + np.clip(place, 0, self.grid.shape[axis] - 1)
        flat[outside] = -1
        return flat


def inside(grid: Grid, q: Array) -> NDArray[np.bool_]:
    """Which of the coordinates q, shape (3, N), lie in the grid (walls included, to round-off); NaN does not."""
    result = np.ones(q.shape[1], dtype=bool)
    for axis, nodes in enumerate(grid.nodes):
        low, high = _margins(nodes)
        result &= (q[axis] >= low) & (q[axis] <= high)
    return result


def _margins(nodes: Array) -> tuple[float, float]:
    return nodes[0] - _INSIDE * (nodes[1] - nodes[0]), nodes[-1] + _INSIDE * (nodes[-1] - nodes[-2])


class _Newton:
    """Newton's method on the spline of node positions."""

    def __init__(self, grid: Grid) -> None:
        self.grid = grid
        self.splines = grid_splines(grid, _DEGREE)
        parts = [fit_form(grid, self.splines, position, ()) for position in grid.node_positions()]
        self.coefficients = np.ascontiguousarray(np.stack(parts, axis=-1))
        self.centres = [centres_of(q) for q in grid.nodes]
        cells = grid.centres().reshape(3, -1).T
        self.tree = cKDTree(cells)
        volumes = np.abs(grid.cell_volumes())
        self.reach = np.cbrt(volumes.max()) * 4.0
        self.size = float(np.abs(cells).max())
        turns, halves = np.zeros(3), np.full(3, -1, dtype=np.int64)
        for axis in range(3):
            if grid.periodic[axis]:
                turns[axis] = grid.nodes[axis][-1] - grid.nodes[axis][0]
            ring = grid.ring_axis[axis]
            halves[axis] = -1 if ring is None or not grid.periodic[ring] else ring
        ends = np.array([[pole in ("low", "both"), pole in ("high", "both")] for pole in grid.poles])
        self.closure = (turns, halves, ends)

    def pull_back(self, x: Array, tangents: Array) -> tuple[Array, Array]:
        q, dq = np.empty_like(x), np.empty_like(tangents)
        found = np.zeros(x.shape[1], dtype=np.bool_)
        start = self._nearest(x[:, :1])
        self._run(x, tangents, start, True, q, dq, found)
        lost = np.flatnonzero(~found)
        if lost.size:
            distance, _ = self.tree.query(x[:, lost].T)
            lost = lost[distance < self.reach]
        if lost.size:
            here, vectors = np.ascontiguousarray(x[:, lost]), np.ascontiguousarray(tangents[:, :, lost])
            again, slopes, ok = (
                np.empty_like(here),
                np.empty_like(vectors),
                np.zeros(lost.size, dtype=np.bool_),
            )
            self._run(here, vectors, self._nearest(here), False, again, slopes, ok)
            q[:, lost[ok]], dq[:, :, lost[ok]], found[lost[ok]] = again[:, ok], slopes[:, :, ok], True
        q[:, ~found] = np.nan
        return q, dq

    def _nearest(self, x: Array) -> Array:
        _, cell = self.tree.query(x.T)
        places = np.unravel_index(cell, self.grid.shape)
        return np.stack([centre[place] for centre, place in zip(self.centres, places, strict=True)])

    def _run(self, x: Array, tangents: Array, start: Array, chained: bool, q: Array, dq: Array, found: NDArray) -> None:
        one, two, three = self.splines
        _newton(
            x,
            tangents,
            start,
            chained,
            one.nodes,
            two.nodes,
            three.nodes,
            one.value_pieces,
            two.value_pieces,
            three.value_pieces,
            one.value_first,
            two.value_first,
            three.value_first,
            self.coefficients,
            *self.closure,
            1e-13 * self.size,
            q,
            dq,
            found,
        )


@compute.kernel
def _closed_form(kind, middle, near_axis, x, tangents, q, dq):
    """Coordinates and tangents; azimuths within half a turn of the middle of their nodes.

    A point on the axis is moved off it by `near_axis`: there a tangent has no components, but their limit.
    """
    for n in range(x.shape[1]):
        a, b, c = x[0, n], x[1, n], x[2, n]
        if kind == 0:
            q[0, n], q[1, n], q[2, n] = a, b, c
            for t in range(tangents.shape[1]):
                for i in range(3):
                    dq[i, t, n] = tangents[i, t, n]
            continue
        azimuth = 1 if kind == 1 else 2
        if abs(a) < near_axis and abs(b) < near_axis:
            a = near_axis
        square = a * a + b * b
        rho = np.sqrt(square)
        phi = np.arctan2(b, a)
        phi += 2 * np.pi * np.round((middle[azimuth] - phi) / (2 * np.pi))
        r = rho
        q[azimuth, n] = phi
        if kind == 1:
            q[0, n], q[2, n] = rho, c
        else:
            r = np.sqrt(square + c * c)
            q[0, n], q[1, n] = r, np.arctan2(rho, c)
        for t in range(tangents.shape[1]):
            ta, tb, tc = tangents[0, t, n], tangents[1, t, n], tangents[2, t, n]
            drho, dq[azimuth, t, n] = (a * ta + b * tb) / rho, (a * tb - b * ta) / square
            if kind == 1:
                dq[0, t, n], dq[2, t, n] = drho, tc
            else:
                dq[0, t, n], dq[1, t, n] = (rho * drho + c * tc) / r, (c * drho - rho * tc) / (r * r)


@compute.kernel
def _cell(nodes, value):
    """Cell that holds a value, by bisection; the outermost ones reach beyond the ends."""
    low, high = 0, nodes.size - 2
    while low < high:
        half = (low + high + 1) // 2
        if nodes[half] <= value:
            low = half
        else:
            high = half - 1
    return low


@compute.kernel
def _basis(nodes, pieces, value, out):
    """Active basis functions (row 0) and their derivatives (row 1) at a value; the cell is returned."""
    cell = _cell(nodes, value)
    step = nodes[cell + 1] - nodes[cell]
    s = (value - nodes[cell]) / step
    powers = pieces.shape[2]
    for m in range(pieces.shape[1]):
        level, slope = pieces[cell, m, powers - 1], 0.0
        for k in range(powers - 2, -1, -1):
            slope = slope * s + level
            level = level * s + pieces[cell, m, k]
        out[0, m], out[1, m] = level, slope / step
    return cell


@compute.kernel
def _newton(
    x,
    tangents,
    start,
    chained,
    nodes1,
    nodes2,
    nodes3,
    pieces1,
    pieces2,
    pieces3,
    first1,
    first2,
    first3,
    coefficients,
    turns,
    rings,
    ends,
    tolerance,
    q,
    dq,
    found,
):
    """Solve X(q) = x for every point; chained: each starts from the last one found."""
    size = pieces1.shape[1]
    b1, b2, b3 = np.empty((2, size)), np.empty((2, size)), np.empty((2, size))
    low = np.array([nodes1[0], nodes2[0], nodes3[0]])
    high = np.array([nodes1[-1], nodes2[-1], nodes3[-1]])
    margin_low = 0.5 * np.array([nodes1[1] - nodes1[0], nodes2[1] - nodes2[0], nodes3[1] - nodes3[0]])
    margin_high = 0.5 * np.array([nodes1[-1] - nodes1[-2], nodes2[-1] - nodes2[-2], nodes3[-1] - nodes3[-2]])
    g, step = start[:, 0].copy(), np.empty(3)
    jacobian, value = np.empty((3, 3)), np.empty(3)
    for n in range(x.shape[1]):
        if not chained:
            g[:] = start[:, n]
        elif n > 0 and not found[n - 1]:
            g[:] = start[:, 0]
        last, arrived = np.inf, False
        for _ in range(_STEPS):
            for axis in range(3):  # beyond a pole the meridian continues on the other side of the ring
                if rings[axis] >= 0:
                    ring = rings[axis]
                    if ends[axis, 0] and g[axis] < low[axis]:
                        g[axis] = 2 * low[axis] - g[axis]
                        g[ring] += 0.5 * turns[ring]
                    elif ends[axis, 1] and g[axis] > high[axis]:
                        g[axis] = 2 * high[axis] - g[axis]
                        g[ring] += 0.5 * turns[ring]
            for axis in range(3):
                if turns[axis] > 0:
                    g[axis] -= turns[axis] * np.floor((g[axis] - low[axis]) / turns[axis])
                else:
                    g[axis] = min(max(g[axis], low[axis] - margin_low[axis]), high[axis] + margin_high[axis])
            i = first1[_basis(nodes1, pieces1, g[0], b1)]
            j = first2[_basis(nodes2, pieces2, g[1], b2)]
            k = first3[_basis(nodes3, pieces3, g[2], b3)]
            value[:] = 0.0
            jacobian[:] = 0.0
            for a in range(size):
                for b in range(size):
                    w = b1[0, a] * b2[0, b]
                    w1, w2 = b1[1, a] * b2[0, b], b1[0, a] * b2[1, b]
                    for c in range(size):
                        for d in range(3):
                            point = coefficients[i + a, j + b, k + c, d]
                            value[d] += w * b3[0, c] * point
                            jacobian[d, 0] += w1 * b3[0, c] * point
                            jacobian[d, 1] += w2 * b3[0, c] * point
                            jacobian[d, 2] += w * b3[1, c] * point
            if arrived:
                break
            for d in range(3):
                value[d] = x[d, n] - value[d]
            error = max(abs(value[0]), abs(value[1]), abs(value[2]))
            if error <= tolerance or (error < 1e3 * tolerance and error >= 0.5 * last):
                found[n] = True
                q[:, n] = g
                for axis in range(3):  # on a pole tangents have no components, but their limit
                    if ends[axis, 0] and g[axis] < low[axis] + 2 * _ON_POLE * margin_low[axis]:
                        g[axis], arrived = low[axis] + 2 * _ON_POLE * margin_low[axis], True
                    elif ends[axis, 1] and g[axis] > high[axis] - 2 * _ON_POLE * margin_high[axis]:
                        g[axis], arrived = high[axis] - 2 * _ON_POLE * margin_high[axis], True
                if arrived:
                    continue
                break
            last = error
            _solve3(jacobian, value, step)
            for d in range(3):
                g[d] += step[d]
        if found[n]:
            for t in range(tangents.shape[1]):
                for d in range(3):
                    value[d] = tangents[d, t, n]
                _solve3(jacobian, value, step)
                dq[:, t, n] = step


@compute.kernel
def _solve3(m, b, out):
    """Solve a 3 x 3 system by cofactors; a singular one (a point on a pole) gives the zero vector."""
    c0 = m[1, 1] * m[2, 2] - m[1, 2] * m[2, 1]
    c1 = m[1, 2] * m[2, 0] - m[1, 0] * m[2, 2]
    c2 = m[1, 0] * m[2, 1] - m[1, 1] * m[2, 0]
    det = m[0, 0] * c0 + m[0, 1] * c1 + m[0, 2] * c2
    if det == 0.0:
        out[0], out[1], out[2] = 0.0, 0.0, 0.0
        return
    out[0] = (
        b[0] * c0 + b[1] * (m[0, 2] * m[2, 1] - m[0, 1] * m[2, 2]) + b[2] * (m[0, 1] * m[1, 2] - m[0, 2] * m[1, 1])
    ) / det
    out[1] = (
        b[0] * c1 + b[1] * (m[0, 0] * m[2, 2] - m[0, 2] * m[2, 0]) + b[2] * (m[0, 2] * m[1, 0] - m[0, 0] * m[1, 2])
    ) / det
    out[2] = (
        b[0] * c2 + b[1] * (m[0, 1] * m[2, 0] - m[0, 0] * m[2, 1]) + b[2] * (m[0, 0] * m[1, 1] - m[0, 1] * m[1, 0])
    ) / det
