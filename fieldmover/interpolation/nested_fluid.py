"""Contents of cells, and values carried with them, in boxes within boxes.

Every box receives from the source as it would alone. Then, beginning with the coarsest level, what a cell holds is
dealt out to the finer cells in it in the proportions in which they received; so the finest cells everywhere hold
together what the coarsest level does. Values per mass are shifted to the mean that the coarser cell has.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover.forms.fields import CellContent
from fieldmover.grids.grid import Grid
from fieldmover.grids.nested import NestedGrid, Whole, Window
from fieldmover.interpolation.fluid import FluidPlan
from fieldmover.interpolation.nested_fill import sum_up

Array = NDArray[np.float64]

_CELLS = (True, True, True)


def move_content_nested(content: CellContent, nested: NestedGrid) -> list[CellContent]:
    """Move the content of cells, mass say, to boxes within boxes: conservative and positive.

    Parameters
    ----------
    content : CellContent
        Not negative.
    nested : NestedGrid

    Returns
    -------
    list of CellContent
        One for each of `nested.boxes`. Boxes of the coarsest level receive what `move_content` gives them. Finer cells
        share what the coarser cell over them holds, which then carries their sum as added up in floating point. So
        the total over the finest cells everywhere is that of the coarsest level, to round-off.

    Raises
    ------
    FieldError
        If a content is negative or not finite.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> from fieldmover.grids.nested import nested_grid
    >>> x = np.linspace(0, 1, 5)
    >>> source = fm.cartesian_grid(x, x, x)
    >>> content = fm.CellContent(source, np.arange(64.0).reshape(4, 4, 4))
    >>> coarse, fine = move_content_nested(content, nested_grid([[(x, x, x)], [(np.linspace(0.25, 0.75, 5),) * 3]]))
    >>> total = fine.cells.reshape(2, 2, 2, 2, 2, 2).sum(axis=(1, 3, 5))
    >>> bool(np.allclose(total, coarse.cells[1:3, 1:3, 1:3], rtol=1e-15))
    True
    """
    return NestedFluidPlan(content.grid, nested).move(content)


class NestedFluidPlan:
    """Balanced overlaps of a source with all boxes, for any number of quantities.

    Parameters
    ----------
    source : Grid
    nested : NestedGrid

    Attributes
    ----------
    plans : list of FluidPlan
        One for each box.
    """

    def __init__(self, source: Grid, nested: NestedGrid) -> None:
        self.nested = nested
        self.plans = [FluidPlan(source, box) for box in nested.boxes]

    def move(self, content: CellContent) -> list[CellContent]:
        """Move one quantity; see `move_content_nested`."""
        cells = [plan.move(content).cells.copy() for plan in self.plans]
        self._deal_out(cells)
        return self._summed(cells)

    def move_by_mass(self, mass: CellContent, values: ArrayLike) -> tuple[list[CellContent], list[Array]]:
        """Move values per mass with the mass that carries them.

        Parameters
        ----------
        mass, values
            As for `FluidPlan.move_by_mass`.

        Returns
        -------
        moved : list of CellContent
            The mass, as `move` gives it.
        values : list of ndarrays, shape (..., m1, m2, m3)
            One for each box. The sum of mass times value over the finest cells everywhere is that over the coarsest
            level, to round-off, and a coarser cell has the mean of the finer ones in it, weighted by mass. No value
            leaves the range of the plain moves to its box and the coarser ones. 0 where there is no mass.

        Raises
        ------
        FieldError
            As `FluidPlan.move_by_mass`.

        Examples
        --------
        >>> import numpy as np, fieldmover as fm
        >>> from fieldmover.grids.nested import nested_grid
        >>> x = np.linspace(0, 1, 5)
        >>> source = fm.cartesian_grid(x, x, x)
        >>> plan = NestedFluidPlan(source, nested_grid([[(x, x, x)], [(np.linspace(0.25, 0.75, 5),) * 3]]))
        >>> mass = fm.CellContent(source, np.ones((4, 4, 4)))
        >>> _, (coarse, fine) = plan.move_by_mass(mass, source.centres()[0])
        >>> coarse[:, 1, 1].round(4), fine[:, 1, 1].round(4)
        (array([0.125, 0.375, 0.625, 0.875]), array([0.3125, 0.4375, 0.5625, 0.6875]))
        """
        masses, carried = [], []
        for plan in self.plans:
            moved, own = plan.move_by_mass(mass, values)
            masses.append(moved.cells.copy())
            carried.append(own.reshape(-1, *own.shape[-3:]))
        self._deal_out(masses)
        for n, m, coarse, fine, ratio in self._pairs():
            for v, w in zip(carried[n], carried[m], strict=True):
                w[fine] = _shifted(w[fine], masses[m][fine], v[coarse], ratio)
        lead = np.shape(values)[:-3]
        shaped = [v.reshape(*lead, *box.shape) for v, box in zip(carried, self.nested.boxes, strict=True)]
        return self._summed(masses), shaped

    def _pairs(self) -> list[tuple[int, int, Window, Window, Whole]]:
        """Boxes n and m of which m is finer, what of n it covers and what of m that is; coarsest first."""
        nested, found = self.nested, []
        for n in range(len(nested.boxes)):
            for m, low, high in nested.finer(n):
                if all(h > lo for lo, h in zip(low, high, strict=True)):
                    fine = nested.window(m, *nested.scaled(m, low, high), _CELLS)
                    found.append((n, m, nested.window(n, low, high, _CELLS), fine, nested.ratio[nested.level[m]]))
        return found

    def _deal_out(self, cells: list[Array]) -> None:
        """Scale the contents of finer cells to those of the coarser ones, in place, from level to level."""
        for n, m, coarse, fine, ratio in self._pairs():
            part, held = cells[m][fine], cells[n][coarse]
            total = _blocks(part, ratio).sum(axis=(1, 3, 5))
            part = part * _spread(np.divide(held, total, out=np.zeros_like(total), where=total > 0), ratio)
            lost = (total == 0) & (held > 0)
            if lost.any():
                volume = self.nested.boxes[m].cell_volumes()[fine]
                share = np.where(lost, held / _blocks(volume, ratio).sum(axis=(1, 3, 5)), 0.0)
                part = part + _spread(share, ratio) * volume
            cells[m][fine] = part

    def _summed(self, cells: list[Array]) -> list[CellContent]:
        sum_up(self.nested, [(c,) for c in cells], [_CELLS])
        return [CellContent(box, c) for box, c in zip(self.nested.boxes, cells, strict=True)]


def _shifted(values: Array, mass: Array, mean: Array, ratio: Whole) -> Array:
    """Values of finer cells with their mean made that of the coarser cell, within the range of both."""
    there = mass > 0
    total = _blocks(mass, ratio).sum(axis=(1, 3, 5))
    moment = _blocks(mass * values, ratio).sum(axis=(1, 3, 5))
    own = np.divide(moment, total, out=np.zeros_like(total), where=total > 0)
    above = np.maximum(_blocks(np.where(there, values, -np.inf), ratio).max(axis=(1, 3, 5)) - own, 0.0)
    below = np.maximum(own - _blocks(np.where(there, values, np.inf), ratio).min(axis=(1, 3, 5)), 0.0)
    # Deviations are kept where own + above and own - below stay in range of the coarser mean and of themselves.
    room_above, room_below = np.maximum(own + above - mean, 0.0), np.maximum(mean - (own - below), 0.0)
    part = np.ones_like(own)
    for span, room in ((above, room_above), (below, room_below)):
        np.minimum(part, np.divide(room, span, out=np.ones_like(span), where=span > 0), out=part)
    shifted = _spread(mean, ratio) + _spread(part, ratio) * (values - _spread(own, ratio))
    return np.where(there, shifted, 0.0)


def _blocks(values: Array, ratio: Whole) -> Array:
    """Finer cells by the coarser cell they are in, shape (n1, r1, n2, r2, n3, r3)."""
    a, b, c = (n // r for n, r in zip(values.shape, ratio, strict=True))
    return values.reshape(a, ratio[0], b, ratio[1], c, ratio[2])


def _spread(values: Array, ratio: Whole) -> Array:
    """Every value for all the finer cells in its coarser one."""
    for axis, r in enumerate(ratio):
        values = np.repeat(values, r, axis=axis)
    return values
