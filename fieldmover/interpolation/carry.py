"""What overlaps carry: reconstructions brought to the mean they have to keep, and sums over target cells.

A reconstruction has one row per source cell: value in the middle, three slopes as the change over the whole cell, two
columns of work space.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.errors import FieldError
from fieldmover.interpolation.overlaps import OFFSET_SCALE

_STEP = 1 / OFFSET_SCALE


def check(cells: NDArray[np.float64], what: str, positive: bool) -> None:
    """Refuse values that are not finite, or negative ones where they have to be positive.

    Raises
    ------
    FieldError
        That says how many, and where the first is.
    """
    least, most = float(cells.min()), float(cells.max())
    if (0.0 if positive else -np.inf) <= least and -np.inf < least and most < np.inf:
        return
    bad = ~np.isfinite(cells) if not positive else ~((cells >= 0) & (cells < np.inf))
    place = [int(i) for i in np.argwhere(bad)[0]]
    raise FieldError(
        f"{what}: {int(bad.sum())} are {'negative or ' if positive else ''}not finite, the first "
        f"{cells[tuple(place)]} at cell {place}"
    )


@compute.kernel
def deviations(rows, start, cell, part, offset, v, carried, carrier, form, column):
    """Add to every source cell what its slopes give to its overlaps."""
    for n in range(rows.size):
        level = v[rows[n]]
        for e in range(start[n], start[n + 1]):
            s = cell[e]
            a, b, c = offset[e, 0] * _STEP, offset[e, 1] * _STEP, offset[e, 2] * _STEP
            amount = level * part[e]
            if carried:
                amount *= carrier[s, 0] + carrier[s, 1] * a + carrier[s, 2] * b + carrier[s, 3] * c
            column[s] += amount * (form[s, 1] * a + form[s, 2] * b + form[s, 3] * c)


@compute.kernel
def centre(first, last, columns, weight, contained, scale, form):
    """Shift the reconstructions to their mean, scale slopes to the room there is, multiply by `scale`, one or many."""
    for s in range(first, last):
        deviation, times = 0.0, scale[min(s, scale.size - 1)]
        for group in range(columns.shape[0]):
            deviation += columns[group, s]
        shift = -times * deviation / weight[s] if contained[s] and weight[s] > 0 else 0.0
        span = 0.5 * (abs(form[s, 1]) + abs(form[s, 2]) + abs(form[s, 3])) + abs(shift)
        room = (1 - 1e-14) * min(form[s, 4], form[s, 5])
        factor = room / span if span > room else 1.0
        form[s, 0] = times * (form[s, 0] + factor * shift)
        for axis in range(1, 4):
            form[s, axis] *= times * factor
        form[s, 4] = 0.0 if contained[s] else 1.0


@compute.kernel
def receive(rows, start, cell, part, offset, v, carried, carrier, form, more, out):
    """Contents of target cells: volume of each overlap times the reconstruction at its centroid."""
    for n in range(rows.size):
        if start[n] == start[n + 1]:
            continue
        total = 0.0
        for e in range(start[n], start[n + 1]):
            s = cell[e]
            a, b, c = offset[e, 0] * _STEP, offset[e, 1] * _STEP, offset[e, 2] * _STEP
            amount = part[e] * (form[s, 0] + form[s, 1] * a + form[s, 2] * b + form[s, 3] * c)
            if carried:
                amount *= carrier[s, 0] + carrier[s, 1] * a + carrier[s, 2] * b + carrier[s, 3] * c
            total += amount * (1.0 + form[s, 4] * more[rows[n]])
        out[rows[n]] = v[rows[n]] * total
