"""Between field components at cell centres and fluxes through faces.

With B^i the components along the coordinate tangents and J the Jacobian of the map, G^i = det(J) B^i is the flux per
unit of the other two coordinates. It is smooth wherever the field is, poles included.
"""

from __future__ import annotations

from typing import Literal, get_args

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover import compute
from fieldmover.errors import FieldError
from fieldmover.forms.fields import FaceFlux, close_faces
from fieldmover.grids.axes import centres_of
from fieldmover.grids.grid import Grid, at
from fieldmover.grids.placement import placement, turned
from fieldmover.interpolation.splines import (
    axis_spline,
    crosses_pole,
    fit,
    fit_form,
    grid_splines,
    unfolded,
    unfolded_sources,
)

Array = NDArray[np.float64]
Basis = Literal["cartesian", "physical", "coordinate"]

_SLAB = 1 << 17  # cells per slab
_DEGREE = 3


def flux_from_cells(grid: Grid, b: tuple[ArrayLike, ArrayLike, ArrayLike], basis: Basis = "cartesian") -> FaceFlux:
    """Flux through every face of a field given at the cell centres.

    Parameters
    ----------
    grid : Grid
    b : three array_like, shape (n1, n2, n3)
        Components of B at the centres of the cells (the middle in grid coordinates).
    basis : {"cartesian", "physical", "coordinate"}
        Cartesian components; orthonormal ones, along the unit tangents of the coordinates; or B^i, along the
        tangents themselves.

    Returns
    -------
    FaceFlux
        Unit B L^2. Its divergence is that of the samples, not zero: see `project`.

    Raises
    ------
    FieldError
        If a shape does not fit, a value is not finite, or the basis is unknown.

    Notes
    -----
    G^i is interpolated along axis i and integrated over the face by cubic splines through the centres (de Boor 1978, A
    Practical Guide to Splines), fourth order on smooth fields.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> grid = fm.spherical_grid(np.geomspace(1, 2, 17), np.linspace(0, np.pi, 17), np.linspace(0, 2 * np.pi, 33))
    >>> zero, one = np.zeros(grid.shape), np.ones(grid.shape)
    >>> flux = fm.flux_from_cells(grid, (zero, zero, one))
    >>> bool(abs(flux.f1[0, :8].sum() / np.pi - 1) < 1e-4)
    True
    """
    arrays = _checked(grid, b, basis)
    densities = [np.empty(grid.shape) for _ in range(3)]

    def work(rows: slice) -> None:
        j, det = _jacobian(grid, rows)
        part = [a[rows] for a in arrays]
        for i in range(3):
            k, m = (i + 1) % 3, (i + 2) % 3
            if basis == "cartesian":
                normal = np.cross(j[:, k], j[:, m], axis=0)
                densities[i][rows] = sum(p * n for p, n in zip(part, normal, strict=True))
            elif basis == "physical":
                densities[i][rows] = part[i] * det / np.sqrt((j[:, i] ** 2).sum(axis=0))
            else:
                densities[i][rows] = part[i] * det

    compute.for_each(work, _rows(grid))
    operators = [_operators(grid, axis) for axis in range(3)]
    faces = []
    poles_first = sorted(range(3), key=lambda axis: not crosses_pole(grid, axis))  # they pair cells of the ring
    for i, density in enumerate(densities):
        for axis in poles_first:
            to_nodes, over_cells = operators[axis]
            density = _apply(grid, to_nodes if axis == i else over_cells, density, axis, 1.0 if axis == i else -1.0)
        faces.append(density)
    result = (faces[0], faces[1], faces[2])
    close_faces(grid, result)
    return FaceFlux(grid, result)


def cells_from_flux(flux: FaceFlux, basis: Basis = "cartesian") -> Array:
    """Components of B at the cell centres from the fluxes through the faces.

    Parameters
    ----------
    flux : FaceFlux
    basis : {"cartesian", "physical", "coordinate"}
        As for `flux_from_cells`.

    Returns
    -------
    ndarray, shape (3, n1, n2, n3)
        On Cartesian grids the mean of the two faces, per area (common practice, no source; second order). On the
        others, where the mean over a face does not stand for its middle, G^i by cubic splines (fourth order).

    Raises
    ------
    FieldError
        If the basis is unknown.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> grid = fm.cartesian_grid([0, 1, 2], [0, 1], [0, 3])
    >>> flux = fm.flux_from_function(grid, lambda x, y, z: (x, 0 * y, -z))
    >>> fm.cells_from_flux(flux)[0, :, 0, 0].round(12)
    array([0.5, 1.5])
    """
    _check_basis(basis)
    grid = flux.grid
    if grid.kind == "cartesian":
        means = np.stack(
            [
                _mean_of_faces(f, area, axis)
                for axis, (f, area) in enumerate(zip(flux.faces, grid.face_areas(), strict=True))
            ]
        )
        frame = placement(grid) if basis == "cartesian" else None
        return means if frame is None else turned(frame[1], means)
    densities = _densities_at_centres(flux)
    out = np.empty((3, *grid.shape))

    def work(rows: slice) -> None:
        j, det = _jacobian(grid, rows)
        for i in range(3):
            if basis == "cartesian":
                out[i, rows] = sum(densities[k][rows] * j[i, k] for k in range(3)) / det
            else:
                length = np.sqrt((j[:, i] ** 2).sum(axis=0)) if basis == "physical" else 1.0
                out[i, rows] = densities[i][rows] * length / det

    compute.for_each(work, _rows(grid))
    return out


def _mean_of_faces(face: Array, area: Array, axis: int) -> Array:
    normal = face / area
    return np.asarray(0.5 * (normal[at(axis, slice(None, -1))] + normal[at(axis, slice(1, None))]))


def _densities_at_centres(flux: FaceFlux) -> list[Array]:
    """G^i at the cell centres from the splines of the fluxes."""
    grid, splines = flux.grid, grid_splines(flux.grid, _DEGREE)
    densities = []
    for i, face in enumerate(flux.faces):
        across = tuple(axis for axis in range(3) if axis != i)
        density = fit_form(grid, splines, face, across)
        for axis, spline in enumerate(splines):
            pieces, first = (
                (spline.value_pieces, spline.value_first) if axis == i else (spline.cell_pieces, spline.cell_first)
            )
            middle = (pieces * 0.5 ** np.arange(pieces.shape[2])).sum(axis=2)
            matrix = np.zeros((grid.shape[axis], density.shape[axis]))
            for m in range(middle.shape[1]):
                columns = np.minimum(first + m, density.shape[axis] - 1)  # padding of short axes is zero
                np.add.at(matrix, (np.arange(grid.shape[axis]), columns), middle[:, m])
            density = np.moveaxis(np.tensordot(matrix, density, axes=(1, axis)), 0, axis)
        densities.append(np.ascontiguousarray(density))
    return densities


def _check_basis(basis: str) -> None:
    if basis not in get_args(Basis):
        raise FieldError(f"basis: {basis!r}, expected one of {', '.join(map(repr, get_args(Basis)))}")


def _checked(grid: Grid, b: tuple[ArrayLike, ArrayLike, ArrayLike], basis: str) -> list[Array]:
    _check_basis(basis)
    arrays = [np.asarray(component, dtype=np.float64) for component in b]
    if len(arrays) != 3:
        raise FieldError(f"field at cell centres: {len(arrays)} components, expected 3")
    for axis, array in enumerate(arrays):
        if array.shape != grid.shape:
            raise FieldError(f"component {axis + 1} at cell centres: shape {array.shape}, expected {grid.shape}")
        bad = ~np.isfinite(array)
        if bad.any():
            place = [int(p) for p in np.argwhere(bad)[0]]
            raise FieldError(
                f"component {axis + 1}: {int(bad.sum())} values are not finite, the first at index {place}"
            )
    return arrays


def _rows(grid: Grid) -> list[slice]:
    return compute.slabs(grid.shape[0], _SLAB // (grid.shape[1] * grid.shape[2]))


def _jacobian(grid: Grid, rows: slice) -> tuple[Array, Array]:
    """Tangents at the cell centres of some rows, and their determinant."""
    c1, c2, c3 = (centres_of(q) for q in grid.nodes)
    j = grid.map.jacobian(c1[rows][:, None, None], c2[None, :, None], c3[None, None, :])
    return j, np.einsum("i...,i...", j[:, 0], np.cross(j[:, 1], j[:, 2], axis=0))


def _operators(grid: Grid, axis: int) -> tuple[tuple[Array, Array], tuple[Array, Array]]:
    """Matrices from centre values to node values, and to cell integrals; each for a line and for its opposite."""
    nodes, n = grid.nodes[axis], grid.shape[axis]
    poles = grid.poles[axis] if crosses_pole(grid, axis) else None
    cyclic = grid.periodic[axis] or poles == "both"
    line, offset = unfolded(nodes, poles)
    centres = centres_of(line)
    if centres.size == 1:
        return (np.ones((2, 1)), np.zeros((2, 1))), (np.diff(nodes)[:, None], np.zeros((1, 1)))
    span = line[-1] - line[0]
    knots = np.append(centres, centres[0] + span) if cyclic else centres
    spline = axis_spline(knots, _DEGREE, periodic=cyclic)
    coefficients = fit(np.eye(centres.size)[None], spline.values, axis=1)[0]

    def value_at(points: Array) -> Array:
        if cyclic:
            points = knots[0] + np.mod(points - knots[0], span)
        cell = np.clip(np.searchsorted(knots, points, side="right") - 1, 0, knots.size - 2)
        s = (points - knots[cell]) / np.diff(knots)[cell]
        active = np.zeros((points.size, coefficients.shape[0]))
        for m in range(_DEGREE + 1):
            basis = np.polynomial.polynomial.polyval(s, spline.value_pieces[cell, m].T, tensor=False)
            active[np.arange(points.size), spline.value_first[cell] + m] += basis
        return np.asarray(active @ coefficients)

    real = line[offset : offset + n + 1]
    middle, half = centres_of(real), 0.5 * np.diff(real)
    over_cells = np.zeros((n, centres.size))
    for side in (-0.5, 0.5):  # the pieces meet at the centre: two Gauss points on each half of a cell
        for abscissa in (-1 / np.sqrt(3), 1 / np.sqrt(3)):
            over_cells += 0.5 * half[:, None] * value_at(middle + half * (side + 0.5 * abscissa))
    rows, mirrored = unfolded_sources(n, poles, grid.periodic[axis])[1]
    fold = np.zeros((2, centres.size, n))
    fold[mirrored, np.arange(centres.size), rows] = 1.0
    to_nodes = value_at(real)
    return (to_nodes @ fold[0], to_nodes @ fold[1]), (over_cells @ fold[0], over_cells @ fold[1])


def _apply(grid: Grid, operator: tuple[Array, Array], data: Array, axis: int, sign: float) -> Array:
    """Apply a matrix along one axis; across a pole G keeps its sign along the axis and changes it otherwise."""
    own, across = operator
    out = np.moveaxis(np.tensordot(own, data, axes=(1, axis)), 0, axis)
    if across.any():
        ring = grid.ring_of(axis)
        opposite = np.roll(data, grid.shape[ring] // 2, axis=ring)
        out = out + sign * np.moveaxis(np.tensordot(across, opposite, axes=(1, axis)), 0, axis)
    return np.ascontiguousarray(out)
