"""Moving contents: time beside that of a magnetic move, what is kept, and errors as the grids are refined."""

from __future__ import annotations

import argparse
import statistics
import time

import numpy as np

from fieldmover.forms.fields import CellContent
from fieldmover.forms.incidence import curl
from fieldmover.forms.sample import potential_from_function
from fieldmover.grids import cartesian_grid, spherical_grid
from fieldmover.grids.grid import Grid
from fieldmover.interpolation.angular import move_velocity
from fieldmover.interpolation.fluid import FluidPlan, move_content
from fieldmover.interpolation.flux import move_flux
from tests.test_fluid import ACROSS, INSIDE, ball, cube, integral, line, smooth, wedge
from tests.test_fluid_angular import rotating_ring


def run(arguments: list[str]) -> None:
    parser = argparse.ArgumentParser(prog="scripts/bench fluid", description=__doc__)
    parser.add_argument("--cells", type=int, default=128, help="along each axis of the timed move")
    parser.add_argument("--runs", type=int, default=3)
    parser.add_argument("--accuracy", type=int, nargs="*", default=[16, 32, 64], help="cells of the error table")
    chosen = parser.parse_args(arguments)
    _time(chosen.cells, chosen.runs)
    if chosen.accuracy:
        _conservation(chosen.accuracy[0])
        _ring(chosen.accuracy)
        _errors(chosen.accuracy)


def _time(n: int, runs: int) -> None:
    shell = spherical_grid(np.geomspace(1, 3, n + 1), line(0, np.pi, n), line(0, 2 * np.pi, 2 * n))
    _compare("a part", shell, cartesian_grid(*[line(-1.6, -0.7, n)] * 3), runs)
    _compare("all", *INSIDE["sphere to box"](n), runs)


def _compare(what: str, source: Grid, target: Grid, runs: int) -> None:
    content, mass = (CellContent(source, k * source.cell_volumes()) for k in (1.0, 2.0))
    plan = FluidPlan(source, target)
    flux = curl(potential_from_function(source, lambda x, y, z: (-y / 2, x / 2, 0 * z)))
    steps = {
        "plan": lambda: FluidPlan(source, target),
        "move": lambda: plan.move(content),
        "one more by mass": lambda: plan.move_by_mass(mass, content.cells),
        "content": lambda: move_content(content, target),
        "flux": lambda: move_flux(flux, target),
    }
    taken: dict[str, list[float]] = {name: [] for name in steps}
    for turn in range(runs + 1):  # in turns, so that a busy machine slows all alike; the first does not count
        for name, step in steps.items():
            began = time.perf_counter()
            step()
            if turn:
                taken[name].append(time.perf_counter() - began)
    seconds = {name: statistics.median(values) for name, values in taken.items()}
    print(f"Seconds, {what} of a sphere {source.shape} to a box {target.shape}:")
    for name, value in seconds.items():
        print(f"    {name:16s}{value:8.3f}")
    print(f"    content / flux: {seconds['content'] / seconds['flux']:.2f}")


PAIRS = {
    "sphere with poles and seam": INSIDE["sphere to box"],
    "box round a pole": INSIDE["box to sphere without hole"],
    "cylinder with axis": INSIDE["cylinder to box"],
    "sphere to cylinder": INSIDE["sphere to cylinder"],
    "warped to box": INSIDE["warped to box"],
    "wedge to box": lambda n: (wedge(n), cartesian_grid(line(0, 3.1, n), line(-2.3, 2.3, n), line(-2.2, 2.2, n))),
}


def _conservation(n: int) -> None:
    """Densities over six decades, velocities and energies at random: what becomes of the sums."""
    print(f"\nRelative change of sums, {n} cells: mass; momentum; energy; angular momentum with and without keep")
    for name, grids in PAIRS.items():
        source, target = grids(n)
        plan, rng = FluidPlan(source, target), np.random.default_rng(1)
        mass = CellContent(source, source.cell_volumes() * 10 ** rng.uniform(-3, 3, source.shape))
        values = np.concatenate([rng.standard_normal((3, *source.shape)), rng.uniform(0, 1, (1, *source.shape))])
        moved, after = plan.move_by_mass(mass, values)
        scale = np.abs(mass.cells * values).sum(axis=(1, 2, 3))
        change = np.abs((moved.cells * after).sum(axis=(1, 2, 3)) - (mass.cells * values).sum(axis=(1, 2, 3))) / scale
        kept = move_velocity(plan, mass, values[:3], "angular momentum")[2]
        arm = scale[:3].max() * np.abs(source.node_positions()).max()
        print(
            f"    {name:30s}{abs(moved.cells.sum() / mass.cells.sum() - 1):8.0e}{change[:3].max():8.0e}{change[3]:8.0e}"
            f"{abs(kept.stored - kept.source) / arm:8.0e}{abs(kept.moved - kept.source) / arm:8.0e}"
        )


def _ring(sizes: list[int]) -> None:
    print("\nAngular momentum of a rotating ring, sphere to box: relative change with and without keep; added rate")
    for n in sizes:
        source, target = ball(n, 0.3, 1.0), cube(n, 1.05, (0.013, 0.021, 0.007))
        plan, (mass, velocity) = FluidPlan(source, target), rotating_ring(source)
        record = move_velocity(plan, mass, velocity, "angular momentum")[2]
        with_keep, without = (abs(value / record.source - 1) for value in (record.stored, record.moved))
        print(f"    {n:4d} cells{with_keep:12.0e}{without:12.1e}{record.turn:12.1e}")


def _errors(sizes: list[int]) -> None:
    print("\nDensity where covered: largest error of a constant; mean error of a smooth one; change of the total")
    for name, grids in {**INSIDE, **ACROSS}.items():
        row = []
        for n in sizes:
            source, target = grids(n)
            plan = FluidPlan(source, target)
            volume, covered = target.cell_volumes(), plan.coverage == 1
            content, exact = integral(source, smooth), integral(target, smooth).cells
            one = plan.move(CellContent(source, source.cell_volumes())).cells / volume
            moved = plan.move(content).cells
            flat = np.abs(one - 1)[covered].max()
            bent = np.abs(moved - exact)[covered].sum() / exact[covered].sum()
            kept = f"{abs(moved.sum() / content.cells.sum() - 1):.0e}" if plan.contained.all() else "  -  "
            row.append(f"{flat:.0e} {bent:.1e} {kept}")
        print(f"    {name:30s}" + "   ".join(row))
