"""Divergence of fluxes: norms over all cells, and the worst cells with their places."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.diagnostics.cells import (
    Mask,
    cell_slabs,
    cell_weights,
    checked_mask,
    slab_energies,
    slab_faces,
)
from fieldmover.errors import FieldError
from fieldmover.forms.fields import FaceFlux
from fieldmover.forms.incidence import d2
from fieldmover.grids.axes import centres_of
from fieldmover.grids.grid import Grid, at

Array = NDArray[np.float64]
Index = tuple[int, int, int]
Point = tuple[float, float, float]


@dataclass(frozen=True)
class WorstCell:
    """A cell and its divergence.

    Attributes
    ----------
    cell : tuple of three int
        Index [i1, i2, i3].
    position : tuple of three float
        Cartesian position of its centre, unit L.
    relative : float
        |net flux| / sum of |flux| over its six faces.
    net : float
        Net flux out of it, unit B L^2.
    """

    cell: Index
    position: Point
    relative: float
    net: float


def relative_divergence(flux: FaceFlux) -> Array:
    """|net flux| / sum of |flux| over the six faces of every cell; 0 where no face carries flux.

    Parameters
    ----------
    flux : FaceFlux

    Returns
    -------
    ndarray, shape (n1, n2, n3)
        At most 1; NaN where a flux is not finite.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> grid = fm.cartesian_grid([0, 1], [0, 1], [0, 1])
    >>> flux = fm.FaceFlux(grid, (np.array([[[1.0]], [[2.0]]]), np.zeros((1, 2, 1)), np.ones((1, 1, 2))))
    >>> relative_divergence(flux)
    array([[[0.2]]])
    """
    gross = np.zeros(flux.grid.shape)
    for axis, face in enumerate(flux.faces):
        size = np.abs(face)
        gross += size[at(axis, slice(None, -1))]
        gross += size[at(axis, slice(1, None))]
    with np.errstate(invalid="ignore"):  # infinite fluxes give NaN
        net = np.abs(d2(flux.faces))
        return np.asarray(np.divide(net, gross, out=np.zeros_like(gross), where=gross != 0))


def worst_cells(flux: FaceFlux, count: int = 10, excluded: Mask | None = None) -> list[WorstCell]:
    """The cells of largest relative divergence, worst first; equal ones in the order of their index.

    Parameters
    ----------
    flux : FaceFlux
    count : int
    excluded : bool ndarray, shape (n1, n2, n3), optional
        Cells to leave out.

    Returns
    -------
    list of WorstCell

    Raises
    ------
    FieldError
        If the mask does not fit the grid.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> grid = fm.cartesian_grid([0, 1, 2], [0, 1], [0, 1])
    >>> along = np.array([1.0, 1.0, 3.0]).reshape(3, 1, 1)
    >>> worst_cells(fm.FaceFlux(grid, (along, np.zeros((2, 2, 1)), np.zeros((2, 1, 2)))), 1)
    [WorstCell(cell=(1, 0, 0), position=(1.5, 0.5, 0.5), relative=0.5, net=2.0)]
    """
    ratio = relative_divergence(flux).ravel()
    candidates = np.arange(ratio.size)
    if excluded is not None:
        candidates = np.flatnonzero(~checked_mask(flux.grid, excluded, "excluded").ravel())
    # A value that is not a number is worse than any.
    goodness = np.where(np.isnan(ratio[candidates]), -np.inf, -ratio[candidates])
    if 0 < count < goodness.size:
        near = goodness <= np.partition(goodness, count - 1)[count - 1]
        candidates, goodness = candidates[near], goodness[near]
    order = candidates[np.argsort(goodness, kind="stable")[:count]]
    with np.errstate(invalid="ignore"):
        net = d2(flux.faces).ravel()
    found = []
    for place in order:
        cell = unravelled(flux.grid, int(place))
        found.append(WorstCell(cell, centre_at(flux.grid, cell), float(ratio[place]), float(net[place])))
    return found


def unravelled(grid: Grid, place: int) -> Index:
    """Cell [i1, i2, i3] of a position in the flat array."""
    i, j, k = np.unravel_index(place, grid.shape)
    return int(i), int(j), int(k)


def centre_at(grid: Grid, cell: Index) -> Point:
    """Cartesian position of the centre of one cell."""
    q = [centres_of(nodes)[i : i + 1] for nodes, i in zip(grid.nodes, cell, strict=True)]
    x, y, z = (float(c[0]) for c in grid.map.to_cartesian(q[0], q[1], q[2]))
    return x, y, z


@dataclass(frozen=True)
class Norms:
    """A figure of every cell, over all cells that are looked at: largest, mean, root of the mean square."""

    linf: float
    l1: float
    l2: float


@dataclass(frozen=True)
class Tally:
    """What one sweep over the cells counts, as `Diagnosis` defines it; places are in the flat array."""

    cells: int
    relative: Norms
    scaled: Norms
    net: float
    worst: int
    strength: float
    strongest: int
    energies: tuple[float, float, float]


def tally(flux: FaceFlux, excluded: Mask | None = None) -> Tally:
    """Sweep once over all cells, in fixed slabs that are added in order.

    A value that is not a number counts as the largest.
    """
    grid = flux.grid
    keep = None if excluded is None else ~checked_mask(grid, excluded, "excluded")
    if keep is not None and not keep.any():
        raise FieldError(f"excluded: all {keep.size} cells, expected at least one to look at")
    weights, slabs = cell_weights(grid), cell_slabs(grid)

    def work(rows: slice) -> tuple[Array, Array, Array]:
        energies, size = slab_energies(flux, weights, rows)
        kept = np.ones(size.shape, dtype=np.bool_) if keep is None else keep[rows]
        sums, peaks, places = np.zeros(8), np.full(4, -1.0), np.zeros(4)
        _count(*slab_faces(flux, rows), energies, size, kept, sums, peaks, places)
        return sums, peaks, places + rows.start * (size.size // size.shape[0])

    sums, peaks, places = np.zeros(8), np.full(4, -1.0), np.zeros(4)
    for part, peak, place in compute.for_each(work, slabs):
        sums += part
        higher = ~(peak <= peaks) & ~np.isnan(peaks)
        peaks[higher], places[higher] = peak[higher], place[higher]
    cells, r1, r2, s1, s2, e1, e2, e3 = (float(total) for total in sums)
    relative, scaled, net, square = (float(peak) for peak in peaks)
    return Tally(
        cells=int(cells),
        relative=Norms(relative, r1 / cells, math.sqrt(r2 / cells)),
        scaled=Norms(scaled, s1 / cells, math.sqrt(s2 / cells)),
        net=net,
        worst=int(places[0]),
        strength=math.sqrt(square),
        strongest=int(places[3]),
        energies=(e1, e2, e3),
    )


@compute.kernel
def _count(f1, f2, f3, energies, size, keep, sums, peaks, places):  # type: ignore[no-untyped-def]
    n1, n2, n3 = size.shape
    smallest = 5e-324  # makes 0 / 0 a zero and leaves other quotients as they are
    values = np.empty((4, n3))
    for i in range(n1):
        for j in range(n2):
            for k in range(n3):
                a, b = f1[i, j, k], f1[i + 1, j, k]
                c, d = f2[i, j, k], f2[i, j + 1, k]
                e, f = f3[i, j, k], f3[i, j, k + 1]
                net = abs(((b - a) + (d - c)) + (f - e))
                gross = abs(a) + abs(b) + abs(c) + abs(d) + abs(e) + abs(f)
                square = 2.0 * (energies[0, i, j, k] + energies[1, i, j, k] + energies[2, i, j, k])
                h = size[i, j, k]
                values[0, k] = net / (gross + smallest)
                # |B|^2 = square / h^3 and div B = net / h^3; squares of tiny fluxes are 0.
                strength = np.sqrt(square * h)
                values[1, k] = net / strength if strength > 0.0 else values[0, k]
                values[2, k] = net
                values[3, k] = square / (h * h * h)
            cells, r1, r2, h1, h2, e1, e2, e3 = 0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0
            for k in range(n3):
                if keep[i, j, k]:
                    cells += 1
                    r1 += values[0, k]
                    r2 += values[0, k] ** 2
                    h1 += values[1, k]
                    h2 += values[1, k] ** 2
                    e1 += energies[0, i, j, k]
                    e2 += energies[1, i, j, k]
                    e3 += energies[2, i, j, k]
                    for m in range(4):
                        if not (values[m, k] <= peaks[m]) and not np.isnan(peaks[m]):
                            peaks[m] = values[m, k]
                            places[m] = (i * n2 + j) * n3 + k
            sums[0] += cells
            sums[1] += r1
            sums[2] += r2
            sums[3] += h1
            sums[4] += h2
            sums[5] += e1
            sums[6] += e2
            sums[7] += e3
