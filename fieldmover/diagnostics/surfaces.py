"""Magnetic flux through closed walls, spheres, caps and discs, summed over faces."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import make_interp_spline

from fieldmover.errors import FieldError
from fieldmover.forms.fields import FaceFlux
from fieldmover.grids.grid import Grid, at

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Wall:
    """Flux through a closed wall, unit B L^2.

    Attributes
    ----------
    net : float
        Along the axis, hence outward from what the wall encloses: its magnetic charge.
    gross : float
        Sum of |flux| over the faces.
    north : float or None
        Outward through the northern hemisphere, on spherical grids (see `cap_flux`); None on others.
    """

    net: float
    gross: float
    north: float | None

    @property
    def relative(self) -> float:
        """net / gross; 0 where no face carries flux."""
        return self.net / self.gross if self.gross != 0 else 0.0


def closed_walls(flux: FaceFlux) -> tuple[Wall | None, Wall | None]:
    """Inner and outer wall of a grid whose walls are closed surfaces, a full sphere for example.

    The walls of an axis are closed when each of the other two axes has a seam or ends in poles on both sides.

    Parameters
    ----------
    flux : FaceFlux

    Returns
    -------
    inner, outer : Wall or None
        None where there is no such wall. The inner one bounds a hole, whose charge is `inner.net`.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> grid = fm.spherical_grid([1, 2], np.linspace(0, np.pi, 5), np.linspace(0, 2 * np.pi, 9))
    >>> def charge(x, y, z):
    ...     r3 = (x * x + y * y + z * z) ** 1.5
    ...     return x / r3, y / r3, z / r3
    >>> round(closed_walls(fm.flux_from_function(grid, charge))[0].net / (4 * np.pi), 6)
    1.0
    """
    axis = _axis_of_closed_walls(flux.grid)
    if axis is None:
        return None, None
    ends = flux.grid.pole_ends(axis)
    inner = None if 0 in ends else _wall(flux.grid, flux.faces[axis][at(axis, 0)])
    outer = None if flux.grid.shape[axis] in ends else _wall(flux.grid, flux.faces[axis][at(axis, -1)])
    return inner, outer


def cap_flux(flux: FaceFlux, radius: float, theta: float = np.pi / 2) -> float:
    """Flux outward through the part of a sphere between its north pole and the angle theta.

    theta = pi / 2 makes it the northern hemisphere, theta = pi the whole sphere. A sum of faces on nodes of
    the grid; between them it is a cubic spline of r and theta.

    Parameters
    ----------
    flux : FaceFlux
        On a spherical grid that reaches the north pole and goes all the way round.
    radius : float
        Unit L.
    theta : float
        Radians.

    Returns
    -------
    float
        Unit B L^2.

    Raises
    ------
    FieldError
        If the grid is another, or radius or theta lies outside it.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> grid = fm.spherical_grid([1, 2], np.linspace(0, np.pi, 5), np.linspace(0, 2 * np.pi, 9))
    >>> flux = fm.flux_from_function(grid, lambda x, y, z: (0 * x, 0 * y, 1 + 0 * z))
    >>> round(cap_flux(flux, 2.0) / np.pi, 6)
    4.0
    """
    _need_caps(flux.grid, "flux through a cap")
    return _between_nodes(flux.grid, _caps(flux.f1), radius, theta)


def disc_flux(flux: FaceFlux, radius: float) -> float:
    """Flux in the direction of +z through the disc z = 0 between the inner wall and a radius.

    Parameters
    ----------
    flux : FaceFlux
        On a spherical grid that goes all the way round.
    radius : float
        Unit L.

    Returns
    -------
    float
        Unit B L^2. A sum of faces on nodes of the grid, a cubic spline between them.

    Raises
    ------
    FieldError
        If the grid is another, or the disc lies outside it.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> grid = fm.spherical_grid([1, 2], np.linspace(0, np.pi, 5), np.linspace(0, 2 * np.pi, 9))
    >>> flux = fm.flux_from_function(grid, lambda x, y, z: (0 * x, 0 * y, 1 + 0 * z))
    >>> round(disc_flux(flux, 2.0) / np.pi, 6)
    3.0
    """
    _need_caps(flux.grid, "flux through a disc", pole=False)
    rings = np.cumsum(-flux.f2.sum(axis=2), axis=0)
    return _between_nodes(flux.grid, np.pad(rings, ((1, 0), (0, 0))), radius, np.pi / 2)


def _axis_of_closed_walls(grid: Grid) -> int | None:
    closed = [seam or poles == "both" for seam, poles in zip(grid.periodic, grid.poles, strict=True)]
    return closed.index(False) if closed.count(False) == 1 else None


def _wall(grid: Grid, faces: Array) -> Wall:
    north = float(_spline(grid.nodes[1], _caps(faces), np.pi / 2)) if grid.kind == "spherical" else None
    return Wall(float(faces.sum()), float(np.abs(faces).sum()), north)


def _caps(faces: Array) -> Array:
    """Running sums from the pole over rings of faces [..., theta, phi], 0 first."""
    sums = np.cumsum(faces.sum(axis=-1), axis=-1)
    return np.concatenate([np.zeros((*sums.shape[:-1], 1)), sums], axis=-1)


def _need_caps(grid: Grid, what: str, pole: bool = True) -> None:
    fits = grid.kind == "spherical" and grid.periodic[2] and (not pole or grid.poles[1] in ("low", "both"))
    if not fits:
        wanted = "phi all the way round" + (" and theta from 0" if pole else "")
        raise FieldError(f"{what}: the grid is {grid!r}, expected a spherical one with {wanted}")


def _between_nodes(grid: Grid, values: Array, radius: float, theta: float) -> float:
    """Value at (radius, theta) of a function given at the nodes of r and theta."""
    for name, nodes, q in zip(("radius", "theta"), grid.nodes[:2], (radius, theta), strict=True):
        if not nodes[0] <= q <= nodes[-1]:
            raise FieldError(f"{name} {q:.17g} lies outside the grid, {nodes[0]:.17g} to {nodes[-1]:.17g}")
    return float(_spline(grid.nodes[0], _spline(grid.nodes[1], values, theta), radius))


def _spline(nodes: Array, values: Array, q: float) -> Array:
    """Interpolate along the last axis."""
    spline = make_interp_spline(nodes, values, k=min(3, nodes.size - 1), axis=-1, check_finite=False)
    return np.asarray(spline(q))
