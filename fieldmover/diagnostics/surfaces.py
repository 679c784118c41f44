"""Magnetic flux through spheres, caps and discs that lie anywhere in a grid."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover.diagnostics.samples import FluxSpline
from fieldmover.diagnostics.solenoidal import with_potential
from fieldmover.errors import FieldError
from fieldmover.forms.fields import FaceFlux
from fieldmover.grids.grid import Grid
from fieldmover.interpolation.evaluate import PotentialSpline
from fieldmover.interpolation.locate import Locator, inside
from fieldmover.interpolation.uniform import split_uniform

Array = NDArray[np.float64]
Point = tuple[float, float, float]
Direction = Literal["x", "y", "z", "-x", "-y", "-z"]

_ORDER = 3
_FEWEST, _MOST = 48, 256  # quadrature points from the middle of a surface to its rim
_ON_RIM = 64  # points on a rim, per cell of the longest axis
_MOST_ON_RIM = 1 << 15


@dataclass(frozen=True)
class Surface:
    """A sphere, a cap of one, or a disc; made by `sphere`, `cap`, `hemisphere` and `disc`.

    Attributes
    ----------
    kind : {"sphere", "cap", "disc"}
    centre, normal : tuple of three float
        Cartesian; the normal has unit length. Flux counts outward, through a disc along the normal.
    radius : float
    angle : float
        Of a cap, radians from the normal; pi for a whole sphere.
    inner : float
        Radius of the hole in a disc.
    """

    kind: Literal["sphere", "cap", "disc"]
    centre: Point
    normal: Point
    radius: float
    angle: float = math.pi
    inner: float = 0.0

    def __str__(self) -> str:
        where = f"about ({', '.join(f'{c:g}' for c in self.centre)})"
        along = f"normal ({', '.join(f'{c:g}' for c in self.normal)})"
        if self.kind == "sphere":
            return f"sphere of radius {self.radius:g} {where}"
        if self.kind == "disc":
            size = f"radius {self.radius:g}" if self.inner == 0 else f"radii {self.inner:g} and {self.radius:g}"
            return f"disc of {size} {where}, {along}"
        if self.angle == math.pi / 2:
            return f"hemisphere of radius {self.radius:g} {where}, {along}"
        return f"cap of radius {self.radius:g} {where}, {along}, {math.degrees(self.angle):g} degrees to its rim"


@dataclass(frozen=True)
class SurfaceFlux:
    """Flux through a surface, unit B L^2.

    Attributes
    ----------
    net : float
        Integral of B.n.
    unsigned : float
        Integral of |B.n|.
    """

    net: float
    unsigned: float


def sphere(radius: float, centre: ArrayLike = (0.0, 0.0, 0.0)) -> Surface:
    """A sphere; its net flux is the magnetic charge in it.

    Raises
    ------
    FieldError
        If the radius is not positive.
    """
    return Surface("sphere", _point(centre), (0.0, 0.0, 1.0), _positive(radius, "radius"))


def cap(
    radius: float, angle: float, normal: Direction | ArrayLike = "z", centre: ArrayLike = (0.0, 0.0, 0.0)
) -> Surface:
    """The part of a sphere within an angle (radians) of a direction.

    Raises
    ------
    FieldError
        If the radius is not positive, the angle not between 0 and pi, or the normal has no direction.
    """
    if not 0 < angle < math.pi:
        raise FieldError(f"cap: angle {angle!r}, expected more than 0 and less than pi")
    return Surface("cap", _point(centre), _unit(normal), _positive(radius, "radius"), float(angle))


def hemisphere(radius: float, normal: Direction | ArrayLike = "z", centre: ArrayLike = (0.0, 0.0, 0.0)) -> Surface:
    """Half a sphere, round a direction.

    Raises
    ------
    FieldError
        As `cap`.

    Examples
    --------
    >>> print(hemisphere(2, normal="-x"))
    hemisphere of radius 2 about (0, 0, 0), normal (-1, 0, 0)
    """
    return cap(radius, math.pi / 2, normal, centre)


def disc(
    radius: float,
    normal: Direction | ArrayLike = "z",
    centre: ArrayLike = (0.0, 0.0, 0.0),
    inner: float = 0.0,
) -> Surface:
    """A flat disc, or the ring between two circles.

    Raises
    ------
    FieldError
        If the radius is not positive, the inner one not between 0 and it, or the normal has no direction.
    """
    if not 0 <= inner < _positive(radius, "radius"):
        raise FieldError(f"disc: inner radius {inner!r}, expected from 0 to less than the radius {radius!r}")
    return Surface("disc", _point(centre), _unit(normal), float(radius), inner=float(inner))


def surface_fluxes(flux: FaceFlux, surfaces: Mapping[str, Surface]) -> dict[str, SurfaceFlux]:
    """Net and unsigned flux through surfaces in a grid.

    Parameters
    ----------
    flux : FaceFlux
        On any grid; with divergence or without.
    surfaces : mapping of str to Surface
        Each lies wholly in the grid.

    Returns
    -------
    dict of str to SurfaceFlux

    Raises
    ------
    FieldError
        If a surface leaves the grid.

    Notes
    -----
    The net flux is the circulation of the spline of the vector potential round the rim (Stokes): it does not depend on
    the gauge, and surfaces with a common rim agree to round-off. What divergence the flux has is taken out first by
    the least change and its part added by quadrature, as is all of it where no potential exists. The unsigned flux is
    a quadrature of the spline of the fluxes, 2 to 3 digits where B.n changes sign.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> box = fm.cartesian_grid(*[np.linspace(-1, 1, 9)] * 3)
    >>> flux = fm.flux_from_function(box, lambda x, y, z: (0 * x, 0 * y, 1 + 0 * z))
    >>> found = surface_fluxes(flux, {"lid": disc(0.5), "ball": sphere(0.5)})
    >>> round(found["lid"].net / np.pi, 5), round(found["ball"].net, 5), round(found["ball"].unsigned / np.pi, 3)
    (0.25, 0.0, 0.5)
    """
    if not surfaces:
        return {}
    grid = flux.grid
    for surface in surfaces.values():
        check_inside(grid, surface)
    whole = FluxSpline(flux)
    mean, rest = split_uniform(flux)
    pot, left = with_potential(rest)
    charged = None if left is None else FluxSpline(left)
    spline = None if pot is None else PotentialSpline(pot, _ORDER)
    found = {}
    for name, surface in surfaces.items():
        x, areas = _points(grid, surface)
        through = np.einsum("in,in->n", whole.at(x), areas)
        if spline is None:
            net = float(through.sum())
        else:
            net = float(mean @ _area_vector(surface)) + _round_the_rim(spline, surface)
            if charged is not None:
                net += float(np.einsum("in,in->", charged.at(x), areas))
        found[name] = SurfaceFlux(net, max(float(np.abs(through).sum()), abs(net)))
    return found


def check_inside(grid: Grid, surface: Surface) -> None:
    """Make sure that a surface lies in a grid.

    Raises
    ------
    FieldError
        If it leaves the grid.
    """
    locator = Locator(grid)
    for x, _ in [_points(grid, surface), *_rim_points(grid, surface)]:
        out = ~inside(grid, locator.coordinates(x))
        if out.any():
            place = ", ".join(f"{c:.6g}" for c in x[:, np.argmax(out)])
            raise FieldError(f"{surface} leaves the grid, at ({place}) for one; expected a surface inside {grid!r}")


def _frame(surface: Surface) -> tuple[Array, Array, Array]:
    """Two unit vectors across the normal, and the normal: right-handed."""
    n = np.asarray(surface.normal)
    across = np.eye(3)[int(np.argmin(np.abs(n)))]
    e = np.cross(across, n)
    e /= np.sqrt(e @ e)
    return e, np.cross(n, e), n


def _points(grid: Grid, surface: Surface) -> tuple[Array, Array]:
    """Quadrature points of a surface and the vectors of area they stand for, shapes (3, N)."""
    n = int(np.clip(2 * max(grid.shape), _FEWEST, _MOST))
    s, weights = np.polynomial.legendre.leggauss(n)
    phi = (np.arange(2 * n) + 0.5) * np.pi / n
    e, f, normal = _frame(surface)
    round_it = (e[:, None] * np.cos(phi) + f[:, None] * np.sin(phi))[:, None, :]
    if surface.kind == "disc":  # even in the square of the radius
        low, high = surface.inner**2, surface.radius**2
        rho = np.sqrt(low + 0.5 * (1 + s) * (high - low))
        offset = rho[:, None] * round_it
        areas = normal[:, None, None] * (0.25 * weights[:, None] * (high - low) * np.pi / n) * np.ones(phi.size)
    else:  # even in the cosine
        low = -1.0 if surface.kind == "sphere" else math.cos(surface.angle)
        cosine = low + 0.5 * (1 + s) * (1 - low)
        out = cosine[:, None] * normal[:, None, None] + np.sqrt(1 - cosine**2)[:, None] * round_it
        offset = surface.radius * out
        areas = out * (0.5 * weights[:, None] * (1 - low) * surface.radius**2 * np.pi / n)
    x = np.asarray(surface.centre)[:, None, None] + offset
    return x.reshape(3, -1), areas.reshape(3, -1)


def _rims(surface: Surface) -> list[tuple[float, float, float]]:
    """Circles that bound a surface: radius, height of its plane above the centre, sense."""
    if surface.kind == "sphere":
        return []
    if surface.kind == "cap":
        return [(surface.radius * math.sin(surface.angle), surface.radius * math.cos(surface.angle), 1.0)]
    outer = [(surface.radius, 0.0, 1.0)]
    return outer if surface.inner == 0 else [*outer, (surface.inner, 0.0, -1.0)]


def _area_vector(surface: Surface) -> Array:
    """What the flux of a uniform field is the product with."""
    return np.asarray(surface.normal) * sum(sense * math.pi * r * r for r, _, sense in _rims(surface))


def _rim_points(grid: Grid, surface: Surface) -> list[tuple[Array, Array]]:
    """Points on each rim and the steps they stand for, shapes (3, M)."""
    m = min(_ON_RIM * max(grid.shape), _MOST_ON_RIM)
    phi = 2.0 * np.pi * (np.arange(m) + 0.5) / m
    e, f, normal = _frame(surface)
    found = []
    for radius, height, sense in _rims(surface):
        middle = np.asarray(surface.centre) + height * normal
        x = middle[:, None] + radius * (e[:, None] * np.cos(phi) + f[:, None] * np.sin(phi))
        step = sense * radius * 2.0 * np.pi / m
        found.append((x, step * (f[:, None] * np.cos(phi) - e[:, None] * np.sin(phi))))
    return found


def _round_the_rim(spline: PotentialSpline, surface: Surface) -> float:
    """Circulation of the potential round the rim."""
    total, locator = 0.0, Locator(spline.grid)
    for x, steps in _rim_points(spline.grid, surface):
        q, dq = locator.pull_back(x, steps[:, None, :])
        total += float((spline.covectors(q) * dq[:, 0]).sum())
    return total


def _point(values: ArrayLike) -> Point:
    array = np.asarray(values, dtype=np.float64)
    if array.shape != (3,) or not np.isfinite(array).all():
        raise FieldError(f"surface: position {values!r}, expected three finite numbers")
    x, y, z = array.tolist()
    return x, y, z


def _unit(direction: Direction | ArrayLike) -> Point:
    if isinstance(direction, str):
        axis = "xyz".find(direction.lstrip("-"))
        if axis < 0 or direction not in ("x", "y", "z", "-x", "-y", "-z"):
            raise FieldError(f"surface: normal {direction!r}, expected x, y, z, -x, -y, -z or three numbers")
        return _point((-1.0 if direction[0] == "-" else 1.0) * np.eye(3)[axis] + 0.0)
    vector = np.asarray(_point(direction))
    length = math.sqrt(float(vector @ vector))
    if length == 0:
        raise FieldError(f"surface: normal {direction!r}, expected a vector that is not zero")
    return _point(vector / length + 0.0)  # no -0


def _positive(value: float, what: str) -> float:
    if not 0 < value < math.inf:
        raise FieldError(f"surface: {what} {value!r}, expected a positive number")
    return float(value)
