"""Time and memory of the main steps, each beside what it is compared with, in one run.

Medians of several runs that take turns, so that a busy machine slows both sides alike.
"""

from __future__ import annotations

import argparse
import os
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np

ROOT = Path(__file__).resolve().parents[2]

# A first move in a new process: all kernels of the transfer on a small grid.
FIRST_MOVE = """
import time; began = time.perf_counter()
import numpy as np, fieldmover as fm
r, theta, phi = np.geomspace(1, 3, 17), np.linspace(0, np.pi, 17), np.linspace(0, 2 * np.pi, 33)
flux = fm.flux_from_function(fm.spherical_grid(r, theta, phi), lambda x, y, z: (y, z, x))
flux, _ = fm.project(flux)
fm.diagnose(fm.move_flux(flux, fm.cartesian_grid(*[np.linspace(-1.6, -0.9, 17)] * 3)))
print(time.perf_counter() - began)
"""


def medians(runs: int, **steps: Callable[[], object]) -> dict[str, float]:
    """Median seconds of each step over `runs` rounds, after one round that is not counted."""
    seconds: dict[str, list[float]] = {name: [] for name in steps}
    for turn in range(runs + 1):
        for name, step in steps.items():
            began = time.perf_counter()
            step()
            if turn:
                seconds[name].append(time.perf_counter() - began)
    return {name: statistics.median(values) for name, values in seconds.items()}


def ball(cells: int, around: int):
    """Full sphere, 1 < r < 3 in logarithmic steps, cells x cells x around."""
    import fieldmover as fm

    return fm.spherical_grid(
        np.geomspace(1, 3, cells + 1), np.linspace(0, np.pi, cells + 1), np.linspace(0, 2 * np.pi, around + 1)
    )


def physical_components(grid, b):
    """Spherical orthonormal components of b(x, y, z) at the cell centres, as a snapshot would hold them."""
    r, theta, phi = (0.5 * (q[1:] + q[:-1]) for q in grid.nodes)
    r, theta, phi = np.meshgrid(np.sqrt(grid.nodes[0][1:] * grid.nodes[0][:-1]), theta, phi, indexing="ij")
    st, ct, sp, cp = np.sin(theta), np.cos(theta), np.sin(phi), np.cos(phi)
    bx, by, bz = b(r * st * cp, r * st * sp, r * ct)
    return (bx * cp + by * sp) * st + bz * ct, (bx * cp + by * sp) * ct - bz * st, by * cp - bx * sp


def move(cells: int, runs: int) -> None:
    import fieldmover as fm
    from scripts import plain_scipy_move
    from tests import reference
    from tests.cases import box_inside, largest_error
    from tests.fields import WAVE

    source, target = ball(cells, 2 * cells), box_inside(cells)
    box = target.nodes
    flux = fm.curl(fm.potential_from_function(source, WAVE.a))
    stored = physical_components(source, WAVE.b)
    exact = reference.circulation_round_faces(reference.circulations(target, WAVE.a, points=4))
    kept: dict[str, list[np.ndarray]] = {}

    def plain():
        h1, h2, h3 = (q[1] - q[0] for q in box)
        faces = plain_scipy_move.move(stored, *source.nodes, *box)
        kept["plain"] = [f * area for f, area in zip(faces, (h2 * h3, h1 * h3, h1 * h2), strict=True)]

    def ours():
        kept["ours"] = list(fm.move_flux(flux, target, order=3).faces)

    print(f"\nMove, {' x '.join(map(str, source.shape))} spherical to {cells}^3 Cartesian")
    found = medians(runs, plain=plain, potential=lambda: fm.potential(flux), ours=ours)
    for name, label in (("plain", "plain SciPy script"), ("ours", "move_flux, order 3 (potential included)")):
        error = largest_error(fm.FaceFlux(target, tuple(kept[name])), exact)
        print(f"  {label:42s}{found[name]:8.2f} s   largest flux error {error:.1e}")
    print(f"  {'of which potential':42s}{found['potential']:8.2f} s")
    print(f"  move_flux / script: {found['ours'] / found['plain']:.2f} (aim: 0.25)")


def projection(cells: int, runs: int) -> None:
    import pyamg
    import scipy.sparse

    import fieldmover as fm
    from fieldmover.forms.measures import face_conductances

    grid = ball(cells, cells)
    rng = np.random.default_rng(0)
    faces = [rng.normal(size=grid.face_shape(d)) * area for d, area in enumerate(grid.face_areas())]
    faces[2][:, :, -1] = faces[2][:, :, 0]
    flux = fm.FaceFlux(grid, tuple(faces))
    net = fm.divergence(flux).cells.ravel()

    number = np.arange(net.size).reshape(grid.shape)
    diagonal, rows, columns, values = np.zeros(net.size), [], [], []
    for axis, conductance in enumerate(face_conductances(grid)):
        inner = [slice(1, -1) if d == axis else slice(None) for d in range(3)]
        low = number[tuple(slice(None, -1) if d == axis else slice(None) for d in range(3))].ravel()
        high = number[tuple(slice(1, None) if d == axis else slice(None) for d in range(3))].ravel()
        ends = [np.moveaxis(number, axis, 0)[end].ravel() for end in (0, -1)]
        walls = [np.moveaxis(conductance, axis, 0)[end].ravel() for end in (0, -1)]
        joined = conductance[tuple(inner)].ravel()
        if grid.periodic[axis]:
            low, high = np.append(low, ends[1]), np.append(high, ends[0])
            joined = np.append(joined, walls[0])
        else:
            for cell, wall in zip(ends, walls, strict=True):
                np.add.at(diagonal, cell, wall)
        for a, b in ((low, high), (high, low)):
            np.add.at(diagonal, a, joined)
            rows.append(a), columns.append(b), values.append(-joined)
    matrix = scipy.sparse.csr_matrix(
        (np.concatenate(values), (np.concatenate(rows), np.concatenate(columns))), shape=(net.size, net.size)
    ) + scipy.sparse.diags(diagonal, format="csr")
    del rows, columns, values

    def multigrid():
        solver = pyamg.ruge_stuben_solver(matrix, max_coarse=500)
        return solver.solve(net, tol=1e-10, accel="cg")

    print(f"\nProjection, {cells}^3 full sphere, random field, tolerance 1e-10")
    began = time.perf_counter()
    solution = multigrid()
    general = time.perf_counter() - began
    left = np.abs(net - matrix @ solution).max() / np.abs(net).max()
    found = medians(runs, ours=lambda: fm.project(flux, tolerance=1e-10))["ours"]
    clean, _ = fm.project(flux, tolerance=1e-10)
    ours_left = np.abs(fm.divergence(clean).cells).max() / np.abs(net).max()
    print(f"  {'algebraic multigrid (PyAMG), once':42s}{general:8.2f} s   largest net flux left {left:.1e}")
    print(f"  {'project':42s}{found:8.2f} s   largest net flux left {ours_left:.1e}")
    print(f"  project / multigrid: 1/{general / found:.0f} (aim: 1/50)")


def start() -> None:
    print("\nFirst move in a new process (16^3 cells), kernels compiled or from the cache")
    with tempfile.TemporaryDirectory() as folder:
        environment = {**os.environ, "NUMBA_CACHE_DIR": folder}
        for label in ("nothing compiled yet", "from the cache"):
            done = subprocess.run(
                [sys.executable, "-c", FIRST_MOVE], env=environment, cwd=ROOT, capture_output=True, text=True
            )
            if done.returncode:
                sys.exit(f"the first move failed:\n{done.stderr}")
            print(f"  {label:42s}{float(done.stdout):8.2f} s")


def same_bits(cells: int) -> None:
    import fieldmover as fm
    from fieldmover import compute

    target = fm.cartesian_grid(*[np.linspace(-1.6, -0.7, cells + 1)] * 3)
    before, results, seconds = compute.threads(), [], []
    grid = ball(cells, 2 * cells)
    noise = np.random.default_rng(0).normal(size=grid.face_shape(0))
    clean = fm.flux_from_function(grid, lambda x, y, z: (y * z, np.sin(x), x * y))
    rough = fm.FaceFlux(grid, (clean.f1 * (1 + 0.01 * noise), clean.f2, clean.f3))
    for count in (1, 2):
        compute.set_threads(count)
        began = time.perf_counter()
        results.append(fm.move_flux(fm.project(rough)[0], target))
        seconds.append(time.perf_counter() - began)
    compute.set_threads(before)
    same = all(np.array_equal(a, b) for a, b in zip(results[0].faces, results[1].faces, strict=True))
    print(f"\nProjection and move at {cells}^3 with 1 and 2 threads")
    print(f"  {seconds[0]:.2f} s and {seconds[1]:.2f} s, {'the same bits' if same else 'DIFFERENT BITS'}")


def run(arguments: list[str]) -> None:
    parser = argparse.ArgumentParser(prog="scripts/bench speed", description=__doc__.splitlines()[0])
    parser.add_argument("--cells", type=int, default=128, help="cells along each axis (phi: twice as many)")
    parser.add_argument("--runs", type=int, default=3, help="rounds for the medians")
    parser.add_argument("--only", choices=["move", "projection", "start", "bits"], help="one part alone")
    options = parser.parse_args(arguments)
    from fieldmover import compute

    compute.set_threads(2)
    parts = {
        "move": lambda: move(options.cells, options.runs),
        "projection": lambda: projection(options.cells, options.runs),
        "start": start,
        "bits": lambda: same_bits(options.cells // 2),
    }
    for name, part in parts.items():
        if options.only in (None, name):
            part()
