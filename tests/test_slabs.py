"""Moves in slabs give the bits of the whole move, and refuse what they cannot do before the first slab."""

from __future__ import annotations

import numpy as np
import pytest

import fieldmover as fm
from fieldmover.errors import FieldError, GridError
from fieldmover.interpolation.slabs import move_flux_in_slabs
from tests.cases import bent, brick, pipe, sphere
from tests.fields import WAVE


def evenly(*ends_and_cells: tuple[float, float, int]) -> list[np.ndarray]:
    return [np.linspace(low, high, n + 1) for low, high, n in ends_and_cells]


off_axis = fm.cartesian_grid(*evenly((1.3, 2.2, 40), (-0.7, 0.6, 9), (-0.6, 0.7, 11)))
on_axis = fm.cartesian_grid(*evenly((-0.5, 0.6, 39), (-0.6, 0.7, 8), (1.2, 1.9, 7)))
in_the_middle = fm.cartesian_grid(*evenly((0.6, 1.4, 33), (-0.5, 0.6, 8), (-0.5, 0.6, 9)))
ball = fm.spherical_grid(*evenly((0.3, 0.9, 40), (0, np.pi, 8), (0, 2 * np.pi, 12)))
drum = fm.cylindrical_grid(*evenly((0, 0.8, 35), (0, 2 * np.pi, 10), (-0.6, 0.6, 6)))
ring = fm.warped_grid(
    *evenly((0, 2 * np.pi, 34), (0.3, 0.9, 6), (-0.5, 0.5, 5)),
    lambda phi, r, z: (r * np.sin(phi), r * np.cos(phi), z),
    (True, False, False),
)
finer = fm.cartesian_grid(*[np.interp(np.linspace(0, 12, n + 1), np.arange(13.0), brick(12).nodes[d])
                            for d, n in enumerate((50, 17, 15))])  # fmt: skip


@pytest.mark.parametrize(
    ("source", "target", "order", "rows"),
    [
        (sphere(8), off_axis, 3, 16),
        (sphere(8), off_axis, 5, 1),
        (sphere(6), off_axis, 1, 17),
        (sphere(8), on_axis, 3, 16),
        (bent(12), in_the_middle, 3, 16),
        (brick(12), ball, 3, 16),
        (brick(12), drum, 3, 16),
        (brick(12), ring, 3, 16),
        (brick(12), finer, 3, 16),
        (pipe(8), fm.cylindrical_grid(*evenly((0, 2, 48), (0, 2 * np.pi, 16), (0, 2, 8))), 3, 16),
    ],
    ids=["off axis", "order 5", "order 1", "on axis", "warped", "poles", "drum", "ring", "same coordinates", "restart"],
)
def test_same_bits_as_in_one_piece(source, target, order, rows):
    flux = fm.curl(fm.potential_from_function(source, WAVE.a))
    whole = fm.move_flux(flux, target, order, outside="refuse")
    count, last = 0, None
    for cells, part in move_flux_in_slabs(flux, target, order, rows):
        assert cells.start == count
        for axis, (f, g) in enumerate(zip(part.faces, whole.faces, strict=True)):
            np.testing.assert_array_equal(f, g[cells.start : cells.stop + (axis == 0)])
        assert np.abs(fm.divergence(part).cells).max() == 0.0
        if last is not None:
            np.testing.assert_array_equal(part.f1[0], last.f1[-1])
        count, last = cells.stop, part
    assert count == target.shape[0]
    assert cells.start > 0


def test_periodic_box_with_a_mean_field():
    nodes = np.linspace(0, 1, 17)
    source = fm.cartesian_grid(nodes, nodes, nodes, periodic=(True, True, True))
    turn = 2 * np.pi
    flux = fm.flux_from_function(source, lambda x, y, z: (0.3 + np.sin(turn * y), 0.1 * np.cos(turn * z), 1 + 0 * x))
    flux, _ = fm.project(flux)
    shifted = [np.linspace(low, low + 1, n + 1) for low, n in ((0.1, 40), (0.2, 8), (0.3, 12))]
    for target in (
        fm.cartesian_grid(*shifted, periodic=(True, True, True)),
        fm.placed(fm.cartesian_grid(*evenly((0.3, 0.6, 40), (0.3, 0.6, 8), (0.3, 0.6, 8))), (0.01, 0, 0)),
    ):
        whole = fm.move_flux(flux, target)
        for cells, part in move_flux_in_slabs(flux, target):
            for axis, (f, g) in enumerate(zip(part.faces, whole.faces, strict=True)):
                np.testing.assert_array_equal(f, g[cells.start : cells.stop + (axis == 0)])


flux = fm.curl(fm.potential_from_function(brick(6), WAVE.a))


@pytest.mark.parametrize(
    ("target", "options", "error", "message"),
    [
        (fm.cartesian_grid(*evenly((-1, 2, 20), (0, 1, 4), (0, 1, 4))), {}, FieldError, "leaves .*: 64 of its 320"),
        (ball, {"order": "limited"}, FieldError, "'limited' looks around"),
        (ball, {"order": 2}, FieldError, "order: 2"),
        (ball, {"rows": 0}, FieldError, "rows: 0, expected at least 1"),
        (
            fm.warped_grid(
                *evenly((0, 2 * np.pi, 8), (0, 0.5, 4), (0, 0.5, 4)),
                lambda phi, r, z: (r * np.sin(phi), r * np.cos(phi), z),
                (True, False, False),
                (None, "low", None),
            ),
            {},
            GridError,
            "axis 1 of the target is the ring",
        ),
    ],
    ids=["leaves", "limited", "order", "rows", "ring"],
)
def test_refused_at_the_call(target, options, error, message):
    with pytest.raises(error, match=message):
        move_flux_in_slabs(flux, target, **options)
