"""Fields completed by symmetry, and placed grids.

The references are fields in closed form that have the symmetry: sampling the whole grid must give what unfolding a part
of it gives. An axial vector keeps its component across a mirror and reverses those along it (Jackson, Classical
Electrodynamics, section on transformation properties of fields; from memory).
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

import fieldmover as fm
from fieldmover.errors import FieldError, GridError
from fieldmover.forms import perturbed, unfold_values
from fieldmover.grids import turn_about
from tests.fields import WAVE, dipole

RADIUS = np.geomspace(0.3, 1.2, 7)


def shell(theta_end: float, phi_end: float, n_theta: int, n_phi: int) -> fm.Grid:
    return fm.spherical_grid(RADIUS, np.linspace(0, theta_end, n_theta + 1), np.linspace(0, phi_end, n_phi + 1))


FULL = shell(np.pi, 2 * np.pi, 12, 16)


def symmetric_a(x, y, z):
    """Axisymmetric, and a polar vector in the mirror z -> -z: its curl is an axial one, in all three components."""
    bell = np.exp(-(z**2))
    return -y * bell, x * bell, z * (x**2 + y**2)


def symmetric_b(x, y, z):
    bell = np.exp(-(z**2))
    return 2 * z * (y + x * bell), 2 * z * (y * bell - x), 2 * bell


@pytest.mark.parametrize(
    ("part", "how"),
    [
        (shell(np.pi / 2, 2 * np.pi, 6, 16), {"mirror": True}),
        (shell(np.pi, np.pi / 2, 12, 4), {"wedge": 4}),
        (shell(np.pi / 2, np.pi, 6, 8), {"mirror": True, "wedge": 2}),
        (shell(np.pi, 2 * np.pi, 12, 1), {"around": 16}),
        (shell(np.pi / 2, 0.1, 6, 1), {"mirror": True, "around": 16}),
    ],
    ids=["mirror", "wedge", "mirror and wedge", "axisymmetric", "thin wedge and mirror"],
)
def test_unfolded_is_sampled(part, how):
    def mass(grid):
        x, y, z = grid.centres()
        return fm.CellContent(grid, np.exp(-(x**2 + y**2 + z**2)) * grid.cell_volumes())

    for sample in (
        lambda grid: fm.flux_from_function(grid, symmetric_b),
        lambda grid: fm.potential_from_function(grid, symmetric_a),
        mass,
    ):
        found, expected = fm.unfold(sample(part), **how), sample(FULL)
        assert found.grid.periodic == FULL.periodic
        assert found.grid.poles == FULL.poles
        for kind in ("faces", "edges", "cells"):
            if hasattr(found, kind):
                np.testing.assert_allclose(
                    np.concatenate([np.ravel(a) for a in getattr(found, kind)]),
                    np.concatenate([np.ravel(a) for a in getattr(expected, kind)]),
                    atol=1e-13,
                )


def test_mirror_of_a_box_and_a_pipe():
    """The dipole along z is mirror symmetric; the box ends at z = 0 from above, the pipe from below."""
    field = dipole(mz=1.0)
    q = np.linspace(1, 2, 5)
    box, whole = (fm.cartesian_grid(q, q, z) for z in (np.linspace(0, 1, 5), np.linspace(-1, 1, 9)))
    pipe, long = (
        fm.cylindrical_grid(q, np.linspace(0, 2 * np.pi, 9), z) for z in (np.linspace(-1, 0, 5), np.linspace(-1, 1, 9))
    )
    for part, full in ((box, whole), (pipe, long)):
        found = fm.unfold(fm.flux_from_function(part, field.b), mirror=True)
        for a, b in zip(found.faces, fm.flux_from_function(full, field.b).faces, strict=True):
            np.testing.assert_allclose(a, b, atol=1e-14)


def test_divergence_stays_zero():
    """WAVE has no symmetry: what is unfolded is then another field, but still without divergence."""
    part = shell(np.pi / 2, 2 * np.pi, 6, 16)
    full = fm.unfold(fm.curl(fm.potential_from_function(part, WAVE.a)), mirror=True)
    assert np.abs(fm.divergence(full).cells).max() < 1e-15
    assert np.array_equal(full.f2[:, :6], full.f2[:, :6:-1])
    assert np.array_equal(full.f1[:, :6], -full.f1[:, :5:-1])


def test_values_of_a_velocity():
    part, full = shell(np.pi / 2, np.pi, 6, 8), FULL

    def v(grid):
        """Components along r, theta, phi of a flow towards the plane and round the axis."""
        x, y, z = grid.centres()
        r, R = np.sqrt(x**2 + y**2 + z**2), np.hypot(x, y)
        return -(z**2) / r, z * R / r, R

    for component, odd in zip(range(3), (False, True, False), strict=True):
        found = unfold_values(part, v(part)[component], odd=odd, mirror=True, wedge=2)
        np.testing.assert_allclose(found, v(full)[component], atol=1e-14)


def test_perturbation_has_its_size_and_no_divergence():
    pot = fm.potential_from_function(FULL, WAVE.a)
    changed = perturbed(pot, 0.05, seed=3)
    flux = fm.curl(changed)
    assert np.abs(fm.divergence(flux).cells).max() < 1e-15
    for a, b in zip(changed.edges, pot.edges, strict=True):
        difference = np.abs(a - b)
        assert (difference <= 0.05 * np.abs(b) + 1e-17).all()
        assert difference.max() > 0.04 * np.abs(b).max()
    again = perturbed(pot, 0.05, seed=3)
    assert all(np.array_equal(a, b) for a, b in zip(changed.edges, again.edges, strict=True))


@pytest.mark.parametrize(
    ("grid", "how", "message"),
    [
        (shell(1.5, 1.0, 4, 4), {"mirror": True}, "run from 0 to 1.5, expected one end on the plane of symmetry"),
        (shell(np.pi, 1.0, 4, 4), {"wedge": 6}, "2 pi / 6.28"),
        (shell(np.pi, 1.0, 4, 4), {"around": 6}, "with 4 cells in azimuth: expected one cell"),
        (fm.cartesian_grid([0, 1], [0, 1], [0, 1]), {"wedge": 4}, "has no azimuth"),
        (fm.warped_grid([0, 1], [0, 1], [0, 1], lambda x, y, z: (x, y, z)), {"mirror": True}, "no equator"),
    ],
)
def test_refused(grid, how, message):
    with pytest.raises(GridError, match=message):
        fm.unfold(fm.CellContent(grid, np.ones(grid.shape)), **how)


def test_sides_of_a_wedge_must_agree():
    part = shell(np.pi, np.pi, 6, 4)
    with pytest.raises(FieldError, match="two sides in azimuth differ"):
        fm.unfold(fm.flux_from_function(part, WAVE.b), wedge=2)


TURN = Rotation.from_euler("zyx", [0.7, -0.4, 1.1]).as_matrix()
ORIGIN = np.array([0.3, -0.2, 0.1])


@pytest.mark.parametrize(
    "grid", [FULL, fm.cartesian_grid(*[np.linspace(-1, 1, 9)] * 3)], ids=["spherical", "cartesian"]
)
def test_placed_grid_sees_the_turned_field(grid):
    """B in the common frame, at points of the placed grid, is the own field turned."""

    def own(x, y, z):
        return WAVE.b(x, y, z)

    def common(x, y, z):
        local = np.einsum("ji,j...->i...", TURN, np.stack([x, y, z]) - ORIGIN.reshape(3, *[1] * np.ndim(x)))
        return tuple(np.einsum("ij,j...->i...", TURN, np.stack(own(*local))))

    there = fm.placed(grid, ORIGIN, TURN)
    for a, b in zip(fm.flux_from_function(there, common).faces, fm.flux_from_function(grid, own).faces, strict=True):
        np.testing.assert_allclose(a, b, atol=1e-13)
    cells = fm.cells_from_flux(fm.flux_from_function(there, common))
    turned = np.einsum("ij,j...->i...", TURN, fm.cells_from_flux(fm.flux_from_function(grid, own)))
    np.testing.assert_allclose(cells, turned, atol=1e-12)
    for a, b in zip(
        fm.flux_from_cells(there, cells).faces,
        fm.flux_from_cells(grid, np.einsum("ji,j...->i...", TURN, cells)).faces,
        strict=True,
    ):
        np.testing.assert_allclose(a, b, atol=1e-12)


def test_moving_both_grids_alike_changes_nothing():
    source, target = FULL, fm.cartesian_grid(*[np.linspace(0.3, 0.6, 7)] * 3)
    flux = fm.curl(fm.potential_from_function(source, WAVE.a))
    expected = fm.move_flux(flux, target)
    moved = fm.move_flux(fm.FaceFlux(fm.placed(source, ORIGIN, TURN), flux.faces), fm.placed(target, ORIGIN, TURN))
    for a, b in zip(moved.faces, expected.faces, strict=True):
        np.testing.assert_allclose(a, b, atol=1e-13)


def test_placements_follow_one_another():
    grid = fm.cartesian_grid([0, 1], [0, 1], [0, 2])
    twice = fm.placed(fm.placed(grid, ORIGIN, TURN), ORIGIN, turn_about((0, 1, 0), 0.3))
    expected = Rotation.from_rotvec([0, 0.3, 0]).apply(TURN @ np.array([1.0, 1.0, 2.0]) + ORIGIN) + ORIGIN
    np.testing.assert_allclose(twice.node_positions()[:, 1, 1, 1], expected, atol=1e-14)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (((0, 0), None), "expected three finite numbers"),
        (((0, 0, 0), np.diag([1.0, 1.0, -1.0])), "expected a rotation"),
        (((0, 0, 0), 2 * np.eye(3)), "expected a rotation"),
        (((0, 0, 0), np.eye(2)), "expected a rotation matrix of shape"),
    ],
)
def test_refused_placements(arguments, message):
    with pytest.raises(GridError, match=message):
        fm.placed(FULL, *arguments)
