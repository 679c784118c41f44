"""What stored components of a magnetic field mean, at faces, edges and cell centres.

With orthonormal ("physical") components a face carries B times its area. With coordinate components B^i it
carries B^i times the integral of sqrt(gamma) over the face, and with densitised ones, which include
sqrt(gamma), the number times the steps of the two coordinates. All three are products of one array per axis on these
grids; with a metric the integral is taken by quadrature, on any grid. Only B^i itself needs the metric.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.conventions.metrics import FlatMetric, Metric, centre_jacobian, face_elements
from fieldmover.errors import DataError, FieldError
from fieldmover.forms.fields import FaceFlux, Three, close_faces
from fieldmover.grids.axes import centres_of
from fieldmover.grids.grid import Grid, area_factors, at, outer, sines, volume_factors
from fieldmover.grids.placement import placement

Array = NDArray[np.float64]
Factors = tuple[Array, Array, Array]
Basis = Literal["physical", "coordinate", "cartesian"]

_CLOSED = ("cartesian", "cylindrical", "spherical")
_SLAB = 1 << 15  # cells

SEAM = 1e-5
"""What the two copies of a seam may differ by, relative to the largest value: single precision, and more."""


def flux_from_faces(
    grid: Grid, arrays: Three, basis: Basis, densitised: bool = False, metric: Metric | None = None
) -> FaceFlux:
    """Fluxes from field components stored on faces.

    Parameters
    ----------
    grid : Grid
        Of any kind.
    arrays : three arrays
        The component normal to each face, shapes (n1 + 1, n2, n3), (n1, n2 + 1, n3), (n1, n2, n3 + 1), unit
        B.
    basis : "physical" or "coordinate"
        Orthonormal components, or B^i. On a Cartesian grid both are the same, and so is "cartesian".
    densitised : bool
        Whether coordinate components include sqrt(gamma).
    metric : Metric, optional
        Of the space, `FlatMetric` too; flat where left out. Densitised components do not need it.

    Returns
    -------
    FaceFlux
        Unit B L^2. Values on faces that a pole collapses are left out: they carry no flux.

    Raises
    ------
    DataError
        If the two copies of a seam differ, or the metric does not fit the grid.
    FieldError
        If orthonormal components are given with a metric, on a grid that is not Cartesian.

    Examples
    --------
    >>> import fieldmover as fm
    >>> grid = fm.cartesian_grid([0, 2], [0, 3], [0, 1])
    >>> flux_from_faces(grid, (np.ones((2, 1, 1)), np.ones((1, 2, 1)), np.ones((1, 1, 2))), "physical").f3
    array([[[6., 6.]]])
    """
    measures = _face_measures(grid, basis, densitised, metric)
    faces = [values * measure for values, measure in zip(arrays, measures, strict=True)]
    check_seams(grid, faces, "faces")
    three = (faces[0], faces[1], faces[2])
    close_faces(grid, three)
    return FaceFlux(grid, three)


def faces_from_flux(flux: FaceFlux, basis: Basis, densitised: bool = False, metric: Metric | None = None) -> Three:
    """Field components on faces from fluxes, the inverse of `flux_from_faces`; 0 on collapsed faces.

    Examples
    --------
    >>> import fieldmover as fm
    >>> grid = fm.cartesian_grid([0, 2], [0, 3], [0, 1])
    >>> flux = fm.FaceFlux(grid, (np.ones((2, 1, 1)), np.ones((1, 2, 1)), np.ones((1, 1, 2))))
    >>> faces_from_flux(flux, "physical")[1].ravel()
    array([0.5, 0.5])
    """
    out = []
    for values, measure in zip(flux.faces, _face_measures(flux.grid, basis, densitised, metric), strict=True):
        out.append(np.divide(values, measure, out=np.zeros_like(values), where=measure != 0))
    return out[0], out[1], out[2]


def cell_density(grid: Grid) -> Array:
    """sqrt(gamma) of flat space at cell centres, shape (n1, n2, n3).

    A densitised field over it is a flux density along x, y, z in any metric.

    Examples
    --------
    >>> import fieldmover as fm
    >>> grid = fm.cylindrical_grid([1, 3], [0, 1], [0, 1])
    >>> cell_density(grid).ravel()
    array([2.])
    """
    if grid.kind not in _CLOSED:
        return np.asarray(np.linalg.det(np.moveaxis(centre_jacobian(grid), (0, 1), (-2, -1))))
    return outer(_density(grid, centres=True))


def to_cartesian(grid: Grid, vector: Array, basis: Basis) -> Array:
    """Cartesian components of a vector at cell centres, shape (3, n1, n2, n3) in and out.

    Parameters
    ----------
    grid : Grid
    vector : array
        Its components along the axes of the grid, or Cartesian.
    basis : "physical", "coordinate" or "cartesian"
        Along unit vectors, along dx/dq^i, or along x, y, z.

    Examples
    --------
    >>> import fieldmover as fm
    >>> grid = fm.cylindrical_grid([1, 3], [0, np.pi], [0, 1])
    >>> to_cartesian(grid, np.array([0.0, 1.0, 2.0]).reshape(3, 1, 1, 1), "physical").ravel().round(12)
    array([-1.,  0.,  2.])
    """
    if basis == "cartesian" or (grid.kind == "cartesian" and placement(grid) is None):
        return vector
    return _by_rows(grid, vector, lambda rows, v: np.einsum("ij...,j...->i...", _tangents(grid, basis, rows), v))


def from_cartesian(grid: Grid, vector: Array, basis: Basis) -> Array:
    """Components of a vector at cell centres in a basis of the grid, the inverse of `to_cartesian`."""
    if basis == "cartesian" or (grid.kind == "cartesian" and placement(grid) is None):
        return vector

    def solved(rows: slice, v: Array) -> Array:
        tangents = np.moveaxis(_tangents(grid, basis, rows), (0, 1), (-2, -1))
        return np.asarray(np.moveaxis(np.linalg.solve(tangents, np.moveaxis(v, 0, -1)[..., None])[..., 0], -1, 0))

    return _by_rows(grid, vector, solved)


def _by_rows(grid: Grid, vector: Array, work: Callable[[slice, Array], Array]) -> Array:
    """Change a vector at cell centres by slabs: nine numbers a cell are many."""
    out = np.empty((3, *grid.shape))

    def part(rows: slice) -> None:
        out[:, rows] = work(rows, vector[:, rows])

    compute.for_each(part, compute.slabs(grid.shape[0], _SLAB // (grid.shape[1] * grid.shape[2])))
    return out


def _tangents(grid: Grid, basis: Basis, rows: slice) -> Array:
    """Vectors along the axes at cell centres, [Cartesian component, axis, i1, i2, i3]."""
    tangents = centre_jacobian(grid, rows)
    return np.asarray(tangents / np.sqrt((tangents**2).sum(axis=0)) if basis == "physical" else tangents)


def _face_measures(grid: Grid, basis: Basis, densitised: bool, metric: Metric | None) -> Three:
    """What a stored component is multiplied by on every face."""
    if isinstance(metric, FlatMetric):
        metric = None  # the grid's own measures are those of flat space
    if metric is not None and basis != "coordinate" and grid.kind != "cartesian":
        raise FieldError(
            f"{basis} components on faces of a {grid.kind} grid in curved space: expected coordinate components"
        )
    if grid.kind not in _CLOSED and basis != "coordinate":
        return grid.face_areas()
    if (metric is not None or grid.kind not in _CLOSED) and not densitised:
        return face_elements(metric or FlatMetric(), grid)
    a, b, c = (outer(factors) for factors in _faces(grid, basis, densitised))
    return a, b, c


def _faces(grid: Grid, basis: Basis, densitised: bool) -> tuple[Factors, Factors, Factors]:
    """What a stored component is multiplied by, [normal axis][axis]."""
    if densitised:
        q1, q2, q3 = grid.nodes
        points: Factors = (np.ones(q1.size), np.ones(q2.size), np.ones(q3.size))
        integrals: Factors | None = (np.diff(q1), np.diff(q2), np.diff(q3))
    elif basis == "coordinate":
        points, integrals = _density(grid, centres=False), volume_factors(grid)
    else:
        factors = area_factors(grid)
        assert factors is not None  # of grids with closed forms
        return factors[0], factors[1], factors[2]
    assert integrals is not None
    return _mixed(points, integrals, 0), _mixed(points, integrals, 1), _mixed(points, integrals, 2)


def _mixed(points: Factors, integrals: Factors, normal: int) -> Factors:
    a, b, c = (points[axis] if axis == normal else integrals[axis] for axis in range(3))
    return a, b, c


def _density(grid: Grid, centres: bool) -> Factors:
    """sqrt(gamma) at nodes or cell centres, as a product of one array per axis."""
    q1, q2, q3 = (centres_of(nodes) if centres else nodes for nodes in grid.nodes)
    one2, one3 = np.ones_like(q2), np.ones_like(q3)
    if grid.kind == "cartesian":
        return np.ones_like(q1), one2, one3
    if grid.kind == "cylindrical":
        return q1, one2, one3
    return q1**2, np.sin(q2) if centres else sines(grid), one3


def check_seams(grid: Grid, arrays: list[Array], what: str) -> None:
    """Refuse components of a field whose two copies on a seam differ."""
    for axis, seam in enumerate(grid.periodic):
        for component, array in enumerate(arrays):
            if not seam or array.shape[axis] == grid.shape[axis]:
                continue
            gap = float(np.abs(array[at(axis, 0)] - array[at(axis, -1)]).max())
            if gap > SEAM * float(np.abs(array).max()):
                raise DataError(
                    f"magnetic field on {what}, component {component + 1}: first and last value along "
                    f"the seam of axis {axis + 1} differ by up to {gap:.3g} in flux; expected copies"
                )
