"""The move of a flux: kinds of sources, plans, cost per cell and memory, side by side in one run.

Ratios are those of medians of runs that take turns, so that a busy machine slows both sides alike.
"""

from __future__ import annotations

import argparse
import subprocess
import sys
from collections.abc import Callable
from functools import partial

from scripts.benchmarks.speed import ROOT, ball, medians, physical_components

# Peak memory of one move in a process of its own: cells of the source, of the target, and rows of a slab (0: whole).
ONE_MOVE = """
import resource, sys, time
import numpy as np
import fieldmover as fm
from fieldmover.interpolation.slabs import move_flux_in_slabs
from scripts.benchmarks.speed import ball
from tests.cases import box_inside
from tests.fields import WAVE
def peak():
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20
source, target, rows = (int(a) for a in sys.argv[1:])
flux = fm.curl(fm.potential_from_function(ball(source, 2 * source), WAVE.a))
before, began = peak(), time.perf_counter()
if rows:
    cells = sum(part.f1[1:].size for _, part in move_flux_in_slabs(flux, box_inside(target), rows=rows))
else:
    cells = fm.move_flux(flux, box_inside(target)).f1[1:].size
assert cells == target**3
print(peak(), before, time.perf_counter() - began)
"""


def sources(cells: int) -> dict:
    """Full spheres with the same nodes: closed form, the same map as a function, as a table, and crowded cells."""
    import fieldmover as fm
    from fieldmover.grids import crowded_grid

    plain = ball(cells, 2 * cells)
    ends = plain.periodic, plain.poles
    return {
        "spherical": plain,
        "warped": fm.warped_grid(*plain.nodes, plain.map.to_cartesian, *ends),
        "tabulated": fm.tabulated_grid(*plain.node_positions(), *ends),
        "crowded": crowded_grid(*plain.nodes, separation=3.0),
    }


def speed(cells: int, runs: int) -> None:
    import fieldmover as fm
    from scripts import plain_scipy_move
    from tests.cases import box_inside
    from tests.fields import WAVE

    grids, target = sources(cells), box_inside(cells)
    fluxes = {name: fm.curl(fm.potential_from_function(grid, WAVE.a)) for name, grid in grids.items()}
    stored = physical_components(grids["spherical"], WAVE.b)

    def mover(name: str) -> Callable[[], object]:
        return lambda: fm.move_flux(fluxes[name], target)

    found = medians(
        runs,
        script=lambda: plain_scipy_move.move(stored, *grids["spherical"].nodes, *target.nodes),
        **{name: mover(name) for name in grids},
    )
    print(f"\nOrder 3, {' x '.join(map(str, grids['spherical'].shape))} to {cells}^3 Cartesian")
    print(f"  {'plain SciPy script':24s}{found['script']:8.2f} s")
    for name in grids:
        ratios = (
            f"{found[name] / found['script']:.3f} of the script, {found[name] / found['spherical']:.2f} of spherical"
        )
        print(f"  {name:24s}{found[name]:8.2f} s   {ratios}")
    print("  aims: spherical at most 0.167 of the script, the others at most 2 of spherical")


def plans(cells: int, runs: int) -> None:
    import fieldmover as fm
    from fieldmover.interpolation.plan import FluxPlan
    from tests.cases import box_inside
    from tests.fields import WAVE

    target = box_inside(cells)
    print(f"\nPlans, {cells} x {cells} x {2 * cells} to {cells}^3, order 3")
    for name in sources(4):
        grid = sources(cells)[name]
        flux = fm.curl(fm.potential_from_function(grid, WAVE.a))
        plan = FluxPlan(grid, target)

        def first(name: str = name, flux: fm.FaceFlux = flux) -> object:
            grid = sources(cells)[name] if name == "tabulated" else flux.grid
            return FluxPlan(grid, target).move(fm.FaceFlux(grid, flux.faces))

        def again(plan: FluxPlan = plan, flux: fm.FaceFlux = flux) -> object:
            return plan.move(flux)

        found = medians(runs, first=first, again=again)
        held = plan.nbytes / 2**20
        print(
            f"  {name:24s} first {found['first']:6.2f} s, again {found['again']:6.2f} s: "
            f"{found['again'] / found['first']:.2f} (aim: 0.7); {held:.1f} MB held"
        )


def sizes(cells: list[int], runs: int) -> None:
    import fieldmover as fm
    from tests.cases import box_inside
    from tests.fields import WAVE

    moves = {}
    for n in cells:
        flux = fm.curl(fm.potential_from_function(ball(n, 2 * n), WAVE.a))
        moves[str(n)] = partial(fm.move_flux, flux, box_inside(n))
    found = {label: 1e9 * seconds / int(label) ** 3 for label, seconds in medians(runs, **moves).items()}
    print("\nTime per cell of the target, N x N x 2N to N^3, order 3 (aim: constant within 20 %)")
    for label, cost in found.items():
        print(f"  N = {label:20s}{cost:8.0f} ns")


def memory(source: int, whole: int, in_slabs: int, rows: int = 16) -> None:
    print(f"\nPeak memory of a process, source {source} x {source} x {2 * source}")
    for target, slab in ((whole, 0), (in_slabs, rows)):
        done = subprocess.run(
            [sys.executable, "-c", ONE_MOVE, str(source), str(target), str(slab)],
            cwd=ROOT,
            capture_output=True,
            text=True,
        )
        if done.returncode:
            sys.exit(f"the move failed:\n{done.stderr}")
        peak, before, seconds = (float(x) for x in done.stdout.split())
        what = f"{target}^3 in slabs of {slab}" if slab else f"{target}^3 whole"
        print(f"  {what:24s}{peak:8.2f} GiB   {before:.2f} before the move; {seconds:.1f} s")


def run(arguments: list[str]) -> None:
    parser = argparse.ArgumentParser(prog="scripts/bench transfer", description=__doc__.splitlines()[0])
    parser.add_argument("--cells", type=int, default=128, help="cells along each axis (phi: twice as many)")
    parser.add_argument("--runs", type=int, default=3, help="rounds for the medians")
    parser.add_argument("--large", action="store_true", help="up to 256^3 whole and 512^3 in slabs: 8 GiB of memory")
    parser.add_argument("--only", choices=["speed", "plans", "sizes", "memory"], help="one part alone")
    options = parser.parse_args(arguments)
    from fieldmover import compute

    compute.set_threads(2)
    parts = {
        "speed": lambda: speed(options.cells, options.runs),
        "plans": lambda: plans(options.cells, options.runs),
        "sizes": lambda: sizes([64, 128, *([256] if options.large else [])], options.runs),
        "memory": lambda: memory(*((256, 256, 512) if options.large else (64, 64, 128))),
    }
    for name, part in parts.items():
        if options.only in (None, name):
            part()
