"""Volumes that neighbouring cells of a grid pass on so that each holds what it should.

Overlaps are measured, so the volumes a target cell receives add up to its own only nearly. What is missing here and
too much there is evened out by flows of volume through the faces, which carry the density of the cell they leave
(donor-cell differences; Margolin & Shashkov 2003, Second-order sign-preserving conservative interpolation on general
grids). That keeps totals, signs and ranges. The flows are the smallest in the least-squares sense, found by
`fieldmover.interpolation.multigrid`. What its few cycles leave is passed along rows of cells and along a tree of rows,
so that the result is exact whatever the solve reached.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.interpolation.multigrid import equations, in_slabs, solve

Array = NDArray[np.float64]
Flags = NDArray[np.bool_]

_TRIES = 4  # a cell that was not covered and is overfilled counts as covered the next time
_ROUND_OFF = 1e-6  # part of a cell
_CUT = 0.01  # a cell with no more than this from cut source cells takes or leaves none of it
_EASE = 8.0  # how much more readily volume comes from outside than from neighbours
_ROOTS = 0.01  # least part of a cell that is room for it to be the root of a tree
_FIRST = 1e-3  # least room at the root, over the largest cell of a run, for it to be chosen before others
# How far to solve. Without room all that is left comes from one place.
_OPEN, _CLOSED = 2e-3, 1e-4
_LEAST = float(np.finfo(np.float64).tiny)
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
        in_slabs(lambda a, b: _pass_on(a, b, content, self.held, self.extra, self.flow, out), content.shape)
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
    whole, missing, room = covered.copy(), np.empty_like(held), np.empty_like(held)
    for _ in range(_TRIES):
        in_slabs(lambda a, b: _wants(a, b, volume, held, cut, whole, missing, room), held.shape)
        found = exchange(periodic, held, missing, room, ~whole)
        if whole.all():
            return found, np.ones(held.shape)
        part = found.apply(held + found.extra) / volume
        over = ~whole & (part > 1 + _ROUND_OFF**2)
        if not over.any():
            break
        np.logical_or(whole, over, out=whole)
    return found, np.where(whole, 1.0, np.clip(part, 0.0, 1.0))


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
    shape, seams = held.shape, np.array([seam and n > 1 for seam, n in zip(periodic, held.shape, strict=True)])
    parts = in_slabs(lambda a, b: _runs(a, b, held, missing, room), shape)
    runs, sums = (np.concatenate(part) for part in zip(*parts, strict=True))
    starts = np.searchsorted(runs[:, 0], np.arange(shape[0] * shape[1] + 1)).astype(np.int32)
    order, parent, side, label = _tree(seams, *shape, starts, runs, sums[:, 3] > _FIRST, np.argsort(-sums[:, 1]))
    closed = label.any()
    if closed:  # without room worth the name: only what they miss as a whole is left
        lack, volume = (np.bincount(label, sums[:, n]) for n in range(2))
        lack[0], volume[0] = 0.0, 1.0
        inside, cells, missing, room = held > 0, runs[:, 2] - runs[:, 1], missing.copy(), room.copy()
        missing[inside] -= held[inside] * np.repeat((lack / volume)[label], cells)
        room[inside] *= np.repeat(label == 0, cells)
    unit = sums[:, 2].max(initial=_LEAST)
    links, ours, r = equations(seams, 1.0 / unit, held, missing, room, _EASE)
    p = solve(links, ours, r, _CLOSED if closed else _OPEN)
    del ours, r
    flow, extra, need = np.empty((3, *shape)), np.empty(shape), np.empty(len(runs))
    in_slabs(lambda a, b: _flows(a, b, unit, links, missing, room, free, starts, runs, p, flow, extra, need), shape)
    _along_tree(order, parent, side, runs, room, free, need, flow, extra)
    loss = np.zeros(shape)
    if any(in_slabs(lambda a, b: _losses(a, b, held, extra, room, flow, loss), shape)):
        part = _MOST / np.maximum(loss, _MOST)  # of what leaves each cell
        for axis, across in enumerate(flow):
            across *= np.where(across > 0, part, np.roll(part, -1, axis=axis))
        extra *= np.where(extra < 0, part, 1.0)
    return Exchange(held, extra, flow)


@compute.kernel
def _wants(first, last, volume, held, cut, covered, missing, room):
    """What every cell misses and may take from outside; marks those that are nearly full as covered."""
    _, n2, n3 = held.shape
    for i in range(first, last):
        for j in range(n2):
            for k in range(n3):
                lack, own = volume[i, j, k] - held[i, j, k], held[i, j, k]
                whole = covered[i, j, k] or own > (1 - _ROUND_OFF) * volume[i, j, k]
                fed = cut[i, j, k] if cut[i, j, k] > _CUT * volume[i, j, k] else 0.0
                covered[i, j, k] = whole
                missing[i, j, k] = lack if whole else 0.0
                room[i, j, k] = fed if whole else min(own, abs(lack))


@compute.kernel
def _runs(first, last, held, missing, room):
    """Unbroken rows of cells along axis 3 that hold something.

    Of each: line (number along axes 1 and 2), first cell, end, the cell with most room or else -1 - the one that holds
    most; and what it misses and holds, the largest of either in a cell, and the most room over what the biggest holds.
    """
    _, n2, n3 = held.shape
    most = (last - first) * n2 * ((n3 + 1) // 2)
    runs, sums = np.empty((most, 4), np.int32), np.empty((most, 4))
    number = 0
    for i in range(first, last):
        for j in range(n2):
            k = 0
            while k < n3:
                if not held[i, j, k] > 0:
                    k += 1
                    continue
                start, biggest, root, widest, lack, volume, largest = k, k, k, 0.0, 0.0, 0.0, 0.0
                while k < n3 and held[i, j, k] > 0:
                    lack += missing[i, j, k]
                    volume += held[i, j, k]
                    largest = max(largest, held[i, j, k], abs(missing[i, j, k]))
                    if held[i, j, k] > held[i, j, biggest]:
                        biggest = k
                    if room[i, j, k] > widest and room[i, j, k] > _ROOTS * held[i, j, k]:
                        root, widest = k, room[i, j, k]
                    k += 1
                runs[number, 0], runs[number, 1], runs[number, 2] = i * n2 + j, start, k
                runs[number, 3] = root if widest > 0 else -1 - biggest
                sums[number, 0], sums[number, 1], sums[number, 2] = lack, volume, largest
                sums[number, 3] = widest / held[i, j, biggest]
                number += 1
    return runs[:number].copy(), sums[:number].copy()


@compute.kernel
def _tree(seams, n1, n2, n3, starts, runs, before, biggest):
    """Runs in the order in which they are reached from those with a root, neighbour by neighbour.

    Those marked `before` come first, lest what is left in large cells ends in small ones. Of each: the run it is
    reached from, -1 for none, and on which side of that it lies, d + 1 above and -d - 1 below along axis d. The cell
    where it is reached becomes its root. Runs that none with a root reaches get the number of their component as
    label, from 1; it starts from its biggest, which feels least of the round-off that ends there.
    """
    number = runs.shape[0]
    order, parent, side = np.empty(number, np.int32), np.full(number, -2, np.int32), np.zeros(number, np.int8)
    label = np.zeros(number, np.int32)
    head, tail, component, place, turn = 0, 0, 0, 0, 0
    while True:  # first from marked roots, then from other roots, then from one component after the other
        for t in range(number if turn < 2 else 0):
            if parent[t] == -2 and runs[t, 3] >= 0 and (before[t] or turn == 1):
                order[tail], parent[t] = t, -1
                tail += 1
        while head < tail:
            t = order[head]
            head += 1
            line, start, end, root = runs[t]
            for way in range(6):
                d, step = way // 2, 1 - 2 * (way % 2)
                i, j = line // n2 + (step if d == 0 else 0), line % n2 + (step if d == 1 else 0)
                wall3 = d == 2 and not (seams[2] and (end == n3 if step > 0 else start == 0))
                if wall3 or not (seams[0] or 0 <= i < n1) or not (seams[1] or 0 <= j < n2):
                    continue
                low, high = (start, end) if d < 2 else (0, 1) if step > 0 else (n3 - 1, n3)  # cells beside this run
                other = i % n1 * n2 + j % n2
                u, last = starts[other], starts[other + 1]
                u += np.searchsorted(runs[u:last, 2], low, side="right")
                while u < last and runs[u, 1] < high:
                    if parent[u] == -2:
                        runs[u, 3] = min(max(root, low, runs[u, 1]), high - 1, runs[u, 2] - 1)
                        order[tail], parent[u], side[u], label[u] = u, t, step * (d + 1), component
                        tail += 1
                    u += 1
        turn += 1
        while turn > 1 and place < number and parent[biggest[place]] > -2:
            place += 1
        if place == number:
            return order, parent, side, label
        if turn > 1:
            component, t = component + 1, biggest[place]
            order[tail], parent[t], label[t], runs[t, 3] = t, -1, component, -1 - runs[t, 3]
            tail += 1


@compute.kernel
def _flows(first, last, unit, links, missing, room, free, starts, runs, p, flow, extra, need):
    """Flows that belong to p, and what comes from outside; what cells of a run then miss comes from its root."""
    n1, n2, n3 = p.shape
    left = np.empty(n3)
    for i in range(first, last):
        up1 = i + 1 if i + 1 < n1 else 0
        for j in range(n2):
            up2 = j + 1 if j + 1 < n2 else 0
            for k in range(n3):
                here = p[i, j, k]
                flow1 = unit * links[0, i, j, k] * (p[up1, j, k] - here)
                flow2 = unit * links[1, i, j, k] * (p[i, up2, k] - here)
                below1 = unit * links[0, i - 1, j, k] * (here - p[i - 1, j, k])
                below2 = unit * links[1, i, j - 1, k] * (here - p[i, j - 1, k])
                share = _EASE * room[i, j, k] * here
                left[k] = missing[i, j, k] - share + ((flow1 - below1) + (flow2 - below2))
                flow[0, i, j, k], flow[1, i, j, k] = flow1, flow2
                extra[i, j, k] = 0.0 if free[i, j, k] else share
            for k in range(n3):
                up3 = k + 1 if k + 1 < n3 else 0
                flow[2, i, j, k] = unit * links[2, i, j, k] * (p[i, j, up3] - p[i, j, k])
            left[0] += flow[2, i, j, 0] - flow[2, i, j, n3 - 1]
            for k in range(1, n3):
                left[k] += flow[2, i, j, k] - flow[2, i, j, k - 1]
            for n in range(starts[i * n2 + j], starts[i * n2 + j + 1]):
                root, below, above = runs[n, 3], 0.0, 0.0
                for k in range(runs[n, 1], root):
                    below += left[k]
                    flow[2, i, j, k] -= below
                for k in range(runs[n, 2] - 1, root, -1):
                    above += left[k]
                    flow[2, i, j, k - 1] += above
                need[n] = below + above + left[root]


@compute.kernel
def _along_tree(order, parent, side, runs, room, free, need, flow, extra):
    """Let every run get what it still misses from the one it was reached from, the last reached first."""
    n2, n3 = flow.shape[2:]
    for place in range(order.size - 1, -1, -1):
        t = order[place]
        i, j, k, lack = runs[t, 0] // n2, runs[t, 0] % n2, runs[t, 3], need[t]
        u = parent[t]
        if u < 0:
            if room[i, j, k] > 0 and not free[i, j, k]:
                extra[i, j, k] += lack
            continue
        need[u] += lack
        a, b, c = runs[u, 0] // n2, runs[u, 0] % n2, k
        d = abs(side[t]) - 1
        if d == 2:
            c = 0 if k > 0 else n3 - 1
        if side[t] > 0:
            flow[d, a, b, c] += lack
        else:
            flow[d, i, j, k] -= lack
        for k in range(c, runs[u, 3]):
            flow[2, a, b, k] -= lack
        for k in range(runs[u, 3], c):
            flow[2, a, b, k] += lack


@compute.kernel
def _losses(first, last, held, extra, room, flow, loss):
    """Whether cells would pass on more than they may; in rows where some do, which part of what they have.

    It flows out of a cell, or is taken back from outside's share.
    """
    _, n2, n3 = held.shape
    out, own, found = np.empty(n3), np.empty(n3), False
    for i in range(first, last):
        for j in range(n2):
            number, before = 0, flow[2, i, j, n3 - 1]
            for k in range(n3):
                out[k] = (
                    (max(flow[0, i, j, k], 0.0) - min(flow[0, i - 1, j, k], 0.0))
                    + (max(flow[1, i, j, k], 0.0) - min(flow[1, i, j - 1, k], 0.0))
                    + (max(flow[2, i, j, k], 0.0) - min(before, 0.0))
                )
                before = flow[2, i, j, k]
                least = -_MOST * room[i, j, k]
                own[k] = held[i, j, k] + min(max(extra[i, j, k], least), 0.0)
                number += (out[k] > _MOST * own[k]) | (extra[i, j, k] < least)
            if number:
                found = True
                for k in range(n3):
                    taken = -extra[i, j, k] / room[i, j, k] if extra[i, j, k] < 0 else 0.0
                    loss[i, j, k] = max(out[k] / own[k], taken) if out[k] > 0 else taken
    return found


@compute.kernel
def _densities(i, content, held, extra, out):
    """Content over volume in a plane, 0 where there is none."""
    for j in range(out.shape[0]):
        for k in range(out.shape[1]):
            volume = held[i, j, k] + extra[i, j, k]
            out[j, k] = content[i, j, k] / volume if volume > 0 else 0.0


@compute.kernel
def _pass_on(first, last, content, held, extra, flow, out):
    """Contents after the flows; a cell that held nothing gets and gives nothing."""
    n1, n2, n3 = content.shape
    density, row = np.empty((3, n2, n3)), np.empty(n3 + 2)
    _densities((first - 1) % n1, content, held, extra, density[(first + 2) % 3])
    _densities(first, content, held, extra, density[first % 3])
    for i in range(first, last):
        _densities((i + 1) % n1, content, held, extra, density[(i + 1) % 3])
        below, own, above = density[(i + 2) % 3], density[i % 3], density[(i + 1) % 3]
        for j in range(n2):
            up2 = j + 1 if j + 1 < n2 else 0
            row[0], row[n3 + 1] = own[j, n3 - 1], own[j, 0]
            row[1 : n3 + 1] = own[j]
            back = flow[2, i, j, n3 - 1]
            for k in range(n3):
                volume = held[i, j, k] + extra[i, j, k]
                to1, to2, to3 = flow[0, i, j, k], flow[1, i, j, k], flow[2, i, j, k]
                from1, from2, from3 = flow[0, i - 1, j, k], flow[1, i, j - 1, k], back
                back = to3
                kept = (
                    volume
                    - ((max(to1, 0.0) - min(from1, 0.0)) + (max(to2, 0.0) - min(from2, 0.0)))
                    - (max(to3, 0.0) - min(from3, 0.0))
                )
                gain = (
                    (max(from1, 0.0) * below[j, k] - min(to1, 0.0) * above[j, k])
                    + (max(from2, 0.0) * own[j - 1, k] - min(to2, 0.0) * own[up2, k])
                    + (max(from3, 0.0) * row[k] - min(to3, 0.0) * row[k + 2])
                )
                out[i, j, k] = kept * row[k + 1] + gain if volume > 0 else content[i, j, k]
