"""The projection of small grids written out as matrices, face by face; nothing here imports the package."""

from __future__ import annotations

import numpy as np


def divergence_matrix(shape, periodic):
    """Rows: cells; columns: faces of all axes, those of a seam once. And (axis, index) of every column."""
    columns = {}
    for axis in range(3):
        faces = [n + (d == axis and not periodic[axis]) for d, n in enumerate(shape)]
        for index in np.ndindex(*faces):
            columns[axis, index] = len(columns)
    matrix = np.zeros((int(np.prod(shape)), len(columns)))
    for row, cell in enumerate(np.ndindex(*shape)):
        for axis in range(3):
            low, high = list(cell), list(cell)
            high[axis] += 1
            if periodic[axis]:
                high[axis] %= shape[axis]
            matrix[row, columns[axis, tuple(low)]] -= 1
            matrix[row, columns[axis, tuple(high)]] += 1
    return matrix, list(columns)


def gather(faces, columns):
    """Values of three face arrays in the order of the columns."""
    return np.array([faces[axis][index] for axis, index in columns])


def least_change(divergence, conductances, flux, held):
    """The flux without divergence nearest to `flux`; norm sum of F^2 / conductance, `held` ones kept."""
    d = divergence[:, ~held]
    g = conductances[~held]
    p = np.linalg.lstsq((d * g) @ d.T, divergence @ flux, rcond=1e-12)[0]
    result = flux.copy()
    result[~held] -= g * (d.T @ p)
    return result
