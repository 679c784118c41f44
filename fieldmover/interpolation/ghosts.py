"""Moves to a grid with layers of ghost cells round it.

The grid gets what it gets without layers, bit for bit. Beyond its walls the circulations on the larger grid are taken,
with those of the grid itself where both have them, so that the fluxes fit together to round-off; what the source does
not reach is filled. Then all fluxes beyond the walls are rounded to multiples of a power of two that those on the walls
are multiples of too, and what is left of their net fluxes is handed on to the outermost walls: the divergence ends at
zero exactly. Beyond seams and poles fluxes are repeated.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import sparse

from fieldmover.errors import ChargeError, FieldError
from fieldmover.forms.fields import CellContent, FaceFlux, Three
from fieldmover.forms.incidence import d1, d2
from fieldmover.forms.measures import face_conductances
from fieldmover.grids.ghosts import Ghosts
from fieldmover.grids.grid import Grid, at
from fieldmover.interpolation.charge import Charged, move_charged, point_charge_flux, split_charge
from fieldmover.interpolation.coverage import Masks, Outside, known_faces
from fieldmover.interpolation.fluid import move_content
from fieldmover.interpolation.flux import Order, move_flux, move_potential
from fieldmover.interpolation.mesh import least_energy, near, settle
from fieldmover.interpolation.uniform import split_uniform, uniform_edges, uniform_faces
from fieldmover.projection.potential import potential

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Index = NDArray[np.int64]

_BITS = 50  # of the largest flux: sums of six are exact
_ZERO_REACH = 2  # cells beyond the known ones in which outside="zero" closes the field lines
_NOTHING = 1e-13  # net flux, over the largest flux, that needs no fill
_FACES = ((False, True, True), (True, False, True), (True, True, False))
_EDGES = ((True, False, False), (False, True, False), (False, False, True))


def move_with_ghosts(
    flux: FaceFlux, target: Grid, layers: int | Sequence[int], order: Order = 3, outside: Outside = "least energy"
) -> FaceFlux:
    """Move magnetic flux to a grid and layers of cells round it, with zero divergence in all of them.

    Parameters
    ----------
    flux, target, order, outside
        As for `move_flux`.
    layers : int or three int
        How many, at both ends of every axis.

    Returns
    -------
    FaceFlux
        On `Ghosts(target, layers).whole`, whose `inside` picks the cells of the target; its fluxes are those that
        `move_flux` gives, bit for bit. Divergence is exactly zero (zero to round-off where fluxes in the layers are
        much larger than any on the target). One case is different: a wall of the target may cut a pocket that the
        source does not reach, and the target's own fill let flux through it for which there is no way out beyond. Then
        all is as `move_flux` gives it on the grid with layers.

    Raises
    ------
    GridError
        If the target cannot have these layers, see `Ghosts`.
    FieldError, ChargeError
        As `move_flux`; with outside="refuse" the layers too must lie in the source.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> source = fm.cylindrical_grid(np.linspace(0, 2, 9), np.linspace(0, 2 * np.pi, 17), np.linspace(-1, 1, 9))
    >>> flux = fm.curl(fm.potential_from_function(source, lambda x, y, z: (-y * y, x * z, 0 * z)))
    >>> box = fm.cartesian_grid(*[np.linspace(-0.5, 0.5, 5)] * 3)
    >>> more = move_with_ghosts(flux, box, 2)
    >>> more.grid.shape, float(abs(fm.divergence(more).cells).max())
    ((8, 8, 8), 0.0)
    >>> bool((more.f1[2:-2, 2:-2, 2:-2] == fm.move_flux(flux, box).f1).all())
    True
    """
    ghosts = Ghosts(target, layers)
    if outside == "refuse":
        move_flux(flux, ghosts.outer, order, outside)
    faces = move_flux(flux, target, order, outside).faces
    if ghosts.outer is not target:
        try:
            faces = _beyond_walls(flux, ghosts, faces, order, outside, None)
        except ChargeError:
            faces = move_flux(flux, ghosts.outer, order, outside).faces
    return FaceFlux(ghosts.whole, ghosts.faces(faces))


def move_charged_with_ghosts(
    flux: FaceFlux,
    target: Grid,
    layers: int | Sequence[int],
    order: Order = 3,
    outside: Outside = "least energy",
    centre: ArrayLike = (0.0, 0.0, 0.0),
) -> Charged:
    """Move flux that has a net flux out of the hole of its grid to a grid and layers of cells round it.

    Parameters
    ----------
    flux, target, order, outside, centre
        As for `move_charged`.
    layers : int or three int

    Returns
    -------
    Charged
        As `move_charged`, bit for bit on the target; flux and cell are those of `Ghosts(target, layers).whole`.

    Raises
    ------
    FieldError, GridError, ChargeError
        As `move_with_ghosts` and `move_charged`; if the centre lies in one of the layers.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> from fieldmover.interpolation.charge import point_charge_flux
    >>> shell = fm.spherical_grid([1, 2, 3], np.linspace(0, np.pi, 9), np.linspace(0, 2 * np.pi, 17))
    >>> box = fm.cartesian_grid(*[np.linspace(-0.5, 0.5, 2)] * 3)
    >>> moved = move_charged_with_ghosts(point_charge_flux(shell, 6.0), box, 1)
    >>> moved.cell, float(moved.flux.f1[2, 1, 1].round(12))
    ((1, 1, 1), 1.0)
    """
    ghosts = Ghosts(target, layers)
    moved = move_charged(flux, target, order, outside, centre)
    charge, rest = split_charge(flux, moved.centre)
    if outside == "refuse":
        move_flux(rest, ghosts.outer, order, outside)
    faces = moved.flux.faces
    if ghosts.outer is not target:
        own = point_charge_flux(ghosts.outer, charge, moved.centre).faces if charge else None
        if own is not None and moved.cell is None and d2(own).any():
            raise FieldError(
                f"ghost layers: the charge at {moved.centre.tolist()} lies in one of them, expected it on the target "
                "or outside; ask for fewer layers"
            )
        try:
            faces = _beyond_walls(rest, ghosts, faces, order, outside, own)
        except ChargeError:
            faces = move_charged(flux, ghosts.outer, order, outside, moved.centre).flux.faces
    cell = None
    if moved.cell is not None:
        i, j, k = (i + n for i, n in zip(moved.cell, ghosts.layers, strict=True))
        cell = (i, j, k)
    return Charged(FaceFlux(ghosts.whole, ghosts.faces(faces)), charge, cell, moved.centre)


def move_content_with_ghosts(content: CellContent, target: Grid, layers: int | Sequence[int]) -> CellContent:
    """Move the content of cells, mass say, to a grid and layers of cells round it.

    Parameters
    ----------
    content : CellContent
        Not negative.
    target : Grid
    layers : int or three int

    Returns
    -------
    CellContent
        On `Ghosts(target, layers).whole`. On the target itself what `move_content` gives, bit for bit; beyond its walls
        what that gives on the larger grid; beyond seams and poles repeated, positive everywhere.

    Raises
    ------
    GridError, FieldError
        As `Ghosts` and `move_content`.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> line = fm.cartesian_grid(np.arange(7.0), [0, 1], [0, 1])
    >>> content = fm.CellContent(line, np.arange(1.0, 7.0).reshape(6, 1, 1))
    >>> more = move_content_with_ghosts(content, fm.cartesian_grid([2, 3, 4], [0, 1], [0, 1]), (1, 0, 0))
    >>> more.cells.ravel()
    array([2., 3., 4., 5.])
    """
    ghosts = Ghosts(target, layers)
    cells = move_content(content, target).cells
    if ghosts.outer is not target:
        inner, cells = cells, move_content(content, ghosts.outer).cells.copy()
        cells[ghosts.in_outer((True, True, True))] = inner
    return CellContent(ghosts.whole, ghosts.cells(cells))


def _beyond_walls(
    flux: FaceFlux, ghosts: Ghosts, inner: Three, order: Order, outside: Outside, own: Three | None
) -> Three:
    """Fluxes on the larger grid, those on the target as given; `own` are to be added to those of the flux beyond."""
    edges, known, uniform = _edges(flux, ghosts, order)
    mesh = _Layers(ghosts)
    faces, covered = d1(edges), known_faces(known)
    if uniform is not None:
        for f, more in zip(faces, uniform, strict=True):
            f += more
    for f, k, ids in zip(faces, covered, mesh.ids, strict=True):
        f[(ids >= 0) & ~k] = 0.0
    if own is not None:
        for f, more in zip(faces, own, strict=True):
            f += more
    for f, part, along in zip(faces, inner, _FACES, strict=True):
        f[ghosts.in_outer(along)] = part
    quantum = _quantum(faces, inner)
    if quantum == 0.0:
        return faces
    x = np.rint(mesh.gather(faces) / quantum) * quantum
    unknown = ~mesh.gather(covered)
    if unknown.any():
        x[unknown] += np.rint(_fill(mesh, faces, covered, unknown, outside) / quantum) * quantum
    mesh.scatter(np.zeros(x.size), faces)
    settle(mesh.incidence.tocsr(), d2(faces)[mesh.cells], x)
    mesh.scatter(x, faces)
    return faces


def _edges(flux: FaceFlux, ghosts: Ghosts, order: Order) -> tuple[Three, Masks, Three | None]:
    """Circulations on the larger grid, on edges of the target those of the target; which are known; a uniform field."""
    mean, rest = split_uniform(flux)
    pot = potential(rest)
    edges, known = move_potential(pot, ghosts.outer, order)
    for all_values, own in zip((edges, known), move_potential(pot, ghosts.grid, order), strict=True):
        for values, part, along in zip(all_values, own, _EDGES, strict=True):
            values[ghosts.in_outer(along)] = part
    uniform = uniform_faces(ghosts.outer, mean) if mean.any() else None
    if mean.any() and uniform is None:
        for a, b in zip(edges, uniform_edges(ghosts.outer, mean), strict=True):
            a += b
    return edges, known, uniform


def _quantum(faces: Three, inner: Three) -> float:
    """A power of two that the fluxes on the target's walls are multiples of, at the round-off of the largest flux."""
    largest = max(float(np.abs(f).max()) for f in faces)
    if largest == 0.0:
        return 0.0
    fixed = np.concatenate([f[at(axis, end)].reshape(-1) for axis, f in enumerate(inner) for end in (0, -1)])
    mantissa, exponent = np.frexp(fixed[fixed != 0])
    whole = np.abs(np.ldexp(mantissa, 53).astype(np.int64))
    last_bits = np.ldexp((whole & -whole).astype(np.float64), exponent - 53)
    return float(min(2.0 ** (np.ceil(np.log2(largest)) - _BITS), last_bits.min(initial=np.inf)))


def _fill(mesh: _Layers, faces: Three, covered: Masks, unknown: Mask, outside: Outside) -> Array:
    """Fluxes of the unknown faces, nearly without divergence."""
    net, x, free = d2(faces)[mesh.cells], np.zeros(unknown.size), unknown.copy()
    if np.abs(net).max() > _NOTHING * max(float(np.abs(f).max()) for f in faces):
        if outside == "zero":
            free[unknown] = near(mesh.incidence[:, unknown], mesh.touched(faces, covered), _ZERO_REACH)
        part = mesh.incidence[:, free].tocsr()
        rows = np.diff(part.indptr) > 0
        x[free] = least_energy(part[rows], mesh.conductance[free], net[rows])
    return x[unknown]


class _Layers:
    """The cells beyond the walls of a target, and the faces between them.

    Attributes
    ----------
    ids : list of three ndarrays of int64
        Numbers of the faces that may change, among all faces of the larger grid; -1 for those of the target and of
        poles.
    cells : bool ndarray
        The cells.
    incidence : sparse array, shape (cells, faces)
        As in `mesh`.
    conductance : ndarray, shape (faces,)
    """

    def __init__(self, ghosts: Ghosts) -> None:
        grid = ghosts.outer
        self.cells = np.ones(grid.shape, dtype=bool)
        self.cells[ghosts.in_outer((True, True, True))] = False
        conductances = face_conductances(grid)
        self.ids, count = [], 0
        for axis, g in enumerate(conductances):
            free = g > 0
            free[ghosts.in_outer(_FACES[axis])] = False
            ids = np.full(free.shape, -1, dtype=np.int64)
            if grid.periodic[axis]:
                free[at(axis, -1)] = False
            ids[free] = count + np.arange(int(free.sum()))
            if grid.periodic[axis]:
                ids[at(axis, -1)] = ids[at(axis, 0)]
            count += int(free.sum())
            self.ids.append(ids)
        row = np.cumsum(self.cells.reshape(-1)).reshape(grid.shape) - 1
        entries = []
        for axis, ids in enumerate(self.ids):
            for side, sign in ((slice(None, -1), -1.0), (slice(1, None), 1.0)):
                of_cell = ids[at(axis, side)]
                here = self.cells & (of_cell >= 0)
                entries.append((np.full(int(here.sum()), sign), row[here], of_cell[here]))
        signs, rows, columns = (np.concatenate(part) for part in zip(*entries, strict=True))
        self.incidence = sparse.csc_array((signs, (rows, columns)), shape=(int(self.cells.sum()), count))
        self.conductance = self.gather(conductances)

    def gather(self, arrays: Sequence[NDArray]) -> NDArray:
        """Values on all faces, by number."""
        out = np.empty(1 + max(int(ids.max()) for ids in self.ids), dtype=arrays[0].dtype)
        for array, ids in zip(arrays, self.ids, strict=True):
            out[ids[ids >= 0]] = array[ids >= 0]
        return out

    def scatter(self, values: Array, faces: Three) -> None:
        """The reverse, in place."""
        for f, ids in zip(faces, self.ids, strict=True):
            f[ids >= 0] = values[ids[ids >= 0]]

    def touched(self, faces: Three, covered: Masks) -> Mask:
        """Which of the cells have a known face, or one of the target with a flux through it."""
        found = np.zeros(self.cells.shape, dtype=bool)
        for axis, (f, k, ids) in enumerate(zip(faces, covered, self.ids, strict=True)):
            there = k | ((ids < 0) & (f != 0))
            found |= there[at(axis, slice(None, -1))] | there[at(axis, slice(1, None))]
        return np.asarray(found[self.cells])
