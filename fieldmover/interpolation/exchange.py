"""Volumes that neighbouring cells of a grid pass on so that each holds what it should.

Overlaps are measured, so the volumes a target cell receives add up to its own only nearly. What is missing here and
too much there is evened out by flows of volume through the faces, which carry the density of the cell they leave
(donor-cell differences; Margolin & Shashkov 2003, Second-order sign-preserving conservative interpolation on general
grids). That keeps totals, signs and ranges. The flows are the smallest in the least-squares sense, found by
`fieldmover.interpolation.multigrid`. What its few cycles leave is passed along a tree of neighbours, so that the
result is exact whatever the solve reached.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.interpolation.multigrid import in_slabs, solve

Array = NDArray[np.float64]
Flags = NDArray[np.bool_]

_TRIES = 4  # a cell that was not covered and is overfilled counts as covered the next time
_ROUND_OFF = 1e-6  # part of a cell
_CUT = 0.01  # a cell with no more than this from cut source cells takes or leaves none of it
_EASE = 8.0  # how much more readily volume comes from outside than from neighbours
_ROOTS = 0.01  # least part of a cell that is room for it to be the root of a tree
_MOST = 0.95  # a cell never passes on more than this part of what it holds


@dataclass(frozen=True, eq=False)
class Exchange:
    """Flows between the cells of a grid.

    Attributes
    ----------
    held : ndarray, shape (n1, n2, n3)
        Volume in every cell before.
    extra : ndarray, shape (n1, n2, n3)
        Volume that comes from outside first.
    flow : ndarray, shape (3, n1, n2, n3)
        Volume that goes from every cell to its upper neighbour along each axis, from the last cell to the first.
    """

    held: Array
    extra: Array
    flow: Array

    def apply(self, content: Array) -> Array:
        """Contents of cells after the flows, `extra` already in them; shape (n1, n2, n3)."""
        out = np.empty_like(content)
        whole = self.held + self.extra
        in_slabs(lambda a, b: _pass_on(a, b, content, whole, self.flow, out), content.shape)
        return out


def even_out(
    periodic: tuple[bool, bool, bool], volume: Array, covered: Flags, held: Array, cut: Array
) -> tuple[Exchange, Array]:
    """Flows after which every covered cell holds its own volume, and no other holds more.

    Parameters
    ----------
    periodic : tuple of three bool
    volume : ndarray, shape (n1, n2, n3)
        Of the cells.
    covered : ndarray of bool
        Cells known to be covered as a whole.
    held : ndarray
        Volume that every cell has received.
    cut : ndarray
        What of it comes from source cells that the boundary cuts, so that it may be more or less.

    Returns
    -------
    found : Exchange
    coverage : ndarray
        Volume after the flows over that of the cell, 0 to 1.

    Examples
    --------
    >>> import numpy as np
    >>> one, held = np.ones((4, 1, 1)), np.array([0.5, 0.99, 1.02, 0.0]).reshape(4, 1, 1)
    >>> even_out((False,) * 3, one, np.array([0, 1, 1, 0]).reshape(4, 1, 1) == 1, held, 0 * one)[1][:, 0, 0].round(12)
    array([0.51, 1.  , 1.  , 0.  ])
    """
    part = held / volume
    covered = covered | (part > 1 - _ROUND_OFF)
    for _ in range(_TRIES):
        missing = np.where(covered, volume - held, 0.0)
        room = np.where(covered, np.where(cut > _CUT * volume, cut, 0.0), np.minimum(held, np.abs(volume - held)))
        found = exchange(periodic, held, missing, room, ~covered)
        if covered.all():
            break
        part = found.apply(held + found.extra) / volume
        over = ~covered & (part > 1 + _ROUND_OFF**2)
        if not over.any():
            break
        covered |= over
    return found, np.where(covered, 1.0, np.clip(part, 0.0, 1.0))


def exchange(periodic: tuple[bool, bool, bool], held: Array, missing: Array, room: Array, free: Flags) -> Exchange:
    """Flows after which no cell misses anything.

    Parameters
    ----------
    periodic : tuple of three bool
        Axes whose last cell is a neighbour of the first.
    held : ndarray, shape (n1, n2, n3)
        Volume in every cell; cells without any take no part.
    missing : ndarray, shape (n1, n2, n3)
        What each lacks, negative where it has too much; 0 in free cells.
    room : ndarray, shape (n1, n2, n3)
        Volume that comes from outside and may be more or less; in free cells how far their volume may change.
    free : ndarray of bool
        Cells whose volume may change.

    Returns
    -------
    Exchange
        Its `extra` is 0 in free cells.

    Notes
    -----
    Where nothing has room, what a connected set of cells lacks as a whole is spread over it evenly. What leaves a cell
    that would pass on nearly all it holds is made smaller, and then it and cells near it are not exact: signs come
    first.

    Examples
    --------
    >>> import numpy as np
    >>> held, none = np.array([1.25, 0.75, 1.0]).reshape(3, 1, 1), np.zeros((3, 1, 1))
    >>> found = exchange((False,) * 3, held, 1.0 - held, none, none > 0)
    >>> found.apply(4 * held)[:, 0, 0]
    array([4., 4., 4.])
    """
    links = _links(periodic, held)
    room = np.where(held > 0, room, 0.0)
    order, parent, label = _tree(links, held, room > _ROOTS * held)
    missing = np.where(held > 0, missing, 0.0)
    closed = label > 0  # without any room: only what they miss as a whole is left
    if closed.any():
        size = int(label.max()) + 1
        lack, volume = (np.bincount(label[closed], part[closed], size) for part in (missing, held))
        missing[closed] -= held[closed] * (lack / np.where(volume > 0, volume, 1.0))[label[closed]]
    ease = _EASE * room
    p = solve(links, ease, missing)
    flow, extra, left = np.empty(links.shape), np.empty(held.shape), np.empty(held.shape)
    in_slabs(lambda a, b: _flows(a, b, links, ease, p, missing, flow, extra, left), held.shape)
    _along_tree(order, parent, left, flow, extra)
    extra[free | (room == 0)] = 0.0
    loss = np.empty(held.shape)
    in_slabs(lambda a, b: _losses(a, b, held, extra, room, flow, loss), held.shape)
    if loss.max() > _MOST:
        part = _MOST / np.maximum(loss, _MOST)  # of what leaves each cell
        for axis, across in enumerate(flow):
            across *= np.where(across > 0, part, np.roll(part, -1, axis=axis))
        extra *= np.where(extra < 0, part, 1.0)
    return Exchange(held, extra, flow)


def _links(periodic: tuple[bool, bool, bool], held: Array) -> Array:
    """Conductance to the upper neighbour along every axis: the smaller of the two volumes."""
    links = np.empty((3, *held.shape))
    for axis in range(3):
        links[axis] = np.minimum(held, np.roll(held, -1, axis=axis))
        if not periodic[axis] or held.shape[axis] == 1:
            links[axis][tuple(-1 if d == axis else slice(None) for d in range(3))] = 0.0
    return links


@compute.kernel
def _flows(first, last, links, room, p, missing, flow, extra, left):
    """Flows that belong to p, what comes from outside, and what every cell still misses then."""
    n1, n2, n3 = p.shape
    for i in range(first, last):
        for j in range(n2):
            for k in range(n3):
                here = p[i, j, k]
                flow[0, i, j, k] = links[0, i, j, k] * (p[i + 1 if i + 1 < n1 else 0, j, k] - here)
                flow[1, i, j, k] = links[1, i, j, k] * (p[i, j + 1 if j + 1 < n2 else 0, k] - here)
                flow[2, i, j, k] = links[2, i, j, k] * (p[i, j, k + 1 if k + 1 < n3 else 0] - here)
                inflow = (
                    links[0, i - 1, j, k] * (here - p[i - 1, j, k])
                    - flow[0, i, j, k]
                    + links[1, i, j - 1, k] * (here - p[i, j - 1, k])
                    - flow[1, i, j, k]
                    + links[2, i, j, k - 1] * (here - p[i, j, k - 1])
                    - flow[2, i, j, k]
                )
                extra[i, j, k] = room[i, j, k] * here
                left[i, j, k] = missing[i, j, k] - inflow - extra[i, j, k]


@compute.kernel
def _tree(links, held, roots):
    """Cells in the order in which they are reached from the roots, link by link.

    Parent: 0 none, 2 d + 1 the upper, 2 d + 2 the lower neighbour along axis d. Cells that no root reaches get the
    number of their component as label, from 1.
    """
    n1, n2, n3 = held.shape
    strides, sizes = (n2 * n3, n3, 1), (n1, n2, n3)
    number = held.size
    order, parent = np.empty(number, np.int32), np.full(number, -1, np.int8)
    label = np.zeros(held.shape, np.int32)
    flat_roots, flat_held, flat_label, flat_links = roots.ravel(), held.ravel(), label.ravel(), links.ravel()
    head, tail, component = 0, 0, 0
    for t in range(number):
        if flat_roots[t]:
            order[tail], parent[t] = t, 0
            tail += 1
    start = 0
    while True:
        while head < tail:
            t = order[head]
            head += 1
            for d in range(3):
                place = t // strides[d] % sizes[d]
                up = t + strides[d] if place + 1 < sizes[d] else t - place * strides[d]
                down = t - strides[d] if place > 0 else t + (sizes[d] - 1) * strides[d]
                if parent[up] < 0 and flat_links[d * number + t] > 0:
                    order[tail], parent[up], flat_label[up] = up, 2 * d + 2, component
                    tail += 1
                if parent[down] < 0 and flat_links[d * number + down] > 0:
                    order[tail], parent[down], flat_label[down] = down, 2 * d + 1, component
                    tail += 1
        while start < number and (parent[start] >= 0 or flat_held[start] <= 0):
            start += 1
        if start == number:
            return order[:tail], parent, label
        component += 1
        order[tail], parent[start], flat_label[start] = start, 0, component
        tail += 1


@compute.kernel
def _along_tree(order, parent, left, flow, extra):
    """Let every cell get what it still misses from its parent, the last reached first."""
    n1, n2, n3 = left.shape
    strides, sizes = (n2 * n3, n3, 1), (n1, n2, n3)
    number = left.size
    need, flat_flow, flat_extra = left.ravel(), flow.ravel(), extra.ravel()
    for n in range(order.size - 1, -1, -1):
        t = order[n]
        if parent[t] == 0:
            flat_extra[t] += need[t]
            continue
        d = (parent[t] - 1) // 2
        place = t // strides[d] % sizes[d]
        if parent[t] % 2 == 1:
            other = t + strides[d] if place + 1 < sizes[d] else t - place * strides[d]
            flat_flow[d * number + t] -= need[t]
        else:
            other = t - strides[d] if place > 0 else t + (sizes[d] - 1) * strides[d]
            flat_flow[d * number + other] += need[t]
        need[other] += need[t]


@compute.kernel
def _losses(first, last, held, extra, room, flow, loss):
    """Part of what a cell holds that flows out of it, or that is taken back from outside's share."""
    _, n2, n3 = held.shape
    for i in range(first, last):
        for j in range(n2):
            for k in range(n3):
                out = (
                    max(flow[0, i, j, k], 0.0)
                    + max(-flow[0, i - 1, j, k], 0.0)
                    + max(flow[1, i, j, k], 0.0)
                    + max(-flow[1, i, j - 1, k], 0.0)
                    + max(flow[2, i, j, k], 0.0)
                    + max(-flow[2, i, j, k - 1], 0.0)
                )
                worst = out / held[i, j, k] if out > 0 else 0.0
                if extra[i, j, k] < 0:
                    worst = max(worst, -extra[i, j, k] / room[i, j, k])
                loss[i, j, k] = worst


@compute.kernel
def _pass_on(first, last, content, held, flow, out):
    """Contents after the flows; a cell that held nothing gets and gives nothing."""
    n1, n2, n3 = content.shape
    for i in range(first, last):
        for j in range(n2):
            for k in range(n3):
                if not held[i, j, k] > 0:
                    out[i, j, k] = content[i, j, k]
                    continue
                here = content[i, j, k] / held[i, j, k]
                volume, gain = held[i, j, k], 0.0
                for d in range(3):
                    up = (
                        (i + 1 if i + 1 < n1 else 0, j, k)
                        if d == 0
                        else (i, j + 1 if j + 1 < n2 else 0, k)
                        if d == 1
                        else (i, j, k + 1 if k + 1 < n3 else 0)
                    )
                    down = (i - 1, j, k) if d == 0 else (i, j - 1, k) if d == 1 else (i, j, k - 1)
                    to, back = flow[d, i, j, k], flow[d, down[0], down[1], down[2]]
                    if to > 0:
                        volume -= to
                    elif to < 0:
                        gain -= to * (content[up] / held[up])
                    if back < 0:
                        volume += back
                    elif back > 0:
                        gain += back * (content[down] / held[down])
                out[i, j, k] = volume * here + gain
