"""Cells cut into parcels, each of which goes whole to the cell of another grid that holds its centre."""

from __future__ import annotations

from functools import partial

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.grids.axes import centres_of
from fieldmover.interpolation.overlaps import OFFSET_SCALE
from fieldmover.interpolation.view import View

Array = NDArray[np.float64]
Index = NDArray[np.int64]
Steps = NDArray[np.int16]
Found = tuple[Index, Index, Array, Steps]

_PARCELS = 1 << 17  # per task


def parcels(view: View, cells: Index, split: NDArray[np.int8], volumes: Array, within_other: bool = False) -> Found:
    """Cut cells into parcels and find the cell of the other grid that holds each.

    Parameters
    ----------
    view : View
        Of the grid to be cut.
    cells : ndarray of int64, shape (m,)
        Flat indices of the cells to cut.
    split : ndarray, shape (m, 3)
        Parcels along each axis, powers of 2.
    volumes : ndarray
        Of all cells of the grid to be cut.
    within_other : bool
        Return offsets in the cells of the other grid.

    Returns
    -------
    receiver, giver : ndarrays of int64
        Flat indices in the other grid and in the one that was cut; parcels outside the other grid are left out.
    volume : ndarray
    offset : ndarray of int16, shape (number, 3)
        Centre of the parcel relative to the middle of the cell that was cut, or of the one that holds it, in steps of
        1 / OFFSET_SCALE of that cell.
    """
    found: list[Found] = [(np.zeros(0, np.int64), np.zeros(0, np.int64), np.zeros(0), np.zeros((0, 3), np.int16))]
    for choice in np.unique(split, axis=0):
        chosen = cells[(split == choice).all(axis=1)]
        work = partial(_cut, view, split=choice, volumes=volumes, within_other=within_other)
        size = _PARCELS // int(np.prod(choice, dtype=np.int64))
        found += compute.for_each(work, [chosen[part] for part in compute.slabs(chosen.size, size)])
    receiver, giver, volume, offset = (np.concatenate(column) for column in zip(*found, strict=True))
    return receiver, giver, volume, offset


def _cut(view: View, cells: Index, split: NDArray[np.int8], volumes: Array, within_other: bool) -> Found:
    """Parcels of cells that are all split alike."""
    grid = view.grid
    steps = [(np.arange(m) + 0.5) / m - 0.5 for m in split]
    offset = np.stack(np.meshgrid(*steps, indexing="ij"), axis=-1).reshape(-1, 3)
    places = np.unravel_index(cells, grid.shape)
    q = [
        centres_of(nodes)[place][:, None] + np.diff(nodes)[place][:, None] * offset[None, :, d]
        for d, (nodes, place) in enumerate(zip(grid.nodes, places, strict=True))
    ]
    part = np.ones(q[0].shape)
    if offset.shape[0] > 1:
        j = grid.map.jacobian(*q)
        part = np.abs(np.einsum("i...,i...", j[:, 0], np.cross(j[:, 1], j[:, 2], axis=0)))
        part /= part.sum(axis=1, keepdims=True)
    receiver, within = view.locator.places(np.stack(grid.map.to_cartesian(*q)).reshape(3, -1))
    volume = (part * volumes.reshape(-1)[cells][:, None]).reshape(-1)
    giver = np.repeat(cells, offset.shape[0])
    kept = receiver >= 0
    where = within[:, kept].T if within_other else np.tile(offset, (cells.size, 1))[kept]
    return receiver[kept], giver[kept], volume[kept], np.rint(where * OFFSET_SCALE).astype(np.int16)
