"""Figures of a field: divergence norms and places, energy, limits."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest
import scipy.integrate
import scipy.special

import fieldmover as fm
from fieldmover import compute
from fieldmover.diagnostics import (
    box_cells,
    cell_energies,
    check_limits,
    diagnose,
    differences,
    energy_by_shell,
    energy_in,
    energy_of_cells,
    power_spectrum,
    relative_divergence,
    shell_cells,
    worst_cells,
)
from fieldmover.errors import FieldError, GridError, JobError
from fieldmover.forms import measures
from fieldmover.forms.fields import close_faces
from tests import fields, reference

TURN = 2 * np.pi


def sphere(n1, n2, n3, low=1.0, high=2.0):
    return fm.spherical_grid(
        np.geomspace(low, high, n1 + 1), np.linspace(0, np.pi, n2 + 1), np.linspace(0, TURN, n3 + 1)
    )


def _skew(a, b, c):
    return a + 0.5 * b, b + 0.3 * c, c - 0.2 * a


GRIDS = {
    "box": lambda: fm.cartesian_grid([0, 0.3, 1, 1.4], np.linspace(0, 1, 5), [0, 1, 1.5, 2, 3, 3.5]),
    "periodic box": lambda: fm.cartesian_grid(*[np.linspace(0, 1, n) ** 1.3 for n in (4, 5, 6)], (True,) * 3),
    "cylinder": lambda: fm.cylindrical_grid([0, 0.5, 1, 1.2], np.linspace(0, TURN, 6), [0, 0.2, 0.5]),
    "ring": lambda: fm.cylindrical_grid([1, 1.5, 2], np.linspace(0, 1, 4), [0, 0.2, 0.5, 0.6]),
    "sphere": lambda: sphere(3, 5, 7),
    "wedge": lambda: fm.spherical_grid([1, 1.1, 1.5], np.linspace(0.8, 1.9, 4), np.linspace(0, 0.7, 6)),
    "skew": lambda: fm.warped_grid(*[np.linspace(0, 1, n) for n in (4, 5, 6)], _skew),
}
SQUARE_CORNERED = [kind for kind in GRIDS if kind != "skew"]


def rough_flux(grid, seed=0):
    rng = np.random.default_rng(seed)
    faces = tuple(rng.normal(size=grid.face_shape(d)) for d in range(3))
    close_faces(grid, faces)
    return fm.FaceFlux(grid, faces)


def potential(grid, field=fields.WAVE):
    return fm.potential_from_function(grid, field.a)


def solenoidal(grid, field=fields.WAVE):
    return fm.curl(potential(grid, field))


def with_charge(flux, cell, charge):
    """Lead extra flux from one cell along axis 1 out through the high wall."""
    i, j, k = cell
    f1 = flux.f1.copy()
    f1[i + 1 :, j, k] += charge
    return fm.FaceFlux(flux.grid, (f1, flux.f2, flux.f3))


# -- Divergence ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", [kind for kind in GRIDS if kind != "periodic box"])
def test_a_known_charge_is_found_in_its_cell(kind):
    grid = GRIDS[kind]()
    cell, charge = (1, 0, 1), -1e-6
    clean = solenoidal(grid)
    assert diagnose(clean).divergence.linf < 4e-15
    flux = with_charge(clean, cell, charge)
    found = diagnose(flux)
    (f1, f2, f3), (i, j, k) = flux.faces, cell
    gross = sum(abs(f) for f in (*f1[i : i + 2, j, k], *f2[i, j : j + 2, k], *f3[i, j, k : k + 2]))
    assert found.worst.cell == cell
    np.testing.assert_allclose(found.worst.position, grid.centres()[(slice(None), *cell)], rtol=1e-14)
    np.testing.assert_allclose(found.net_flux, abs(charge), rtol=1e-9)
    np.testing.assert_allclose(found.divergence.linf, abs(charge) / gross, rtol=1e-9)
    np.testing.assert_allclose(found.divergence.l1, found.divergence.linf / found.cells, rtol=1e-6)
    np.testing.assert_allclose(found.divergence.l2, found.divergence.linf / np.sqrt(found.cells), rtol=1e-9)
    worst = worst_cells(flux, 3)
    assert worst[0].cell == cell
    np.testing.assert_allclose(worst[0].net, charge, rtol=1e-9)
    assert [w.relative for w in worst] == sorted((w.relative for w in worst), reverse=True)


def test_a_wrong_sign_or_a_wrong_metric_factor_is_found():
    grid = sphere(6, 8, 12)
    flux = solenoidal(grid)
    limits = {"divergence": 1e-12}
    assert check_limits(diagnose(flux).as_dict(), limits)[0].passed
    flipped = fm.FaceFlux(grid, (flux.f1, flux.f2, -flux.f3))
    # An average over the belt of a cell instead of the sine at its edge, say.
    sine = np.sin(grid.nodes[1])[None, :, None]
    stretched = fm.FaceFlux(grid, (flux.f1, flux.f2 * (1 + 1e-9 * sine), flux.f3))
    for wrong in (flipped, stretched):
        assert not check_limits(diagnose(wrong).as_dict(), limits)[0].passed
    assert diagnose(flipped).divergence.linf > 0.1


@pytest.mark.parametrize("kind", [*GRIDS, "several slabs"])
@pytest.mark.parametrize("some", [False, True], ids=["all cells", "some excluded"])
def test_norms_of_a_rough_field_against_plain_numpy(kind, some):
    grid = sphere(9, 64, 80) if kind == "several slabs" else GRIDS[kind]()
    flux = rough_flux(grid)
    excluded = np.random.default_rng(5).random(grid.shape) < 0.3 if some else None
    keep = np.ones(grid.shape, bool) if excluded is None else ~excluded
    found = diagnose(flux, excluded)
    net = reference.outflow_by_loops(flux.faces)
    ratio = relative_divergence(flux)
    if not some:
        np.testing.assert_allclose(ratio.max(), reference.divergence_ratio(flux.faces), rtol=1e-14)
    # On the skew grid energy and volume of a cell are the package's own; elsewhere volumes are closed forms.
    volumes, energies = grid.cell_volumes(), cell_energies(flux)
    scaled = np.cbrt(volumes) * np.abs(net / volumes) / np.sqrt(2 * energies / volumes)
    for norms, values in ((found.divergence, ratio[keep]), (found.scaled_divergence, scaled[keep])):
        np.testing.assert_allclose(norms.linf, values.max(), rtol=1e-9)
        np.testing.assert_allclose(norms.l1, values.mean(), rtol=1e-9)
        np.testing.assert_allclose(norms.l2, np.sqrt((values**2).mean()), rtol=1e-9)
    assert found.cells == keep.sum()
    np.testing.assert_allclose(found.net_flux, np.abs(net[keep]).max(), rtol=1e-13)
    assert found.worst.cell == np.unravel_index(np.where(keep, ratio, -1).argmax(), grid.shape)
    strength = np.where(keep, 2 * energies / volumes, -1)
    assert found.strongest.cell == np.unravel_index(strength.argmax(), grid.shape)
    np.testing.assert_allclose(found.strength, np.sqrt(strength.max()), rtol=1e-9)
    np.testing.assert_allclose(found.energy, energies[keep].sum(), rtol=1e-13)
    np.testing.assert_allclose(sum(found.energy_by_axis), found.energy, rtol=1e-13)
    assert worst_cells(flux, 1, excluded)[0].cell == found.worst.cell


def test_scaled_divergence_of_one_cube():
    """B_x = 3 on one face and 4 on the other: |B|^2 = (9 + 16) / 2, div B = 1 / h."""
    h = 0.1
    grid = fm.cartesian_grid([0, h], [0, h], [0, h])
    f1 = h**2 * np.array([3.0, 4.0]).reshape(2, 1, 1)
    found = diagnose(fm.FaceFlux(grid, (f1, np.zeros((1, 2, 1)), np.zeros((1, 1, 2)))))
    np.testing.assert_allclose(found.scaled_divergence.linf, 1 / math.sqrt(12.5), rtol=1e-14)
    np.testing.assert_allclose(found.divergence.linf, 1 / 7, rtol=1e-14)
    np.testing.assert_allclose(found.strength, math.sqrt(12.5), rtol=1e-14)


def test_tiny_and_absent_fields_make_no_large_figures():
    """A field of 1e-200 has round-off of 1e-216 and energy 0: that must not look like a monopole."""
    grid = sphere(3, 4, 6)
    tiny = fm.curl(fm.EdgePotential(grid, tuple(1e-200 * a for a in potential(grid).edges)))
    assert diagnose(tiny).scaled_divergence.linf < 1e-13
    nothing = diagnose(fm.FaceFlux(grid, tuple(0 * f for f in tiny.faces)))
    assert nothing.divergence.linf == nothing.scaled_divergence.linf == 0
    assert nothing.energy == nothing.strength == 0


@pytest.mark.parametrize("bad", [np.nan, np.inf])
def test_a_value_that_is_not_finite_never_passes(bad):
    flux = solenoidal(GRIDS["sphere"]())
    flux.f1[0, 2, 3] = bad
    found = diagnose(flux)
    assert found.worst.cell == (0, 2, 3)
    figures = json.loads(json.dumps(found.as_dict(), allow_nan=False))
    assert figures["divergence"]["linf"] is None
    assert figures["energy"]["total"] is None
    names = ("divergence", "energy.total", "divergence.scaled.l2", "inner_wall.net", "inner_wall.north")
    verdicts = check_limits(figures, dict.fromkeys(names, 1e300))
    assert [(v.found, v.passed) for v in verdicts] == [(None, False)] * len(names)
    assert worst_cells(flux)[0].cell == found.worst.cell


def test_same_bits_for_any_number_of_threads():
    """On a grid of several slabs, with the worst cell in the last but one."""
    cell = (14, 3, 5)
    flux = with_charge(solenoidal(sphere(20, 48, 96)), cell, 1e-3)
    before, found = compute.threads(), []
    try:
        for count in (1, 2, 3):
            compute.set_threads(count)
            found.append(diagnose(flux))
    finally:
        compute.set_threads(before)
    assert found[0] == found[1] == found[2]
    assert found[0].worst.cell == cell
    np.testing.assert_allclose(found[0].divergence.linf, relative_divergence(flux)[cell], rtol=1e-13)


@pytest.mark.parametrize(
    ("excluded", "message"),
    [
        (np.zeros((3, 4), bool), r"bool array of shape \(3, 4\), expected bool of shape \(3, 4, 5\)"),
        (np.zeros((3, 4, 5)), "float64 array"),
        (np.ones((3, 4, 5), bool), "all 60 cells"),
    ],
)
def test_masks_that_do_not_fit(excluded, message):
    with pytest.raises(FieldError, match=message):
        diagnose(solenoidal(GRIDS["box"]()), excluded)


# -- Energy --------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", SQUARE_CORNERED)
def test_cell_energies_add_up_to_the_weighted_sum_over_faces(kind):
    flux = rough_flux(GRIDS[kind]())
    expected = measures.energy(flux.faces, measures.face_conductances(flux.grid), flux.grid.periodic)
    np.testing.assert_allclose(cell_energies(flux).sum(), expected, rtol=1e-13)


def test_a_uniform_field_has_its_energy_on_a_skew_grid():
    """Where axes are not at right angles no sum of squares of fluxes gives this: the metric comes in."""
    grid = GRIDS["skew"]()
    field = fields.uniform(0.3, -0.4, 1.1)
    found = diagnose(solenoidal(grid, field))
    square = 0.3**2 + 0.4**2 + 1.1**2
    np.testing.assert_allclose(found.energy, 0.5 * square * grid.cell_volumes().sum(), rtol=1e-9)
    np.testing.assert_allclose(found.strength, math.sqrt(square), rtol=1e-9)


def _bent(a, b, c):
    return a + 0.3 * np.sin(b), b + 0.4 * np.sin(c), c + 0.3 * np.sin(a)


@pytest.mark.parametrize("warp", [False, True], ids=["straight", "warped"])
def test_energy_of_abc_flow(warp):
    def error(n):
        q = np.linspace(0, TURN, n + 1)
        # The warped image of the cube is again one whole period of the field.
        grid = fm.warped_grid(q, q, q, _bent) if warp else fm.cartesian_grid(q, q, q, periodic=(True,) * 3)
        return abs(2 * diagnose(solenoidal(grid, fields.ABC)).energy / fields.ABC_SQUARE - 1)

    errors = [error(n) for n in (12, 24, 48)]
    orders = np.log2(np.divide(errors[:-1], errors[1:]))
    assert ((orders > 1.8) & (orders < 2.2)).all(), f"errors {errors}, orders {orders}"
    assert errors[-1] < 2e-2


def test_energy_by_component_of_a_lundquist_cylinder():
    """B_phi = J1(alpha R), B_z = J0(alpha R): each part by quadrature of the Bessel functions."""
    n = 24
    grid = fm.cylindrical_grid(np.linspace(0, 1, n + 1), np.linspace(0, TURN, 9), np.linspace(0, 1, 3))
    found = diagnose(solenoidal(grid, fields.LUNDQUIST)).energy_by_axis
    around, along = (
        scipy.integrate.quad(lambda R, f=f: np.pi * R * f(fields.LUNDQUIST_ALPHA * R) ** 2, 0, 1)[0]
        for f in (scipy.special.j1, scipy.special.j0)
    )
    assert abs(found[0]) < 1e-20
    np.testing.assert_allclose(found[1:], (around, along), rtol=2e-3)
    np.testing.assert_allclose(2 * (around + along), fields.LUNDQUIST_SQUARE, rtol=1e-12)


def test_energy_of_a_spheromak():
    flux = solenoidal(sphere(24, 24, 8, 1e-2, 1.0), fields.SPHEROMAK)
    # The hole r < 0.01 holds some 5e-6 of it.
    np.testing.assert_allclose(2 * diagnose(flux).energy, fields.SPHEROMAK_SQUARE, rtol=2e-2)


def test_energy_by_shell_and_region_of_a_dipole():
    """Half of int B^2 over a < r < b is (4 pi / 3)(1/a^3 - 1/b^3) for a unit dipole (by hand)."""
    grid = sphere(60, 40, 16)
    flux = solenoidal(grid, fields.dipole())
    radii = grid.nodes[0][[0, 20, 40, 60]]
    expected = 4 * np.pi / 3 * -np.diff(radii**-3.0)
    np.testing.assert_allclose(energy_by_shell(flux, radii), expected, rtol=2e-3)
    inner = energy_in(flux, shell_cells(grid, radii[0], radii[1]))
    np.testing.assert_allclose(inner, energy_by_shell(flux, radii)[0], rtol=1e-13)
    north = energy_in(flux, box_cells(grid, (-2, -2, 0), (2, 2, 2)))
    np.testing.assert_allclose(north, diagnose(flux).energy / 2, rtol=1e-12)
    # A centre on a bound counts to the shell outside it.
    line = fm.cartesian_grid([0, 1, 2], [-1, 1], [-1, 1])
    halves = energy_by_shell(solenoidal(line, fields.uniform(0, 0, 1)), [0.5, 1.5, 2.5])
    np.testing.assert_allclose(halves, [2.0, 2.0], rtol=1e-12)
    # A shell that leaves the middle out and one that reaches beyond the grid.
    assert energy_by_shell(flux, [0.0, 0.5, 9.0])[0] == 0
    np.testing.assert_allclose(energy_by_shell(flux, [0.0, 0.5, 9.0])[1], diagnose(flux).energy, rtol=1e-13)


def test_regions_outside_the_grid_are_refused():
    grid = GRIDS["sphere"]()
    with pytest.raises(GridError, match="no cell centre"):
        shell_cells(grid, 5.0, 6.0)
    with pytest.raises(GridError, match="no cell centre"):
        box_cells(grid, (3, 3, 3), (4, 4, 4))
    with pytest.raises(FieldError, match="increasing"):
        energy_by_shell(rough_flux(grid), [1.0, 1.0])
    with pytest.raises(FieldError, match="where"):
        energy_in(rough_flux(grid), np.ones(3, bool))


def test_energy_of_cell_centred_orszag_tang():
    """Orszag & Tang, J. Fluid Mech. 90, 129 (1979): magnetic energy 1/(8 pi), exact on equal steps."""
    q = np.linspace(0, 1, 17)
    grid = fm.cartesian_grid(q, q, [0, 1], periodic=(True, True, True))
    x, y, _ = grid.centres()
    b0 = 1 / math.sqrt(4 * np.pi)
    b = np.stack([-b0 * np.sin(TURN * y), b0 * np.sin(2 * TURN * x), 0 * x])
    np.testing.assert_allclose(energy_of_cells(grid, b), 1 / (8 * np.pi), rtol=1e-14)
    west = energy_of_cells(grid, b, box_cells(grid, (0, 0, 0), (0.5, 1, 1)))
    np.testing.assert_allclose(west, 1 / (16 * np.pi), rtol=1e-14)
    with pytest.raises(FieldError, match="expected"):
        energy_of_cells(grid, b[:2])
    # Wave numbers 1 and 2 times 2 pi hold half each.
    k, power = power_spectrum(grid, b)
    np.testing.assert_allclose(k[:3], [0, TURN, 2 * TURN])
    np.testing.assert_allclose(power[:3], [0, 1 / (16 * np.pi), 1 / (16 * np.pi)], atol=1e-16)
    assert power[3:].max() < 1e-16


@pytest.mark.parametrize("shape", [(4, 6, 8), (5, 3, 7), (1, 4, 5)])
def test_parseval(shape):
    grid = fm.cartesian_grid(*[np.linspace(0, 1 + d, n + 1) for d, n in enumerate(shape)])
    b = np.random.default_rng(2).normal(size=(3, *shape))
    np.testing.assert_allclose(power_spectrum(grid, b)[1].sum(), energy_of_cells(grid, b), rtol=1e-13)


@pytest.mark.parametrize("kind", ["box", "sphere"])
def test_power_spectrum_needs_a_uniform_box(kind):
    grid = GRIDS[kind]()
    with pytest.raises(FieldError, match="expected Cartesian axes of equal steps"):
        power_spectrum(grid, np.zeros((3, *grid.shape)))


# -- Limits and differences ----------------------------------------------------------------------------------


def test_limits():
    figures = diagnose(solenoidal(GRIDS["sphere"]())).as_dict()
    figures |= {"energy_change": -0.05, "mass_change": np.float32(1e-12)}
    limits = {"divergence": 1e-12, "energy_change": 0.02, "mass_change": 1e-10, "inner_wall.relative": 1e-12}
    verdicts = check_limits(figures, limits)
    assert [v.name for v in verdicts] == list(limits)
    assert [v.passed for v in verdicts] == [True, False, True, True]  # a loss counts like a gain
    assert verdicts[1].found == -0.05
    assert verdicts[0].found == figures["divergence"]["linf"]
    assert check_limits({"divergence": 0.02}, {"divergence": 0.02})[0].passed


def test_limits_hold_on_every_grid_by_the_same_names():
    box, ball = (diagnose(solenoidal(GRIDS[kind]())).as_dict() for kind in ("box", "sphere"))
    assert differences(box, ball).keys() == differences(ball, ball).keys()
    assert not check_limits(box, {"inner_wall.net": 1.0})[0].passed  # there is no such wall


@pytest.mark.parametrize(
    ("limits", "message"),
    [
        ({"divergance": 1.0}, "'divergance': there is no such figure; the nearest is 'divergence'"),
        ({"energy.axis4": 1.0}, "the nearest is 'energy.axis"),
        ({"energy": 1.0}, "there is no such figure"),
        ({"divergence": math.nan}, "expected a finite number"),
        ({"divergence": -1.0}, "not negative"),
        ({"divergence": True}, "expected a finite number"),
        ({"divergence": "small"}, "expected a finite number"),
    ],
)
def test_limits_that_make_no_sense(limits, message):
    with pytest.raises(JobError, match=message):
        check_limits(diagnose(solenoidal(GRIDS["box"]())).as_dict(), limits)


def test_differences_of_two_fields():
    grid = GRIDS["cylinder"]()
    flux = solenoidal(grid)
    stronger = fm.FaceFlux(grid, tuple(1.1 * f for f in flux.faces))
    found = differences(diagnose(flux).as_dict(), diagnose(stronger).as_dict())
    np.testing.assert_allclose(found["energy.total"].relative, 0.21, rtol=1e-12)
    np.testing.assert_allclose(found["strength.largest"].relative, 0.1, rtol=1e-12)
    assert found["cells"].change == 0
    assert found["outer_wall.net"].change is None  # the walls of this cylinder are not closed
    assert differences({"a": 0.0}, {"a": 1.0, "b": 2.0})["a"].relative is None
