"""Warped maps: one from a Python file, and one that crowds cells round two bodies."""

from __future__ import annotations

import importlib.util
import inspect
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fieldmover.compute import slabs
from fieldmover.errors import GridError, JobError
from fieldmover.grids.axes import angle_with_seam, centres_of, checked_nodes, polar_angle
from fieldmover.grids.grid import Grid, warped_grid
from fieldmover.grids.maps import Triple

Array = NDArray[np.float64]
Function = Callable[[Array, Array, Array], Triple]

_POINTS = 1 << 17  # cells at a time


def load_map(path: str | Path, name: str, parameters: Mapping[str, Any] | None = None) -> Function:
    """A map from a Python file, with its parameters filled in.

    Parameters
    ----------
    path : str or Path
        The file. It is run, so it must be one you trust.
    name : str
        Of a function in it, ``name(q1, q2, q3, **parameters) -> (x, y, z)``.
    parameters : mapping, optional
        Keyword arguments of the function: the phase of an orbit, say.

    Returns
    -------
    callable
        ``to_cartesian(q1, q2, q3)`` for `warped_grid`.

    Raises
    ------
    JobError
        If there is no such file or function, the file cannot be run, or a parameter is missing or unknown.

    Examples
    --------
    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     file = Path(folder) / "warp.py"
    ...     _ = file.write_text("def shear(x, y, z, rate=0.0): return x + rate * y, y, z")
    ...     load_map(file, "shear", {"rate": 0.5})(1.0, 2.0, 3.0)
    (2.0, 2.0, 3.0)
    """
    file = Path(path)
    if not file.is_file():
        raise JobError(f"map: there is no file {file}")
    spec = importlib.util.spec_from_file_location(f"map_{file.stem}", file)
    if spec is None or spec.loader is None:
        raise JobError(f"map: {file} is not a Python file (expected a name that ends in .py)")
    module = importlib.util.module_from_spec(spec)
    try:
        spec.loader.exec_module(module)
    except Exception as error:
        raise JobError(f"map: {file} cannot be run: {type(error).__name__}: {error}") from error
    function = getattr(module, name, None)
    if not callable(function):
        functions = [n for n, value in vars(module).items() if inspect.isfunction(value)]
        raise JobError(f"map: {file} holds no function {name!r}; it holds {', '.join(functions) or 'none'}")
    given = dict(parameters or {})
    try:
        inspect.signature(function).bind(0.0, 0.0, 0.0, **given)
    except TypeError as error:
        raise JobError(
            f"map: {name} in {file} cannot be called with (q1, q2, q3) and the parameters "
            f"{', '.join(given) or 'none'}: {error}"
        ) from None
    return partial(function, **given)


@dataclass(frozen=True)
class CrowdedMap:
    """Spherical coordinates (r, theta, phi) drawn towards two bodies in the plane theta = pi/2.

    With n the direction of a point and m that of a body, n moves by strength x E (m - (n.m) n) on the unit sphere and
    log r by strength x E log(r_body / r), where E = exp(-(1 - n.m) / width^2 - log(r / r_body)^2 / (2 width^2)). Both
    are smooth functions of position, so poles and seam stay smooth. At a body alone cells are smaller by the factor
    1 - strength in each direction; a width or two away they are larger by up to a half, far away they are as before.

    Parameters
    ----------
    radii : tuple of two float
        Distances of the bodies from the origin.
    phase : float
        Azimuth of the first body, radians; the second is opposite.
    strength : float
        Below 1: by how much cells at a body are smaller.
    width : float
        Size of the crowded region, in radii of the body's orbit.
    """

    radii: tuple[float, float]
    phase: float
    strength: float
    width: float

    def __call__(self, r: Array, theta: Array, phi: Array) -> Triple:
        sine = np.sin(theta)
        n = np.broadcast_arrays(sine * np.cos(phi), sine * np.sin(phi), np.cos(theta), r)[:3]  # unit vectors
        direction = [np.array(c) for c in n]
        log_r = np.array(np.broadcast_to(np.log(r), direction[0].shape))
        for radius, side in zip(self.radii, (1.0, -1.0), strict=True):
            mx, my = side * np.cos(self.phase), side * np.sin(self.phase)
            along = n[0] * mx + n[1] * my
            away = np.log(r / radius)
            pull = self.strength * np.exp(-((1.0 - along) + 0.5 * away**2) / self.width**2)
            log_r -= pull * away
            for c, m in enumerate((mx, my, 0.0)):
                direction[c] += pull * (m - along * n[c])
        scale = np.exp(log_r) / np.sqrt(sum(c**2 for c in direction))
        return direction[0] * scale, direction[1] * scale, direction[2] * scale


def crowded_map(
    separation: float, phase: float = 0.0, strength: float = 0.5, width: float = 0.4, share: float = 0.5
) -> CrowdedMap:
    """Map of spherical coordinates that crowds cells round two bodies.

    Parameters
    ----------
    separation : float
        Distance between the bodies, which lie on opposite sides of the origin in the plane theta = pi/2.
    phase : float
        Azimuth of the first body, radians. It follows an orbit as a parameter of each snapshot.
    strength : float
        In [0, 1): at a body cells are smaller by about the factor 1 - strength in each direction.
    width : float
        Size of the crowded region in units of the distance of the body from the origin.
    share : float
        In (0, 1): distance of the first body from the origin, in parts of the separation. 1/2 for equal masses.

    Returns
    -------
    CrowdedMap
        A callable for `warped_grid`; `crowded_grid` is shorter.

    Raises
    ------
    GridError
        If a parameter leaves its range.

    Examples
    --------
    >>> to_cartesian = crowded_map(2.0)
    >>> [float(c.round(12)) for c in to_cartesian(np.array(1.0), np.array(np.pi / 2), np.array(0.0))]
    [1.0, 0.0, 0.0]
    """
    for name, value, low, high in (
        ("separation", separation, 0.0, np.inf),
        ("width", width, 0.0, np.inf),
        ("share", share, 0.0, 1.0),
    ):
        if not low < value < high:
            raise GridError(f"{name}: {value}, expected more than {low:g} and less than {high:g}")
    if not 0.0 <= strength < 1.0:
        raise GridError(f"strength: {strength}, expected at least 0 and less than 1 (cells of no size)")
    if not np.isfinite(phase):
        raise GridError(f"phase: {phase}, expected a finite angle in radians")
    return CrowdedMap((share * separation, (1.0 - share) * separation), phase, strength, width)


def crowded_grid(
    r: ArrayLike,
    theta: ArrayLike,
    phi: ArrayLike,
    separation: float,
    phase: float = 0.0,
    strength: float = 0.5,
    width: float = 0.4,
    share: float = 0.5,
) -> Grid:
    """Spherical grid with its cells crowded round two bodies.

    Parameters
    ----------
    r, theta, phi : array_like, 1-D
        As for `spherical_grid`; poles and seam are recognised.
    separation, phase, strength, width, share
        As for `crowded_map`.

    Returns
    -------
    Grid
        Of kind "warped".

    Raises
    ------
    GridError
        If nodes or parameters are bad, or the map turns a cell inside out; `least_jacobian` tells how near it is.

    Examples
    --------
    >>> import fieldmover as fm
    >>> nodes = np.geomspace(0.3, 3, 17), np.linspace(0, np.pi, 17), np.linspace(0, 2 * np.pi, 33)
    >>> grid = crowded_grid(*nodes, separation=2.0)
    >>> grid.poles, grid.periodic
    ((None, 'both', None), (False, False, True))
    >>> smallest, _, _ = least_jacobian(grid, reference=fm.spherical_grid(*nodes))
    >>> round(smallest, 2)  # cells at the bodies are smaller by this factor
    0.16
    """
    polar, poles = polar_angle(theta, "theta")
    azimuth, seam = angle_with_seam(phi, "phi")
    radius = checked_nodes(r, "r")
    if radius[0] <= 0:
        raise GridError(f"nodes of r: they begin at {radius[0]:.17g}, expected r > 0")
    to_cartesian = crowded_map(separation, phase, strength, width, share)
    return warped_grid(radius, polar, azimuth, to_cartesian, (False, False, seam), (None, poles, None))


def least_jacobian(grid: Grid, reference: Grid | None = None) -> tuple[float, tuple[int, int, int], Array]:
    """How near a map is to not being one-to-one.

    Parameters
    ----------
    grid : Grid
    reference : Grid, optional
        Grid with the same nodes whose Jacobian is divided by: the spherical grid that a map crowds, say.

    Returns
    -------
    value : float
        The least Jacobian det(dx/dq) at a cell centre, or its least ratio to that of the reference. 0 or less where
        cells fold.
    cell : tuple of three int
        Where.
    position : ndarray, shape (3,)
        Cartesian position of that cell's centre.

    Raises
    ------
    GridError
        If the reference has other nodes.

    Examples
    --------
    >>> from fieldmover import cylindrical_grid
    >>> value, cell, _ = least_jacobian(cylindrical_grid([1, 2, 3], np.linspace(0, 1, 5), [0, 1]))
    >>> value, cell
    (1.5, (0, 0, 0))
    """
    if reference is not None and not all(
        a.shape == b.shape and np.allclose(a, b, rtol=1e-12) for a, b in zip(grid.nodes, reference.nodes, strict=True)
    ):
        raise GridError(f"reference: {reference!r}, expected the nodes of {grid!r}")
    q1, q2, q3 = (centres_of(nodes) for nodes in grid.nodes)
    parts = []
    for rows in slabs(q1.size, max(1, _POINTS // (q2.size * q3.size))):
        q = (q1[rows, None, None], q2[None, :, None], q3[None, None, :])
        det = np.linalg.det(np.moveaxis(grid.map.jacobian(*q), (0, 1), (-2, -1)))
        if reference is not None:
            det = det / np.linalg.det(np.moveaxis(reference.map.jacobian(*q), (0, 1), (-2, -1)))
        parts.append(np.broadcast_to(det, (rows.stop - rows.start, q2.size, q3.size)))
    values = np.concatenate(parts)
    i, j, k = (int(c) for c in np.unravel_index(int(np.argmin(values)), values.shape))
    position = np.stack(grid.map.to_cartesian(q1[i : i + 1], q2[j : j + 1], q3[k : k + 1]))[:, 0]
    return float(values[i, j, k]), (i, j, k), position
