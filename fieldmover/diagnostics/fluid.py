"""The gas: mass, momentum, angular momentum and energies, and the extremes that limit a time step or break a code."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fieldmover.diagnostics.cells import Mask, cell_volumes, checked_mask
from fieldmover.diagnostics.divergence import Index, centre_at, unravelled
from fieldmover.diagnostics.energy import cell_energies
from fieldmover.errors import FieldError
from fieldmover.forms.fields import CellContent, FaceFlux
from fieldmover.grids.grid import Grid

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


@dataclass(frozen=True)
class Extreme:
    """An extreme value and its place.

    Attributes
    ----------
    value : float
    cell : tuple of three int
        The first cell that has it.
    position : tuple of three float
        Cartesian position of its centre, unit L.
    """

    value: float
    cell: Index
    position: Point


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


def squares(flux: FaceFlux) -> Array:
    """B^2 of every cell, twice its energy over its volume as for `diagnose`, shape (n1, n2, n3).

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> grid = fm.cartesian_grid([0, 1, 2], [0, 1], [0, 1])
    >>> squares(fm.flux_from_function(grid, lambda x, y, z: (0 * x, 0 * y, 2 + 0 * z))).ravel().round(12)
    array([4., 4.])
    """
    return np.asarray(2.0 * cell_energies(flux) / cell_volumes(flux.grid))


def fluid_extremes(
    grid: Grid,
    square: Array | None = None,
    density: Array | None = None,
    pressure: Array | None = None,
    speed: Array | None = None,
    lorentz: Array | None = None,
    where: Mask | None = None,
) -> dict[str, Extreme | None]:
    """Extremes of b^2 / rho, plasma beta, speed and Lorentz factor, and where they are.

    Parameters
    ----------
    grid : Grid
    square : ndarray, shape (n1, n2, n3), optional
        b^2 in Heaviside-Lorentz units: B^2 (`squares`), or in the frame of the gas.
    density, pressure, speed, lorentz : ndarrays, shape (n1, n2, n3), optional
    where : bool ndarray, shape (n1, n2, n3), optional
        Cells to look at; all by default.

    Returns
    -------
    dict
        "b2_over_rho_largest", over cells that hold gas; "beta_smallest" and "beta_largest" of 2 p / b^2, over cells
        that hold field; "speed_largest"; "lorentz_largest". None where a quantity is not given or no cell qualifies.

    Raises
    ------
    FieldError
        If a shape does not fit the grid.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> grid = fm.cartesian_grid([0, 1, 2], [0, 1], [0, 1])
    >>> found = fluid_extremes(grid, np.full((2, 1, 1), 4.0), density=np.array([8.0, 1.0]).reshape(2, 1, 1))
    >>> found["b2_over_rho_largest"].cell, found["b2_over_rho_largest"].value, found["speed_largest"]
    ((1, 0, 0), 4.0, None)
    """
    keep = np.ones(grid.shape, dtype=np.bool_) if where is None else checked_mask(grid, where, "where")
    given = {"b^2": square, "density": density, "pressure": pressure, "speed": speed, "Lorentz factor": lorentz}
    for what, array in given.items():
        if array is not None:
            _fits(what, array, grid.shape)
    found: dict[str, Extreme | None] = dict.fromkeys(EXTREMES)
    if square is not None and density is not None:
        found["b2_over_rho_largest"] = _largest(grid, square, density, keep)
    if square is not None and pressure is not None:
        found["beta_largest"] = _largest(grid, 2.0 * pressure, square, keep)
        least = _largest(grid, -2.0 * pressure, square, keep)
        found["beta_smallest"] = None if least is None else Extreme(-least.value, least.cell, least.position)
    for name, array in (("speed_largest", speed), ("lorentz_largest", lorentz)):
        if array is not None:
            found[name] = _largest(grid, array, np.ones(1), keep)
    return found


EXTREMES = ("b2_over_rho_largest", "beta_smallest", "beta_largest", "speed_largest", "lorentz_largest")
"""Names of what `fluid_extremes` finds."""


def _largest(grid: Grid, above: Array, below: Array, keep: Mask) -> Extreme | None:
    """Largest quotient over the cells where the denominator is positive."""
    some = keep & (below > 0)
    if not some.any():
        return None
    ratio = np.divide(above, below, out=np.full(grid.shape, -np.inf), where=some)
    cell = unravelled(grid, int(np.argmax(ratio)))
    return Extreme(float(ratio[cell]), cell, centre_at(grid, cell))


def _fits(what: str, array: Array, shape: tuple[int, ...]) -> None:
    if np.shape(array) != shape:
        raise FieldError(f"{what}: shape {np.shape(array)}, expected {shape}")


def _point(values: list[float]) -> Point:
    x, y, z = values
    return x, y, z
