"""Pictures and their alternative texts."""

from __future__ import annotations

import io

import numpy as np
import pytest
from matplotlib import image

import fieldmover as fm
from fieldmover.errors import JobError
from fieldmover.report.figures import Plane, _at, pictures

BOX = fm.cartesian_grid(np.linspace(-2, 2, 9), np.linspace(-1, 1, 5), np.linspace(-1, 1, 5))
BALL = fm.spherical_grid(np.linspace(0.5, 1.5, 5), np.linspace(0, np.pi, 9), np.linspace(0, 2 * np.pi, 17))


def field(grid, strength=1.0):
    return np.stack([np.full(grid.shape, strength), np.zeros(grid.shape), strength * grid.centres()[2]])


def test_the_plane_shows_each_cell_where_it_is():
    plane = Plane.through(BOX, 1)
    assert (plane.name, plane.others) == ("y = 0", (0, 2))
    assert (plane.across.size, plane.up.size) == (320, 160)
    x = _at(BOX.centres(), plane.cells_of(BOX))[0]
    assert np.abs(x - plane.across).max() <= 0.25 + 1e-12
    r = _at(np.sqrt((BALL.centres() ** 2).sum(axis=0)), plane.cells_of(BALL))
    distance = np.hypot(*np.meshgrid(plane.across, plane.up))
    assert np.array_equal(np.isnan(r), (distance < 0.5) | (distance > 1.5))
    assert np.nanmax(np.abs(r - distance)) < 0.15


@pytest.mark.parametrize("axis", [0, 1, 2])
def test_planes_at_right_angles_to_each_axis(axis):
    plane = Plane.through(BOX, axis, 0.3)
    seen = _at(BOX.centres(), plane.cells_of(BOX))
    u, v = np.meshgrid(plane.across, plane.up)
    for wanted, found in ((u, seen[plane.others[0]]), (v, seen[plane.others[1]]), (0.3, seen[axis])):
        assert np.abs(found - wanted).max() <= 0.25 + 1e-12


def test_a_box_off_the_plane_is_shown_in_its_middle_and_a_plane_off_the_box_refused():
    grid = fm.cartesian_grid([0, 1], [2, 4], [0, 1])
    assert Plane.through(grid, 1).position == 3
    with pytest.raises(JobError, match=r"report\.planes: y = 1 misses the grid, which reaches from 2 to 4"):
        Plane.through(grid, 1, 1.0)


def test_pictures_and_texts_say_the_same():
    plane = Plane.through(BOX, 1)
    sides = [(field(BALL), np.full(BALL.shape, 1e-3)), (field(BOX), np.zeros(BOX.shape))]
    shown = {picture.title: picture for picture in pictures([plane], [BALL, BOX], sides)}
    assert list(shown) == [
        "|B|, source",
        "|B|, target as stored",
        "|B of target - B of source|",
        "divergence, source",
        "divergence, target as stored",
    ]
    for title, (grid, (b, _)) in zip(list(shown)[:2], ((BALL, sides[0]), (BOX, sides[1])), strict=True):
        peak = np.nanmax(np.hypot(1, _at(b, plane.cells_of(grid))[2]))
        assert f"with field lines: up to {peak:.4g}, median" in shown[title].text
        assert "plane y = 0" in shown[title].text
    assert "up to 0.001, median 0.001" in shown["divergence, source"].text
    scales = {picture.text.split("Logarithmic colours ")[1] for picture in list(shown.values())[:3]}
    assert len(scales) == 1
    for picture in shown.values():
        pixels = image.imread(io.BytesIO(picture.png), format="png")
        assert pixels.shape[:2] == (440, 500)
        assert pixels[..., :3].std() > 0.05


@pytest.mark.parametrize("strength", [0.0, 1.0])
def test_fields_without_contrast_and_sides_that_miss_the_plane(strength):
    far = fm.cartesian_grid([0, 1], [5, 6], [0, 1])
    for before in (BALL, far):
        grids = [before, BOX]
        sides = [(np.full((3, *grid.shape), strength), np.zeros(grid.shape)) for grid in grids]
        shown = pictures([Plane.through(BOX, 1)], grids, sides)
        wanted = (
            "no cell of it lies in this plane" if before is far else f"up to {strength * np.sqrt(3):.4g},"
        )
        assert wanted in shown[0].text


def test_one_side_alone():
    shown = pictures([Plane.through(BALL, 2)], [BALL], [(field(BALL), np.zeros(BALL.shape))])
    assert [picture.title for picture in shown] == ["|B|, source", "divergence, source"]
