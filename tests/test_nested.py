"""Boxes within boxes.

References: fluxes of coarse faces are sums of those of fine ones, and every level is divergence-free on its own
(Balsara 2001, Divergence-free adaptive mesh refinement for magnetohydrodynamics, states both); fields in closed form;
the fill is orthogonal to all divergence-free changes, which is what makes its energy the least (Thomson's theorem, from
memory: Maxwell 1873, A Treatise on Electricity and Magnetism).
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import fieldmover as fm
from fieldmover.errors import ChargeError, FieldError, GridError
from fieldmover.grids.nested import nested_grid
from fieldmover.interpolation.coverage import known_faces
from fieldmover.interpolation.fluid import FluidPlan
from fieldmover.interpolation.nested import move_flux_nested
from fieldmover.interpolation.nested_fill import fill_nested
from fieldmover.interpolation.nested_fluid import NestedFluidPlan, move_content_nested
from tests.cases import largest_error, sphere, wedge
from tests.fields import WAVE


def line(low, high, cells):
    return np.linspace(low, high, cells + 1)


def cube(low, high, cells):
    return (line(low, high, cells),) * 3


# Inside `wedge` and `sphere`: two boxes that touch, with a third over both of them.
INSIDE = nested_grid(
    [
        [(line(1.3, 2.1, 8), line(-0.4, 0.4, 8), line(-0.4, 0.4, 8))],
        [
            (line(1.5, 1.7, 4), line(-0.2, 0.2, 8), line(-0.2, 0.2, 8)),
            (line(1.7, 1.9, 4), line(-0.2, 0.2, 8), line(-0.1, 0.3, 8)),
        ],
        [(line(1.6, 1.8, 12), line(-0.1, 0.1, 12), line(-0.1, 0.1, 12))],
    ]
)
# It leaves `wedge` at corners and covers the hole of `sphere`, which the first box of level 1 cuts in two; the second
# touches it in the hole.
LEAVING = nested_grid(
    [
        [cube(-1.6, 1.6, 8)],
        [
            (line(-0.4, 0.8, 6), line(-1.2, 1.2, 12), line(-1.2, 1.2, 12)),
            (line(0.8, 1.6, 4), line(-0.8, 0.8, 8), line(-0.8, 0.8, 8)),
        ],
    ]
)


@pytest.fixture(scope="module")
def flux():
    return fm.curl(fm.potential_from_function(wedge(16), WAVE.a))


@pytest.fixture(scope="module")
def around():
    return fm.curl(fm.potential_from_function(sphere(6), WAVE.a))


def span(coarse, fine, axis):
    """Nodes of the coarse box along an axis that the fine box reaches."""
    q, ends = coarse.nodes[axis], fine.nodes[axis][[0, -1]]
    return np.flatnonzero((q >= ends[0]) & (q <= ends[1]))


def under(coarse, fine, values, nodal):
    """Coarse index and sum of fine values, with math.fsum, for all a fine box covers; found by coordinates."""
    places = []
    for axis in range(3):
        nodes = span(coarse, fine, axis)
        starts = np.searchsorted(fine.nodes[axis], coarse.nodes[axis][nodes])
        inside = [(int(i), range(a, a + 1)) for i, a in zip(nodes, starts, strict=True)]
        cells = [(int(i), range(a, b)) for i, a, b in zip(nodes[:-1], starts[:-1], starts[1:], strict=True)]
        places.append(inside if axis == nodal else cells)
    for i, a in places[0]:
        for j, b in places[1]:
            for k, c in places[2]:
                yield (i, j, k), math.fsum(values[a.start : a.stop, b.start : b.stop, c.start : c.stop].ravel())


def check_identities(nested, moved):
    """Everything that holds bit for bit."""
    for flux in moved:
        assert np.abs(fm.divergence(flux).cells).max() == 0
    count = 0
    for n, coarse in enumerate(moved):
        for m, fine in enumerate(moved):
            if nested.level[m] != nested.level[n] + 1:
                continue
            for axis in range(3):
                for place, total in under(coarse.grid, fine.grid, fine.faces[axis], axis):
                    assert coarse.faces[axis][place] == total
                    count += 1
    return count


@pytest.mark.parametrize("order", [1, 3, 5, "limited"])
def test_coarse_fluxes_are_sums_of_fine_ones(flux, order):
    moved = move_flux_nested(flux, INSIDE, order)
    assert check_identities(INSIDE, moved) > 500
    ceiling = 0.15 if order == 1 else 1e-3
    for part in moved:
        exact = fm.flux_from_function(part.grid, WAVE.b)
        assert largest_error(part, exact.faces) < ceiling


def test_boxes_that_touch_share_bits(flux):
    _, left, right, _ = move_flux_nested(flux, INSIDE)
    np.testing.assert_array_equal(left.f1[-1, :, 2:], right.f1[0, :, :6])


def test_fine_boxes_are_as_accurate_as_a_plain_move(flux):
    for part in move_flux_nested(flux, INSIDE):
        exact = fm.flux_from_function(part.grid, WAVE.b).faces
        plain = largest_error(fm.move_flux(flux, part.grid), exact)
        assert largest_error(part, exact) < 1.3 * plain


def test_a_placed_target_is_the_same_boxes_elsewhere(flux):
    turn = np.array([[0.0, -1.0, 0.0], [1.0, 0.0, 0.0], [0.0, 0.0, 1.0]])
    moved = move_flux_nested(flux, INSIDE.placed((1.7, -1.7, 0.1), turn))
    check_identities(INSIDE, moved)
    for part in moved:
        assert largest_error(part, fm.flux_from_function(part.grid, WAVE.b).faces) < 1e-3


def test_the_mean_field_of_a_periodic_box_arrives():
    source = fm.cartesian_grid(*cube(0, 1, 8), periodic=(True, True, True))
    uniform = fm.flux_from_function(source, lambda x, y, z: (0 * x + 0.7, 0 * x - 1.3, 0 * x + 0.4))
    nested = nested_grid([[cube(0.25, 0.75, 4)], [cube(0.375, 0.625, 6)]])
    moved = move_flux_nested(uniform, nested)
    check_identities(nested, moved)
    for part in moved:
        for face, area, b in zip(part.faces, part.grid.face_areas(), (0.7, -1.3, 0.4), strict=True):
            np.testing.assert_allclose(face, b * area, rtol=1e-11)


@pytest.mark.parametrize("outside", ["least energy", "zero"])
def test_fills_keep_all_identities(around, outside):
    moved = move_flux_nested(around, LEAVING, outside=outside)
    assert check_identities(LEAVING, moved) > 100
    inside = np.sqrt(sum(c**2 for c in moved[1].grid.centres())) > 1.3
    known = fm.flux_from_function(moved[1].grid, WAVE.b).f1[1:]
    error = np.abs(moved[1].f1[1:] - known)[inside].max() / np.abs(known).max()
    assert error < 0.02


def test_one_box_is_filled_as_by_a_plain_move(around):
    nested = nested_grid([[cube(-1.6, 1.6, 10)]])
    for outside in ("least energy", "zero"):
        moved = move_flux_nested(around, nested, outside=outside)[0]
        plain = fm.move_flux(around, nested.boxes[0], outside=outside)
        for a, b in zip(moved.faces, plain.faces, strict=True):
            np.testing.assert_allclose(a, b, atol=1e-8 * np.abs(plain.f1).max())


def test_a_fill_has_the_least_energy():
    """Energy times change, over all faces of the mesh: zero for any divergence-free change of unknown faces."""
    nested = nested_grid([[cube(0, 6, 6)], [cube(2, 4, 4)]])
    rng = np.random.default_rng(3)
    # Known are the faces of the cells with x < 1 or x > 5: a potential there, nothing anywhere else.
    known_edges = [np.zeros(nested.boxes[0].edge_shape(d), dtype=bool) for d in range(3)]
    for mask in known_edges:
        mask[[0, -1]] = True
        if mask.shape[0] == 7:
            mask[[1, -2]] = True
    fine_unknown = tuple(np.zeros(nested.boxes[1].face_shape(d), dtype=bool) for d in range(3))
    quantum = 2.0**-45
    potential = [np.round(rng.normal(size=m.shape) / quantum) * quantum * m for m in known_edges]
    coarse = fm.curl(fm.EdgePotential(nested.boxes[0], tuple(potential))).faces
    known = known_faces(tuple(known_edges))
    zero = tuple(np.zeros(m.shape) for m in fine_unknown)
    filled = fill_nested(nested, [coarse, zero], [known, fine_unknown], "least energy", quantum)
    for f, k, c in zip(filled[0], known, coarse, strict=True):
        np.testing.assert_array_equal(f[k], c[k])
    check_identities(nested, [fm.FaceFlux(box, f) for box, f in zip(nested.boxes, filled, strict=True)])

    fine = [rng.normal(size=nested.boxes[1].edge_shape(d)) for d in range(3)]
    change = [rng.normal(size=m.shape) for m in known_edges]
    for d, (a, e) in enumerate(zip(change, fine, strict=True)):
        a[[0, -1]] = 0.0
        if d > 0:
            a[[1, -2]] = 0.0
        summed = e
        for axis in range(3):
            summed = summed[(slice(None),) * axis + (slice(None, None, 2),)] + (
                summed[(slice(None),) * axis + (slice(1, None, 2),)] if axis == d else 0.0
            )
        a[tuple(slice(2, 4 + (axis != d)) for axis in range(3))] = summed
    changes = [
        fm.curl(fm.EdgePotential(box, tuple(a))).faces for box, a in zip(nested.boxes, [change, fine], strict=True)
    ]
    product = size = 0.0
    for axis in range(3):
        wall = (slice(None),) * axis
        w = np.ones(coarse[axis].shape)  # distance of centres 1, area 1
        w[(*wall, [0, -1])] = 0.5
        w[tuple(slice(2, 4 + (d == axis)) for d in range(3))] = 0.0  # not part of the mesh
        v = np.full(zero[axis].shape, 0.5 / 0.25)
        v[(*wall, [0, -1])] = (0.5 + 0.25) / 0.25
        for weight, f, c in ((w, filled[0][axis], changes[0][axis]), (v, filled[1][axis], changes[1][axis])):
            product += float((weight * f * c).sum())
            size += float(np.abs(weight * f * c).sum())
    assert size > 1
    assert abs(product) < 1e-8 * size


def test_a_fill_that_would_need_a_monopole_is_refused():
    """Known faces round one cell of the coarse box, all of them with flux into it."""
    nested = nested_grid([[cube(0, 3, 3)], [cube(1, 2, 2)]])
    faces = [tuple(np.zeros(box.face_shape(d)) for d in range(3)) for box in nested.boxes]
    known = [tuple(np.ones(f.shape, dtype=bool) for f in fs) for fs in faces]
    for f, k in zip(faces[1], known[1], strict=True):
        k[1:-1] = k[:, 1:-1] = k[:, :, 1:-1] = False
        f[...] = 0.0
    known[1][0][1, :, :] = known[1][1][:, 1, :] = known[1][2][:, :, 1] = False
    known[1][0][[0, -1]] = True
    known[1][1][:, [0, -1]] = True
    known[1][2][:, :, [0, -1]] = True
    faces[1][0][0] = 0.25
    with pytest.raises(ChargeError, match="8 cells") as caught:
        fill_nested(nested, faces, known, "least energy", 2.0**-40)
    assert caught.value.charge == -1.0


def test_leaving_the_source_can_be_refused(flux):
    with pytest.raises(FieldError, match="leaves the source"):
        move_flux_nested(flux, LEAVING, outside="refuse")
    for wrong in ({"order": 2}, {"outside": "nothing"}):
        with pytest.raises(FieldError, match="expected one of"):
            move_flux_nested(flux, INSIDE, **wrong)


@pytest.mark.parametrize("nested", [INSIDE, LEAVING], ids=["inside", "leaving"])
def test_contents_add_up(nested):
    source = sphere(6)
    x, y, z = source.centres()
    content = fm.CellContent(source, source.cell_volumes() * (2 + np.sin(2 * x + y) * np.cos(z)))
    moved = move_content_nested(content, nested)
    plain = fm.move_content(content, nested.boxes[0])
    assert moved[0].cells.sum() == pytest.approx(plain.cells.sum(), rel=1e-13)
    leaves = sum(math.fsum(part.cells[~nested.covered(n)]) for n, part in enumerate(moved))
    assert leaves == pytest.approx(math.fsum(plain.cells.ravel()), rel=1e-13)
    for n, part in enumerate(moved):
        assert part.cells.min() >= 0
        for m in range(n + 1, len(moved)):
            if nested.level[m] == nested.level[n] + 1:
                for place, total in under(part.grid, moved[m].grid, moved[m].cells, None):
                    assert part.cells[place] == pytest.approx(total, rel=1e-15)


def test_contents_are_second_order_on_all_levels():
    source = wedge(24)
    volume = source.cell_volumes()

    def density(grid):
        x, y, z = grid.centres()
        return 2 + np.sin(2 * x + y) * np.cos(z)

    moved = move_content_nested(fm.CellContent(source, volume * density(source)), INSIDE)
    for part in moved:
        got = part.cells / part.grid.cell_volumes()
        assert np.abs(got / density(part.grid) - 1).max() < 0.01


def test_momentum_adds_up():
    source = sphere(6)
    x, y, z = source.centres()
    mass = fm.CellContent(source, source.cell_volumes() * (2 + np.sin(2 * x + y) * np.cos(z)))
    velocity = np.stack([np.sin(3 * x), np.cos(2 * y), np.sign(z)])
    moved, values = NestedFluidPlan(source, INSIDE).move_by_mass(mass, velocity)
    plain = FluidPlan(source, INSIDE.boxes[0])
    whole, there = plain.move_by_mass(mass, velocity)
    for part, again in zip(moved, move_content_nested(mass, INSIDE), strict=True):
        np.testing.assert_array_equal(part.cells, again.cells)
    leaves = [~INSIDE.covered(n) for n in range(len(moved))]
    for d in range(3):
        total = sum(float((m.cells * v[d])[leaf].sum()) for m, v, leaf in zip(moved, values, leaves, strict=True))
        size = float(np.abs(whole.cells * there[d]).sum())
        assert total == pytest.approx(float((whole.cells * there[d]).sum()), abs=1e-13 * size)
        for v in values:
            assert v[d].min() >= velocity[d].min()
            assert v[d].max() <= velocity[d].max()
    for n, part in enumerate(moved):
        for m in range(n + 1, len(moved)):
            if INSIDE.level[m] == INSIDE.level[n] + 1:
                for place, total in under(part.grid, moved[m].grid, moved[m].cells * values[m][0], None):
                    assert part.cells[place] * values[n][0][place] == pytest.approx(total, rel=1e-13, abs=1e-18)
    centres = [np.sin(3 * box.centres()[0]) for box in INSIDE.boxes]
    for box, v, exact in zip(INSIDE.boxes, values, centres, strict=True):
        alone = FluidPlan(source, box).move_by_mass(mass, velocity)[1]
        assert np.abs(v[0] - exact).max() < 1.3 * np.abs(alone[0] - exact).max()


def test_mass_lost_between_overlaps_is_dealt_out_by_volume():
    """Of an empty fine cell nothing can be scaled: its coarse cell's content goes by volume."""
    nested = nested_grid([[cube(0, 2, 2)], [cube(0, 1, 2)]])
    plan = NestedFluidPlan(nested.boxes[0], nested)
    cells = [np.ones((2, 2, 2)), np.zeros((2, 2, 2))]
    plan._deal_out(cells)
    np.testing.assert_array_equal(cells[1], np.full((2, 2, 2), 0.125))


@pytest.mark.parametrize(
    ("levels", "message"),
    [
        ([], "at least one"),
        ([[cube(0, 1, 4)], []], "at least one"),
        ([[(line(0, 1, 4), line(0, 1, 4))]], "2 node arrays"),
        ([[cube(0, 1, 4)], [cube(0.3, 0.75, 4)]], "low wall x = 0.3 is no node of level 0"),
        ([[cube(0, 1, 4)], [cube(0.25, 0.7, 4)]], "high wall x = 0.7"),
        ([[cube(0, 1, 4)], [cube(0.25, 0.75, 5)]], "5 cells along x where level 0 has 2"),
        ([[cube(0, 1, 4)], [cube(0.25, 0.75, 2)]], "2 cells along x where level 0 has 2"),
        ([[cube(0, 1, 4)], [cube(0.5, 1.25, 6)]], "high wall x = 1.25"),
        (
            [[cube(0, 1, 4)], [([0, 0.1, 0.25, 0.3, 0.5], *cube(0, 1, 8)[:2])], [cube(0, 0.5, 8)]],
            "node 6 along x is 0.375",
        ),
        ([[cube(0, 1, 4)], [cube(0, 0.5, 4), cube(0.5, 1, 6)]], "into 3 along x, box 0 of the same level into 2"),
        ([[cube(0, 1, 4)], [cube(0, 0.5, 4), cube(0.25, 0.75, 4)]], r"overlaps box 0 in x 0.25..0.5"),
        ([[cube(0, 1, 4)], [cube(0, 0.5, 4), cube(0.75, 1, 2)], [cube(0, 1, 16)]], "16 cells along x|leaves"),
        ([[cube(0, 1, 4)], [cube(0, 0.5, 4), cube(0.5, 1, 4)], [cube(0, 1, 16)]], "only 128 of the 512 cells"),
        ([[cube(0, 1, 4), cube(1, 2, 5)], [cube(0, 0.5, 4)]], None),
        ([[cube(0, 1, 4), (line(1, 2, 5), *cube(0, 1, 5)[:2])]], "lies a node of another box"),
        (
            [[cube(0, 1, 4)], [([0, 0.1, 0.25], *cube(0, 1, 8)[:2]), ([0, 0.12, 0.25], *cube(0, 1, 8)[:2])]],
            "same nodes",
        ),
    ],
)
def test_bad_boxes_are_named(levels, message):
    if message is None:
        assert len(nested_grid(levels).boxes) == 3
        return
    with pytest.raises(GridError, match=message):
        nested_grid(levels)


def test_nodes_take_the_bits_of_the_coarser_level():
    coarse = np.arange(5) * 0.1
    fine = np.linspace(0.1, 0.30000000000000004, 9) + 1e-13
    nested = nested_grid([[(coarse,) * 3], [(fine,) * 3]])
    np.testing.assert_array_equal(nested.boxes[1].nodes[0][::4], coarse[1:4])


@st.composite
def layouts(draw):
    """Levels of boxes that keep the rules, on uneven nodes."""
    steps = st.sampled_from([0.02, 0.03, 0.045])
    shape = [draw(st.integers(2, 4)) for _ in range(3)]
    nodes = []
    for cells, start in zip(shape, (1.4, -0.1, -0.1), strict=True):
        nodes.append(start + np.concatenate([[0.0], np.cumsum([draw(steps) for _ in range(cells)])]))
    levels, open_cells = [[tuple(nodes)]], np.ones(shape, dtype=bool)
    for _ in range(draw(st.integers(1, 2))):
        ratio = [draw(st.integers(2, 3)) for _ in range(3)]
        finer = [
            np.append((q[:-1, None] + np.diff(q)[:, None] * np.arange(r) / r).ravel(), q[-1])
            for q, r in zip(nodes, ratio, strict=True)
        ]
        taken, boxes = np.zeros(open_cells.shape, dtype=bool), []
        for _ in range(draw(st.integers(1, 3))):
            low = [draw(st.integers(0, n - 1)) for n in open_cells.shape]
            high = [draw(st.integers(a + 1, min(n, a + 3))) for a, n in zip(low, open_cells.shape, strict=True)]
            part = tuple(slice(a, b) for a, b in zip(low, high, strict=True))
            if open_cells[part].all() and not taken[part].any():
                taken[part] = True
                boxes.append(tuple(q[a * r : b * r + 1] for q, a, b, r in zip(finer, low, high, ratio, strict=True)))
        if not boxes:
            break
        levels.append(boxes)
        nodes, open_cells = finer, np.kron(taken, np.ones(ratio, dtype=bool))
    return levels


@settings(max_examples=25, deadline=None)
@given(levels=layouts(), leaving=st.booleans())
def test_any_layout_keeps_all_identities(flux, levels, leaving):
    nested = nested_grid(levels)
    if leaving:
        nested = nested.placed((-0.45, 0.0, 0.0))  # across the inner wall of the source
    moved = move_flux_nested(flux, nested)
    check_identities(nested, moved)
    for n, a in enumerate(moved):
        for b in moved[:n]:
            if nested.level[n] != nested.level[moved.index(b)]:
                continue
            shared = nested.meeting(n, moved.index(b))
            if shared is not None:
                for axis in range(3):
                    along = tuple(d != axis for d in range(3))
                    one, two = (
                        p[nested.window(m, *shared, along)]
                        for p, m in ((a.faces[axis], n), (b.faces[axis], moved.index(b)))
                    )
                    np.testing.assert_array_equal(one, two)
