"""Maps from grid coordinates to Cartesian positions, with inverse and Jacobian.

A map broadcasts as NumPy does and knows nothing of nodes. `jacobian` returns an array of shape (3, 3, ...) whose first
index is the Cartesian component and whose second is the grid coordinate, so that column i is the tangent dx/dq^i.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from fieldmover.errors import GridError

Array = NDArray[np.float64]
Triple = tuple[Array, Array, Array]


class Map(Protocol):
    """What a grid needs to know of its coordinates."""

    @property
    def kind(self) -> str: ...

    @property
    def names(self) -> tuple[str, str, str]: ...

    def to_cartesian(self, q1: Array, q2: Array, q3: Array) -> Triple: ...

    def jacobian(self, q1: Array, q2: Array, q3: Array) -> Array: ...


def _stacked(rows: list[list[Array | float]]) -> Array:
    """Broadcast nine entries to one (3, 3, ...) array."""
    shape = np.broadcast_shapes(*(np.shape(entry) for row in rows for entry in row))
    out = np.empty((3, 3, *shape))
    for i, row in enumerate(rows):
        for j, entry in enumerate(row):
            out[i, j] = entry
    return out


@dataclass(frozen=True)
class CartesianMap:
    """x, y, z are the grid coordinates."""

    kind: str = "cartesian"
    names: tuple[str, str, str] = ("x", "y", "z")

    def to_cartesian(self, q1: Array, q2: Array, q3: Array) -> Triple:
        x, y, z = np.broadcast_arrays(q1, q2, q3)
        return x, y, z

    def from_cartesian(self, x: Array, y: Array, z: Array) -> Triple:
        return x, y, z

    def jacobian(self, q1: Array, q2: Array, q3: Array) -> Array:
        one = np.ones(np.broadcast_shapes(np.shape(q1), np.shape(q2), np.shape(q3)))
        return _stacked([[one, 0.0, 0.0], [0.0, one, 0.0], [0.0, 0.0, one]])


@dataclass(frozen=True)
class CylindricalMap:
    """Distance from the axis R, azimuth phi (radians), height z."""

    kind: str = "cylindrical"
    names: tuple[str, str, str] = ("R", "phi", "z")

    def to_cartesian(self, q1: Array, q2: Array, q3: Array) -> Triple:
        x, y, z = np.broadcast_arrays(q1 * np.cos(q2), q1 * np.sin(q2), q3)
        return x, y, z

    def from_cartesian(self, x: Array, y: Array, z: Array) -> Triple:
        return np.hypot(x, y), np.arctan2(y, x), z

    def jacobian(self, q1: Array, q2: Array, q3: Array) -> Array:
        c, s = np.cos(q2), np.sin(q2)
        return _stacked([[c, -q1 * s, 0.0], [s, q1 * c, 0.0], [0.0, 0.0, np.ones(np.shape(q3))]])


@dataclass(frozen=True)
class SphericalMap:
    """Radius r, angle theta from the z axis, azimuth phi (radians)."""

    kind: str = "spherical"
    names: tuple[str, str, str] = ("r", "theta", "phi")

    def to_cartesian(self, q1: Array, q2: Array, q3: Array) -> Triple:
        rho = q1 * np.sin(q2)
        x, y, z = np.broadcast_arrays(rho * np.cos(q3), rho * np.sin(q3), q1 * np.cos(q2))
        return x, y, z

    def from_cartesian(self, x: Array, y: Array, z: Array) -> Triple:
        rho = np.hypot(x, y)
        return np.hypot(rho, z), np.arctan2(rho, z), np.arctan2(y, x)

    def jacobian(self, q1: Array, q2: Array, q3: Array) -> Array:
        ct, st, c, s = np.cos(q2), np.sin(q2), np.cos(q3), np.sin(q3)
        return _stacked(
            [
                [st * c, q1 * ct * c, -q1 * st * s],
                [st * s, q1 * ct * s, q1 * st * c],
                [ct, -q1 * st, 0.0],
            ]
        )


@dataclass(frozen=True, eq=False)
class WarpedMap:
    """Any smooth one-to-one function of three grid coordinates.

    The Jacobian is taken by fourth-order central differences over `steps` (one length per coordinate, a small part
    of a cell), whose error is some 1e-11 of the largest entry for a map resolved by the grid.
    """

    function: Callable[[Array, Array, Array], Triple]
    steps: tuple[float, float, float]
    kind: str = "warped"
    names: tuple[str, str, str] = ("q1", "q2", "q3")

    def to_cartesian(self, q1: Array, q2: Array, q3: Array) -> Triple:
        position = self.function(q1, q2, q3)
        if len(position) != 3:
            raise GridError(f"to_cartesian returned {len(position)} arrays, expected (x, y, z)")
        shape = np.broadcast_shapes(np.shape(q1), np.shape(q2), np.shape(q3))
        try:
            x, y, z = (np.broadcast_to(np.asarray(p, dtype=np.float64), shape) for p in position)
        except ValueError:
            found = [np.shape(p) for p in position]
            raise GridError(f"to_cartesian returned shapes {found}, expected all to broadcast to {shape}") from None
        return x, y, z

    def jacobian(self, q1: Array, q2: Array, q3: Array) -> Array:
        q = (np.asarray(q1), np.asarray(q2), np.asarray(q3))
        out = np.empty((3, 3, *np.broadcast_shapes(*(c.shape for c in q))))
        for axis, step in enumerate(self.steps):
            moved = [list(q) for _ in range(4)]
            for place, factor in enumerate((-2.0, -1.0, 1.0, 2.0)):
                moved[place][axis] = q[axis] + factor * step
            far_low, low, high, far_high = (np.stack(self.to_cartesian(*m)) for m in moved)
            out[:, axis] = (8.0 * (high - low) - (far_high - far_low)) / (12.0 * step)
        return out
