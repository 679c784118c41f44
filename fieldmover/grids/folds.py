"""Cells that are folded, told from the positions of their nodes."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute

Array = NDArray[np.float64]

_ROWS = 8


def least_corner(table: Array) -> tuple[float, tuple[int, int, int], int, int]:
    """The least Jacobian at the corners of cells: the triple product of the three edges that meet there.

    Parameters
    ----------
    table : ndarray, shape (3, n1 + 1, n2 + 1, n3 + 1)
        Positions of the nodes. Corners with an edge of no length, on poles, are left out.

    Returns
    -------
    value : float
        Volume per cell.
    cell : tuple of three int
        Where.
    right, wrong : int
        How many cells have positive corners only, and how many do not.

    Examples
    --------
    >>> x = np.stack(np.meshgrid([0.0, 1.0, 3.0], [0.0, 1.0], [0.0, 2.0], indexing="ij"))
    >>> least_corner(x)
    (2.0, (0, 0, 0), 2, 0)
    """
    parts = compute.slabs(table.shape[1] - 1, _ROWS)
    found = compute.for_each(lambda rows: _least_corner(table[:, rows.start : rows.stop + 1], rows.start), parts)
    value, i, j, k, _, _ = min(found, key=lambda row: row[0])
    return float(value), (int(i), int(j), int(k)), sum(row[4] for row in found), sum(row[5] for row in found)


@compute.kernel
def _least_corner(table, offset):
    """As `least_corner`, in one row."""
    least, at_i, at_j, at_k, right, left = np.inf, 0, 0, 0, 0, 0
    e = np.empty((3, 3))
    for i in range(table.shape[1] - 1):
        for j in range(table.shape[2] - 1):
            for k in range(table.shape[3] - 1):
                smallest = np.inf
                for corner in range(8):
                    a, b, c = corner & 1, (corner >> 1) & 1, (corner >> 2) & 1
                    for x in range(3):
                        e[x, 0] = table[x, i + 1, j + b, k + c] - table[x, i, j + b, k + c]
                        e[x, 1] = table[x, i + a, j + 1, k + c] - table[x, i + a, j, k + c]
                        e[x, 2] = table[x, i + a, j + b, k + 1] - table[x, i + a, j + b, k]
                    det = (
                        e[0, 0] * (e[1, 1] * e[2, 2] - e[2, 1] * e[1, 2])
                        - e[1, 0] * (e[0, 1] * e[2, 2] - e[2, 1] * e[0, 2])
                        + e[2, 0] * (e[0, 1] * e[1, 2] - e[1, 1] * e[0, 2])
                    )
                    if det != 0.0:
                        smallest = min(smallest, det)
                if smallest > 0.0:
                    right += 1
                else:
                    left += 1
                if smallest < least:
                    least, at_i, at_j, at_k = smallest, i + offset, j, k
    return least, at_i, at_j, at_k, right, left
