"""Weights and volumes of grids without closed forms beside those of the same grid with them."""

from __future__ import annotations

import numpy as np
import pytest

import fieldmover as fm
from fieldmover import compute
from fieldmover.forms.measures import face_conductances, near_volumes
from tests.cases import bent


def shell(n):
    return fm.spherical_grid(
        np.geomspace(1, 3, n + 1), np.pi * np.linspace(0, 1, n + 1), 2 * np.pi * np.linspace(0, 1, 2 * n + 1)
    )


def pipe(n):
    return fm.cylindrical_grid(
        np.linspace(0, 2, n + 1), 2 * np.pi * np.linspace(0, 1, 2 * n + 1), np.linspace(0, 1, n) ** 2
    )


def wedge(n):
    return fm.spherical_grid(np.linspace(1, 2, n + 1), np.linspace(0.5, 1.5, n + 1), np.linspace(0, 1, n + 1))


def box(n):
    x = np.linspace(0, 1, n + 1)
    return fm.cartesian_grid(x**2, x, np.expm1(x))


def warped(grid):
    """The same cells, by a map that says nothing of itself."""
    return fm.warped_grid(*grid.nodes, grid.map.to_cartesian, periodic=grid.periodic, poles=grid.poles)


def largest_difference(found, expected):
    return max(np.abs(a - b)[b > 0].max() / np.abs(b).max() for a, b in zip(found, expected, strict=True))


@pytest.mark.parametrize("make", [shell, pipe, wedge])
def test_conductances_and_volumes_of_warped_grids_converge_at_second_order(make):
    errors = []
    for n in (8, 16, 32):
        grid, other = make(n), warped(make(n))
        rows = slice(1, n)
        errors.append([
            largest_difference(face_conductances(other), face_conductances(grid)),
            largest_difference([near_volumes(other, rows)], [near_volumes(grid, rows)]),
        ])  # fmt: skip
    orders = np.log2(np.divide(errors[:-1], errors[1:]))
    assert orders[-1] == pytest.approx(2, abs=0.25)
    assert max(errors[-1]) < 1e-2


def test_they_are_exact_on_boxes():
    grid, other = box(5), warped(box(5))
    assert largest_difference(face_conductances(other), face_conductances(grid)) < 1e-14
    assert largest_difference([near_volumes(other, slice(2, 4))], [grid.cell_volumes()[2:4]]) < 1e-14


def test_collapsed_faces_have_none_and_seams_agree():
    for grid in (warped(shell(4)), warped(pipe(4))):
        g = face_conductances(grid)
        for axis in range(3):
            turned = np.moveaxis(g[axis], axis, 0)
            assert not turned[grid.pole_ends(axis)].any()
            if grid.periodic[axis]:
                assert np.array_equal(turned[0], turned[-1])
        assert all((a >= 0).all() and np.isfinite(a).all() for a in g)


def test_same_bits_on_one_and_two_threads():
    before, found = compute.threads(), []
    try:
        for count in (1, 2):
            compute.set_threads(count)
            found.append(face_conductances(bent(40)))
    finally:
        compute.set_threads(before)
    assert all(np.array_equal(a, b) for a, b in zip(*found, strict=True))


@pytest.mark.filterwarnings("error")
def test_faces_between_two_poles_have_no_weight():
    """One cell from pole to pole: the corners of its faces along the ring all lie on the axis."""

    def spindle(r, t, p):
        return r * t * (1 - t) * np.cos(p), r * t * (1 - t) * np.sin(p), r * (1 - 2 * t)

    turn = np.linspace(0, 2 * np.pi, 7)
    grid = fm.warped_grid([1, 2, 3], [0, 1], turn, spindle, (False, False, True), (None, "both", None))
    assert not face_conductances(grid)[2].any()
