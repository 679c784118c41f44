"""Sums over the gas: mass, momentum, angular momentum, kinetic and internal energy."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fieldmover.errors import FieldError
from fieldmover.forms.fields import CellContent

Array = NDArray[np.float64]
Point = tuple[float, float, float]


@dataclass(frozen=True)
class FluidSums:
    """Sums over all cells; units of the mass M, the length L and the speed V of the data.

    Attributes
    ----------
    mass : float
        Unit M.
    momentum : tuple of three float, or None
        Cartesian, unit M V; None without velocities, and so below.
    angular_momentum : tuple of three float, or None
        About the origin, every cell's mass at its centre; unit M L V.
    kinetic_energy : float or None
        Half of mass times speed squared (Newtonian), unit M V^2.
    internal_energy : float or None
        None without internal energies.
    """

    mass: float
    momentum: Point | None
    angular_momentum: Point | None
    kinetic_energy: float | None
    internal_energy: float | None

    def as_dict(self) -> dict[str, Any]:
        """Plain JSON."""
        return {name: list(v) if isinstance(v, tuple) else v for name, v in asdict(self).items()}


def fluid_sums(mass: CellContent, velocity: Array | None = None, energy: Array | None = None) -> FluidSums:
    """Sum the gas over a grid.

    Parameters
    ----------
    mass : CellContent
    velocity : ndarray, shape (3, n1, n2, n3), optional
        Cartesian components.
    energy : ndarray, shape (n1, n2, n3), optional
        Internal energy per unit mass.

    Returns
    -------
    FluidSums

    Raises
    ------
    FieldError
        If a shape does not fit the grid.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> grid = fm.cartesian_grid([0, 2], [0, 2], [0, 2])
    >>> velocity = np.array([0.0, 3.0, 0.0]).reshape(3, 1, 1, 1)
    >>> fluid_sums(fm.CellContent(grid, np.full((1, 1, 1), 2.0)), velocity).angular_momentum
    (-6.0, 0.0, 6.0)
    """
    grid, m = mass.grid, mass.cells
    momentum = angular = kinetic = internal = None
    if velocity is not None:
        _fits("velocity", velocity, (3, *grid.shape))
        x, p = grid.centres(), velocity * m
        momentum = _point([float(part.sum()) for part in p])
        pairs = ((1, 2), (2, 0), (0, 1))
        angular = _point([float((x[a] * p[b]).sum() - (x[b] * p[a]).sum()) for a, b in pairs])
        kinetic = 0.5 * float((p * velocity).sum())
    if energy is not None:
        _fits("internal energy", energy, grid.shape)
        internal = float((energy * m).sum())
    return FluidSums(float(m.sum()), momentum, angular, kinetic, internal)


def _fits(what: str, array: Array, shape: tuple[int, ...]) -> None:
    if np.shape(array) != shape:
        raise FieldError(f"{what}: shape {np.shape(array)}, expected {shape}")


def _point(values: list[float]) -> Point:
    x, y, z = values
    return x, y, z
