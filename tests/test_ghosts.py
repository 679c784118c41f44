"""Layers of ghost cells round a target.

References: fields and orthonormal components in closed form, whose formulas hold at negative theta too; the move
without layers, whose bits the target must keep. That B_r is even and B_theta, B_phi are odd across a pole is common
practice of codes with a polar axis, no source.
"""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import fieldmover as fm
from fieldmover.errors import FieldError, GridError
from fieldmover.grids.ghosts import Ghosts, with_ghosts
from fieldmover.interpolation.charge import move_charged, point_charge_flux
from fieldmover.interpolation.ghosts import (
    _quantum,
    move_charged_with_ghosts,
    move_content_with_ghosts,
    move_with_ghosts,
)
from tests.cases import bent, brick, largest_error, pipe, sphere, wedge
from tests.fields import WAVE

BALL = fm.spherical_grid(np.geomspace(0.4, 0.7, 7), np.linspace(0, np.pi, 9), np.linspace(0, 2 * np.pi, 17))
TARGETS = {
    "box": fm.cartesian_grid(np.linspace(-0.6, 0.5, 8), np.linspace(-0.5, 0.6, 7), np.linspace(-0.4, 0.5, 6)),
    "ball": BALL,
    "placed ball": fm.placed(BALL, (0.1, 0.0, 0.05)),
    "pipe": fm.cylindrical_grid(np.linspace(0, 0.7, 7), np.linspace(0, 2 * np.pi, 13), np.linspace(-0.5, 0.5, 8)),
    "wedge": fm.spherical_grid(np.linspace(0.5, 0.9, 7), np.linspace(0.9, 2.1, 9), np.linspace(0.2, 1.5, 8)),
    "bent": fm.warped_grid(
        *[np.linspace(-0.4, 0.4, 8)] * 3, lambda a, b, c: (a + 0.1 * np.sin(b), b, c + 0.1 * np.sin(a))
    ),
}


@pytest.fixture(scope="module")
def flux():
    return fm.curl(fm.potential_from_function(brick(16), WAVE.a))


def inner_faces(more, ghosts):
    """The faces of the target among all."""
    for axis, f in enumerate(more.faces):
        yield f[tuple(slice(s.start, s.stop + (d == axis)) for d, s in enumerate(ghosts.inside))]


@pytest.mark.parametrize("order", [3, "limited"])
@pytest.mark.parametrize("name", TARGETS)
def test_the_target_keeps_its_bits_and_layers_are_as_good(flux, name, order):
    target, ghosts = TARGETS[name], Ghosts(TARGETS[name], 2)
    plain, more = fm.move_flux(flux, target, order), move_with_ghosts(flux, target, 2, order)
    assert more.grid.nodes[0].tobytes() == ghosts.whole.nodes[0].tobytes()
    for a, b in zip(inner_faces(more, ghosts), plain.faces, strict=True):
        np.testing.assert_array_equal(a, b)
    assert np.abs(fm.divergence(more).cells).max() == 0
    exact = fm.flux_from_function(more.grid, WAVE.b)  # by the Jacobian: with the signs that a pole makes
    inside = fm.flux_from_function(target, WAVE.b)
    ceiling = 0.06 if order == "limited" else max(1.5 * largest_error(plain, inside.faces), 4e-3)
    assert largest_error(more, exact.faces) < ceiling


def test_layers_beyond_a_seam_repeat_the_cells_at_its_other_side(flux):
    more = move_with_ghosts(flux, BALL, (1, 0, 3))
    for f in more.faces[:2]:
        np.testing.assert_array_equal(f[:, :, :3], f[:, :, 16:19])
        np.testing.assert_array_equal(f[:, :, -3:], f[:, :, 3:6])
    np.testing.assert_array_equal(more.f3[:, :, :4], more.f3[:, :, 16:20])


def test_components_go_on_through_a_pole():
    """The uniform field along x, by its formulas at negative theta."""
    source = fm.cartesian_grid(*[np.linspace(-2, 2, 5)] * 3)
    flux = fm.flux_from_function(source, lambda x, y, z: (1 + 0 * x, 0 * x, 0 * x))
    target = fm.spherical_grid([0.8, 1, 1.2], np.linspace(0, np.pi, 13), np.linspace(0, 2 * np.pi, 25))
    more = move_with_ghosts(flux, target, (0, 2, 0))
    one, two, three = (
        np.divide(f, a, out=np.zeros_like(f), where=np.abs(a) > 1e-12)
        for f, a in zip(more.faces, more.grid.face_areas(), strict=True)
    )
    _, theta, phi = more.grid.nodes
    assert theta[0] < -0.5
    assert theta[-1] > np.pi + 0.5
    # means over the faces of sin(theta) cos(phi), cos(theta) cos(phi), -sin(phi)
    along_phi = np.diff(np.sin(phi)) / np.diff(phi)
    along_theta = np.diff(theta / 2 - np.sin(2 * theta) / 4) / -np.diff(np.cos(theta))
    off = np.abs(np.sin(theta)) > 1e-6
    for found, exact in (
        (one, np.outer(along_theta, along_phi)),
        (two[:, off], np.outer(np.cos(theta[off]), along_phi)),
        (three, -np.sin(phi)),
    ):
        np.testing.assert_allclose(found, np.broadcast_to(exact, found.shape), atol=2e-3)
    # against the cell across the pole the two polar components change sign, the radial one does not
    np.testing.assert_allclose(one[:, :2], np.roll(one[:, 3:1:-1], 12, axis=2), atol=1e-14)
    np.testing.assert_allclose(two[:, :2], -np.roll(two[:, 4:2:-1], 12, axis=2), atol=1e-14)
    np.testing.assert_allclose(three[:, :2, :12], -three[:, 3:1:-1, 12:24], atol=1e-14)


@pytest.mark.parametrize("outside", ["least energy", "zero"])
@pytest.mark.parametrize("layers", [1, 4])
def test_layers_outside_the_source_are_filled(outside, layers):
    """A box that leaves a wedge at its corners, and one that ends inside it so that only layers leave."""
    source = fm.curl(fm.potential_from_function(wedge(12), WAVE.a))
    for low, high in ((0.7, 2.3), (1.1, 2.0)):
        box = fm.cartesian_grid(np.linspace(low, high, 9), *[np.linspace(-0.7, 0.7, 9)] * 2)
        more = move_with_ghosts(source, box, layers, outside=outside)
        plain, ghosts = fm.move_flux(source, box, outside=outside), Ghosts(box, layers)
        for a, b in zip(inner_faces(more, ghosts), plain.faces, strict=True):
            np.testing.assert_array_equal(a, b)
        assert np.abs(fm.divergence(more).cells).max() == 0
        assert max(np.abs(f).max() for f in more.faces) < 3 * max(np.abs(f).max() for f in plain.faces)


def test_a_fill_of_layers_alone_is_that_of_a_larger_target():
    """Where the target lies in the source its fluxes are known, and all the fill is beyond its walls."""
    source = fm.curl(fm.potential_from_function(wedge(12), WAVE.a))
    box = fm.cartesian_grid(np.linspace(1.4, 2.0, 7), *[np.linspace(-0.5, 0.5, 7)] * 2)
    more, ghosts = move_with_ghosts(source, box, 6), Ghosts(box, 6)
    larger = fm.move_flux(source, ghosts.outer)
    size = np.abs(larger.f1).max()
    assert np.abs(larger.f1[0]).max() > 1e-3 * size  # the far layer is outside, and not empty
    for a, b in zip(more.faces, larger.faces, strict=True):
        np.testing.assert_allclose(a, b, atol=2e-3 * size)
    closed = move_with_ghosts(source, box, 6, outside="zero")
    assert np.abs(more.f1[0, 0, 0]) > 1e-4 * size
    assert np.abs(closed.f1[0, 0, 0]) < 1e-13 * size


@pytest.mark.parametrize("outside", ["least energy", "zero"])
@pytest.mark.parametrize("charge", [0.0, 3.0])
def test_a_pocket_cut_by_a_wall_of_the_target(outside, charge):
    """A box over half of the hole, whose fill lets flux into the other half; known faces enclose that in the layers."""
    shell, centre = sphere(4), (-0.1, -0.2, 0.03)
    neutral, own = fm.curl(fm.potential_from_function(shell, WAVE.a)), point_charge_flux(shell, charge, centre)
    flux = fm.FaceFlux(shell, tuple(a + b for a, b in zip(neutral.faces, own.faces, strict=True)))
    box = fm.cartesian_grid(np.linspace(-1.22, 0.43, 5), np.linspace(-1.09, 1.35, 4), np.linspace(-1.09, 0.96, 8))
    more = move_charged_with_ghosts(flux, box, (4, 5, 6), outside=outside, centre=centre)
    net = fm.divergence(more.flux).cells
    assert more.cell == ((6, 6, 9) if charge else None)
    if charge:
        net[more.cell] -= charge
    assert np.abs(net).max() < 1e-13
    larger = move_charged(flux, Ghosts(box, (4, 5, 6)).outer, outside=outside, centre=centre).flux
    np.testing.assert_array_equal(more.flux.f1, larger.f1)
    if not charge:
        np.testing.assert_array_equal(move_with_ghosts(flux, box, (4, 5, 6), outside=outside).f1, larger.f1)


def test_known_layers_are_those_of_a_larger_target(flux):
    """All that has no edge on the target's walls is the same, to round-off."""
    target = TARGETS["wedge"]
    more, larger = move_with_ghosts(flux, target, 2), fm.move_flux(flux, Ghosts(target, 2).outer)
    for a, b in zip(more.faces, larger.faces, strict=True):
        np.testing.assert_allclose(a[0], b[0], rtol=0, atol=1e-14)
        np.testing.assert_allclose(a[:, :, -1], b[:, :, -1], rtol=0, atol=1e-14)


def test_layers_are_rounded_to_what_the_walls_are_multiples_of():
    """With the smallest of these, or at the round-off of the largest flux beyond."""
    beyond = [np.ones((3, 1, 1)), np.zeros((1, 2, 1)), np.zeros((1, 1, 2))]
    for bits, expected in ((57, 57), (20, 50)):
        walls = [np.array([3.0, 1.0]).reshape(2, 1, 1) * 2.0**-bits, np.zeros((1, 2, 1)), np.zeros((1, 1, 2))]
        assert _quantum(tuple(beyond), tuple(walls)) == 2.0**-expected


def test_zero_stays_zero():
    grid = brick(4)
    none = fm.FaceFlux(grid, tuple(np.zeros(grid.face_shape(d)) for d in range(3)))
    assert not any(f.any() for f in move_with_ghosts(none, TARGETS["box"], 2).faces)


def test_layers_can_be_refused_where_the_target_is_not(flux):
    target = fm.cartesian_grid(*[np.linspace(-0.9, 0.9, 5)] * 3)
    assert fm.move_flux(flux, target, outside="refuse")
    with pytest.raises(FieldError, match="leaves the source"):
        move_with_ghosts(flux, target, 2, outside="refuse")


def test_the_mean_field_of_a_periodic_box_arrives_in_layers():
    source = fm.cartesian_grid(*[np.linspace(0, 1, 9)] * 3, periodic=(True, True, True))
    uniform = fm.flux_from_function(source, lambda x, y, z: (0 * x + 0.7, 0 * x - 1.3, 0 * x + 0.4))
    inside = fm.cartesian_grid(*[np.linspace(0.25, 0.75, 5)] * 3)
    half = fm.cartesian_grid(*source.nodes[:2], np.linspace(0.25, 0.75, 5), periodic=(True, True, False))
    for target in (inside, half, source):
        for more in (move_with_ghosts(uniform, target, 1), move_charged_with_ghosts(uniform, target, 1).flux):
            for face, area, b in zip(more.faces, more.grid.face_areas(), (0.7, -1.3, 0.4), strict=True):
                np.testing.assert_allclose(face, b * area, rtol=1e-12)
            assert np.abs(fm.divergence(more).cells).max() == 0
    ball = fm.placed(
        fm.spherical_grid([0.1, 0.15, 0.2], np.linspace(0, np.pi, 7), np.linspace(0, 2 * np.pi, 9)), [0.5] * 3
    )
    more = move_with_ghosts(uniform, ball, 1)
    exact = fm.flux_from_function(more.grid, lambda x, y, z: (0 * x + 0.7, 0 * x - 1.3, 0 * x + 0.4))
    assert largest_error(more, exact.faces) < 1e-6


@pytest.mark.parametrize("far", [False, True])
def test_a_charge_with_layers(far):
    """It may be on the target or outside of all layers; these go on with its field."""
    centre, shell = (0.1, -0.2, 0.3), sphere(6)
    neutral = fm.curl(fm.potential_from_function(shell, WAVE.a))
    own = point_charge_flux(shell, 3.0, centre)
    mixed = fm.FaceFlux(shell, tuple(a + b for a, b in zip(neutral.faces, own.faces, strict=True)))
    box = fm.cartesian_grid(*[np.linspace(1.0, 1.6, 5) if far else np.linspace(-1.3, 2.0, 9)] * 3)
    more, plain = move_charged_with_ghosts(mixed, box, 2, centre=centre), move_charged(mixed, box, centre=centre)
    for a, b in zip(inner_faces(more.flux, Ghosts(box, 2)), plain.flux.faces, strict=True):
        np.testing.assert_array_equal(a, b)
    net = fm.divergence(more.flux).cells
    if not far:
        assert more.cell == tuple(i + 2 for i in plain.cell)
        assert net[more.cell] == pytest.approx(3.0, rel=1e-12)
        net[more.cell] = 0.0
    assert np.abs(net).max() == 0
    if not far:  # corners of the layers are outside of the source
        return
    wave, point = fm.flux_from_function(more.flux.grid, WAVE.b), point_charge_flux(more.flux.grid, 3.0, centre)
    exact = [a + b for a, b in zip(wave.faces, point.faces, strict=True)]
    assert np.abs(more.flux.f1 - exact[0])[0].max() < 0.02 * np.abs(exact[0]).max()


def test_a_charge_in_a_layer_is_refused():
    flux = point_charge_flux(sphere(4), 3.0, (0.1, -0.2, 0.3))
    box = fm.cartesian_grid(np.linspace(0.3, 2.1, 7), *[np.linspace(-1.0, 1.1, 8)] * 2)
    with pytest.raises(FieldError, match="lies in one of them"):
        move_charged_with_ghosts(flux, box, 1, centre=(0.1, -0.25, 0.35))


@settings(max_examples=20, deadline=None)
@given(name=st.sampled_from(sorted(TARGETS)), layers=st.tuples(*[st.integers(0, 3)] * 3), far=st.booleans())
def test_any_layers(flux, name, layers, far):
    target = TARGETS[name]
    if far:
        target = fm.placed(target, (0.9, 0.3, 0.2))  # partly outside the source
    more, ghosts = move_with_ghosts(flux, target, layers), Ghosts(target, layers)
    assert more.grid.shape == tuple(n + 2 * k for n, k in zip(target.shape, layers, strict=True))
    assert np.abs(fm.divergence(more).cells).max() == 0
    for a, b in zip(inner_faces(more, ghosts), fm.move_flux(flux, target).faces, strict=True):
        np.testing.assert_array_equal(a, b)


@pytest.mark.parametrize("name", ["ball", "pipe", "box"])
def test_contents_in_layers(name):
    source, target = brick(12), TARGETS[name]
    content = fm.CellContent(source, source.cell_volumes())
    more, ghosts = move_content_with_ghosts(content, target, 2), Ghosts(target, 2)
    np.testing.assert_array_equal(more.cells[ghosts.inside], fm.move_content(content, target).cells)
    density = more.cells / np.abs(with_ghosts(target, 2).cell_volumes())
    assert np.abs(density - 1).mean() < 0.01
    assert density.min() > 0
    larger = ghosts.cells(fm.move_content(content, ghosts.outer).cells)
    beyond = np.ones(larger.shape, dtype=bool)
    beyond[ghosts.inside] = False
    walls = tuple(slice(0, 2) if d == (2 if name == "pipe" else 0) else s for d, s in enumerate(ghosts.inside))
    assert beyond[walls].all()
    np.testing.assert_array_equal(more.cells[walls], larger[walls])


def test_values_in_layers():
    ghosts = Ghosts(BALL, (0, 2, 1))
    x, y, z = BALL.centres()
    again = with_ghosts(BALL, (0, 2, 1)).centres()
    for values, exact in zip((x, y, z), again, strict=True):  # positions across the pole are positions
        np.testing.assert_allclose(ghosts.cells(values), exact, atol=1e-14)
    both = ghosts.cells(np.stack([x, y]), odd=True)
    assert both.shape == (2, 6, 12, 18)
    np.testing.assert_array_equal(both[0, :, :2], -ghosts.cells(x)[:, :2])


@pytest.mark.parametrize(
    ("grid", "layers", "message"),
    [
        (brick(4), -1, "whole number of at least 0"),
        (brick(4), (1, 1), "three of them"),
        (brick(4), 1.5, "whole number"),
        (brick(4), True, "whole number"),
        (sphere(3), (9, 0, 0), "would reach r = -"),
        (fm.spherical_grid([0.3, 0.4], [0.5, 1, 1.5], [0, 1]), (3, 0, 0), "would reach r = "),
        (fm.spherical_grid([1, 2], [0.3, 0.4, 1.5], [0, 1]), (0, 3, 0), "theta would run from"),
        (sphere(2), (0, 5, 0), "at most its 4 cells"),
        (sphere(2), (0, 0, 9), "at most its 8 cells"),
        (wedge(4), (0, 3, 0), "theta would run from"),
        (wedge(4), (0, 0, 8), "less than a full turn"),
        (fm.cylindrical_grid([1, 2], [0, 1], [0, 1]), (1, 0, 0), "would reach R = 0"),
        (fm.cylindrical_grid([0, 1], np.linspace(0, 1, 5), [0, 1]), (1, 0, 0), "no such opposites"),
        (fm.cylindrical_grid([0, 1], np.linspace(0, 2 * np.pi, 6), [0, 1]), (1, 0, 0), "5 cells from 0 to 6.28319"),
        (fm.cylindrical_grid([0, 1], [0, 1, 3, 3.5, 2 * np.pi], [0, 1]), (1, 0, 0), "half a turn of phi"),
        (fm.warped_grid(*[np.linspace(0, 1, 5)] * 3, lambda a, b, c: (a - a**2 / 2.2, b, c)), 2, "folds beyond"),
        (fm.tabulated_grid(*np.meshgrid(*[np.arange(4.0)] * 3, indexing="ij")), 1, "ends with its table"),
    ],
)
def test_layers_that_cannot_be(grid, layers, message):
    with pytest.raises(GridError, match=message):
        Ghosts(grid, layers)


def test_no_layers_no_change():
    for grid in (pipe(3), bent(3)):
        ghosts = Ghosts(grid, 0)
        assert ghosts.outer is grid
        assert ghosts.whole.shape == grid.shape
