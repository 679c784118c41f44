"""Arrays and axes as codes store them."""

from __future__ import annotations

import itertools

import h5py
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fieldmover.errors import DataError
from fieldmover.snapshots.axes import MEANING, from_centres, from_dataset, snapped, spaced
from fieldmover.snapshots.gate import Snapshot
from fieldmover.snapshots.layout import ORDERS, Layout, read_axis, staggering

CELLS = (4, 5, 6)


@pytest.fixture
def path(tmp_path):
    return tmp_path / "snapshot.h5"


def store(path, **arrays):
    with h5py.File(path, "w") as file:
        for name, values in arrays.items():
            file[name] = values


@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize("ghosts", [(0, 0, 0), (3, 2, 1)])
@pytest.mark.parametrize("at", ["faces", "edges", "cells"])
def test_every_layout_is_turned_and_stripped(path, order, ghosts, at):
    for component in range(3):
        shape = tuple(n + extra for n, extra in zip(CELLS, staggering(at, component), strict=True))
        inside = np.random.default_rng(component).random(shape)
        padded = np.pad(inside, [(g, g) for g in ghosts], constant_values=np.nan)
        axes = [int(name[1]) - 1 for name in order.split()]
        store(path, a=padded.transpose(axes).astype("f4"))
        layout = Layout(order, ghosts)
        with Snapshot(path) as snapshot:
            stored = tuple(n + 2 * g for n, g in zip(CELLS, ghosts, strict=True))
            assert layout.stored_cells(snapshot, "a", at, component) == stored
            found = layout.read(snapshot, "a", CELLS, at, component)
        assert found.dtype == np.float64
        assert found.flags.c_contiguous
        assert np.array_equal(found, inside.astype("f4"))
        assert np.array_equal(Layout(order).outside(inside), inside.transpose(axes))
        assert np.array_equal(Layout(order).inside(inside.transpose(axes)), inside)


def wrong(path, layout, *words, at="faces"):
    with Snapshot(path) as snapshot, pytest.raises(DataError) as caught:
        layout.read(snapshot, "a", CELLS, at, 0)
    for word in words:
        assert word in str(caught.value)


def test_wrong_shapes_say_what_was_found_and_expected(path):
    store(path, a=np.ones((4, 5, 6)))
    wrong(path, Layout(), "dataset 'a' has shape (4, 5, 6)", "expected (5, 5, 6)", "faces normal to q1")
    store(path, a=np.ones((6, 5, 5)))
    wrong(path, Layout(), 'axes = "q3 q1 q2", ghosts = [0, 0, 0] would fit')
    store(path, a=np.ones((5, 5, 6)))
    wrong(path, Layout(ghosts=(2, 2, 2)), "expected (9, 9, 10)", "ghosts = [0, 0, 0] would fit")
    store(path, a=np.ones((5, 30)))
    wrong(path, Layout(), "shape (5, 30)")


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
def test_values_that_are_not_finite_are_counted_and_located(path, bad):
    values = np.ones((6, 5, 4))
    values[5, 2, 1] = values[3, 1, 3] = bad
    store(path, a=values)
    wrong(path, Layout("q3 q2 q1"), "2 values", str(bad), "[i1, i2, i3] = [1, 2, 5]", at="cells")


def axis(path, values, stored_cells, ghosts=0, kind="cartesian", centres=False, number=0):
    store(path, q=values)
    with Snapshot(path) as snapshot:
        layout, meaning = Layout(ghosts=(ghosts,) * 3), MEANING[kind][number]
        return read_axis(snapshot, "q", number, layout, stored_cells, meaning, centres)


def test_positions_with_and_without_those_of_ghosts(path):
    nodes = np.linspace(0, 1, 12)
    assert axis(path, nodes, 11, ghosts=3).tolist() == nodes[3:-3].tolist()
    assert axis(path, nodes[3:-3], 11, ghosts=3).tolist() == nodes[3:-3].tolist()
    centres = 0.5 * (nodes[1:] + nodes[:-1])
    for part in (centres, centres[3:-3]):
        assert np.allclose(axis(path, part, 11, ghosts=3, centres=True), nodes[3:-3], atol=1e-15)


@pytest.mark.parametrize(
    ("values", "words"),
    [
        (np.linspace(0, 1, 10), "expected 6 nodes of q1, or 12 with those of ghosts"),
        (np.ones((6, 2)), "shape \\(6, 2\\)"),
        ([0, 1, 2, 2, 3, 4], "does not increase: 2, then 2 at \\[3\\]"),
        ([0, 1, 2, np.nan, 3, 4], "NaN"),
        ([5, 4, 3, 2, 1, 0], "does not increase: 5, then 4 at \\[1\\]"),
    ],
)
def test_positions_that_make_no_axis(path, values, words):
    with pytest.raises(DataError, match=words):
        axis(path, values, 11, ghosts=3)


def test_angles_in_single_precision_reach_poles_and_seam_exactly(path):
    theta = axis(path, np.linspace(0, np.pi, 9).astype("f4"), 8, kind="spherical", number=1)
    assert theta[0] == 0
    assert theta[-1] == np.pi
    for start in (0.0, -np.pi, 0.3):
        phi = axis(path, (start + np.linspace(0, 2 * np.pi, 9)).astype("f4"), 8, kind="spherical", number=2)
        assert phi[-1] == phi[0] + 2 * np.pi
        assert abs(phi[0] - start) < (1e-15 if start != 0.3 else 1e-7)
    wedge = axis(path, np.linspace(0.1, 3.0, 9).astype("f4"), 8, kind="spherical", number=1)
    assert wedge[-1] == np.float32(3.0)


def test_centres_of_a_crowded_polar_angle_reach_the_poles():
    nodes = spaced(0, np.pi, 32, "sinh", 4)
    found = from_centres(0.5 * (nodes[1:] + nodes[:-1]), 0, "polar")
    assert found[0] == 0
    assert found[-1] == np.pi
    assert np.abs(found - nodes).max() < 0.15 * np.diff(nodes).min()


def test_centres_of_an_azimuth_close_the_seam():
    phi = np.linspace(-np.pi, np.pi, 17)
    found = from_centres(0.5 * (phi[1:] + phi[:-1]), 0, "azimuth")
    assert np.allclose(found, phi, atol=1e-15)
    assert found[-1] - found[0] == 2 * np.pi
    with_one_left_out = from_centres(0.5 * (phi[1:] + phi[:-1])[:-1], 0, "azimuth")
    assert with_one_left_out[-1] < np.pi - 0.3


def test_a_radius_that_starts_near_the_axis_starts_on_it():
    assert from_centres(np.array([0.5, 1.5, 2.5]) + 1e-3, 0, "radius")[0] == 0
    assert from_centres(np.array([5.5, 6.5, 7.5]), 0, "radius")[0] == 5
    assert from_dataset(np.array([0, 1, 2], dtype="i4"), "radius").tolist() == [0, 1, 2]
    assert snapped(np.array([1e-3, 1]), "radius", 1e-6)[0] == 1e-3
    with pytest.raises(DataError, match="at least 2"):
        from_centres(np.array([1.0]), 0, None)


@given(
    start=st.floats(-100, 100),
    length=st.floats(1e-3, 1e3),
    cells=st.integers(1, 50),
    ratio=st.floats(1.01, 50),
)
def test_rules_give_increasing_nodes_with_exact_ends(start, length, cells, ratio):
    for spacing in ("uniform", "sinh", "tanh"):
        nodes = spaced(start, start + length, cells, spacing, ratio)
        assert nodes[0] == start
        assert nodes[-1] == start + length
        assert len(nodes) == cells + 1
        assert np.all(np.diff(nodes) > 0)


def test_the_ratio_is_the_widest_over_the_narrowest_cell():
    for spacing, narrow in (("sinh", "middle"), ("tanh", "ends")):
        steps = np.diff(spaced(-1, 1, 2001, spacing, 7))
        assert steps.max() / steps.min() == pytest.approx(7, rel=5e-3)
        assert np.argmin(steps) == (1000 if narrow == "middle" else 0)


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ((1, 0, 4, "uniform"), "end must lie above"),
        ((0, 1, 0, "uniform"), "at least 1"),
        ((0, 1, 4, "log"), "above 0"),
        ((0, 1, 4, "sinh"), "needs ratio"),
        ((0, 1, 4, "cubic"), "expected one of uniform, log, sinh, tanh"),
    ],
)
def test_rules_that_make_no_axis(arguments, words):
    with pytest.raises(ValueError, match=words):
        spaced(*arguments)


def test_staggering_is_that_of_the_forms():
    for at, component in itertools.product(("faces", "edges"), range(3)):
        other = "edges" if at == "faces" else "faces"
        both = np.add(staggering(at, component), staggering(other, component))
        assert both.tolist() == [1, 1, 1]
