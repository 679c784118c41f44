"""Moves of sharp fields: order 3 where the field is resolved, held back towards order 1 at sheets and shocks.

A cubic overshoots at a jump of the field, order 1 does not but smears it. Circulations are free, so it is they that are
limited: each is that of order 1 plus a part of the difference to order 3, as large as leaves every face within the
range of its neighbours at order 1 (flux-corrected transport: Zalesak 1979, Fully multidimensional flux-corrected
transport algorithms for fluids). Whatever the parts, d1 of the result has no divergence. Extrema of a resolved field
would be clipped, so only edges near rough faces are limited.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import binary_dilation, maximum_filter, minimum_filter

from fieldmover.forms.fields import EdgePotential, Three
from fieldmover.forms.incidence import d1
from fieldmover.grids.grid import Grid, at

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Known = tuple[Mask, Mask, Mask]
Move = Callable[[EdgePotential, Grid, Literal[1, 3]], tuple[Three, Known]]

_SAME_CURVE = 0.4  # least over largest second difference among three neighbours that makes a resolved extremum
_STRAIGHT = 0.2  # second difference over range that makes a resolved slope
_FLAT = 0.01  # range over strength of the field that nobody need look at
_REACH = 3  # how many faces beyond a rough one are limited with it

_LOW, _HIGH = slice(None, -1), slice(1, None)


def move_limited(pot: EdgePotential, target: Grid, move: Move) -> tuple[Three, Known]:
    """Limited circulations along every edge of a grid.

    Parameters
    ----------
    pot : EdgePotential
    target : Grid
    move : callable
        ``move(pot, target, order) -> (edges, known)``, as `flux.move_potential`.

    Returns
    -------
    edges, known
        As `move` gives them.
    """
    cubic, known = move(pot, target, 3)
    areas = target.face_areas()
    rough = _rough_edges(target, d1(cubic), areas)
    if not any(mask.any() for mask in rough):
        return cubic, known
    linear, _ = move(pot, target, 1)
    change = tuple(c - low for c, low in zip(cubic, linear, strict=True))
    parts = _parts(d1(linear), (change[0], change[1], change[2]), areas)
    edges = [
        low + np.where(mask, part, 1.0) * difference
        for low, mask, part, difference in zip(linear, rough, parts, change, strict=True)
    ]
    return (edges[0], edges[1], edges[2]), known


def _circulation(axis: int) -> list[tuple[int, tuple[int | slice, ...], float]]:
    """The four edges round faces normal to `axis`: their direction, place and sign in d1."""
    b, c = (axis + 1) % 3, (axis + 2) % 3
    return [(c, at(b, _HIGH), 1.0), (c, at(b, _LOW), -1.0), (b, at(c, _HIGH), -1.0), (b, at(c, _LOW), 1.0)]


def _parts(faces: Three, change: Three, areas: Three) -> list[Array]:
    """For each edge the part of its change that keeps all its faces within the range of their neighbours."""
    parts = [np.ones_like(a) for a in change]
    for axis, (face, area) in enumerate(zip(faces, areas, strict=True)):
        density = _density(face, area)
        room_up = maximum_filter(density, size=3, mode="nearest") * area - face
        room_down = minimum_filter(density, size=3, mode="nearest") * area - face
        round_face = [(d, place, sign * change[d][place]) for d, place, sign in _circulation(axis)]
        up = sum(np.maximum(x, 0.0) for _, _, x in round_face)
        down = sum(np.minimum(x, 0.0) for _, _, x in round_face)
        share_up = np.minimum(np.divide(room_up, up, out=np.ones_like(face), where=up > 0), 1.0)
        share_down = np.minimum(np.divide(room_down, down, out=np.ones_like(face), where=down < 0), 1.0)
        for d, place, x in round_face:
            share = np.where(x > 0, share_up, np.where(x < 0, share_down, 1.0))
            parts[d][place] = np.minimum(parts[d][place], np.where(area > 0, share, 1.0))
    return parts


def _rough_edges(target: Grid, faces: Three, areas: Three) -> list[Mask]:
    """Edges of faces near which the field is not resolved."""
    densities = [_density(face, area) for face, area in zip(faces, areas, strict=True)]
    squares = sum((0.5 * (f[at(d, _LOW)] + f[at(d, _HIGH)])) ** 2 for d, f in enumerate(densities))
    strength = maximum_filter(np.sqrt(squares), size=5, mode="nearest")
    edges = [np.zeros(target.edge_shape(d), dtype=bool) for d in range(3)]
    for axis, density in enumerate(densities):
        beside = np.pad(strength, [(0, int(d == axis)) for d in range(3)], mode="edge")
        rough = np.zeros(density.shape, dtype=bool)
        for d in range(3):
            rough |= _rough_along(density, beside, d)
        rough = binary_dilation(rough, iterations=_REACH)
        for d, place, _ in _circulation(axis):
            edges[d][place] |= rough
    return edges


def _rough_along(density: Array, strength: Array, axis: int) -> Mask:
    """Where second differences along an axis neither agree with their neighbours nor are small beside the range."""
    if density.shape[axis] < 5:
        return np.zeros(density.shape, dtype=bool)
    second = np.diff(density, 2, axis=axis)
    second = np.pad(second, [(int(d == axis),) * 2 for d in range(3)], mode="edge")
    three, five = ([n if d == axis else 1 for d in range(3)] for n in (3, 5))
    low, high = minimum_filter(second, size=three, mode="nearest"), maximum_filter(second, size=three, mode="nearest")
    largest = np.maximum(np.abs(low), np.abs(high))
    least = np.where(low * high > 0, np.minimum(np.abs(low), np.abs(high)), 0.0)
    span = maximum_filter(density, size=five, mode="nearest") - minimum_filter(density, size=five, mode="nearest")
    resolved = (least > _SAME_CURVE * largest) | (largest < _STRAIGHT * span) | (span < _FLAT * strength)
    return np.asarray(~resolved)


def _density(face: Array, area: Array) -> Array:
    return np.divide(face, area, out=np.zeros_like(face), where=area > 0)
