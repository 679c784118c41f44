"""Closed walls, helicity of potentials, comparison of two fields on one grid, sums over the gas."""

from __future__ import annotations

import math

import numpy as np
import pytest

import fieldmover as fm
from fieldmover.diagnostics import (
    closed_walls,
    compare_fluxes,
    compare_vectors,
    diagnose,
    fluid_sums,
    helicity,
)
from fieldmover.errors import FieldError
from fieldmover.forms.incidence import d0
from tests import earth, fields
from tests.test_diagnostics import GRIDS, TURN, potential, solenoidal, sphere

# -- Walls, caps, discs --------------------------------------------------------------------------------------


def _charge_field(charge):
    def b(x, y, z):
        factor = charge / (4 * np.pi) / np.sqrt(x * x + y * y + z * z) ** 3
        return factor * x, factor * y, factor * z

    return b


def test_the_charge_of_a_hole():
    """A point charge has the same flux through every sphere round it (Gauss)."""
    inner, outer = closed_walls(fm.flux_from_function(sphere(4, 24, 32), _charge_field(-2.5)))
    for wall in (inner, outer):
        np.testing.assert_allclose((wall.net, wall.gross, wall.north), (-2.5, 2.5, -1.25), rtol=1e-12)
        np.testing.assert_allclose(wall.relative, -1, rtol=1e-14)


def _torus(a, b, c):
    R = 2 + a * np.cos(b)
    return R * np.cos(c), R * np.sin(c), -a * np.sin(b)


def test_which_walls_are_closed():
    angle = np.linspace(0, TURN, 9)
    hollow = fm.warped_grid([0.5, 1.0], angle, angle, _torus, periodic=(False, True, True))
    seams, poles = (False, True, True), ("low", None, None)
    full = fm.warped_grid([0, 1.0], angle, angle, _torus, seams, poles)
    assert all(wall is not None for wall in closed_walls(solenoidal(hollow)))
    inner, outer = closed_walls(solenoidal(full))
    assert inner is None
    assert abs(outer.relative) < 1e-14
    for kind in ("box", "periodic box", "cylinder", "ring", "wedge"):
        assert closed_walls(solenoidal(GRIDS[kind]())) == (None, None)


def test_the_earths_hemisphere_flux():
    grid = fm.spherical_grid(
        [earth.RADIUS, 9000.0, 2 * earth.RADIUS], np.linspace(0, np.pi, 25), np.linspace(0, TURN, 49)
    )
    found = diagnose(solenoidal(grid, earth.EARTH))
    for wall, radius in ((found.inner_wall, earth.RADIUS), (found.outer_wall, 2 * earth.RADIUS)):
        np.testing.assert_allclose(wall.north, earth.HEMISPHERE_FLUX[radius], rtol=1e-6)
        assert abs(wall.relative) < 1e-14


def test_the_equator_between_nodes():
    """Through the northern half of a sphere a unit dipole sends 2 pi / r (by hand)."""
    found = diagnose(solenoidal(sphere(2, 33, 8), fields.dipole())).outer_wall
    np.testing.assert_allclose(found.north, np.pi, rtol=2e-5)


# -- Helicity ------------------------------------------------------------------------------------------------


def check_helicity(potential_on, exact, sizes, ceiling):
    errors = [abs(helicity(potential_on(n)).value / exact - 1) for n in sizes]
    orders = np.log2(np.divide(errors[:-1], errors[1:]))
    assert ((orders > 1.8) & (orders < 2.2)).all(), f"errors {errors}, orders {orders}"
    assert errors[-1] < ceiling


def even_ball(n, n_phi, radius):
    return fm.spherical_grid(
        np.linspace(1e-3, radius, n + 1), np.linspace(0, np.pi, n + 1), np.linspace(0, TURN, n_phi + 1)
    )


def test_helicity_of_abc_flow():
    """Its own curl: helicity = int B^2 = 16 pi^3 (Dombre et al., J. Fluid Mech. 167, 353, 1986)."""

    def on(n):
        q = np.linspace(0, TURN, n + 1)
        return potential(fm.cartesian_grid(q, q, q, periodic=(True,) * 3), fields.ABC)

    check_helicity(on, fields.ABC_SQUARE, (8, 16, 32), 1e-2)
    assert helicity(on(8)).wall_flux == 0


def test_helicity_of_a_spheromak():
    """Chandrasekhar & Kendall, ApJ 126, 457 (1957): int B^2 / alpha, as curl B = alpha B; closed at r = 1."""

    def on(n):
        return potential(even_ball(n, 8, 1.0), fields.SPHEROMAK)

    check_helicity(on, fields.SPHEROMAK_SQUARE / fields.SPHEROMAK_ALPHA, (12, 24, 48), 1e-2)
    assert helicity(on(12)).wall_flux < 1e-6  # through the hole


def test_integral_of_a_dot_b_of_the_hopf_field():
    """Kamchatnov, Sov. Phys. JETP 55, 69 (1982), within r = 2 only, so it depends on the gauge."""

    def on(n):
        return potential(even_ball(n, 2 * n, 2.0), fields.HOPF)

    check_helicity(on, 0.857621510067353, (12, 24, 48), 1e-2)
    assert helicity(on(12)).wall_flux > 1e-2


def test_relative_helicity_of_a_lundquist_cylinder():
    """2 pi J1(alpha)^2 / alpha per length, in print 0.70 B^2 R^3: DeVore, ApJ 539, 944 (2000; from memory).

    The reference is the uniform field of equal axial flux; adding the gradient of 0.7 z must not matter.
    """
    mean = fields.LUNDQUIST_AXIAL_FLUX / np.pi
    grid = fm.cylindrical_grid(np.linspace(0, 1, 41), np.linspace(0, TURN, 9), np.linspace(0, 1, 3))
    reference = potential(grid, fields.uniform(0, 0, mean))

    def shifted(x, y, z):
        ax, ay, az = fields.LUNDQUIST.a(x, y, z)
        return ax, ay, az + 0.7

    exact = fields.LUNDQUIST_SQUARE / fields.LUNDQUIST_ALPHA
    pot, other = (fm.potential_from_function(grid, a) for a in (fields.LUNDQUIST.a, shifted))
    found = helicity(pot, reference).value
    np.testing.assert_allclose(found, exact, rtol=2e-3)
    np.testing.assert_allclose(helicity(other, reference).value, found, rtol=1e-7)
    assert abs(helicity(other).value - helicity(pot).value) > 0.5


def _ring(x, y, z):
    """B_phi = (1 - d^2/b^2)^2 within d < b = 0.3 of the circle of radius 1."""
    rho = np.hypot(x, y)
    inside = np.maximum(1 - ((rho - 1) ** 2 + z**2) / 0.09, 0.0)
    around = inside**2 / np.where(rho == 0, 1.0, rho)
    return -around * y, around * x, 0 * z


def _linked_rings(x, y, z):
    x1, y1, z1 = _ring(x, y, z)
    x2, y2, z2 = _ring(x - 1, z, -y)
    return x1 + x2, y1 - z2, z1 + y2


def _periodic_potential(flux):
    """Potential of a periodic flux without mean by fast Fourier transforms of the differences."""
    hat = [np.fft.fftn(f[:n, :n, :n]) for f, n in zip(flux.faces, flux.grid.shape, strict=True)]
    n = flux.grid.shape[0]
    step = np.exp(2j * np.pi * np.fft.fftfreq(n)) - 1
    D = [step[:, None, None], step[None, :, None], step[None, None, :]]
    size = sum(np.abs(d) ** 2 for d in D)
    size[0, 0, 0] = 1.0
    edges = []
    for d in range(3):
        a, b = (d + 1) % 3, (d + 2) % 3
        edge = np.fft.ifftn(-(D[a].conj() * hat[b] - D[b].conj() * hat[a]) / size).real
        edges.append(np.pad(edge, [(0, int(e != d)) for e in range(3)], mode="wrap"))
    return fm.EdgePotential(flux.grid, tuple(edges))


def test_helicity_of_two_linked_rings():
    """Moffatt, J. Fluid Mech. 35, 117 (1969): 2 n Phi1 Phi2 for linking number n; -1 here, Phi = pi b^2 / 3.

    Four cells across a ring, yet right but for the quadrature of the fluxes: linking knows no metric.
    """
    q = np.linspace(-2, 3, 33)
    grid = fm.cartesian_grid(q, q - 0.5, q - 0.5, periodic=(True,) * 3)
    pot = _periodic_potential(fm.flux_from_function(grid, _linked_rings))
    np.testing.assert_allclose(helicity(pot).value, -2 * (np.pi * 0.3**2 / 3) ** 2, rtol=2e-4)


@pytest.mark.parametrize("kind", GRIDS)
def test_helicity_does_not_depend_on_the_gauge_inside_closed_walls(kind):
    """The discrete product rule: exact to round-off on rough fields, on any grid."""
    grid = GRIDS[kind]()
    rng = np.random.default_rng(3)
    chi = _closed(grid, rng.normal(size=grid.node_shape()))
    edges = [np.zeros(grid.edge_shape(d)) for d in range(3)]
    for d, edge in enumerate(edges):
        inner = tuple(slice(1, -1) if e != d else slice(None) for e in range(3))
        edge[inner] = rng.normal(size=edge[inner].shape)
    pot = fm.EdgePotential(grid, tuple(edges))  # tangential parts vanish on all walls: no flux through them
    gauged = fm.EdgePotential(grid, tuple(a + g for a, g in zip(edges, d0(chi), strict=True)))
    one, other = helicity(pot), helicity(gauged)
    assert one.wall_flux == 0
    assert abs(one.value - other.value) < 1e-12 * np.prod(grid.shape)
    assert abs(one.value) > 1e-3


def _closed(grid, chi):
    """Make a node function close at seams and be one number per point of a pole."""
    for axis, ring in enumerate(grid.ring_axis):
        for end in grid.pole_ends(axis):
            index = [slice(None)] * 3
            index[axis] = end
            chi[tuple(index)] = np.take(chi[tuple(index)], [0], axis=ring - (ring > axis))
    for axis, seam in enumerate(grid.periodic):
        if seam:
            chi[tuple(-1 if d == axis else slice(None) for d in range(3))] = np.take(chi, 0, axis=axis)
    return chi


def test_helicity_relative_to_a_field_on_another_grid():
    one, twin, other = (potential(GRIDS[kind]()) for kind in ("box", "box", "periodic box"))
    np.testing.assert_allclose(helicity(one, twin).value, 0, atol=1e-14)  # B - B_ref = 0
    with pytest.raises(FieldError, match="expected nodes as of"):
        helicity(one, other)


# -- Comparison ----------------------------------------------------------------------------------------------
# Definitions: Schrijver et al., Solar Phys. 235, 161 (2006), from memory; answers by hand.


def _rows(figures):
    return tuple(figures.as_dict().values())


def test_a_field_turned_by_ten_degrees():
    c, s = math.cos(math.radians(10)), math.sin(math.radians(10))
    expected = (0.9848077530122081, 0.9848077530122081, 0.1743114854953163, 0.1743114854953163, 1.0)
    b = np.random.default_rng(4).normal(size=(3, 6, 5))
    b[2] = 0
    turned = np.stack([c * b[0] - s * b[1], s * b[0] + c * b[1], b[2]])
    weights = np.random.default_rng(5).uniform(1, 2, (6, 5))
    np.testing.assert_allclose(_rows(compare_vectors(b, turned)), expected, rtol=1e-12)
    np.testing.assert_allclose(_rows(compare_vectors(b, turned, weights)), expected, rtol=1e-12)
    for kind in ("box", "skew"):
        grid = GRIDS[kind]()
        one, other = solenoidal(grid, fields.uniform(1, 0, 0)), solenoidal(grid, fields.uniform(c, s, 0))
        np.testing.assert_allclose(_rows(compare_fluxes(one, other)), expected, rtol=1e-9)


@pytest.mark.parametrize("kind", GRIDS)
def test_a_field_made_a_tenth_stronger(kind):
    flux = solenoidal(GRIDS[kind]())
    stronger = fm.FaceFlux(flux.grid, tuple(1.1 * f for f in flux.faces))
    np.testing.assert_allclose(_rows(compare_fluxes(flux, stronger)), (1, 1, 0.1, 0.1, 1.21), rtol=1e-12)
    np.testing.assert_allclose(_rows(compare_fluxes(flux, flux)), (1, 1, 0, 0, 1), atol=1e-14)


def test_points_without_field_are_left_out_of_means():
    b = np.array([[1.0, 0.0], [0.0, 0.0], [0.0, 0.0]])
    other = np.array([[1.0, 1.0], [0.0, 0.0], [0.0, 0.0]])
    figures = compare_vectors(b, other)
    assert (figures.cosine, figures.mean_error, figures.normalised_error) == (1.0, 0.0, 1.0)
    back = compare_vectors(other, b)
    assert (back.cosine, back.mean_error, back.normalised_error) == (1.0, 0.5, 0.5)
    assert set(compare_vectors(0 * b, other).as_dict().values()) == {None}


def test_fields_that_cannot_be_compared():
    with pytest.raises(FieldError, match="expected nodes in the same places"):
        compare_fluxes(solenoidal(GRIDS["box"]()), solenoidal(GRIDS["ring"]()))
    with pytest.raises(FieldError, match="expected equal"):
        compare_vectors(np.zeros((3, 2)), np.zeros((3, 4)))


# -- Gas -----------------------------------------------------------------------------------------------------


def test_sums_of_orszag_tang():
    """Unit square: kinetic 25/(72 pi), thermal 5/(8 pi) (J. Fluid Mech. 90, 129, 1979; compressible form)."""
    q = np.linspace(0, 1, 17)
    grid = fm.cartesian_grid(q, q, [0, 1], periodic=(True,) * 3)
    x, y, _ = grid.centres()
    rho, p = 25 / (36 * np.pi), 5 / (12 * np.pi)
    mass = fm.CellContent(grid, rho * grid.cell_volumes())
    velocity = np.stack([-np.sin(TURN * y), np.sin(TURN * x), 0 * x])
    found = fluid_sums(mass, velocity, np.full(grid.shape, p / (5 / 3 - 1) / rho))
    np.testing.assert_allclose(found.mass, rho, rtol=1e-14)
    np.testing.assert_allclose(found.kinetic_energy, 25 / (72 * np.pi), rtol=1e-13)
    np.testing.assert_allclose(found.internal_energy, 5 / (8 * np.pi), rtol=1e-13)
    np.testing.assert_allclose(found.momentum, 0, atol=1e-15)


def test_angular_momentum_of_a_turning_cylinder():
    """M R^2 Omega / 2 about its axis; moving as a whole along y at x = 3 adds M x v_y (textbook)."""
    grid = fm.cylindrical_grid(np.linspace(0, 1, 65), np.linspace(0, TURN, 17), [-1, 1])
    x, y, _ = grid.centres()
    mass = fm.CellContent(grid, grid.cell_volumes())
    spin = 0.4
    found = fluid_sums(mass, np.stack([-spin * y, spin * x, 0 * x]))
    m = 2 * np.pi
    np.testing.assert_allclose(found.angular_momentum, (0, 0, m * spin / 2), rtol=2e-3, atol=1e-14)
    np.testing.assert_allclose(found.kinetic_energy, m * spin**2 / 4, rtol=2e-3)
    assert found.internal_energy is None
    box = fm.cartesian_grid([2.9, 3.1], [-0.1, 0.1], [-0.1, 0.1])
    velocity = np.array([0.0, 5.0, 1.0]).reshape(3, 1, 1, 1)
    one = fluid_sums(fm.CellContent(box, np.full((1, 1, 1), 2.0)), velocity)
    np.testing.assert_allclose(one.angular_momentum, (0, -6, 30), atol=1e-14)
    assert one.as_dict()["momentum"] == [0, 10, 2]
    with pytest.raises(FieldError, match="velocity"):
        fluid_sums(mass, np.zeros((2, *grid.shape)))
    with pytest.raises(FieldError, match="internal energy"):
        fluid_sums(mass, energy=np.zeros(3))
