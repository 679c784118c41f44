"""Magnetic flux through the closed walls of a grid, summed over faces."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import make_interp_spline

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
        Outward through the northern hemisphere of a spherical grid, a cubic spline of theta between nodes; None on
        other grids.
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


def _axis_of_closed_walls(grid: Grid) -> int | None:
    closed = [seam or poles == "both" for seam, poles in zip(grid.periodic, grid.poles, strict=True)]
    return closed.index(False) if closed.count(False) == 1 else None


def _wall(grid: Grid, faces: Array) -> Wall:
    north = _north(grid.nodes[1], faces) if grid.kind == "spherical" else None
    return Wall(float(faces.sum()), float(np.abs(faces).sum()), north)


def _north(theta: Array, faces: Array) -> float:
    """Flux through the rings of faces [theta, phi] north of the equator."""
    caps = np.append(0.0, np.cumsum(faces.sum(axis=1)))
    spline = make_interp_spline(theta, caps, k=min(3, theta.size - 1), check_finite=False)
    return float(spline(np.pi / 2))
