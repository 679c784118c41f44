"""Conservative transfer of cell contents, mass say, between any two grids.

Of the source only the part that the target reaches is worked with (`fieldmover.interpolation.reach`).
The overlaps of source and target cells (`fieldmover.interpolation.overlaps`) are measured, then balanced: multiplied
by one factor per source cell and one per target cell so that the overlaps of every cell add up nearly to its volume
(`fieldmover.interpolation.balance`). What target cells still miss they get from their neighbours
(`fieldmover.interpolation.exchange`), so that a constant density stays constant to round-off.
Each source cell holds a limited linear reconstruction of its density (van Leer 1977, Towards the ultimate
conservative difference scheme IV; van Leer 1979, V); every overlap takes its volume times the reconstruction at
its centroid. The reconstruction is shifted so that the overlaps of a source cell add up to its content, and its slopes
are scaled so that no value in the cell leaves the range of the cell and its 26 neighbours (Barth & Jespersen 1989,
The design and application of upwind schemes on unstructured meshes). Values per mass are reconstructed in the same
way about the centre of mass (Dukowicz & Baumgardner 2000, Incremental remapping as a transport/advection algorithm).
"""

from __future__ import annotations

from collections.abc import Callable
from threading import Lock

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover import compute
from fieldmover.errors import FieldError
from fieldmover.forms.fields import CellContent
from fieldmover.grids.grid import Grid
from fieldmover.grids.part import Part, part_of
from fieldmover.interpolation.aligned import joins_cells
from fieldmover.interpolation.balance import balance_columns, balance_rows, received
from fieldmover.interpolation.carry import centre, check, deviations, receive
from fieldmover.interpolation.exchange import even_out
from fieldmover.interpolation.images import laid_out
from fieldmover.interpolation.overlaps import Overlaps, collect, overlaps
from fieldmover.interpolation.parcels import parcels
from fieldmover.interpolation.reach import cut_off, reached
from fieldmover.interpolation.reconstruct import reconstruct
from fieldmover.interpolation.seen import seen
from fieldmover.interpolation.view import Block, View, bounds

Array = NDArray[np.float64]
Flags = NDArray[np.bool_]

_GROUPS = 4  # partial sums over the target, added in order: fixed, so that the bits are
_SWEEPS = 3
_OVER = 1.6  # over-relaxation of all sweeps but the first and the last
_NEARLY = 0.8  # an irregular cell with this much in it and all its parcels inside counts as covered
_KEEP = 3 << 30  # bytes of overlaps kept; those beyond are measured anew in every pass
_BYTES = 14  # per overlap
_CHUNK = 1 << 18


def move_content(content: CellContent, target: Grid) -> CellContent:
    """Move the content of cells, mass say, to another grid: conservative, positive, second order.

    Parameters
    ----------
    content : CellContent
        Not negative.
    target : Grid

    Returns
    -------
    CellContent
        On the target. Every source cell whose corners all lie in the target gives exactly its content (the total is
        kept to round-off), one of a periodic box once for each image of it. A source cell that the target's boundary
        cuts gives what its reconstruction holds in the measured part of it inside, give or take some 0.3 %. Contents
        are sums of volumes times densities within the range of the source cells there and their neighbours, and the
        volumes in a target cell add up to its own, or to the part of it that the source reaches: a constant density
        stays constant to round-off, as far as both grids give the region they share one volume.

    Raises
    ------
    FieldError
        If a content is negative or not finite.
    GridError
        If the target spans more than 16 periods of a periodic box.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> ball = fm.spherical_grid(np.linspace(0.1, 1, 9), np.linspace(0, np.pi, 9), np.linspace(0, 2 * np.pi, 17))
    >>> box = fm.cartesian_grid(*[np.linspace(-1.1, 1.1, 12)] * 3)
    >>> moved = move_content(fm.CellContent(ball, ball.cell_volumes()), box)
    >>> bool(abs(moved.cells.sum() / ball.cell_volumes().sum() - 1) < 1e-13)
    True
    """
    return FluidPlan(content.grid, target).move(content)


class FluidPlan:
    """Balanced overlaps of two grids, for any number of quantities.

    Parameters
    ----------
    source, target : Grid

    Attributes
    ----------
    source, target : Grid
    coverage : ndarray, shape of the target
        Part of each target cell that the source reaches, 0 to 1.
    contained : ndarray of bool, shape of the source
        Source cells whose corners all lie in the target, so that they give all they hold; those of a periodic box as
        often as images of them do.

    Raises
    ------
    GridError
        As `move_content`.

    Notes
    -----
    Memory: 14 bytes an overlap, some 10 to 15 overlaps a target cell when cells are of like size (350 MB for
    128 x 128 x 128 cells), 64 bytes a target cell (twice more while it is made), 50 bytes a source cell in use, while
    quantities move another 50, and once values have moved by mass another 56: they share what is known of the mass.
    Overlaps beyond 3 GB are not stored but measured anew in every pass.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> line = fm.cartesian_grid([0, 1, 2, 3], [0, 1], [0, 1])
    >>> plan = FluidPlan(line, fm.cartesian_grid([1.5, 2.5, 3.5], [0, 1], [0, 1]))
    >>> plan.coverage[:, 0, 0]
    array([1. , 0.5])
    >>> plan.move(fm.CellContent(line, np.full((3, 1, 1), 4.0))).cells[:, 0, 0]
    array([4., 2.])
    """

    def __init__(self, source: Grid, target: Grid) -> None:
        self.source, self.target = source, target
        self._take(reached(source, target))
        irregular, touched = self._measure()
        if cut_off(touched, self._part, source.shape):
            self._take(None)
            irregular, _ = self._measure()
        back = View(self._images, self._box)
        self._contained, near, split = seen(back, irregular)
        if near.any():
            self._cut(back, near, split, irregular)
        self._carried: tuple[Array, Array, Array] | None = None  # the last mass: contents, reconstruction, moved
        self._balance()
        self._rescue(back, split)
        self._even_out()
        self.contained = np.zeros(source.shape, dtype=np.bool_)
        inner = self.contained[self._part]
        if self._cells is None:
            inner[...] = self._contained
        else:
            np.logical_or.at(inner, np.ix_(*self._cells), self._contained)

    def _take(self, part: Part | None) -> None:
        """Work with a part of the source, or with all of it."""
        n1, n2, n3 = self.source.shape
        self._part = part or (slice(0, n1), slice(0, n2), slice(0, n3))
        self._inner = self.source if part is None else part_of(self.source, part)
        self._images, self._cells, self._box = laid_out(self._inner, self.target)
        self._volume = self._images.cell_volumes().reshape(-1)
        self._view = View(self.target, self._images)

    def _measure(self) -> tuple[Flags, Flags]:
        """Measure the overlaps of regular cells, keeping them while there is room.

        Returns the irregular target cells, and the source cells with overlaps.
        """
        self._target_volume = self.target.cell_volumes()
        self._regions = self._view.blocks
        self._kept: list[Overlaps | None] = [None] * len(self._regions)
        self.coverage = np.empty(self.target.shape)
        irregular = np.empty(self.target.shape, dtype=np.bool_)
        touched = np.zeros(self._volume.size, dtype=np.bool_)
        number = [0]

        def work(n: int) -> None:
            where = self._regions[n]
            block, self.coverage[where], irregular[where] = overlaps(self._view, where, self._target_volume)
            touched[block.cell] = True
            number[0] += block.cell.size
            if number[0] * _BYTES < _KEEP:
                self._kept[n] = block

        compute.for_each(work, range(len(self._regions)))
        return irregular, touched.reshape(self._images.shape)

    def _cut(self, back: View, near: Flags, split: NDArray[np.int8], irregular: Flags) -> None:
        """Overlaps of the irregular target cells, seen from the source cells near them."""
        wanted, volume = irregular.reshape(-1), self._volume.reshape(self._images.shape)
        strange = np.zeros(self._images.shape, dtype=np.bool_)

        def work(whole: Block) -> tuple:
            where = bounds(near, whole)
            if where is None:
                return ()
            block, _, strange[where] = overlaps(back, where, volume, near[where])
            giver = np.repeat(block.rows, np.diff(block.start))
            kept = wanted[block.cell]
            return block.cell[kept], giver[kept], block.part[kept] * self._volume[giver[kept]], block.offset[kept]

        found = [part for part in compute.for_each(work, back.blocks) if part]
        odd = np.flatnonzero(strange)
        receiver, giver, amount, offset = parcels(back, odd, split.reshape(-1, 3)[odd], self._volume)
        kept = wanted[receiver]
        found.append((receiver[kept], giver[kept], amount[kept], offset[kept]))
        receiver, giver, amount, offset = (np.concatenate(column) for column in zip(*found, strict=True))
        part = amount / self._target_volume.reshape(-1)[receiver]
        reach = np.bincount(receiver, part, minlength=self.coverage.size)
        cells = np.flatnonzero(wanted)
        fine = np.full((cells.size, 3), 4, dtype=np.int8)
        own_giver, own, volume, own_offset = parcels(self._view, cells, fine, self._target_volume, True)
        own_part = volume / self._target_volume.reshape(-1)[own]
        inside = np.bincount(own, own_part, minlength=reach.size)
        around = np.zeros(reach.size)
        np.maximum.at(around, own, self._volume[own_giver])
        # so small that parcels of the source cells round them pass them by
        missed = (reach < _NEARLY * inside) & (self._target_volume.reshape(-1) < around)
        first, second = ~missed[receiver], missed[own]
        self._kept.append(
            collect(
                np.append(receiver[first], own[second]),
                np.append(giver[first], own_giver[second]),
                np.append(part[first], own_part[second]),
                np.append(offset[first], own_offset[second], axis=0),
            )
        )
        reach[missed] = inside[missed]
        reach[(inside > 0.999) & (reach > _NEARLY)] = 1.0
        self.coverage[irregular] = np.minimum(reach, 1.0).reshape(irregular.shape)[irregular]

    def _block(self, n: int) -> Overlaps:
        kept = self._kept[n]
        return kept if kept is not None else overlaps(self._view, self._regions[n], self._target_volume)[0]

    def _scatter(self, work: Callable[[Overlaps, Array], None]) -> Array:
        """Let `work` add every block to the partial sum of its group, one row for each; the next call reuses them."""
        groups = np.array_split(np.arange(len(self._kept)), _GROUPS)

        def add(group: int) -> None:
            self._sums[group] = 0.0
            for n in groups[group]:
                work(self._block(n), self._sums[group])

        compute.for_each(add, range(_GROUPS))
        return self._sums

    def _balance(self) -> None:
        """Factors of source and target cells that make overlaps add up to volumes; the source has the last word."""
        volume, whole = self._target_volume.reshape(-1), (self.coverage == 1).reshape(-1)
        contained = self._contained.reshape(-1)
        self._u, self._v = np.ones(self._volume.size), np.zeros(volume.size)
        self._sums, self._adding = np.empty((_GROUPS, self._volume.size)), Lock()

        def sweep(over: float) -> None:
            columns = self._scatter(
                lambda block, column: balance_rows(*block.arrays, self._u, volume, whole, over, self._v, column)
            )
            self._over_source(
                lambda part: balance_columns(part.start, part.stop, columns, self._volume, contained, over, self._u)
            )

        for over in (1.0, *[_OVER] * (_SWEEPS - 2), 1.0):
            sweep(over)

    def _even_out(self) -> None:
        """What the target cells still miss comes from their neighbours, or from source cells that are cut anyway."""
        volume, contained = self._target_volume, self._contained.reshape(-1)
        held, cut = np.zeros(volume.shape), np.zeros(volume.shape)
        flat = held.reshape(-1), cut.reshape(-1)
        compute.for_each(
            lambda n: received(*self._block(n).arrays, self._u, self._v, contained, *flat), range(len(self._kept))
        )
        receiver, giver, share = self._saved
        np.add.at(flat[0], receiver, self._volume[giver] * share)
        whole = self.coverage == 1
        if joins_cells(self._images, self.target):
            # What cells miss is the error of quadrature of their volumes, and no reason to give away content.
            volume = np.where(whole, held, volume)
        self._exchange, self.coverage = even_out(self._box.periodic, volume, whole, held, cut)
        # what cut source cells give is multiplied by 1 + this
        self._more = np.divide(self._exchange.extra, cut, out=np.zeros_like(cut), where=cut > 0).reshape(-1)

    def _over_source(self, work: Callable[[slice], None]) -> None:
        compute.for_each(work, compute.slabs(self._volume.size, _CHUNK))

    def _rescue(self, back: View, split: NDArray[np.int8]) -> None:
        """Source cells in the target that no overlap caught give to the target cells that hold their parcels."""
        lost = np.flatnonzero(self._u == 0.0)
        receiver, giver, volume, _ = parcels(back, lost, split.reshape(-1, 3)[lost], self._volume)
        total = np.bincount(giver, volume, minlength=self._volume.size)
        self._saved = receiver, giver, volume / total[giver]
        self._contained.reshape(-1)[lost[total[lost] == 0.0]] = False

    def move(self, content: CellContent) -> CellContent:
        """Move one quantity; see `move_content`.

        Raises
        ------
        FieldError
            If a content is negative or not finite, or lies on another grid than the plan's source.
        """
        inner, known = self._inside(content), self._carried
        if known is not None and np.array_equal(inner, known[0]):
            return CellContent(self.target, known[2].copy())
        return CellContent(self.target, self._gather(self._density(inner), None, inner))

    def move_by_mass(self, mass: CellContent, values: ArrayLike) -> tuple[CellContent, Array]:
        """Move values per mass (velocity, specific energy, composition) with the mass that carries them.

        Parameters
        ----------
        mass : CellContent
            Not negative.
        values : array_like, shape (..., n1, n2, n3)
            One or several values per source cell, of any sign. Vectors go by Cartesian components.

        Returns
        -------
        moved : CellContent
            The mass, as `move` gives it.
        values : ndarray, shape (..., m1, m2, m3)
            On the target; the sum of mass times value over cells is kept where that of mass is. Each stays in the
            range of the source cells there and their neighbours. 0 where there is no mass.

        Raises
        ------
        FieldError
            As `move`; if values are not finite or do not have the shape of the source.

        Examples
        --------
        >>> import numpy as np, fieldmover as fm
        >>> line = fm.cartesian_grid([0, 1, 2], [0, 1], [0, 1])
        >>> plan = FluidPlan(line, fm.cartesian_grid([0, 2], [0, 1], [0, 1]))
        >>> mass = fm.CellContent(line, np.array([1.0, 3.0]).reshape(2, 1, 1))
        >>> moved, velocity = plan.move_by_mass(mass, np.array([-2.0, 2.0]).reshape(2, 1, 1))
        >>> moved.cells.item(), velocity.item()
        (4.0, 1.0)
        """
        values = np.asarray(values, dtype=np.float64)
        if values.shape[-3:] != self.source.shape:
            raise FieldError(f"values by mass: shape {values.shape}, expected (..., *{self.source.shape})")
        inner, known = self._inside(mass), self._carried
        if known is None or not np.array_equal(inner, known[0]):
            self._carried = known = None  # two would be many
            density = self._density(inner)
            self._carried = known = inner.copy(), density, self._gather(density, None, inner)
        _, density, moved = known
        result, form = np.empty((*values.shape[:-3], *self.target.shape)), None
        for n in np.ndindex(values.shape[:-3]):
            check(values[n], "values by mass", False)
            value = values[n][self._part]
            form = self._form(value, density, inner, np.ones(1), form)
            carried = self._gather(form, density, inner * value)
            result[n] = np.divide(carried, moved, out=np.zeros_like(carried), where=moved > 0)
        return CellContent(self.target, moved.copy()), result

    def _inside(self, content: CellContent) -> Array:
        """Contents of the part of the source in use."""
        check(content.cells, "cell contents", True)
        if content.grid is not self.source:
            raise FieldError(f"contents on {content.grid!r}, expected on the source of the plan, {self.source!r}")
        return content.cells[self._part]

    def _density(self, content: Array) -> Array:
        """Reconstruction of the density, times the balancing factor of the source cell."""
        volume = self._inner.cell_volumes()
        return self._form(content / volume, None, volume, self._u)

    def _form(
        self, field: Array, carrier: Array | None, weight: Array, scale: Array, out: Array | None = None
    ) -> Array:
        """Limited reconstruction of a cell field whose mean over overlaps, by volume or by carrier, is the field.

        `weight` is what the overlaps of a contained cell add up to; `out` may be used for the result. Returns one row
        per cell: value in the middle, three slopes per cell, all times `scale`; then two columns of work space.
        """
        own = reconstruct(self._inner, field, out if self._cells is None else None)
        form = self._on_images(own.reshape(*self._inner.shape, -1))
        form, weight = form.reshape(-1, form.shape[-1]), self._on_images(weight).reshape(-1)
        contained = self._contained.reshape(-1)
        with self._adding:
            columns = self._scatter(
                lambda block, column: deviations(*block.arrays, self._v, *_carrier(carrier), form, column)
            )
            self._over_source(lambda part: centre(part.start, part.stop, columns, weight, contained, scale, form))
        return form

    def _gather(self, form: Array, carrier: Array | None, content: Array) -> Array:
        """Add up what the target cells receive."""
        out = np.zeros(self._target_volume.size)
        compute.for_each(
            lambda n: receive(*self._block(n).arrays, self._v, *_carrier(carrier), form, self._more, out),
            range(len(self._kept)),
        )
        receiver, giver, share = self._saved
        np.add.at(out, receiver, self._on_images(content).reshape(-1)[giver] * share)
        return self._exchange.apply(out.reshape(self.target.shape))

    def _on_images(self, values: Array) -> Array:
        """Values of the source cells in use, shape (n1, n2, n3, ...), for all their images."""
        return values if self._cells is None else values[np.ix_(*self._cells)]


def _carrier(carrier: Array | None) -> tuple[bool, Array]:
    return carrier is not None, np.zeros((1, 6)) if carrier is None else carrier
