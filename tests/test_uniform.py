"""Periodic boxes with a mean field, which has no periodic potential.

References: the fields are their own closed forms; refinement keeps coarse fluxes (Balsara 2001, Divergence-free
adaptive mesh refinement for magnetohydrodynamics, states the identity).
"""

from __future__ import annotations

import numpy as np
import pytest

import fieldmover as fm
from fieldmover.grids.placement import turn_about
from tests.cases import largest_error

MEAN = (0.7, -1.3, 0.4)


def wave(x, y, z):
    """Mean field and waves, periodic in 1 along each axis, without divergence."""
    t = 2 * np.pi
    return (
        MEAN[0] + np.sin(t * y) + 0.3 * np.cos(t * z),
        MEAN[1] + np.cos(t * x) - 0.2 * np.sin(t * z),
        MEAN[2] + np.sin(t * x) * np.cos(t * y),
    )


def box(n, periodic=(True, True, True)):
    return fm.cartesian_grid(*[np.linspace(0, 1, n + 1)] * 3, periodic=periodic)


def flux_of(grid):
    flux, _ = fm.project(fm.flux_from_function(grid, wave))
    return flux


TARGETS = {
    "finer, periodic": (box(48), 2e-3),
    "inside": (fm.cartesian_grid(*[np.linspace(0.11, 0.87, 21)] * 3), 2e-3),
    "sphere inside": (
        fm.placed(
            fm.spherical_grid(np.linspace(0.1, 0.4, 9), np.linspace(0, np.pi, 17), np.linspace(0, 2 * np.pi, 33)),
            (0.5, 0.5, 0.5),
        ),
        2e-3,
    ),
}


@pytest.mark.parametrize("name", TARGETS)
def test_the_whole_field_arrives(name):
    target, ceiling = TARGETS[name]
    moved = fm.move_flux(flux_of(box(24)), target)
    assert largest_error(moved, fm.flux_from_function(target, wave).faces) < ceiling
    assert np.abs(fm.divergence(moved).cells).max() == 0


@pytest.mark.parametrize("periodic", [(True, True, True), (True, True, False), (False, True, True)])
def test_refinement_keeps_coarse_fluxes(periodic):
    coarse = flux_of(box(8, periodic))
    fine = fm.move_flux(coarse, box(16, periodic))
    summed = fine.f3[:, :, ::2].reshape(8, 2, 8, 2, 9).sum(axis=(1, 3))
    np.testing.assert_allclose(summed, coarse.f3, atol=1e-14)


def test_a_uniform_field_alone():
    target = fm.cartesian_grid(*[np.linspace(0.1, 0.9, 6)] * 3)
    grid = box(4)
    uniform = fm.flux_from_function(grid, lambda x, y, z: tuple(b + 0 * x for b in MEAN))
    moved = fm.move_flux(uniform, target)
    for face, area, b in zip(moved.faces, target.face_areas(), MEAN, strict=True):
        np.testing.assert_allclose(face, b * area, rtol=1e-12)
    assert np.abs(fm.divergence(moved).cells).max() == 0


@pytest.mark.parametrize("order", [1, 3, 5])
@pytest.mark.parametrize("turned", [False, True])
def test_a_target_beyond_the_box_sees_it_repeated(order, turned):
    """Of a grid in the same coordinates, and of one that has to be located."""
    source = fm.curl(fm.potential_from_function(box(16), lambda *x: tuple(np.sin(2 * np.pi * np.roll(x, 1, axis=0)))))
    nodes = np.linspace(-1.3, 1.9, 65), np.linspace(0.4, 0.9, 11), np.linspace(0, 1, 17)
    target = fm.cartesian_grid(*nodes)
    inner = fm.cartesian_grid(np.linspace(0.2, 0.7, 11), nodes[1], nodes[2])  # row 30 of the target is row 0 here
    if turned:
        target, inner = (fm.placed(grid, turn=turn_about((0, 0, 1), 1e-9)) for grid in (target, inner))
    moved = fm.move_flux(source, target, order=order, outside="refuse")
    once = fm.move_flux(source, inner, order=order)
    assert moved.f1.std() > 1e-3 * once.f1.max()
    for many, few in zip(moved.faces, once.faces, strict=True):
        for first in (10, 30, 50):  # one period is 20 cells
            np.testing.assert_allclose(many[first : first + 10], few[:10], atol=1e-6 * np.abs(few).max())
