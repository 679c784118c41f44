"""Volumes passed on between neighbouring cells until each holds its own."""

import time

import numpy as np
import pytest
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components
from scipy.sparse.linalg import spsolve

from fieldmover import compute
from fieldmover.interpolation.exchange import even_out, exchange
from fieldmover.interpolation.multigrid import solve

SHAPES = [(7, 5, 6), (1, 9, 4), (16, 16, 16), (33, 1, 1), (2, 2, 2)]


def volumes(shape, seed):
    rng = np.random.default_rng(seed)
    volume = rng.uniform(0.5, 2, shape)
    return volume, volume * rng.uniform(0.97, 1.03, shape)


@pytest.mark.parametrize("shape", SHAPES)
@pytest.mark.parametrize("periodic", [(False, False, False), (True, False, True)])
def test_a_closed_set_of_cells_is_evened_out_exactly(shape, periodic):
    volume, held = volumes(shape, 1)
    held *= volume.sum() / held.sum()
    none = np.zeros(shape)
    found = exchange(periodic, held, volume - held, none, none > 0)
    np.testing.assert_allclose(found.apply(held), volume, rtol=1e-13)
    density = np.random.default_rng(2).uniform(1e-6, 1, shape)
    content = found.apply(density * held)
    assert content.sum() == pytest.approx((density * held).sum(), rel=1e-14)
    assert (content / volume).min() >= density.min() * (1 - 1e-12)
    assert (content / volume).max() <= density.max() * (1 + 1e-12)
    assert (found.extra == 0).all()


def test_what_is_lacking_as_a_whole_is_spread_evenly():
    held = np.array([1.0, 2.0, 1.0, 4.0]).reshape(4, 1, 1)
    found = exchange((False,) * 3, held, np.full((4, 1, 1), 0.2), 0 * held, held < 0)
    np.testing.assert_allclose(found.apply(held) / held, 1.0 + np.array([1, 0, 1, -0.5]).reshape(4, 1, 1) * 0.1)


def test_partly_covered_cells_take_up_the_rest():
    shape = (12, 10, 8)
    volume, held = volumes(shape, 3)
    covered = np.zeros(shape, dtype=bool)
    covered[2:-3, 2:-2, 1:-1] = True
    held[~covered] *= 0.5
    held[0], held[:, -1] = 0, 0
    found, coverage = even_out((False,) * 3, volume, covered, held, np.zeros(shape))
    after = found.apply(held)
    np.testing.assert_allclose(after[covered], volume[covered], rtol=1e-13)
    np.testing.assert_allclose(coverage, after / volume, rtol=1e-13)
    assert after.sum() == pytest.approx(held.sum(), rel=1e-14)
    assert (after[held == 0] == 0).all()
    assert coverage.min() >= 0
    assert coverage.max() == 1


def test_cells_fed_by_cut_source_cells_take_from_outside():
    shape = (9, 8, 7)
    volume, held = volumes(shape, 4)
    cut = np.zeros(shape)
    cut[0], cut[-1] = 0.4 * held[0], 0.004 * held[-1]
    found, coverage = even_out((False,) * 3, volume, volume > 0, held, cut)
    np.testing.assert_allclose(found.apply(held + found.extra), volume, rtol=1e-13)
    assert (found.extra[1:] == 0).all()
    assert found.extra.sum() == pytest.approx((volume - held).sum(), rel=1e-10)
    assert (coverage == 1).all()


def test_an_overfilled_cell_counts_as_covered_and_passes_on():
    volume, held = np.ones((3, 1, 1)), np.array([1.1, 0.98, 0.5]).reshape(3, 1, 1)
    covered = np.array([True, False, False]).reshape(3, 1, 1)
    found, coverage = even_out((False,) * 3, volume, covered, held, 0 * held)
    np.testing.assert_allclose(coverage[:, 0, 0], [1, 1, 0.58], rtol=1e-12)
    np.testing.assert_allclose(found.apply(held)[:, 0, 0], [1, 1, 0.58], rtol=1e-12)


def test_signs_come_before_exactness():
    """Fifteen volumes would have to pass through cells that hold a tenth of one each."""
    volume = np.ones((30, 1, 1))
    held = np.where(np.arange(30) < 15, 1.9, 0.1).reshape(30, 1, 1)
    found, _ = even_out((False,) * 3, volume, volume > 0, held, 0 * held)
    content = held * np.where(held > 1, 1e-6, 1.0)
    after = found.apply(content)
    assert after.min() > 0
    assert after.sum() == pytest.approx(content.sum(), rel=1e-14)


def test_what_outside_takes_back_cannot_be_passed_on():
    """The cell in the middle would lose 0.4 of its volume to outside and 0.8 to its neighbour, and get 0.5 of air."""
    held, missing = np.ones((3, 1, 1)), np.array([-0.5, -0.7, 0.8]).reshape(3, 1, 1)
    found = exchange((False,) * 3, held, missing, np.array([0.0, 1, 0]).reshape(3, 1, 1), held < 0)
    content = np.array([1e-6, 1, 1e-6]).reshape(3, 1, 1) * (held + found.extra)
    after = found.apply(content)
    assert after.min() > 0
    assert after.sum() == pytest.approx(content.sum(), rel=1e-14)


def test_cells_far_from_those_that_gave_too_much_are_exact():
    """As above, with forty cells before that have little to give each other."""
    held = np.concatenate(
        [np.random.default_rng(3).uniform(0.97, 1.03, 20), np.ones(20), np.full(10, 1.9), np.full(10, 0.1)]
    )
    volume = np.ones(60)
    volume[:20] = held[:20].mean()
    held, volume = held.reshape(60, 1, 1), volume.reshape(60, 1, 1)
    found, _ = even_out((False,) * 3, volume, volume > 0, held, 0 * held)
    after = found.apply(held)
    assert np.abs(after[40:] - 1).max() > 0.5
    np.testing.assert_allclose(after[:40], volume[:40], rtol=1e-12)


@pytest.mark.parametrize("shape", [(9, 8, 7), (1, 6, 12), (14, 1, 1), (5, 1, 9)])
@pytest.mark.parametrize("periodic", [(False, False, False), (True, True, True), (False, False, True)])
def test_every_connected_set_of_cells_shares_its_own_lack(shape, periodic):
    """Half of the cells are holes; the sets are those of scipy's search."""
    rng = np.random.default_rng(6)
    held = np.where(rng.uniform(size=shape) < 0.5, rng.uniform(0.5, 2, shape), 0.0)
    missing = held * rng.uniform(-1e-3, 1e-3, shape)
    number, pairs = np.arange(held.size).reshape(shape), []
    for d in range(3):
        a, b = number, np.roll(number, -1, axis=d)
        if not periodic[d]:
            a, b = (np.delete(part, -1, axis=d) for part in (a, b))
        both = (held.ravel()[a.ravel()] > 0) & (held.ravel()[b.ravel()] > 0)
        pairs.append(np.stack([a.ravel()[both], b.ravel()[both]]))
    a, b = np.concatenate(pairs, axis=1)
    _, label = connected_components(coo_matrix((np.ones(a.size), (a, b)), (held.size, held.size)))
    lack, whole = (np.bincount(label, part.ravel()) for part in (missing, held))
    share = (lack / np.where(whole > 0, whole, 1.0))[label].reshape(shape)
    found = exchange(periodic, held, missing, 0 * held, held < 0)
    np.testing.assert_allclose(found.apply(held), held + missing - share * held, rtol=1e-12)


@pytest.mark.parametrize("shape", [(33, 12, 8), (9, 33, 8), (6, 8, 35), (32, 8, 8)])
def test_flows_are_the_smallest_round_seams(shape):
    """A long wave, against scipy's direct solver; weighted by links, flows of least squares are differences."""
    rng, periodic = np.random.default_rng(7), (True, True, True)
    axis = int(np.argmax(shape))
    wave = 1 + 0.002 * np.sin(2 * np.pi * np.arange(shape[axis]) / shape[axis])
    held = rng.uniform(0.999, 1.001, shape) * np.expand_dims(wave, tuple(d for d in range(3) if d != axis))
    held *= held.size / held.sum()
    matrix, links = equations_of(held, 0 * held, periodic)
    p = np.append(0.0, spsolve(matrix[1:, 1:], (1 - held).ravel()[1:])).reshape(shape)
    exact = np.stack([links[d] * (np.roll(p, -1, axis=d) - p) for d in range(3)])
    found = exchange(periodic, held, 1 - held, 0 * held, held < 0)
    assert np.abs(found.flow - exact).max() < 0.01 * np.abs(exact).max()


@pytest.mark.parametrize("size", [1e45, 1e-40])
def test_volumes_of_any_unit(size):
    shape = (10, 9, 8)
    volume, held = volumes(shape, 8)
    held[7:] *= 0.5
    held[9] = 0
    cut = np.where(np.arange(8) == 0, 0.3 * held, 0.0)
    covered = np.broadcast_to(np.arange(10)[:, None, None] < 7, shape)
    usual, coverage = even_out((False, True, False), volume, covered, held, cut)
    scaled, same = even_out((False, True, False), size * volume, covered, size * held, size * cut)
    np.testing.assert_allclose(scaled.apply(size * held + scaled.extra)[:7], size * volume[:7], rtol=1e-13)
    np.testing.assert_allclose(same, coverage, rtol=1e-5)
    assert np.abs(scaled.flow / size - usual.flow).max() < 1e-4 * np.abs(usual.flow).max()


@pytest.mark.parametrize("shape", [(1, 1, 7), (1, 1, 11), (4, 4, 31)])
def test_large_cells_on_both_sides_of_an_odd_seam(shape):
    """They are neighbours of one colour, and nearly all that either has is the other."""
    volume = np.full(shape, 1e-3)
    volume[..., [0, -1]] = 1.0
    held = volume * np.random.default_rng(11).uniform(0.95, 1.05, shape)
    held *= volume.sum() / held.sum()
    found, _ = even_out((True, True, True), volume, volume > 0, held, 0 * held)
    np.testing.assert_allclose(found.apply(held), volume, rtol=1e-12)


@pytest.mark.parametrize("decades", [6, 8, 10])
@pytest.mark.parametrize("closed", [True, False])
@pytest.mark.parametrize("axes", [(0, 1, 2), (2, 1, 0)])
def test_volumes_over_many_decades(decades, closed, axes):
    """Cells of a ball whose radii grow by one factor: round-off of the large must not be left to the small."""
    radius = 10 ** np.linspace(-decades, 0, 121)
    belts = np.diff(-np.cos(np.linspace(0, np.pi, 13)))[:, None]
    volume = np.diff(radius**3)[:, None, None] * belts * np.full(24, np.pi / 36)
    held = volume * np.random.default_rng(12).uniform(0.97, 1.03, volume.shape)
    cut = np.zeros(volume.shape)
    if closed:
        held *= volume.sum() / held.sum()
    else:
        cut[-1] = 0.5 * held[-1]
    volume, held, cut = (np.ascontiguousarray(part.transpose(axes)) for part in (volume, held, cut))
    found, _ = even_out((axes[0] == 2, False, axes[2] == 2), volume, volume > 0, held, cut)
    np.testing.assert_allclose(found.apply(held + found.extra), volume, rtol=1e-12)
    assert (np.abs(found.flow) / held).max() < 0.4  # volume / 33 is what a cell alone would need


def test_small_cells_with_room_do_not_take_what_large_ones_leave():
    """Every other row can take from outside only at its small end."""
    volume, held = volumes((8, 6, 9), 14)
    volume, held = (part * 10.0 ** (-2 * np.arange(9)) for part in (volume, held))
    cut = np.zeros(volume.shape)
    cut[::2, :, 0], cut[1::2, :, -1] = 0.5 * held[::2, :, 0], 0.5 * held[1::2, :, -1]
    found, _ = even_out((False,) * 3, volume, volume > 0, held, cut)
    np.testing.assert_allclose(found.apply(held + found.extra), volume, rtol=1e-12)


def test_a_free_cell_with_little_room_in_a_closed_set():
    """The others are to be exact though what they have passes round it; it keeps what it holds."""
    volume, held = volumes((10, 10, 10), 13)
    covered = np.ones(volume.shape, dtype=bool)
    covered[:, 4, 5] = False
    held[covered] *= volume[covered].sum() / held[covered].sum()
    held[~covered] = 0.998 * volume[~covered]
    found, coverage = even_out((False,) * 3, volume, covered, held, 0 * held)
    np.testing.assert_allclose(found.apply(held) / volume, np.where(covered, 1.0, 0.998), rtol=1e-12)
    np.testing.assert_allclose(coverage, np.where(covered, 1.0, 0.998), rtol=1e-12)


def test_many_holes_in_long_lines_take_no_longer():
    held = np.ones((2, 2, 50_000))
    held[..., 1::2] = 0
    missing = 1e-3 * held
    missing[0] *= -1
    exchange((False,) * 3, held[..., :4].copy(), missing[..., :4].copy(), np.zeros((2, 2, 4)), held[..., :4] < 0)
    start = time.perf_counter()
    found = exchange((False,) * 3, held, missing, 0 * held, held < 0)
    assert time.perf_counter() - start < 1.5  # several times that if each part of a line looked at all beside it
    np.testing.assert_allclose(found.apply(held), held + missing, rtol=1e-12)


@pytest.mark.parametrize("shape", [(66, 80, 80), (67, 80, 80), (66, 80, 79)])  # several slabs
def test_threads_do_not_change_bits(shape):
    volume, held = volumes(shape, 9)
    held[:, :3] = 0
    cut = np.where(np.arange(shape[2]) == 0, 0.3 * held, 0.0)
    before, found = compute.threads(), []
    try:
        for threads in (1, 2, 3, 5):
            compute.set_threads(threads)
            found.append(even_out((True, False, True), volume, held > 0, held, cut)[0])
    finally:
        compute.set_threads(before)
    content = np.random.default_rng(10).uniform(size=shape)
    for other in found[1:]:
        assert (other.flow == found[0].flow).all()
        assert (other.extra == found[0].extra).all()
        assert (other.apply(content) == found[0].apply(content)).all()


def equations_of(held, room, periodic):
    """Sparse matrix and links, with 1 on the diagonal of holes."""
    links = np.stack([np.minimum(held, np.roll(held, -1, axis=d)) for d in range(3)])
    number = np.arange(held.size).reshape(held.shape)
    rows, columns, values = [number.ravel()], [number.ravel()], [(room + (held == 0)).ravel()]
    for d in range(3):
        if not periodic[d]:
            links[d][tuple(-1 if axis == d else slice(None) for axis in range(3))] = 0
        a, b, g = number.ravel(), np.roll(number, -1, axis=d).ravel(), links[d].ravel()
        rows += [a, b, a, b]
        columns += [a, b, b, a]
        values += [g, g, -g, -g]
    return coo_matrix((np.concatenate(values), (np.concatenate(rows), np.concatenate(columns)))).tocsc(), links


@pytest.mark.parametrize("shape", [(12, 9, 10), (16, 16, 8)])
def test_multigrid_comes_near_the_sparse_solution(shape):
    """Against scipy's direct solver, on a grid with a seam and a hole."""
    rng = np.random.default_rng(5)
    held = rng.uniform(0.5, 1.5, shape)
    held[3:6, 2:5, 4:7] = 0
    room = np.where(rng.uniform(size=shape) < 0.1, held, 0.0)
    matrix, links = equations_of(held, room, (True, False, False))
    r = np.where(held > 0, rng.standard_normal(shape), 0.0)
    exact = spsolve(matrix, r.ravel()).reshape(shape)
    found = solve(links.astype(np.float32), room.astype(np.float32), r.astype(np.float32))
    assert np.abs(found - exact).max() < 1e-3 * np.abs(exact).max()
    assert (found[held == 0] == 0).all()
