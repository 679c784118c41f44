"""The exterior derivatives d0, d1, d2: sums and differences with coefficients +1, -1.

They need no metric. d1 d0 and d2 d1 vanish because each value is added once with each sign; in floating point what
is left is the rounding of a few sums.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.forms.fields import CellContent, EdgePotential, FaceFlux

Array = NDArray[np.float64]
Three = tuple[Array, Array, Array]

_ROWS = 8  # planes of axis 1 per task


def d0(nodes: Array) -> Three:
    """Differences of a node function along every edge.

    Parameters
    ----------
    nodes : ndarray, shape (n1 + 1, n2 + 1, n3 + 1)

    Returns
    -------
    tuple of three ndarrays
        Shapes (n1, n2 + 1, n3 + 1), (n1 + 1, n2, n3 + 1), (n1 + 1, n2 + 1, n3).

    Examples
    --------
    >>> import numpy as np
    >>> [float(a.sum()) for a in d0(np.arange(8.0).reshape(2, 2, 2))]
    [16.0, 8.0, 4.0]
    """
    return np.diff(nodes, axis=0), np.diff(nodes, axis=1), np.diff(nodes, axis=2)


def d1(edges: Three) -> Three:
    """Circulation of edge values round every face.

    Parameters
    ----------
    edges : tuple of three ndarrays
        Shapes as `d0` returns them.

    Returns
    -------
    tuple of three ndarrays
        Shapes (n1 + 1, n2, n3), (n1, n2 + 1, n3), (n1, n2, n3 + 1).
    """
    a1, a2, a3 = (np.ascontiguousarray(a) for a in edges)
    n1, n2, n3 = a1.shape[0], a2.shape[1], a3.shape[2]
    f1, f2, f3 = np.empty((n1 + 1, n2, n3)), np.empty((n1, n2 + 1, n3)), np.empty((n1, n2, n3 + 1))
    compute.for_each(
        lambda rows: _circulation(a1, a2, a3, rows.start, rows.stop, f1, f2, f3), compute.slabs(n1 + 1, _ROWS)
    )
    return f1, f2, f3


def d2(faces: Three) -> Array:
    """Net flux out of every cell.

    Parameters
    ----------
    faces : tuple of three ndarrays
        Shapes as `d1` returns them.

    Returns
    -------
    ndarray, shape (n1, n2, n3)
    """
    f1, f2, f3 = (np.ascontiguousarray(f) for f in faces)
    out = np.empty((f2.shape[0], f1.shape[1], f1.shape[2]))
    compute.for_each(lambda rows: _net(f1, f2, f3, rows.start, rows.stop, out), compute.slabs(out.shape[0], _ROWS))
    return out


def curl(pot: EdgePotential) -> FaceFlux:
    """Flux through every face from the circulation round it; its divergence is zero to round-off.

    Parameters
    ----------
    pot : EdgePotential

    Returns
    -------
    FaceFlux

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> grid = fm.cartesian_grid([0, 1], [0, 1], [0, 1])
    >>> pot = fm.potential_from_function(grid, lambda x, y, z: (-y / 2, x / 2, 0 * z))
    >>> float(fm.curl(pot).f3[0, 0, 0])
    1.0
    """
    return FaceFlux(pot.grid, d1(pot.edges))


def divergence(flux: FaceFlux) -> CellContent:
    """Net magnetic flux out of every cell, unit B L^2.

    Parameters
    ----------
    flux : FaceFlux

    Returns
    -------
    CellContent

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> grid = fm.cartesian_grid([0, 1], [0, 1], [0, 1])
    >>> flux = fm.flux_from_function(grid, lambda x, y, z: (x, y, z))
    >>> round(float(fm.divergence(flux).cells[0, 0, 0]), 12)
    3.0
    """
    return CellContent(flux.grid, d2(flux.faces))


@compute.kernel
def _circulation(a1, a2, a3, start, stop, f1, f2, f3):
    for i in range(start, stop):
        for j in range(f1.shape[1]):
            for k in range(f1.shape[2]):
                f1[i, j, k] = (a3[i, j + 1, k] - a3[i, j, k]) - (a2[i, j, k + 1] - a2[i, j, k])
        if i == f2.shape[0]:
            continue
        for j in range(f2.shape[1]):
            for k in range(f2.shape[2]):
                f2[i, j, k] = (a1[i, j, k + 1] - a1[i, j, k]) - (a3[i + 1, j, k] - a3[i, j, k])
        for j in range(f3.shape[1]):
            for k in range(f3.shape[2]):
                f3[i, j, k] = (a2[i + 1, j, k] - a2[i, j, k]) - (a1[i, j + 1, k] - a1[i, j, k])


@compute.kernel
def _net(f1, f2, f3, start, stop, out):
    for i in range(start, stop):
        for j in range(out.shape[1]):
            for k in range(out.shape[2]):
                out[i, j, k] = (
                    (f1[i + 1, j, k] - f1[i, j, k]) + (f2[i, j + 1, k] - f2[i, j, k]) + (f3[i, j, k + 1] - f3[i, j, k])
                )
