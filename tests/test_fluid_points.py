"""Cell values interpolated at the cell centres of another grid."""

import numpy as np
import pytest

from fieldmover.errors import FieldError
from fieldmover.grids import cartesian_grid, cylindrical_grid, spherical_grid
from fieldmover.interpolation.points import move_points
from tests.test_fluid import ball, can, cube, line, wavy, wedge


def wave(x, y, z):
    return np.sin(2.1 * x + 0.3) * np.cos(1.7 * y) + 0.4 * np.sin(2 * z - x * y)


PAIRS = {
    "through a pole and the seam": lambda n: (ball(n, 0.2, 1.2), cube(n, 0.3, (0.05, 0.02, 0.6))),
    "through the axis of a cylinder": lambda n: (can(n, 0.9, 0.8), cube(n, 0.4)),
    "box to sphere": lambda n: (cube(n, 1.2), ball(n)),
    "wedge to box": lambda n: (wedge(n), cartesian_grid(line(1.5, 2.3, n), line(-0.5, 0.5, n), line(-0.5, 0.6, n))),
    "warped to box": lambda n: (wavy(n), cube(n, 0.25)),
}


@pytest.mark.parametrize("name", PAIRS)
@pytest.mark.parametrize(("order", "rate"), [(1, 1.8), (3, 3.6)])
def test_order_on_smooth_values(name, order, rate):
    errors = []
    for n in (12, 24, 48):
        source, target = PAIRS[name](n)
        moved, known = move_points(wave(*source.centres()), source, target, order)
        assert known.all()
        errors.append(np.abs(moved - wave(*target.centres())).mean())
    assert np.log2(errors[0] / errors[2]) / 2 > rate, errors
    assert errors[2] < (2e-3 if order == 1 else 3e-5), errors


def test_polynomials_are_exact_on_uneven_axes_up_to_the_walls():
    source = cartesian_grid([0, 1, 1.5, 3, 3.2, 4], [-1, 0, 0.5, 2, 3], [0, 1, 3, 4, 4.5])
    target = cartesian_grid(line(0, 4, 7), line(-1, 3, 6), line(0, 4.5, 5))

    def cubic(x, y, z):
        return 1 + x**3 - 2 * x * y**2 * z**3 + y**3 - z

    moved, known = move_points(cubic(*source.centres()), source, target)
    assert known.all()
    np.testing.assert_allclose(moved, cubic(*target.centres()), rtol=0, atol=1e-11 * np.abs(moved).max())


def test_vectors_go_by_cartesian_components():
    source, target = ball(24, 0.2, 1.2), cube(9, 0.4, (0, 0, 0.6))
    x, y, z = source.centres()
    field = np.stack([-y, x, z**2])
    moved, _ = move_points(field, source, target)
    p, q, r = target.centres()
    np.testing.assert_allclose(moved, np.stack([-q, p, r**2]), atol=2e-4)
    for part, whole in zip(field, moved, strict=True):
        assert np.array_equal(move_points(part, source, target)[0], whole)


@pytest.mark.parametrize("order", [1, 3])
def test_neither_seam_nor_pole_stands_out(order):
    """Turning source and target by half a turn about an axis, or letting the seam lie elsewhere, changes nothing."""
    radius, theta, phi = np.geomspace(0.2, 1.3, 9), line(0, np.pi, 8), line(0, 2 * np.pi, 12)
    source = spherical_grid(radius, theta, phi)
    target = cartesian_grid(line(-0.65, 0.6, 9), line(-0.5, 0.55, 10), line(0.3, 0.7, 6))
    values = np.random.default_rng(7).uniform(-1, 1, source.shape)
    moved, known = move_points(values, source, target, order)
    assert known.all()
    elsewhere = spherical_grid(radius, theta, phi[5] + phi)
    again, _ = move_points(np.roll(values, -5, axis=2), elsewhere, target, order)
    np.testing.assert_allclose(again, moved, rtol=0, atol=1e-12)
    below = cartesian_grid(target.nodes[0], -target.nodes[1][::-1], -target.nodes[2][::-1])  # about the x axis
    again, _ = move_points(values[:, ::-1, ::-1], source, below, order)
    np.testing.assert_allclose(again[:, ::-1, ::-1], moved, rtol=0, atol=1e-12)


def test_limited_values_stay_in_the_range_of_the_cells_around():
    source, target = ball(24, 0.2, 1.2), cube(21, 0.6, (0.03, 0, 0.3))
    step = np.where(np.hypot(*source.centres()[:2]) < 0.4, 1.0, 1e-6)
    plain, known = move_points(step, source, target)
    limited, _ = move_points(step, source, target, limited=True)
    assert plain[known].max() > 1.02
    assert limited[known].min() >= 1e-6
    assert limited[known].max() <= 1
    smooth = move_points(wave(*source.centres()), source, target, limited=True)[0][known]
    assert np.abs(smooth - wave(*target.centres())[known]).mean() < 2e-3


def test_outside_is_unknown():
    source, target = wedge(8), cube(10, 3)
    moved, known = move_points(np.ones(source.shape), source, target)
    x, y, z = target.centres()
    r = np.sqrt(x**2 + y**2 + z**2)
    theta, phi = np.arccos(z / r), np.arctan2(y, x)
    inside = (r > 1) & (r < 3) & (theta > 0.8) & (theta < 2.2) & (np.abs(phi) < 0.8)
    assert np.array_equal(known, inside)
    assert 0 < known.sum() < known.size
    assert np.isnan(moved[~known]).all()
    np.testing.assert_allclose(moved[known], 1, rtol=1e-12)


@pytest.mark.parametrize(
    "source",
    [
        cartesian_grid([0, 1], [0, 1], [0, 1]),
        cartesian_grid([0, 0.5, 1], [0, 0.2, 0.7, 1], [0, 1], periodic=(True, True, True)),
        cylindrical_grid([0, 2], line(0, 2 * np.pi, 5), [0, 1]),
        spherical_grid([0.01, 2], line(0, np.pi, 1), line(0, 2 * np.pi, 2)),
    ],
    ids=["one cell", "few cells round seams", "odd ring", "one cell from pole to pole"],
)
@pytest.mark.parametrize("order", [1, 3])
def test_short_axes_keep_a_constant(source, order):
    target = cartesian_grid(line(0.05, 0.9, 4), line(0.1, 0.9, 3), line(0.1, 0.9, 5))
    moved, known = move_points(np.full(source.shape, 2.5), source, target, order)
    assert known.all()
    np.testing.assert_allclose(moved, 2.5, rtol=1e-12)


def test_bad_values_are_refused():
    source = cube(3, 1.0)
    with pytest.raises(FieldError, match="order: 2, expected 1 or 3"):
        move_points(np.ones((3, 3, 3)), source, source, 2)
    with pytest.raises(FieldError, match=r"shape \(3, 3\)"):
        move_points(np.ones((3, 3)), source, source)
    values = np.ones((2, 3, 3, 3))
    values[1, 0, 2, 1] = np.inf
    with pytest.raises(FieldError, match=r"1 are not finite, the first inf at index \[1, 0, 2, 1\]"):
        move_points(values, source, source)


def test_a_periodic_box_repeats_itself():
    source = cartesian_grid(*[np.linspace(0, 1, 17)] * 3, periodic=(True,) * 3)
    target = cartesian_grid(np.linspace(-1.4, 2.6, 21), [0, 0.3, 1], [0.2, 0.7])
    moved, known = move_points(np.sin(2 * np.pi * source.centres()[0]), source, target)
    assert known.all()
    np.testing.assert_allclose(moved, np.sin(2 * np.pi * target.centres()[0]), atol=1e-3)
