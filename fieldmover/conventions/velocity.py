"""Kinds of velocity, to and from the one used inside.

Inside, a velocity is V^i = dx^i/dt along the axes x, y, z of the grid's positions. A file may hold

* "coordinate": V^i = dq^i/dt, relative to a grid that moves;
* "eulerian": v^i = (V^i + shift^i) / lapse, what observers at rest in the slice of constant time measure;
* "four-velocity": u^i = u^t V^i;
* "W eulerian": W v^i, with W = lapse u^t = (1 - gamma_ij v^i v^j)^(-1/2) the Lorentz factor those observers see

(Gourgoulhon 2012, *3+1 Formalism in General Relativity*, chapter 6; from memory), each in components along the grid's
coordinates, along unit vectors, or Cartesian. A grid whose map changes with time adds w = dX/dt at fixed q to the
shift: x = X(q, t) makes dx + shift dt into (dX/dq) dq + (shift + w) dt. Without a metric velocities are Newtonian.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal, get_args

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover.conventions import components
from fieldmover.conventions.components import Basis
from fieldmover.conventions.metrics import Geometry, centre_jacobian
from fieldmover.errors import FieldError
from fieldmover.grids.axes import centres_of
from fieldmover.grids.grid import Grid

Array = NDArray[np.float64]
Kind = Literal["coordinate", "eulerian", "four-velocity", "W eulerian"]
Function = Callable[[Array, Array, Array], tuple[Array, Array, Array]]

_DIAGONAL = 1e-12


@dataclass(frozen=True, eq=False)
class Motion:
    """Velocities at the centres of cells.

    Attributes
    ----------
    velocity : ndarray, shape (3, n1, n2, n3)
        dx^i/dt along x, y, z.
    eulerian : ndarray, shape (3, n1, n2, n3)
        v^i along x, y, z; the same where there is no metric.
    lorentz : ndarray, shape (n1, n2, n3), or None
        W; None without a metric.
    u_t : ndarray, shape (n1, n2, n3), or None
        u^t = W / lapse; None without a metric.
    """

    velocity: Array
    eulerian: Array
    lorentz: Array | None
    u_t: Array | None


def motion(
    grid: Grid,
    stored: ArrayLike,
    kind: Kind = "coordinate",
    basis: Basis = "cartesian",
    geometry: Geometry | None = None,
    grid_velocity: Array | None = None,
) -> Motion:
    """Velocities from what a file holds.

    Parameters
    ----------
    grid : Grid
    stored : array_like, shape (3, n1, n2, n3)
        Unit of velocity; along coordinates that are angles, that over the length of a radian.
    kind : str
        One of the four above. The last two need a metric.
    basis : "coordinate", "physical" or "cartesian"
        Along dX/dq^i; along unit vectors of these directions, which in curved space needs coordinates at right
        angles; or along x, y, z, where nothing is relative to a moving grid.
    geometry : Geometry, optional
        At the centres of the cells of this grid; that of `FlatMetric` for special relativity.
    grid_velocity : ndarray, shape (3, n1, n2, n3), optional
        Of the grid's points along x, y, z, as `grid_velocity` gives it.

    Returns
    -------
    Motion

    Raises
    ------
    FieldError
        If a shape does not fit, a value is not finite, a velocity reaches that of light, or no velocity has the given
        u^i. The message counts the cells and says where the worst is.

    Notes
    -----
    Where a hole drags everything along (g_tt >= 0) two velocities share their u^i; the one of positive energy -u_t is
    taken.

    Examples
    --------
    >>> import fieldmover as fm
    >>> from fieldmover.conventions.metrics import FlatMetric, geometry
    >>> grid = fm.cartesian_grid([0, 1], [0, 1], [0, 1])
    >>> stored = np.array([0.75, 0.0, 0.0]).reshape(3, 1, 1, 1)
    >>> found = motion(grid, stored, "W eulerian", geometry=geometry(FlatMetric(), grid))
    >>> found.velocity[0].ravel(), found.lorentz.ravel()
    (array([0.6]), array([1.25]))
    """
    values = _checked(grid, stored)
    frame = _Frame.of(grid, kind, basis, geometry, grid_velocity)
    vector = frame.into_cartesian(values) / frame.light
    if kind == "coordinate":
        return frame.finished((vector + frame.shift) / frame.lapse)
    if geometry is None or kind == "eulerian":
        return frame.finished(vector)
    if kind == "W eulerian":
        lorentz = np.sqrt(1.0 + geometry.dot(vector, vector))
        return frame.finished(vector / lorentz, lorentz)
    u_t = _time_component(grid, geometry, frame.shift, vector)
    return frame.finished((vector / u_t + frame.shift) / frame.lapse, frame.lapse * u_t)


def stored_velocity(
    grid: Grid,
    velocity: ArrayLike,
    kind: Kind = "coordinate",
    basis: Basis = "cartesian",
    geometry: Geometry | None = None,
    grid_velocity: Array | None = None,
) -> Array:
    """What a file holds, from velocities dx^i/dt along x, y, z: the inverse of `motion`, with its arguments and errors.

    Examples
    --------
    >>> import fieldmover as fm
    >>> from fieldmover.conventions.metrics import KerrSchildMetric, geometry
    >>> grid = fm.spherical_grid([5, 7], [1.0, 1.2], [0, 1])
    >>> at_rest = np.zeros((3, 1, 1, 1))
    >>> hole = geometry(KerrSchildMetric(), grid)
    >>> stored_velocity(grid, at_rest, "eulerian", "coordinate", hole).ravel().round(6)  # 2 / r / sqrt(1 + 2 / r)
    array([0.288675, 0.      , 0.      ])
    """
    frame = _Frame.of(grid, kind, basis, geometry, grid_velocity)
    whole = frame.finished((_checked(grid, velocity) / frame.light + frame.rest_shift) / frame.lapse)
    vector = whole.eulerian / frame.light
    if kind in ("coordinate", "four-velocity"):
        vector = frame.lapse * vector - frame.shift
    if whole.lorentz is not None and kind in ("four-velocity", "W eulerian"):
        vector = vector * (whole.lorentz if kind == "W eulerian" else whole.lorentz / frame.lapse)
    return frame.from_cartesian(vector * frame.light)


def grid_velocity(grid: Grid, map_after: Callable[[float], Function], step: float) -> Array:
    """Velocity dX/dt of a grid's cell centres at fixed coordinates q, along x, y, z.

    Parameters
    ----------
    grid : Grid
        Now.
    map_after : callable
        ``map_after(s)`` is the map q -> (x, y, z) a time s later, also for negative s: `load_map` with parameters
        that change at given rates, say.
    step : float
        Length of time over which positions are compared: small beside that of any change. Central differences of
        order 4 (Fornberg 1988, *Generation of finite difference formulas on arbitrarily spaced grids*).

    Returns
    -------
    ndarray, shape (3, n1, n2, n3)

    Raises
    ------
    FieldError
        If the map at s = 0 is not that of the grid, a position is not finite, or the step is not positive.

    Examples
    --------
    >>> import fieldmover as fm
    >>> def turned(s):
    ...     return lambda R, phi, z: (R * np.cos(phi + 2.0 * s), R * np.sin(phi + 2.0 * s), z)
    >>> grid = fm.cylindrical_grid([1, 3], [-0.1, 0.1], [0, 1])
    >>> grid_velocity(grid, turned, 1e-3).ravel().round(9) + 0.0  # speed 2 R
    array([0., 4., 0.])
    """
    if not 0.0 < step < np.inf:
        raise FieldError(f"grid velocity: step {step}, expected a positive time")
    q1, q2, q3 = (centres_of(nodes) for nodes in grid.nodes)

    def positions(later: float) -> Array:
        found = map_after(later)(q1[:, None, None], q2[None, :, None], q3[None, None, :])
        return np.stack([np.broadcast_to(np.asarray(c, dtype=np.float64), grid.shape) for c in found])

    centres = grid.centres()
    gap = float(np.abs(positions(0.0) - centres).max())
    if not gap <= 1e-9 * float(np.abs(centres).max()):
        raise FieldError(f"grid velocity: the map now differs from the grid's by up to {gap:.3g}, expected the same")
    far = positions(2.0 * step) - positions(-2.0 * step)
    rate: Array = (8.0 * (positions(step) - positions(-step)) - far) / (12.0 * step)
    if not np.isfinite(rate).all():
        raise FieldError("grid velocity: the map gives positions that are not finite")
    return rate


@dataclass(frozen=True, eq=False)
class _Frame:
    """What the formulas need, along x, y, z and with c = 1."""

    grid: Grid
    basis: Basis
    geometry: Geometry | None
    scale: Array | None  # lengths of dX/dq^i in curved space
    lapse: Array
    shift: Array  # with the motion of the grid, where components are relative to it
    rest_shift: Array
    light: float

    @classmethod
    def of(cls, grid: Grid, kind: Kind, basis: Basis, geometry: Geometry | None, moving: Array | None) -> _Frame:
        if kind not in get_args(Kind):
            raise FieldError(f"velocity of kind {kind!r}, expected one of {', '.join(get_args(Kind))}")
        if basis not in get_args(Basis):
            raise FieldError(f"velocity in basis {basis!r}, expected one of {', '.join(get_args(Basis))}")
        if geometry is None and kind in ("four-velocity", "W eulerian"):
            raise FieldError(f"velocity of kind {kind!r} without a metric; expected one (flat for special relativity)")
        lapse, rest, light, scale = np.ones(grid.shape), np.zeros((3, *grid.shape)), 1.0, None
        if geometry is not None:
            if geometry.lapse.shape != grid.shape:
                raise FieldError(
                    f"metric at {geometry.lapse.shape} points, expected the {grid.shape} cells of the grid"
                )
            lapse, rest, light = geometry.lapse, geometry.shift, geometry.light
            if basis == "physical" and not geometry.is_flat():
                scale = _lengths(grid, geometry)
        shift = rest
        if moving is not None and basis != "cartesian":
            shift = rest + _checked(grid, moving) / light
        return cls(grid, basis, geometry, scale, lapse, shift, rest, light)

    def into_cartesian(self, values: Array) -> Array:
        if self.scale is None:
            return components.to_cartesian(self.grid, values, self.basis)
        return components.to_cartesian(self.grid, values / self.scale, "coordinate")

    def from_cartesian(self, vector: Array) -> Array:
        if self.scale is None:
            return components.from_cartesian(self.grid, vector, self.basis)
        return components.from_cartesian(self.grid, vector, "coordinate") * self.scale

    def finished(self, eulerian: Array, lorentz: Array | None = None) -> Motion:
        """All of a motion from v / c; that must be below 1, or W known, which has more digits where it is large."""
        velocity = (self.lapse * eulerian - self.rest_shift) * self.light
        if self.geometry is None:
            return Motion(velocity, eulerian, None, None)
        if lorentz is None:
            square = self.geometry.dot(eulerian, eulerian)
            if not (square < 1.0).all():
                place = [int(i) for i in np.unravel_index(int(np.argmax(square)), square.shape)]
                raise FieldError(
                    f"velocity: {int((~(square < 1.0)).sum())} cells move as fast as light or faster, the worst at "
                    f"index {place} ({_position(self.grid, place)}) with (v/c)^2 = {square[tuple(place)]:.6g}; "
                    "expected below 1"
                )
            lorentz = np.asarray(1.0 / np.sqrt(1.0 - square))
        return Motion(velocity, eulerian * self.light, lorentz, lorentz / self.lapse)


def _lengths(grid: Grid, geometry: Geometry) -> Array:
    """Proper lengths of dX/dq^i, which must be at right angles to each other."""
    gamma = geometry.in_coordinates(centre_jacobian(grid)).gamma
    lengths = np.sqrt(np.stack([gamma[i, i] for i in range(3)]))
    cosines = np.abs(np.stack([gamma[i, j] / (lengths[i] * lengths[j]) for i, j in ((0, 1), (0, 2), (1, 2))]))
    if cosines.max() > _DIAGONAL:
        raise FieldError(
            "velocity in basis 'physical': the coordinates of this metric are not at right angles (largest cosine "
            f"{cosines.max():.3g}), so that unit vectors are not settled; expected 'coordinate' or 'cartesian'"
        )
    return np.asarray(lengths)


def _time_component(grid: Grid, geometry: Geometry, shift: Array, u: Array) -> Array:
    """u^t of given u^i, from g_ab u^a u^b = -1: the root of a X^2 - 2 b X - c = 0 with sqrt(b^2 + a c) = -u_t."""
    a = geometry.lapse**2 - geometry.dot(shift, shift)
    b, c = geometry.dot(shift, u), 1.0 + geometry.dot(u, u)
    with np.errstate(invalid="ignore", divide="ignore"):
        root = np.sqrt(b**2 + a * c)
        found = np.where(b > 0, (b + root) / a, c / (root - b))
    bad = ~(np.isfinite(found) & (found > 0))
    if bad.any():
        place = [int(i) for i in np.argwhere(bad)[0]]
        raise FieldError(
            f"velocity: {int(bad.sum())} cells have u^i that belong to no motion slower than light, the first at index "
            f"{place} ({_position(grid, place)})"
        )
    return np.asarray(found)


def _checked(grid: Grid, values: ArrayLike) -> Array:
    array = np.asarray(values, dtype=np.float64)
    if array.shape != (3, *grid.shape):
        raise FieldError(f"velocity: shape {array.shape}, expected {(3, *grid.shape)}")
    bad = ~np.isfinite(array).all(axis=0)
    if bad.any():
        place = [int(i) for i in np.argwhere(bad)[0]]
        raise FieldError(
            f"velocity: not finite in {int(bad.sum())} cells, the first at index {place} ({_position(grid, place)})"
        )
    return array


def _position(grid: Grid, place: list[int]) -> str:
    names = zip(grid.map.names, grid.nodes, place, strict=True)
    return ", ".join(f"{name} = {centres_of(nodes)[i]:.6g}" for name, nodes, i in names)
