"""Moving contents: time beside that of a magnetic move, and errors as the grids are refined."""

from __future__ import annotations

import argparse
import statistics
import time

import numpy as np

from fieldmover.forms.fields import CellContent
from fieldmover.forms.incidence import curl
from fieldmover.forms.sample import potential_from_function
from fieldmover.grids import cartesian_grid, spherical_grid
from fieldmover.interpolation.fluid import FluidPlan, move_content
from fieldmover.interpolation.flux import move_flux
from tests.test_fluid import ACROSS, INSIDE, integral, smooth


def run(arguments: list[str]) -> None:
    parser = argparse.ArgumentParser(prog="scripts/bench fluid", description=__doc__)
    parser.add_argument("--cells", type=int, default=128, help="along each axis of the timed move")
    parser.add_argument("--runs", type=int, default=3)
    parser.add_argument("--accuracy", type=int, nargs="*", default=[16, 32, 64], help="cells of the error table")
    chosen = parser.parse_args(arguments)
    _time(chosen.cells, chosen.runs)
    if chosen.accuracy:
        _errors(chosen.accuracy)


def _time(n: int, runs: int) -> None:
    theta, phi = np.linspace(0, np.pi, n + 1), np.linspace(0, 2 * np.pi, 2 * n + 1)
    source = spherical_grid(np.geomspace(1, 3, n + 1), theta, phi)
    target = cartesian_grid(*[np.linspace(-1.6, -0.7, n + 1)] * 3)
    content = CellContent(source, source.cell_volumes())
    plan = FluidPlan(source, target)
    flux = curl(potential_from_function(source, lambda x, y, z: (-y / 2, x / 2, 0 * z)))
    steps = {
        "plan": lambda: FluidPlan(source, target),
        "move": lambda: plan.move(content),
        "by mass": lambda: plan.move_by_mass(content, content.cells),
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
    print(f"Seconds, sphere {source.shape} to box {target.shape}:")
    for name, value in seconds.items():
        print(f"    {name:10s}{value:8.3f}")
    print(f"    content / flux: {seconds['content'] / seconds['flux']:.2f}")


def _errors(sizes: list[int]) -> None:
    print("\nMean error of the density where covered: constant; smooth, relative to the constant; total")
    for name, grids in {**INSIDE, **ACROSS}.items():
        row = []
        for n in sizes:
            source, target = grids(n)
            plan = FluidPlan(source, target)
            volume, covered = target.cell_volumes(), plan.coverage == 1
            content, exact = integral(source, smooth), integral(target, smooth).cells
            one = plan.move(CellContent(source, source.cell_volumes())).cells / volume
            moved = plan.move(content).cells
            scale = exact[covered].sum()
            flat = (np.abs(one - 1) * exact)[covered].sum() / scale
            bent = np.abs(moved - one * exact)[covered].sum() / scale
            kept = f"{abs(moved.sum() / content.cells.sum() - 1):.0e}" if plan.contained.all() else "  -  "
            row.append(f"{flat:.1e} {bent:.1e} {kept}")
        print(f"    {name:30s}" + "   ".join(row))
