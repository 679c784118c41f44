"""Fields of point charges, and moves of fields that hold one.

References, closed forms from memory: the solid angle of a rectangle seen from above a corner (Khadjavi 1968,
Calculation of solid angle subtended by rectangular apertures, J. Opt. Soc. Am. 58, 1417; Gotoh & Yagi 1971, Solid angle
subtended by a rectangular slit, Nucl. Instrum. Methods 96, 485), of a disc seen from above its centre and of a cell of
the sphere of directions (elementary); Gauss's law.
"""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

import fieldmover as fm
from fieldmover.errors import ChargeError, FieldError, GridError
from fieldmover.grids.nested import nested_grid
from fieldmover.interpolation.charge import move_charged, point_charge_flux, split_charge
from fieldmover.interpolation.nested import move_charged_nested, move_flux_nested
from tests.cases import bent, brick, largest_error, pipe, sphere, wedge
from tests.fields import WAVE

FULL = 4 * np.pi
GRIDS = {"sphere": sphere(4), "pipe": pipe(6), "bent": bent(6), "brick": brick(6), "wedge": wedge(6)}


def coulomb(centre, charge=FULL):
    """The field as a function of position."""

    def b(x, y, z):
        d = (x - centre[0], y - centre[1], z - centre[2])
        r3 = (d[0] ** 2 + d[1] ** 2 + d[2] ** 2) ** 1.5
        return tuple(charge / FULL * c / r3 for c in d)

    return b


def from_corner(a, b, height):
    """Solid angle of a rectangle with sides a, b (signed) seen from above its corner."""
    return np.arctan2(a * b, height * np.sqrt(a * a + b * b + height * height))


def rectangles(grid, centre):
    """Solid angles of the faces of a box, signed."""
    faces = []
    for axis in range(3):
        one, two = [d for d in range(3) if d != axis]
        q = [nodes - c for nodes, c in zip(grid.nodes, centre, strict=True)]
        height = q[axis].reshape([-1 if d == axis else 1 for d in range(3)])
        a = q[one].reshape([-1 if d == one else 1 for d in range(3)])
        b = q[two].reshape([-1 if d == two else 1 for d in range(3)])
        corners = np.sign(height) * from_corner(a, b, np.abs(height))
        faces.append(np.diff(np.diff(corners, axis=one), axis=two))
    return faces


def test_the_six_faces_of_a_cube_share_a_sphere():
    flux = point_charge_flux(fm.cartesian_grid([2, 4], [-1, 1], [0, 2]), FULL, (3, 0, 1))
    for f in flux.faces:
        np.testing.assert_allclose(f.ravel(), [-FULL / 6, FULL / 6], rtol=1e-14)


@pytest.mark.parametrize("centre", [(0.03, -0.02, 0.05), (0.91, 0.4, -0.7), (3.0, 0.1, 0.2), (0.2, 0.3, -40.0)])
def test_faces_of_boxes_are_rectangles(centre):
    grid = brick(9)
    for f, exact in zip(point_charge_flux(grid, FULL, centre).faces, rectangles(grid, centre), strict=True):
        np.testing.assert_allclose(f, exact, rtol=0, atol=1e-13)


def test_faces_of_cylinders_seen_from_the_axis_are_parts_of_discs():
    grid = fm.cylindrical_grid([0, 0.2, 0.7, 1, 2], np.linspace(0, 2 * np.pi, 12), np.linspace(0, 1, 4))
    flux = point_charge_flux(grid, -FULL, (0, 0, 1.25))
    R, z = grid.nodes[0][:, None], grid.nodes[2]
    discs = 2 * np.pi * (1 - (1.25 - z) / np.hypot(R, 1.25 - z)) / 11
    np.testing.assert_allclose(flux.f3, np.broadcast_to(np.diff(discs, axis=0)[:, None], flux.f3.shape), atol=1e-13)
    np.testing.assert_allclose(flux.f2, 0, atol=3e-14)


def test_faces_of_spheres_about_the_charge():
    """By the closed form, and by edges on the same grid given as a map."""
    grid = sphere(3)

    def to_cartesian(r, theta, phi):
        return r * np.sin(theta) * np.cos(phi), r * np.sin(theta) * np.sin(phi), r * np.cos(theta)

    warped = fm.warped_grid(*grid.nodes, to_cartesian, (False, False, True), (None, "both", None))
    exact = -np.diff(np.cos(grid.nodes[1]))[:, None] * np.diff(grid.nodes[2])
    for g, size in ((grid, 1e-15), (fm.placed(grid, (1, 2, 3)), 1e-15), (warped, 1e-9)):
        flux = point_charge_flux(g, FULL, (1, 2, 3) if g not in (grid, warped) else (0, 0, 0))
        np.testing.assert_allclose(flux.f1, np.broadcast_to(exact, flux.f1.shape), atol=size)
        assert max(np.abs(flux.f2).max(), np.abs(flux.f3).max()) <= size
        assert np.abs(fm.divergence(flux).cells).max() == 0
        assert flux.f1[0].sum() == pytest.approx(FULL, rel=1e-13)


@pytest.mark.parametrize("name", GRIDS)
def test_fluxes_seen_from_afar(name):
    centre = (7, 5, -3)
    flux, exact = point_charge_flux(GRIDS[name], FULL, centre), fm.flux_from_function(GRIDS[name], coulomb(centre))
    for f, e in zip(flux.faces, exact.faces, strict=True):
        np.testing.assert_allclose(f, e, rtol=0, atol=3e-9 if name == "sphere" else 1e-10)


place = st.floats(-1.4, 1.4)


@settings(max_examples=40, deadline=None)
@given(name=st.sampled_from(sorted(GRIDS)), centre=st.tuples(place, place, place), charge=st.sampled_from([1.0, -0.3]))
def test_gauss(name, centre, charge):
    """Net flux zero out of all cells but the one that holds the charge."""
    grid = GRIDS[name]
    try:
        flux = point_charge_flux(grid, charge, centre)
    except FieldError:  # on a face
        assume(False)
    net = fm.divergence(flux).cells
    holders = np.argwhere(net)
    assert len(holders) <= 1
    x = np.array(centre)
    for i, j, k in holders:
        assert net[i, j, k] == pytest.approx(charge, rel=1e-14)
        nodes = grid.node_positions()[:, i : i + 2, j : j + 2, k : k + 2].reshape(3, 8)
        size = np.ptp(nodes, axis=1).max()
        assert np.abs(nodes.mean(axis=1) - x).max() < size
    walls = sum(
        f[(slice(None),) * d + (-1,)].sum() - f[(slice(None),) * d + (0,)].sum() for d, f in enumerate(flux.faces)
    )
    assert walls == pytest.approx(charge * len(holders), abs=1e-13)


def test_the_cell_that_holds_the_charge():
    grid = fm.cylindrical_grid([0, 1, 2], np.linspace(0, 2 * np.pi, 7), [-1, 0, 1])
    net = fm.divergence(point_charge_flux(grid, 2.5, (-0.3, 0.4, 0.2))).cells
    assert np.argwhere(net).tolist() == [[0, 2, 1]]
    assert net[0, 2, 1] == 2.5


@pytest.fixture(scope="module")
def mixed():
    """A wave and a charge off the centre, on a shell."""
    shell = sphere(8)
    neutral = fm.curl(fm.potential_from_function(shell, WAVE.a))
    own = point_charge_flux(shell, 3.0, (0.1, -0.2, 0.3))
    return fm.FaceFlux(shell, tuple(a + b for a, b in zip(neutral.faces, own.faces, strict=True)))


def test_a_charge_alone_arrives_as_rectangles():
    shell, box = sphere(4), fm.cartesian_grid(*[np.linspace(-1.3, 2.1, 7)] * 3)
    flux = fm.flux_from_function(shell, coulomb((0, 0, 0)))
    with pytest.raises(ChargeError):
        fm.move_flux(flux, box)
    moved = move_charged(flux, box)
    assert moved.charge == pytest.approx(FULL, rel=1e-8)
    for f, exact in zip(moved.flux.faces, rectangles(box, (0, 0, 0)), strict=True):
        np.testing.assert_allclose(f * FULL / moved.charge, exact, atol=1e-13)
    assert moved.cell == (2, 2, 2)


@pytest.mark.parametrize("holds", [False, True])
@pytest.mark.parametrize("outside", ["least energy", "zero"])
def test_a_charge_and_a_neutral_rest(mixed, holds, outside):
    low, high = (-1.3, 2.1) if holds else (0.75, 1.6)
    box = fm.cartesian_grid(*[np.linspace(low, high, 10)] * 3)
    moved = move_charged(mixed, box, outside=outside, centre=(0.1, -0.2, 0.3))
    assert moved.charge == pytest.approx(3.0, rel=1e-13)
    net = fm.divergence(moved.flux).cells
    if holds:
        assert moved.cell == (3, 2, 4)
        assert net[moved.cell] == pytest.approx(3.0, rel=1e-13)
        net[moved.cell] = 0.0
    else:
        assert moved.cell is None
        point, wave = coulomb((0.1, -0.2, 0.3), 3.0), WAVE.b
        exact = fm.flux_from_function(box, lambda *x: tuple(a + b for a, b in zip(point(*x), wave(*x), strict=True)))
        assert largest_error(moved.flux, exact.faces) < 0.01
    assert np.abs(net).max() == 0


@pytest.mark.parametrize("charge", [3e4, 3e-4])
def test_charges_far_stronger_or_weaker_than_the_rest(mixed, charge):
    """The two parts are rounded to different powers of two, and their sums would be rounded again."""
    own, shell = point_charge_flux(mixed.grid, charge - 3.0, (0.1, -0.2, 0.3)), mixed.grid
    flux = fm.FaceFlux(shell, tuple(a + b for a, b in zip(mixed.faces, own.faces, strict=True)))
    for low, high in ((0.75, 1.6), (-1.3, 2.1)):
        moved = move_charged(flux, fm.cartesian_grid(*[np.linspace(low, high, 10)] * 3), centre=(0.1, -0.2, 0.3))
        net = fm.divergence(moved.flux).cells
        if moved.cell is not None:
            assert net[moved.cell] == pytest.approx(charge, rel=1e-10)
            net[moved.cell] = 0.0
        assert np.abs(net).max() == 0


def test_a_shell_of_another_frame_holds_no_charge_in_its_cells(mixed):
    shell = fm.placed(
        fm.spherical_grid(np.linspace(1.3, 2, 5), np.linspace(0, np.pi, 9), np.linspace(0, 2 * np.pi, 17)),
        (0.2, 0.1, 0.0),
    )
    moved = move_charged(mixed, shell, centre=(0.1, -0.2, 0.3))
    assert moved.cell is None
    assert np.abs(fm.divergence(moved.flux).cells).max() == 0
    assert moved.flux.f1[2].sum() == pytest.approx(3.0, rel=1e-12)


def test_the_rest_has_a_potential(mixed):
    charge, rest = split_charge(mixed, (-0.3, 0.2, 0.1))  # any place in the hole will do
    assert charge == pytest.approx(3.0)
    again = fm.curl(fm.potential(rest))
    for a, b in zip(rest.faces, again.faces, strict=True):
        np.testing.assert_allclose(a, b, atol=1e-13)


def test_neutral_fields_are_left_alone():
    shell = sphere(4)
    neutral = fm.curl(fm.potential_from_function(shell, WAVE.a))
    assert split_charge(neutral, (9, 9, 9)) == (0.0, neutral)
    box = fm.flux_from_function(brick(3), coulomb((9, 9, 9)))
    assert split_charge(box, (0, 0, 0)) == (0.0, box)
    target = fm.cartesian_grid(*[np.linspace(1.1, 1.6, 4)] * 3)
    moved, plain = move_charged(neutral, target), fm.move_flux(neutral, target)
    assert moved.charge == 0.0
    assert moved.cell is None
    np.testing.assert_array_equal(moved.flux.f1, plain.f1)


def test_a_charge_on_faces_of_the_target_is_put_beside_them():
    """A box round the hole has a node in its middle; where the charge is makes no difference outside of the hole."""
    shell = sphere(8)
    neutral = fm.curl(fm.potential_from_function(shell, WAVE.a))
    own = point_charge_flux(shell, 3.0)
    flux = fm.FaceFlux(shell, tuple(a + b for a, b in zip(neutral.faces, own.faces, strict=True)))
    box = fm.cartesian_grid(*[np.linspace(-1.68, 1.68, 13)] * 3)
    moved = move_charged(flux, box)
    np.testing.assert_allclose(moved.centre, 0.14, rtol=1e-12)
    assert moved.cell == (6, 6, 6)
    point, wave = coulomb((0, 0, 0), 3.0), WAVE.b
    exact = fm.flux_from_function(box, lambda *x: tuple(a + b for a, b in zip(point(*x), wave(*x), strict=True)))
    np.testing.assert_allclose(moved.flux.f1[-1], exact.f1[-1], atol=0.03 * np.abs(exact.f1[-1]).max())
    within = nested_grid([[(np.linspace(-1.8, 1.8, 13),) * 3], [(np.linspace(-0.6, 0.6, 9),) * 3]])
    np.testing.assert_allclose(move_charged_nested(flux, within).centre, 0.075, rtol=1e-12)


def test_no_charge_no_flux():
    assert not any(f.any() for f in point_charge_flux(brick(3), 0.0).faces)
    with pytest.raises(FieldError, match="finite number"):
        point_charge_flux(brick(3), np.inf)


BOX = fm.cartesian_grid([-1, 0, 1], [-1, 1], [-1, 1])


@pytest.mark.parametrize(
    ("grid", "centre", "error", "message"),
    [
        (BOX, (0, 0.2, 0.1), FieldError, "lies on a face"),
        (BOX, (-1, 0.2, 0.1), FieldError, "lies on a face"),
        (BOX, (0.4, 1, 1), FieldError, "lies on an edge"),
        (BOX, (1, 1, 1), FieldError, "lies on an edge"),
        (BOX, (1, np.nan, 1), FieldError, "three finite numbers"),
        (BOX, (1, 1), FieldError, "three finite numbers"),
        (fm.cartesian_grid([0, 1], [0, 1], [0, 1], (False, True, False)), (5, 5, 5), GridError, "axis y is periodic"),
        (fm.cylindrical_grid([0, 1], [0, np.pi, 2 * np.pi], [0, 1]), (5, 5, 5), GridError, "2 cells along phi"),
        (sphere(2), (0.8534, 0.3535, 0.3826), FieldError, "half of all directions"),
    ],
)
def test_centres_that_cannot_be(grid, centre, error, message):
    with pytest.raises(error, match=message):
        point_charge_flux(grid, 1.0, centre)


def test_a_charge_in_boxes_within_boxes(mixed):
    """Every level has the fluxes of rectangles, and each cell that holds the charge has it; the others nothing."""
    centre, line = (0.1, -0.2, 0.3), np.linspace(-1.5, 1.8, 12)
    fine = (np.linspace(-0.3, 0.9, 9), np.linspace(-0.6, 0.3, 7), np.linspace(-0.25, 0.65, 7))
    nested = nested_grid([[(line, line, line + 0.05)], [fine]])
    moved = move_charged_nested(mixed, nested, centre=centre)
    assert moved.charge == pytest.approx(3.0, rel=1e-13)
    coarse, fine = moved.fluxes
    assert moved.cells == [(5, 4, 5), (2, 2, 3)]
    for part, cell in zip(moved.fluxes, moved.cells, strict=True):
        net = fm.divergence(part).cells
        assert net[cell] == pytest.approx(3.0, rel=1e-13)
        net[cell] = 0.0
        assert np.abs(net).max() == 0
    summed = fine.f1[::2].reshape(5, 3, 2, 3, 2).sum(axis=(2, 4))
    np.testing.assert_array_equal(summed, coarse.f1[4:9, 3:6, 4:7])

    alone = move_charged_nested(point_charge_flux(sphere(4), FULL, centre), nested, centre=centre)
    for part in alone.fluxes:
        for f, exact in zip(part.faces, rectangles(part.grid, centre), strict=True):
            np.testing.assert_allclose(f, exact, atol=1e-12)


def test_a_neutral_field_in_boxes_within_boxes():
    neutral = fm.curl(fm.potential_from_function(sphere(4), WAVE.a))
    nested = nested_grid([[(np.linspace(1.1, 1.7, 7),) * 3], [(np.linspace(1.2, 1.5, 7),) * 3]])
    moved, plain = move_charged_nested(neutral, nested), move_flux_nested(neutral, nested)
    assert (moved.charge, moved.cells) == (0.0, [None, None])
    np.testing.assert_array_equal(moved.fluxes[1].f2, plain[1].f2)


@pytest.mark.parametrize("centre", [(1.5, 0.1, 0.2), (9.0, 1.0, 2.0)])
def test_a_charge_outside_the_hole_is_refused(mixed, centre):
    with pytest.raises(FieldError, match=r"not in the hole inside r = 1, .* net flux 3"):
        move_charged(mixed, brick(3), centre=centre)
