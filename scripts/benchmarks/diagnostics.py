"""Diagnostics: time of each figure in passes, copies of one number per cell on one thread, beside that of reading."""

from __future__ import annotations

import argparse
import statistics
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import h5py
import numpy as np

from fieldmover.diagnostics import (
    compare_fields,
    diagnose,
    disc,
    relative_helicity,
    stencil_divergence,
    surface_fluxes,
)
from fieldmover.forms.fields import FaceFlux
from fieldmover.forms.incidence import curl
from fieldmover.forms.sample import potential_from_function
from fieldmover.grids import Grid, cartesian_grid, spherical_grid, warped_grid
from fieldmover.interpolation import cells_from_flux
from fieldmover.snapshots.gate import Snapshot


def run(arguments: list[str]) -> None:
    parser = argparse.ArgumentParser(prog="scripts/bench diagnostics", description=__doc__)
    parser.add_argument("--cells", type=int, default=128, help="along each axis")
    parser.add_argument("--runs", type=int, default=5)
    chosen = parser.parse_args(arguments)
    print(f"Passes (ms), {chosen.cells} cells along each axis; read: three arrays of float64 with checksums")
    for name, grid in _grids(chosen.cells).items():
        taken = _in_turns(_steps(grid), chosen.runs)
        row = "  ".join(f"{step} {t / taken['copy']:.1f} ({1e3 * t:.1f})" for step, t in taken.items())
        print(f"    {name:10s}{row}")


def _grids(n: int) -> dict[str, Grid]:
    q = np.linspace(-1, 1, n + 1)
    return {
        "box": cartesian_grid(q, q, q),
        "sphere": spherical_grid(
            np.geomspace(1, 3, n + 1), np.linspace(0, np.pi, n + 1), np.linspace(0, 2 * np.pi, n + 1)
        ),
        "warped": warped_grid(q, q, q, lambda a, b, c: (a + 0.1 * np.sin(b), b + 0.1 * c, c)),
    }


def _steps(grid: Grid) -> dict[str, Callable[[], object]]:
    flux = curl(potential_from_function(grid, lambda x, y, z: (np.sin(y) * z, x * z, np.cos(x))))
    cells = cells_from_flux(flux)
    out, content = np.empty(grid.shape), np.ones(grid.shape)
    target = cartesian_grid(*[np.linspace(0.6, 0.9, grid.shape[0] + 1)] * 3)
    other = curl(potential_from_function(target, lambda x, y, z: (np.sin(y) * z, x * z, np.cos(x))))
    steps: dict[str, Callable[[], object]] = {
        "copy": lambda: np.copyto(out, content),
        "diagnose": lambda: diagnose(flux),
        "read": _reading(flux),
        "surface": lambda: surface_fluxes(flux, {"lid": disc(0.15, centre=(0.75, 0.75, 0.75))}),
        "agreement": lambda: compare_fields(flux, other, most=1 << 18),
        "helicity": lambda: relative_helicity(flux),
    }
    if grid.kind == "cartesian":
        steps["stencil"] = lambda: stencil_divergence(grid, cells)
    return steps


def _reading(flux: FaceFlux) -> Callable[[], object]:
    folder = tempfile.TemporaryDirectory()
    path = Path(folder.name) / "field.h5"
    with h5py.File(path, "w") as file:
        for axis, face in enumerate(flux.faces):
            file.create_dataset(f"f{axis}", data=face, chunks=True, fletcher32=True)

    def read(_keep: object = folder) -> None:
        with Snapshot(path) as snapshot:
            for axis in range(3):
                snapshot.read(f"/f{axis}")

    return read


def _in_turns(steps: dict[str, Callable[[], object]], runs: int) -> dict[str, float]:
    """Medians, in turns, so that a busy machine slows all alike; the first turn does not count."""
    taken: dict[str, list[float]] = {name: [] for name in steps}
    for turn in range(runs + 1):
        for name, step in steps.items():
            began = time.perf_counter()
            step()
            if turn:
                taken[name].append(time.perf_counter() - began)
    return {name: statistics.median(values) for name, values in taken.items()}
