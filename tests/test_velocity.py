"""Kinds of velocity: orbits round holes, special relativity, and grids that move."""

from __future__ import annotations

import itertools
from typing import get_args

import numpy as np
import pytest

import fieldmover as fm
from fieldmover.conventions.components import Basis
from fieldmover.conventions.metrics import (
    FlatMetric,
    KerrSchildMetric,
    centre_jacobian,
    geometry,
    geometry_from_arrays,
)
from fieldmover.conventions.velocity import Kind, grid_velocity, motion, stored_velocity
from fieldmover.errors import FieldError
from fieldmover.grids.kerr import kerr_schild_grid
from fieldmover.grids.warps import crowded_grid, crowded_map

RELATIVE = [kind for kind in get_args(Kind) if kind != "coordinate"]


def cell(r, theta=np.pi / 2, spin=0.0, make=None):
    """One cell with its centre there."""
    nodes = [r - 0.5, r + 0.5], [theta - 0.1, theta + 0.1], [0.3, 0.5]
    return make(*nodes) if make else kerr_schild_grid(*nodes, spin)


def along(*components):
    return np.array(components, dtype=float).reshape(3, 1, 1, 1)


# Circular orbits in the equator: Bardeen, Press & Teukolsky 1972, Rotating black holes, eqs 2.12-2.16 (numbers of the
# equations from memory): (r, a): Omega, u^t, u^phi, E, L, W and v^r, v^phi in Kerr-Schild coordinates.
ORBITS = {
    (6.0, 0.9): (
        0.06411514687810339, 1.345091117855841, 0.08624071458575951, 0.9225996262796217, 2.79427836148321,
        1.164883078467966, 0.2886751345948129, 0.07403379461841077,
    ),
    (10.0, 0.5): (
        0.03113055924149417, 1.187598030675749, 0.03697059084903321, 0.9537754836255025, 3.589390459090456,
        1.0841237177497, 0.1825741858350554, 0.03410181904863454,
    ),
    (6.0, 0.0): (
        6.0**-1.5, 2**0.5, 2**0.5 * 6.0**-1.5, 8**0.5 / 3, 12**0.5, 1.224744871391589, 0.2886751345948129, None,
    ),
}  # fmt: skip


@pytest.mark.parametrize("orbit", ORBITS)
def test_circular_orbits_in_kerr_schild_coordinates(orbit):
    omega, u_t, u_phi, energy, momentum, lorentz, v_r, v_phi = ORBITS[orbit]
    grid = cell(orbit[0], spin=orbit[1])
    hole = geometry(KerrSchildMetric(1.0, orbit[1], "spheroidal"), grid)
    found = motion(grid, along(0, 0, omega), "coordinate", "coordinate", hole)
    assert found.lorentz.item() == pytest.approx(lorentz, rel=1e-12)
    assert found.u_t.item() == pytest.approx(u_t, rel=1e-12)

    def stored(kind):
        return stored_velocity(grid, found.velocity, kind, "coordinate", hole).ravel()

    np.testing.assert_allclose(stored("four-velocity"), [0, 0, u_phi], rtol=1e-12, atol=1e-14)
    eulerian = stored("eulerian")
    assert eulerian[0] == pytest.approx(v_r, rel=1e-12)  # not 0: observers at rest in the slice fall
    if v_phi is not None:
        assert eulerian[2] == pytest.approx(v_phi, rel=1e-12)
    np.testing.assert_allclose(stored("W eulerian"), lorentz * eulerian, rtol=1e-12, atol=1e-14)
    own = hole.in_coordinates(centre_jacobian(grid))
    lower = lorentz * np.einsum("ij...,j->i...", own.gamma, eulerian).ravel()
    assert own.lapse.item() * lorentz - own.shift.ravel() @ lower == pytest.approx(energy, rel=1e-12)
    assert lower[2] == pytest.approx(momentum, rel=1e-12)


@pytest.mark.parametrize("orbit", ORBITS)
def test_the_same_orbits_in_cartesian_like_coordinates(orbit):
    omega, u_t, *_, lorentz, _, _ = ORBITS[orbit]
    x, y = cell(orbit[0], spin=orbit[1]).centres()[:2].ravel()
    box = fm.cartesian_grid([x - 0.1, x + 0.1], [y - 0.1, y + 0.1], [-0.1, 0.1])
    found = motion(box, along(-omega * y, omega * x, 0), geometry=geometry(KerrSchildMetric(1.0, orbit[1]), box))
    assert found.lorentz.item() == pytest.approx(lorentz, rel=1e-12)
    assert found.u_t.item() == pytest.approx(u_t, rel=1e-12)


def boyer_lindquist(grid, r, a):
    """Stored arrays of the other slicing, in the equator (Bardeen, Press & Teukolsky 1972, eq. 2.3; from memory)."""
    delta, area = r**2 - 2 * r + a**2, (r**2 + a**2) ** 2 - (r**2 - 2 * r + a**2) * a**2
    lapse, drag = np.sqrt(r**2 * delta / area), -2 * a * r / area
    six = np.array([r**2 / delta, 0, 0, r**2, 0, area / r**2])
    return geometry_from_arrays(grid, np.full(grid.shape, lapse), along(0, 0, drag), six.reshape(6, 1, 1, 1))


@pytest.mark.parametrize(
    ("r", "a", "lorentz", "speed"),
    [
        (6.0, 0.9, 1.100259746245657, 0.4170658020079962),
        (10.0, 0.5, 1.062286158729845, 0.3373872875905458),
        (6.0, 0.0, 1.154700538379252, 0.5),
    ],
)
def test_observers_that_turn_with_the_hole(r, a, lorentz, speed):
    """Figures of the same paper, for observers without angular momentum, along unit vectors; metric from arrays."""
    grid = cell(r, make=fm.spherical_grid)
    slicing = boyer_lindquist(grid, r, a)
    found = motion(grid, along(0, 0, 1 / (r**1.5 + a)), "coordinate", "coordinate", slicing)
    assert found.lorentz.item() == pytest.approx(lorentz, rel=1e-12)
    hat = stored_velocity(grid, found.velocity, "eulerian", "physical", slicing)
    np.testing.assert_allclose(hat.ravel(), [0, 0, speed], rtol=1e-12, atol=1e-14)
    again = motion(grid, hat, "eulerian", "physical", slicing)
    np.testing.assert_allclose(again.velocity, found.velocity, rtol=1e-13, atol=1e-15)


def test_free_fall_from_rest_at_infinity():
    """u^r = -sqrt(2/r), u_t = -1: Misner, Thorne & Wheeler 1973, *Gravitation*, section 25.5 (from memory)."""
    grid, s = cell(4.0), 0.5**0.5
    hole = geometry(KerrSchildMetric(chart="spheroidal"), grid)
    found = motion(grid, along(-s, 0, 0), "four-velocity", "coordinate", hole)
    assert found.u_t.item() == pytest.approx((1 + s + s**2) / (1 + s), rel=1e-14)
    assert found.lorentz.item() == pytest.approx(1.0556428926658263, rel=1e-14)
    for kind, expected in (("eulerian", -0.261586921897471789), ("coordinate", -0.546918160678027157)):
        stored = stored_velocity(grid, found.velocity, kind, "coordinate", hole)
        np.testing.assert_allclose(stored.ravel(), [expected, 0, 0], rtol=1e-13, atol=1e-15)


@pytest.mark.parametrize("r", [1.2, 2.0])
def test_free_fall_within_the_horizon(r):
    """There u^i alone belongs to two motions; the falling one with energy 1 is taken. At r = 2 g_tt is 0."""
    grid, s = cell(r), (2 / r) ** 0.5
    hole = geometry(KerrSchildMetric(chart="spheroidal"), grid)
    found = motion(grid, along(-s, 0, 0), "four-velocity", "coordinate", hole)
    assert found.u_t.item() == pytest.approx((1 + s + s**2) / (1 + s), rel=1e-14)


def some_grids():
    angles = np.linspace(0.4, 2.4, 4), np.linspace(-1.0, 2.0, 5)
    yield fm.cartesian_grid([2, 3, 4], [1, 2, 3, 4], [-1, 1, 2])
    yield fm.spherical_grid([2.0, 3, 5], *angles)
    yield kerr_schild_grid([2.0, 3, 5], *angles, 0.9)
    yield fm.cylindrical_grid([2.0, 3, 5], angles[1], [-1, 0, 2])
    yield crowded_grid(np.geomspace(2.0, 5.0, 4), *angles, separation=6.0, strength=0.3)


def slow_enough(grid, spread=0.6):
    """Eulerian velocities of up to `spread` in size, Cartesian."""
    rng = np.random.default_rng(7)
    v = rng.normal(size=(3, *grid.shape))
    return v / np.sqrt((v**2).sum(axis=0)) * rng.uniform(0, spread, grid.shape)


@pytest.mark.parametrize("spin", [None, 0.0, 0.9])
@pytest.mark.parametrize("grid", list(some_grids()), ids=lambda g: "-".join(g.map.names))
def test_every_kind_comes_back(grid, spin):
    """All kinds in all bases, at rest and on a grid that moves, with c = 3."""
    space = geometry(FlatMetric(3.0) if spin is None else KerrSchildMetric(0.4, 0.4 * spin, light=3.0), grid)
    start = motion(grid, 3.0 * slow_enough(grid), "eulerian", geometry=space)
    moving = 0.1 * slow_enough(grid)
    for kind, basis, w in itertools.product(get_args(Kind), get_args(Basis), (None, moving)):
        if basis == "physical" and spin is not None:
            continue  # unit vectors are not settled; refused, below
        stored = stored_velocity(grid, start.velocity, kind, basis, space, w)
        again = motion(grid, stored, kind, basis, space, w)
        np.testing.assert_allclose(again.velocity, start.velocity, rtol=0, atol=3e-13)
        np.testing.assert_allclose(again.lorentz, start.lorentz, rtol=1e-12)


def test_special_relativity():
    grid = fm.spherical_grid([1, 2, 3], [0.5, 1.0, 1.5], [0, 1, 2])
    v = slow_enough(grid, 0.99)
    lorentz = (1 - (v**2).sum(axis=0)) ** -0.5
    flat = geometry(FlatMetric(), grid)
    found = motion(grid, v, geometry=flat)
    np.testing.assert_allclose(found.lorentz, lorentz, rtol=1e-13)
    np.testing.assert_allclose(found.u_t, lorentz, rtol=1e-13)
    for kind in ("four-velocity", "W eulerian"):
        np.testing.assert_allclose(stored_velocity(grid, v, kind, geometry=flat), lorentz * v, rtol=1e-12)
    hat = stored_velocity(grid, v, "eulerian", "physical", flat)
    np.testing.assert_allclose((hat**2).sum(axis=0), (v**2).sum(axis=0), rtol=1e-13)


def test_a_large_lorentz_factor_keeps_its_digits():
    grid = fm.cartesian_grid([0, 1], [0, 1], [0, 1])
    found = motion(grid, along(3e6, 4e6, 0), "W eulerian", geometry=geometry(FlatMetric(), grid))
    assert found.lorentz.item() == pytest.approx((1 + 25e12) ** 0.5, rel=1e-15)


def test_velocities_in_units_where_light_has_another_speed():
    grid = cell(6.0)
    natural = motion(grid, along(0.1, 0.02, 0.03), "eulerian", "coordinate", geometry(KerrSchildMetric(), grid))
    stored = along(10.0, 2.0, 3.0)
    other = motion(grid, stored, "eulerian", "coordinate", geometry(KerrSchildMetric(light=100.0), grid))
    np.testing.assert_allclose(other.velocity, 100 * natural.velocity, rtol=1e-14)
    np.testing.assert_allclose(other.lorentz, natural.lorentz, rtol=1e-14)


def test_newtonian_velocities():
    """On a cylinder, dphi/dt = 2 at R = 3 is a speed of 6."""
    grid = fm.cylindrical_grid([2, 4], [-0.1, 0.1], [0, 1])
    for stored, basis in ((along(1, 2, 3), "coordinate"), (along(1, 6, 3), "physical"), (along(1, 6, 3), "cartesian")):
        found = motion(grid, stored, "coordinate", basis)
        np.testing.assert_allclose(found.velocity.ravel(), [1, 6, 3], rtol=1e-14)
        assert found.lorentz is None
        np.testing.assert_allclose(stored_velocity(grid, found.velocity, "coordinate", basis), stored, rtol=1e-14)


def breathing(s, now=0.4):
    """x = q + 0.2 sin(q) sin(3 t), y and z stretched, at the time now + s."""

    def function(a, b, c):
        return a + 0.2 * np.sin(a) * np.sin(3 * (now + s)), b * (1 + 0.1 * (now + s)), c

    return function


def test_a_grid_that_moves_adds_its_velocity():
    """The path x(t) = X(q(t), t) of a point with a given dq/dt, by the chain rule."""
    now, q, rate = 0.4, 0.75, np.array([0.3, -0.2, 0.5])
    grid = fm.warped_grid([0.5, 1.0], [1, 2], [0, 1], breathing(0.0))
    own = grid_velocity(grid, breathing, 1e-3)
    expected = [0.2 * np.sin(q) * 3 * np.cos(3 * now), 0.1 * 1.5, 0.0]
    np.testing.assert_allclose(own.ravel(), expected, rtol=0, atol=1e-10)
    path = [
        rate[0] * (1 + 0.2 * np.cos(q) * np.sin(3 * now)) + expected[0],
        rate[1] * (1 + 0.1 * now) + expected[1],
        rate[2],
    ]
    found = motion(grid, along(*rate), "coordinate", "coordinate", grid_velocity=own)
    np.testing.assert_allclose(found.velocity.ravel(), path, rtol=1e-9)
    flat = geometry(FlatMetric(light=2.0), grid)
    u_t = (1 - np.square(path).sum() / 4) ** -0.5
    four = motion(grid, along(*(u_t * rate)), "four-velocity", "coordinate", flat, own)
    np.testing.assert_allclose(four.velocity.ravel(), path, rtol=1e-9)
    absolute = motion(grid, along(*path), "coordinate", "cartesian", flat, own)
    np.testing.assert_allclose(absolute.velocity.ravel(), path, rtol=1e-14)
    inertial = motion(grid, along(*path), "eulerian", "cartesian", flat, own)
    np.testing.assert_allclose(inertial.velocity.ravel(), path, rtol=1e-14)
    seen = stored_velocity(grid, along(*path), "coordinate", "coordinate", flat, own)
    np.testing.assert_allclose(seen.ravel(), rate, rtol=1e-9)


def test_grids_crowded_round_bodies_on_an_orbit():
    """A spherical grid that turns as a whole and one whose crowding turns differ, but at the bodies."""

    def later(s):
        return crowded_map(2.0, phase=0.5 * s, strength=0.5)

    nodes = np.linspace(0.9, 1.1, 4), np.linspace(np.pi / 2 - 0.01, np.pi / 2 + 0.01, 4), np.linspace(-0.01, 0.01, 4)
    grid = crowded_grid(*nodes, separation=2.0)
    speed = grid_velocity(grid, later, 1e-3)[1, 1, 1, 1]
    # at the body n moves by strength x (m - (n.m) n): half of its speed
    assert speed == pytest.approx(0.5 * 0.5, rel=1e-5)


BOX = fm.cartesian_grid([0, 1, 2, 3], [0, 1], [0, 1])


def of_x(*values):
    return np.stack([np.array(values, dtype=float).reshape(3, 1, 1), np.zeros((3, 1, 1)), np.zeros((3, 1, 1))])


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ((BOX, of_x(0.1, 1.0, 1.2), "eulerian"), r"2 cells move as fast .* index \[2, 0, 0\] \(x = 2.5, .* = 1.44;"),
        ((BOX, of_x(0.1, np.nan, 0)), r"not finite in 1 cells, the first at index \[1, 0, 0\]"),
        ((BOX, np.zeros((3, 2, 1, 1))), r"shape \(3, 2, 1, 1\), expected \(3, 3, 1, 1\)"),
        ((BOX, of_x(0, 0, 0), "proper"), "kind 'proper', expected one of coordinate, eulerian"),
        ((BOX, of_x(0, 0, 0), "eulerian", "polar"), "basis 'polar', expected one of physical"),
    ],
)
def test_velocities_that_cannot_be_are_refused(arguments, message):
    with pytest.raises(FieldError, match=message):
        motion(*arguments, geometry=geometry(FlatMetric(), BOX))


def test_more_that_is_refused():
    with pytest.raises(FieldError, match="'W eulerian' without a metric"):
        motion(BOX, of_x(0, 0, 0), "W eulerian")
    with pytest.raises(FieldError, match=r"metric at \(1, 1, 1\) points"):
        motion(BOX, of_x(0, 0, 0), geometry=geometry(FlatMetric(), fm.cartesian_grid([0, 1], [0, 1], [0, 1])))
    grid = cell(6.0, spin=0.9)
    hole = geometry(KerrSchildMetric(1.0, 0.9, "spheroidal"), grid)
    with pytest.raises(FieldError, match="not at right angles"):
        motion(grid, along(0, 0, 0), "eulerian", "physical", hole)
    with pytest.raises(FieldError, match="1 cells move as fast as light"):
        stored_velocity(grid, along(0.9, 0.9, 0.0), "eulerian", "coordinate", hole)
    inner = cell(1.2)
    with pytest.raises(FieldError, match=r"1 cells have u\^i that belong to no motion .* \[0, 0, 0\] \(r = 1.2"):
        motion(inner, along(0, 0, 0), "four-velocity", "coordinate", geometry(KerrSchildMetric(), inner))


def test_a_moving_map_must_be_that_of_the_grid():
    grid = fm.warped_grid([0.5, 1.0], [1, 2], [0, 1], breathing(0.0))
    with pytest.raises(FieldError, match="the map now differs from the grid's by up to"):
        grid_velocity(grid, lambda s: breathing(s + 0.1), 1e-3)
    with pytest.raises(FieldError, match=r"step 0\.0, expected a positive time"):
        grid_velocity(grid, breathing, 0.0)
