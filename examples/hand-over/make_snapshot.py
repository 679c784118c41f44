"""A slanted dipole in a shell of gas, at cell centres of a spherical grid with two ghost layers, stored [k, j, i]."""

import h5py
import numpy as np

GHOSTS = 2


def with_ghosts(start, stop, cells):
    step = (stop - start) / cells
    return np.linspace(start - GHOSTS * step, stop + GHOSTS * step, cells + 2 * GHOSTS + 1)


r, theta, phi = with_ghosts(1.0, 4.0, 40), with_ghosts(0.0, np.pi, 32), with_ghosts(0.0, 2 * np.pi, 64)
R, T, P = np.meshgrid(*(0.5 * (q[1:] + q[:-1]) for q in (r, theta, phi)), indexing="ij")

outward = np.stack([np.sin(T) * np.cos(P), np.sin(T) * np.sin(P), np.cos(T)])
south = np.stack([np.cos(T) * np.cos(P), np.cos(T) * np.sin(P), -np.sin(T)])
east = np.stack([-np.sin(P), np.cos(P), 0 * P])
moment = np.array([0.5, 0.0, 0.8])
b = (3 * np.tensordot(moment, outward, 1) * outward - moment[:, None, None, None]) / R**3
density = np.exp(-((R - 2.5) ** 2)) + 1e-3

with h5py.File("shell.h5", "w") as file:
    for name, nodes in {"r": r, "theta": theta, "phi": phi}.items():
        file[f"grid/{name}"] = nodes
    for name, direction in {"r": outward, "theta": south, "phi": east}.items():
        file[f"b/{name}"] = (b * direction).sum(axis=0).T
    file["rho"] = density.T
    file.attrs["time"] = 3.0
