"""Units of the magnetic field.

Inside, a field is in Heaviside-Lorentz units of whatever length, mass and time the snapshot uses: its energy
density is B^2 / 2. In Gaussian units the same field is sqrt(4 pi) times that number and its energy density
B^2 / (8 pi) (Jackson, *Classical Electrodynamics*, 3rd edition, 1999, appendix on units; from memory).
"""

from __future__ import annotations

import math

NAMED = {"heaviside-lorentz": 1.0, "gaussian": 1.0 / math.sqrt(4.0 * math.pi)}
"""Size of one unit of stored field in Heaviside-Lorentz units."""


def size_of(unit: str | float) -> float:
    """One unit of stored field, in Heaviside-Lorentz units.

    Parameters
    ----------
    unit : str or float
        A name in `NAMED`, or the size itself.

    Raises
    ------
    ValueError
        If the name is unknown.

    Examples
    --------
    >>> size_of(2.5), round(1 / size_of("gaussian"), 6)
    (2.5, 3.544908)
    """
    if isinstance(unit, str):
        if unit not in NAMED:
            raise ValueError(f"unit {unit!r}; expected a number or one of {', '.join(NAMED)}")
        return NAMED[unit]
    return float(unit)
