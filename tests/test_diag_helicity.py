"""Helicity relative to the potential field, and that field itself."""

from __future__ import annotations

import numpy as np
import pytest

import fieldmover as fm
from fieldmover.diagnostics import helicity, potential_field, relative_helicity
from fieldmover.errors import ChargeError, FieldError
from fieldmover.forms.fields import close_edges
from fieldmover.forms.incidence import d0, d1, d2
from fieldmover.forms.measures import energy, face_conductances
from fieldmover.grids.grid import at
from tests import fields
from tests.test_diagnostics import GRIDS, TURN, solenoidal


def converges(flux_on, exact, sizes, ceiling):
    errors = [abs(relative_helicity(flux_on(n)).value / exact - 1) for n in sizes]
    orders = np.log2(np.divide(errors[:-1], errors[1:]))
    assert ((orders > 1.7) & (orders < 2.3)).all(), f"errors {errors}, orders {orders}"
    assert errors[-1] < ceiling


def test_a_lundquist_cylinder_between_plates():
    """2 pi J1(alpha)^2 / alpha per length, in print 0.70 B^2 R^3: DeVore, ApJ 539, 944 (2000; from memory)."""

    def on(n):
        return solenoidal(
            fm.cylindrical_grid(np.linspace(0, 1, n + 1), np.linspace(0, TURN, 9), np.linspace(0, 1, n // 2 + 1)),
            fields.LUNDQUIST,
        )

    converges(on, fields.LUNDQUIST_SQUARE / fields.LUNDQUIST_ALPHA, (8, 16, 32), 5e-4)


def test_a_spheromak_in_its_ball_and_in_a_box():
    """Chandrasekhar & Kendall, ApJ 126, 457 (1957): int B^2 / alpha; no field leaves the ball, so none is potential."""

    def on(n):
        return solenoidal(
            fm.spherical_grid(np.linspace(1e-3, 1, n + 1), np.linspace(0, np.pi, n + 1), np.linspace(0, TURN, 9)),
            fields.SPHEROMAK,
        )

    converges(on, fields.SPHEROMAK_SQUARE / fields.SPHEROMAK_ALPHA, (10, 20, 40), 3e-3)
    found = relative_helicity(on(10))
    assert found.reference_energy < 1e-6 * found.energy


def test_the_hopf_field_in_an_open_box():
    """Kamchatnov, Sov. Phys. JETP 55, 69 (1982): 1 in all space; what a box of side 12 lacks is small."""
    q = np.sinh(np.linspace(-2.2, 2.2, 49)) * 6 / np.sinh(2.2)
    found = relative_helicity(solenoidal(fm.cartesian_grid(q, q, q), fields.HOPF))
    np.testing.assert_allclose(found.value, 1.0, rtol=2e-2)


def twisted(kind):
    """A flux with walls crossed, seams threaded, and no charge, and its grid."""
    grid = GRIDS[kind]()
    return fm.curl(fm.EdgePotential(grid, tuple(twisted_potential(grid))))


def twisted_potential(grid):
    rng = np.random.default_rng(6)
    edges = [rng.normal(size=grid.edge_shape(d)) for d in range(3)]
    close_edges(grid, edges)
    return edges


@pytest.mark.parametrize("kind", GRIDS)
def test_the_potential_field_on_every_grid(kind):
    """Same walls, no divergence, and orthogonal to every field that keeps walls and seams: none has less energy."""
    flux = twisted(kind)
    grid = flux.grid
    found = potential_field(flux)
    largest = max(float(np.abs(f).max()) for f in flux.faces)
    for axis in range(3):
        if not grid.periodic[axis]:
            for end in (0, -1):
                np.testing.assert_allclose(
                    found.faces[axis][at(axis, end)], flux.faces[axis][at(axis, end)], atol=1e-12 * largest
                )
    assert np.abs(d2(found.faces)).max() < 1e-12 * largest
    loop = [np.zeros(grid.edge_shape(d)) for d in range(3)]
    for d, edge in enumerate(loop):
        inner = tuple(slice(1, -1) if e != d else slice(None) for e in range(3))
        edge[inner] = np.random.default_rng(d).normal(size=edge[inner].shape)
    closed = d1(tuple(loop))
    conductances = face_conductances(grid)
    product = sum(
        float((a * b / np.where(g > 0, g, np.inf))[at(axis, slice(None, -1 if grid.periodic[axis] else None))].sum())
        for axis, (a, b, g) in enumerate(zip(found.faces, closed, conductances, strict=True))
    )
    assert abs(product) < 1e-9 * largest**2 * np.prod(grid.shape)
    energies = [energy(f.faces, conductances, grid.periodic) for f in (found, flux)]
    assert energies[0] < energies[1]


@pytest.mark.parametrize("kind", [kind for kind in GRIDS if kind != "periodic box"])
def test_helicity_of_potential_fields_is_zero_and_thomsons_theorem_holds(kind):
    flux = twisted(kind)
    found, none = relative_helicity(flux), relative_helicity(potential_field(flux))
    assert found.free_energy > 0
    assert abs(none.value) < 1e-9 * max(abs(found.value), 1)
    assert abs(none.free_energy) < 1e-9 * found.energy
    assert found.as_dict()["free_energy"] == found.free_energy


def test_walls_that_carry_next_to_nothing():
    """What rounding leaves of their net flux must not pass for charge."""
    grid = GRIDS["box"]()
    pot = twisted_potential(grid)
    for axis, edge in enumerate(pot):
        for d in range(3):
            if d != axis:
                edge[at(d, 0)] *= 1e-11
                edge[at(d, -1)] *= 1e-11
    gradient = d0(np.random.default_rng(9).normal(size=grid.node_shape()))
    flux = fm.curl(fm.EdgePotential(grid, tuple(a + g for a, g in zip(pot, gradient, strict=True))))
    outward = sum(float(f[at(axis, -1)].sum() - f[at(axis, 0)].sum()) for axis, f in enumerate(flux.faces))
    crossing = sum(float(np.abs(f[at(axis, end)]).sum()) for axis, f in enumerate(flux.faces) for end in (0, -1))
    assert abs(outward) > 1e-12 * crossing  # else this shows nothing
    found = relative_helicity(flux)
    assert 0 < found.reference_energy < 1e-18 * found.energy


def test_a_twist_along_a_seam():
    """B = (0, 0, 1) with a current ring: in a box with ends that meet the seam's flux is the reference's, and the value
    that of the box with plates, where both fields are the same at the ends."""
    q, z = np.linspace(-1, 1, 17), np.linspace(0, 0.5, 5)

    def a(x, y, z):
        return -y / 2, x / 2, ((1 - x**2) * (1 - y**2)) ** 2

    values = [
        relative_helicity(
            fm.curl(fm.potential_from_function(fm.cartesian_grid(q, q, z, (False, False, seam)), a))
        ).value
        for seam in (False, True)
    ]
    np.testing.assert_allclose(values[0], values[1], rtol=1e-10)
    assert values[0] > 0.5


def test_a_field_round_a_ring():
    """B_phi = 1 / R is potential, however the ring is cut; a uniform one along z in addition has no twist either."""
    grid = fm.cylindrical_grid(np.linspace(1, 2, 9), np.linspace(0, TURN, 17), np.linspace(0, 1, 5))
    factors = np.diff(np.log(grid.nodes[0]))[:, None, None] * np.diff(grid.nodes[2])
    flux = fm.FaceFlux(
        grid, (np.zeros(grid.face_shape(0)), factors * np.ones(grid.face_shape(1)), np.zeros(grid.face_shape(2)))
    )
    found = relative_helicity(flux)
    assert abs(found.value) < 1e-12
    assert found.free_energy < 1e-3 * found.energy  # the cells' own 1 / R


def test_fluxes_without_helicity():
    """With divergence, or with mean flux through periodic planes, which no periodic potential has."""
    grid = GRIDS["box"]()
    flux = solenoidal(grid)
    rough = fm.FaceFlux(grid, (flux.f1 + 0.1 * np.random.default_rng(0).normal(size=flux.f1.shape), flux.f2, flux.f3))
    with pytest.raises(FieldError, match="has divergence"):
        relative_helicity(rough)
    with pytest.raises(ChargeError, match="mean field along x"):
        relative_helicity(fm.flux_from_function(GRIDS["periodic box"](), lambda x, y, z: (1 + 0 * x, 0 * y, 0 * z)))


def test_the_value_is_that_of_the_two_potentials():
    flux = twisted("sphere")
    pots = fm.potential(flux, gauge="axial"), fm.potential(potential_field(flux), gauge="none")
    np.testing.assert_allclose(relative_helicity(flux).value, helicity(*pots).value, rtol=1e-9)
