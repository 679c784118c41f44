"""The Earth's field (IGRF-14): evaluation, fluxes and energy on grids, and the move from a shell to a box."""

from __future__ import annotations

import numpy as np
import ppigrf
import pytest

import fieldmover as fm
from tests import earth, reference
from tests.earth import EARTH, RADIUS


def spherical_frame(theta, phi):
    """Unit vectors along r, theta, phi in rows."""
    st, ct, sp, cp = np.sin(theta), np.cos(theta), np.sin(phi), np.cos(phi)
    return np.array([[st * cp, st * sp, ct], [ct * cp, ct * sp, -st], [-sp, cp, 0 * ct]])


# -- The evaluator -------------------------------------------------------------------------------------------


@pytest.mark.parametrize("point", earth.POINTS, ids=str)
def test_field_and_potential_at_the_tabulated_points(point):
    r, theta, phi = point[0], *np.radians(point[1:])
    frame = spherical_frame(theta, phi)
    position = r * frame[0]
    expected = earth.POINTS[point]
    np.testing.assert_allclose(frame @ EARTH.b(*position), expected[:3], rtol=1e-11)
    a = frame @ EARTH.a(*position)
    np.testing.assert_allclose(a[1:], expected[3:], rtol=1e-11)
    assert abs(a[0]) < 1e-6  # of 1e8: the potential is tangential


def test_field_against_ppigrf():
    rng = np.random.default_rng(14)
    r, theta, phi = rng.uniform(RADIUS, 2 * RADIUS, 200), rng.uniform(1, 179, 200), rng.uniform(0, 360, 200)
    expected = np.concatenate(ppigrf.igrf_gc(r, theta, phi, earth.EPOCH.to_pydatetime()))
    frame = spherical_frame(np.radians(theta), np.radians(phi))
    found = np.einsum("cxp,xp->cp", frame, np.stack(EARTH.b(*(r * frame[0]))))
    np.testing.assert_allclose(found, expected, atol=1e-8)


@pytest.mark.parametrize("corner", earth.CORNERS, ids=str)
def test_field_at_the_corners_of_the_box(corner):
    np.testing.assert_allclose(EARTH.b(*corner), earth.CORNERS[corner], atol=1e-6)


# -- Fluxes and energies -------------------------------------------------------------------------------------


def shell(n_r, n_theta, n_phi):
    return fm.spherical_grid(
        np.linspace(RADIUS, 2 * RADIUS, n_r + 1),
        np.linspace(0, np.pi, n_theta + 1),
        np.linspace(-np.pi, np.pi, n_phi + 1),
    )


def box(n):
    return fm.cartesian_grid(*(np.linspace(*ends, n + 1) for ends in earth.BOX))


def flux_on(grid):
    return fm.curl(fm.potential_from_function(grid, EARTH.a))


def square(flux) -> float:
    return 2 * fm.diagnose(flux).energy


def test_flux_through_the_northern_hemisphere():
    radii = sorted(earth.HEMISPHERE_FLUX)
    grid = fm.spherical_grid(radii, np.linspace(0, np.pi, 25), np.linspace(-np.pi, np.pi, 97))
    flux = flux_on(grid)
    north = flux.f1[:, :12].sum(axis=(1, 2))
    np.testing.assert_allclose(north, [earth.HEMISPHERE_FLUX[r] for r in radii], rtol=1e-10)
    # Nothing leaves a whole sphere.
    assert (np.abs(flux.f1.sum(axis=(1, 2))) < 1e-14 * np.abs(flux.f1).sum(axis=(1, 2))).all()


def test_fluxes_through_the_faces_of_the_box():
    from_edges = flux_on(box(8))
    from_faces = fm.flux_from_function(box(8), EARTH.b)
    for axis, ends in enumerate(earth.BOX_FLUXES):
        for flux in (from_edges, from_faces):
            faces = np.moveaxis(flux.faces[axis], axis, 0)
            np.testing.assert_allclose([faces[0].sum(), faces[-1].sum()], ends, rtol=1e-10)


def test_circulation_round_a_face_of_the_box():
    potential = fm.potential_from_function(box(8), EARTH.a)
    a2, a3 = potential.edges[1][0], potential.edges[2][0]
    found = [a2[:, 0].sum(), a3[-1].sum(), -a2[:, -1].sum(), -a3[0].sum()]
    np.testing.assert_allclose(found, earth.BOX_EDGES, rtol=1e-11)
    np.testing.assert_allclose(sum(found), earth.BOX_FLUXES[0][0], rtol=1e-11)


def test_mean_field_and_energy_of_the_box():
    flux = flux_on(box(16))
    mean = fm.cells_from_flux(flux, basis="cartesian").mean(axis=(1, 2, 3))
    # The mean of a divergence-free field over a box follows from fluxes; averaging two faces is second-order.
    np.testing.assert_allclose(mean, earth.BOX_MEAN, rtol=2e-3)
    errors = [abs(square(flux_on(box(n))) / earth.BOX_SQUARE - 1) for n in (8, 16, 32)]
    orders = np.log2(np.array(errors[:-1]) / errors[1:])
    assert ((orders > 1.9) & (orders < 2.1)).all()
    assert errors[-1] < 1e-3


def test_energy_of_the_shell():
    errors = [abs(square(flux_on(shell(n, 2 * n, 4 * n))) / earth.SQUARE_A_2A - 1) for n in (8, 16, 32)]
    orders = np.log2(np.array(errors[:-1]) / errors[1:])
    assert ((orders > 1.8) & (orders < 2.2)).all()
    assert errors[-1] < 5e-3


# -- From a shell to a box -----------------------------------------------------------------------------------

# (cells in r, theta, phi): as many values per axis as the plain splines had in `earth.PLAIN_SPLINES`.
SHELLS = {(15, 24, 48): earth.PLAIN_SPLINES[16, 24, 48], (31, 48, 96): earth.PLAIN_SPLINES[32, 48, 96]}


@pytest.fixture(scope="module")
def target():
    """The box in 15^3 cells (16^3 nodes), and the field averaged over each of its faces."""
    grid = box(15)
    exact = reference.circulation_round_faces(reference.circulations(grid, EARTH.a, points=6))
    return grid, [flux / area for flux, area in zip(exact, grid.face_areas(), strict=True)]


def error_of(moved, target) -> float:
    """Largest error of the field averaged over a face, over the largest |B| of the box."""
    grid, exact = target
    found = [flux / area for flux, area in zip(moved.faces, grid.face_areas(), strict=True)]
    return max(np.abs(f - e).max() for f, e in zip(found, exact, strict=True)) / earth.BOX_LARGEST


def moved_from(grid, given, target, order):
    """The field of a shell, given by its potential or by its fluxes, moved to the box."""
    if given == "edges":
        source = flux_on(grid)
    else:
        source, _ = fm.project(fm.flux_from_function(grid, EARTH.b))
    moved = fm.move_flux(source, target[0], order=order)
    assert reference.divergence_ratio(moved.faces) < 4e-15
    return moved


@pytest.mark.parametrize("given", ["edges", "faces"])
def test_moves_from_a_shell_against_plain_splines(given, target):
    """Splines of degree p give the field to order p through its potential, to order p + 1 directly.

    So order 5 must beat plain splines of every degree, and order 3 linear ones by far; but none of the plain
    ones is free of divergence.
    """
    grids = [shell(*cells) for cells in SHELLS]
    errors = {p: [error_of(moved_from(grid, given, target, p), target) for grid in grids] for p in (3, 5)}
    for plain, third, fifth in zip(SHELLS.values(), errors[3], errors[5], strict=True):
        assert fifth < min(plain.values())
        assert third < plain[1] / 20
    coarse, fine = errors[3]
    assert np.log2(coarse / fine) > 2.8, errors


def test_move_from_cell_values(target):
    """Values at cell centres are taken for averages, which costs second order but no divergence."""
    errors = []
    for cells in SHELLS:
        grid = shell(*cells)
        frame = np.stack(EARTH.b(*grid.centres()))
        source, _ = fm.project(fm.flux_from_cells(grid, frame, basis="cartesian"))
        moved = fm.move_flux(source, target[0])
        assert reference.divergence_ratio(moved.faces) < 4e-15
        errors.append(error_of(moved, target))
    assert errors[1] < errors[0] / 3
    assert errors[1] < 1e-2


def test_fluxes_through_the_faces_of_the_box_after_the_move(target):
    moved = fm.move_flux(flux_on(shell(31, 48, 96)), target[0])
    largest = earth.BOX_FLUXES[2][1]
    for axis, ends in enumerate(earth.BOX_FLUXES):
        faces = np.moveaxis(moved.faces[axis], axis, 0)
        np.testing.assert_allclose([faces[0].sum(), faces[-1].sum()], ends, atol=1e-5 * largest)
