"""Curved space: lapse, shift and spatial metric, from closed forms or from arrays.

The line element is ds^2 = -(lapse c dt)^2 + gamma_ij (dx^i + shift^i c dt)(dx^j + shift^j c dt) (Arnowitt, Deser &
Misner 1962, *The dynamics of general relativity*). A `Geometry` holds these at the centres of cells in components
along the Cartesian(-like) axes x, y, z of the grid's positions; `in_coordinates` has them along the grid's own.

Fluxes, circulations and contents need none of this. A field B^i is a flux density over sqrt(gamma), its energy density
half of gamma_ij B^i B^j; velocities need the lapse and the shift too.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import product
from typing import Literal, Protocol

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover.errors import DataError
from fieldmover.grids.axes import centres_of
from fieldmover.grids.grid import Grid, quadrature
from fieldmover.grids.kerr import KerrSchildMap, spheroidal_radius
from fieldmover.grids.placement import PlacedMap

Array = NDArray[np.float64]

_GAUSS = tuple((float(x), float(w)) for x, w in zip(*np.polynomial.legendre.leggauss(3), strict=True))


@dataclass(frozen=True, eq=False)
class Geometry:
    """Lapse, shift and spatial metric at points.

    Attributes
    ----------
    lapse : ndarray, shape (...)
    shift : ndarray, shape (3, ...)
        Contravariant, in units of the speed of light.
    gamma : ndarray, shape (3, 3, ...)
        Covariant spatial metric.
    light : float
        Speed of light in the unit of velocities.
    """

    lapse: Array
    shift: Array
    gamma: Array
    light: float = 1.0

    @property
    def sqrt_gamma(self) -> Array:
        """Root of the determinant of gamma, shape (...)."""
        return np.asarray(np.sqrt(_determinant(self.gamma)))

    def dot(self, a: Array, b: Array) -> Array:
        """gamma_ij a^i b^j of two vectors of shape (3, ...)."""
        return np.asarray(np.einsum("ij...,i...,j...->...", self.gamma, a, b))

    def is_flat(self) -> bool:
        """Whether gamma is that of x, y, z in flat space everywhere, to round-off."""
        unit = np.eye(3).reshape(3, 3, *(1,) * (self.gamma.ndim - 2))
        return bool(np.abs(self.gamma - unit).max() < 1e-13)

    def in_coordinates(self, jacobian: Array) -> Geometry:
        """The same along other coordinates q.

        Parameters
        ----------
        jacobian : ndarray, shape (3, 3, ...)
            dx^i / dq^j of the present coordinates x.
        """
        gamma = np.einsum("ki...,kl...,lj...->ij...", jacobian, self.gamma, jacobian)
        return replace(self, shift=_solved(jacobian, self.shift), gamma=gamma)


class Metric(Protocol):
    """A metric in closed form, in Cartesian(-like) coordinates centred on the origin, the spin along z."""

    def at(self, x: Array, y: Array, z: Array) -> Geometry:
        """Lapse, shift and gamma at points."""
        ...

    def sqrt_gamma(self, x: Array, y: Array, z: Array) -> Array:
        """Root of the determinant of gamma alone."""
        ...

    def check(self, grid: Grid) -> None:
        """Raise `DataError` if the grid is not one of the charts of this metric."""
        ...


@dataclass(frozen=True)
class FlatMetric:
    """Special relativity."""

    light: float = 1.0

    def at(self, x: Array, y: Array, z: Array) -> Geometry:
        shape = np.broadcast_shapes(np.shape(x), np.shape(y), np.shape(z))
        gamma = np.zeros((3, 3, *shape))
        gamma[0, 0] = gamma[1, 1] = gamma[2, 2] = 1.0
        return Geometry(np.ones(shape), np.zeros((3, *shape)), gamma, self.light)

    def sqrt_gamma(self, x: Array, y: Array, z: Array) -> Array:
        return np.ones(np.broadcast_shapes(np.shape(x), np.shape(y), np.shape(z)))

    def check(self, grid: Grid) -> None:
        """Every grid will do."""


@dataclass(frozen=True)
class KerrSchildMetric:
    """A hole in ingoing Kerr-Schild coordinates (Kerr 1963; in this form from memory).

    g = eta + 2 H l l with H = M r^3 / (r^4 + a^2 z^2). Regular at the horizon, r = M + sqrt(M^2 - a^2), and down to
    the ring r = 0.

    Attributes
    ----------
    mass : float
        G M / c^2, a length.
    spin : float
        a = J / (M c), a length of at most that mass; along +z. 0 is Schwarzschild's metric.
    chart : "cartesian" or "spheroidal"
        What the positions of a grid are. With "spheroidal" only `kerr_schild_grid` of the same spin will do, or
        `spherical_grid` for spin 0; with "cartesian" any grid whose positions are the Cartesian-like coordinates.
    light : float
        Speed of light in the unit of velocities.
    """

    mass: float = 1.0
    spin: float = 0.0
    chart: Literal["cartesian", "spheroidal"] = "cartesian"
    light: float = 1.0

    def __post_init__(self) -> None:
        if not 0.0 < self.mass < np.inf:
            raise DataError(f"metric: mass {self.mass}, expected a positive length (G M / c^2)")
        if not abs(self.spin) <= self.mass:
            raise DataError(
                f"metric: spin {self.spin}, expected a length of at most the mass, {self.mass} (a ring without horizon)"
            )
        if self.chart not in ("cartesian", "spheroidal"):
            raise DataError(f"metric: chart {self.chart!r}, expected 'cartesian' or 'spheroidal'")

    @property
    def horizon(self) -> float:
        """Coordinate r of the outer horizon."""
        return float(self.mass + np.sqrt(self.mass**2 - self.spin**2))

    def at(self, x: Array, y: Array, z: Array) -> Geometry:
        x, y, z = (np.asarray(c, dtype=np.float64) for c in np.broadcast_arrays(x, y, z))
        r, a = spheroidal_radius(x, y, z, self.spin), self.spin
        twice_h = self._twice_h(r, z)
        with np.errstate(divide="ignore", invalid="ignore"):
            null = np.stack([(r * x + a * y) / (r**2 + a**2), (r * y - a * x) / (r**2 + a**2), z / r])
        gamma = twice_h * null[:, None] * null[None]
        for i in range(3):
            gamma[i, i] += 1.0
        lapse = 1.0 / np.sqrt(1.0 + twice_h)
        return Geometry(lapse, twice_h * lapse**2 * null, gamma, self.light)

    def sqrt_gamma(self, x: Array, y: Array, z: Array) -> Array:
        return np.asarray(np.sqrt(1.0 + self._twice_h(spheroidal_radius(x, y, z, self.spin), z)))

    def _twice_h(self, r: Array, z: Array) -> Array:
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.asarray(2.0 * self.mass * r / (r**2 + (self.spin * z / r) ** 2))

    def check(self, grid: Grid) -> None:
        if self.chart == "cartesian":
            return
        fits = grid.kind == "spherical" if self.spin == 0 else False
        if isinstance(grid.map, KerrSchildMap):
            fits = abs(grid.map.spin - self.spin) <= 1e-12 * self.mass
            found = f"kerr_schild_grid of spin {grid.map.spin}"
        elif isinstance(grid.map, PlacedMap):
            fits, found = False, f"a {grid.kind} grid that is moved or turned"
        else:
            found = f"a {grid.kind} grid"
        if not fits:
            expected = f"kerr_schild_grid of spin {self.spin}" + (" or spherical_grid" if self.spin == 0 else "")
            raise DataError(f"metric: spheroidal Kerr-Schild coordinates on {found}, expected {expected}")


def named_metric(
    name: str, mass: float = 1.0, spin: float = 0.0, chart: str = "cartesian", light: float = 1.0
) -> FlatMetric | KerrSchildMetric:
    """The metric of a job: "flat", "schwarzschild" or "kerr", the last two in Kerr-Schild form.

    Parameters
    ----------
    name : str
    mass, spin : float
        Lengths: G M / c^2, and J / (M c) for "kerr".
    chart : "cartesian" or "spheroidal"
        As `KerrSchildMetric`.
    light : float
        Speed of light in the unit of velocities.

    Raises
    ------
    DataError
        If the name is unknown, or a parameter does not go with it.

    Examples
    --------
    >>> round(named_metric("kerr", spin=0.9).horizon, 6)
    1.43589
    """
    if name == "flat":
        return FlatMetric(light)
    if name not in ("schwarzschild", "kerr"):
        raise DataError(f"metric: {name!r}, expected flat, schwarzschild or kerr")
    if name == "schwarzschild" and spin:
        raise DataError(f"metric: schwarzschild with spin {spin}, expected kerr")
    return KerrSchildMetric(mass, spin, chart, light)  # type: ignore[arg-type]  # checked by the class


def geometry(metric: Metric, grid: Grid) -> Geometry:
    """A metric at the centres of cells, along x, y, z.

    Raises
    ------
    DataError
        If the grid is no chart of the metric, or the metric is singular at a centre.

    Examples
    --------
    >>> from fieldmover import spherical_grid
    >>> grid = spherical_grid([5, 7], [1, 2], [0, 1])
    >>> found = geometry(KerrSchildMetric(mass=1.0), grid)
    >>> round(float(found.lapse[0, 0, 0] ** -2), 12)  # 1 + 2 / r
    1.333333333333
    """
    metric.check(grid)
    return _sound(metric.at(*grid.centres()), grid)


def geometry_from_arrays(
    grid: Grid,
    lapse: ArrayLike | None = None,
    shift: ArrayLike | None = None,
    gamma: ArrayLike | None = None,
    light: float = 1.0,
) -> Geometry:
    """A metric stored in the coordinates of the grid, at the centres of cells; the result is along x, y, z.

    Parameters
    ----------
    grid : Grid
    lapse : array_like, shape (n1, n2, n3), optional
        1 where it is left out.
    shift : array_like, shape (3, n1, n2, n3), optional
        Contravariant components along the grid's coordinates, in units of the speed of light; 0 where left out.
    gamma : array_like, shape (6, n1, n2, n3), optional
        Covariant components 11, 12, 13, 22, 23, 33; flat space where left out.
    light : float
        Speed of light in the unit of velocities.

    Raises
    ------
    DataError
        If a shape does not fit the grid, a value is not finite, a lapse is not positive, or gamma is not positive
        definite. The message says how many cells are bad, and where the first is.

    Examples
    --------
    >>> from fieldmover import spherical_grid
    >>> grid = spherical_grid([1, 3], [1.0, 2.0], [0, 1])
    >>> gamma = np.array([3.0, 0, 0, 4, 0, 4 * np.sin(1.5) ** 2]).reshape(6, 1, 1, 1)
    >>> geometry_from_arrays(grid, gamma=gamma).sqrt_gamma.ravel().round(12)
    array([1.73205081])
    """
    shape, jacobian = grid.shape, centre_jacobian(grid)
    stretched = _checked("lapse", np.ones(shape) if lapse is None else lapse, shape)
    moved = _checked("shift", np.zeros((3, *shape)) if shift is None else shift, (3, *shape))
    if gamma is None:
        flat = FlatMetric(light).at(*grid.centres())
        return _sound(Geometry(stretched, np.einsum("ij...,j...->i...", jacobian, moved), flat.gamma, light), grid)
    six = _checked("gamma", gamma, (6, *shape))
    full = np.stack([six[[0, 1, 2]], six[[1, 3, 4]], six[[2, 4, 5]]])
    _sound(Geometry(stretched, moved, full, light), grid)
    return Geometry(stretched, moved, full, light).in_coordinates(_inverse(jacobian))


def centre_jacobian(grid: Grid, rows: slice = slice(None)) -> Array:
    """dx^i / dq^j at the centres of cells, shape (3, 3, n1, n2, n3), or of some rows along axis 1."""
    q1, q2, q3 = (centres_of(nodes) for nodes in grid.nodes)
    tangents = grid.map.jacobian(q1[rows, None, None], q2[None, :, None], q3[None, None, :])
    return np.asarray(np.broadcast_to(tangents, (3, 3, q1[rows].size, q2.size, q3.size)))


def volume_elements(metric: Metric, grid: Grid) -> Array:
    """Proper volumes of cells: integrals of sqrt(gamma), shape (n1, n2, n3), by 3 x 3 x 3 Gauss points.

    Raises
    ------
    DataError
        As `geometry`.

    Examples
    --------
    >>> from fieldmover import cartesian_grid
    >>> volume_elements(FlatMetric(), cartesian_grid([0, 2], [0, 1], [0, 1])).ravel().round(12)
    array([2.])
    """
    return _integrated(metric, grid, [0, 1, 2], np.zeros(grid.shape))


def face_elements(metric: Metric, grid: Grid) -> tuple[Array, Array, Array]:
    """Integrals of sqrt(gamma) dq dq over faces normal to axes 1, 2, 3: what a stored B^i is multiplied by.

    sqrt(gamma) is that of the grid's own coordinates, so these are areas only where the coordinate is a length. By
    3 x 3 Gauss points; 0 on faces that a pole collapses.

    Raises
    ------
    DataError
        As `geometry`.
    """
    parts = []
    for axis in range(3):
        along = [d for d in range(3) if d != axis]
        part = _integrated(metric, grid, along, np.zeros(grid.face_shape(axis)))
        for end in grid.pole_ends(axis):
            part[tuple(end if d == axis else slice(None) for d in range(3))] = 0.0
        parts.append(part)
    return parts[0], parts[1], parts[2]


def _integrated(metric: Metric, grid: Grid, along: list[int], out: Array) -> Array:
    metric.check(grid)
    for rows, q, weight in quadrature(grid, along, list(product(_GAUSS, repeat=len(along)))):
        at = (q[0][:, None, None], q[1][None, :, None], q[2][None, None, :])
        density = metric.sqrt_gamma(*grid.map.to_cartesian(*at))
        out[rows] += density * _determinant(grid.map.jacobian(*at)) * weight
    if not np.isfinite(out).all():
        raise DataError(f"metric: singular within the grid, {_located(~np.isfinite(out))}; {_SINGULAR}")
    return out


_SINGULAR = "expected a grid that leaves out the ring r = 0 of the hole"


def _sound(found: Geometry, grid: Grid) -> Geometry:
    """Refuse a metric that is singular or not positive definite; the leading minors tell (Sylvester)."""
    finite = np.isfinite(found.lapse) & np.isfinite(found.shift).all(axis=0) & np.isfinite(found.gamma).all(axis=(0, 1))
    if not finite.all():
        raise DataError(f"metric: not finite {_located(~finite, grid)}; {_SINGULAR}")
    if not (found.lapse > 0).all():
        raise DataError(f"metric: lapse not positive {_located(~(found.lapse > 0), grid)}, expected above 0")
    g = found.gamma
    positive = (g[0, 0] > 0) & (g[0, 0] * g[1, 1] - g[0, 1] ** 2 > 0) & (_determinant(g) > 0)
    if not positive.all():
        raise DataError(
            f"metric: gamma not positive definite {_located(~positive, grid)}, expected a spatial metric "
            "(components 11, 12, 13, 22, 23, 33)"
        )
    return found


def _located(bad: NDArray[np.bool_], grid: Grid | None = None) -> str:
    place = [int(i) for i in np.argwhere(bad)[0]]
    at = "" if grid is None else f" (x, y, z = {', '.join(f'{c[tuple(place)]:.6g}' for c in grid.centres())})"
    return f"in {int(bad.sum())} cells, the first {place}{at}"


def _checked(name: str, values: ArrayLike, shape: tuple[int, ...]) -> Array:
    array = np.asarray(values, dtype=np.float64)
    if array.shape != shape:
        raise DataError(f"metric: {name} of shape {array.shape}, expected {shape} for this grid")
    return array


def _determinant(m: Array) -> Array:
    return np.asarray(
        m[0, 0] * (m[1, 1] * m[2, 2] - m[1, 2] * m[2, 1])
        - m[0, 1] * (m[1, 0] * m[2, 2] - m[1, 2] * m[2, 0])
        + m[0, 2] * (m[1, 0] * m[2, 1] - m[1, 1] * m[2, 0])
    )


def _inverse(m: Array) -> Array:
    return np.asarray(np.moveaxis(np.linalg.inv(np.moveaxis(m, (0, 1), (-2, -1))), (-2, -1), (0, 1)))


def _solved(m: Array, vector: Array) -> Array:
    return np.asarray(np.einsum("ij...,j...->i...", _inverse(m), vector))
