"""What stored components mean: one dipole, unit moment, at r = 2, theta = pi/3, phi = 0, in every kind.

B_r = 2 cos(theta)/r^3 and B_theta = sin(theta)/r^3 in the orthonormal basis; the other kinds follow from
textbook metrics (coordinate B^i = orthonormal / sqrt(g_ii), densitised = sqrt(det g) B^i). Each field stands
on a block of cells of size STEP about the point, so that averages over faces and cells are the values at the
point to some STEP^2.
"""

from __future__ import annotations

import numpy as np
import pytest

import fieldmover as fm
from fieldmover.conventions import components, units
from fieldmover.conventions.vector_potential import potential_from_edges
from tests.fields import dipole

STEP = 1e-4
TOLERANCE = 1e-7
DIPOLE = dipole()

SPHERICAL = (2.0, np.pi / 3, 0.0)
CYLINDRICAL = (1.7320508075688772, 0.0, 1.0)  # the same point: R = 2 sin(pi/3), z = 2 cos(pi/3)

# (grid, basis, densitised) -> the three components
EXPECTED = {
    ("spherical", "physical", False): (0.125, 0.10825317547305482, 0.0),
    ("spherical", "coordinate", False): (0.125, 0.05412658773652741, 0.0),
    ("spherical", "coordinate", True): (0.4330127018922194, 0.1875, 0.0),
    ("spherical", "cartesian", False): (0.16237976320958228, 0.0, -0.03125),
    ("cylindrical", "physical", False): (0.16237976320958228, 0.0, -0.03125),
    ("cylindrical", "coordinate", True): (0.28125, 0.0, -0.05412658773652734),
    ("cylindrical", "cartesian", False): (0.16237976320958228, 0.0, -0.03125),
    ("cartesian", "physical", False): (0.16237976320958228, 0.0, -0.03125),
}
# (grid, basis) -> component of A along phi
POTENTIAL = {("spherical", "coordinate"): 0.375, ("spherical", "physical"): 0.21650635094610965}


def block(kind: str, centred: bool) -> fm.Grid:
    """Five cells along each axis; the point is the centre of the middle cell, or node 2 of every axis."""
    steps = STEP * (np.arange(6) - (2.5 if centred else 2.0))
    if kind == "spherical":
        return fm.spherical_grid(*(q + steps for q in SPHERICAL))
    if kind == "cylindrical":
        return fm.cylindrical_grid(*(q + steps for q in CYLINDRICAL))
    return fm.cartesian_grid(*(q + steps for q in (CYLINDRICAL[0], 0.0, CYLINDRICAL[2])))


def cases(stored: list) -> list:
    return [pytest.param(*key, id="-".join(key[:2]) + "-densitised" * key[2]) for key in stored]


ON_FACES = cases([key for key in EXPECTED if key[1] != "cartesian"])
IN_CELLS = cases([key for key in EXPECTED if not key[2]])


@pytest.mark.parametrize(("kind", "basis", "densitised"), ON_FACES)
def test_components_on_faces(kind, basis, densitised):
    grid = block(kind, centred=False)
    flux = fm.flux_from_function(grid, DIPOLE.b)
    stored = components.faces_from_flux(flux, basis, densitised)
    for axis in range(3):
        # Face 2 of its own axis holds the point; across, it lies between cells 1 and 2: take their mean.
        around = tuple(slice(2, 3) if d == axis else slice(1, 3) for d in range(3))
        expected = EXPECTED[kind, basis, densitised][axis]
        np.testing.assert_allclose(stored[axis][around].mean(), expected, rtol=TOLERANCE, atol=TOLERANCE)
    back = components.flux_from_faces(grid, stored, basis, densitised)
    for found, given in zip(back.faces, flux.faces, strict=True):
        np.testing.assert_allclose(found, given, rtol=1e-14, atol=1e-30)


@pytest.mark.parametrize(("kind", "basis", "densitised"), IN_CELLS)
def test_components_in_cells(kind, basis, densitised):
    flux = fm.flux_from_function(block(kind, centred=True), DIPOLE.b)
    found = fm.cells_from_flux(flux, basis=basis)[:, 2, 2, 2]
    np.testing.assert_allclose(found, EXPECTED[kind, basis, False], rtol=TOLERANCE, atol=TOLERANCE)


@pytest.mark.parametrize(("kind", "basis", "densitised"), IN_CELLS)
def test_fluxes_from_components_in_cells(kind, basis, densitised):
    grid = block(kind, centred=True)
    exact = fm.flux_from_function(grid, DIPOLE.b)
    # The components vary by their own slope times STEP, so constant ones give the fluxes of the middle to
    # STEP.
    stored = [np.full(grid.shape, c) for c in EXPECTED[kind, basis, False]]
    found = fm.flux_from_cells(grid, stored, basis=basis)
    scale = 0.17 * STEP**2 * 4
    for axis in range(3):
        middle = tuple(slice(2, 4) if d == axis else 2 for d in range(3))
        error = found.faces[axis][middle] - exact.faces[axis][middle]
        np.testing.assert_allclose(error / scale, 0.0, atol=5 * STEP)


@pytest.mark.parametrize(("kind", "basis"), POTENTIAL, ids=lambda v: v)
def test_components_of_the_potential_on_edges(kind, basis):
    grid = block(kind, centred=False)
    exact = fm.potential_from_function(grid, DIPOLE.a)
    value = POTENTIAL[kind, basis]
    stored = tuple(np.full(grid.edge_shape(d), value if d == 2 else 0.0) for d in range(3))
    found = potential_from_edges(grid, stored, basis)
    np.testing.assert_allclose(found.a3[2, 2, 2], exact.a3[2, 2, 2], rtol=TOLERANCE)
    assert not found.a1.any()
    assert not found.a2.any()


def test_gaussian_units():
    # B^2 / (8 pi) in Gaussian units and B^2 / 2 in Heaviside-Lorentz units are one energy density.
    assert units.size_of("gaussian") == pytest.approx(0.28209479177387814347, rel=1e-15)
    gauss = 3.0
    assert (gauss * units.size_of("gaussian")) ** 2 / 2 == pytest.approx(gauss**2 / (8 * np.pi), rel=1e-15)
