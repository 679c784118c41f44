"""Circulations on a target in other coordinates than the source: from rates at its nodes where that is good enough.

Rows of nodes are located and evaluated a brick at a time, and results depend on nothing outside the brick or the edge,
so that slabs of the target get the bits of the whole.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import partial
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.forms.fields import EdgePotential, Three
from fieldmover.grids.grid import Grid, at
from fieldmover.interpolation.evaluate import PotentialSpline, hunt
from fieldmover.interpolation.lines import LineRule, integrate_lines
from fieldmover.interpolation.locate import Locator, inside
from fieldmover.interpolation.plan_edges import cells_allowed, single_edges
from fieldmover.interpolation.plan_exact import largest
from fieldmover.interpolation.plan_nodes import Brick, NodePlaces
from fieldmover.interpolation.plan_part import SourcePart

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Index = NDArray[np.int64]
Known = tuple[Mask, Mask, Mask]

_EDGES = 1 << 12  # single edges at a time
_FLOOR = 1e-11  # of the source's largest circulation: smaller ones of the target are round-off
_LOW, _HIGH = slice(None, -1), slice(1, None)


class Across:
    """How a source's potentials are moved to a target in other coordinates.

    Parameters
    ----------
    source, target : Grid
    """

    def __init__(self, source: Grid, target: Grid) -> None:
        self.source, self.target = source, target
        self.locator = Locator(source)
        self.places = NodePlaces(self.locator, target)
        self._parts: dict[int, SourcePart] = {}
        self.rules = [LineRule.of(nodes, seam) for nodes, seam in zip(target.nodes, target.periodic, strict=True)]

    @property
    def nbytes(self) -> int:
        return self.places.nbytes

    def start(self, pot: EdgePotential, order: int) -> AcrossPart:
        """Fit the spline of a potential; circulations along the edges of any slab can then be asked for."""
        if order not in self._parts:
            self._parts[order] = SourcePart.seen(self.places, order)
        seen = self._parts[order].cut(pot)
        return AcrossPart(self, PotentialSpline(seen, order), _FLOOR * largest(seen.edges))


class AcrossPart:
    """One potential on its way. Rates at the nodes of the last slab are kept for the next one."""

    def __init__(self, way: Across, spline: PotentialSpline, floor: float) -> None:
        self._way, self._spline, self._floor = way, spline, floor
        self._longest = [np.maximum(np.diff(q, append=q[-1]), np.diff(q, prepend=q[0])) for q in way.target.nodes]
        self._allowed = cells_allowed(way.source)
        self._locator = way.locator.onto(spline.grid)
        nothing = np.empty(0, dtype=np.int64)
        self._window = _Window(nothing, nothing, np.empty(0, dtype=bool), [])

    def edges(self, cells: slice) -> tuple[Three, Known]:
        """Circulations along the edges of a slab of cells along axis 1, and which of them lie in the source."""
        rules = self._way.rules
        rows = np.arange(cells.start, cells.stop + 1)
        self._window = window = self._seen(np.union1d(rows, rules[0].places[cells]))
        first, last = window.position(rows[[0, -1]])
        here = slice(first, last + 1)
        reached = window.reached[here]
        shapes = [tuple(n - (d == axis) for d, n in enumerate(reached.shape)) for axis in range(3)]
        edges = [np.full(shape, np.nan) for shape in shapes]
        if window.rates:
            integrate_lines(window.rates[0], 0, rules[0].part(cells, window.position), self._floor, edges[0])
            for axis in (1, 2):
                integrate_lines(window.rates[axis][here], axis, rules[axis], self._floor, edges[axis])
        known = []
        for axis, values in enumerate(edges):
            both = reached[at(axis, _LOW)] & reached[at(axis, _HIGH)]
            self._fill_in(values, both, axis, cells.start)
            known.append(np.isfinite(values))
            values[~known[axis]] = 0.0
        return (edges[0], edges[1], edges[2]), (known[0], known[1], known[2])

    def _fill_in(self, values: Array, both: Mask, axis: int, first: int) -> None:
        """Edges without a value yet whose ends are reached, in groups that are the same whatever the slab."""
        groups, parts = [], []
        starts = self._way.places.starts[0]
        cuts = np.unique(np.clip([starts, starts + 1], first, first + values.shape[0])) - first
        for low, high in pairwise(cuts):
            missing = np.argwhere(np.isnan(values[low:high]) & both[low:high])
            for part in compute.slabs(len(missing), _EDGES):
                groups.append(missing[part] + [low, 0, 0])
                parts.append(groups[-1] + [first, 0, 0])
        work = partial(single_edges, self._spline, self._locator, self._allowed, self._way.target, axis)
        for group, integrals in zip(groups, compute.for_each(work, parts), strict=True):
            values[tuple(group.T)] = integrals

    def _seen(self, rows: Index) -> _Window:
        """Rates at all bricks that hold some rows of nodes."""
        places, old = self._way.places, self._window
        starts = places.starts[0]
        bricks = np.unique(np.searchsorted(starts, rows, side="right") - 1)
        offsets = np.append(0, np.cumsum(starts[bricks + 1] - starts[bricks]))
        shape = (int(offsets[-1]), *self._way.target.node_shape()[1:])
        rates = [np.empty(shape) for _ in range(3)] if self._spline.order > 1 else []
        new = _Window(starts[bricks], offsets, np.empty(shape, dtype=bool), rates)
        work: list[tuple[Brick, int]] = []
        for brick, (begin, end) in zip(bricks, pairwise(offsets), strict=True):
            if starts[brick] in old.starts:
                there = int(old.position(starts[brick]))
                for a, b in zip((old.reached, *old.rates), (new.reached, *new.rates), strict=True):
                    b[begin:end] = a[there : there + end - begin]
            else:
                work += [(one, int(begin)) for one in places.bricks[brick]]
        compute.for_each(partial(self._evaluate, new), work)
        return new

    def _evaluate(self, window: _Window, item: tuple[Brick, int]) -> None:
        brick, begin = item
        grid, (rows, *across) = self._spline.grid, brick.part
        q, dq = self._way.places.at_nodes(brick)
        self._locator.close(q)
        shape = q.shape[1:]
        here = inside(grid, q.reshape(3, -1)).reshape(shape)
        window.reached[begin : begin + shape[0], across[0], across[1]] = here
        if not window.rates:
            return
        q[:, ~here] = np.nan
        covectors = self._spline.covectors(q.reshape(3, -1)).reshape(q.shape)
        steps = (step[part] for step, part in zip(self._longest, (rows, *across), strict=True))
        corner = (begin, across[0].start, across[1].start)
        _rates(q, dq, covectors, *steps, *grid.nodes, self._allowed, *corner, *window.rates)


@dataclass(frozen=True, eq=False)
class _Window:
    """Rates A_i dq^i at the nodes of some bricks along axis 1, one array for each axis of the target.

    Bricks begin at the target's rows `starts` and here at `offsets`; `reached` tells which nodes lie in the source.
    """

    starts: Index
    offsets: Index
    reached: Mask
    rates: list[Array]

    def position(self, rows: Index) -> Index:
        brick = np.searchsorted(self.starts, rows, side="right") - 1
        return np.asarray(self.offsets[brick] + rows - self.starts[brick])


@compute.kernel
def _rates(q, dq, covectors, steps1, steps2, steps3, nodes1, nodes2, nodes3, allowed, i0, j0, k0, out1, out2, out3):
    """A_i dq^i along each target axis; NaN where an edge there spans too many cells of the source."""
    cells, widths = np.zeros(3, np.int64), np.empty(3)
    for i in range(covectors.shape[1]):
        for j in range(covectors.shape[2]):
            for k in range(covectors.shape[3]):
                a, b, c = covectors[0, i, j, k], covectors[1, i, j, k], covectors[2, i, j, k]
                if np.isnan(a):
                    for out in (out1, out2, out3):
                        out[i0 + i, j0 + j, k0 + k] = np.nan
                    continue
                cells[0] = hunt(q[0, i, j, k], nodes1, cells[0])
                cells[1] = hunt(q[1, i, j, k], nodes2, cells[1])
                cells[2] = hunt(q[2, i, j, k], nodes3, cells[2])
                widths[0] = allowed[0] * (nodes1[cells[0] + 1] - nodes1[cells[0]])
                widths[1] = allowed[1] * (nodes2[cells[1] + 1] - nodes2[cells[1]])
                widths[2] = allowed[2] * (nodes3[cells[2] + 1] - nodes3[cells[2]])
                for d in range(3):
                    step = steps1[i] if d == 0 else steps2[j] if d == 1 else steps3[k]
                    x, y, z = dq[0, d, i, j, k], dq[1, d, i, j, k], dq[2, d, i, j, k]
                    rate = a * x + b * y + c * z
                    if abs(x) * step > widths[0] or abs(y) * step > widths[1] or abs(z) * step > widths[2]:
                        rate = np.nan
                    if d == 0:
                        out1[i0 + i, j0 + j, k0 + k] = rate
                    elif d == 1:
                        out2[i0 + i, j0 + j, k0 + k] = rate
                    else:
                        out3[i0 + i, j0 + j, k0 + k] = rate
