"""Magnetic energy of fluxes and of cell-centred fields: by cell, by region, by shell, by wave number.

All energies are in Heaviside-Lorentz form, half the integral of B^2, unit B^2 L^3.
"""

from __future__ import annotations

import numpy as np
import scipy.fft
from numpy.typing import ArrayLike, NDArray

from fieldmover import compute
from fieldmover.diagnostics.cells import Mask, cell_slabs, cell_weights, checked_mask, slab_energies
from fieldmover.diagnostics.regions import distance
from fieldmover.errors import FieldError
from fieldmover.forms.fields import FaceFlux
from fieldmover.grids.grid import Grid

Array = NDArray[np.float64]


def cell_energies(flux: FaceFlux) -> Array:
    """Magnetic energy of every cell.

    On Cartesian, cylindrical and spherical grids a cell gets half the sum of w F^2 over its faces, w = dual
    length / area, of which a face between two cells gives each the part of its dual length that lies inside;
    so the sum over all cells is `forms.measures.energy`. Those weights hold where coordinate surfaces cross
    at right angles. On other grids the energy is that of the mean field of the cell (`mean_field`), with its
    full metric.

    Parameters
    ----------
    flux : FaceFlux
        Unit B L^2.

    Returns
    -------
    ndarray, shape (n1, n2, n3)
        Unit B^2 L^3. Second order in the cell size.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> grid = fm.cartesian_grid([0, 1, 2], [0, 1], [0, 1])
    >>> flux = fm.flux_from_function(grid, lambda x, y, z: (0 * x, 0 * y, 2 + 0 * z))
    >>> cell_energies(flux).ravel().round(12)
    array([2., 2.])
    """
    weights = cell_weights(flux.grid)
    out = np.empty(flux.grid.shape)

    def work(rows: slice) -> None:
        out[rows] = slab_energies(flux, weights, rows)[0].sum(axis=0)

    compute.for_each(work, cell_slabs(flux.grid))
    return out


def energy_in(flux: FaceFlux, where: Mask) -> float:
    """Magnetic energy of the cells that a mask picks: a region, or what a source covers.

    Parameters
    ----------
    flux : FaceFlux
    where : bool ndarray, shape (n1, n2, n3)

    Returns
    -------
    float
        Unit B^2 L^3.

    Raises
    ------
    FieldError
        If the mask does not fit the grid.

    Examples
    --------
    >>> import fieldmover as fm
    >>> grid = fm.cartesian_grid([0, 1, 2], [0, 1], [0, 1])
    >>> flux = fm.flux_from_function(grid, lambda x, y, z: (0 * x, 0 * y, 2 + 0 * z))
    >>> from fieldmover.diagnostics import box_cells
    >>> round(energy_in(flux, box_cells(grid, (0, 0, 0), (1, 1, 1))), 12)
    2.0
    """
    return float(cell_energies(flux)[checked_mask(flux.grid, where, "where")].sum())


def energy_by_shell(flux: FaceFlux, radii: ArrayLike, centre: ArrayLike = (0.0, 0.0, 0.0)) -> Array:
    """Magnetic energy between spheres.

    Parameters
    ----------
    flux : FaceFlux
    radii : array_like, shape (m + 1,)
        Increasing, unit L. A cell belongs to the shell its centre lies in, lower bound included.
    centre : array_like, shape (3,)
        Cartesian position.

    Returns
    -------
    ndarray, shape (m,)
        Unit B^2 L^3.

    Raises
    ------
    FieldError
        If the radii do not increase.

    Examples
    --------
    >>> import fieldmover as fm
    >>> grid = fm.cartesian_grid([0, 1, 2], [0, 1], [0, 1])
    >>> flux = fm.flux_from_function(grid, lambda x, y, z: (0 * x, 0 * y, 2 + 0 * z))
    >>> energy_by_shell(flux, [0, 1, 2]).round(12)
    array([2., 2.])
    """
    edges = np.asarray(radii, dtype=np.float64)
    if edges.ndim != 1 or edges.size < 2 or not (np.diff(edges) > 0).all():
        raise FieldError(f"radii of shells: {edges.tolist()}, expected two or more, increasing")
    shell = np.searchsorted(edges, distance(flux.grid, centre), side="right").ravel()
    sums = np.bincount(shell, weights=cell_energies(flux).ravel(), minlength=edges.size + 1)
    return np.asarray(sums[1 : edges.size])


def energy_of_cells(grid: Grid, b: Array, where: Mask | None = None) -> float:
    """Magnetic energy of a cell-centred field.

    Parameters
    ----------
    grid : Grid
    b : ndarray, shape (3, n1, n2, n3)
        Cartesian or orthonormal components, unit B.
    where : bool ndarray, shape (n1, n2, n3), optional
        Cells to count; all by default.

    Returns
    -------
    float
        Half the sum of B^2 times the cell volume, unit B^2 L^3.

    Raises
    ------
    FieldError
        If a shape does not fit the grid.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> energy_of_cells(fm.cartesian_grid([0, 1, 3], [0, 1], [0, 1]), np.ones((3, 2, 1, 1)))
    4.5
    """
    energies = 0.5 * np.einsum("i...,i...", _vectors(grid, b), b) * grid.cell_volumes()
    return float(energies.sum() if where is None else energies[checked_mask(grid, where, "where")].sum())


def power_spectrum(grid: Grid, b: Array) -> tuple[Array, Array]:
    """Magnetic energy by wave number on a uniform Cartesian grid.

    Parameters
    ----------
    grid : Grid
        Cartesian, equal steps along each axis. The box is taken to repeat: on one that does not, the jump
        from wall to wall adds a tail of its own.
    b : ndarray, shape (3, n1, n2, n3)
        Field at the cell centres, Cartesian components, unit B.

    Returns
    -------
    k : ndarray, shape (m,)
        Middle of each bin, unit 1/L: multiples of 2 pi / (longest side); |k| is rounded to the nearest.
    energy : ndarray, shape (m,)
        Energy of each bin, unit B^2 L^3. They sum to `energy_of_cells` (Parseval).

    Raises
    ------
    FieldError
        If the grid is not uniform and Cartesian, or the shape does not fit.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> q = np.linspace(0, 2 * np.pi, 9)
    >>> grid = fm.cartesian_grid(q, q, [0, 1], periodic=(True, True, True))
    >>> b = np.stack([0 * grid.centres()[0], np.cos(2 * grid.centres()[0]), 1 + 0 * grid.centres()[0]])
    >>> k, energy = power_spectrum(grid, b)
    >>> (energy / energy.sum()).round(6)[:3] + 0.0
    array([0.666667, 0.      , 0.333333])
    """
    steps = [np.diff(nodes) for nodes in grid.nodes]
    if grid.kind != "cartesian" or any(np.ptp(step) > 1e-9 * step.max() for step in steps):
        raise FieldError(f"power spectrum: the grid is {grid!r}, expected Cartesian axes of equal steps")
    _vectors(grid, b)
    n1, n2, n3 = grid.shape
    h1, h2, h3 = (float(step.mean()) for step in steps)
    longest = max(n1 * h1, n2 * h2, n3 * h3)
    k1, k2, k3 = scipy.fft.fftfreq(n1, h1), scipy.fft.fftfreq(n2, h2), scipy.fft.rfftfreq(n3, h3)
    waves = np.sqrt(k1[:, None, None] ** 2 + k2[:, None] ** 2 + k3**2) * longest
    power = sum(np.abs(scipy.fft.rfftn(part, norm="forward", workers=compute.threads())) ** 2 for part in b)
    # A real transform leaves out conjugates: all modes have one but the first and, for even n3, the last.
    power[..., 1 : (n3 + 1) // 2] *= 2.0
    binned = np.bincount(np.rint(waves).astype(np.int64).ravel(), weights=power.ravel())
    energy = np.asarray(binned * (0.5 * (n1 * h1) * (n2 * h2) * (n3 * h3)), dtype=np.float64)
    return np.asarray(2 * np.pi / longest * np.arange(energy.size), dtype=np.float64), energy


def _vectors(grid: Grid, b: Array) -> Array:
    if np.shape(b) != (3, *grid.shape):
        raise FieldError(f"cell-centred field: shape {np.shape(b)}, expected {(3, *grid.shape)}")
    return b
