"""A twisted tube of flux in a box, on faces: differences of a vector potential, so its divergence vanishes."""

import h5py
import numpy as np

N = 24
q = np.linspace(-1, 1, N + 1)
middle, step = 0.5 * (q[1:] + q[:-1]), 2 / N


def tube(x, y):
    return np.exp(-4 * (x**2 + y**2))


# The potential (0, x / 2, tube) times the length of an edge; it does not depend on z.
x, y = np.meshgrid(q, middle, indexing="ij")
a_y = np.repeat((0.5 * x * step)[:, :, None], N + 1, axis=2)
x, y = np.meshgrid(q, q, indexing="ij")
a_z = np.repeat((tube(x, y) * step)[:, :, None], N, axis=2)

flux_x = np.diff(a_z, axis=1) - np.diff(a_y, axis=2)
flux_y = -np.diff(a_z, axis=0)
flux_z = np.diff(a_y, axis=0)

with h5py.File("tube.h5", "w") as file:
    file["nodes"] = q
    for name, flux in {"bx": flux_x, "by": flux_y, "bz": flux_z}.items():
        file[name] = flux / step**2  # means over the faces
