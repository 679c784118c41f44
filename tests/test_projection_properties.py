"""What a projection is, on drawn grids and masks: idempotent, linear, self-adjoint, never a gain of energy."""

from __future__ import annotations

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

import fieldmover as fm
from fieldmover.forms.fields import close_faces
from fieldmover.forms.incidence import d2
from fieldmover.forms.measures import energy, face_conductances

COUNT = settings(max_examples=30, deadline=None)


@st.composite
def steps(draw, smallest=1, largest=6):
    """Node positions from 0 to 1."""
    widths = draw(st.lists(st.floats(0.2, 5), min_size=smallest, max_size=largest))
    nodes = np.concatenate([[0.0], np.cumsum(widths)])
    return nodes / nodes[-1]


@st.composite
def grids(draw):
    kind = draw(st.sampled_from(["box", "shell", "wedge", "pipe", "warp"]))
    a, b, c = draw(steps()), draw(steps()), draw(steps())
    if kind == "box":
        return fm.cartesian_grid(a, b, c, periodic=draw(st.tuples(*[st.booleans()] * 3)))
    if kind == "shell":
        return fm.spherical_grid(1 + a, np.pi * b, 2 * np.pi * draw(steps(smallest=3)))
    if kind == "wedge":
        return fm.spherical_grid(1 + a, 0.5 + 2 * b, c)
    if kind == "pipe":
        return fm.cylindrical_grid(a, 2 * np.pi * draw(steps(smallest=3)), c)
    return fm.warped_grid(a, b, c, lambda x, y, z: (x + 0.3 * y * z, y - 0.2 * x * z, z + 0.2 * x * y))


def noise(grid, seed):
    rng = np.random.default_rng(seed)
    faces = tuple(rng.normal(size=grid.face_shape(d)) for d in range(3))
    close_faces(grid, faces)
    return fm.FaceFlux(grid, faces)


def product(one, other):
    """Scalar product in the norm whose square is twice the energy."""
    grid, g = one.grid, face_conductances(one.grid)
    sums = [fm.FaceFlux(grid, tuple(a + s * b for a, b in zip(one.faces, other.faces, strict=True))) for s in (1, -1)]
    return 0.5 * (energy(sums[0].faces, g, grid.periodic) - energy(sums[1].faces, g, grid.periodic))


def norm(flux):
    return np.sqrt(product(flux, flux))


def difference(one, other):
    return fm.FaceFlux(one.grid, tuple(a - b for a, b in zip(one.faces, other.faces, strict=True)))


@COUNT
@given(grids(), st.integers(0, 9), st.sampled_from(["neutral", "free"]))
def test_energy_falls_by_that_of_the_change(grid, seed, hole):
    flux = noise(grid, seed)
    clean, record = fm.project(flux, hole=hole, tolerance=1e-13)
    assert not d2(clean.faces).any()
    assert record.energy_after <= record.energy_before * (1 + 1e-14)
    assert abs(record.energy_removed - record.energy_of_change) <= 1e-10 * record.energy_before
    assert (
        abs(record.energy_before - energy(flux.faces, face_conductances(grid), grid.periodic))
        < 1e-12 * record.energy_before
    )


@COUNT
@given(grids(), st.integers(0, 9))
def test_idempotent(grid, seed):
    clean, _ = fm.project(noise(grid, seed))
    again, _ = fm.project(clean)
    assert again is clean


@COUNT
@given(grids(), st.integers(0, 9), st.floats(-3, 3))
def test_linear(grid, seed, factor):
    one, other = noise(grid, seed), noise(grid, seed + 10)
    both = fm.FaceFlux(grid, tuple(a + factor * b for a, b in zip(one.faces, other.faces, strict=True)))
    p, q, r = (fm.project(flux, tolerance=1e-13)[0] for flux in (one, other, both))
    sum_of = fm.FaceFlux(grid, tuple(a + factor * b for a, b in zip(p.faces, q.faces, strict=True)))
    assert norm(difference(r, sum_of)) <= 1e-10 * (norm(one) + 3 * norm(other))


@COUNT
@given(grids(), st.integers(0, 9))
def test_self_adjoint(grid, seed):
    one, other = noise(grid, seed), noise(grid, seed + 10)
    p, q = (fm.project(flux, tolerance=1e-13)[0] for flux in (one, other))
    assert abs(product(p, other) - product(one, q)) <= 1e-10 * norm(one) * norm(other)


@COUNT
@given(grids(), st.integers(0, 9), st.data())
def test_masks_keep_what_they_say(grid, seed, data):
    """Frozen faces keep their bits; divergence is left in excised cells only."""
    flux, rng = noise(grid, seed), np.random.default_rng(seed)
    excised = rng.random(grid.shape) < data.draw(st.floats(0.05, 0.5))
    excised.flat[rng.integers(excised.size)] = False
    frozen = [rng.random(grid.face_shape(d)) < 0.1 for d in range(3)]
    for mask, f in zip(frozen, flux.faces, strict=True):
        f[mask] = np.rint(16 * f[mask]) / 16
    for axis, seam in enumerate(grid.periodic):
        if seam:
            first, last = (np.moveaxis(frozen[axis], axis, 0)[end] for end in (0, -1))
            first |= last
            last |= first
            values = np.moveaxis(flux.faces[axis], axis, 0)
            values[0] = np.where(first, np.rint(16 * values[0]) / 16, values[0])
            values[-1] = values[0]
    try:
        clean, _ = fm.project(flux, frozen=frozen, excised=excised)
    except fm.errors.ChargeError:
        return  # a cell, or some, that frozen faces close off
    net = d2(clean.faces)
    assert not net[~excised].any()
    assert all(np.array_equal(a[m], b[m]) for a, b, m in zip(clean.faces, flux.faces, frozen, strict=True))
