"""Pictures, what they show where, and their alternative texts."""

from __future__ import annotations

import io

import numpy as np
import pytest
from matplotlib import image
from PIL import Image
from scipy.interpolate import RegularGridInterpolator

import fieldmover as fm
from fieldmover.errors import JobError
from fieldmover.interpolation.locate import Locator
from fieldmover.report.figures import NOWHERE, pictures
from fieldmover.report.planes import PIXELS, Plane

BOX = fm.cartesian_grid(np.linspace(-2, 2, 9), np.linspace(-1, 1, 5), np.linspace(-1, 1, 5))
BALL = fm.spherical_grid(np.linspace(0.5, 1.5, 5), np.linspace(0, np.pi, 9), np.linspace(0, 2 * np.pi, 17))


def field(grid, strength=1.0):
    return np.stack([np.full(grid.shape, strength), np.zeros(grid.shape), strength * grid.centres()[2]])


def section(plane, grid):
    return plane.cut(Locator(grid))


def test_the_plane_shows_each_cell_where_it_is():
    plane = Plane.through(BOX, 1)
    assert (plane.name, plane.others) == ("y = 0", (0, 2))
    assert (plane.across.size, plane.up.size) == (PIXELS, PIXELS // 2)
    assert plane.extent == pytest.approx((-2, 2, -1, 1))
    x = section(plane, BOX).of_cells(BOX.centres()[0])
    assert np.abs(x - plane.across).max() <= 0.25 + 1e-12
    r = section(plane, BALL).of_cells(np.sqrt((BALL.centres() ** 2).sum(axis=0)))
    distance = np.hypot(*np.meshgrid(plane.across, plane.up))
    assert np.array_equal(np.isnan(r), (distance < 0.5) | (distance > 1.5))
    assert np.nanmax(np.abs(r - distance)) < 0.15


@pytest.mark.parametrize("axis", [0, 1, 2])
def test_planes_at_right_angles_to_each_axis(axis):
    plane = Plane.through(BOX, axis, 0.3)
    seen = [section(plane, BOX).of_cells(q) for q in BOX.centres()]
    u, v = np.meshgrid(plane.across, plane.up)
    for wanted, found in ((u, seen[plane.others[0]]), (v, seen[plane.others[1]]), (0.3, seen[axis])):
        assert np.abs(found - wanted).max() <= 0.25 + 1e-12


def test_a_box_off_the_plane_is_shown_in_its_middle_and_a_plane_off_the_box_refused():
    grid = fm.cartesian_grid([0, 1], [2, 4], [0, 1])
    assert Plane.through(grid, 1).position == 3
    with pytest.raises(JobError, match=r"report\.planes: y = 1 misses the grid, which reaches from 2 to 4"):
        Plane.through(grid, 1, 1.0)


def test_the_field_between_centres_against_scipy():
    """Linear between cell centres, as scipy's interpolator on a box has it."""
    rng = np.random.default_rng(1)
    x, y, z = (np.sort(rng.uniform(-1, 1, n)) for n in (9, 7, 6))
    grid = fm.cartesian_grid(x, y, z)
    b = rng.normal(size=(3, *grid.shape))
    middles = [0.5 * (q[1:] + q[:-1]) for q in (x, y, z)]
    plane = Plane.through(grid, 2, middles[2][2] + 0.01)
    found = section(plane, grid).of_field(b).reshape(3, -1)
    points = plane.points
    inner = np.all([(p >= c[0]) & (p <= c[-1]) for p, c in zip(points, middles, strict=True)], axis=0)
    for component, values in zip(b, found, strict=True):
        exact = RegularGridInterpolator(middles, component)(points[:, inner].T)
        assert np.abs(values[inner] - exact).max() < 1e-13
    assert np.isfinite(found).all()  # beyond the outermost centres too


def test_the_field_is_seamless():
    """Across seams, poles and the axis of a cylinder a linear field is off by the cells' size squared, nowhere more."""
    grids = {
        n: fm.spherical_grid(
            np.linspace(0.5, 1.5, n + 1), np.linspace(0, np.pi, 2 * n + 1), np.linspace(0, 2 * np.pi, 4 * n + 1)
        )
        for n in (8, 16)
    }
    tubes = {
        n: fm.cylindrical_grid(
            np.linspace(0, 1, n + 1), np.linspace(0, 2 * np.pi, 4 * n + 1), np.linspace(-1, 1, n + 1)
        )
        for n in (8, 16)
    }
    for kind, near in ((grids, 0.6), (tubes, 0.0)):
        errors = []
        for grid in kind.values():
            plane = Plane.through(grid, 0, 0.0)
            x = plane.points
            found = section(plane, grid).of_field(grid.centres()).reshape(3, -1)
            distance = np.sqrt((x**2).sum(axis=0)) if near else np.hypot(x[0], x[1])
            away = (distance > near) & (distance < 0.9 + 0.5 * (near > 0)) & (np.abs(x[2]) < (2 if near else 0.9))
            errors.append(np.abs(found - x)[:, away].max())
        assert errors[1] < 0.3 * errors[0] < 0.03


def test_a_warped_grid_is_seen_as_its_map_has_it():
    def bent(q1, q2, q3):
        return q1 + 0.1 * q2 * q3, q2 + 0.1 * q1 * q1, q3 + 0.0 * q1

    grid = fm.warped_grid(*[np.linspace(-1, 1, 13)] * 3, bent)
    plane = Plane.through(grid, 2, 0.0)
    seen = section(plane, grid)
    x = plane.points
    assert np.abs(seen.of_cells(grid.centres()[0]) - x[0].reshape(plane.up.size, -1))[50:-50, 50:-50].max() < 0.12
    found = seen.of_field(grid.centres()).reshape(3, -1)
    away = (np.abs(x[0]) < 0.8) & (np.abs(x[1]) < 0.8)
    assert np.abs(found - x)[:, away].max() < 2e-3
    assert 0.02 < np.isnan(found[0]).mean() < 0.2


def test_rounding_does_not_choose_between_cells():
    """A plane along faces shows the cells of one side of it."""
    box = fm.cartesian_grid(*[np.linspace(-1, 1, 5)] * 3)
    grid = fm.placed(box, turn=[[0.8, -0.6, 0.0], [0.6, 0.8, 0.0], [0.0, 0.0, 1.0]], origin=(0.1, 0.2, 0.3))
    seen = section(Plane.through(grid, 2, 0.3), grid)
    noise = np.random.default_rng(1).choice([-1e-15, 1e-15], seen.q.shape[1])
    seen.q[2] += noise
    found = seen.of_cells(grid.centres()[2])
    assert np.nanmin(found) == np.nanmax(found) == pytest.approx(0.55)


def test_a_periodic_box_is_continued_round_its_seam():
    grid = fm.cartesian_grid(*[np.linspace(0, 1, 5)] * 3, periodic=(True, True, True))
    b = np.zeros((3, *grid.shape))
    b[0, 0] = 1.0  # the first layer of cells, centred at 0.125
    found = section(Plane.through(grid, 2, 0.5), grid).of_field(b)[0]
    assert found[:, -1] == pytest.approx(0.5, abs=0.01)  # half-way to the image of the first centre
    assert found[:, 0] == pytest.approx(0.5, abs=0.01)


SIDES = [(field(BALL), np.full(BALL.shape, 1e-3)), (field(BOX), np.zeros(BOX.shape))]


@pytest.fixture(scope="module")
def five():
    """All pictures of a plane through the ball and the box."""
    return pictures([Plane.through(BOX, 1)], [BALL, BOX], SIDES)


def test_pictures_and_texts_say_the_same(five):
    plane, shown = Plane.through(BOX, 1), {picture.title: picture for picture in five}
    assert list(shown) == [
        "|B|, source",
        "|B|, target as stored",
        "|B of target - B of source|",
        "divergence, source",
        "divergence, target as stored",
    ]
    for title, (grid, (b, _)) in zip(list(shown)[:2], ((BALL, SIDES[0]), (BOX, SIDES[1])), strict=True):
        peak = np.nanmax(np.hypot(1, section(plane, grid).of_field(b)[2]))
        assert f"with field lines: up to {peak:.4g}, median" in shown[title].text
        assert "plane y = 0" in shown[title].text
        assert shown[title].numbers in shown[title].text
    assert "up to 0.001, median 0.001" in shown["divergence, source"].text
    scales = {picture.text.split("Logarithmic colours ")[1] for picture in list(shown.values())[:3]}
    assert len(scales) == 1
    assert len({(p.scale.low, p.scale.high) for p in list(shown.values())[:3]}) == 1
    for picture in shown.values():
        pixels = image.imread(io.BytesIO(picture.png), format="png")
        assert pixels.shape[:2] == (PIXELS // 2 + 76, PIXELS + 156)
        assert pixels[..., :3].std() > 0.05


def test_map_and_bar_are_cut_out_of_the_whole(five):
    """Corner of the map: no cell of the ball there. Bar: dark at the foot, bright at the head."""
    for picture in five:
        bare, bar = (np.asarray(Image.open(io.BytesIO(png)).convert("RGB")) for png in (picture.map, picture.bar))
        assert bare.shape == (PIXELS // 2 - 4, PIXELS - 4, 3)
        assert bar.shape == (PIXELS // 2 - 4, 1, 3)
        grey = tuple(int(NOWHERE[i : i + 2], 16) for i in (1, 3, 5))
        assert (np.abs(bare[0, 0].astype(int) - grey).max() <= 8) == ("target as stored" not in picture.title)
        assert bar[0].sum() > bar[-1].sum() + 200
        assert (picture.extent, picture.axes) == (Plane.through(BOX, 1).extent, ("x", "z"))


@pytest.mark.parametrize("size", [(1, 1, 40), (40, 1, 1)])
def test_planes_that_are_long_and_narrow(size):
    grid = fm.cartesian_grid(*(np.linspace(0, length, 5) for length in size))
    for picture in pictures([Plane.through(grid, 1)], [grid], [(field(grid), np.zeros(grid.shape))]):
        wide, tall = Image.open(io.BytesIO(picture.png)).size
        assert wide >= 300
        assert tall >= 190


FAR = fm.cartesian_grid([0, 1], [5, 6], [0, 1])


@pytest.mark.parametrize(("before", "strength"), [(BALL, 0.0), (FAR, 1.0)])
def test_fields_without_contrast_and_sides_that_miss_the_plane(before, strength):
    grids = [before, BOX]
    sides = [(np.full((3, *grid.shape), strength), np.zeros(grid.shape)) for grid in grids]
    shown = pictures([Plane.through(BOX, 1)], grids, sides)
    assert ("no cell of it lies in this plane" if before is FAR else "up to 0,") in shown[0].text
    assert f"up to {strength * np.sqrt(3):.4g}," in shown[1].text


def test_one_side_alone():
    shown = pictures([Plane.through(BALL, 2)], [BALL], [(field(BALL), np.zeros(BALL.shape))])
    assert [picture.title for picture in shown] == ["|B|, source", "divergence, source"]
    assert len({picture.file_name for picture in shown}) == 2
