"""Units: of the magnetic field, and of everything else a code stores.

Inside, a field is in Heaviside-Lorentz units of whatever length, mass and time the snapshot uses: its energy
density is B^2 / 2. In Gaussian units the same field is sqrt(4 pi) times that number and its energy density
B^2 / (8 pi) (Jackson, *Classical Electrodynamics*, 3rd edition, 1999, appendix on units; from memory).

Every other unit follows from three: length, mass and time. Constants of nature are the CODATA values in
`scipy.constants`; the mass of the Sun enters as the nominal GM_sun of IAU 2015 Resolution B3 (Prsa et al. 2016,
*Nominal values for selected solar and planetary quantities*), which is known far better than G.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import asdict, dataclass

from fieldmover.errors import JobError

NAMED = {"heaviside-lorentz": 1.0, "gaussian": 1.0 / math.sqrt(4.0 * math.pi)}
"""Size of one unit of stored field in Heaviside-Lorentz units."""

PHYSICAL = {"gauss": "cgs", "tesla": "si"}
"""Units of stored field that need those of length, mass and time, and the system they belong to."""

GM_SUN = 1.3271244e26
"""Nominal gravitational parameter of the Sun, cm^3 / s^2: IAU 2015 Resolution B3."""

SCALES = {
    "length": (1, 0, 0),
    "mass": (0, 1, 0),
    "time": (0, 0, 1),
    "velocity": (1, 0, -1),
    "density": (-3, 1, 0),
    "pressure": (-1, 1, -2),
    "specific energy": (2, 0, -2),
    "energy": (2, 1, -2),
    "momentum": (1, 1, -1),
    "angular momentum": (2, 1, -1),
    "power": (2, 1, -3),
}
"""Powers of length, mass and time."""

SYSTEMS = {"cgs": (1.0, 1.0, 1.0), "si": (100.0, 1000.0, 1.0)}
"""Units of length, mass and time in cm, g, s."""

_Row = tuple[str, tuple[int, int, int], float]  # name, powers and size of a scale

_GEOMETRISED = "the geometrised mass"
_AGREE = 1e-9  # relative: scales that differ by less say the same


def size_of(unit: str | float, units: CodeUnits | None = None) -> float:
    """One unit of stored field, in Heaviside-Lorentz units.

    Parameters
    ----------
    unit : str or float
        A name in `NAMED`, "gauss" or "tesla", or the size itself.
    units : CodeUnits, optional
        Of the code that stores the field; gauss and tesla need them.

    Raises
    ------
    ValueError
        If the name is unknown, or the units are missing.

    Examples
    --------
    >>> size_of(2.5), round(1 / size_of("gaussian"), 6)
    (2.5, 3.544908)
    >>> round(size_of("tesla", CodeUnits(1.0, 1.0, 1.0)) / size_of("gaussian"), 5)  # gauss
    10000.0
    """
    if not isinstance(unit, str):
        return float(unit)
    if unit in NAMED:
        return NAMED[unit]
    if unit not in PHYSICAL:
        raise ValueError(f"unit {unit!r}; expected a number or one of {', '.join((*NAMED, *PHYSICAL))}")
    if units is None:
        raise ValueError(
            f"unit {unit!r} without units of length, mass and time; expected a number or one of {', '.join(NAMED)}, "
            "or these units"
        )
    return 1.0 / units.field_unit(PHYSICAL[unit])


@dataclass(frozen=True)
class CodeUnits:
    """Units of length, mass and time of a code, in cm, g and s; `code_units` makes them from what is known."""

    length: float
    mass: float
    time: float

    def unit(self, quantity: str, system: str = "cgs") -> float:
        """The code's unit of a quantity in CGS or SI: stored number x unit = value.

        Parameters
        ----------
        quantity : str
            One of `SCALES`.
        system : "cgs" or "si"

        Raises
        ------
        JobError
            If a name is unknown.

        Examples
        --------
        >>> CodeUnits(length=1e5, mass=1e15, time=1.0).unit("density", "si")
        1000.0
        """
        return _power(self, quantity) / _power(_system(system), quantity)

    def field_unit(self, system: str = "cgs", field: str | float = "heaviside-lorentz") -> float:
        """Gauss (CGS) or tesla (SI) of a magnetic field stored as 1; times `unit("length")` squared, of a flux.

        Parameters
        ----------
        system : "cgs" or "si"
        field : str or float
            What the stored number means in the code's own units, as in `size_of`.

        Examples
        --------
        >>> cgs = CodeUnits(1.0, 1.0, 1.0)
        >>> round(cgs.field_unit("cgs", "gaussian"), 12), round(cgs.field_unit(), 6)
        (1.0, 3.544908)
        """
        pressure = self.unit("pressure", system)
        energy = 4.0 * math.pi if system == "cgs" else _constant("mu_0")
        return size_of(field) * math.sqrt(energy * pressure)

    @property
    def light(self) -> float:
        """Speed of light, in the code's unit of velocity."""
        return 100.0 * _constant("c") / self.unit("velocity")

    def into(self, other: CodeUnits, quantity: str) -> float:
        """What a number of these units is multiplied by to be one in `other` units.

        Parameters
        ----------
        other : CodeUnits
        quantity : str
            One of `SCALES`, "field" or "flux" (both Heaviside-Lorentz).

        Examples
        --------
        >>> CodeUnits(100.0, 1000.0, 1.0).into(CodeUnits(1.0, 1.0, 1.0), "pressure")
        10.0
        """
        if quantity in ("field", "flux"):
            field = math.sqrt(self.into(other, "pressure"))
            return field if quantity == "field" else field * self.into(other, "length") ** 2
        return _power(self, quantity) / _power(other, quantity)

    def as_dict(self) -> dict[str, float | str]:
        """Plain JSON: the three units in CGS, the speed of light in the code's, and where constants are from."""
        return {**asdict(self), "light": self.light, "constants": constants_source()}


def code_units(
    scales: Mapping[str, float] | None = None,
    system: str = "cgs",
    geometrised: float | None = None,
    mass_in: str = "M_sun",
) -> CodeUnits:
    """Units of a code from any scales that settle length, mass and time.

    Parameters
    ----------
    scales : mapping of str to float, optional
        Size of the code's unit of some of `SCALES`, in CGS or SI: length, density and velocity, say.
    system : "cgs" or "si"
        What the sizes are in.
    geometrised : float, optional
        A mass M that sets G = c = 1: the unit of length is G M / c^2, that of time G M / c^3. M is the unit of mass
        too, unless a scale settles another (that of a fluid whose own gravity does not count).
    mass_in : "M_sun", "g" or "kg"
        Unit of that mass.

    Returns
    -------
    CodeUnits

    Raises
    ------
    JobError
        If a scale is unknown or not positive, too few are given, or one contradicts the others.

    Examples
    --------
    >>> units = code_units({"length": 1.496e13, "density": 1e-9, "velocity": 2.98e6})
    >>> round(units.unit("pressure") / (1e-9 * 2.98e6**2), 12)
    1.0
    >>> round(code_units(geometrised=10).unit("length"))  # G M / c^2 for ten Suns, cm
    1476625
    """
    sizes = {name: _positive(name, size) * _power(_system(system), name) for name, size in (scales or {}).items()}
    rows = [(name, SCALES[name], size) for name, size in sizes.items()]
    if geometrised is not None:
        light, own = 100.0 * _constant("c"), _parameter(_positive("geometrised mass", geometrised), mass_in)
        rows += [(_GEOMETRISED, SCALES["length"], own / light**2), (_GEOMETRISED, SCALES["time"], own / light**3)]
        if _rank(rows) < 3:
            rows.append((_GEOMETRISED, SCALES["mass"], own / (1e3 * _constant("G"))))
    if _rank(rows) < 3:
        raise JobError(
            f"units: {', '.join(sizes) or 'nothing'} given, which does not settle length, mass and time; expected "
            f"three independent ones of {', '.join(SCALES)}, or a geometrised mass"
        )
    units = _solved(rows)
    for place, (name, powers, size) in reversed(list(enumerate(rows))):
        others = rows[:place] + rows[place + 1 :]
        if abs(size / _product(units, powers) - 1.0) > _AGREE and _rank(others) == 3:
            raise JobError(
                f"units: {name} is given as {size:.9g} (CGS), but {', '.join(dict.fromkeys(row[0] for row in others))} "
                f"make it {_product(_solved(others), powers):.9g}; expected no unit twice"
            )
    return units


def constants_source() -> str:
    """Where the constants of nature come from."""
    import scipy

    return f"CODATA values of scipy {scipy.__version__}; nominal GM of the Sun of IAU 2015 Resolution B3"


def _constant(name: str) -> float:
    from scipy import constants

    return float(getattr(constants, name))


def _parameter(mass: float, mass_in: str) -> float:
    """G times a mass, cm^3 / s^2."""
    newton = 1e3 * _constant("G")
    sizes = {"M_sun": GM_SUN, "g": newton, "kg": 1e3 * newton}
    if mass_in not in sizes:
        raise JobError(f"units: mass in {mass_in!r}, expected one of {', '.join(sizes)}")
    return mass * sizes[mass_in]


def _positive(name: str, size: float) -> float:
    if name not in SCALES and name != "geometrised mass":
        raise JobError(f"units: unknown scale {name!r}, expected some of {', '.join(SCALES)}")
    if not 0.0 < size < math.inf:
        raise JobError(f"units: {name} is {size!r}, expected a positive number")
    return float(size)


def _system(name: str) -> CodeUnits:
    if name not in SYSTEMS:
        raise JobError(f"units: system {name!r}, expected one of {', '.join(SYSTEMS)}")
    return CodeUnits(*SYSTEMS[name])


def _power(units: CodeUnits, quantity: str) -> float:
    if quantity not in SCALES:
        raise JobError(f"units: unknown quantity {quantity!r}, expected one of {', '.join(SCALES)}")
    return _product(units, SCALES[quantity])


def _product(units: CodeUnits, powers: tuple[int, int, int]) -> float:
    return float(units.length ** powers[0] * units.mass ** powers[1] * units.time ** powers[2])


def _rank(rows: list[_Row]) -> int:
    import numpy as np

    return int(np.linalg.matrix_rank(np.array([powers for _, powers, _ in rows], dtype=float).reshape(-1, 3)))


def _solved(rows: list[_Row]) -> CodeUnits:
    """Units that give the sizes, or come nearest to them."""
    import numpy as np

    inverse = np.linalg.pinv(np.array([powers for _, powers, _ in rows], dtype=float))
    units = CodeUnits(1.0, 1.0, 1.0)
    for _ in range(3):  # a logarithm far from 0 loses digits; the last ones are near it
        logs = inverse @ np.array([math.log(size / _product(units, powers)) for _, powers, size in rows])
        length, mass, time = (float(x) for x in np.exp(logs))
        units = CodeUnits(units.length * length, units.mass * mass, units.time * time)
    return units
