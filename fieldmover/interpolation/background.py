"""What the gas is outside the source, and how it goes over into what was moved.

Near the source's boundary the moved state is blended into a background: over a width, measured from the boundary
into the source, the source's share of a cell rises from 0 to its coverage. With width 0 the background fills just
the part of each cell that the source does not reach. Boundary means walls only, not seams and poles.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover import compute
from fieldmover.errors import FieldError
from fieldmover.forms.fields import CellContent
from fieldmover.grids.grid import Grid
from fieldmover.interpolation.fluid import FluidPlan
from fieldmover.interpolation.locate import Locator

Array = NDArray[np.float64]
Point = tuple[float, float, float]

_CHUNK = 1 << 16  # points per task


def power_law(grid: Grid, value: float, radius: float, exponent: float, centre: Point = (0.0, 0.0, 0.0)) -> Array:
    """Values value * (r / radius) ** exponent at the cell centres, r the distance from a point.

    Parameters
    ----------
    grid : Grid
    value : float
        At r = radius.
    radius : float
        Positive, in the grid's unit of length.
    exponent : float
    centre : tuple of three float

    Returns
    -------
    ndarray, shape (n1, n2, n3)

    Raises
    ------
    FieldError
        If the radius is not positive, or a value is not finite.

    Examples
    --------
    >>> import fieldmover as fm
    >>> power_law(fm.cartesian_grid([1, 3, 5], [-1, 1], [-1, 1]), 8.0, 2.0, -2.0)[:, 0, 0]
    array([8., 2.])
    """
    if not radius > 0:
        raise FieldError(f"power law: radius {radius!r}, expected above 0")
    arm = grid.centres() - np.asarray(centre, dtype=np.float64).reshape(3, 1, 1, 1)
    with np.errstate(divide="ignore", over="ignore"):
        result = value * (np.sqrt((arm**2).sum(axis=0)) / radius) ** exponent
    if not np.isfinite(result).all():
        place = [int(i) for i in np.argwhere(~np.isfinite(result))[0]]
        raise FieldError(f"power law: {result[tuple(place)]} at cell {place}, expected finite; move the centre")
    return np.asarray(result)


def wall_distance(source: Grid, x: Array) -> Array:
    """Distance of points from the nearest wall of a grid they lie in.

    Parameters
    ----------
    source : Grid
    x : ndarray, shape (3, ...)
        Cartesian positions.

    Returns
    -------
    ndarray, shape (...)
        0 outside; infinite in a grid without walls. The difference of the grid coordinate over its gradient, so along
        arcs in theta and phi, exact for planes, spheres and cylinders, and to first order in warped grids.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> shell = fm.spherical_grid([1, 2, 4], np.linspace(0, np.pi, 5), np.linspace(0, 2 * np.pi, 9))
    >>> wall_distance(shell, np.array([[1.25, 0, 0], [0, 3.5, 0], [0.5, 0, 0]]).T).round(12)
    array([0.25, 0.5 , 0.  ])
    """
    flat, locator = x.reshape(3, -1), Locator(source)
    out = np.empty(flat.shape[1])

    def work(part: slice) -> None:
        units = np.repeat(np.eye(3)[:, :, None], part.stop - part.start, axis=2)
        q, gradient = locator.pull_back(np.ascontiguousarray(flat[:, part]), units)
        least = np.where(np.isnan(q).any(axis=0), 0.0, np.inf)
        for axis, nodes in enumerate(source.nodes):
            if source.periodic[axis]:
                continue
            steep = np.sqrt((gradient[axis] ** 2).sum(axis=0))
            for end, gap in ((0, q[axis] - nodes[0]), (source.shape[axis], nodes[-1] - q[axis])):
                if end not in source.pole_ends(axis):
                    least = np.fmin(least, np.maximum(gap, 0.0) / steep)
        out[part] = least

    compute.for_each(work, compute.slabs(out.size, _CHUNK))
    return out.reshape(x.shape[1:])


class Blend:
    """A transition from what was moved to a background.

    Parameters
    ----------
    plan : FluidPlan
    width : float
        Of the transition, from the source's walls into the source; unit of length. 0: none.

    Attributes
    ----------
    share : ndarray, shape of the target
        The source's part of each cell, 0 to its coverage. Over the width w the factor is 6 s^5 - 15 s^4 + 10 s^3 in
        s = distance of the cell's centre / w: its first and second derivatives vanish at both ends.
    part : ndarray, shape of the target
        What is left of what was moved: share over coverage.

    Raises
    ------
    FieldError
        If the width is negative or not finite.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> line = fm.cartesian_grid([0, 1, 2, 3, 4], [0, 1], [0, 1], periodic=(False, True, True))
    >>> plan = FluidPlan(line, fm.cartesian_grid([0, 1, 2, 3, 4, 5], [0, 1], [0, 1]))
    >>> blend = Blend(plan, 1.0)
    >>> blend.share[:, 0, 0]
    array([0.5, 1. , 1. , 0.5, 0. ])
    >>> blend.content(plan.move(fm.CellContent(line, np.full((4, 1, 1), 8.0))), 2.0)[0].cells[:, 0, 0]
    array([5., 8., 8., 5., 2.])
    """

    def __init__(self, plan: FluidPlan, width: float = 0.0) -> None:
        if not 0 <= width < np.inf:
            raise FieldError(f"width of the transition: {width!r}, expected a length, 0 or more")
        self.plan, self.width = plan, width
        self.part = np.ones(plan.target.shape)
        if width > 0:
            s = np.minimum(wall_distance(plan.source, plan.target.centres()) / width, 1.0)
            self.part = s**3 * (10 + s * (6 * s - 15))
        self.share = plan.coverage * self.part

    def content(self, moved: CellContent, density: ArrayLike) -> tuple[CellContent, dict[str, float]]:
        """Blend contents, mass say.

        Parameters
        ----------
        moved : CellContent
            As the plan moved it.
        density : array_like, shape of the target or scalar
            Of the background, content per volume.

        Returns
        -------
        blended : CellContent
        totals : dict
            "added": content of the background; "removed": what the transition took from what was moved.

        Raises
        ------
        FieldError
            If a shape does not fit or the density is negative or not finite.
        """
        background = self._background(density)
        if (background < 0).any():
            raise FieldError(f"density of the background: its least is {background.min():.6g}, expected 0 or more")
        added = self._added(background)
        kept = moved.cells * self.part
        totals = {"added": float(added.sum()), "removed": float((moved.cells - kept).sum())}
        return CellContent(moved.grid, kept + added), totals

    def by_mass(self, values: ArrayLike, moved: CellContent, density: ArrayLike, background: ArrayLike) -> Array:
        """Blend values per mass: in every cell the mean over the mass that is left and the mass that is added.

        Parameters
        ----------
        values : array_like, shape (m1, m2, m3)
            One value per cell as the plan moved it; components of vectors one by one.
        moved : CellContent
            Their mass, as the plan moved it.
        density, background : array_like, shape of the target or scalar
            Mass density of the background, and its value per mass.

        Returns
        -------
        ndarray, shape (m1, m2, m3)
            The background's value where there is no mass.

        Raises
        ------
        FieldError
            If a shape does not fit or a value of the background is not finite.
        """
        outside, values = self._background(background), np.asarray(values, dtype=np.float64)
        kept, added = moved.cells * self.part, self._added(self._background(density))
        whole = kept + added
        return np.asarray(np.divide(kept * values + added * outside, whole, out=outside.copy(), where=whole > 0))

    def points(self, values: ArrayLike, known: NDArray[np.bool_], background: ArrayLike) -> Array:
        """Blend values of `points.move_points`, one per cell.

        Parameters
        ----------
        values : array_like, shape (m1, m2, m3)
        known : ndarray of bool, shape (m1, m2, m3)
        background : array_like, shape of the target or scalar

        Returns
        -------
        ndarray, shape (m1, m2, m3)
            With width 0 the value itself wherever it is known: a cell is not split.

        Raises
        ------
        FieldError
            If a shape does not fit or a value of the background is not finite.
        """
        outside, values = self._background(background), np.asarray(values, dtype=np.float64)
        return np.where(known, outside + self.part * (np.where(known, values, 0.0) - outside), outside)

    def _added(self, density: Array) -> Array:
        return np.asarray(density * (1.0 - self.share) * self.plan.target.cell_volumes())

    def _background(self, values: ArrayLike) -> Array:
        """Values of the background on all cells of the target."""
        array, shape = np.asarray(values, dtype=np.float64), self.plan.target.shape
        if array.shape not in ((), shape):
            raise FieldError(f"background: shape {array.shape}, expected a number or {shape}")
        if not np.isfinite(array).all():
            place = [int(i) for i in np.argwhere(~np.isfinite(array))[0]]
            raise FieldError(f"background: {array[tuple(place)]} at cell {place}, expected finite values")
        return np.broadcast_to(array, shape)
