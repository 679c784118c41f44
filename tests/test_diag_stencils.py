"""Divergence of cell values in the stencil of the code that receives them."""

from __future__ import annotations

import itertools
import json

import numpy as np
import pytest

import fieldmover as fm
from fieldmover.diagnostics import diagnose, stencil_divergence
from fieldmover.errors import FieldError, GridError
from fieldmover.projection.cells import project_cells
from tests import earth

SEAMS = [(False, False, False), (True, True, True), (True, False, True)]


def box(periodic=(False,) * 3):
    return fm.cartesian_grid(np.linspace(0, 1, 6), np.linspace(0, 2.4, 7), np.linspace(0, 0.7, 5), periodic=periodic)


def terms_at(point, stencil):
    """What the stencil adds up at a point: axis, sign and weight of each cell."""
    low, high, rests = (-1, 1, [(0, 0)]) if stencil == "central" else (0, 1, list(itertools.product((0, 1), repeat=2)))
    for axis, (shift, sign), rest in itertools.product(range(3), ((low, -1), (high, 1)), rests):
        cell = list(point)
        cell[axis] += shift
        for d, more in zip([d for d in range(3) if d != axis], rest, strict=True):
            cell[d] += more
        yield axis, sign / len(rests) / (high - low), tuple(cell)


def by_loops(grid, b, stencil):
    """Point by point: |divergence|, sizes of its terms, mean square of the cells touched, the point."""
    steps = [float(q[1] - q[0]) for q in grid.nodes]
    found = []
    for point in itertools.product(*(range(n) for n in grid.shape)):
        terms = list(terms_at(point, stencil))
        beyond = [
            not seam and not 0 <= c < n
            for _, _, cell in terms
            for c, n, seam in zip(cell, grid.shape, grid.periodic, strict=True)
        ]
        if any(beyond):
            continue
        wrapped = [tuple(c % n for c, n in zip(cell, grid.shape, strict=True)) for _, _, cell in terms]
        values = [w / steps[axis] * b[(axis, *cell)] for (axis, w, _), cell in zip(terms, wrapped, strict=True)]
        square = np.mean([(b[(slice(None), *cell)] ** 2).sum() for cell in wrapped])
        found.append((abs(sum(values)), sum(map(abs, values)), square, point))
    return found


@pytest.mark.parametrize("stencil", ["central", "corners"])
@pytest.mark.parametrize("periodic", SEAMS, ids=["walls", "seams", "both"])
def test_figures_of_a_rough_field_against_loops(stencil, periodic):
    grid = box(periodic)
    b = np.random.default_rng(3).normal(size=(3, *grid.shape))
    found = stencil_divergence(grid, b, stencil)
    *columns, points = zip(*by_loops(grid, b, stencil), strict=True)
    net, size, square = (np.array(column) for column in columns)
    h3 = float(np.prod([q[1] - q[0] for q in grid.nodes]))
    for norms, values in ((found.relative, net / size), (found.scaled, np.cbrt(h3) * net / np.sqrt(square))):
        np.testing.assert_allclose(
            (norms.linf, norms.l1, norms.l2), (values.max(), values.mean(), np.sqrt((values**2).mean())), rtol=1e-12
        )
    assert found.points == len(points)
    np.testing.assert_allclose(found.net_flux, net.max() * h3, rtol=1e-12)
    assert found.worst == points[int(np.argmax(net / size))]
    side = 0.5 if stencil == "central" else 1.0
    steps = np.array([q[1] - q[0] for q in grid.nodes])
    np.testing.assert_allclose(found.position, (np.array(found.worst) + side) * steps, rtol=1e-12)
    assert json.loads(json.dumps(found.as_dict(), allow_nan=False))["scaled"]["l1"] == found.scaled.l1


@pytest.mark.parametrize("stencil", ["central", "corners"])
@pytest.mark.parametrize("periodic", SEAMS, ids=["walls", "seams", "both"])
def test_what_is_clean_in_one_stencil_is_not_in_the_other(stencil, periodic):
    grid = box(periodic)
    clean, _ = project_cells(grid, np.random.default_rng(4).normal(size=(3, *grid.shape)), stencil)
    assert stencil_divergence(grid, clean, stencil).relative.linf < 1e-13
    other = "corners" if stencil == "central" else "central"
    assert stencil_divergence(grid, clean, other).relative.l1 > 1e-2


def test_the_earths_field_is_not_free_of_differences():
    """Exact samples of a field without divergence: by central differences of the 16^3 nodes of the box h |div B| / |B|
    is 1.72e-4, the error of the measurement itself (worked out beforehand with SciPy alone)."""
    q = [np.linspace(low, high, 16) for low, high in earth.BOX]
    edges = [np.append(c - (c[1] - c[0]) / 2, c[-1] + (c[1] - c[0]) / 2) for c in q]
    grid = fm.cartesian_grid(*edges)
    b = np.stack(earth.EARTH.b(*grid.centres()))
    found = stencil_divergence(grid, b)
    np.testing.assert_allclose(found.scaled.linf, 1.72e-4, rtol=0.05)
    # The balance of the faces of the same field has no such error.
    flux = fm.curl(fm.potential_from_function(grid, earth.EARTH.a))
    assert diagnose(flux).divergence.linf < 1e-13


def test_a_value_that_is_not_finite_is_worst():
    b = np.ones((3, *box().shape))
    b[0, 2, 3, 1] = np.nan
    found = stencil_divergence(box(), b)
    assert found.worst == (1, 3, 1)
    assert found.as_dict()["linf"] is None


def test_no_field_has_no_divergence():
    found = stencil_divergence(box(), np.zeros((3, *box().shape)))
    assert found.relative.linf == found.scaled.linf == 0


@pytest.mark.parametrize(
    ("grid", "shape", "words"),
    [
        (lambda: fm.cartesian_grid([0, 1, 3, 4], [0, 1, 2, 3], [0, 1, 2, 3]), None, "expected equal ones"),
        (lambda: fm.cylindrical_grid([1, 2, 3, 4], [0, 1, 2, 3], [0, 1, 2, 3]), None, "expected a Cartesian grid"),
        (lambda: fm.cartesian_grid([0, 1, 2], [0, 1, 2, 3], [0, 1, 2, 3]), None, "at least 3 between walls"),
        (box, (3, 5, 6, 5), r"shape \(3, 5, 6, 5\), expected \(3, 5, 6, 4\)"),
    ],
)
def test_what_has_no_such_divergence(grid, shape, words):
    made = grid()
    with pytest.raises((FieldError, GridError), match=words):
        stencil_divergence(made, np.ones(shape or (3, *made.shape)))
