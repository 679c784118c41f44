"""The projection: direct solves beside Fourier transforms, and a general-purpose algebraic multigrid.

Every case runs in a process of its own, so that its peak memory is its own. The multigrid is PyAMG: Ruge-Stuben
with conjugate gradients, on the same operator, to the same tolerance.
"""

from __future__ import annotations

import argparse
import multiprocessing
import resource
import statistics
import time
from collections.abc import Callable
from concurrent.futures import ProcessPoolExecutor

import numpy as np
import scipy.sparse

TOLERANCE = 1e-10


def median(work: Callable[[], object], runs: int = 5) -> float:
    """Median seconds, after one run that is not counted."""
    seconds = []
    for _ in range(runs + 1):
        began = time.perf_counter()
        work()
        seconds.append(time.perf_counter() - began)
    return statistics.median(seconds[1:])


def peak() -> float:
    """Most memory this process has used so far, in bytes."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024.0


def box(n: int, periodic: bool = False):
    import fieldmover as fm

    return fm.cartesian_grid(*[np.linspace(0, 1, n + 1)] * 3, periodic=(periodic,) * 3)


def sphere(n: int, around: int):
    import fieldmover as fm

    return fm.spherical_grid(
        np.geomspace(1, 20, n + 1), np.linspace(0, np.pi, n + 1), np.linspace(0, 2 * np.pi, around + 1)
    )


def warped_sphere(n: int, phi: float, theta: float):
    """Full sphere, cells crowded along a spiral arm and, between the walls, to the poles.

    Cell sizes vary as (1 + phi) : (1 - phi) in phi and as (1 + 2 theta) : (1 - 2 theta) in theta, neither in
    the form of a product.
    """
    import fieldmover as fm

    def to_cartesian(r, t, p):
        s = np.log(r) / np.log(20)
        angle = t + theta * np.sin(np.pi * s) ** 2 * np.sin(2 * t)
        around = p + phi * np.sin(p - 2 * s)
        return r * np.sin(angle) * np.cos(around), r * np.sin(angle) * np.sin(around), r * np.cos(angle)

    return fm.warped_grid(
        np.geomspace(1, 20, n + 1), np.linspace(0, np.pi, n + 1), np.linspace(0, 2 * np.pi, n + 1), to_cartesian,
        periodic=(False, False, True), poles=(None, "both", None),
    )  # fmt: skip


def noise(grid):
    """Random fluxes."""
    import fieldmover as fm
    from fieldmover.forms.fields import close_faces

    rng = np.random.default_rng(1)
    f1, f2, f3 = (rng.normal(size=grid.face_shape(d)) for d in range(3))
    close_faces(grid, (f1, f2, f3))
    return fm.FaceFlux(grid, (f1, f2, f3))


def ball(grid):
    """Cells in a ball away from the axis."""
    return ((grid.centres() - np.array([8.0, 0.0, 3.0])[:, None, None, None]) ** 2).sum(axis=0) < 16.0


def faces_of(grid, cells):
    """Masks of the faces of some cells."""
    masks = []
    for axis in range(3):
        mask = np.zeros(grid.face_shape(axis), dtype=bool)
        turned = np.moveaxis(mask, axis, 0)
        turned[:-1] |= np.moveaxis(cells, axis, 0)
        turned[1:] |= np.moveaxis(cells, axis, 0)
        if grid.periodic[axis]:
            turned[0] = turned[-1] = turned[0] | turned[-1]
        masks.append(mask)
    return masks


def direct(n: int, periodic: bool) -> str:
    import pyfftw

    from fieldmover import compute
    from fieldmover.forms.measures import face_factors
    from fieldmover.projection.separable import for_cells

    grid = box(n, periodic)
    solver = for_cells(face_factors(grid), grid.periodic, ((not periodic,) * 2,) * 3)
    rhs, out = np.random.default_rng(0).normal(size=grid.shape), np.empty(grid.shape)
    x, y = pyfftw.empty_aligned(grid.shape), pyfftw.empty_aligned((n, n, n // 2 + 1), dtype=complex)
    there = pyfftw.FFTW(x, y, axes=(0, 1, 2), threads=compute.threads())
    back = pyfftw.FFTW(y, x, axes=(0, 1, 2), direction="FFTW_BACKWARD", threads=compute.threads())
    x[...] = rhs

    def pair() -> None:
        there.execute()
        back.execute()

    solve, transform = median(lambda: solver.solve(rhs, out)), median(pair)
    kind = "periodic" if periodic else "open"
    return f"direct, {kind} box {n}^3: {solve:.4f} s = {solve / transform:.1f} FFT pairs of {transform:.4f} s"


def spherical(n: int, around: int) -> str:
    from fieldmover.forms.measures import face_factors
    from fieldmover.projection.separable import for_cells

    grid = sphere(n, around)
    solver = for_cells(face_factors(grid), grid.periodic, ((True, True), (False, False), (False, False)))
    rhs, out = np.random.default_rng(0).normal(size=grid.shape), np.empty(grid.shape)
    return f"direct, sphere {grid.shape}: {median(lambda: solver.solve(rhs, out)):.4f} s"


def iterations(name: str, n: int) -> str:
    import fieldmover as fm

    grid = {
        "strong warp": lambda: warped_sphere(n, 0.8, 0.45),
        "mild warp": lambda: warped_sphere(n, 0.43, 0.21),
    }.get(name, lambda: sphere(n, n))()
    flux, arguments = noise(grid), {}
    if name == "excised ball":
        arguments = {"excised": ball(grid)}
    elif name == "frozen ball":
        inside, _ = fm.project(flux)  # what is frozen must have no divergence of its own
        frozen = faces_of(grid, ball(grid))
        flux = fm.FaceFlux(
            grid, tuple(np.where(m, a, b) for m, a, b in zip(frozen, inside.faces, flux.faces, strict=True))
        )
        arguments = {"frozen": frozen}
    elif name == "fill of a ball":
        inside, _ = fm.project(flux)
        free = faces_of(grid, ball(grid))
        flux = fm.FaceFlux(grid, tuple(np.where(m, 0.0, a) for m, a in zip(free, inside.faces, strict=True)))
        arguments = {"frozen": [~m for m in free]}
    fm.project(noise(sphere(8, 8)))
    before = peak()
    clean, record = fm.project(flux, tolerance=TOLERANCE, **arguments)
    arrays = (peak() - before) / (8.0 * grid.cell_volumes().size)
    net = float(np.abs(fm.divergence(clean).cells).max()) if name != "excised ball" else record.divergence_after.linf
    return (
        f"{name}, {n}^3: {record.iterations} iterations, {record.seconds:.2f} s in all, {arrays:.1f} arrays of memory, "
        f"largest net flux left {net:.1g}"
    )


def multigrid(name: str, n: int, around: int) -> str:
    import pyamg

    from fieldmover.forms.measures import face_conductances
    from fieldmover.projection.operator import ProjectionOperator
    from fieldmover.projection.request import open_walls

    grid = {"strong warp": lambda: warped_sphere(n, 0.8, 0.45), "sphere": lambda: sphere(n, around)}[name]()
    everywhere = np.ones(grid.shape, dtype=bool)
    matrix = assembled(ProjectionOperator(face_conductances(grid), everywhere, grid.periodic, open_walls(grid, "open")))
    rhs = np.random.default_rng(0).normal(size=matrix.shape[0])
    before, began = peak(), time.perf_counter()
    solver = pyamg.ruge_stuben_solver(matrix)
    ready = time.perf_counter()
    residuals: list[float] = []
    solver.solve(rhs, tol=TOLERANCE, accel="cg", residuals=residuals, maxiter=200)
    done = time.perf_counter()
    return (
        f"multigrid, {name} {grid.shape}: set-up {ready - began:.2f} s, {len(residuals) - 1} iterations "
        f"{done - ready:.2f} s, {(peak() - before) / (8.0 * rhs.size):.1f} arrays of memory beside the matrix"
    )


def assembled(operator) -> scipy.sparse.csr_matrix:
    """The operator as a sparse matrix, without its hole."""
    shape = operator.active.shape
    number = np.arange(operator.active.size, dtype=np.int32).reshape(shape)
    diagonal, rows, columns, values = np.zeros(shape), [], [], []
    for axis, g in enumerate(operator.conductances):
        g, cells, d = (np.moveaxis(x, axis, 0) for x in (g, number, diagonal))
        pairs = [(cells[:-1], cells[1:], g[1:-1])]
        d[1:] += g[1:-1]
        d[:-1] += g[1:-1]
        if operator.periodic[axis]:
            pairs.append((cells[-1], cells[0], g[0]))
        for end in (0, -1):
            if operator.periodic[axis] or operator.open_walls[axis][end]:
                d[end] += g[end]
        for low, high, value in pairs:
            rows += [low.ravel(), high.ravel()]
            columns += [high.ravel(), low.ravel()]
            values += [-value.ravel()] * 2
    rows.append(number.ravel())
    columns.append(number.ravel())
    values.append(diagonal.ravel())
    triplets = np.concatenate(values), (np.concatenate(rows), np.concatenate(columns))
    return scipy.sparse.csr_matrix(triplets, shape=(number.size, number.size))


def run(arguments: list[str]) -> None:
    parser = argparse.ArgumentParser(prog="scripts/bench projection", description=__doc__)
    parser.add_argument("--cells", type=int, nargs="+", default=[64, 128], help="of the iterative cases")
    parser.add_argument("--direct", type=int, nargs="+", default=[128, 256], help="of the direct cases")
    parser.add_argument(
        "--large", type=int, help="also project a mildly warped sphere of so many cells along each axis"
    )
    parser.add_argument("--no-multigrid", action="store_true")
    chosen = parser.parse_args(arguments)
    work: list[tuple] = [(direct, n, periodic) for n in chosen.direct for periodic in (False, True)]
    work.append((spherical, max(chosen.cells), 2 * max(chosen.cells)))
    for name in ("mild warp", "strong warp", "excised ball", "frozen ball", "fill of a ball"):
        work += [(iterations, name, n) for n in chosen.cells]
    if not chosen.no_multigrid:
        work.append((multigrid, "sphere", max(chosen.cells), 2 * max(chosen.cells)))
        work.append((multigrid, "strong warp", max(chosen.cells), max(chosen.cells)))
    if chosen.large:
        work.append((iterations, "mild warp", chosen.large))
    spawn = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(1, mp_context=spawn, max_tasks_per_child=1) as pool:
        for function, *values in work:
            print(pool.submit(function, *values).result(), flush=True)
