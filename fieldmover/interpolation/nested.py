"""Moves to boxes within boxes: divergence-free on every level, and the same flux seen from both sides of every wall.

Circulations are computed on the edges of every box. Then, beginning with the finest level, the edges that two boxes
share take one value, and an edge of a coarser box along finer ones takes their sum. All are multiples of one power of
two, so these sums are exact, and d1 makes fluxes of which the coarse ones are the sums of the fine ones under them,
bit for bit (Balsara 2001, Divergence-free adaptive mesh refinement for magnetohydrodynamics, states the identity).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import get_args

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover.errors import FieldError
from fieldmover.forms.fields import EdgePotential, FaceFlux, Three
from fieldmover.forms.incidence import d1
from fieldmover.grids.nested import NestedGrid
from fieldmover.grids.placement import placed
from fieldmover.interpolation.charge import check_place, clear_centre, edge_fluxes, split_charge, unwind
from fieldmover.interpolation.coverage import Masks, Outside, known_cells, known_faces
from fieldmover.interpolation.flux import Order, move_potential
from fieldmover.interpolation.nested_fill import fill_nested, kinds, sum_up
from fieldmover.interpolation.uniform import split_uniform, uniform_edges
from fieldmover.projection.potential import potential

Array = NDArray[np.float64]

_BITS = 49  # of the largest sum of fluxes: six such sums, twice as large for what a fill adds, are exact


def move_flux_nested(
    flux: FaceFlux, nested: NestedGrid, order: Order = 3, outside: Outside = "least energy"
) -> list[FaceFlux]:
    """Move magnetic flux to boxes within boxes with zero divergence.

    Parameters
    ----------
    flux : FaceFlux
        Divergence-free to round-off.
    nested : NestedGrid
    order : {1, 3, 5, "limited"}
        As for `move_flux`.
    outside : {"least energy", "zero", "refuse"}
        As for `move_flux`. Energies are those of the finest cells everywhere.

    Returns
    -------
    list of FaceFlux
        One for each of `nested.boxes`. The net flux out of every cell is exactly zero. Where a finer box lies over a
        face, or beside it, the flux is exactly the sum of the fine ones; boxes that touch have the same bits on
        their common faces. All fluxes are multiples of one power of two, some 2^-49 of the largest of the
        coarsest level, which is the rounding of fluxes through the smallest faces too.

    Raises
    ------
    FieldError, ChargeError
        As `move_flux`.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> from fieldmover.grids.nested import nested_grid
    >>> source = fm.cylindrical_grid(np.linspace(0, 2, 9), np.linspace(0, 2 * np.pi, 17), np.linspace(-1, 1, 9))
    >>> flux = fm.curl(fm.potential_from_function(source, lambda x, y, z: (-y * y, x * z, 0 * z)))
    >>> x = np.linspace(-1, 1, 9)
    >>> coarse, fine = move_flux_nested(flux, nested_grid([[(x, x, x)], [(np.linspace(-0.5, 0.5, 9),) * 3]]))
    >>> bool((fine.f1[::2].reshape(5, 4, 2, 4, 2).sum(axis=(2, 4)) == coarse.f1[2:7, 2:6, 2:6]).all())
    True
    >>> [float(abs(fm.divergence(f).cells).max()) for f in (coarse, fine)]
    [0.0, 0.0]
    """
    return _moved(flux, nested, order, outside, None)


@dataclass(frozen=True, eq=False)
class ChargedNested:
    """What `move_charged_nested` returns.

    Attributes
    ----------
    fluxes : list of FaceFlux
        One for each box. The net flux out of every cell is exactly zero, but for those that hold the charge.
    charge : float
        Net flux out of the hole of the source, unit as the fluxes.
    cells : list of tuples of three int, or None
        For each box its cell that holds the charge and has it as its net flux.
    centre : ndarray, shape (3,)
        Where the charge was put; see `Charged`.
    """

    fluxes: list[FaceFlux]
    charge: float
    cells: list[tuple[int, int, int] | None]
    centre: Array


def move_charged_nested(
    flux: FaceFlux,
    nested: NestedGrid,
    order: Order = 3,
    outside: Outside = "least energy",
    centre: ArrayLike = (0.0, 0.0, 0.0),
) -> ChargedNested:
    """Move flux that has a net flux out of the hole of its grid to boxes within boxes; see `move_charged`.

    Parameters
    ----------
    flux, nested, order, outside
        As for `move_flux_nested`.
    centre : array_like, shape (3,)
        Where the charge is, in the hole of the source.

    Returns
    -------
    ChargedNested

    Raises
    ------
    FieldError, ChargeError
        As `move_flux_nested`, `split_charge` and `point_charge_flux`.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> from fieldmover.grids.nested import nested_grid
    >>> from fieldmover.interpolation.charge import point_charge_flux
    >>> shell = fm.spherical_grid([1, 2, 3], np.linspace(0, np.pi, 9), np.linspace(0, 2 * np.pi, 17))
    >>> boxes = nested_grid([[(np.linspace(-1.5, 1.5, 4),) * 3], [(np.linspace(-0.5, 0.5, 4),) * 3]])
    >>> moved = move_charged_nested(point_charge_flux(shell, 6.0), boxes)
    >>> moved.cells, [float(f.f1.max().round(9)) for f in moved.fluxes]
    ([(1, 1, 1), (1, 1, 1)], [1.0, 1.0])
    """
    place = np.array(centre, dtype=np.float64)
    for box in reversed(nested.boxes):
        if (clear := clear_centre(box, place)) is not None:  # of the finest box that holds it
            place = clear
            break
    charge, rest = split_charge(flux, place)
    cells: list[tuple[int, int, int] | None] = [None] * len(nested.boxes)
    if charge == 0.0:
        return ChargedNested(_moved(rest, nested, order, outside, None), 0.0, cells, place)
    own = _Charge(nested, charge, place, cells)
    return ChargedNested(_moved(rest, nested, order, outside, own), charge, cells, place)


class _Charge:
    """Fluxes of a point charge on all boxes; fills in the cells that hold it."""

    def __init__(
        self, nested: NestedGrid, charge: float, centre: Array, cells: list[tuple[int, int, int] | None]
    ) -> None:
        self.nested, self.charge, self.centre, self.cells = nested, charge, centre, cells
        self._edges = _agreed(nested, [edge_fluxes(box, charge, centre) for box in nested.boxes])

    def add_to(self, faces: list[Three], quantum: float) -> None:
        """Add the fluxes, multiples of the quantum, to those of the rest."""
        own = [d1(e) for e in _agreed(self.nested, [_rounded(e, quantum) for e in self._edges])]
        for f in own:
            whole = unwind(f, self.charge, quantum)
        for n, (box, f) in enumerate(zip(self.nested.boxes, own, strict=True)):
            self.cells[n] = check_place(box, f, whole, self.centre)
            for all_faces, part in zip(faces[n], f, strict=True):
                all_faces += part


def _moved(
    flux: FaceFlux, nested: NestedGrid, order: Order, outside: Outside, charge: _Charge | None
) -> list[FaceFlux]:
    if order not in get_args(Order):
        raise FieldError(f"order: {order!r}, expected one of {', '.join(map(repr, get_args(Order)))}")
    if outside not in get_args(Outside):
        raise FieldError(f"outside: {outside!r}, expected one of {', '.join(map(repr, get_args(Outside)))}")
    mean, rest = split_uniform(flux)
    edges, known = _edges(potential(rest), nested, order, mean)
    known_on_faces = [known_faces(masks) for masks in known]
    covered = all(mask.all() for masks in known_on_faces for mask in masks)
    if not covered and outside == "refuse":
        _refuse(nested, known_on_faces)
    least = 0.0 if charge is None else abs(charge.charge)
    largest = max(least, _largest_sum(nested, [d1(e) for e in edges], edges))
    while True:
        quantum = 2.0 ** (np.ceil(np.log2(largest)) - _BITS) if largest > 0 else 0.0
        rounded = _agreed(nested, [_rounded(e, quantum) for e in edges])
        faces = [d1(e) for e in rounded]
        if not covered:
            faces = fill_nested(nested, faces, known_on_faces, outside, quantum)
        if charge is not None:
            charge.add_to(faces, quantum)
        largest = max(least, _largest_sum(nested, faces, rounded))
        if largest <= 2.0 ** (_BITS + 1) * quantum:
            return [FaceFlux(box, f) for box, f in zip(nested.boxes, faces, strict=True)]


def _edges(pot: EdgePotential, nested: NestedGrid, order: Order, mean: Array) -> tuple[list[Three], list[Masks]]:
    """Circulations on every box, not yet rounded, those of a uniform field added; which are known, agreed on."""
    first, last = (np.array([q[i] for q in nested.boxes[0].nodes]) for i in (0, -1))
    edges, known = [], []
    for box in nested.boxes:
        values, masks = move_potential(pot, box, order)
        if mean.any():
            middle = box.map.to_cartesian(*(np.array([q]) for q in 0.5 * (first + last)))
            for a, b in zip(values, uniform_edges(placed(box, [-float(m[0]) for m in middle]), mean), strict=True):
                a += b
        edges.append(values)
        known.append(masks)
    unknown = [tuple((~mask).astype(np.float64) for mask in masks) for masks in known]
    agreed = _agreed(nested, [(a, b, c) for a, b, c in unknown])
    return _agreed(nested, edges), [(a == 0.0, b == 0.0, c == 0.0) for a, b, c in agreed]


def _agreed(nested: NestedGrid, edges: list[Three]) -> list[Three]:
    """Give shared edges the value of the first box, and edges along finer ones their sum, in place."""
    for level in reversed(range(len(nested.ratio))):
        boxes = nested.on_level(level)
        for place, n in enumerate(boxes):
            for m in reversed(boxes[:place]):
                shared = nested.meeting(n, m)
                if shared is not None:
                    for values, owned, along in zip(edges[n], edges[m], kinds("edges"), strict=True):
                        values[nested.window(n, *shared, along)] = owned[nested.window(m, *shared, along)]
    sum_up(nested, edges, kinds("edges"))
    return edges


def _rounded(edges: Three, quantum: float) -> Three:
    if quantum == 0.0:
        return edges
    a, b, c = (np.rint(e / quantum) * quantum for e in edges)
    return a, b, c


def _largest_sum(nested: NestedGrid, faces: list[Three], edges: list[Three]) -> float:
    """The largest circulation, or sum of the sizes of the fluxes under a coarse face."""
    largest = max(float(np.abs(a).max()) for box in edges for a in box)
    sizes = [(np.abs(a), np.abs(b), np.abs(c)) for a, b, c in faces]
    largest = max(largest, *(float(a.max()) for box in sizes for a in box))
    sum_up(nested, sizes, kinds("faces"))
    return max(largest, *(float(a.max()) for box in sizes for a in box))


def _refuse(nested: NestedGrid, known: list[Masks]) -> None:
    for n, masks in enumerate(known):
        missing = ~known_cells(masks) & ~nested.covered(n)
        if missing.any():
            place = [int(i) for i in np.argwhere(missing)[0]]
            raise FieldError(
                f"the nested target leaves the source: {int(missing.sum())} of the cells of box {n} (level "
                f"{nested.level[n]}) are not covered, the first at index {place}; give outside='least energy' or "
                "'zero', or smaller boxes"
            )
