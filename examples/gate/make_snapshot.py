"""Stands for the run whose snapshots are to be watched: loops in a cylinder, at cell centres."""

import h5py
import numpy as np

R, phi, z = np.linspace(0, 1, 25), np.linspace(0, 2 * np.pi, 33), np.linspace(-1, 1, 41)
r, _, h = np.meshgrid(*(0.5 * (q[1:] + q[:-1]) for q in (R, phi, z)), indexing="ij")
g = np.exp(-2 * (r**2 + h**2))

with h5py.File("loops.h5", "w") as file:
    for name, nodes in {"R": R, "phi": phi, "z": z}.items():
        file[f"mesh/{name}"] = nodes
    file["b/R"] = 4 * r * h * g  # the curl of r g along phi
    file["b/phi"] = r * g
    file["b/z"] = (2 - 4 * r**2) * g
