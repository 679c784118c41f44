"""After an install: compile the fluid's kernels in a second process while the first compiles the field's.

Numba compiles one kernel at a time in a process. On first use that is some fifteen seconds, half of them for the
fluid. Both processes fill the same cache on disk.
"""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager

from fieldmover import compute


@contextmanager
def compiling_fluid() -> Iterator[subprocess.Popen[bytes] | None]:
    """Within the context kernels are compiled in the background, if the cache holds none; leave by waiting."""
    if not compute.cache_lacks("fluid"):
        yield None
        return
    command = [sys.executable, "-m", "fieldmover.jobs.warm"]
    process = subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    try:
        yield process
        process.wait()
    finally:
        process.kill()
        process.wait()


def _compile() -> None:
    """Use every kernel of the fluid and of measuring once, on small grids of the kinds a hand-over has."""
    import numpy as np

    import fieldmover as fm
    from fieldmover.diagnostics import FluxSpline
    from fieldmover.interpolation.fluid import FluidPlan

    sphere = fm.spherical_grid(np.geomspace(1, 3, 9), np.linspace(0, np.pi, 9), np.linspace(0, 2 * np.pi, 17))
    x = np.linspace(-2.5, 2.5, 9)
    box = fm.cartesian_grid(x, x, x)
    mass = fm.CellContent(sphere, sphere.cell_volumes())
    FluidPlan(sphere, box).move_by_mass(mass, np.ones((1, *sphere.shape)))
    flux = fm.flux_from_function(box, lambda x, y, z: (y, z, x))
    fm.diagnose(flux)
    FluxSpline(flux).at(box.centres().reshape(3, -1))


if __name__ == "__main__":
    _compile()
