"""Fluxes whose sums are exact: circulations rounded to multiples of one power of two.

The power is small enough to lie at the round-off of the largest circulation, and large enough for all sums of d1 and d2
to be exact in double precision.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.forms.fields import Three
from fieldmover.forms.incidence import d1

Array = NDArray[np.float64]

_ROWS = 8


def quantum_for(edge: float, face: float, more: float) -> float:
    """Power of two of which circulations are to be multiples.

    Parameters
    ----------
    edge, face : float
        Largest circulation and largest flux, both before rounding.
    more : float
        Fluxes up to this will be added, multiples of the same power.

    Returns
    -------
    float
        Sums of four edges and of six faces stay below 2^53 of it. 0 for a field that is 0.

    Examples
    --------
    >>> quantum_for(1.0, 0.1, 0.0) == 2.0**-51
    True
    """
    if max(edge, more) == 0.0:
        return 0.0
    quantum = 2.0 ** (np.ceil(np.log2(max(edge, more))) - 51)
    least = 2.0 ** (np.ceil(np.log2(face + 2.0 * quantum + more)) - 50)
    return float(quantum if least <= quantum else 2.0 * least)  # fluxes as large as circulations: noise, or few cells


def largest(arrays: Three) -> float:
    """Largest absolute value."""
    return max(max(float(a.max()), -float(a.min())) for a in arrays)


def round_to(quantum: float, arrays: Three) -> None:
    """Round to multiples of a quantum, in place; 0 leaves all as it is."""

    def work(part: Array) -> None:
        part /= quantum
        np.rint(part, out=part)
        part *= quantum

    if quantum > 0.0:
        compute.for_each(work, [a[rows] for a in arrays for rows in compute.slabs(a.shape[0], _ROWS)])


def sizes(edges: Three, uniform: Three | None) -> tuple[float, float, float]:
    """Largest circulation, largest flux and largest flux of a mean field: the arguments of `quantum_for`."""
    return largest(edges), largest(d1(edges)), 0.0 if uniform is None else largest(uniform)


def exact_faces(edges: Three, uniform: Three | None, quantum: float | None = None) -> tuple[Three, float]:
    """Fluxes whose sums over the faces of a cell are exactly zero.

    Parameters
    ----------
    edges : tuple of three ndarrays
        Circulations; rounded in place.
    uniform : tuple of three ndarrays or None
        Fluxes of a mean field to add; rounded in place.
    quantum : float, optional
        Power of two to round to; by default the one that suits these edges.

    Returns
    -------
    faces : tuple of three ndarrays
    quantum : float
    """
    if quantum is None:
        quantum = quantum_for(*sizes(edges, uniform))
    round_to(quantum, edges)
    faces = d1(edges)
    if uniform is not None:
        round_to(quantum, uniform)
        for f, u in zip(faces, uniform, strict=True):
            f += u
    return faces, quantum
