"""Periodic boxes among the grids between which contents move.

A periodic source fills all space: the target receives from as many images of its cells as it reaches. A periodic
target is a box like any other, unless the source comes back after the same way: then both have their seam, and what
leaves the target at one end is what enters it at the other.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.errors import GridError
from fieldmover.grids.grid import Grid
from fieldmover.interpolation.locate import Locator

Array = NDArray[np.float64]
Index = NDArray[np.int64]
Cells = tuple[Index, Index, Index]

_SAME = 1e-10  # of a period or a cell
_MOST = 16  # periods: a target that wants more is in another unit of length
_ROWS = 8


def laid_out(source: Grid, target: Grid) -> tuple[Grid, Cells | None, Grid]:
    """Source with the images that a target reaches, and target without seams that the source does not share.

    Parameters
    ----------
    source, target : Grid

    Returns
    -------
    images : Grid
        The source itself, unless the target reaches beyond it along a periodic Cartesian axis.
    cells : tuple of three int ndarrays, or None
        Which cells of the source those of `images` are, along each axis; None for the source itself.
    box : Grid
        The target.

    Raises
    ------
    GridError
        If the target spans too many periods of the source.

    Examples
    --------
    >>> from fieldmover import cartesian_grid
    >>> line = cartesian_grid([0, 1, 3], [0, 1], [0, 1], periodic=(True, False, False))
    >>> images, cells, _ = laid_out(line, cartesian_grid([2, 7], [0, 1], [0, 1]))
    >>> images.nodes[0], cells[0]
    (array([1., 3., 4., 6., 7.]), array([1, 0, 1, 0]))
    """
    shared = [_shares_seam(source, target, axis) for axis in range(3)]
    box = target
    if target.kind == "cartesian" and target.periodic != tuple(shared):
        box = replace(target, periodic=(shared[0], shared[1], shared[2]))
    unrolled = [
        source.kind == "cartesian" and seam and not own for seam, own in zip(source.periodic, shared, strict=True)
    ]
    if not any(unrolled):
        return source, None, box
    nodes, cells, seams = list(source.nodes), [np.arange(n) for n in source.shape], list(source.periodic)
    for axis, (low, high) in enumerate(_reach(source, target)):
        q = source.nodes[axis]
        if unrolled[axis] and (low < q[0] - _SAME * (q[1] - q[0]) or high > q[-1] + _SAME * (q[-1] - q[-2])):
            if high - low > _MOST * (q[-1] - q[0]):
                raise GridError(
                    f"the target spans {(high - low) / (q[-1] - q[0]):.3g} periods of the source along "
                    f"{source.map.names[axis]} ({low:.6g} to {high:.6g}), expected at most {_MOST}; is its unit of "
                    "length that of the source?"
                )
            nodes[axis], cells[axis] = _images(q, low, high)
            seams[axis] = False
    if tuple(seams) == source.periodic:
        return source, None, box
    images = replace(source, nodes=(nodes[0], nodes[1], nodes[2]), periodic=(seams[0], seams[1], seams[2]))
    return images, (cells[0], cells[1], cells[2]), box


def _shares_seam(source: Grid, target: Grid, axis: int) -> bool:
    """Whether both grids are periodic along an axis, in the same direction and with the same period."""
    if not (source.kind == target.kind == "cartesian" and source.periodic[axis] and target.periodic[axis]):
        return False
    origin = np.zeros(1)
    one, other = (
        grid.map.jacobian(origin, origin, origin)[:, axis, 0] * np.ptp(grid.nodes[axis]) for grid in (source, target)
    )
    return bool(np.abs(one - other).max() <= _SAME * np.abs(one).max())


def _reach(source: Grid, target: Grid) -> list[tuple[float, float]]:
    """Least and largest coordinates of a target's nodes in a source."""
    locator = Locator(source)
    q1, q2, q3 = target.nodes

    def work(rows: slice) -> tuple[Array, Array]:
        x = np.stack(target.map.to_cartesian(q1[rows, None, None], q2[None, :, None], q3[None, None, :]))
        q = locator.coordinates(x.reshape(3, -1))
        return q.min(axis=1), q.max(axis=1)

    ends = compute.for_each(work, compute.slabs(q1.size, _ROWS))
    low, high = (np.stack(part) for part in zip(*ends, strict=True))
    return list(zip(low.min(axis=0).tolist(), high.max(axis=0).tolist(), strict=True))


def _images(nodes: Array, low: float, high: float) -> tuple[Array, Index]:
    """Nodes of the images of a periodic axis from `low` to `high`, and which cells they are."""
    n, span = nodes.size - 1, float(nodes[-1] - nodes[0])

    def cell(q: float) -> int:
        turns = int(np.floor((q - nodes[0]) / span))
        return turns * n + int(np.clip(np.searchsorted(nodes, q - turns * span, side="right") - 1, 0, n - 1))

    tiny = _SAME * float(np.diff(nodes).min())
    numbers = np.arange(cell(low + tiny), cell(high - tiny) + 2)
    turns, places = np.divmod(numbers, n)
    return nodes[places] + turns * span, places[:-1]
