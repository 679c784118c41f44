"""Volumes passed on between neighbouring cells until each holds its own."""

import numpy as np
import pytest
from scipy.sparse import coo_matrix
from scipy.sparse.linalg import spsolve

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


@pytest.mark.parametrize("shape", [(12, 9, 10), (16, 16, 8)])
def test_multigrid_comes_near_the_sparse_solution(shape):
    """Against scipy's direct solver, on a grid with a seam and a hole."""
    rng = np.random.default_rng(5)
    held = rng.uniform(0.5, 1.5, shape)
    held[3:6, 2:5, 4:7] = 0
    room = np.where(rng.uniform(size=shape) < 0.1, held, 0.0)
    links = np.stack([np.minimum(held, np.roll(held, -1, axis=d)) for d in range(3)])
    links[1, :, -1], links[2, :, :, -1] = 0, 0
    number = np.arange(held.size).reshape(shape)
    rows, columns, values = [number.ravel()], [number.ravel()], [(room + (held == 0)).ravel()]
    for d in range(3):
        a, b, g = number.ravel(), np.roll(number, -1, axis=d).ravel(), links[d].ravel()
        rows += [a, b, a, b]
        columns += [a, b, b, a]
        values += [g, g, -g, -g]
    matrix = coo_matrix((np.concatenate(values), (np.concatenate(rows), np.concatenate(columns)))).tocsc()
    r = np.where(held > 0, rng.standard_normal(shape), 0.0)
    exact = spsolve(matrix, r.ravel()).reshape(shape)
    found = solve(links, room, r)
    assert np.abs(found - exact).max() < 0.02 * np.abs(exact).max()
    assert (found[held == 0] == 0).all()
