"""Whether a code can evolve a state: what floors and ceilings would change, where, and what that would add.

The rules are taken in this order, each on the state that the ones before leave (floors and ceilings of this sort are
common practice, no source):

* "finite": every value is. Nothing cures the others; such cells are left out of the other rules;
* "speed": below that of light, and the Lorentz factor at most its ceiling. Eulerian velocities keep their direction;
* "density": at least its floor;
* "magnetisation": b^2 / (rho c^2) at most its ceiling. Mass is added;
* "pressure": at least its floor.

Mass is added with the velocity of the gas that is there. The magnetic field stays.
"""

from __future__ import annotations

from dataclasses import asdict, dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover.conventions.derived import energy_density, figures
from fieldmover.conventions.metrics import Geometry
from fieldmover.conventions.velocity import Motion
from fieldmover.errors import DataError, FieldError

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Index = tuple[int, ...]

_ROUND_OFF = 1e-13  # what is slowed down to the ceiling does not break it a second time


@dataclass(frozen=True, eq=False)
class Gas:
    """The state of the gas at the centres of cells.

    Attributes
    ----------
    density : ndarray, shape (n1, n2, n3)
        In the frame of the gas.
    pressure : ndarray, shape (n1, n2, n3), optional
    velocity : ndarray, shape (3, n1, n2, n3), optional
        dx^i/dt along x, y, z.
    field : ndarray, shape (3, n1, n2, n3), optional
        B^i along x, y, z, Heaviside-Lorentz.
    """

    density: Array
    pressure: Array | None = None
    velocity: Array | None = None
    field: Array | None = None


@dataclass(frozen=True, eq=False)
class Limits:
    """What a code can evolve. Floors are numbers or arrays of one value a cell; None sets no limit."""

    density_floor: ArrayLike = 0.0
    pressure_floor: ArrayLike = 0.0
    magnetisation_ceiling: float | None = None
    lorentz_ceiling: float | None = None


@dataclass(frozen=True)
class Finding:
    """What one rule finds.

    Attributes
    ----------
    rule : str
        "finite", "speed", "density", "magnetisation" or "pressure".
    count : int
        Cells that break it.
    first, worst : tuple of int, or None
        Indices of the first and worst of them; None where there are none.
    value, limit : float or None
        There: the value (of b^2 / (rho c^2); of (v/c)^2 for "speed"), and what it may be.
    mass_added, energy_added : float
        By the cure, over all cells; energy as `energy_density` counts it. Cells that move faster than light have no
        energy before the cure, and are left out.
    curable : bool
        Whether `apply` can do something about it.
    """

    rule: str
    count: int
    first: Index | None = None
    worst: Index | None = None
    value: float | None = None
    limit: float | None = None
    mass_added: float = 0.0
    energy_added: float = 0.0
    curable: bool = True


@dataclass(frozen=True)
class Findings:
    """What all rules find; `mass` and `energy` are those of the sound cells before any cure."""

    rules: tuple[Finding, ...]
    mass: float
    energy: float

    @property
    def healthy(self) -> bool:
        """Whether no cell breaks a rule."""
        return not any(found.count for found in self.rules)

    def __getitem__(self, rule: str) -> Finding:
        return {found.rule: found for found in self.rules}[rule]

    def as_dict(self) -> dict[str, Any]:
        """Plain JSON."""
        rules = {found.rule: {k: v for k, v in asdict(found).items() if k != "rule"} for found in self.rules}
        for entry in rules.values():
            entry.update({k: None if entry[k] is None else list(entry[k]) for k in ("first", "worst")})
            entry.update({k: None if not _finite(entry[k]) else entry[k] for k in ("value", "limit")})
        return {"healthy": self.healthy, "mass": self.mass, "energy": self.energy, "rules": rules}


def examine(
    gas: Gas, limits: Limits, volumes: Array, geometry: Geometry | None = None, gamma: float = 5.0 / 3.0
) -> Findings:
    """What breaks the limits, and what curing it would add.

    Parameters
    ----------
    gas : Gas
    limits : Limits
    volumes : ndarray, shape (n1, n2, n3)
        Of the cells: proper ones in curved space (`volume_elements`).
    geometry : Geometry, optional
        Without it velocities and energies are Newtonian.
    gamma : float
        Adiabatic index, for internal energies.

    Returns
    -------
    Findings

    Raises
    ------
    FieldError
        If a shape does not fit, or a limit makes no sense or lacks the quantity it is for.

    Examples
    --------
    >>> gas = Gas(density=np.array([[[1.0, 1e-9]]]), pressure=np.array([[[1.0, 1.0]]]))
    >>> found = examine(gas, Limits(density_floor=1e-6), np.ones((1, 1, 2)))
    >>> found["density"].count, found["density"].worst, found.healthy
    (1, (0, 0, 1), False)
    """
    return _Walk(gas, limits, volumes, geometry, gamma).findings


def apply(
    gas: Gas, limits: Limits, volumes: Array, geometry: Geometry | None = None, gamma: float = 5.0 / 3.0
) -> tuple[Gas, Findings]:
    """The state within its limits, and what was done; arguments and errors as `examine`.

    Raises
    ------
    DataError
        If values are not finite, or gas moves faster than light and there is no ceiling for the Lorentz factor.

    Examples
    --------
    >>> gas = Gas(density=np.array([[[1.0, 1e-9]]]))
    >>> cured, found = apply(gas, Limits(density_floor=1e-6), np.ones((1, 1, 2)))
    >>> cured.density, round(found["density"].mass_added, 12)
    (array([[[1.e+00, 1.e-06]]]), 9.99e-07)
    """
    walk = _Walk(gas, limits, volumes, geometry, gamma)
    for found in walk.findings.rules:
        if found.count and not found.curable:
            cure = "expected finite values" if found.rule == "finite" else "expected a ceiling for the Lorentz factor"
            raise DataError(f"{found.count} cells break the rule {found.rule!r}, the first at {found.first}; {cure}")
    return walk.gas, walk.findings


class _Walk:
    """The rules, one after the other; `gas` is what they leave."""

    def __init__(self, gas: Gas, limits: Limits, volumes: Array, geometry: Geometry | None, gamma: float) -> None:
        self.gas = _checked(gas, limits, volumes, geometry, gamma)
        self._volumes, self._geometry, self._gamma = volumes, geometry, gamma
        self._usable: Mask = np.ones(self.gas.density.shape, dtype=bool)
        self._found: list[Finding] = []

        with np.errstate(invalid="ignore", over="ignore"):  # of cells that are left out
            self.findings = self._follow(limits)

    def _follow(self, limits: Limits) -> Findings:
        gas, shape = self.gas, self.gas.density.shape
        broken = ~np.logical_and.reduce([np.isfinite(a).reshape(-1, *shape).all(axis=0) for a in _arrays(gas)])
        self._note("finite", broken, np.where(broken, np.nan, 0.0), np.nan)
        self._usable &= ~broken
        mass, energy = self._sums()
        if gas.velocity is not None and self._geometry is not None:
            self._speed(limits.lorentz_ceiling)
        self._raise("density", gas.density, limits.density_floor)
        if limits.magnetisation_ceiling is not None:
            self._magnetisation(limits.magnetisation_ceiling)
        if gas.pressure is not None:
            self._raise("pressure", gas.pressure, limits.pressure_floor)
        return Findings(tuple(self._found), float(np.nansum(mass)), float(np.nansum(energy)))

    def _speed(self, ceiling: float | None) -> None:
        """Slow down what is too fast; without a ceiling what is faster than light is left out from here."""
        geometry, velocity = self._geometry, self.gas.velocity
        assert geometry is not None
        assert velocity is not None
        v = (velocity / geometry.light + geometry.shift) / geometry.lapse
        square = geometry.dot(v, v)
        limit = 1.0 if ceiling is None else 1.0 - ceiling**-2
        broken = self._usable & ((square >= 1.0) if ceiling is None else (square > limit * (1.0 + _ROUND_OFF)))
        if ceiling is None:
            self._note("speed", broken, square, limit)
            self._usable &= ~broken
            return
        factor = np.sqrt(np.divide(limit, square, out=np.ones_like(square), where=broken))
        slowed = (geometry.lapse * v * factor - geometry.shift) * geometry.light
        self._cure("speed", broken, square, limit, replace(self.gas, velocity=np.where(broken, slowed, velocity)))

    def _raise(self, name: str, values: Array, limit: ArrayLike) -> None:
        floor = np.broadcast_to(np.asarray(limit, dtype=np.float64), values.shape)
        broken = self._usable & (values < floor)
        cured = replace(self.gas, **{name: np.where(broken, floor, values)})
        self._cure(name, broken, values, floor, cured, severity=floor - values)

    def _magnetisation(self, ceiling: float) -> None:
        gas = self.gas
        ratio = figures(self._motion(), gas.field, gas.density, geometry=self._geometry).magnetisation
        assert ratio is not None
        broken = self._usable & (ratio > ceiling)
        # without gas the ratio is infinite, so the density is taken from b^2 itself
        at_ceiling = figures(self._motion(), gas.field, np.full_like(gas.density, ceiling), geometry=self._geometry)
        assert at_ceiling.magnetisation is not None
        cured = replace(gas, density=np.where(broken, at_ceiling.magnetisation, gas.density))
        self._cure("magnetisation", broken, ratio, ceiling, cured)

    def _cure(
        self,
        rule: str,
        broken: Mask,
        values: Array,
        limit: ArrayLike,
        cured: Gas,
        severity: Array | None = None,
    ) -> None:
        before = self._sums()
        self.gas = cured
        after = self._sums()
        added = [float(np.nansum((b - a)[broken])) for a, b in zip(before, after, strict=True)]
        self._note(rule, broken, values, limit, added[0], added[1], True, severity)

    def _note(
        self,
        rule: str,
        broken: Mask,
        values: Array,
        limit: ArrayLike,
        mass: float = 0.0,
        energy: float = 0.0,
        curable: bool = False,
        severity: Array | None = None,
    ) -> None:
        """Write down a finding; the worst cell is that of the largest severity, or else value."""
        count = int(broken.sum())
        if count == 0:
            self._found.append(Finding(rule, 0, curable=curable))
            return
        first = tuple(int(i) for i in np.argwhere(broken)[0])
        flat = np.argmax(np.where(broken, np.nan_to_num(values if severity is None else severity), -np.inf))
        place = tuple(int(i) for i in np.unravel_index(int(flat), broken.shape))
        bound = float(np.broadcast_to(np.asarray(limit, dtype=float), broken.shape)[place])
        self._found.append(Finding(rule, count, first, place, float(values[place]), bound, mass, energy, curable))

    def _motion(self) -> Motion | None:
        """As `velocity.motion`, with NaN where gas is as fast as light."""
        geometry, velocity = self._geometry, self.gas.velocity
        if velocity is None:
            if geometry is None:
                return None
            velocity = -geometry.light * geometry.shift
        if geometry is None:
            return Motion(velocity, velocity, None, None)
        v = (velocity / geometry.light + geometry.shift) / geometry.lapse
        with np.errstate(invalid="ignore", divide="ignore"):
            lorentz = np.asarray(1.0 / np.sqrt(1.0 - geometry.dot(v, v)))
        lorentz[~np.isfinite(lorentz)] = np.nan
        return Motion(velocity, v * geometry.light, lorentz, lorentz / geometry.lapse)

    def _sums(self) -> tuple[Array, Array]:
        """Mass and energy of every cell, NaN where they cannot be told."""
        gas, motion = self.gas, self._motion()
        mass = gas.density * self._volumes
        if motion is not None and motion.lorentz is not None:
            mass = mass * motion.lorentz
        energy = energy_density(gas.density, gas.pressure, motion, gas.field, self._geometry, self._gamma)
        return np.where(self._usable, mass, np.nan), np.where(self._usable, energy * self._volumes, np.nan)


def _checked(gas: Gas, limits: Limits, volumes: Array, geometry: Geometry | None, gamma: float) -> Gas:
    shape = np.shape(gas.density)
    for name, array in (
        ("pressure", gas.pressure),
        ("volumes", volumes),
        ("metric", None if geometry is None else geometry.lapse),
    ):
        if array is not None and np.shape(array) != shape:
            raise FieldError(f"health: {name} of shape {np.shape(array)}, expected that of the density, {shape}")
    for name, array in (("velocity", gas.velocity), ("field", gas.field)):
        if array is not None and np.shape(array) != (3, *shape):
            raise FieldError(f"health: {name} of shape {np.shape(array)}, expected {(3, *shape)}")
    for name, floor in (("density", limits.density_floor), ("pressure", limits.pressure_floor)):
        values = np.asarray(floor, dtype=np.float64)
        if values.shape not in ((), shape) or not (np.isfinite(values) & (values >= 0)).all():
            raise FieldError(f"health: floor of the {name}: expected finite numbers not below 0, one or one a cell")
    if not gamma > 1.0:
        raise FieldError(f"health: adiabatic index {gamma}, expected more than 1")
    if limits.lorentz_ceiling is not None:
        if not 1.0 < limits.lorentz_ceiling < np.inf:
            raise FieldError(f"health: ceiling {limits.lorentz_ceiling} of the Lorentz factor, expected more than 1")
        if geometry is None or gas.velocity is None:
            raise FieldError("health: a ceiling of the Lorentz factor without metric or velocity, expected both")
    if limits.magnetisation_ceiling is not None:
        if not 0.0 < limits.magnetisation_ceiling < np.inf:
            raise FieldError(f"health: ceiling {limits.magnetisation_ceiling} of b^2 / rho, expected a positive number")
        if gas.field is None:
            raise FieldError("health: a ceiling of b^2 / rho without a field, expected one")
    return gas


def _arrays(gas: Gas) -> list[Array]:
    return [array for array in (gas.density, gas.pressure, gas.velocity, gas.field) if array is not None]


def _finite(value: float | None) -> bool:
    return value is not None and bool(np.isfinite(value))
