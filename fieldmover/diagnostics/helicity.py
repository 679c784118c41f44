"""Magnetic helicity: of a vector potential, and relative to the potential field with the same flux through walls."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fieldmover.diagnostics.cells import same_place
from fieldmover.errors import FieldError
from fieldmover.forms.fields import EdgePotential, FaceFlux, Three
from fieldmover.forms.incidence import d1
from fieldmover.forms.measures import energy, face_conductances
from fieldmover.grids.axes import dual_lengths
from fieldmover.grids.grid import Grid, at
from fieldmover.projection.potential import potential
from fieldmover.projection.project import project

Array = NDArray[np.float64]

_NO_FLUX = 1e-13  # flux through the walls, over that through all faces, that is rounding


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
    walls = sum(float(np.abs(faces[axis][at(axis, end)]).sum()) for axis in range(3) for end in _walls(pot.grid, axis))
    value = sum(_along(edges[axis], faces[axis], axis) for axis in range(3))
    return Helicity(value, walls / total if total > 0 else 0.0)


@dataclass(frozen=True)
class RelativeHelicity:
    """Helicity relative to the potential field, and the energies of both fields.

    Attributes
    ----------
    value : float
        Integral of (A + A_p).(B - B_p), unit B^2 L^4; the same in any gauge.
    energy, reference_energy : float
        Half the sum of w F^2 (w = dual length / area) of the field and of the potential one, unit B^2 L^3.
    """

    value: float
    energy: float
    reference_energy: float

    @property
    def free_energy(self) -> float:
        """energy - reference_energy, not negative but for rounding (Thomson's theorem)."""
        return self.energy - self.reference_energy

    def as_dict(self) -> dict[str, float]:
        """Plain JSON."""
        return {
            "value": self.value,
            "energy": self.energy,
            "reference_energy": self.reference_energy,
            "free_energy": self.free_energy,
        }


def relative_helicity(flux: FaceFlux) -> RelativeHelicity:
    """Helicity relative to the potential field (Berger & Field 1984, The topological properties of magnetic helicity).

    Both fields have the same flux through all walls and along all seams, so the value depends on no gauge (Finn &
    Antonsen 1985, Magnetic helicity: what is it and what is it good for?; both from memory). It costs one projection,
    one more for each seam that no pole closes, and two potentials.

    Parameters
    ----------
    flux : FaceFlux
        Divergence-free to round-off.

    Returns
    -------
    RelativeHelicity
        Second order in the cell size.

    Raises
    ------
    FieldError
        If the flux has divergence.
    ChargeError
        If a closed surface carries net flux: a hole, or a periodic plane (helicity has no meaning there).

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> q = np.linspace(-1, 1, 17)
    >>> box = fm.cartesian_grid(q, q, q)
    >>> twist = fm.flux_from_function(box, lambda x, y, z: (-y, x, 1 + 0 * z))
    >>> found = relative_helicity(twist)
    >>> found.value > 1, found.free_energy > 0, abs(relative_helicity(potential_field(twist)).value) < 1e-10
    (True, True, True)
    """
    pot = potential(flux)
    reference = potential_field(flux)
    conductances, seams = face_conductances(flux.grid), flux.grid.periodic
    energies = (energy(field.faces, conductances, seams) for field in (flux, reference))
    return RelativeHelicity(helicity(pot, potential(reference)).value, *energies)


def potential_field(flux: FaceFlux) -> FaceFlux:
    """The field of least energy with the same flux through all walls, and along all seams that no pole closes.

    Parameters
    ----------
    flux : FaceFlux
        Divergence-free to round-off.

    Returns
    -------
    FaceFlux
        w F (w = dual length / area) has no curl.

    Raises
    ------
    ChargeError
        If the walls carry net flux.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> box = fm.cartesian_grid(*[np.linspace(0, 1, 5)] * 3)
    >>> def twisted(x, y, z):  # uniform along z, and a current within the walls
    ...     return -y / 2, x / 2, x * (1 - x) * y * (1 - y)
    >>> uniform = potential_field(fm.curl(fm.potential_from_function(box, twisted)))
    >>> bool(abs(uniform.f3 * 16 - 1).max() < 1e-12), bool(abs(uniform.f1).max() < 1e-15)
    (True, True)
    """
    grid, walls = flux.grid, _wall_faces(flux)
    field = project(walls, walls="fixed")[0] if any(f.any() for f in walls.faces) else walls
    loops = [axis for axis in range(3) if grid.periodic[axis] and axis not in grid.ring_axis]
    if not loops:
        return field
    around = [_harmonic(grid, axis) for axis in loops]
    flows = np.array([[_along_seam(one, axis) for one in around] for axis in loops])
    missing = [_along_seam(flux, axis) - _along_seam(field, axis) for axis in loops]
    faces = list(field.faces)
    for factor, one in zip(np.linalg.solve(flows, missing), around, strict=True):
        faces = [f + factor * g for f, g in zip(faces, one.faces, strict=True)]
    return FaceFlux(grid, (faces[0], faces[1], faces[2]))


def _wall_faces(flux: FaceFlux) -> FaceFlux:
    """The flux through walls alone, balanced to the last bits; nothing where all of it is rounding."""
    grid, faces = flux.grid, [np.zeros_like(f) for f in flux.faces]
    ends = [(axis, end, 1.0 if end else -1.0) for axis in range(3) for end in _walls(grid, axis)]
    for axis, end, _ in ends:
        faces[axis][at(axis, end)] = flux.faces[axis][at(axis, end)]
    held, total = (sum(float(np.abs(f).sum()) for f in three) for three in (faces, flux.faces))
    if held <= _NO_FLUX * total:
        return FaceFlux(grid, (0 * faces[0], 0 * faces[1], 0 * faces[2]))
    net = sum(outward * float(faces[axis][at(axis, end)].sum()) for axis, end, outward in ends)
    if abs(net) <= _NO_FLUX * total:  # else `project` tells
        for axis, end, outward in ends:
            wall = faces[axis][at(axis, end)]
            wall -= outward * net / held * np.abs(wall)
    return FaceFlux(grid, (faces[0], faces[1], faces[2]))


def _harmonic(grid: Grid, axis: int) -> FaceFlux:
    """A field without curl, divergence or flux through walls that goes round a seam."""
    faces = [np.zeros(grid.face_shape(d)) for d in range(3)]
    step = dual_lengths(grid.nodes[axis], True).reshape([-1 if d == axis else 1 for d in range(3)])
    faces[axis] += face_conductances(grid)[axis] * step
    faces[axis][at(axis, -1)] = faces[axis][at(axis, 0)]
    return project(FaceFlux(grid, (faces[0], faces[1], faces[2])), walls="fixed")[0]


def _along_seam(flux: FaceFlux, axis: int) -> float:
    """Flux through the first faces along a seam."""
    return float(flux.faces[axis][at(axis, 0)].sum())


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
