"""The projection: direct solves beside Fourier transforms, and a general-purpose algebraic multigrid.

Every case runs in a process of its own, so that its peak memory is its own. The multigrid is PyAMG: Ruge-Stuben
with conjugate gradients, on the same operator and right-hand side, to the same tolerance. Its time is that of
set-up and solution, its memory what these take beside the matrix. Set beside it is the whole of project(): weights,
set-up, solution, the exact finish and the record; its memory is what it takes beside the flux given.
"""

from __future__ import annotations

import argparse
import multiprocessing
import statistics
import time
from collections.abc import Callable
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import scipy.sparse

TOLERANCE = 1e-10
WARPS = {"mild warp": (0.43, 0.21), "strong warp": (0.8, 0.45)}


@dataclass
class Figures:
    """Seconds, iterations, and memory in arrays of one number per cell."""

    set_up: float
    solve: float
    whole: float
    iterations: int
    arrays: float


def median(work: Callable[[], object], runs: int = 5) -> float:
    """Median seconds, after one run that is not counted."""
    return statistics.median([seconds(work) for _ in range(runs + 1)][1:])


def seconds(work: Callable[[], object]) -> float:
    began = time.perf_counter()
    work()
    return time.perf_counter() - began


def peak(work: Callable[[], object]) -> float:
    """Most memory that work takes beside what is there before, in bytes (Linux)."""

    def status(name: str) -> int:
        lines = Path("/proc/self/status").read_text().splitlines()
        return 1024 * next(int(line.split()[1]) for line in lines if line.startswith(name))

    before = status("VmRSS")
    Path("/proc/self/clear_refs").write_text("5")  # forgets the peak so far
    work()
    return float(status("VmHWM") - before)


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


def spherical(n: int, around: int, beside: bool) -> str:
    from fieldmover.forms.measures import face_conductances, face_factors
    from fieldmover.projection.operator import ProjectionOperator
    from fieldmover.projection.request import open_walls
    from fieldmover.projection.separable import for_cells

    grid = sphere(n, around)
    walls = open_walls(grid, "open")
    solver = for_cells(face_factors(grid), grid.periodic, walls)
    rhs, out = np.random.default_rng(0).normal(size=grid.shape), np.empty(grid.shape)
    solve = median(lambda: solver.solve(rhs, out))
    line = f"direct, sphere {grid.shape}: {solve:.4f} s"
    if beside:
        operator = ProjectionOperator(face_conductances(grid), np.ones(grid.shape, dtype=bool), grid.periodic, walls)
        other = multigrid_on(assembled(operator), rhs.ravel())
        line += (
            f"; multigrid {other.whole:.2f} s, {other.iterations} iterations, {other.whole / solve:.0f} times as long"
        )
    return line


def case(name: str, n: int):
    """The flux of an iterative case, and the arguments of `project`."""
    import fieldmover as fm

    grid = warped_sphere(n, *WARPS[name]) if name in WARPS else sphere(n, n)
    flux = noise(grid)
    if name in WARPS:
        return flux, {}
    if name == "excised ball":
        return flux, {"excised": ball(grid)}
    inside, _ = fm.project(flux)  # what is frozen must have no divergence of its own
    faces = faces_of(grid, ball(grid))
    new, held = (flux.faces, faces) if name == "frozen ball" else ([np.zeros_like(f) for f in flux.faces], None)
    held = held or [~m for m in faces]
    mixed = tuple(np.where(m, a, b) for m, a, b in zip(held, inside.faces, new, strict=True))
    return fm.FaceFlux(grid, mixed), {"frozen": held}


def iterations(name: str, n: int, runs: int) -> Figures:
    import fieldmover as fm
    from fieldmover.projection.conjugate import conjugate_gradients
    from fieldmover.projection.nearest import Preconditioner
    from fieldmover.projection.plan import make_plan

    fm.project(noise(warped_sphere(8, 0.43, 0.21)))  # compiles
    flux, arguments = case(name, n)
    found: list = []
    arrays = peak(lambda: found.append(fm.project(flux, tolerance=TOLERANCE, **arguments))) / (8.0 * n**3)
    record = found.pop()[1]
    wholes = [seconds(lambda: fm.project(flux, tolerance=TOLERANCE, **arguments)) for _ in range(runs - 1)]

    def set_up() -> None:
        plan = make_plan(flux, "open", None, arguments.get("frozen"), arguments.get("excised"), "neutral")
        found[:] = [plan.operator, Preconditioner(plan.operator, plan.factors, plan.scale, plan.weakened)]

    set_ups, solves = [], []
    for _ in range(runs):
        set_ups.append(seconds(set_up))
        net = np.empty(flux.grid.shape)
        found[0].source(flux.faces, net)
        solves.append(seconds(lambda net=net: conjugate_gradients(found[0].apply, found[1], net, TOLERANCE)))
    return Figures(
        statistics.median(set_ups), statistics.median(solves), statistics.median([*wholes, record.seconds]),
        record.iterations, arrays,
    )  # fmt: skip


def multigrid(name: str, n: int) -> Figures:
    from fieldmover.projection.plan import make_plan

    flux, _ = case(name, n)
    operator = make_plan(flux, "open", None, None, None, "free").operator
    rhs = np.empty(flux.grid.shape)
    operator.source(flux.faces, rhs)
    return multigrid_on(assembled(operator), rhs.ravel())


def multigrid_on(matrix: scipy.sparse.csr_matrix, rhs: np.ndarray) -> Figures:
    import pyamg

    times: list[float] = []
    residuals: list[float] = []

    def work() -> None:
        times.append(time.perf_counter())
        solver = pyamg.ruge_stuben_solver(matrix)
        times.append(time.perf_counter())
        solver.solve(rhs, tol=TOLERANCE, accel="cg", residuals=residuals, maxiter=200)
        times.append(time.perf_counter())

    arrays = peak(work) / (8.0 * rhs.size)
    start, ready, done = times
    return Figures(ready - start, done - ready, done - start, len(residuals) - 1, arrays)


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
    parser.add_argument("--runs", type=int, default=3, help="of each iterative case; the median counts")
    parser.add_argument("--large", type=int, help="also a mildly warped sphere of so many cells along each axis")
    parser.add_argument("--no-multigrid", action="store_true")
    chosen = parser.parse_args(arguments)
    spawn = multiprocessing.get_context("spawn")
    largest = max(chosen.cells)
    with ProcessPoolExecutor(1, mp_context=spawn, max_tasks_per_child=1) as pool:

        def apart(function, *values):
            return pool.submit(function, *values).result()

        for n in chosen.direct:
            for periodic in (False, True):
                print(apart(direct, n, periodic), flush=True)
        print(apart(spherical, largest, 2 * largest, not chosen.no_multigrid), flush=True)
        cases = [(name, n, chosen.runs) for name in (*WARPS, "excised ball", "frozen ball", "fill of a ball")
                 for n in chosen.cells]  # fmt: skip
        cases += [("mild warp", chosen.large, 1)] if chosen.large else []
        for name, n, runs in cases:
            own = apart(iterations, name, n, runs)
            print(
                f"{name}, {n}^3: {own.iterations} iterations; set-up {own.set_up:.2f} s, solution {own.solve:.2f} s, "
                f"project() {own.whole:.2f} s, {own.arrays:.1f} arrays",
                flush=True,
            )
            if name in WARPS and n == largest and not chosen.no_multigrid:
                other = apart(multigrid, name, n)
                print(
                    f"    multigrid: {other.iterations} iterations; set-up {other.set_up:.2f} s, solution "
                    f"{other.solve:.2f} s, {other.arrays:.1f} arrays; project() takes {own.whole / other.whole:.2f} of "
                    f"its time, {own.arrays / other.arrays:.2f} of its memory",
                    flush=True,
                )
