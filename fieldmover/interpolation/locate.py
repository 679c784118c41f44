"""Where Cartesian points lie in a grid: its coordinates, and how a tangent reads in them.

Spherical, cylindrical and Cartesian grids have closed forms. Any other grid is represented by the quintic spline of
its node positions, inverted by Newton's method (`newton`). Points are first brought into the frame of a placed grid.
"""

from __future__ import annotations

from copy import copy

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.grids.grid import Grid
from fieldmover.grids.placement import placement, turned, unplaced
from fieldmover.interpolation.newton import NewtonInverse

Array = NDArray[np.float64]

_KINDS = {"cartesian": 0, "cylindrical": 1, "spherical": 2}
_INSIDE = 1e-10  # a point this part of a cell outside the grid counts as on its wall
_ON_POLE = 1e-6  # of the first cell: nearer to a pole tangents are taken at this distance, where they are finite


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
        self.grid = self._part = grid
        self._middle = tuple(0.5 * (q[0] + q[-1]) for q in grid.nodes)
        first = grid.nodes[0][1] - (grid.nodes[0][0] if grid.kind == "cylindrical" else 0.0)
        self._near_axis = _ON_POLE * abs(float(first))
        self._placement = placement(grid)
        self._newton = None if grid.kind in _KINDS else NewtonInverse(unplaced(grid))

    def coordinates(self, x: Array, start: Array | None = None) -> Array:
        """Grid coordinates of points, as `pull_back` gives them; x of shape (3, N)."""
        return self.pull_back(x, np.empty((3, 0, x.shape[1])), start)[0]

    def pull_back(self, x: Array, tangents: Array, start: Array | None = None) -> tuple[Array, Array]:
        """Grid coordinates of points, and tangents in them.

        Parameters
        ----------
        x : ndarray, shape (3, N)
            Cartesian positions.
        tangents : ndarray, shape (3, T, N)
            Cartesian components of T vectors at each.
        start : ndarray, shape (3, N), optional
            Coordinates near those of the points, for a grid without closed form.

        Returns
        -------
        q : ndarray, shape (3, N)
            Coordinates, angles brought into the range of the nodes (`close` does so round other seams). For a grid
            without closed form NaN outside.
        dq : ndarray, shape (3, T, N)
            Components dq^i of the tangents.

        Raises
        ------
        GridError
            If Newton's method fails at a point near the grid.
        """
        if self._placement is not None:
            origin, turn = self._placement
            x, tangents = turned(turn.T, x - origin[:, None]), turned(turn.T, tangents)
        x, tangents = np.ascontiguousarray(x), np.ascontiguousarray(tangents)
        if self._newton is not None:
            q, dq = self._newton.pull_back(x, tangents, start)
        else:
            q, dq = np.empty_like(x), np.empty_like(tangents)
            _closed_form(_KINDS[self.grid.kind], self._middle, self._near_axis, x, tangents, q, dq)
        if self._part is not self.grid:
            self.close(q)
        return q, dq

    def onto(self, part: Grid) -> Locator:
        """The same for a part of the grid: coordinates round a seam begin where the part does."""
        other = copy(self)
        other._part = part
        return other

    def close(self, q: Array) -> None:
        """Bring coordinates (3, ...) round seams into the range of the nodes, in place."""
        for d, seam in enumerate(self.grid.periodic):
            if seam:
                turn = np.ptp(self.grid.nodes[d])
                q[d] -= turn * np.floor((q[d] - self._part.nodes[d][0]) / turn)

    def cells(self, x: Array) -> NDArray[np.int64]:
        """Flat index of the cell that holds each point, -1 outside the grid; x of shape (3, N)."""
        return self.places(x)[0]

    def places(self, x: Array) -> tuple[NDArray[np.int64], Array]:
        """The cells that hold points, x of shape (3, N), and where in them.

        Returns
        -------
        cells : ndarray of int64, shape (N,)
            Flat indices, -1 outside the grid.
        within : ndarray, shape (3, N)
            Coordinates relative to the middle of the cell, in cells: -0.5 to 0.5 inside.
        """
        q = self.coordinates(x)
        self.close(q)
        flat, within = np.zeros(x.shape[1], dtype=np.int64), np.empty_like(q)
        outside = ~inside(self.grid, q)
        for axis, nodes in enumerate(self.grid.nodes):
            place = np.clip(np.searchsorted(nodes, q[axis], side="right") - 1, 0, self.grid.shape[axis] - 1)
            flat = flat * self.grid.shape[axis] + place
            within[axis] = (q[axis] - nodes[place]) / np.diff(nodes)[place] - 0.5
        flat[outside] = -1
        return flat, within


def inside(grid: Grid, q: Array) -> NDArray[np.bool_]:
    """Which of the coordinates q, shape (3, N), lie in the grid (walls included, to round-off); NaN does not."""
    result = np.ones(q.shape[1], dtype=bool)
    for axis, nodes in enumerate(grid.nodes):
        low, high = margins(nodes)
        result &= (q[axis] >= low) & (q[axis] <= high)
    return result


def margins(nodes: Array) -> tuple[float, float]:
    """Ends of an axis, moved outward by what counts as round-off."""
    return nodes[0] - _INSIDE * (nodes[1] - nodes[0]), nodes[-1] + _INSIDE * (nodes[-1] - nodes[-2])


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
