"""Planes through the grids of a job, and what lies in them.

Figures of cells, such as divergence, are shown cell by cell. The field itself is interpolated linearly between
cell centres, across seams and poles too: else the difference of two grids would show their cells instead of it.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fieldmover.errors import JobError
from fieldmover.grids.axes import centres_of
from fieldmover.grids.grid import Grid
from fieldmover.interpolation.locate import Locator, inside

Array = NDArray[np.float64]
Indices = NDArray[np.int64]

PIXELS = 400  # along the longer side of a plane
NAMES = "xyz"
ON_FACE = 1e-8
"""A point this part of the first cell below a face counts as above it, so that rounding does not choose the cell."""


@dataclass(frozen=True)
class Plane:
    """Points of a plane at right angles to a Cartesian axis.

    Attributes
    ----------
    axis : int
        The axis at right angles: 0, 1 or 2.
    position : float
        Where the plane cuts it.
    across, up : (nu,) and (nv,) arrays
        Centres of the pixels along the other two axes.
    """

    axis: int
    position: float
    across: Array
    up: Array

    @property
    def others(self) -> tuple[int, int]:
        """The axes that the picture shows, the horizontal one first."""
        a, b = (axis for axis in range(3) if axis != self.axis)
        return a, b

    @property
    def name(self) -> str:
        return f"{NAMES[self.axis]} = {self.position:.4g}"

    @property
    def extent(self) -> tuple[float, float, float, float]:
        """Left, right, lower and upper edge."""
        (u, v), (du, dv) = (self.across, self.up), (np.diff(q[:2])[0] / 2 for q in (self.across, self.up))
        return float(u[0] - du), float(u[-1] + du), float(v[0] - dv), float(v[-1] + dv)

    @property
    def points(self) -> Array:
        """Cartesian positions of the pixels, shape (3, nv * nu)."""
        u, v = np.meshgrid(self.across, self.up)
        points = np.empty((3, u.size))
        points[self.axis] = self.position
        points[self.others[0]], points[self.others[1]] = u.ravel(), v.ravel()
        return points

    @classmethod
    def through(cls, grid: Grid, axis: int, position: float | None = None) -> Plane:
        """A plane that shows a grid; by default at 0 if the grid reaches there, else in its middle.

        Raises
        ------
        JobError
            If the plane misses the grid.
        """
        positions = grid.node_positions().reshape(3, -1)
        low, high = positions.min(axis=1), positions.max(axis=1)
        if position is None:
            position = 0.0 if low[axis] <= 0 <= high[axis] else float(0.5 * (low[axis] + high[axis]))
        if not low[axis] <= position <= high[axis]:
            raise JobError(
                f"report.planes: {NAMES[axis]} = {position:g} misses the grid, which reaches from "
                f"{low[axis]:.6g} to {high[axis]:.6g}"
            )
        shown = [other for other in range(3) if other != axis]
        step = max(high[other] - low[other] for other in shown) / PIXELS
        across, up = (
            low[other] + (np.arange(n) + 0.5) * (high[other] - low[other]) / n
            for other, n in ((o, max(2, round((high[o] - low[o]) / step))) for o in shown)
        )
        return cls(axis, position, across, up)

    def cut(self, locator: Locator) -> Section:
        """The plane through a grid; the locator, which may be slow to make, serves many planes."""
        q = locator.coordinates(self.points)
        outside = ~inside(locator.grid, q)
        q[:, outside] = np.array([nodes[0] for nodes in locator.grid.nodes])[:, None]
        return Section(self, locator.grid, q, outside)


@dataclass(frozen=True, eq=False)
class Section:
    """A plane through a grid.

    Attributes
    ----------
    plane : Plane
    grid : Grid
    q : (3, nv * nu) array
        Grid coordinates of the pixels.
    outside : (nv * nu,) bool array
        Which of them lie outside the grid.
    """

    plane: Plane
    grid: Grid
    q: Array
    outside: NDArray[np.bool_]

    def of_cells(self, values: Array) -> Array:
        """The value of the cell that holds each pixel, shape (nv, nu); NaN outside the grid.

        Parameters
        ----------
        values : array, shape (n1, n2, n3)
        """
        places = (
            np.clip(np.searchsorted(nodes - ON_FACE * (nodes[1] - nodes[0]), q, side="right") - 1, 0, nodes.size - 2)
            for nodes, q in zip(self.grid.nodes, self.q, strict=True)
        )
        return self._shown(values[tuple(places)])

    def of_field(self, b: Array) -> Array:
        """A field at each pixel, linear between cell centres, shape (3, nv, nu); NaN outside the grid.

        Parameters
        ----------
        b : array, shape (3, n1, n2, n3)
            Cartesian components at cell centres.
        """
        lower, weights = zip(*(_between(self.grid, axis, self.q[axis]) for axis in range(3)), strict=True)
        found, flat = np.zeros((3, self.q.shape[1])), b.reshape(3, -1)
        for corner in itertools.product((0, 1), repeat=3):
            part = np.ones(self.q.shape[1])
            for upper, weight in zip(corner, weights, strict=True):
                part *= weight if upper else 1.0 - weight
            cells = _cells(self.grid, [low + upper for low, upper in zip(lower, corner, strict=True)])
            found += part * flat[:, cells]
        return self._shown(found)

    def _shown(self, values: Array) -> Array:
        """As a picture."""
        plane = self.plane
        return np.where(self.outside, np.nan, values).reshape(*values.shape[:-1], plane.up.size, plane.across.size)


def _between(grid: Grid, axis: int, q: Array) -> tuple[Indices, Array]:
    """The cell whose centre lies below each coordinate, from -1 on, and the weight of the next one."""
    nodes = grid.nodes[axis]
    centres = centres_of(nodes)
    if grid.periodic[axis]:
        turn = nodes[-1] - nodes[0]
        first, last = centres[-1] - turn, centres[0] + turn
    else:  # as far behind the end as the cell lies before it
        first, last = 2 * nodes[0] - centres[0], 2 * nodes[-1] - centres[-1]
    places = np.concatenate([[first], centres, [last]])
    lower = np.clip(np.searchsorted(places, q, side="right") - 1, 0, centres.size)
    return lower - 1, (q - places[lower]) / (places[lower + 1] - places[lower])


def _cells(grid: Grid, index: list[Indices]) -> Indices:
    """Flat indices of cells; one step beyond a pole leads to the other side of it, beyond a wall nowhere."""
    index = list(index)
    for axis, pole in enumerate(grid.poles):
        ring = grid.ring_axis[axis]
        if ring is None or not grid.periodic[ring] or grid.shape[ring] % 2:
            continue
        beyond = (index[axis] < 0) & (pole in ("low", "both"))
        beyond |= (index[axis] >= grid.shape[axis]) & (pole in ("high", "both"))
        index[ring] = index[ring] + np.where(beyond, grid.shape[ring] // 2, 0)
    flat = np.zeros_like(index[0])
    for axis, n in enumerate(grid.shape):
        here = index[axis] % n if grid.periodic[axis] else np.clip(index[axis], 0, n - 1)
        flat = flat * n + here
    return flat
