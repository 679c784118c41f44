"""Fluxes and energies of fields from the literature, on grids with walls, seams, poles and an axis.

What holds on any grid is asked for to round-off; what only converges is asked for at its order. Sources of
the figures stand beside them in `fields.py`. Closed forms enter through their vector potential unless a test
says otherwise.
"""

from __future__ import annotations

import numpy as np
import pytest

import fieldmover as fm
from tests import fields, reference


def flux_of(grid, field):
    return fm.curl(fm.potential_from_function(grid, field.a))


def square(flux) -> float:
    """Integral of B^2 over the grid (Heaviside-Lorentz energy is half of it)."""
    return 2 * fm.diagnose(flux).energy


def ball(n, r_low, r_high, spacing=np.linspace):
    """Full sphere of n x n x 2n cells (n even: nodes on the equator)."""
    return fm.spherical_grid(
        spacing(r_low, r_high, n + 1), np.linspace(0, np.pi, n + 1), np.linspace(0, 2 * np.pi, 2 * n + 1)
    )


def cylinder(n, radius, low, high):
    return fm.cylindrical_grid(
        np.linspace(0, radius, n + 1), np.linspace(0, 2 * np.pi, 2 * n + 1), np.linspace(low, high, n + 1)
    )


def check_energy(flux_on, exact, sizes, ceiling):
    """The discrete energy is second-order in the cell, whatever the grid: `flux_on(n)` is refined twofold."""
    errors = [abs(square(flux_on(n)) / exact - 1) for n in sizes]
    orders = np.log2(np.array(errors[:-1]) / np.array(errors[1:]))
    assert ((orders > 1.8) & (orders < 2.3)).all(), f"errors {errors}, orders {orders}"
    assert errors[-1] < ceiling


# -- Sampling and incidence ----------------------------------------------------------------------------------

GRIDS = {
    "box": lambda: fm.cartesian_grid(
        np.linspace(0.6, 1.5, 7), np.geomspace(0.5, 1.1, 6), np.array([-0.3, -0.1, 0.2, 0.3])
    ),
    "cylinder": lambda: cylinder(6, 1.0, -0.4, 0.5),
    "shell": lambda: ball(8, 0.5, 1.0),
}


@pytest.mark.parametrize("kind", GRIDS)
@pytest.mark.parametrize("field", [fields.WAVE, fields.HOPF, fields.SPHEROMAK], ids=lambda f: f.name)
def test_circulations_and_fluxes_of_closed_forms(kind, field):
    """The package takes 4 Gauss points a direction, the reference 6 or 8: they part by some 1e-8 here."""
    grid = GRIDS[kind]()
    edges = reference.circulations(grid, field.a)
    for found, exact in zip(fm.potential_from_function(grid, field.a).edges, edges, strict=True):
        np.testing.assert_allclose(found, exact, atol=1e-7)
    for found, exact in zip(fm.flux_from_function(grid, field.b).faces, reference.fluxes(grid, field.b),
    strict=True):
        np.testing.assert_allclose(found, exact, atol=1e-7)


@pytest.mark.parametrize("kind", GRIDS)
def test_stokes(kind):
    """Circulation of A round a face is the flux of B = curl A through it."""
    grid = GRIDS[kind]()
    exact = reference.fluxes(grid, fields.HOPF.b)
    for found, expected in zip(flux_of(grid, fields.HOPF).faces, exact, strict=True):
        np.testing.assert_allclose(found, expected, atol=1e-7)


def test_incidence_against_loops_over_single_cells():
    rng = np.random.default_rng(1)
    grid = fm.cartesian_grid(np.arange(4.0), np.arange(5.0), np.arange(3.0))
    edges = [rng.normal(size=grid.edge_shape(d)) for d in range(3)]
    flux = fm.curl(fm.EdgePotential(grid, tuple(edges)))
    for found, expected in zip(flux.faces, reference.circulation_round_faces(edges), strict=True):
        np.testing.assert_allclose(found, expected, atol=1e-14)
    rough = fm.FaceFlux(grid, tuple(rng.normal(size=f.shape) for f in flux.faces))
    np.testing.assert_allclose(
        fm.divergence(rough).cells, reference.outflow_by_loops(rough.faces), atol=1e-14
    )
    assert np.abs(fm.divergence(flux).cells).max() < 1e-14


# -- Uniform field on a warped grid --------------------------------------------------------------------------


def _swirl(q1, q2, q3):
    # Two different frequencies: with equal ones the midpoint rule cancels by symmetry and the test proves
    # nothing.
    x = q1 + 0.1 * np.sin(2 * np.pi * q1) * np.sin(2 * np.pi * q2)
    y = q2 + 0.05 * np.sin(4 * np.pi * q1) * np.sin(2 * np.pi * q2)
    return x, y, q3 + 0 * q1


def swirl_grid(n):
    q = np.linspace(0, 1, n + 1)
    return fm.warped_grid(q, q, np.linspace(0, 0.3, 4), _swirl)


def test_a_uniform_field_stays_divergence_free_on_a_warped_grid():
    """Preservation of the free stream: Thomas & Lombard, AIAA J. 17, 1030 (1979)."""
    grid = swirl_grid(16)
    x, y, z = grid.node_positions()
    height = np.diff(z[0, 0])
    flux = fm.curl(fm.potential_from_function(grid, lambda x, y, z: (0 * x, 0 * x, y - 2 * x)))
    # B = (1, 2, 0): the flux through a face is the difference of A_z between its corners times its height.
    a_z = (y - 2 * x)[:, :, 0]
    np.testing.assert_allclose(flux.f1, np.diff(a_z, axis=1)[:, :, None] * height, atol=1e-16)
    np.testing.assert_allclose(flux.f2, -np.diff(a_z, axis=0)[:, :, None] * height, atol=1e-16)
    assert reference.divergence_ratio(flux.faces) < 4e-15


def test_metric_of_the_warped_grid():
    grid = swirl_grid(32)
    # By sympy from the map: its determinant at q = (0.1, 0.3). The map keeps the unit square, so the area is
    # 1.
    jacobian = grid.map.jacobian(np.array(0.1), np.array(0.3), np.array(0.1))
    np.testing.assert_allclose(np.linalg.det(jacobian), 1.3675507240880498, rtol=1e-9)
    np.testing.assert_allclose(grid.cell_volumes().sum(), 0.3, rtol=1e-9)


# -- Dipole and split monopole -------------------------------------------------------------------------------


def test_dipole_flux_through_a_hemisphere():
    grid = ball(12, 1.0, 2.0)
    flux = flux_of(grid, fields.dipole())
    for i, r in enumerate(grid.nodes[0]):
        np.testing.assert_allclose(flux.f1[i, :6].sum(), 2 * np.pi / r, rtol=1e-9)
    assert np.abs(flux.f1.sum(axis=(1, 2))).max() < 1e-14


def test_dipole_energy_converges():
    check_energy(
        lambda n: flux_of(ball(n, 1.0, 2.0), fields.dipole()), fields.DIPOLE_SQUARE_1_2, (8, 16, 32), 2e-3
    )


def _split_monopole(x, y, z):
    """A_phi = (1 - |cos theta|) / (r sin theta), B_r = +-1 / r^2: Michel, ApJ 180, L133 (1973)."""
    r, rho2 = np.sqrt(x * x + y * y + z * z), x * x + y * y
    around = (1 - np.abs(z) / r) / np.where(rho2 == 0, 1.0, rho2)
    return -around * y, around * x, 0 * z


@pytest.mark.parametrize("n", [8, 9], ids=["nodes on the sheet", "cells across the sheet"])
def test_a_current_sheet_makes_no_monopoles(n):
    grid = ball(n, 1.0, 2.0)
    flux = fm.curl(fm.potential_from_function(grid, _split_monopole))
    assert reference.divergence_ratio(flux.faces) < 4e-15
    north = flux.f1[:, : n // 2].sum(axis=(1, 2))
    # Whole faces north of the sheet reach down to theta = (n // 2) pi / n.
    np.testing.assert_allclose(north, 2 * np.pi * (1 - np.cos(np.pi * (n // 2) / n)), rtol=1e-12)


def test_split_monopole_energy_converges():
    # int B^2 over 1 < r < 2 is 2 pi, by hand.
    check_energy(
        lambda n: fm.curl(fm.potential_from_function(ball(n, 1.0, 2.0), _split_monopole)),
        2 * np.pi, (8, 16, 32), 1e-3,
    )  # fmt: skip


# -- Periodic box --------------------------------------------------------------------------------------------


def abc_flux(n):
    q = np.linspace(0, 2 * np.pi, n + 1)
    return flux_of(fm.cartesian_grid(q, q, q, periodic=(True, True, True)), fields.ABC)


def test_abc_fluxes():
    flux = abc_flux(16)
    np.testing.assert_allclose(flux.f3[:4, :4, 0].sum(), fields.ABC_FLUX_Z0, rtol=1e-10)
    for axis, f in enumerate(flux.faces):
        through_planes = f.sum(axis=tuple(d for d in range(3) if d != axis))
        assert np.abs(through_planes).max() < 1e-13  # the mean field is 0


def test_abc_energy_converges():
    check_energy(abc_flux, fields.ABC_SQUARE, (8, 16, 32), 5e-3)


# -- Axis and pole -------------------------------------------------------------------------------------------


def test_lundquist_fluxes():
    flux = flux_of(cylinder(12, 1.0, 0.0, 1.0), fields.LUNDQUIST)
    np.testing.assert_allclose(flux.f3.sum(axis=(0, 1)), fields.LUNDQUIST_AXIAL_FLUX, rtol=1e-10)
    np.testing.assert_allclose(flux.f2.sum(axis=(0, 2)), fields.LUNDQUIST_AZIMUTHAL_FLUX, rtol=1e-10)


def test_lundquist_energy_converges():
    check_energy(
        lambda n: flux_of(cylinder(n, 1.0, 0.0, 1.0), fields.LUNDQUIST), fields.LUNDQUIST_SQUARE, (8, 16, 32),
        2e-3
    )


def test_spheromak_fluxes():
    inner = fm.cylindrical_grid(
        np.linspace(0, fields.SPHEROMAK_AXIS, 9), np.linspace(0, 2 * np.pi, 17), np.linspace(-0.1, 0.1, 3)
    )
    poloidal = flux_of(inner, fields.SPHEROMAK).f3[:, :, 1].sum()
    np.testing.assert_allclose(poloidal, fields.SPHEROMAK_POLOIDAL_FLUX, rtol=1e-10)
    flux = flux_of(ball(16, 1e-3, 1.0), fields.SPHEROMAK)
    # The hole r < 1e-3 misses 4e-9 of the toroidal flux (B_phi grows as r).
    np.testing.assert_allclose(flux.f3.sum(axis=(0, 1)), fields.SPHEROMAK_TOROIDAL_FLUX, rtol=1e-7)
    assert np.abs(flux.f1[-1]).max() < 1e-15  # no flux leaves the sphere


def test_spheromak_energy_converges():
    check_energy(
        lambda n: flux_of(ball(n, 1e-3, 1.0), fields.SPHEROMAK), fields.SPHEROMAK_SQUARE, (8, 16, 32), 1e-2
    )


def test_hopf_flux_through_the_unit_disc():
    flux = flux_of(cylinder(10, 1.0, -0.5, 0.5), fields.HOPF)
    np.testing.assert_allclose(flux.f3[:, :, 5].sum(), fields.HOPF_DISC_FLUX, rtol=1e-9)


@pytest.mark.parametrize("radius", fields.HOPF_ENERGY)
def test_hopf_energy_converges(radius):
    # The grid leaves out r < 0.01, where |B| = HOPF_SCALE to 1e-4.
    hole = 4 * np.pi / 3 * 0.01**3 * fields.HOPF_SCALE**2
    check_energy(
        lambda n: flux_of(ball(n, 0.01, radius), fields.HOPF),
        2 * fields.HOPF_ENERGY[radius] - hole, (16, 32, 64), 1e-2,
    )  # fmt: skip
