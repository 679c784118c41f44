"""Magnetic helicity of a vector potential on edges."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fieldmover.diagnostics.cells import same_place
from fieldmover.errors import FieldError
from fieldmover.forms.fields import EdgePotential, Three
from fieldmover.forms.incidence import d1
from fieldmover.grids.grid import Grid, at

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Helicity:
    """Helicity and what it depends on.

    Attributes
    ----------
    value : float
        Unit B^2 L^4.
    wall_flux : float
        Sum of |flux| through the walls (less that of the reference), over the sum of |flux| through all
        faces. At 0 the value is the same in any gauge; otherwise it holds for the potential given.
    """

    value: float
    wall_flux: float


def helicity(pot: EdgePotential, reference: EdgePotential | None = None) -> Helicity:
    """Integral of A.B, or the helicity relative to a reference field.

    With a reference it is the integral of (A + A_ref).(B - B_ref) (Finn & Antonsen 1985, Magnetic helicity:
    what is it and what is it good for?, Comments Plasma Phys. Control. Fusion 9, 111; from memory), which
    does not depend on either gauge when both fields have the same flux through the walls.

    In every cell A.B is the mean of the four edges times the mean of the two faces along each axis, summed
    over the axes. That needs no metric and is the average over all reflections of the product of cochains on
    cubes (Serre 1951, Homologie singuliere des espaces fibres; from memory), which obeys the product rule. So
    on closed walls a change of gauge changes the sum by round-off only, on any grid. Across seams this means
    a gauge function that closes; that there is no other asks for zero mean flux along the seam's axis.

    Parameters
    ----------
    pot : EdgePotential
        Unit B L^2.
    reference : EdgePotential, optional
        Of the reference field, on the same grid.

    Returns
    -------
    Helicity
        Second order in the cell size.

    Raises
    ------
    FieldError
        If the reference lives on another grid.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> q = np.linspace(0, 2 * np.pi, 33)
    >>> grid = fm.cartesian_grid(q, q, [0, 1], periodic=(True, True, True))
    >>> def wave(x, y, z):  # its own curl, so A.B = 1
    ...     return np.cos(y), 0 * y, np.sin(y)
    >>> found = helicity(fm.potential_from_function(grid, wave))
    >>> round(found.value / (4 * np.pi**2), 2), found.wall_flux
    (0.99, 0.0)
    """
    edges, faces = pot.edges, d1(pot.edges)
    total = sum(float(np.abs(face).sum()) for face in faces)
    if reference is not None:
        if not same_place(reference.grid, pot.grid):
            raise FieldError(f"reference potential: on {reference.grid!r}, expected nodes as of {pot.grid!r}")
        edges = _add(edges, reference.edges, 1.0)
        faces = _add(faces, d1(reference.edges), -1.0)
    walls = sum(
        float(np.abs(faces[axis][at(axis, end)]).sum()) for axis in range(3) for end in _walls(pot.grid, axis)
    )
    value = sum(_along(edges[axis], faces[axis], axis) for axis in range(3))
    return Helicity(value, walls / total if total > 0 else 0.0)


def _add(one: Three, other: Three, factor: float) -> Three:
    a, b, c = (x + factor * y for x, y in zip(one, other, strict=True))
    return a, b, c


def _walls(grid: Grid, axis: int) -> list[int]:
    """Ends of an axis that are neither seam nor pole."""
    closed = grid.pole_ends(axis)
    return [] if grid.periodic[axis] else [end for end in (0, grid.shape[axis]) if end not in closed]


def _along(edges: Array, faces: Array, axis: int) -> float:
    """Sum over the cells of mean edge times mean face of one axis."""
    e = edges
    for d in range(3):
        if d != axis:
            e = 0.5 * (e[at(d, slice(None, -1))] + e[at(d, slice(1, None))])
    f = 0.5 * (faces[at(axis, slice(None, -1))] + faces[at(axis, slice(1, None))])
    return float((e * f).sum())
