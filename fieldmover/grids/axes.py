"""One-dimensional node arrays: what makes them an axis, and where seams and poles are."""

from __future__ import annotations

from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover.errors import GridError

Array = NDArray[np.float64]
Poles = Literal["low", "high", "both"] | None

SNAP = 1e-10
"""Angles closer than this to 0, pi or a full turn are taken to be exactly that."""


def checked_nodes(nodes: ArrayLike, name: str) -> Array:
    """Return `nodes` as a read-only float64 array, or say why they do not make an axis.

    Parameters
    ----------
    nodes : array_like, shape (n + 1,)
        Node positions of the n cells, strictly increasing.
    name : str
        How a message calls the axis.

    Raises
    ------
    GridError
        If the nodes are not one-dimensional, fewer than two, not finite or not increasing.

    Examples
    --------
    >>> checked_nodes([0, 1, 3], "x")
    array([0., 1., 3.])
    """
    array = np.array(nodes, dtype=np.float64)
    if array.ndim != 1 or array.size < 2:
        raise GridError(f"nodes of {name}: shape {array.shape}, expected one dimension with at least 2 nodes")
    if not np.isfinite(array).all():
        first = int(np.argmax(~np.isfinite(array)))
        raise GridError(f"nodes of {name}: {array[first]} at index {first}, expected finite numbers")
    steps = np.diff(array)
    if not (steps > 0).all():
        first = int(np.argmax(~(steps > 0)))
        raise GridError(
            f"nodes of {name}: not increasing at index {first + 1} ({array[first]:.17g} is followed by "
            f"{array[first + 1]:.17g})"
        )
    array.flags.writeable = False
    return array


def angle_with_seam(nodes: ArrayLike, name: str) -> tuple[Array, bool]:
    """Check the nodes of an azimuth; a span of a full turn makes a seam.

    Returns
    -------
    nodes : ndarray, shape (n + 1,)
        Radians; with a seam the last is exactly the first plus 2 pi.
    seam : bool

    Raises
    ------
    GridError
        As `checked_nodes`, and if the span exceeds a full turn.
    """
    array = checked_nodes(nodes, name)
    span = array[-1] - array[0]
    if span > 2 * np.pi + SNAP:
        raise GridError(f"nodes of {name}: they span {span:.17g}, more than a full turn (2 pi)")
    seam = bool(span >= 2 * np.pi - SNAP)
    if seam:
        array = array.copy()
        array[-1] = array[0] + 2 * np.pi
        array = checked_nodes(array, name)
    return array, seam


def polar_angle(nodes: ArrayLike, name: str) -> tuple[Array, Poles]:
    """Check the nodes of a polar angle; an end at 0 or pi is a pole.

    Raises
    ------
    GridError
        As `checked_nodes`, and if a node lies outside [0, pi].
    """
    array = checked_nodes(nodes, name).copy()
    if array[0] < -SNAP or array[-1] > np.pi + SNAP:
        raise GridError(
            f"nodes of {name}: they run from {array[0]:.17g} to {array[-1]:.17g}, expected radians within [0, pi]"
        )
    low, high = bool(array[0] <= SNAP), bool(array[-1] >= np.pi - SNAP)
    if low:
        array[0] = 0.0
    if high:
        array[-1] = np.pi
    poles: Poles = "both" if low and high else "low" if low else "high" if high else None
    return checked_nodes(array, name), poles


def centres_of(nodes: Array) -> Array:
    """Midpoints between neighbouring nodes, shape (n,)."""
    return np.asarray(0.5 * (nodes[1:] + nodes[:-1]))


def dual_lengths(nodes: Array, periodic: bool) -> Array:
    """Distance between the centres on both sides of each node, shape (n + 1,); half a cell at walls."""
    centres = centres_of(nodes)
    lengths = np.empty(nodes.size)
    lengths[1:-1] = np.diff(centres)
    lengths[0], lengths[-1] = centres[0] - nodes[0], nodes[-1] - centres[-1]
    if periodic:
        lengths[0] = lengths[-1] = lengths[0] + lengths[-1]
    return lengths
