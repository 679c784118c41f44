"""Sharp fields: what `order="limited"` promises beside orders 1 and 3.

The sheet is a triangle wave of the potential, |B| = 1 with the direction reversed from stripe to stripe: a current
sheet as in textbooks (common practice, no source). The bounds are those of Zalesak (1979), no new extrema, with the
round-off of 2 % that cell averages of two components need.
"""

from __future__ import annotations

import numpy as np
import pytest

import fieldmover as fm
from tests import cases
from tests.cases import largest_error
from tests.fields import WAVE

TURN = 0.5


def stripes(x, y, z, slope):
    s = x * np.cos(0.3) + y * np.sin(0.3) + slope * z
    return np.abs((2 * s + 0.37) % 2 - 1) / 2


def flux_of_stripes(grid, slope):
    """Fluxes of A = (0, 0, stripes), node values integrated along z by the trapezoidal rule."""
    x, y, z = grid.node_positions()
    a = stripes(x, y, z, slope)
    edges = [np.zeros(grid.edge_shape(d)) for d in range(3)]
    edges[2] = 0.5 * (a[..., 1:] + a[..., :-1]) * np.diff(z, axis=2)
    return fm.curl(fm.EdgePotential(grid, tuple(edges)))


def mean_of_faces(flux):
    """Normal components at cell centres, the mean of two faces: no spline, whose ripples would be counted too."""
    means = []
    for axis, (face, area) in enumerate(zip(flux.faces, flux.grid.face_areas(), strict=True)):
        normal = np.moveaxis(face / area, axis, 0)
        means.append(np.moveaxis(0.5 * (normal[1:] + normal[:-1]), 0, axis))
    return np.stack(means)


def turned(x, y, z):
    c, s = np.cos(TURN), np.sin(TURN)
    return c * x - s * y, s * x + c * y, z + 0 * x


@pytest.fixture(scope="module", params=["2-D", "3-D"])
def moved(request):
    n, layers, half = (64, 3, 0.1) if request.param == "2-D" else (48, 28, 0.6)
    slope = 0.0 if request.param == "2-D" else 0.4
    x = np.linspace(-1.2, 1.2, n + 1)
    source = fm.cartesian_grid(x, x, np.linspace(-half, half, layers + 1))
    q = np.linspace(-0.7, 0.7, int(0.6 * n) + 1)
    target = fm.warped_grid(q, q, np.linspace(-half / 2, half / 2, layers + 1), turned)
    flux = flux_of_stripes(source, slope)
    fields = {order: mean_of_faces(fm.move_flux(flux, target, order)) for order in (1, 3, "limited")}
    return fields, mean_of_faces(flux_of_stripes(target, slope)), fm.move_flux(flux, target, "limited")


def test_no_overshoot(moved):
    fields, exact, _ = moved

    def over(b):
        return np.sqrt((b**2).sum(axis=0)).max() / np.sqrt((exact**2).sum(axis=0)).max() - 1

    assert over(fields["limited"]) < 0.02
    assert over(fields[3]) > 0.08  # the case is sharp enough to tell


def test_less_energy_is_lost_than_at_order_1(moved):
    fields, exact, _ = moved
    lost = {order: 1 - (b**2).sum() / (exact**2).sum() for order, b in fields.items()}
    assert lost[1] > 0.02
    assert 0 < lost["limited"] < 0.8 * lost[1]


def test_smaller_error_than_order_1(moved):
    fields, exact, _ = moved
    error = {order: np.abs(b - exact).mean() for order, b in fields.items()}
    assert error["limited"] < 0.72 * error[1]


def test_no_divergence(moved):
    assert np.abs(fm.divergence(moved[2]).cells).max() == 0


@pytest.mark.parametrize("n", [16, 32])
@pytest.mark.parametrize("source", [cases.wedge, cases.sphere], ids=["wedge", "sphere"])
def test_smooth_fields_are_moved_as_at_order_3(source, n):
    grid, target = source(n), cases.box_inside(n)
    flux = fm.curl(fm.potential_from_function(grid, WAVE.a))
    exact = fm.curl(fm.potential_from_function(target, WAVE.a)).faces
    limited, cubic = (largest_error(fm.move_flux(flux, target, order), exact) for order in ("limited", 3))
    assert limited < 1.1 * cubic
