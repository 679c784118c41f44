"""What a caller of `project` asks for, checked and brought to arrays: walls, weights, masks."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from typing import Literal, get_args

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover import compute
from fieldmover.errors import FieldError
from fieldmover.forms.fields import FaceFlux, Three
from fieldmover.forms.measures import near_volumes
from fieldmover.grids.grid import Grid, at
from fieldmover.projection.operator import Walls

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Masks = tuple[Mask, Mask, Mask]
Wall = Literal["open", "fixed"]
WallsLike = Wall | Sequence[Wall | tuple[Wall, Wall]] | Mapping[str, Wall | tuple[Wall, Wall]]
WeightsLike = Sequence[ArrayLike] | Callable[[Array], ArrayLike]

_SLAB = 1 << 15  # cells worked on at a time
ROUND_OFF = 1e-14  # no solver gets below this


def open_walls(grid: Grid, walls: WallsLike) -> Walls:
    """Which of the six walls are open; seams and poles count as fixed.

    Raises
    ------
    FieldError
        If `walls` does not describe the walls of this grid.
    """
    if isinstance(walls, str):
        each: list = [walls] * 3
    elif isinstance(walls, Mapping):
        unknown = [name for name in walls if name not in grid.map.names]
        if unknown:
            raise FieldError(f"walls: axis {unknown[0]!r}, expected {', '.join(grid.map.names)}")
        for axis, name in enumerate(grid.map.names):
            if name in walls and (grid.periodic[axis] or grid.poles[axis] == "both"):
                raise FieldError(f"walls: axis {name!r} has none, it ends at a seam or at poles")
        each = [walls.get(name, "open") for name in grid.map.names]
    else:
        each = list(walls)
        if len(each) != 3:
            raise FieldError(f"walls: {len(each)} entries, expected one for each of 3 axes")
    pairs = []
    for axis, entry in enumerate(each):
        pair = [entry] * 2 if isinstance(entry, str) else list(entry)
        for wall in pair:
            if wall not in get_args(Wall):
                raise FieldError(f"walls of axis {axis + 1}: {wall!r}, expected 'open' or 'fixed'")
        if len(pair) != 2:
            raise FieldError(f"walls of axis {axis + 1}: {len(pair)} entries, expected two, low and high")
        ends = (None, None) if grid.periodic[axis] else (0, grid.shape[axis])
        low, high = (
            wall == "open" and end is not None and end not in grid.pole_ends(axis)
            for wall, end in zip(pair, ends, strict=True)
        )
        pairs.append((low, high))
    return pairs[0], pairs[1], pairs[2]


def hole_axis(grid: Grid) -> int | None:
    """The axis whose low wall closes round a hole: of the others one has both poles, one a seam."""
    for axis in range(3):
        others = [d for d in range(3) if d != axis]
        around = any(grid.periodic[a] and grid.poles[b] == "both" for a, b in (others, others[::-1]))
        if around and not grid.periodic[axis] and grid.poles[axis] is None:
            return axis
    return None


def checked_tolerance(tolerance: float) -> None:
    """Refuse a tolerance that no solver reaches, or that asks for nothing."""
    if not ROUND_OFF <= tolerance < 1:
        raise FieldError(
            f"tolerance: {tolerance!r}, expected at least {ROUND_OFF:g} (round-off) and less than 1: the "
            "largest net flux left, relative to the largest at the beginning"
        )


def checked_flux(flux: FaceFlux) -> None:
    """Refuse fluxes that are not finite, or lead through a collapsed face."""
    for axis, f in enumerate(flux.faces):
        if not np.isfinite(f.sum()):  # a term is not, or the sum overflows
            bad = ~np.isfinite(f)
            where = f", the first at index {[int(i) for i in np.argwhere(bad)[0]]}" if bad.any() else ""
            raise FieldError(
                f"flux through the faces of axis {axis + 1}: {int(bad.sum())} values are not finite{where}"
                + ("" if bad.any() else ", but their sum is too large for a number")
            )
        for end in flux.grid.pole_ends(axis):
            if f[at(axis, end)].any():
                raise FieldError(f"flux through collapsed faces at a pole of axis {axis + 1}: expected 0")


def frozen_masks(grid: Grid, frozen: Sequence[ArrayLike] | None) -> Masks | None:
    """Masks of frozen faces; a face of a seam is frozen if either of its two entries says so.

    Raises
    ------
    FieldError
        If these are not three masks of the shapes of the faces, or every face is frozen.
    """
    if frozen is None:
        return None
    masks = [mask.copy() for mask in _three(grid, frozen, "frozen", np.bool_)]
    for axis, seam in enumerate(grid.periodic):
        if seam:
            both = masks[axis][at(axis, 0)] | masks[axis][at(axis, -1)]
            masks[axis][at(axis, 0)] = masks[axis][at(axis, -1)] = both
    if all(mask.all() for mask in masks):
        raise FieldError("frozen: every face is, expected some that may change")
    return masks[0], masks[1], masks[2]


def excised_mask(grid: Grid, excised: ArrayLike | None) -> Mask | None:
    """Mask of excised cells.

    Raises
    ------
    FieldError
        If it is not a mask of the shape of the grid, or it covers the grid.
    """
    if excised is None:
        return None
    mask = _cell_mask(grid, excised, "excised")
    if mask.all():
        raise FieldError("excised: every cell is, expected some that are looked at")
    return mask


def region_masks(grid: Grid, regions: Mapping[str, ArrayLike] | None) -> dict[str, Mask]:
    """Masks of cells, by name.

    Raises
    ------
    FieldError
        If one is not a mask of the shape of the grid.
    """
    return {name: _cell_mask(grid, mask, f"region {name!r}") for name, mask in (regions or {}).items()}


def _cell_mask(grid: Grid, values: ArrayLike, what: str) -> Mask:
    mask = np.asarray(values)
    if mask.shape != grid.shape or mask.dtype != np.bool_:
        raise FieldError(f"{what}: {mask.dtype} array of shape {mask.shape}, expected bool of shape {grid.shape}")
    return mask


def face_weights(flux: FaceFlux, weights: WeightsLike | None, conductances: Three) -> Three | None:
    """The user's weight of every face: given, or a function of |B| evaluated on the faces.

    Raises
    ------
    FieldError
        If weights are not positive and finite, or their shapes do not fit.
    """
    if weights is None:
        return None
    if callable(weights):
        weights = [weights(b) for b in _strength_at_faces(flux, conductances)]
    arrays = _three(flux.grid, weights, "weights", np.float64)
    for axis, array in enumerate(arrays):
        bad = ~(np.isfinite(array) & (array > 0))
        if bad.any():
            place = tuple(int(i) for i in np.argwhere(bad)[0])
            raise FieldError(
                f"weights of axis {axis + 1}: {int(bad.sum())} values are not positive and finite, the first "
                f"{float(array[place])!r} at index {list(place)}"
            )
        if flux.grid.periodic[axis] and not np.array_equal(array[at(axis, 0)], array[at(axis, -1)]):
            raise FieldError(f"weights of axis {axis + 1}: first and last along its seam differ, expected equal values")
    return arrays[0], arrays[1], arrays[2]


def _three(grid: Grid, values: Sequence[ArrayLike], what: str, dtype: type) -> list[NDArray]:
    if len(values) != 3:
        raise FieldError(f"{what}: {len(values)} arrays, expected 3")
    arrays: list[NDArray] = []
    for axis, value in enumerate(values):
        array = np.asarray(value)
        if array.shape != grid.face_shape(axis) or (dtype is np.bool_) != (array.dtype == np.bool_):
            raise FieldError(
                f"{what} of axis {axis + 1}: {array.dtype} array of shape {array.shape}, expected "
                f"{np.dtype(dtype)} of shape {grid.face_shape(axis)}"
            )
        arrays.append(np.ascontiguousarray(array, dtype=dtype))
    return arrays


def _strength_at_faces(flux: FaceFlux, conductances: Three) -> Iterator[Array]:
    """|B| at the faces: the mean of the cells beside them, whose B^2 is their energy over their volume."""
    grid = flux.grid
    square = np.zeros(grid.shape)
    for axis, (f, g) in enumerate(zip(flux.faces, conductances, strict=True)):
        part = np.divide(f**2, g, out=np.zeros_like(f), where=g > 0)
        if not grid.periodic[axis]:  # a wall belongs to one cell only
            part[at(axis, 0)] *= 2.0
            part[at(axis, -1)] *= 2.0
        square += 0.5 * (part[at(axis, slice(None, -1))] + part[at(axis, slice(1, None))])
    for rows in compute.slabs(grid.shape[0], _SLAB // (grid.shape[1] * grid.shape[2])):
        square[rows] /= near_volumes(grid, rows)
    strength = np.sqrt(square, out=square)
    del part
    for axis in range(3):
        padded = np.concatenate(
            [strength[at(axis, slice(-1, None) if grid.periodic[axis] else slice(0, 1))], strength,
             strength[at(axis, slice(0, 1) if grid.periodic[axis] else slice(-1, None))]], axis=axis,
        )  # fmt: skip
        yield 0.5 * (padded[at(axis, slice(None, -1))] + padded[at(axis, slice(1, None))])
