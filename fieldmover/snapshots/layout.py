"""From the way a code stores its arrays to [i1, i2, i3], and back.

A file may store its axes in any order and carry layers of ghost cells. Here they are stripped and turned, and
a shape that does not fit is an error that says which dataset, what was found and what would have fitted.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import permutations
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from fieldmover.errors import DataError
from fieldmover.snapshots import axes
from fieldmover.snapshots.gate import Snapshot

Place = Literal["faces", "cells", "edges", "nodes"]
Shape = tuple[int, int, int]

ORDERS: dict[str, tuple[int, ...]] = {
    " ".join(f"q{axis + 1}" for axis in order): order for order in permutations(range(3))
}
"""Every way to store three axes, slowest first, as a job writes it."""


def staggering(at: Place, component: int) -> Shape:
    """How many more values than cells an array has along each axis.

    Examples
    --------
    >>> staggering("faces", 0), staggering("edges", 0), staggering("cells", 0), staggering("nodes", 0)
    ((1, 0, 0), (0, 1, 1), (0, 0, 0), (1, 1, 1))
    """
    own = {"faces": 1, "edges": 0, "cells": 0, "nodes": 1}[at]
    other = {"faces": 0, "edges": 1, "cells": 0, "nodes": 1}[at]
    a, b, c = (own if axis == component else other for axis in range(3))
    return a, b, c


@dataclass(frozen=True)
class Layout:
    """How arrays lie in a file.

    Parameters
    ----------
    order : str
        Axes as stored, slowest first: "q1 q2 q3", "q3 q2 q1", ...
    ghosts : three int
        Layers of ghost cells at each end of q1, q2, q3.
    """

    order: str = "q1 q2 q3"
    ghosts: Shape = (0, 0, 0)

    @property
    def _axes(self) -> tuple[int, ...]:
        return ORDERS[self.order]

    def stored_shape(self, shape: Shape) -> Shape:
        """The shape in the file of an array [i1, i2, i3] of `shape`."""
        a, b, c = (shape[axis] + 2 * self.ghosts[axis] for axis in self._axes)
        return a, b, c

    def stored_cells(self, snapshot: Snapshot, name: str, at: Place, component: int) -> Shape:
        """Cells along q1, q2, q3, ghosts included, that the shape of a dataset speaks of."""
        found = snapshot.shape(name)
        if len(found) != 3:
            raise DataError(
                f"{snapshot.path}: dataset {name!r} has shape {found}; expected 3 axes ({self.order})"
            )
        extra = staggering(at, component)
        a, b, c = (found[self._axes.index(axis)] - extra[axis] for axis in range(3))
        if any(n <= 2 * ghosts for n, ghosts in zip((a, b, c), self.ghosts, strict=True)):
            raise DataError(
                f"{snapshot.path}: dataset {name!r} has shape {found} ({self.order}); ghosts {list(self.ghosts)} at "
                "each end leave no cell"
            )
        return a, b, c

    def read(
        self, snapshot: Snapshot, name: str, cells: Shape, at: Place, component: int = 0
    ) -> NDArray[np.float64]:
        """A dataset as finite float64 [i1, i2, i3] without ghosts.

        Parameters
        ----------
        snapshot : Snapshot
            The file.
        name : str
            The dataset.
        cells : three int
            Cells of the grid, without ghosts.
        at : "faces", "cells" or "edges"
            Where its values sit; faces normal to axis `component`, edges along it.
        component : int
            0, 1 or 2.

        Raises
        ------
        DataError
            If the shape does not fit or a value is NaN or infinite (how many, and the first place).
        """
        self.check_shape(snapshot, name, cells, at, component)
        n1, n2, n3 = (n + extra for n, extra in zip(cells, staggering(at, component), strict=True))
        inside = tuple(slice(self.ghosts[a], self.ghosts[a] + (n1, n2, n3)[a]) for a in self._axes)
        array = np.ascontiguousarray(self.inside(snapshot.read(name, inside)), dtype=np.float64)
        bad = ~np.isfinite(array)
        if bad.any():
            first = [int(i) for i in np.unravel_index(int(np.argmax(bad)), array.shape)]
            raise DataError(
                f"{snapshot.path}: dataset {name!r} has {np.count_nonzero(bad)} values that are NaN or "
                f"infinite, the first ({array[tuple(first)]}) at [i1, i2, i3] = {first} without ghosts"
            )
        return array

    def inside(self, stored: NDArray) -> NDArray:
        """An array as stored, turned to [i1, i2, i3] (a view)."""
        return stored.transpose([self._axes.index(axis) for axis in range(3)])

    def outside(self, array: NDArray) -> NDArray:
        """An array [i1, i2, i3], turned to the order of the file (a view)."""
        return array.transpose(self._axes)

    def check_shape(self, snapshot: Snapshot, name: str, cells: Shape, at: Place, component: int = 0) -> None:
        """Whether a dataset has the shape that `read` expects, with its arguments and errors; no value is read."""
        n1, n2, n3 = (n + extra for n, extra in zip(cells, staggering(at, component), strict=True))
        shape = (n1, n2, n3)
        found, expected = snapshot.shape(name), self.stored_shape(shape)
        if found == expected:
            return
        q = f"q{component + 1}"
        where = {
            "faces": f"on faces normal to {q}",
            "edges": f"on edges along {q}",
            "cells": "in cells",
            "nodes": "at nodes",
        }[at]
        others = (Layout(order, ghosts) for ghosts in (self.ghosts, (0, 0, 0)) for order in ORDERS)
        fits = next((other for other in others if other.stored_shape(shape) == found), None)
        hint = f'; axes = "{fits.order}", ghosts = {list(fits.ghosts)} would fit' if fits else ""
        raise DataError(
            f"{snapshot.path}: dataset {name!r} has shape {found}; expected {expected} for values {where} "
            f"({self.order}, ghosts {list(self.ghosts)} included){hint}"
        )


def read_axis(
    snapshot: Snapshot,
    name: str,
    axis: int,
    layout: Layout,
    stored_cells: int,
    meaning: axes.Angle | None,
    centres: bool,
) -> NDArray[np.float64]:
    """Nodes of one axis from a dataset of node positions or cell centres, with or without those of ghosts.

    Parameters
    ----------
    snapshot, name
        Where the positions are.
    axis : int
        0, 1 or 2.
    layout : Layout
        Tells how many ghosts the arrays have.
    stored_cells : int
        Cells along the axis that the arrays hold, ghosts included: it tells whether the positions include
        them.
    meaning : str or None
        What the axis measures (`axes.MEANING`).
    centres : bool
        Whether the dataset holds cell centres.

    Returns
    -------
    (cells + 1,) array

    Raises
    ------
    DataError
        If the positions are not finite, do not increase or are of the wrong number.
    """
    shape, ghosts, extra = snapshot.shape(name), layout.ghosts[axis], 0 if centres else 1
    what = "cell centres" if centres else "nodes"
    bare = stored_cells - 2 * ghosts + extra
    if len(shape) != 1 or shape[0] not in (bare, stored_cells + extra):
        with_ghosts = f", or {stored_cells + extra} with those of ghosts" if ghosts else ""
        raise DataError(
            f"{snapshot.path}: dataset {name!r} has shape {shape}; expected {bare} {what} of "
            f"q{axis + 1}{with_ghosts}, to fit the magnetic field"
        )
    positions = snapshot.read(name)
    if not np.isfinite(positions).all():
        raise DataError(f"{snapshot.path}: dataset {name!r} has positions that are NaN or infinite")
    steps = np.diff(positions.astype(np.float64))
    if not np.all(steps > 0):
        first = int(np.argmin(steps > 0))
        raise DataError(
            f"{snapshot.path}: dataset {name!r} does not increase: {positions[first]:.9g}, then "
            f"{positions[first + 1]:.9g} at [{first + 1}]; expected increasing {what} of q{axis + 1}"
        )
    strip = ghosts if shape[0] != bare else 0
    if centres:
        return axes.from_centres(positions, strip, meaning)
    return axes.from_dataset(positions[strip : len(positions) - strip], meaning)


def read_positions(
    snapshot: Snapshot, name: str, layout: Layout, stored_cells: Shape, at: Literal["nodes", "cells"]
) -> NDArray[np.float64]:
    """One coordinate of every node or cell centre, with or without those of ghosts in the file.

    Parameters
    ----------
    snapshot, name, layout
        As `read_axis`.
    stored_cells : three int
        Cells that the arrays hold, ghosts included: they tell whether the positions include them.
    at : "nodes" or "cells"

    Returns
    -------
    (n1 + 1, n2 + 1, n3 + 1) or (n1, n2, n3) array
        Without ghosts.

    Raises
    ------
    DataError
        If the shape fits neither, or a value is not finite.
    """
    a, b, c = (n - 2 * g for n, g in zip(stored_cells, layout.ghosts, strict=True))
    bare = Layout(layout.order)
    extra = staggering(at, 0)
    stripped = bare.stored_shape((a + extra[0], b + extra[1], c + extra[2])) == snapshot.shape(name)
    return (bare if stripped else layout).read(snapshot, name, (a, b, c), at)
