"""The projection against matrices written out, and what must hold to the last bit."""

from __future__ import annotations

import json
import tracemalloc

import numpy as np
import pytest

import fieldmover as fm
from fieldmover import compute
from fieldmover.errors import FieldError
from fieldmover.forms.fields import close_faces
from fieldmover.forms.incidence import d2
from fieldmover.forms.measures import face_conductances
from tests.cases import bent
from tests.matrices import divergence_matrix, gather, least_change


def _line(n):
    return np.linspace(0, 1, n + 1)


def _shell(n1, n2, n3):
    return fm.spherical_grid(np.geomspace(1, 3, n1 + 1), np.pi * _line(n2), 2 * np.pi * _line(n3))


def _ring(nodes):
    return fm.warped_grid(
        2 * np.pi * nodes, np.linspace(1, 2, 4), np.linspace(0, 1, 4),
        lambda a, b, c: (b * np.cos(a + 0.2 * c), -b * np.sin(a + 0.2 * c), c + 0.2 * np.sin(a)),
        periodic=(True, False, False),
    )  # fmt: skip


GRIDS = {
    "even box": fm.cartesian_grid(_line(5), _line(4), _line(6)),
    "uneven box": fm.cartesian_grid(_line(5) ** 1.5, _line(4) ** 2, _line(6) ** 1.2),
    "flat box": fm.cartesian_grid(_line(6), _line(1), _line(2)),
    "torus": fm.cartesian_grid(_line(4), _line(5), _line(3), periodic=(True, True, True)),
    "uneven torus": fm.cartesian_grid(_line(4) ** 2, _line(5), _line(3) ** 2, periodic=(True, True, True)),
    "thin torus": fm.cartesian_grid(_line(4), _line(1), _line(2), periodic=(True, True, True)),
    "slab": fm.cartesian_grid(_line(4), _line(5), _line(6), periodic=(True, True, False)),
    "shell": _shell(4, 5, 6),
    "cone": fm.spherical_grid(np.geomspace(1, 3, 5), np.linspace(0, 1, 5), 2 * np.pi * _line(5)),
    "wedge": fm.spherical_grid(np.geomspace(1, 3, 5), np.linspace(0.8, 2, 5), np.linspace(0, 1, 4)),
    "pipe": fm.cylindrical_grid(_line(4), 2 * np.pi * _line(6), _line(3)),
    "annulus": fm.cylindrical_grid(1 + _line(4), 2 * np.pi * _line(6), _line(3) ** 2),
    "bent": bent(4),
    "bent ring": _ring(_line(6)),
}
WALLS = {
    "open": "open",
    "fixed": "fixed",
    "mixed": (("fixed", "open"), ("open", "fixed"), ("open", "open")),
    "one": (("fixed", "fixed"), ("fixed", "fixed"), ("fixed", "open")),
}


def noise(grid, seed=0):
    """Random fluxes of all sizes from 0.01 to 1, with divergence everywhere."""
    rng = np.random.default_rng(seed)
    faces = tuple(
        rng.normal(size=grid.face_shape(d)) * 10.0 ** rng.uniform(-2, 0, grid.face_shape(d)) for d in range(3)
    )
    close_faces(grid, faces)
    return fm.FaceFlux(grid, faces)


def without_net_flux(flux):
    """The same with no flux through any wall, which fixed walls need."""
    for axis, f in enumerate(flux.faces):
        if not flux.grid.periodic[axis]:
            f[tuple(0 if d == axis else slice(None) for d in range(3))] = 0
            f[tuple(-1 if d == axis else slice(None) for d in range(3))] = 0
    return flux


def wall_columns(grid, columns, walls):
    """Which columns lie in fixed walls."""
    held = np.zeros(len(columns), dtype=bool)
    for place, (axis, index) in enumerate(columns):
        pair = walls if isinstance(walls, str) else walls[axis]
        low, high = (pair, pair) if isinstance(pair, str) else pair
        if not grid.periodic[axis]:
            held[place] = (index[axis] == 0 and low == "fixed") or (index[axis] == grid.shape[axis] and high == "fixed")
    return held


def expected(flux, walls="open", weights=None, held=None, excised=None, hole=None):
    """Projection by matrices; values in the order of the columns, and the columns."""
    grid = flux.grid
    matrix, columns = divergence_matrix(grid.shape, grid.periodic)
    g = gather(face_conductances(grid), columns)
    if weights is not None:
        g = g / gather(weights, columns)
    keep = wall_columns(grid, columns, walls) | (g == 0)
    if held is not None:
        keep |= gather(held, columns)
    if excised is not None:
        matrix = matrix[~excised.ravel()]
    if hole is not None:
        out_of_hole = np.array([float(axis == hole and index[hole] == 0) for axis, index in columns])
        matrix = np.vstack([matrix, out_of_hole])
    return least_change(matrix, g, gather(flux.faces, columns), keep), columns


def assert_same(clean, values, columns, tolerance):
    found = gather(clean.faces, columns)
    np.testing.assert_allclose(found, values, rtol=0, atol=tolerance * np.abs(values).max())


@pytest.mark.parametrize("walls", WALLS.values(), ids=WALLS)
@pytest.mark.parametrize("grid", GRIDS.values(), ids=GRIDS)
def test_least_change_on_every_grid(grid, walls):
    flux = noise(grid)
    if walls != "open":
        flux = without_net_flux(flux)
    clean, record = fm.project(flux, walls, tolerance=1e-13)
    hole = 0 if grid is GRIDS["shell"] and walls == "open" else None
    assert_same(clean, *expected(flux, walls, hole=hole), 1e-11)
    assert not d2(clean.faces).any()
    assert record.method == ("conjugate gradients" if grid.kind == "warped" else "direct")


@pytest.mark.parametrize("grid", GRIDS.values(), ids=GRIDS)
def test_weights_frozen_and_excised_together(grid):
    flux, rng = noise(grid), np.random.default_rng(5)
    weights = tuple(10.0 ** rng.uniform(-1, 1, f.shape) for f in flux.faces)
    frozen = tuple(rng.random(f.shape) < 0.1 for f in flux.faces)
    for axis, seam in enumerate(grid.periodic):
        for array in (*weights, *frozen) if seam else ():
            if array.shape[axis] == grid.shape[axis] + 1:
                np.moveaxis(array, axis, 0)[-1] = np.moveaxis(array, axis, 0)[0]
    excised = rng.random(grid.shape) < 0.1
    clean, _ = fm.project(flux, tolerance=1e-13, weights=weights, frozen=frozen, excised=excised)
    hole = 0 if grid is GRIDS["shell"] else None
    values, columns = expected(flux, weights=weights, held=frozen, excised=excised, hole=hole)
    assert_same(clean, values, columns, 1e-9)
    for new, old, mask in zip(clean.faces, flux.faces, frozen, strict=True):
        assert np.array_equal(new[mask], old[mask])
    gross = sum(np.abs(f).max() for f in clean.faces)
    assert np.abs(d2(clean.faces)[~excised]).max() < 1e-15 * gross


def test_loose_tolerance_still_ends_at_zero():
    flux = noise(bent(6))
    clean, record = fm.project(flux, tolerance=0.1)
    assert record.iterations < 5
    assert not d2(clean.faces).any()


def test_a_second_projection_changes_nothing():
    clean, _ = fm.project(noise(GRIDS["shell"]))
    again, record = fm.project(clean)
    assert again is clean
    assert (record.method, record.iterations, record.energy_of_change) == ("none", 0, 0.0)


def test_energy_removed_is_that_of_the_change():
    # F' and F - F' are at right angles, wherever no held face carries flux.
    for name in ("shell", "pipe", "bent", "uneven torus"):
        _, record = fm.project(noise(GRIDS[name]), tolerance=1e-13)
        assert record.energy_removed == pytest.approx(record.energy_of_change, rel=1e-10)
        assert record.energy_before == pytest.approx(record.energy_after + record.energy_removed, rel=1e-14)
        assert record.rms_change == pytest.approx(np.sqrt(record.energy_of_change / record.energy_before))


def test_periodic_boxes_keep_their_mean_flux():
    grid = GRIDS["torus"]
    flux = noise(grid)
    clean, _ = fm.project(flux)
    for axis in range(3):
        ends = tuple(slice(None, -1) if d == axis else slice(None) for d in range(3))
        assert clean.faces[axis][ends].mean() == pytest.approx(flux.faces[axis][ends].mean(), abs=1e-15)
        first, last = (np.moveaxis(clean.faces[axis], axis, 0)[end] for end in (0, -1))
        assert np.array_equal(first, last)


def test_fixed_walls_keep_their_flux_to_rounding():
    grid = GRIDS["wedge"]
    flux = fm.curl(fm.potential_from_function(grid, lambda x, y, z: (y * z, np.cos(x), x * y)))
    for f in flux.faces:
        f[1:-1, 1:-1, 1:-1] += 0.01 * np.random.default_rng(1).normal(size=f[1:-1, 1:-1, 1:-1].shape)
    clean, _ = fm.project(flux, walls="fixed")
    largest = max(np.abs(f).max() for f in flux.faces)
    for axis in range(3):
        for end in (0, -1):
            new, old = (np.moveaxis(f.faces[axis], axis, 0)[end] for f in (clean, flux))
            np.testing.assert_allclose(new, old, rtol=0, atol=1e-14 * largest)
    assert not d2(clean.faces).any()


def test_walls_by_axis_name():
    flux = noise(GRIDS["shell"])
    named, _ = fm.project(flux, walls={"r": ("fixed", "open")})
    listed, _ = fm.project(flux, walls=(("fixed", "open"), "open", "open"))
    assert all(np.array_equal(a, b) for a, b in zip(named.faces, listed.faces, strict=True))


def test_hole():
    flux = noise(GRIDS["shell"])
    charge = flux.f1[0].sum()
    neutral, record = fm.project(flux)
    assert record.charge_before == pytest.approx(charge, rel=1e-14)
    assert neutral.f1[0].sum() == pytest.approx(0, abs=1e-15)
    assert record.charge_after == 0.0
    free, record = fm.project(flux, hole="free")
    assert_same(free, *expected(flux), 1e-11)
    assert record.charge_after == pytest.approx(free.f1[0].sum(), rel=1e-13)
    assert abs(record.charge_after) > 0.01 * abs(charge)
    _, record = fm.project(flux, walls={"r": ("fixed", "open")})
    assert record.charge_after == pytest.approx(charge, rel=1e-13)


def test_hole_inside_fixed_outer_wall():
    grid = GRIDS["shell"]
    flux = noise(grid)
    with pytest.raises(fm.errors.ChargeError, match="flows out of the grid") as found:
        fm.project(flux, walls={"r": ("open", "fixed")})
    assert found.value.charge == pytest.approx(flux.f1[-1].sum(), rel=1e-12)
    flux.f1[-1] -= flux.f1[-1].mean()
    walls = (("open", "fixed"), "open", "open")
    clean, record = fm.project(flux, walls=walls)
    assert_same(clean, *expected(flux, walls, hole=0), 1e-11)
    assert not d2(clean.faces).any()
    assert abs(record.charge_after) < 1e-14


def test_hole_on_any_axis():
    # The shell again, axes in the order phi, r, theta.
    def to_cartesian(phi, r, theta):
        return r * np.sin(theta) * np.cos(phi), r * np.sin(theta) * np.sin(phi), r * np.cos(theta)

    grid = fm.warped_grid(
        2 * np.pi * _line(6), np.geomspace(1, 3, 5), np.pi * _line(5), to_cartesian,
        periodic=(True, False, False), poles=(None, None, "both"),
    )  # fmt: skip
    flux = noise(grid)
    clean, record = fm.project(flux, tolerance=1e-13)
    assert_same(clean, *expected(flux, hole=1), 1e-11)
    assert record.charge_before == pytest.approx(flux.f2[:, 0].sum(), rel=1e-13)
    assert record.charge_after == 0.0


def test_excised_cells_may_hold_charge_that_nothing_else_may():
    grid = GRIDS["even box"]
    flux = noise(grid)
    excised = np.zeros(grid.shape, dtype=bool)
    excised[2, 1, 3] = True
    clean, record = fm.project(flux, walls="fixed", excised=excised, tolerance=1e-12)
    net = d2(clean.faces)
    walls = sum(
        np.moveaxis(f, axis, 0)[-1].sum() - np.moveaxis(f, axis, 0)[0].sum() for axis, f in enumerate(flux.faces)
    )
    assert net[2, 1, 3] == pytest.approx(walls, rel=1e-12)
    net[2, 1, 3] = 0
    assert not net.any()
    assert record.excised_cells == 1


def frozen_outside(grid, cells):
    """Masks that leave only the faces between the given cells free."""
    frozen = []
    for axis in range(3):
        mask = np.ones(grid.face_shape(axis), dtype=bool)
        inner = np.moveaxis(mask, axis, 0)
        of_cells = np.moveaxis(cells, axis, 0)
        inner[1:-1] = ~(of_cells[1:] & of_cells[:-1])
        frozen.append(mask)
    return frozen


def test_frozen_faces_on_the_quantum_leave_no_divergence_at_all():
    grid = GRIDS["uneven box"]
    known, _ = fm.project(noise(grid))
    quantum = 2.0**-48
    cells = np.zeros(grid.shape, dtype=bool)
    cells[1:4, 1:3, 2:5] = True
    frozen = frozen_outside(grid, cells)
    flux = fm.FaceFlux(
        grid,
        tuple(np.where(m, np.rint(f / quantum) * quantum, 0.0) for m, f in zip(frozen, known.faces, strict=True)),
    )
    # Rounding to the quantum has made divergence again outside, where all faces are frozen: move it in first.
    flux = fm.project(flux, quantum=quantum)[0]
    flux = fm.FaceFlux(grid, tuple(np.where(m, f, 0.3) for m, f in zip(frozen, flux.faces, strict=True)))
    clean, record = fm.project(flux, frozen=frozen, quantum=quantum)
    assert not d2(clean.faces).any()
    assert all((np.rint(f / quantum) * quantum == f).all() for f in clean.faces)
    assert all(np.array_equal(a[m], b[m]) for a, b, m in zip(clean.faces, flux.faces, frozen, strict=True))
    assert record.frozen_faces == sum(int(m.sum()) for m in frozen)


def test_each_closed_region_is_its_own_problem():
    grid = GRIDS["even box"]
    flux, cells = noise(grid), np.zeros(grid.shape, dtype=bool)
    cells[:2], cells[3:] = True, True
    frozen = frozen_outside(grid, cells)
    for f, m in zip(flux.faces, frozen, strict=True):
        f[m] = 0
    clean, _ = fm.project(flux, frozen=frozen, tolerance=1e-13)
    values, columns = expected(flux, held=frozen)
    assert_same(clean, values, columns, 1e-11)
    assert not d2(clean.faces).any()
    flux.f1[2:4, 1, 1] = 0.25  # from the first region through the layer between into the second
    with pytest.raises(
        fm.errors.ChargeError, match=r"net flux of 0.25 flows out of the 48 cells around cell \[0, 0, 0\]"
    ):
        fm.project(flux, frozen=frozen)


def test_same_bits_on_one_and_two_threads():
    grid = GRIDS["bent"]
    flux = noise(grid)
    before = compute.threads()
    found = []
    try:
        for count in (1, 2):
            compute.set_threads(count)
            found.append(fm.project(flux)[0])
    finally:
        compute.set_threads(before)
    assert all(np.array_equal(a, b) for a, b in zip(found[0].faces, found[1].faces, strict=True))


def test_heavy_faces_change_less():
    grid = GRIDS["even box"]
    flux = noise(grid)
    weights = [np.ones_like(f) for f in flux.faces]
    weights[0][2] = 1e3
    plain, _ = fm.project(flux)
    heavy, _ = fm.project(flux, weights=weights)
    assert np.abs(heavy.f1 - flux.f1)[2].max() < 0.05 * np.abs(plain.f1 - flux.f1)[2].max()


def test_weights_by_field_strength():
    grid = fm.cartesian_grid(_line(4), _line(4), _line(4))
    flux = fm.flux_from_function(grid, lambda x, y, z: (3 + 0 * x, 0 * y, 4 + 0 * z))
    flux.f2[2, 2, 2] = 1e-3
    strengths = []

    def weight(b):
        strengths.append(b)
        return 1 + b

    fm.project(flux, weights=weight)
    assert [b.shape for b in strengths] == [f.shape for f in flux.faces]
    np.testing.assert_allclose(strengths[0], 5.0, atol=1e-3)


def test_record_is_plain_json():
    flux = noise(GRIDS["shell"])
    flux.f1[2, 3, 4] += 100
    _, record = fm.project(flux)
    found = json.loads(json.dumps(record.as_dict(), allow_nan=False))
    assert found["divergence_before"]["linf"] > 0.1
    assert found["divergence_after"] == {"linf": 0.0, "l1": 0.0, "l2": 0.0}
    assert found["largest_change_cell"][1:] == [3, 4]
    x, y, z = found["largest_change_at"]
    assert np.degrees(np.arccos(z / np.hypot(np.hypot(x, y), z))) == pytest.approx(180 * 3.5 / 5)


ZERO = GRIDS["flat box"]


def _ones(dtype=float):
    return [np.ones(ZERO.face_shape(d), dtype=dtype) for d in range(3)]


def _with(arrays, value):
    arrays[1][3, 1, 0] = value
    return arrays


BAD = {
    "zero weight": ({"weights": _with(_ones(), 0.0)}, r"axis 2: 1 values .* 0\.0.* at index \[3, 1, 0\]"),
    "negative weight": ({"weights": _with(_ones(), -1.0)}, "not positive and finite"),
    "weight not a number": ({"weights": _with(_ones(), np.nan)}, "not positive and finite"),
    "shape of weights": ({"weights": _ones()[::-1]}, r"\(6, 1, 3\), expected float64 of shape \(7, 1, 2\)"),
    "two weights": ({"weights": _ones()[:2]}, "weights: 2 arrays, expected 3"),
    "weights by a bad function": ({"weights": lambda b: -b}, "not positive and finite"),
    "frozen as numbers": ({"frozen": _ones()}, "frozen of axis 1: float64 array .* expected bool"),
    "all frozen": ({"frozen": _ones(bool)}, "frozen: every face is"),
    "all excised": ({"excised": np.ones(ZERO.shape, dtype=bool)}, "excised: every cell is"),
    "excised as numbers": ({"excised": np.zeros(ZERO.shape)}, "excised: float64 array"),
    "tolerance below round-off": ({"tolerance": 1e-17}, "tolerance: 1e-17, expected at least 1e-14"),
    "tolerance not a number": ({"tolerance": np.nan}, "tolerance: nan"),
    "tolerance of one": ({"tolerance": 1.0}, "less than 1"),
    "unknown wall": ({"walls": "shut"}, "walls of axis 1: 'shut', expected 'open' or 'fixed'"),
    "unknown axis": ({"walls": {"r": "open"}}, "walls: axis 'r', expected x, y, z"),
    "two walls": ({"walls": ("open", "open")}, "walls: 2 entries, expected one for each of 3 axes"),
    "three ends": ({"walls": (("open",) * 3, "open", "open")}, "walls of axis 1: 3 entries, expected two"),
    "unknown hole": ({"hole": "deep"}, "hole: 'deep', expected 'neutral' or 'free'"),
    "quantum not a power of two": ({"quantum": 3e-15}, "quantum: 3e-15, expected a power of two"),
    "quantum too small": ({"quantum": 2.0**-60}, "quantum: .* not below"),
}  # fmt: skip


@pytest.mark.parametrize(("arguments", "message"), BAD.values(), ids=BAD)
def test_bad_input_is_named(arguments, message):
    with pytest.raises(fm.errors.FieldError, match=message):
        fm.project(noise(ZERO), **arguments)


def test_values_that_are_not_finite_are_counted():
    flux = noise(ZERO)
    flux.f2[4, 1, 0] = np.nan
    with pytest.raises(fm.errors.FieldError, match=r"axis 2: 1 values are not finite, the first at index \[4, 1, 0\]"):
        fm.project(flux)


def test_not_converged_carries_the_history():
    flux = noise(GRIDS["even box"])
    weights = [10.0 ** np.random.default_rng(2).uniform(-12, 12, f.shape) for f in flux.faces]
    with pytest.raises(fm.errors.NotConverged, match=r"after \d+ iterations the largest net flux is") as found:
        fm.project(flux, weights=weights, tolerance=1e-14)
    assert len(found.value.history) > 10


def test_divergence_in_a_cell_with_only_frozen_faces():
    flux, frozen = noise(ZERO), [np.zeros(ZERO.face_shape(d), dtype=bool) for d in range(3)]
    frozen[0][2:4, 0, 1] = frozen[1][2, :, 1] = frozen[2][2, 0, 1:3] = True
    with pytest.raises(fm.errors.ChargeError, match=r"1 cells .* the first is \[2, 0, 1\] with a net flux of"):
        fm.project(flux, frozen=frozen)


def test_a_field_that_is_nearly_clean_is_cleaned_to_its_own_rounding():
    """A tolerance relative to a divergence near round-off cannot be reached, and need not be."""
    q = np.linspace(-1, 1, 13)
    grid = fm.warped_grid(q, q, q, lambda a, b, c: (a + 0.05 * np.sin(2 * b), b + 0.05 * np.cos(a), c + 0 * a))
    flux = fm.curl(fm.potential_from_function(grid, lambda x, y, z: (z, x, y)))
    rng = np.random.default_rng(1)
    a, b, c = (f + 1e-12 * rng.standard_normal(f.shape) * abs(f).max() for f in flux.faces)
    clean, record = fm.project(fm.FaceFlux(grid, (a, b, c)))
    assert record.divergence_before.linf > 1e-13
    assert fm.diagnose(clean).divergence.linf < 1e-15


@pytest.fixture
def one_thread():
    """Every thread has some planes in work."""
    before = compute.threads()
    compute.set_threads(1)
    yield
    compute.set_threads(before)


@pytest.mark.usefixtures("one_thread")
@pytest.mark.parametrize("given", ["nothing", "frozen", "weights"])
def test_memory_is_eight_arrays_at_most(given):
    """NumPy tells tracemalloc of every array, so this counts what is alive at once."""

    def request(n):
        flux = noise(bent(n))
        if given == "weights":
            return flux, {"weights": [np.full(f.shape, 2.0) for f in flux.faces]}
        if given == "nothing":
            return flux, {}
        masks = [np.zeros(f.shape, dtype=bool) for f in flux.faces]
        masks[0][n // 2, : n // 2] = True
        return flux, {"frozen": masks}

    small, arguments = request(4)
    fm.project(small, **arguments)  # compiles
    n = 96
    flux, arguments = request(n)
    tracemalloc.start()
    try:
        fm.project(flux, tolerance=1e-3, **arguments)
        most = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    assert most <= 8 * flux.f1.itemsize * n**3


@pytest.mark.parametrize("name", ["theta", "phi"])
def test_walls_that_a_sphere_does_not_have(name):
    grid = fm.spherical_grid([1, 2], np.linspace(0, np.pi, 5), np.linspace(0, 2 * np.pi, 9))
    flux = fm.flux_from_function(grid, lambda x, y, z: (x, y, z))
    with pytest.raises(FieldError, match="has none, it ends at a seam or at poles"):
        fm.project(flux, walls={name: "fixed"})
