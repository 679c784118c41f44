"""The part of a source that a target reaches: a small target in a large source needs no more of it."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from fieldmover.grids.grid import Grid, at
from fieldmover.grids.part import Part
from fieldmover.interpolation.aligned import azimuth_of
from fieldmover.interpolation.locate import Locator
from fieldmover.interpolation.view import to_index

Array = NDArray[np.float64]

_CLOSED_FORM = ("cartesian", "cylindrical", "spherical")
_POINTS = 32  # least number of places along each axis of the target's surface
_MARGIN = 2  # cells: their neighbours count in slopes and ranges
_ROUND = 0.45  # of a turn: a target that spans more may hold the axis
_WORTH = 0.7  # of all cells: a larger part is not worth the trouble


def reached(source: Grid, target: Grid) -> Part | None:
    """Cells of a source that overlap those of a target, and at least two layers more all round.

    What a coordinate reaches in the target it reaches on its surface, unless the target holds the axis of the source;
    then, and where the source has no closed form or a seam to be unrolled, all of it counts.

    Parameters
    ----------
    source, target : Grid

    Returns
    -------
    tuple of three slices, or None
        None for the whole source, also where the part is most of it.

    Examples
    --------
    >>> import numpy as np
    >>> from fieldmover import cartesian_grid
    >>> line = np.arange(101.0)
    >>> reached(cartesian_grid(line, [0, 1], [0, 1]), cartesian_grid([40, 41, 42], [0, 1], [0, 1]))[0]
    slice(37, 45, None)
    """
    seam = any(seam for axis, seam in enumerate(source.periodic) if axis != azimuth_of(source))
    if source.kind not in _CLOSED_FORM or seam:
        return None
    locator, ring = Locator(source), azimuth_of(source)
    low, high = np.full(3, np.inf), np.full(3, -np.inf)
    angles = [np.inf, -np.inf]
    for q in _surface(target):
        x = np.stack(target.map.to_cartesian(*np.meshgrid(*q, indexing="ij")))
        place = locator.coordinates(x.reshape(3, -1)).reshape(x.shape)
        if ring is not None:
            angles = [min(angles[0], place[ring].min()), max(angles[1], place[ring].max())]
        for axis, nodes in enumerate(source.nodes):
            # straight on beyond the ends: what lies between two places outside may be inside
            to_index(place[axis].reshape(-1), nodes, False)
        step = _steps(place)
        low = np.minimum(low, (place - step).min(axis=(1, 2, 3)))
        high = np.maximum(high, (place + step).max(axis=(1, 2, 3)))
    if ring is not None and angles[1] - angles[0] > _ROUND * 2 * np.pi:
        return None
    size = np.array(source.shape)
    first = (np.floor(np.clip(low, 0, size)) - _MARGIN).astype(int)
    last = (np.ceil(np.clip(high, 0, size)) + _MARGIN).astype(int)
    whole = source.periodic & ((first < 0) | (last > size))  # the margin is at the other end
    first, last = np.maximum(first, 0), np.minimum(last, size)
    for axis in range(3):
        at_pole = {0: first[axis] == 0, source.shape[axis]: last[axis] == source.shape[axis]}
        if any(at_pole[end] for end in source.pole_ends(axis)):
            whole[source.ring_of(axis)] = True
    first, last = np.where(whole, 0, first), np.where(whole, size, last)
    if np.prod(last - first) > _WORTH * np.prod(source.shape):
        return None
    one, two, three = (slice(int(a), int(b)) for a, b in zip(first, last, strict=True))
    return one, two, three


def cut_off(touched: NDArray[np.bool_], part: Part, shape: tuple[int, int, int]) -> bool:
    """Whether there are marks in the outermost cells of a part of a grid of that shape, at ends that are not its own.

    Examples
    --------
    >>> cells = slice(2, 5), slice(0, 1), slice(0, 1)
    >>> marks = np.array([False, False, True]).reshape(3, 1, 1)
    >>> cut_off(marks, cells, (8, 1, 1)), cut_off(marks, cells, (5, 1, 1))
    (True, False)
    """
    return any(
        touched[at(axis, place)].any()
        for axis, (cells, n) in enumerate(zip(part, shape, strict=True))
        for place, cut in ((0, cells.start > 0), (-1, cells.stop < n))
        if cut
    )


def _steps(place: Array) -> Array:
    """How far values between a place and those next to it may lie from its own."""
    step = np.zeros_like(place)
    for axis in (1, 2, 3):
        here = np.moveaxis(place, axis, -1)
        change = np.zeros((*here.shape[:-1], here.shape[-1] + 1))
        change[..., 1:-1] = np.abs(np.diff(here, axis=-1))
        step += np.moveaxis(np.maximum(change[..., :-1], change[..., 1:]), -1, axis)
    return step


def _surface(grid: Grid) -> list[list[Array]]:
    """Coordinates of places on the six sides of a grid, three arrays each."""
    within = []
    for nodes in grid.nodes:
        parts = -(-_POINTS // (nodes.size - 1))
        places = np.linspace(0, nodes.size - 1, parts * (nodes.size - 1) + 1)
        within.append(np.interp(places, np.arange(nodes.size), nodes))
    return [
        [np.array([end]) if d == axis else within[d] for d in range(3)]
        for axis in range(3)
        for end in (grid.nodes[axis][0], grid.nodes[axis][-1])
    ]
