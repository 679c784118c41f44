"""All figures of a field in one sweep."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from typing import Any

from fieldmover.diagnostics.cells import Mask
from fieldmover.diagnostics.divergence import Index, Norms, Point, centre_at, tally, unravelled
from fieldmover.diagnostics.limits import finite
from fieldmover.diagnostics.walls import Wall, closed_walls
from fieldmover.forms.fields import FaceFlux


@dataclass(frozen=True)
class Place:
    """A cell [i1, i2, i3] and the Cartesian position of its centre, unit L."""

    cell: Index
    position: Point


@dataclass(frozen=True)
class Diagnosis:
    """Figures of a magnetic field given by its fluxes.

    Lengths L and fields B are in the units of the data; energies are Heaviside-Lorentz. A value is NaN or
    infinite where a flux is; `as_dict` has None there.

    Attributes
    ----------
    cells : int
        Number of cells looked at.
    divergence : Norms
        |net flux| / sum of |flux| over the six faces of a cell, 0 where no face carries flux. At most 1.
    scaled_divergence : Norms
        h |div B| / |B|, with h the cube root of the cell volume, div B = net flux / volume and |B|^2 = twice
        the energy of the cell / volume; the same as `divergence` where |B|^2 vanishes.
    net_flux : float
        Largest |net flux| of a cell, unit B L^2.
    worst : Place
        Where `divergence` is largest (the first such cell).
    energy : float
        Half the integral of B^2, unit B^2 L^3, summed over the cells looked at: half the sum of w F^2 over
        the faces (`cell_energies`).
    energy_by_axis : tuple of three float
        Half the integral of B^i B_i for each grid axis i (no sum): energy of the component along the axis
        where axes are at right angles. They add up to `energy`.
    strength : float
        Largest |B| of a cell, as in `scaled_divergence`, unit B.
    strongest : Place
        Where it is.
    inner_wall, outer_wall : Wall or None
        Flux through the walls of a full sphere, say; None where a wall is not closed. The net flux of the
        inner one is the charge of the hole.
    """

    cells: int
    divergence: Norms
    scaled_divergence: Norms
    net_flux: float
    worst: Place
    energy: float
    energy_by_axis: tuple[float, float, float]
    strength: float
    strongest: Place
    inner_wall: Wall | None
    outer_wall: Wall | None

    def as_dict(self) -> dict[str, Any]:
        """Plain JSON: finite numbers, lists, None where undefined; the same names on every grid.

        Limits and comparisons call a figure by its dotted name, "energy.total" say.
        """
        e1, e2, e3 = self.energy_by_axis
        return {
            "cells": self.cells,
            "divergence": {
                **_plain(self.divergence),
                "scaled": _plain(self.scaled_divergence),
                "net_flux": finite(self.net_flux),
                **_listed(self.worst),
            },
            "energy": {
                "total": finite(self.energy),
                "axis1": finite(e1),
                "axis2": finite(e2),
                "axis3": finite(e3),
            },
            "strength": {"largest": finite(self.strength), **_listed(self.strongest)},
            "inner_wall": _wall(self.inner_wall),
            "outer_wall": _wall(self.outer_wall),
        }


def diagnose(flux: FaceFlux, excluded: Mask | None = None) -> Diagnosis:
    """Measure divergence, energy, strength and wall fluxes of a field.

    Parameters
    ----------
    flux : FaceFlux
        Unit B L^2.
    excluded : bool ndarray, shape (n1, n2, n3), optional
        Cells to leave out of every figure but the wall fluxes.

    Returns
    -------
    Diagnosis
        The same bits for any number of threads.

    Raises
    ------
    FieldError
        If the mask does not fit the grid or leaves no cell.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> q = np.linspace(-1, 1, 9)
    >>> grid = fm.cartesian_grid(q, q, q)
    >>> found = fm.diagnose(fm.curl(fm.potential_from_function(grid, lambda x, y, z: (-y / 2, x / 2, 0 * z))))
    >>> found.divergence.linf < 1e-15, round(found.energy, 12), round(found.strength, 12)
    (True, 4.0, 1.0)
    """
    found = tally(flux, excluded)
    inner, outer = closed_walls(flux)

    def place(flat: int) -> Place:
        cell = unravelled(flux.grid, flat)
        return Place(cell, centre_at(flux.grid, cell))

    return Diagnosis(
        cells=found.cells,
        divergence=found.relative,
        scaled_divergence=found.scaled,
        net_flux=found.net,
        worst=place(found.worst),
        energy=sum(found.energies),
        energy_by_axis=found.energies,
        strength=found.strength,
        strongest=place(found.strongest),
        inner_wall=inner,
        outer_wall=outer,
    )


def _plain(norms: Norms) -> dict[str, float | None]:
    return {name: finite(value) for name, value in asdict(norms).items()}


def _wall(wall: Wall | None) -> dict[str, float | None]:
    if wall is None:
        return {"net": None, "relative": None, "north": None}
    return {"net": finite(wall.net), "relative": finite(wall.relative), "north": finite(wall.north)}


def _listed(place: Place) -> dict[str, list]:
    return {"cell": list(place.cell), "position": [finite(x) for x in place.position]}
