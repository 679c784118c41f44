"""What follows from the state of the gas and the field: pressure, comoving field, its ratios, energy.

Fields are B^i in Heaviside-Lorentz units. With W the Lorentz factor and v^i the velocity that Eulerian observers see,
in units of c, the field in the frame of the gas has the square b^2 = B^2 / W^2 + (B.v)^2 (Gourgoulhon 2012; Anton et
al. 2006, *Numerical 3+1 general relativistic magnetohydrodynamics: a local characteristic approach*; both from
memory). Without a metric W is 1 and b^2 is B^2.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover.conventions.metrics import Geometry
from fieldmover.conventions.velocity import Motion
from fieldmover.errors import FieldError

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Figures:
    """Derived quantities at the centres of cells, shape (n1, n2, n3); None where what they need was not given.

    Attributes
    ----------
    lorentz : ndarray or None
        W; None without a metric.
    b2 : ndarray or None
        Square of the field in the frame of the gas; B^2 without a metric. The magnetic pressure is half of it.
    magnetisation : ndarray or None
        b^2 / (rho c^2); b^2 / rho without a metric. Infinite where there is field without gas.
    beta : ndarray or None
        Gas pressure over magnetic pressure, 2 p / b^2; infinite where there is no field.
    """

    lorentz: Array | None
    b2: Array | None
    magnetisation: Array | None
    beta: Array | None


def figures(
    motion: Motion | None = None,
    field: ArrayLike | None = None,
    density: ArrayLike | None = None,
    pressure: ArrayLike | None = None,
    geometry: Geometry | None = None,
) -> Figures:
    """Lorentz factor, b^2, b^2 / rho and plasma beta.

    Parameters
    ----------
    motion : Motion, optional
        As `velocity.motion` gives it; needed with a metric, at rest otherwise.
    field : array_like, shape (3, n1, n2, n3), optional
        B^i along x, y, z. A flux density, as `cells_from_flux` gives it, is sqrt(gamma) times that.
    density, pressure : array_like, shape (n1, n2, n3), optional
        In the frame of the gas.
    geometry : Geometry, optional

    Returns
    -------
    Figures

    Raises
    ------
    FieldError
        If shapes differ, or there is a metric and a field, but no motion with a Lorentz factor.

    Examples
    --------
    >>> field = np.array([0.0, 0.0, 2.0]).reshape(3, 1, 1, 1)
    >>> found = figures(field=field, density=[[[8.0]]], pressure=[[[1.0]]])
    >>> found.b2.item(), found.magnetisation.item(), found.beta.item()
    (4.0, 0.5, 0.5)
    """
    lorentz = None if motion is None else motion.lorentz
    if field is None:
        return Figures(lorentz, None, None, None)
    b2 = _comoving(np.asarray(field, dtype=np.float64), motion, geometry)
    light = 1.0 if geometry is None else geometry.light
    ratio: Array | None = None
    beta: Array | None = None
    with np.errstate(divide="ignore", invalid="ignore"):
        if density is not None:
            ratio = np.asarray(b2 / (_same(b2, "density", density) * light**2))
        if pressure is not None:
            beta = np.asarray(2.0 * _same(b2, "pressure", pressure) / b2)
    return Figures(lorentz, b2, ratio, beta)


def ideal_gas_pressure(density: ArrayLike, energy: ArrayLike, gamma: float) -> Array:
    """Pressure of an ideal gas, (gamma - 1) x density x internal energy per mass.

    Raises
    ------
    FieldError
        If the adiabatic index is not above 1.

    Examples
    --------
    >>> float(ideal_gas_pressure(2.0, 3.0, 1.5))
    3.0
    """
    if not gamma > 1.0:
        raise FieldError(f"adiabatic index {gamma}, expected more than 1")
    return np.asarray((gamma - 1.0) * np.asarray(density, dtype=np.float64) * np.asarray(energy))


def energy_density(
    density: Array,
    pressure: Array | None,
    motion: Motion | None,
    field: Array | None,
    geometry: Geometry | None,
    gamma: float,
) -> Array:
    """Energy of gas and field in unit proper volume, as observers at rest in the slice see it.

    With a metric rest energy is part of it: rho h W^2 c^2 - p + (B^2 (1 + v^2) - (B.v)^2) / 2 with h = 1 + gamma p /
    ((gamma - 1) rho c^2) (the same sources). Without: rho v^2 / 2 + p / (gamma - 1) + B^2 / 2. `gamma` is the adiabatic
    index of an ideal gas.
    """
    p = np.zeros_like(density) if pressure is None else pressure
    if geometry is None:
        square = 0.0 if motion is None else (motion.velocity**2).sum(axis=0)
        total = 0.5 * density * square + p / (gamma - 1.0)
        return np.asarray(total if field is None else total + 0.5 * (field**2).sum(axis=0))
    lorentz = np.ones_like(density) if motion is None or motion.lorentz is None else motion.lorentz
    total = (density * geometry.light**2 + gamma / (gamma - 1.0) * p) * lorentz**2 - p
    if field is not None:
        v = np.zeros_like(field) if motion is None else motion.eulerian / geometry.light
        square = geometry.dot(field, field)
        total = total + 0.5 * (square * (1.0 + geometry.dot(v, v)) - geometry.dot(field, v) ** 2)
    return np.asarray(total)


def _comoving(field: Array, motion: Motion | None, geometry: Geometry | None) -> Array:
    if geometry is None:
        return np.asarray((field**2).sum(axis=0))
    if motion is None or motion.lorentz is None:
        raise FieldError("b^2 in a metric: there is no velocity with a Lorentz factor, expected one beside the field")
    if field.shape != motion.eulerian.shape:
        raise FieldError(f"field: shape {field.shape}, expected that of the velocity, {motion.eulerian.shape}")
    v = motion.eulerian / geometry.light
    return np.asarray(geometry.dot(field, field) / motion.lorentz**2 + geometry.dot(field, v) ** 2)


def _same(b2: Array, name: str, values: ArrayLike) -> Array:
    array = np.asarray(values, dtype=np.float64)
    if array.shape != b2.shape:
        raise FieldError(f"{name}: shape {array.shape}, expected that of the cells, {b2.shape}")
    return array
