"""The direct solver: eigenvalues in closed form, matrices written out, a lattice Green's function."""

from __future__ import annotations

from itertools import product

import numpy as np
import pytest

import fieldmover as fm
from fieldmover.forms.measures import edge_factors, face_factors
from fieldmover.projection.bases import Line, basis_of
from fieldmover.projection.separable import SeparableSolver, for_cells, for_nodes

ENDS = {"fixed": (0, 0), "open": (1, 1), "fixed to open": (0, 1), "open to fixed": (1, 0), "ring": None}


def chain(n, ends, uniform, rng):
    """Conductances of a chain of cells; a wall lies half a cell beyond the last centre."""
    links = np.full(n - 1, 1.7) if uniform else rng.uniform(1, 3, n - 1)
    if ends is None:
        return Line(links, wrap=1.7 if uniform else 1.3)
    wall = 3.4 if uniform else 2.2
    return Line(links, low=wall * ends[0], high=wall * ends[1])


# Eigenvalues 4 sin^2(angle / 2) of uniform chains of unit conductance. Buzbee, Golub & Nielson, SIAM J.
# Numer. Anal. 7, 627 (1970); Strang, SIAM Rev. 41, 135 (1999).
ANGLES = {
    "fixed": lambda n: np.pi * np.arange(n) / n,
    "open": lambda n: np.pi * np.arange(1, n + 1) / n,
    "fixed to open": lambda n: np.pi * (np.arange(n) + 0.5) / n,
    "open to fixed": lambda n: np.pi * (np.arange(n) + 0.5) / n,
    "ring": lambda n: 2 * np.pi * np.arange(n) / n,
}


@pytest.mark.parametrize("n", [3, 7, 8])
@pytest.mark.parametrize("ends", ENDS)
def test_eigenvalues_in_closed_form(ends, n):
    basis = basis_of(chain(n, ENDS[ends], True, None), np.ones(n))
    assert basis.fast
    found = np.sort(basis.values) / 1.7
    np.testing.assert_allclose(found, np.sort(4 * np.sin(ANGLES[ends](n) / 2) ** 2), atol=1e-14)


def test_eigenvalues_of_eight_cells_between_fixed_walls():
    # First one that is not zero, by the formula above to 16 digits: 2 - 2 cos(pi / 8).
    values = basis_of(Line(np.ones(7)), np.ones(8)).values
    assert values[0] == 0
    assert values[1] == pytest.approx(0.1522409349774265, rel=1e-14)


def test_nodes_from_wall_to_wall_have_half_masses_at_the_ends():
    mass = np.array([0.5, 1, 1, 1, 1, 1, 0.5])
    fast = basis_of(Line(np.full(6, 2.0)), 3 * mass)
    dense = basis_of(Line(np.full(6, 2.0) * (1 + 1e-6 * np.arange(6))), 3 * mass)
    assert fast.fast
    assert not dense.fast
    np.testing.assert_allclose(np.sort(fast.values), np.sort(dense.values), atol=1e-5)


@pytest.mark.parametrize("fast", [True, False], ids=["fast", "dense"])
@pytest.mark.parametrize("axis", [0, 1, 2])
@pytest.mark.parametrize("ends", ENDS)
def test_transforms_diagonalise(ends, axis, fast):
    rng = np.random.default_rng(3)
    line = chain(6, ENDS[ends], fast, rng)
    mass = np.full(6, 0.8) if fast else rng.uniform(0.5, 2, 6)
    basis = basis_of(line, mass)
    assert basis.fast is fast
    p = rng.normal(size=(6, 6, 6))
    rhs = np.moveaxis(np.tensordot(line.matrix() + 2 * np.diag(mass), p, (1, axis)), 0, axis)
    shape = [-1 if d == axis else 1 for d in range(3)]
    amplitudes = basis.forward(rhs, axis) / (basis.scale * (basis.values + 2)).reshape(shape)
    np.testing.assert_allclose(basis.backward(np.ascontiguousarray(amplitudes), axis), p, atol=1e-13)


def assembled(lines, masses):
    """The operator as a matrix."""
    total = 0
    for d, line in enumerate(lines):
        factors = [line.matrix() if e == d else np.diag(masses[d][e]) for e in range(3)]
        total = total + np.kron(np.kron(factors[0], factors[1]), factors[2])
    return total


@pytest.mark.parametrize("through", [0, 1, 2])
@pytest.mark.parametrize("ends", list(product(ENDS, repeat=3)), ids="-".join)
def test_solution_of_every_combination(ends, through):
    rng = np.random.default_rng(len(str(ends)))
    shape, (a, b) = (5, 4, 6), [e for e in range(3) if e != through]
    for uniform in product([True, False], repeat=3):
        lines = tuple(chain(n, ENDS[e], u, rng) for n, e, u in zip(shape, ends, uniform, strict=True))
        m = [[rng.uniform(0.5, 2, n) for n in shape] for _ in range(3)]
        for e in (a, b):
            m[through][e] = np.full(shape[e], 0.7) if uniform[e] else m[through][e]
        m[b][a], m[a][b] = 1.5 * m[through][a], 0.3 * m[through][b]
        solver = SeparableSolver(lines, m)
        rhs = rng.normal(size=shape)
        p = solver.solve(rhs)
        assert solver.singular is not any(line.grounded for line in lines)
        if solver.singular:
            rhs -= rhs.mean()
            assert abs(p.mean()) < 1e-15
        np.testing.assert_allclose(assembled(lines, m) @ p.ravel(), rhs.ravel(), atol=1e-12)


def test_the_right_hand_side_is_left_alone():
    solver = SeparableSolver(tuple(Line(np.ones(3), low=2.0) for _ in range(3)), [[np.ones(4)] * 3] * 3)
    rhs = np.random.default_rng(0).normal(size=(4, 4, 4))
    copy, out = rhs.copy(), np.empty((4, 4, 4))
    assert solver.solve(rhs, out) is out
    assert np.array_equal(rhs, copy)


def test_masses_that_do_not_separate():
    masses = [[np.arange(1.0, 5) ** (d + e) for e in range(3)] for d in range(3)]
    masses[1][0], masses[2][0], masses[0][1] = np.arange(1.0, 5), np.ones(4), np.arange(2.0, 6)
    masses[0][2], masses[1][2], masses[2][1] = np.ones(4), np.arange(3.0, 7) ** 2, np.ones(4)
    with pytest.raises(ValueError, match="not separable"):
        SeparableSolver(tuple(Line(np.ones(3)) for _ in range(3)), masses)


def test_lattice_greens_function():
    """The response of an infinite cubic lattice to a unit source, at the source: Watson's third integral / 2.

    Watson, Q. J. Math. 10, 266 (1939); 0.505462019717326 / 2, value from memory. Grounded walls far away take
    off a term in 1 / size, which two sizes remove.
    """
    found = []
    for n in (33, 65):
        grid = fm.cartesian_grid(*[np.arange(n + 1.0)] * 3)
        rhs = np.zeros(grid.shape)
        rhs[n // 2, n // 2, n // 2] = 1
        p = for_cells(face_factors(grid), grid.periodic, ((True, True),) * 3).solve(rhs)
        found.append(float(p[n // 2, n // 2, n // 2]))
    assert (65 * found[1] - 33 * found[0]) / 32 == pytest.approx(0.505462019717326 / 2, rel=2e-5)


LINE = np.linspace(0, 1, 6)
NODE_GRIDS = {
    "box": fm.cartesian_grid(LINE, LINE, LINE),
    "uneven box": fm.cartesian_grid(LINE**2, LINE**1.5, LINE),
    "torus": fm.cartesian_grid(LINE, LINE**2, LINE, periodic=(True, True, True)),
    "shell": fm.spherical_grid(1 + LINE, np.pi * LINE, 2 * np.pi * np.linspace(0, 1, 7)),
    "cone": fm.spherical_grid(1 + LINE, LINE, np.linspace(0, 1, 4)),
    "south": fm.spherical_grid(1 + LINE, np.pi - LINE[::-1], 2 * np.pi * LINE),
    "pipe": fm.cylindrical_grid(LINE, 2 * np.pi * np.linspace(0, 1, 7), LINE**2),
    "annulus": fm.cylindrical_grid(1 + LINE, 2 * np.pi * LINE, LINE),
}


@pytest.mark.parametrize("grid", NODE_GRIDS.values(), ids=NODE_GRIDS)
def test_nodes_with_seams_and_poles(grid):
    """Against a graph of nodes, those of one place joined into one, with all edges between them."""
    shape = tuple(n if seam else n + 1 for n, seam in zip(grid.shape, grid.periodic, strict=True))
    place = {node: node for node in np.ndindex(*shape)}
    for axis, ring in enumerate(grid.ring_axis):
        for end in grid.pole_ends(axis):
            for node in place:
                if node[axis] == end:
                    place[node] = tuple(0 if d == ring else n for d, n in enumerate(node))
    number = {node: i for i, node in enumerate(sorted(set(place.values())))}
    matrix, factors = np.zeros((len(number), len(number))), edge_factors(grid)
    for axis in range(3):
        weights = np.einsum("i,j,k", *factors[axis])
        for edge in np.ndindex(*[grid.shape[axis] if d == axis else n for d, n in enumerate(shape)]):
            far = list(edge)
            far[axis] = (far[axis] + 1) % shape[axis] if grid.periodic[axis] else far[axis] + 1
            i, j = number[place[edge]], number[place[tuple(far)]]
            matrix[[i, j], [i, j]] += weights[edge] * (i != j)
            matrix[[i, j], [j, i]] -= weights[edge] * (i != j)
    rhs = np.random.default_rng(1).normal(size=shape)
    rhs -= rhs.mean()
    gathered = np.zeros(len(number))
    for node, value in np.ndenumerate(rhs):
        gathered[number[place[node]]] += value
    p = for_nodes(factors, grid.periodic, grid.poles).solve(rhs)
    for node, at in place.items():
        assert p[node] == pytest.approx(p[at], abs=1e-13)
    values = np.array([p[node] for node in number])
    np.testing.assert_allclose(matrix @ values, gathered, atol=1e-11)
