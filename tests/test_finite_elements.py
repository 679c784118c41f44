"""Circulations along edges and d1 against the lowest Nedelec element of an independent finite-element package.

Whitney (1957), Geometric integration theory; Nedelec, Numer. Math. 35, 315 (1980), Mixed finite elements in R3. The
package is scikit-fem, whose elements are defined by these same edge integrals.
"""

from __future__ import annotations

import numpy as np
import pytest
import skfem

import fieldmover as fm
from fieldmover.forms.incidence import d1

SHAPE = (4, 3, 5)


@pytest.fixture(scope="module")
def cells():
    """A bent block of cells as grid and as tetrahedra on the same nodes; the grid index of each vertex."""
    axes = [np.linspace(0, 1, n + 1) for n in SHAPE]
    straight = skfem.MeshTet.init_tensor(*axes)
    index = np.rint(straight.p * np.array(SHAPE)[:, None]).astype(int)

    def bent(x, y, z):
        return x + 0.1 * y * z, y - 0.15 * x * z, z + 0.1 * x * y  # straight lines along each axis stay straight

    return fm.warped_grid(*axes, bent), skfem.MeshTet(np.stack(bent(*straight.p)), straight.t), index


def on_grid_edges(mesh, index, values):
    """Degrees of freedom (from the lower to the higher vertex) of the mesh's edges that are edges of the grid."""
    edges = [np.full(tuple(n + (d != axis) for d, n in enumerate(SHAPE)), np.nan) for axis in range(3)]
    start, step = index[:, mesh.edges[0]], np.diff(index[:, mesh.edges], axis=1)[:, 0]
    for axis in range(3):
        chosen = np.flatnonzero((np.abs(step).sum(axis=0) == 1) & (step[axis] != 0))
        places = np.minimum(start[:, chosen], start[:, chosen] + step[:, chosen])
        edges[axis][tuple(places)] = values[chosen] * step[axis, chosen]
    assert all(np.isfinite(a).all() for a in edges)
    return edges


def curl_through_grid_faces(mesh, index, values):
    """Flux of the element's curl through the faces of the grid, each two triangles of the mesh."""
    faces = [np.zeros(tuple(n + (d == axis) for d, n in enumerate(SHAPE))) for axis in range(3)]
    corners = index[:, mesh.facets]
    for axis in range(3):
        chosen = np.flatnonzero(np.ptp(corners[axis], axis=0) == 0)
        basis = skfem.FacetBasis(mesh, skfem.ElementTetN1(), facets=chosen, intorder=2)
        curl, normal = basis.interpolate(values).curl, np.asarray(basis.normals)
        flux = ((curl * normal).sum(axis=0) * basis.dx).sum(axis=1) * np.sign(normal[axis].mean(axis=1))
        np.add.at(faces[axis], tuple(corners[:, :, chosen].min(axis=1)), flux)
    return faces


def test_d1_is_the_curl_of_nedelec_elements(cells):
    """Whatever the circulations: the flux of the element's curl through a face is their sum round it."""
    _, mesh, index = cells
    values = np.random.default_rng(0).normal(size=mesh.edges.shape[1])
    faces = curl_through_grid_faces(mesh, index, values)
    for ours, theirs in zip(d1(tuple(on_grid_edges(mesh, index, values))), faces, strict=True):
        np.testing.assert_allclose(ours, theirs, atol=1e-12)


def test_circulations_are_degrees_of_freedom(cells):
    """The element holds fields a + b x r exactly; found by least squares, without a line integral."""
    grid, mesh, index = cells

    def field(x, y, z):
        return 0.3 + 0.5 * y - 1.1 * z, -0.2 - 0.5 * x + 0.7 * z, 0.9 + 1.1 * x - 0.7 * y

    basis = skfem.Basis(mesh, skfem.ElementTetN1(), intorder=2)
    values = basis.project(lambda x: np.stack(field(*x)))
    pot = fm.potential_from_function(grid, field)
    for ours, theirs in zip(pot.edges, on_grid_edges(mesh, index, values), strict=True):
        np.testing.assert_allclose(ours, theirs, atol=1e-12)
    for ours, theirs in zip(fm.curl(pot).faces, curl_through_grid_faces(mesh, index, values), strict=True):
        np.testing.assert_allclose(ours, theirs, atol=1e-12)
