"""Fields known on a part of space that symmetry completes: a mirror plane, a wedge, one cell in azimuth.

The magnetic field is an axial vector: seen in a mirror it keeps its component across the plane and reverses those along
it. In fluxes: with z -> -z, the flux normal to z is even, the others are odd; in circulations of A (a polar vector) the
one along z is odd, the others are even; contents are even. No values but signs and shares change, so a divergence of
zero stays zero.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TypeVar

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover.errors import FieldError, GridError
from fieldmover.forms.fields import CellContent, EdgePotential, FaceFlux, close_edges
from fieldmover.grids.grid import Grid, at, cartesian_grid, cylindrical_grid, spherical_grid
from fieldmover.grids.placement import placed, placement

Array = NDArray[np.float64]
Form = TypeVar("Form", bound=FaceFlux | EdgePotential | CellContent)

_ROUND = 1e-9  # angles, or positions over the length of an axis, nearer than this are the same
_CLOSES = 1e-6  # by how much the two sides of a wedge may differ, over the largest value: single precision


def unfold(field: Form, mirror: bool = False, wedge: int = 1, around: int | None = None) -> Form:
    """Complete a field by symmetry.

    Parameters
    ----------
    field : FaceFlux, EdgePotential or CellContent
        On a Cartesian, cylindrical or spherical grid (placed ones included).
    mirror : bool
        The grid ends at the equator (theta = pi/2, or z = 0): add the other half. B as an axial vector.
    wedge : int
        The grid spans 2 pi / wedge in azimuth: repeat it to the full turn.
    around : int, optional
        The grid has one cell in azimuth and the field no dependence on it: cut a full turn into so many cells.

    Returns
    -------
    as `field`
        On the full grid.

    Raises
    ------
    GridError
        If the grid does not end at the equator, its azimuth does not span what `wedge` says, or it has no azimuth.
    FieldError
        If the two sides of a wedge do not agree.

    Examples
    --------
    >>> import fieldmover as fm
    >>> quarter = fm.spherical_grid([1, 2], np.linspace(0, np.pi / 2, 5), np.linspace(0, np.pi, 9))
    >>> flux = fm.flux_from_function(quarter, lambda x, y, z: (0 * x, 0 * y, 1 + 0 * z))
    >>> full = fm.unfold(flux, mirror=True, wedge=2)
    >>> full.grid
    <spherical grid: r 1..2 (1 cells); theta 0..3.14159 (8 cells, poles both); phi 0..6.28319 (16 cells, seam)>
    >>> bool(abs(full.f1.sum()) < 1e-14)
    True
    """
    symmetry = _Symmetry(field.grid, mirror, wedge, around)
    if isinstance(field, FaceFlux):
        f1, f2, f3 = (symmetry.complete(f, 1.0 if d == symmetry.across else -1.0) for d, f in enumerate(field.faces))
        return replace(field, grid=symmetry.full, faces=(f1, f2, f3))
    if isinstance(field, EdgePotential):
        a1, a2, a3 = (symmetry.complete(a, -1.0 if d == symmetry.across else 1.0) for d, a in enumerate(field.edges))
        close_edges(symmetry.full, (a1, a2, a3))
        return replace(field, grid=symmetry.full, edges=(a1, a2, a3))
    return replace(field, grid=symmetry.full, cells=symmetry.complete(field.cells, 1.0))


def unfold_values(
    grid: Grid, values: ArrayLike, odd: bool = False, mirror: bool = False, wedge: int = 1, around: int | None = None
) -> Array:
    """Complete values in cells by symmetry: a density, or a component of a velocity along an axis of the grid.

    Parameters
    ----------
    grid : Grid
        The part that is known.
    values : array_like, shape (n1, n2, n3)
        Anything per cell that does not scale with its volume.
    odd : bool
        The values change their sign in the mirror: the component across the plane of a polar vector such as the
        velocity, the components along it of an axial one.
    mirror, wedge, around
        As for `unfold`.

    Returns
    -------
    ndarray
        On the grid of the unfolded fields.

    Raises
    ------
    FieldError
        If the shape does not fit the grid.
    GridError
        As `unfold`.

    Examples
    --------
    >>> grid = cartesian_grid([0, 1], [0, 1], [0, 1, 2])
    >>> unfold_values(grid, np.array([[[3.0, 4.0]]]), odd=True, mirror=True).ravel()
    array([-4., -3.,  3.,  4.])
    """
    array = np.asarray(values, dtype=np.float64)
    if array.shape != grid.shape:
        raise FieldError(f"values in cells: shape {array.shape}, expected {grid.shape}")
    symmetry = _Symmetry(grid, mirror, wedge, around)
    share = symmetry.share if around is not None else 1.0
    return symmetry.complete(array, -1.0 if odd else 1.0) / share


def perturbed(pot: EdgePotential, size: float, seed: int) -> EdgePotential:
    """A potential with random changes, whose curl has no divergence either.

    Parameters
    ----------
    pot : EdgePotential
    size : float
        Largest relative change: every circulation is multiplied by 1 + size u with u uniform in [-1, 1].
    seed : int
        The same seed gives the same changes.

    Raises
    ------
    FieldError
        If the size is negative or not finite.

    Examples
    --------
    >>> import fieldmover as fm
    >>> grid = fm.cartesian_grid([0, 1, 2], [0, 1], [0, 1])
    >>> pot = fm.potential_from_function(grid, lambda x, y, z: (y, 0 * y, 0 * y))
    >>> fm.divergence(fm.curl(perturbed(pot, 0.01, seed=1))).cells.ravel()
    array([0., 0.])
    """
    if not 0.0 <= size < np.inf:
        raise FieldError(f"size of the perturbation: {size}, expected a finite number of at least 0")
    random = np.random.default_rng(seed)
    a1, a2, a3 = (a * (1.0 + size * random.uniform(-1.0, 1.0, a.shape)) for a in pot.edges)
    close_edges(pot.grid, (a1, a2, a3))
    return EdgePotential(pot.grid, (a1, a2, a3))


class _Symmetry:
    """What the parts of a grid become when it is completed.

    `full` is the whole grid, `across` the axis that the mirror reverses (-1: none), `share` the part of the one cell
    in azimuth that each of the new cells gets.
    """

    def __init__(self, grid: Grid, mirror: bool, wedge: int, around: int | None) -> None:
        if grid.kind not in ("cartesian", "cylindrical", "spherical"):
            raise GridError(
                f"symmetry: a {grid.kind} grid has no equator or azimuth to unfold, expected a Cartesian, cylindrical "
                "or spherical one"
            )
        self._nodes, self._cells = list(grid.nodes), grid.shape
        self.across, self._first_half = -1, True
        self._azimuth, self._copies, self.share = -1, 1, 1.0
        if wedge != 1 or around is not None:
            self._turn(grid, wedge, around)
        if mirror:
            self._reflect(grid)
        if grid.kind == "cartesian":
            seams = grid.periodic[0], grid.periodic[1], grid.periodic[2] and not mirror
            x, y, z = self._nodes
            self.full = cartesian_grid(x, y, z, seams)
        else:
            self.full = (cylindrical_grid if grid.kind == "cylindrical" else spherical_grid)(*self._nodes)
        where = placement(grid)
        if where is not None:
            self.full = placed(self.full, *where)

    def _turn(self, grid: Grid, wedge: int, around: int | None) -> None:
        if grid.kind == "cartesian":
            raise GridError("wedge: a Cartesian grid has no azimuth, expected a cylindrical or spherical one")
        self._azimuth = 1 if grid.kind == "cylindrical" else 2
        phi = grid.nodes[self._azimuth]
        span = float(phi[-1] - phi[0])
        if around is not None:
            if wedge != 1 or around < 1 or phi.size != 2:
                raise GridError(
                    f"around = {around}, wedge = {wedge} with {phi.size - 1} cells in azimuth: expected one cell, at "
                    "least 1 to cut the turn into, and no wedge"
                )
            self._copies, self.share = around, 2.0 * np.pi / span / around
            self._nodes[self._azimuth] = phi[0] + 2.0 * np.pi * np.arange(around + 1) / around
            return
        if wedge < 1 or abs(span * wedge - 2.0 * np.pi) > _ROUND * wedge:
            raise GridError(
                f"wedge = {wedge}: the azimuth spans {span:.12g} = 2 pi / {2.0 * np.pi / span:.9g}, expected 2 pi / n "
                "with n this whole number"
            )
        self._copies = wedge
        turns = phi[0] + 2.0 * np.pi * np.arange(wedge) / wedge
        self._nodes[self._azimuth] = np.append((turns[:, None] + (phi[:-1] - phi[0])).ravel(), phi[0] + 2.0 * np.pi)

    def _reflect(self, grid: Grid) -> None:
        self.across = 1 if grid.kind == "spherical" else 2
        q = grid.nodes[self.across]
        plane = 0.5 * np.pi if grid.kind == "spherical" else 0.0
        gaps = abs(q[0] - plane), abs(q[-1] - plane)
        if min(gaps) > _ROUND * max(1.0, float(np.ptp(q))) or grid.periodic[self.across]:
            raise GridError(
                f"mirror: nodes of {grid.map.names[self.across]} run from {q[0]:.9g} to {q[-1]:.9g}, expected one end "
                f"on the plane of symmetry, {plane:.9g}"
            )
        self._first_half = bool(gaps[1] < gaps[0])
        if self._first_half:
            self._nodes[self.across] = np.concatenate([q[:-1], [plane], 2.0 * plane - q[-2::-1]])
        else:
            self._nodes[self.across] = np.concatenate([2.0 * plane - q[:0:-1], [plane], q[1:]])

    def complete(self, values: Array, sign: float) -> Array:
        """Values on the full grid; `sign` is what the mirror multiplies by."""
        if self._azimuth >= 0:
            values = self._repeat(values, self._azimuth)
        if self.across >= 0:
            image = sign * np.flip(values, self.across)
            if values.shape[self.across] > self._cells[self.across]:  # nodes: those on the plane once
                image = image[at(self.across, slice(1, None) if self._first_half else slice(None, -1))]
            values = np.concatenate([values, image] if self._first_half else [image, values], axis=self.across)
        return np.ascontiguousarray(values)

    def _repeat(self, values: Array, axis: int) -> Array:
        times = [self._copies if d == axis else 1 for d in range(3)]
        if values.shape[axis] == self._cells[axis]:
            return self.share * np.tile(values, times)
        first, last = values[at(axis, slice(0, 1))], values[at(axis, slice(-1, None))]
        gap, size = float(np.abs(last - first).max()), float(np.abs(values).max())
        if gap > _CLOSES * size:
            raise FieldError(
                f"wedge: its two sides in azimuth differ by up to {gap:.3g} where the largest value is {size:.3g}, "
                "expected equal ones"
            )
        return np.concatenate([np.tile(values[at(axis, slice(None, -1))], times), first], axis=axis)
