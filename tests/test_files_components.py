"""What stored components mean: face, edge and cell conventions against closed forms."""

from __future__ import annotations

import math

import numpy as np
import pytest

import fieldmover as fm
from fieldmover.conventions.components import (
    cell_density,
    faces_from_flux,
    flux_from_faces,
    from_cartesian,
    to_cartesian,
)
from fieldmover.conventions.units import size_of
from fieldmover.conventions.vector_potential import edges_from_potential, potential_from_edges
from fieldmover.errors import DataError

GRIDS = {
    "cartesian": fm.cartesian_grid([0, 1, 3], [-1, 0.5, 1], [2, 2.5]),
    "cylindrical": fm.cylindrical_grid([0, 1, 2.5], np.linspace(0, 2 * np.pi, 9), [-1, 0, 2]),
    "spherical": fm.spherical_grid([1, 2, 2.5], np.linspace(0, np.pi, 7), np.linspace(0, 2 * np.pi, 9)),
}
BASES = [("physical", False), ("coordinate", False), ("coordinate", True)]


@pytest.fixture(params=GRIDS)
def grid(request):
    return GRIDS[request.param]


def some_flux(grid):
    return fm.curl(fm.potential_from_function(grid, lambda x, y, z: (y * z, x * x, np.sin(x + y))))


@pytest.mark.parametrize(("basis", "densitised"), BASES)
def test_faces_go_out_and_come_back(grid, basis, densitised):
    flux = some_flux(grid)
    back = flux_from_faces(grid, faces_from_flux(flux, basis, densitised), basis, densitised)
    scale = max(np.abs(f).max() for f in flux.faces)
    for one, two in zip(flux.faces, back.faces, strict=True):
        assert np.abs(one - two).max() < 1e-14 * scale


@pytest.mark.parametrize(("basis", "densitised"), BASES)
def test_a_split_monopole_in_every_convention(basis, densitised):
    """B = 1 / r^2 along r carries the solid angle of a face through it: sqrt(gamma) B^r = sin(theta)."""
    grid = GRIDS["spherical"]
    r, theta, phi = grid.nodes
    wanted = np.ones((3, 1, 1)) * (np.cos(theta[:-1]) - np.cos(theta[1:]))[:, None] * np.diff(phi)
    values = np.ones_like(wanted) / r[:, None, None] ** 2
    if densitised:  # the mean of sin(theta) over the face
        values = ((np.cos(theta[:-1]) - np.cos(theta[1:])) / np.diff(theta))[:, None] * np.ones_like(wanted)
    zeros = [np.zeros(grid.face_shape(axis)) for axis in (1, 2)]
    flux = flux_from_faces(grid, (values, *zeros), basis, densitised)
    assert np.allclose(flux.f1, wanted, rtol=1e-14)


def test_coordinate_components_of_a_rotation():
    """B^phi = 1 in a cylinder is B = R along phi: the flux through a face of phi is that of R dR dz."""
    grid = GRIDS["cylindrical"]
    values = [np.zeros(grid.face_shape(axis)) for axis in range(3)]
    values[1][:] = 1.0
    flux = flux_from_faces(grid, tuple(values), "coordinate")
    wanted = 0.5 * np.diff(grid.nodes[0] ** 2)[:, None, None] * np.diff(grid.nodes[2])
    assert np.allclose(flux.f2, wanted, rtol=1e-14)


def test_coordinate_components_of_theta_on_the_sphere():
    """B^theta = 1 is B = r along theta: the flux is the integral of r^2 sin(theta) dr dphi."""
    grid = GRIDS["spherical"]
    values = [np.zeros(grid.face_shape(axis)) for axis in range(3)]
    values[1][:] = 1.0
    flux = flux_from_faces(grid, tuple(values), "coordinate")
    r, theta, phi = grid.nodes
    wanted = np.diff(r**3)[:, None, None] / 3 * np.sin(theta)[:, None] * np.diff(phi)
    wanted[:, [0, -1]] = 0
    assert np.allclose(flux.f2, wanted, rtol=1e-13)
    assert np.all(flux.f2[:, [0, -1]] == 0)


@pytest.mark.parametrize("basis", ["physical", "coordinate"])
def test_edges_of_a_uniform_field(grid, basis):
    """A = (-y, x, 0) / 2 has A_phi = rho^2 / 2 (covariant), rho / 2 (orthonormal)."""
    wanted = fm.potential_from_function(grid, lambda x, y, z: (-y / 2, x / 2, 0 * z))
    edges = [np.zeros(grid.edge_shape(axis)) for axis in range(3)]
    if grid.kind == "cartesian":
        x, y, _ = np.meshgrid(*grid.nodes, indexing="ij")
        edges[0][:], edges[1][:] = -y[:-1] / 2, x[:, :-1] / 2
    else:
        axis = 1 if grid.kind == "cylindrical" else 2
        q1, q2, _ = np.meshgrid(*grid.nodes, indexing="ij")
        rho = np.delete(q1 if axis == 1 else q1 * np.sin(q2), -1, axis=axis)
        edges[axis][:] = rho**2 / 2 if basis == "coordinate" else rho / 2
    found = potential_from_edges(grid, tuple(edges), basis)
    for one, two in zip(found.edges, wanted.edges, strict=True):
        assert np.allclose(one, two, atol=1e-13)


def test_a_dipole_in_every_basis():
    """Flat dipole of moment 1 along z at r = 2, theta = pi / 3 (closed form): B_r = 2 cos(theta) / r^3,
    B_theta = sin(theta) / r^3."""
    step = 1e-6
    grid = fm.spherical_grid([2 - step, 2 + step], [np.pi / 3 - step, np.pi / 3 + step], [-step, step])
    physical = np.array([0.125, 0.10825317547305482, 0.0]).reshape(3, 1, 1, 1)
    coordinate = np.array([0.125, 0.05412658773652741, 0.0]).reshape(3, 1, 1, 1)
    cartesian = np.array([0.16237976320958228, 0.0, -0.03125]).reshape(3, 1, 1, 1)
    for basis, values in (("physical", physical), ("coordinate", coordinate), ("cartesian", cartesian)):
        assert np.allclose(to_cartesian(grid, values, basis), cartesian, atol=1e-14)
        assert np.allclose(from_cartesian(grid, cartesian, basis), values, atol=1e-14)
    assert cell_density(grid).item() == pytest.approx(4 * math.sin(math.pi / 3), rel=1e-14)


def test_vectors_go_to_cartesian_and_back(grid):
    v = np.random.default_rng(2).random((3, *grid.shape))
    for basis in ("physical", "coordinate", "cartesian"):
        assert np.allclose(from_cartesian(grid, to_cartesian(grid, v, basis), basis), v, atol=1e-13)
    length = np.sqrt((to_cartesian(grid, v, "physical") ** 2).sum(axis=0))
    assert np.allclose(length, np.sqrt((v**2).sum(axis=0)))


def test_a_seam_that_does_not_close():
    grid = GRIDS["cylindrical"]
    values = [np.ones(grid.face_shape(axis)) for axis in range(3)]
    values[1][1, -1, 0] = 1.001
    with pytest.raises(DataError, match=r"component 2: first and last value along the seam of axis 2"):
        flux_from_faces(grid, tuple(values), "physical")
    values[1][1, -1, 0] = 1.000001
    flux = flux_from_faces(grid, tuple(values), "physical")
    assert np.array_equal(flux.f2[:, 0], flux.f2[:, -1])


@pytest.mark.parametrize("basis", ["physical", "coordinate"])
def test_faces_and_edges_of_a_warped_grid_by_quadrature(basis):
    """A spherical grid given as a map, beside the closed forms of the same grid."""
    q = np.linspace(1, 2, 5), np.linspace(0, np.pi, 9), np.linspace(0, 2 * np.pi, 13)
    plain = fm.spherical_grid(*q)
    warped = fm.warped_grid(*q, plain.map.to_cartesian, (False, False, True), (None, "both", None))
    flux = fm.flux_from_function(plain, lambda x, y, z: (y, z, 1 + x))
    pot = fm.potential_from_function(plain, lambda x, y, z: (y, z, 1 + x))
    same = fm.FaceFlux(warped, flux.faces)
    for a, b in zip(faces_from_flux(flux, basis), faces_from_flux(same, basis), strict=True):
        assert np.abs(a - b).max() < 1e-6 * np.abs(a).max()
    back = flux_from_faces(warped, faces_from_flux(same, basis), basis)
    for a, b in zip(back.faces, flux.faces, strict=True):
        assert np.abs(a - b).max() < 1e-14
    same_pot = fm.EdgePotential(warped, pot.edges)
    for a, b in zip(edges_from_potential(pot, basis), edges_from_potential(same_pot, basis), strict=True):
        assert np.abs(a - b).max() < 1e-6 * np.abs(a).max()


def test_units():
    """B in Gaussian units is sqrt(4 pi) times the same field in Heaviside-Lorentz units."""
    assert size_of("heaviside-lorentz") / size_of("gaussian") == pytest.approx(3.5449077018110320546, rel=1e-15)
    with pytest.raises(ValueError, match="expected a number or one of"):
        size_of("tesla")
