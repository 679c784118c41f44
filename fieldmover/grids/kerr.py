"""Spheroidal coordinates of a spinning hole, and how they lie in the Cartesian-like ones.

In Kerr-Schild form the two charts are joined by x + iy = (r + ia) e^(i phi) sin theta, z = r cos theta, where a is the
spin (Kerr 1963, *Gravitational field of a spinning mass as an example of algebraically special metrics*; in this form
from memory). Surfaces of constant r are oblate spheroids, and with r the meridians turn about the axis.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover.errors import GridError
from fieldmover.grids.grid import Grid, spherical_grid
from fieldmover.grids.maps import Triple

Array = NDArray[np.float64]


@dataclass(frozen=True)
class KerrSchildMap:
    """Spheroidal r, theta, phi (radians) of a hole with spin `spin`, a length."""

    spin: float
    kind: str = "warped"
    names: tuple[str, str, str] = ("r", "theta", "phi")

    def to_cartesian(self, q1: Array, q2: Array, q3: Array) -> Triple:
        sine, c, s = np.sin(q2), np.cos(q3), np.sin(q3)
        x, y, z = np.broadcast_arrays((q1 * c - self.spin * s) * sine, (q1 * s + self.spin * c) * sine, q1 * np.cos(q2))
        return x, y, z

    def from_cartesian(self, x: Array, y: Array, z: Array) -> Triple:
        r = spheroidal_radius(x, y, z, self.spin)
        theta = np.arctan2(np.hypot(x, y) * r, z * np.hypot(r, self.spin))
        return r, theta, np.arctan2(y, x) - np.arctan2(self.spin, r)

    def jacobian(self, q1: Array, q2: Array, q3: Array) -> Array:
        st, ct, c, s = np.sin(q2), np.cos(q2), np.cos(q3), np.sin(q3)
        u, v = q1 * c - self.spin * s, q1 * s + self.spin * c
        rows: list[list[Array | float]] = [
            [st * c, u * ct, -v * st],
            [st * s, v * ct, u * st],
            [ct, -q1 * st, 0.0],
        ]
        out = np.empty((3, 3, *np.broadcast_shapes(np.shape(q1), np.shape(q2), np.shape(q3))))
        for i, row in enumerate(rows):
            for j, entry in enumerate(row):
                out[i, j] = entry
        return out


def spheroidal_radius(x: Array, y: Array, z: Array, spin: float) -> Array:
    """The coordinate r of points: the root of (x^2 + y^2) / (r^2 + a^2) + z^2 / r^2 = 1, 0 on the disc in the ring.

    Examples
    --------
    >>> spheroidal_radius(np.array([5.0, 0.5]), np.array([0.0, 0.0]), np.array([0.0, 0.0]), 3.0)
    array([4., 0.])
    """
    flat = x**2 + y**2 + z**2 - spin**2
    height = 2.0 * abs(spin) * np.abs(z)
    root = np.hypot(flat, height)
    large = 0.5 * (root + np.abs(flat))
    small = np.divide(0.25 * height**2, large, out=np.zeros_like(large), where=large > 0)  # no cancellation
    return np.asarray(np.sqrt(np.where(flat >= 0, large, small)))


def kerr_schild_grid(r: ArrayLike, theta: ArrayLike, phi: ArrayLike, spin: float) -> Grid:
    """Grid in spheroidal Kerr-Schild coordinates.

    Its Cartesian positions are the Cartesian-like Kerr-Schild coordinates of the same hole, so that fluxes move
    between the charts as between any two grids: the coordinate time, and with it what a flux is, is the same in both.
    With spin 0 it is a spherical grid.

    Parameters
    ----------
    r : array_like, 1-D
        Positive, unit of length.
    theta : array_like, 1-D
        Radians in [0, pi]; an end at 0 or pi is a pole.
    phi : array_like, 1-D
        Radians; a span of 2 pi makes a seam.
    spin : float
        a = J / (M c), a length (with G = c = 1 and M = 1 the number between -1 and 1).

    Returns
    -------
    Grid
        Of kind "warped".

    Raises
    ------
    GridError
        As `spherical_grid`, and if the spin is not finite.

    Examples
    --------
    >>> grid = kerr_schild_grid([1.4, 3.0], np.linspace(0, np.pi, 5), np.linspace(0, 2 * np.pi, 9), spin=0.9)
    >>> grid.poles, grid.periodic
    ((None, 'both', None), (False, False, True))
    >>> grid.node_positions()[:, 1, 2, 0].round(12)  # r = 3 on the equator
    array([3. , 0.9, 0. ])
    """
    if not np.isfinite(spin):
        raise GridError(f"spin: {spin}, expected a finite length")
    flat = spherical_grid(r, theta, phi)
    return Grid(KerrSchildMap(float(spin)), flat.nodes, flat.periodic, flat.poles)
