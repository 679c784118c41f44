"""Energy, volume and mean field of single cells, in slabs: what the figures are summed from."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.errors import FieldError
from fieldmover.forms.fields import FaceFlux, Three
from fieldmover.forms.measures import face_factors, near_volumes
from fieldmover.grids.axes import dual_lengths
from fieldmover.grids.grid import Grid, volume_factors

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

SLAB = 1 << 15  # cells worked on at a time
FEWEST_ROWS = 2  # of grids whose nodes must be mapped; more would leave the cache


def mean_field(flux: FaceFlux, rows: slice = slice(None)) -> tuple[Array, Array]:
    """Mean field of every cell from its six fluxes, and the cell volumes.

    B = sum over the axes of (mean flux through the two faces) x (vector from one face to the other) / volume, that
    vector being the mean of the four edges. It is the integral of x (B.dS) over the surface, which for a solenoidal
    field is the integral of B over the cell; it holds beside poles too, where one face carries nothing.

    Parameters
    ----------
    flux : FaceFlux
    rows : slice
        Cells along axis 1.

    Returns
    -------
    b : ndarray, shape (3, rows, n2, n3)
        Cartesian components, unit B.
    volumes : ndarray, shape (rows, n2, n3)
        Triple product of the mean edges, unit L^3.
    """
    x = _node_slab(flux.grid, rows)
    b, volumes = np.empty((3, *(n - 1 for n in x.shape[1:]))), np.empty([n - 1 for n in x.shape[1:]])
    _means(x, *slab_faces(flux, rows), b, volumes)
    return b, volumes


def _node_slab(grid: Grid, rows: slice) -> Array:
    """Positions of the nodes of the cells in rows of axis 1."""
    start, stop, _ = rows.indices(grid.shape[0])
    q1, q2, q3 = grid.nodes
    return np.stack(grid.map.to_cartesian(q1[start : stop + 1, None, None], q2[:, None], q3))


def slab_faces(flux: FaceFlux, rows: slice) -> tuple[Array, Array, Array]:
    """Faces of the cells in rows of axis 1."""
    start, stop, _ = rows.indices(flux.grid.shape[0])
    return flux.f1[start : stop + 1], flux.f2[start:stop], flux.f3[start:stop]


def cell_slabs(grid: Grid) -> list[slice]:
    """Rows of axis 1 to work on at a time; they depend on the grid alone."""
    n1, n2, n3 = grid.shape
    rows = SLAB // (n2 * n3)
    if volume_factors(grid) is None:  # nodes between slabs are mapped twice
        rows = max(rows, FEWEST_ROWS)
    return compute.slabs(n1, rows)


def cell_volumes(grid: Grid) -> Array:
    """Volumes of all cells as `forms.measures.near_volumes` has them, without the memory it takes at once."""
    parts = compute.for_each(lambda rows: near_volumes(grid, rows), cell_slabs(grid))
    return np.concatenate(parts)


@dataclass(frozen=True, eq=False)
class CellWeights:
    """What turns squared fluxes into cell energies on grids whose coordinate surfaces cross at right angles.

    The energy of a cell along axis d is (low[d] F_low^2 + high[d] F_high^2) times one factor for each other
    axis; `cross` holds these as (12, 13, 21, 23, 31, 32). `size` multiplies to the cube root of the volume.
    """

    low: Three
    high: Three
    cross: tuple[Array, Array, Array, Array, Array, Array]
    size: Three


def cell_weights(grid: Grid) -> CellWeights | None:
    """Weights of a grid; None where the coordinate surfaces may cross at any angle."""
    factors, volumes = face_factors(grid), volume_factors(grid)
    if factors is None or volumes is None:
        return None
    low, high = [], []
    for axis, nodes in enumerate(grid.nodes):
        conductance = factors[axis][axis]
        weight = np.divide(0.5, conductance, out=np.zeros_like(conductance), where=conductance > 0)
        weight /= dual_lengths(nodes, grid.periodic[axis])
        inside = 0.5 * np.diff(nodes)
        low.append(weight[:-1] * inside)
        high.append(weight[1:] * inside)
    c12, c13, c21, c23, c31, c32 = (1.0 / factors[d][e] for d in range(3) for e in range(3) if d != e)
    s1, s2, s3 = (np.cbrt(v) for v in volumes)
    return CellWeights(
        (low[0], low[1], low[2]), (high[0], high[1], high[2]), (c12, c13, c21, c23, c31, c32), (s1, s2, s3)
    )


def slab_energies(flux: FaceFlux, weights: CellWeights | None, rows: slice) -> tuple[Array, Array]:
    """Energies of the cells in rows by grid axis, shape (3, rows, n2, n3), and cube roots of their volumes.

    By axis means half the integral of B^i B_i: the energy of the component along the axis where axes are at
    right angles, else a split that adds up to the whole and may have negative parts.
    """
    faces = slab_faces(flux, rows)
    energies, size = np.empty((3, *faces[0][:-1].shape)), np.empty(faces[0][:-1].shape)
    if weights is None:
        _energies_of_means(_node_slab(flux.grid, rows), *faces, energies, size)
        return energies, np.cbrt(size, out=size)
    (low1, low2, low3), (high1, high2, high3), (s1, s2, s3) = weights.low, weights.high, weights.size
    c12, c13, c21, c23, c31, c32 = weights.cross
    _energies(
        *faces, (low1[rows], low2, low3), (high1[rows], high2, high3),
        (c12, c13, c21[rows], c23, c31[rows], c32), (s1[rows], s2, s3), energies, size,
    )  # fmt: skip
    return energies, size


def checked_mask(grid: Grid, mask: Mask, what: str) -> Mask:
    """The mask, or an error that says why it is none for the cells of this grid."""
    mask = np.asarray(mask)
    if mask.shape != grid.shape or mask.dtype != np.bool_:
        raise FieldError(f"{what}: {mask.dtype} array of shape {mask.shape}, expected bool of shape {grid.shape}")
    return mask


def same_place(one: Grid, other: Grid) -> bool:
    """Whether two grids have all nodes in the same places."""
    return one is other or bool(np.array_equal(one.node_positions(), other.node_positions()))


@compute.kernel
def _energies(f1, f2, f3, low, high, cross, sizes, energies, size):  # type: ignore[no-untyped-def]
    l1, l2, l3 = low
    h1, h2, h3 = high
    c12, c13, c21, c23, c31, c32 = cross
    s1, s2, s3 = sizes
    n1, n2, n3 = size.shape
    for i in range(n1):
        for j in range(n2):
            for k in range(n3):
                along = l1[i] * f1[i, j, k] ** 2 + h1[i] * f1[i + 1, j, k] ** 2
                energies[0, i, j, k] = along * c12[j] * c13[k]
                along = l2[j] * f2[i, j, k] ** 2 + h2[j] * f2[i, j + 1, k] ** 2
                energies[1, i, j, k] = along * c21[i] * c23[k]
                along = l3[k] * f3[i, j, k] ** 2 + h3[k] * f3[i, j, k + 1] ** 2
                energies[2, i, j, k] = along * c31[i] * c32[j]
                size[i, j, k] = s1[i] * s2[j] * s3[k]


@compute.kernel
def _mean_edges(p, i, j, k):  # type: ignore[no-untyped-def]
    """One component of the means of the four edges of a cell along each axis."""
    a000, a001, a010, a011 = p[i, j, k], p[i, j, k + 1], p[i, j + 1, k], p[i, j + 1, k + 1]
    a100, a101, a110 = p[i + 1, j, k], p[i + 1, j, k + 1], p[i + 1, j + 1, k]
    a111 = p[i + 1, j + 1, k + 1]
    return (
        0.25 * (((a100 + a101) + (a110 + a111)) - ((a000 + a001) + (a010 + a011))),
        0.25 * (((a010 + a011) + (a110 + a111)) - ((a000 + a001) + (a100 + a101))),
        0.25 * (((a001 + a011) + (a101 + a111)) - ((a000 + a010) + (a100 + a110))),
    )


@compute.kernel
def _means(x, f1, f2, f3, b, volumes):  # type: ignore[no-untyped-def]
    n1, n2, n3 = volumes.shape
    px, py, pz = x[0], x[1], x[2]
    for i in range(n1):
        for j in range(n2):
            for k in range(n3):
                ax, bx, cx = _mean_edges(px, i, j, k)
                ay, by, cy = _mean_edges(py, i, j, k)
                az, bz, cz = _mean_edges(pz, i, j, k)
                volume = ax * (by * cz - bz * cy) + ay * (bz * cx - bx * cz) + az * (bx * cy - by * cx)
                m1, m2 = f1[i, j, k] + f1[i + 1, j, k], f2[i, j, k] + f2[i, j + 1, k]
                m3 = f3[i, j, k] + f3[i, j, k + 1]
                volumes[i, j, k] = volume
                b[0, i, j, k] = 0.5 * (m1 * ax + m2 * bx + m3 * cx) / volume
                b[1, i, j, k] = 0.5 * (m1 * ay + m2 * by + m3 * cy) / volume
                b[2, i, j, k] = 0.5 * (m1 * az + m2 * bz + m3 * cz) / volume


@compute.kernel
def _energies_of_means(x, f1, f2, f3, energies, volumes):  # type: ignore[no-untyped-def]
    n1, n2, n3 = volumes.shape
    px, py, pz = x[0], x[1], x[2]
    for i in range(n1):
        for j in range(n2):
            for k in range(n3):
                ax, bx, cx = _mean_edges(px, i, j, k)
                ay, by, cy = _mean_edges(py, i, j, k)
                az, bz, cz = _mean_edges(pz, i, j, k)
                volume = ax * (by * cz - bz * cy) + ay * (bz * cx - bx * cz) + az * (bx * cy - by * cx)
                m1, m2 = f1[i, j, k] + f1[i + 1, j, k], f2[i, j, k] + f2[i, j + 1, k]
                m3 = f3[i, j, k] + f3[i, j, k + 1]
                x4, y4 = m1 * ax + m2 * bx + m3 * cx, m1 * ay + m2 * by + m3 * cy
                z4 = m1 * az + m2 * bz + m3 * cz
                weight = 0.125 / volume
                volumes[i, j, k] = volume
                energies[0, i, j, k] = weight * m1 * (x4 * ax + y4 * ay + z4 * az)
                energies[1, i, j, k] = weight * m2 * (x4 * bx + y4 * by + z4 * bz)
                energies[2, i, j, k] = weight * m3 * (x4 * cx + y4 * cy + z4 * cz)
