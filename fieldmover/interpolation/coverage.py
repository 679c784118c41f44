"""What the source reaches, and what the target carries elsewhere."""

from __future__ import annotations

from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import binary_dilation

from fieldmover.errors import FieldError
from fieldmover.forms.fields import FaceFlux
from fieldmover.grids.grid import Grid, at
from fieldmover.projection.project import project

Mask = NDArray[np.bool_]
Masks = tuple[Mask, Mask, Mask]
Outside = Literal["least energy", "zero", "refuse"]

_TOLERANCE = 1e-10


def known_faces(edges: Masks) -> Masks:
    """Faces all of whose edges are known."""
    e1, e2, e3 = edges

    def both(mask: Mask, axis: int) -> Mask:
        low, high = mask[at(axis, slice(None, -1))], mask[at(axis, slice(1, None))]
        return low & high

    return both(e2, 2) & both(e3, 1), both(e3, 0) & both(e1, 2), both(e1, 1) & both(e2, 0)


def known_cells(faces: Masks) -> Mask:
    """Cells all of whose faces are known."""
    result = None
    for axis, mask in enumerate(faces):
        pair = mask[at(axis, slice(None, -1))] & mask[at(axis, slice(1, None))]
        result = pair if result is None else result & pair
    return np.asarray(result)


def fill(flux: FaceFlux, known: Masks, outside: Outside, quantum: float) -> FaceFlux:
    """Complete a flux known on some faces only.

    Parameters
    ----------
    flux : FaceFlux
        Known values, multiples of `quantum`; the others are not looked at.
    known : tuple of three bool ndarrays
    outside : {"least energy", "zero", "refuse"}
        See `move_flux`.
    quantum : float
        Power of two of which the result holds multiples.

    Returns
    -------
    FaceFlux
        Known faces bit for bit, divergence zero.

    Raises
    ------
    FieldError
        With outside="refuse".
    """
    if outside == "refuse":
        missing = ~known_cells(known)
        place = [int(i) for i in np.argwhere(missing)[0]]
        raise FieldError(
            f"the target leaves the source: {int(missing.sum())} of its {missing.size} cells are not covered, the "
            f"first at index {place}; give outside='least energy' or 'zero', or a smaller target"
        )
    faces = tuple(np.where(mask, f, 0.0) for mask, f in zip(known, flux.faces, strict=True))
    start = FaceFlux(flux.grid, (faces[0], faces[1], faces[2]))
    if not any(mask.any() for mask in known):
        return start
    frozen = known if outside == "least energy" else _all_but_border(flux.grid, known)
    filled, _ = project(start, frozen=frozen, tolerance=_TOLERANCE, quantum=quantum)
    return filled


def _all_but_border(grid: Grid, known: Masks) -> Masks:
    """All faces but the unknown ones among cells within two cells of a known face."""
    touched = np.zeros(grid.shape, dtype=bool)
    for axis, mask in enumerate(known):
        touched |= mask[at(axis, slice(None, -1))] | mask[at(axis, slice(1, None))]
    border = binary_dilation(touched, iterations=2)
    frozen = []
    for axis, mask in enumerate(known):
        near = np.ones(mask.shape, dtype=bool)
        near[at(axis, slice(1, None))] &= border
        near[at(axis, slice(None, -1))] &= border
        if grid.periodic[axis]:
            near[at(axis, 0)] = near[at(axis, -1)] = border[at(axis, 0)] & border[at(axis, -1)]
        frozen.append(mask | ~near)
    return frozen[0], frozen[1], frozen[2]
