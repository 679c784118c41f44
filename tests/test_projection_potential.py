"""Gauges of a potential, and the mean field that has none."""

from __future__ import annotations

import numpy as np
import pytest

import fieldmover as fm
from fieldmover.errors import FieldError
from fieldmover.forms.incidence import d0
from fieldmover.forms.measures import edge_factors
from fieldmover.grids.grid import outer
from fieldmover.projection import mean_flux
from tests.test_projection import GRIDS, noise


def ring(inward):
    """Solid ring: round it, from its middle line outward or the other way, round that."""

    def to_cartesian(p, s, t):
        a, turn = (-s, -t) if inward else (s, t)
        return (3 + a * np.cos(turn)) * np.cos(p), -(3 + a * np.cos(turn)) * np.sin(p), a * np.sin(turn)

    angle, across = 2 * np.pi * np.linspace(0, 1, 7), np.linspace(-1, 0, 5) if inward else np.linspace(0, 1, 5)
    return fm.warped_grid(
        angle, across, angle, to_cartesian,
        periodic=(True, False, True), poles=(None, "high" if inward else "low", None),
    )  # fmt: skip


GRIDS = {**GRIDS, "ring outward": ring(False), "ring inward": ring(True)}
AXIAL = {
    "even box": 0, "uneven box": 0, "flat box": 0, "slab": 2, "shell": 0, "cone": 0, "wedge": 0, "pipe": 2,
    "annulus": 0, "bent": 0, "bent ring": 1, "ring outward": 1, "ring inward": 1,
}  # fmt: skip


def clean(name):
    flux, _ = fm.project(noise(GRIDS[name]))
    return mean_flux(flux)[1] if flux.grid.kind == "cartesian" else flux


@pytest.mark.parametrize("gauge", ["smooth", "axial", "none"])
@pytest.mark.parametrize("name", GRIDS)
def test_the_curl_is_the_flux_in_every_gauge(name, gauge):
    flux = clean(name)
    pot = fm.potential(flux, gauge=gauge)
    for a, b in zip(fm.curl(pot).faces, flux.faces, strict=True):
        np.testing.assert_allclose(a, b, atol=2e-15)
    for axis, seam in enumerate(flux.grid.periodic):
        for edges in pot.edges if seam else ():
            if edges.shape[axis] == flux.grid.shape[axis] + 1:
                ends = np.moveaxis(edges, axis, 0)[[0, -1]]
                assert np.array_equal(ends[0], ends[1])


@pytest.mark.parametrize(("name", "axis"), AXIAL.items(), ids=AXIAL)
def test_an_axial_gauge_has_no_component_along_its_axis(name, axis):
    flux = clean(name)
    axial, smooth = fm.potential(flux, gauge="axial"), fm.potential(flux)
    assert not axial.edges[axis].any()
    # In the surface where it begins nothing has changed.
    for d in range(3):
        if d != axis:
            begin = -1 if flux.grid.poles[axis] == "high" else 0
            one, other = (np.moveaxis(pot.edges[d], axis, 0)[begin] for pot in (axial, smooth))
            np.testing.assert_array_equal(one, other)


def test_with_a_seam_along_every_axis_as_little_as_there_can_be():
    flux = clean("uneven torus")
    along = fm.potential(flux, gauge="axial").edges[0]
    smooth = fm.potential(flux).edges[0]
    assert np.ptp(along, axis=0).max() == 0
    np.testing.assert_allclose(along.sum(axis=0), smooth.sum(axis=0), atol=1e-14)  # any gauge has the same loops


def test_axial_potential_of_a_uniform_field():
    """B = (0, 0, 2) on a box that begins at x = 0: A_x = 0, A_y = 2 x + a constant."""
    grid = fm.cartesian_grid(np.linspace(0, 1, 5), np.linspace(0, 1, 4), [0, 1])
    pot = fm.potential(fm.flux_from_function(grid, lambda x, y, z: (0 * x, 0 * x, 2 + 0 * x)), gauge="axial")
    slope = np.diff(pot.edges[1], axis=0) / (0.25 / 3)
    np.testing.assert_allclose(slope, 2.0, rtol=1e-12)


@pytest.mark.parametrize("name", ["even box", "shell", "pipe", "uneven torus"])
def test_a_smooth_gauge_has_the_least_norm(name):
    flux = clean(name)
    grid, edges = flux.grid, fm.potential(flux).edges
    factors = edge_factors(grid)

    def size(values):
        once = [a[tuple(slice(None, n) if s and a.shape[d] == n + 1 else slice(None) for d, (n, s) in ends)]
                for a in (outer(factors[k]) * v * v for k, v in enumerate(values))]  # fmt: skip
        return sum(float(a.sum()) for a in once)

    ends = list(enumerate(zip(grid.shape, grid.periodic, strict=True)))
    g = np.random.default_rng(2).normal(size=grid.node_shape())
    for axis, seam in enumerate(grid.periodic):
        turned = np.moveaxis(g, axis, 0)
        if seam:
            turned[-1] = turned[0]
    for axis, ring in enumerate(grid.ring_axis):
        for end in grid.pole_ends(axis):
            on_pole = np.moveaxis(np.moveaxis(g, axis, 0)[end], ring - (axis < ring), 0)
            on_pole[:] = on_pole[0].copy()
    least = size(edges)
    for factor in (-0.1, 0.1):
        assert size([a + factor * b for a, b in zip(edges, d0(g), strict=True)]) > least
    assert least < size(fm.potential(flux, gauge="axial").edges) < np.inf


def test_mean_field_is_split_off_along_closed_planes_only():
    field = 0.5, -1.25, 2.0
    expected = {"torus": field, "uneven torus": field, "slab": (0, 0, 2.0), "even box": (0, 0, 0)}
    for name, kept in expected.items():
        grid = GRIDS[name]
        uniform = fm.flux_from_function(grid, lambda x, y, z: tuple(b + 0 * x for b in field))
        rest_before = clean(name)
        both = fm.FaceFlux(grid, tuple(a + b for a, b in zip(uniform.faces, rest_before.faces, strict=True)))
        mean, rest = mean_flux(both)
        for axis in range(3):
            np.testing.assert_allclose(mean.faces[axis], grid.face_areas()[axis] * kept[axis], atol=1e-14)
            np.testing.assert_array_equal(rest.faces[axis], both.faces[axis] - mean.faces[axis])
        fm.potential(rest)
        fm.potential(mean_flux(uniform)[1])
        if any(kept):
            with pytest.raises(fm.errors.ChargeError, match=r"net flux of .* \(mean_flux\(\) splits it off\)"):
                fm.potential(both)


def test_mean_field_of_other_grids_is_refused():
    with pytest.raises(fm.errors.GridError, match="mean field of a spherical grid"):
        mean_flux(noise(GRIDS["shell"]))


def test_unknown_gauge():
    with pytest.raises(fm.errors.FieldError, match="gauge: 'coulomb', expected one of 'smooth', 'axial', 'none'"):
        fm.potential(noise(GRIDS["shell"]), gauge="coulomb")


@pytest.mark.parametrize("axis", range(3))
def test_what_is_not_finite_is_refused(axis):
    faces = [
        f.copy() for f in fm.curl(fm.potential_from_function(GRIDS["ring outward"], lambda x, y, z: (y, z, x))).faces
    ]
    faces[axis][1, 1, 1] = np.nan
    with pytest.raises(FieldError, match="not finite"):
        fm.potential(fm.FaceFlux(GRIDS["ring outward"], tuple(faces)))


def test_round_off_on_a_wall_along_the_field_is_no_charge():
    """A toroidal field in a shell: what goes through its walls is rounding, whose sum may be as large as its terms."""
    grid = fm.spherical_grid(np.linspace(1, 2, 5), np.linspace(0, np.pi, 9), np.linspace(0, 2 * np.pi, 17))
    flux = fm.flux_from_function(grid, lambda x, y, z: (-y, x, 0 * z))
    f1 = flux.f1.copy()
    f1[:] = 3e-17
    pot = fm.potential(fm.project(fm.FaceFlux(grid, (f1, flux.f2, flux.f3)))[0])
    assert np.isfinite(pot.edges[0]).all()
    raw = fm.FaceFlux(grid, (f1, flux.f2, flux.f3))
    again = fm.curl(fm.potential(raw))
    assert np.abs(again.f3 - raw.f3).max() < 1e-14
