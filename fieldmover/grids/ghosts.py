"""Layers of cells round a grid: what they are beyond walls, seams and poles.

Beyond a wall the nodes go on in steps as long as the last one. Beyond a seam the grid begins again. Beyond a pole its
coordinate goes on, to negative values or above pi: the cell there is the one on the other side of the pole, half a turn
of azimuth away. Coordinates are left-handed there, so that volumes, and areas of faces with an edge along the ring,
come out negative, as r^2 sin(theta) does. Fluxes follow: divided by these areas they give the components along unit
vectors that go on smoothly through the pole, B_r even, B_theta and B_phi odd, as codes with a polar axis commonly
have them in their ghost cells (common practice, no source).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from fieldmover.errors import GridError
from fieldmover.grids.folds import least_corner
from fieldmover.grids.grid import Grid, at

Array = NDArray[np.float64]
Whole = tuple[int, int, int]

_HALF_TURN = 1e-9  # radians: nodes nearer than this to half a turn from another are opposite to it
_ROUND_OFF = 1e-6  # of a cell, or of a turn: nodes nearer than this to where coordinates end are there


class Ghosts:
    """A grid with layers of cells round it.

    Parameters
    ----------
    grid : Grid
        Cartesian, cylindrical, spherical or warped; placed ones included.
    layers : int or three int
        How many, at both ends of every axis.

    Attributes
    ----------
    grid : Grid
        The grid without layers.
    layers : tuple of three int
    outer : Grid
        With the layers beyond walls only. Seams and poles are as on the grid.
    whole : Grid
        With all layers, without seams and poles. Beyond poles its coordinates are left-handed.
    inside : tuple of three slices
        Cells of the grid among those of `whole`.

    Raises
    ------
    GridError
        If the layers are no whole numbers of at least 0, or more than the grid has cells to repeat; if they would reach
        r <= 0, or theta or azimuth out of their range; if the other side of a pole is not on the grid; if a warped map
        does not go on beyond the walls, or has poles; if the grid is a table.

    Examples
    --------
    >>> from fieldmover import spherical_grid
    >>> ghosts = Ghosts(spherical_grid([2, 3], np.linspace(0, np.pi, 3), np.linspace(0, 2 * np.pi, 5)), 1)
    >>> ghosts.outer.nodes[0], ghosts.outer.shape
    (array([1., 2., 3., 4.]), (3, 2, 4))
    >>> (ghosts.whole.nodes[1] / np.pi).round(3)
    array([-0.5,  0. ,  0.5,  1. ,  1.5])
    """

    def __init__(self, grid: Grid, layers: int | Sequence[int]) -> None:
        counts = tuple(layers) if isinstance(layers, Sequence) else (layers,) * 3
        if len(counts) != 3 or any(isinstance(n, bool) or int(n) != n or n < 0 for n in counts):
            raise GridError(f"ghost layers: {layers!r}, expected a whole number of at least 0, or three of them")
        if grid.kind == "tabulated" and any(counts):
            raise GridError(
                "ghost layers: a tabulated grid ends with its table, expected a grid in coordinates; give the table of "
                "the larger grid instead"
            )
        self.grid = grid
        self.layers: Whole = (int(counts[0]), int(counts[1]), int(counts[2]))
        self._low: Whole = self._beyond_walls(0)
        self._high: Whole = self._beyond_walls(-1)
        for axis in range(3):
            self._refuse_gaps(axis)
        self.outer = self._extended()
        nodes = [self._all_nodes(axis) for axis in range(3)]
        self.whole = replace(
            grid, nodes=(nodes[0], nodes[1], nodes[2]), periodic=(False,) * 3, poles=(None, None, None)
        )
        a, b, c = (slice(n, n + cells) for n, cells in zip(self.layers, grid.shape, strict=True))
        self.inside = (a, b, c)

    def in_outer(self, along: Sequence[bool]) -> tuple[slice, slice, slice]:
        """Where an array on the grid lies in one on `outer`; `along`: whether it has cells along an axis, or nodes."""
        a, b, c = (
            slice(low, low + n + (not cells)) for low, n, cells in zip(self._low, self.grid.shape, along, strict=True)
        )
        return a, b, c

    def faces(self, faces: tuple[Array, Array, Array]) -> tuple[Array, Array, Array]:
        """Fluxes on `whole` from those on `outer`.

        Those beyond a pole are the pull-back under (theta, phi) -> (-theta, phi + pi): the flux through faces normal to
        theta as it is on the other side, through the others with the opposite sign. All obey the same divergence.
        """
        one, two, three = (self._repeated(f, tuple(d != axis for d in range(3)), axis) for axis, f in enumerate(faces))
        return one, two, three

    def cells(self, values: Array, odd: bool = False) -> Array:
        """Values in the cells of `whole` from those in the cells of `outer`.

        Parameters
        ----------
        values : ndarray, shape (..., n1, n2, n3)
            On `outer`.
        odd : bool
            Their sign changes across poles, as that of the orthonormal components along theta and phi does.

        Examples
        --------
        >>> from fieldmover import cylindrical_grid
        >>> pipe = cylindrical_grid([0, 1, 2], np.linspace(0, 2 * np.pi, 5), [0, 1])
        >>> values = np.arange(12.0).reshape(3, 4, 1)
        >>> Ghosts(pipe, (1, 1, 0)).cells(values)[:, :, 0]
        array([[ 1.,  2.,  3.,  0.,  1.,  2.],
               [ 3.,  0.,  1.,  2.,  3.,  0.],
               [ 7.,  4.,  5.,  6.,  7.,  4.],
               [11.,  8.,  9., 10., 11.,  8.]])
        """
        flat = values.reshape(-1, *values.shape[-3:])
        out = [self._repeated(v, (True, True, True), None, -1.0 if odd else 1.0) for v in flat]
        return np.stack(out).reshape(*values.shape[:-3], *out[0].shape)

    def _beyond_walls(self, end: int) -> Whole:
        """Layers beyond the walls at the low ends (0) or the high ones (-1)."""
        counts = []
        for axis, n in enumerate(self.layers):
            pole = (0 if end == 0 else self.grid.shape[axis]) in self.grid.pole_ends(axis)
            counts.append(0 if self.grid.periodic[axis] or pole else n)
        return counts[0], counts[1], counts[2]

    def _refuse_gaps(self, axis: int) -> None:
        """Refuse layers beyond a seam or pole that the grid does not have."""
        grid, n, name = self.grid, self.layers[axis], self.grid.map.names[axis]
        repeated = grid.periodic[axis] or grid.poles[axis] is not None
        if repeated and n > grid.shape[axis]:
            raise GridError(
                f"ghost layers: {n} beyond a seam or pole of {name}, expected at most its {grid.shape[axis]} cells"
            )
        if n == 0 or grid.poles[axis] is None:
            return
        ring = grid.ring_of(axis)
        phi, half = grid.nodes[ring], grid.shape[ring] // 2
        if grid.kind == "warped":
            raise GridError(
                f"ghost layers: the map does not tell what is beyond the pole of {name}, expected none there"
            )
        steps = np.diff(phi)
        if not grid.periodic[ring] or grid.shape[ring] % 2 or np.abs(steps[:half] - steps[half:]).max() > _HALF_TURN:
            raise GridError(
                f"ghost layers: cells beyond the pole of {name} are those half a turn of {grid.map.names[ring]} away, "
                f"but its {grid.shape[ring]} cells from {phi[0]:.6g} to {phi[-1]:.6g} have no such opposites; expected "
                "an even number all round, the second half in the steps of the first"
            )

    def _extended(self) -> Grid:
        """The grid with layers beyond walls."""
        if not any(self._low) and not any(self._high):
            return self.grid
        nodes = []
        for q, low, high in zip(self.grid.nodes, self._low, self._high, strict=True):
            before = q[0] - np.arange(low, 0, -1) * (q[1] - q[0])
            nodes.append(_fixed(np.concatenate([before, q, q[-1] + np.arange(1, high + 1) * (q[-1] - q[-2])])))
        grid = replace(self.grid, nodes=(nodes[0], nodes[1], nodes[2]))
        _refuse_ranges(self.grid, grid)
        return grid

    def _all_nodes(self, axis: int) -> Array:
        q, n = self.outer.nodes[axis], self.layers[axis]
        if self.grid.periodic[axis]:
            turn = q[-1] - q[0]
            return _fixed(np.concatenate([q[-1 - n : -1] - turn, q, q[1 : n + 1] + turn]))
        if n and 0 in self.grid.pole_ends(axis):
            q = np.concatenate([2.0 * q[0] - q[n:0:-1], q])
        if n and self.grid.shape[axis] in self.grid.pole_ends(axis):
            q = np.concatenate([q, 2.0 * q[-1] - q[-2 : -2 - n : -1]])
        return _fixed(q)

    def _repeated(self, values: Array, along: tuple[bool, ...], normal: int | None, beyond_pole: float = -1.0) -> Array:
        """Add the layers beyond poles, then those beyond seams."""
        grid = self.grid
        for axis, n in enumerate(self.layers):
            if grid.poles[axis] is None or n == 0:
                continue
            ring = grid.ring_of(axis)
            sign = 1.0 if normal == axis else beyond_pole
            opposite = sign * _half_turn(values, ring, along[ring])
            skip = 0 if along[axis] else 1  # the node on the pole is there once
            parts = [values]
            if 0 in grid.pole_ends(axis):
                parts.insert(0, np.flip(opposite[at(axis, slice(skip, skip + n))], axis))
            if grid.shape[axis] in grid.pole_ends(axis):
                last = values.shape[axis] - skip
                parts.append(np.flip(opposite[at(axis, slice(last - n, last))], axis))
            values = np.concatenate(parts, axis=axis)
        for axis, n in enumerate(self.layers):
            if not grid.periodic[axis] or n == 0:
                continue
            skip, size = 0 if along[axis] else 1, values.shape[axis]
            before = values[at(axis, slice(size - skip - n, size - skip))]
            after = values[at(axis, slice(skip, skip + n))]
            values = np.concatenate([before, values, after], axis=axis)
        return np.ascontiguousarray(values)


def with_ghosts(grid: Grid, layers: int | Sequence[int]) -> Grid:
    """A grid with layers of cells round it; see `Ghosts`, whose `whole` this is.

    Examples
    --------
    >>> from fieldmover import cartesian_grid
    >>> with_ghosts(cartesian_grid([0, 1, 3], [0, 1], [0, 1]), (2, 0, 0)).nodes[0]
    array([-2., -1.,  0.,  1.,  3.,  5.,  7.])
    """
    return Ghosts(grid, layers).whole


def _fixed(nodes: Array) -> Array:
    nodes.flags.writeable = False
    return nodes


def _half_turn(values: Array, ring: int, cells: bool) -> Array:
    """Values of the other side of the pole."""
    n = values.shape[ring] - (not cells)
    turned = np.roll(values[at(ring, slice(0, n))], n // 2, axis=ring)
    return turned if cells else np.concatenate([turned, turned[at(ring, slice(0, 1))]], axis=ring)


def _refuse_ranges(grid: Grid, outer: Grid) -> None:
    """Refuse nodes beyond walls where the coordinates end."""
    names, q = outer.map.names, outer.nodes
    if outer.kind in ("cylindrical", "spherical"):
        azimuth = 1 if outer.kind == "cylindrical" else 2
        if grid.poles[0] is None and q[0][0] < _ROUND_OFF * (q[0][1] - q[0][0]):
            raise GridError(
                f"ghost layers: they would reach {names[0]} = {q[0][0]:.6g} below {grid.nodes[0][0]:.6g}, expected a "
                "positive radius; ask for fewer layers or for smaller cells at the inner wall"
            )
        if not grid.periodic[azimuth] and np.ptp(q[azimuth]) > 2.0 * np.pi * (1.0 - _ROUND_OFF):
            raise GridError(
                f"ghost layers: with them {names[azimuth]} would span {np.ptp(q[azimuth]):.6g}, expected less than a "
                "full turn"
            )
    if outer.kind == "spherical":
        low, high = (i in grid.pole_ends(1) for i in (0, grid.shape[1]))
        near = _ROUND_OFF * np.diff(q[1]).min()
        if (q[1][0] < near and not low) or (q[1][-1] > np.pi - near and not high):
            raise GridError(
                f"ghost layers: with them theta would run from {q[1][0]:.6g} to {q[1][-1]:.6g}, across a pole that is "
                "not on the grid; ask for fewer layers, or for a grid that ends at the pole"
            )
    if outer.kind == "warped":
        x = outer.node_positions()
        if not np.isfinite(x).all() or least_corner(x)[0] <= 0:
            raise GridError("ghost layers: the map is not finite or folds beyond the walls, expected it to go on there")
