"""Nodes of one axis: by a rule, or from the positions a file holds.

Files in single precision reach pi only to 1e-7, and files that hold cell centres do not hold walls at all. A
pole or a seam missed by a rounding error would leave a needle-thin hole in the grid, so ends that are meant
to lie on one are put there exactly.
"""

from __future__ import annotations

from typing import Literal, get_args

import numpy as np
from numpy.typing import NDArray

from fieldmover.errors import DataError

Spacing = Literal["uniform", "log", "sinh", "tanh"]
Angle = Literal["polar", "azimuth", "radius"]
Kind = Literal["cartesian", "cylindrical", "spherical"]

MEANING: dict[str, tuple[Angle | None, ...]] = {
    "cartesian": (None, None, None),
    "cylindrical": ("radius", "azimuth", None),
    "spherical": (None, "polar", "azimuth"),
}
"""What each axis of a grid kind measures, where its ends may be special."""

NEAR = 0.3  # of the outermost cell: what extrapolated ends may miss a pole or seam by


def spaced(
    start: float, stop: float, cells: int, spacing: Spacing, ratio: float = 1.0
) -> NDArray[np.float64]:
    """Nodes from `start` to `stop` by a rule.

    Parameters
    ----------
    start, stop : float
        The first and the last node.
    cells : int
        How many cells lie between them.
    spacing : "uniform", "log", "sinh" or "tanh"
        Equal widths; equal ratios; narrow cells in the middle; narrow cells at both ends.
    ratio : float
        For "sinh" and "tanh": the widest over the narrowest cell, in the limit of many cells; above 1.

    Returns
    -------
    (cells + 1,) array

    Raises
    ------
    ValueError
        If the ends, the number of cells or the ratio make no increasing nodes.

    Examples
    --------
    >>> spaced(1, 8, 3, "log")
    array([1., 2., 4., 8.])
    """
    if spacing not in get_args(Spacing):
        raise ValueError(f"spacing {spacing!r}; expected one of {', '.join(get_args(Spacing))}")
    if not start < stop:
        raise ValueError(f"from {start:g} to {stop:g}: the end must lie above the start")
    if cells < 1:
        raise ValueError(f"{cells} cells; expected at least 1")
    if spacing == "log" and start <= 0:
        raise ValueError(f"log spacing from {start:g}; expected a start above 0")
    if spacing in ("sinh", "tanh") and not ratio > 1:
        raise ValueError(f"{spacing} spacing needs ratio, the widest over the narrowest cell, above 1")
    u = np.linspace(-1.0, 1.0, cells + 1)
    middle, half = 0.5 * (start + stop), 0.5 * (stop - start)
    if spacing == "uniform":
        nodes = np.linspace(start, stop, cells + 1)
    elif spacing == "log":
        nodes = np.geomspace(start, stop, cells + 1)
    elif spacing == "sinh":
        s = np.arccosh(ratio)  # widths go as cosh(s u)
        nodes = middle + half * np.sinh(s * u) / np.sinh(s)
    else:
        s = np.arccosh(np.sqrt(ratio))  # widths go as 1 / cosh(s u)^2
        nodes = middle + half * np.tanh(s * u) / np.tanh(s)
    nodes[0], nodes[-1] = start, stop
    return nodes


def snapped(nodes: NDArray[np.float64], meaning: Angle | None, slack: float) -> NDArray[np.float64]:
    """Nodes whose ends lie exactly on a pole, a full turn or the axis if they miss it by at most `slack`.

    Examples
    --------
    >>> snapped(np.array([1e-9, 1.0, 3.1415927]), "polar", 1e-6) == np.array([0, 1, np.pi])
    array([ True,  True,  True])
    """
    nodes = nodes.copy()
    if meaning in ("polar", "radius") and abs(nodes[0]) <= slack:
        nodes[0] = 0.0
    if meaning == "polar" and abs(nodes[-1] - np.pi) <= slack:
        nodes[-1] = np.pi
    if meaning == "azimuth" and abs(nodes[-1] - nodes[0] - 2 * np.pi) <= slack:
        for start in (0.0, -np.pi):
            if abs(nodes[0] - start) <= slack:
                nodes[0] = start
        nodes[-1] = nodes[0] + 2 * np.pi
    return nodes


def from_dataset(nodes: NDArray, meaning: Angle | None) -> NDArray[np.float64]:
    """Node positions as float64, put right within the rounding of the type they were stored in.

    Ends go where `snapped` puts them, and steps that differ by rounding alone become equal: a meridian that misses
    its opposite by 1e-7 could not be joined to it across a pole.
    """
    rounding = _rounding(nodes)
    return evened(snapped(nodes.astype(np.float64), meaning, 8 * np.pi * rounding), rounding)


def _rounding(stored: NDArray) -> float:
    """The relative rounding error of numbers as stored; 0 for whole numbers."""
    return float(np.finfo(stored.dtype).eps) if stored.dtype.kind == "f" else 0.0


def evened(nodes: NDArray[np.float64], rounding: float) -> NDArray[np.float64]:
    """Nodes with equal steps if they are no further from them than the rounding error of single precision or worse.

    Those in double precision are as they should be.

    Examples
    --------
    >>> float(evened(np.array([0.0, 0.3333333, 0.6666667, 1.0]), 1.2e-7)[1])
    0.3333333333333333
    """
    if rounding <= np.finfo(np.float64).eps:
        return nodes
    even = np.linspace(nodes[0], nodes[-1], len(nodes))
    near = np.abs(nodes - even).max() <= rounding * np.abs(nodes).max()
    return even if near else nodes


def from_centres(centres: NDArray, ghosts: int, meaning: Angle | None) -> NDArray[np.float64]:
    """Nodes half-way between cell centres.

    Parameters
    ----------
    centres : (n + 2 ghosts,) array
        Increasing positions, those of ghost cells included.
    ghosts : int
        Ghost cells at each end. With one or more, the outermost nodes lie half-way to a ghost; without, they
        are extrapolated as though the outermost centre lay in the middle of its cell.
    meaning : str or None
        What the axis measures. An end within 0.3 of its cell from a pole, the axis or a full turn is put
        there.

    Returns
    -------
    (n + 1,) array

    Examples
    --------
    >>> from_centres(np.array([0.5, 1.5, 2.5]), 0, None)
    array([0., 1., 2., 3.])
    """
    c = evened(centres.astype(np.float64), _rounding(centres))
    if len(c) - 2 * ghosts < 1 or len(c) < 2:
        raise DataError(
            f"{len(c)} cell centres with {ghosts} ghosts at each end; expected at least 2 and one inside"
        )
    halves = 0.5 * (c[1:] + c[:-1])
    if ghosts:
        nodes = halves[ghosts - 1 : len(c) - ghosts]
        return snapped(nodes, meaning, NEAR * min(nodes[1] - nodes[0], nodes[-1] - nodes[-2]))
    nodes = np.concatenate([[2 * c[0] - halves[0]], halves, [2 * c[-1] - halves[-1]]])
    slack = NEAR * min(nodes[1] - nodes[0], nodes[-1] - nodes[-2])
    if meaning == "azimuth" and abs(nodes[-1] - nodes[0] - 2 * np.pi) <= slack:
        nodes[0] = 0.5 * (c[0] + c[-1]) - np.pi  # half-way to the neighbour across the seam
    return snapped(nodes, meaning, slack)
