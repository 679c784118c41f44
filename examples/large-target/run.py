"""A target that need not fit into memory: made slab by slab, and written as it is made.

    python run.py [cells along each axis of the target, default 48]

The source is a twisted ring of field between two spheres; the target a box between them. Beside the source's own
field only one slab is in memory at a time. What is printed is read back from the file.
"""

from __future__ import annotations

import sys
from pathlib import Path

import h5py
import numpy as np

import fieldmover as fm

HERE = Path(__file__).parent
ROWS = 8


def ring(x, y, z):
    """A vector potential: a ring round the z axis with some twist."""
    profile = np.exp(-((np.hypot(x, y) - 2.0) ** 2 + z * z) / 0.3)
    return -y * profile, x * profile, 0.4 * profile


def main(cells: int = 48, output: Path = HERE / "box.h5") -> float:
    """Move, write, and return the largest net flux of a cell over the largest flux, as stored."""
    r, theta, phi = np.geomspace(1, 4, 33), np.linspace(0, np.pi, 33), np.linspace(0, 2 * np.pi, 65)
    source = fm.spherical_grid(r, theta, phi)
    flux = fm.curl(fm.potential_from_function(source, ring))
    box = fm.cartesian_grid(*[np.linspace(*ends, cells + 1) for ends in ((1.2, 2.2), (-0.5, 0.5), (-0.5, 0.5))])
    with h5py.File(output, "w") as file:
        stored = [file.create_dataset(f"flux{d + 1}", box.face_shape(d), np.float64, chunks=True) for d in range(3)]
        for rows, slab in fm.move_flux_in_slabs(flux, box, rows=ROWS):
            stored[0][rows.start : rows.stop + 1] = slab.f1  # the first and last faces belong to two slabs, bit for bit
            stored[1][rows], stored[2][rows] = slab.f2, slab.f3
    worst = largest = 0.0
    with h5py.File(output) as file:
        for start in range(0, cells, ROWS):
            stop = min(start + ROWS, cells)
            f1, f2, f3 = file["flux1"][start : stop + 1], file["flux2"][start:stop], file["flux3"][start:stop]
            net = np.diff(f1, axis=0) + np.diff(f2, axis=1) + np.diff(f3, axis=2)
            worst, largest = max(worst, float(np.abs(net).max())), max(largest, float(np.abs(f1).max()))
    return worst / largest


if __name__ == "__main__":
    print(f"largest net flux of a cell over the largest flux: {main(*map(int, sys.argv[1:2])):.3g}")
