"""Cleaning of values at cell centres against stencils written out as matrices."""

from __future__ import annotations

from itertools import product

import numpy as np
import pytest

import fieldmover as fm
from fieldmover import compute
from fieldmover.projection import project_cells

LENGTHS = (1.0, 1.3, 0.8)


def box(shape, periodic):
    return fm.cartesian_grid(
        *[np.linspace(0, d, n + 1) for d, n in zip(LENGTHS, shape, strict=True)], periodic=periodic
    )


def noise(shape, seed=0):
    return np.random.default_rng(seed).normal(size=(3, *shape))


def divergence(b, stencil, periodic):
    """Of all points in a periodic box, less those whose stencil reaches through a wall."""
    total = 0
    for axis in range(3):
        x, step = b[axis], LENGTHS[axis] / b.shape[axis + 1]
        for d in range(3):
            after, before = np.roll(x, -1, d), np.roll(x, 1, d)
            if stencil == "central":
                x = (after - before) / (2 * step) if d == axis else x
            else:
                x = (after - x) / step if d == axis else (x + after) / 2
        total = total + x
    inner = slice(1, -1) if stencil == "central" else slice(None, -1)
    return total[tuple(slice(None) if seam else inner for seam in periodic)]


SEAMS = list(product((True, False), repeat=3))


@pytest.mark.parametrize("shape", [(4, 5, 6), (3, 6, 4), (4, 4, 4)], ids=str)
@pytest.mark.parametrize("periodic", SEAMS, ids=str)
@pytest.mark.parametrize("stencil", ["central", "corners"])
def test_least_change(stencil, periodic, shape):
    b = noise(shape)
    matrix = np.array([divergence(unit.reshape(b.shape), stencil, periodic).ravel() for unit in np.eye(b.size)]).T
    expected = b.ravel() - np.linalg.pinv(matrix, rcond=1e-11) @ (matrix @ b.ravel())
    clean, record = project_cells(box(shape, periodic), b, stencil)
    np.testing.assert_allclose(clean.ravel(), expected, atol=1e-13)
    assert np.abs(divergence(clean, stencil, periodic)).max() < 5e-14  # sums of up to 24 terms of size 10
    assert record.method == "direct"
    assert record.divergence_after.linf < 5e-15
    assert record.energy_removed == pytest.approx(record.energy_of_change, rel=1e-12)
    volume = np.prod(LENGTHS) / np.prod(shape)
    assert record.energy_before == pytest.approx(0.5 * volume * (b**2).sum(), rel=1e-13)
    assert record.rms_change == pytest.approx(np.sqrt(((clean - b) ** 2).sum() / (b**2).sum()), rel=1e-12)


@pytest.mark.parametrize("stencil", ["central", "corners"])
def test_round_off_on_larger_grids(stencil):
    grid, b = box((40, 33, 36), (True, False, True)), noise((40, 33, 36))
    clean, record = project_cells(grid, b, stencil)
    found = np.abs(divergence(clean, stencil, grid.periodic)).max()
    assert found < 1e-14 * np.abs(divergence(b, stencil, grid.periodic)).max()
    again, record = project_cells(grid, clean, stencil)
    assert np.array_equal(again, clean)
    assert record.method == "none"


@pytest.mark.parametrize("stencil", ["central", "corners"])
def test_modes_the_stencil_is_blind_to_stay(stencil):
    """Signs that change from cell to cell, along any axis (central), or along two (corners), and the mean."""
    i, j, k = np.indices((6, 4, 8))
    hidden = np.empty((3, 6, 4, 8))
    if stencil == "central":
        hidden[:] = (-1.0) ** i, (-1.0) ** (i + j + k), (-1.0) ** (j + k)
    else:
        hidden[:] = (-1.0) ** (j + k), (-1.0) ** (i + j + k), (-1.0) ** (i + j) * np.sin(k)
    hidden += 3.0
    grid, b = box((6, 4, 8), (True,) * 3), noise((6, 4, 8))
    assert project_cells(grid, hidden, stencil)[1].method == "none"
    clean, both = project_cells(grid, b, stencil)[0], project_cells(grid, b + hidden, stencil)[0]
    np.testing.assert_allclose(both - clean, hidden, atol=1e-13)


def test_a_plane_of_cells_is_cleaned_in_its_plane():
    grid, b = box((8, 9, 1), (True,) * 3), noise((8, 9, 1))
    clean, _ = project_cells(grid, b)
    assert np.abs(divergence(clean, "central", grid.periodic)).max() < 1e-13
    assert np.array_equal(clean[2], b[2])


def test_same_bits_on_one_and_two_threads():
    before, found = compute.threads(), []
    try:
        for count in (1, 2):
            compute.set_threads(count)
            found.append(project_cells(box((12, 10, 14), (True, False, True)), noise((12, 10, 14)), "corners")[0])
    finally:
        compute.set_threads(before)
    assert np.array_equal(*found)


TORUS = box((4, 4, 4), (True,) * 3)
BAD = {
    "shape": (TORUS, noise((4, 4, 3)), "central", r"shape \(3, 4, 4, 3\), expected \(3, 4, 4, 4\)"),
    "stencil": (TORUS, noise((4, 4, 4)), "edges", "stencil: 'edges', expected one of 'central'"),
    "not a number": (TORUS, np.nan * noise((4, 4, 4)), "central", "192 values are not finite"),
    "few cells": (box((4, 2, 4), (False,) * 3), noise((4, 2, 4)), "central", "along y: 2, expected at least 3"),
    "uneven": (
        fm.cartesian_grid([0, 1, 2], [0, 1, 3], [0, 1, 2]), noise((2, 2, 2)), "corners",
        "along y: steps from 1 to 2, expected equal",
    ),
    "sphere": (fm.spherical_grid([1, 2], [1, 2], [0, 1]), noise((1, 1, 1)), "central", "cells of a spherical grid"),
}  # fmt: skip


@pytest.mark.parametrize(("grid", "b", "stencil", "message"), BAD.values(), ids=BAD)
def test_bad_input_is_named(grid, b, stencil, message):
    with pytest.raises(fm.errors.DataError, match=message):
        project_cells(grid, b, stencil)
