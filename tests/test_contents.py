"""`move_content` on a Gaussian blob, a slotted disc and overlaps of bodies with known volumes.

Sources: closed forms by hand (error functions; the cap of a sphere); the slotted disc is that of Zalesak, J.
Comput. Phys. 31, 335 (1979), in its usual form (radius 0.15 at (0.5, 0.75), slot |x - 0.5| < 0.025 below y =
0.85; set-up from memory), moved here so that the axis of the polar grid lies at (0.5, 0.5).
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import erf

import fieldmover as fm

WIDTH = 0.1
BLOB_IN_CUBE = 0.0156223918229433595  # exp(-r^2 / (2 WIDTH^2)) over |x|, |y|, |z| < 0.3
BLOB_IN_SHELL = 0.0157413891905381315  # the same 0.5 off the origin, over 0.2 < r < 0.9
SLOTTED_DISC = 0.0582207030588900779
SLOTTED_MOMENT = 0.0003072916666666667  # integral of y - 0.75 over it
SQUARE_AND_DISC = 0.95091113078510815382  # area of [0, 1]^2 within R < 1.2
CUBE_AND_BALL = 6.3837162720944598606  # volume of [-1, 1]^3 within r < 1.2


def full_sphere(n, low, high):
    return fm.spherical_grid(
        np.linspace(low, high, n + 1), np.linspace(0, np.pi, n + 1), np.linspace(0, 2 * np.pi, 2 * n + 1)
    )


def blob(n, half_width):
    """Exact contents of the blob at the origin on a cube of n^3 cells."""
    q = np.linspace(-half_width, half_width, n + 1)
    line = np.diff(erf(q / (WIDTH * np.sqrt(2)))) * WIDTH * np.sqrt(np.pi / 2)
    cells = line[:, None, None] * line[None, :, None] * line[None, None, :]
    return fm.CellContent(fm.cartesian_grid(q, q, q), cells)


def content_of(grid, density, points=4):
    """Contents by Gauss points in r, theta, phi."""
    total = np.zeros(grid.shape)
    abscissae, weights = np.polynomial.legendre.leggauss(points)
    for choice in np.ndindex(points, points, points):
        q, w = [], []
        for nodes, c in zip(grid.nodes, choice, strict=True):
            half = 0.5 * np.diff(nodes)
            q.append(0.5 * (nodes[1:] + nodes[:-1]) + abscissae[c] * half)
            w.append(weights[c] * half)
        r, theta, phi = np.meshgrid(*q, indexing="ij")
        rho = r * np.sin(theta)
        value = density(rho * np.cos(phi), rho * np.sin(phi), r * np.cos(theta)) * r * rho
        total += value * w[0][:, None, None] * w[1][None, :, None] * w[2][None, None, :]
    return fm.CellContent(grid, total)


def test_blob_keeps_its_mass_where_the_target_holds_it():
    x0 = 0.5
    shell = full_sphere(40, 0.2, 0.9)
    source = content_of(shell, lambda x, y, z: np.exp(-((x - x0) ** 2 + y**2 + z**2) / (2 * WIDTH**2)))
    assert source.cells.sum() == pytest.approx(BLOB_IN_SHELL, rel=1e-6)
    target = fm.cartesian_grid(*[np.linspace(-0.95, 0.95, 41)] * 3)
    moved = fm.move_content(source, target)
    assert moved.cells.sum() == pytest.approx(source.cells.sum(), rel=1e-12)
    assert moved.cells.min() >= 0
    centre = (target.centres() * moved.cells).sum(axis=(1, 2, 3)) / moved.cells.sum()
    np.testing.assert_allclose(centre, (x0, 0, 0), atol=2e-3)


def test_part_of_a_blob_converges():
    """A target that cuts through cells of the source, whose faces it does not share."""
    errors = []
    for n in (20, 40, 80):
        target = fm.cartesian_grid(*[np.linspace(-0.3, 0.3, n // 2 + 2)] * 3)
        errors.append(abs(fm.move_content(blob(n, 0.55), target).cells.sum() / BLOB_IN_CUBE - 1))
    assert errors[2] < errors[0] / 3, errors
    assert errors[2] < 1e-3, errors


def test_slotted_disc_stays_within_its_bounds():
    n, fine = 80, 16
    q = np.linspace(-0.5, 0.5, n + 1)
    sub = (np.arange(n * fine) + 0.5) / (n * fine) - 0.5
    x, y = np.meshgrid(sub, sub, indexing="ij")
    inside = (x**2 + (y - 0.25) ** 2 < 0.15**2) & ~((np.abs(x) < 0.025) & (y < 0.35))
    filled = inside.reshape(n, fine, n, fine).mean(axis=(1, 3))
    grid = fm.cartesian_grid(q, q, [0.0, 1.0])
    source = fm.CellContent(grid, filled[:, :, None] * grid.cell_volumes())
    assert source.cells.sum() == pytest.approx(SLOTTED_DISC, rel=1e-3)  # the sampling above

    target = fm.cylindrical_grid(np.linspace(0, 0.75, 61), np.linspace(0, 2 * np.pi, 121), [0.0, 1.0])
    moved = fm.move_content(source, target)
    density = moved.cells / target.cell_volumes()
    assert moved.cells.sum() == pytest.approx(source.cells.sum(), rel=1e-12)
    assert density.min() >= 0
    assert density.max() <= 1 + 1e-12
    moment = ((target.centres()[1] - 0.25) * moved.cells).sum()
    assert moment == pytest.approx(SLOTTED_MOMENT, rel=0.1)


def test_overlap_of_a_ball_and_a_cube():
    """Unit density in a ball (but for r < 0.01), moved to a cube whose corners the ball does not reach."""
    errors = []
    for n in (16, 32, 64):
        ball = full_sphere(n, 0.01, 1.2)
        source = fm.CellContent(ball, ball.cell_volumes())
        cube = fm.cartesian_grid(*[np.linspace(-1, 1, n + 1)] * 3)
        moved = fm.move_content(source, cube)
        hole = 4 * np.pi / 3 * 0.01**3
        errors.append(abs((moved.cells.sum() + hole) / CUBE_AND_BALL - 1))
        assert moved.cells.min() >= 0
    assert errors[2] < 1e-3, errors


def test_overlap_of_a_disc_and_a_square():
    errors = []
    for n in (12, 24, 48):
        disc = fm.cylindrical_grid(np.linspace(0, 1.2, n + 1), np.linspace(0, 2 * np.pi, 4 * n + 1), [0.0, 1.0])
        square = fm.cartesian_grid(np.linspace(0, 1, n + 1), np.linspace(0, 1, n + 1), [0.0, 1.0])
        moved = fm.move_content(fm.CellContent(disc, disc.cell_volumes()), square)
        errors.append(abs(moved.cells.sum() / SQUARE_AND_DISC - 1))
    assert errors[2] < 1e-3, errors
