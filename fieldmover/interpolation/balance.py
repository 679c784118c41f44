"""Factors of source and target cells after which measured overlaps add up to volumes.

Source: Sinkhorn & Knopp (1967), Concerning nonnegative matrices and doubly stochastic matrices. The sweeps are
over-relaxed, and the source has the last word. Only cells known to be covered wholly have to be filled: how much of the
others is covered follows from the balance.
"""

from __future__ import annotations

from fieldmover import compute


@compute.kernel
def balance_rows(rows, start, cell, part, offset, u, volume, whole, over, v, column):
    """Factors v of target cells from those of source cells, and the sums over source cells they lead to.

    Cells that are not covered as a whole keep the overlaps as measured, unless these would overfill them.
    """
    for n in range(rows.size):
        if start[n] == start[n + 1]:
            continue
        t = rows[n]
        total = 0.0
        for e in range(start[n], start[n + 1]):
            total += part[e] * u[cell[e]]
        level = volume[t] / total
        if not whole[t]:
            level = min(level, volume[t])
        elif over != 1.0:
            level = v[t] * max(0.5, 1.0 + over * (level / v[t] - 1.0))
        v[t] = level
        for e in range(start[n], start[n + 1]):
            column[cell[e]] += part[e] * level


@compute.kernel
def balance_columns(first, last, columns, volume, contained, over, u):
    """Factors u of source cells: contained ones add up to their volume, others to no more; 0 without overlap."""
    for s in range(first, last):
        total = 0.0
        for group in range(columns.shape[0]):
            total += columns[group, s]
        if total == 0.0:
            u[s] = 0.0 if contained[s] else 1.0
        else:
            factor = volume[s] / total
            if not contained[s]:
                factor = min(1.0, factor)
            elif over != 1.0:
                factor = u[s] * max(0.5, 1.0 + over * (factor / u[s] - 1.0))
            u[s] = factor


@compute.kernel
def received(rows, start, cell, part, offset, u, v, contained, volume, cut):
    """Volumes of target cells as the overlaps add up, and what of them comes from source cells cut by the boundary."""
    for n in range(rows.size):
        if start[n] == start[n + 1]:
            continue
        t = rows[n]
        whole, partly = 0.0, 0.0
        for e in range(start[n], start[n + 1]):
            s = cell[e]
            if contained[s]:
                whole += part[e] * u[s]
            else:
                partly += part[e] * u[s]
        volume[t] = v[t] * (whole + partly)
        cut[t] = v[t] * partly
