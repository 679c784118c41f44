"""What turns the numbers of one code into ours and back: its units, the metric, the motion of its grid.

Inside, everything is in the units of the receiving code, and velocities are Cartesian: dx/dt, or with a metric W v^i,
the Lorentz factor times what Eulerian observers measure, whose means are velocities slower than light again.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from fieldmover.conventions import components
from fieldmover.conventions.metrics import (
    Geometry,
    Metric,
    geometry,
    geometry_from_arrays,
    named_metric,
    volume_elements,
)
from fieldmover.conventions.velocity import Kind, Motion, motion, stored_velocity
from fieldmover.errors import DataError, JobError
from fieldmover.grids.grid import Grid
from fieldmover.grids.placement import placement, turned, unplaced
from fieldmover.jobs.schema import Job

Array = NDArray[np.float64]
Side = Literal["source", "target"]


@dataclass(frozen=True, eq=False)
class Space:
    """The space of one side of a job.

    Attributes
    ----------
    grid : Grid
        At its place in the common frame.
    metric : Metric or None
        In closed form, where there is one.
    arrays : Geometry or None
        The metric at cell centres, where it comes from a file.
    moving : ndarray, shape (3, n1, n2, n3), or None
        Velocity of the grid's points along x, y, z of its own frame.
    """

    grid: Grid
    metric: Metric | None = None
    arrays: Geometry | None = None
    moving: Array | None = None

    @property
    def own(self) -> Grid:
        """The grid in the frame of its code."""
        return unplaced(self.grid)

    @cached_property
    def geometry(self) -> Geometry | None:
        """Lapse, shift and metric at cell centres; None in Newtonian space.

        Raises
        ------
        DataError
            If the grid is no chart of the metric.
        """
        if self.arrays is not None or self.metric is None:
            return self.arrays
        return geometry(self.metric, self.grid)

    @cached_property
    def volumes(self) -> Array:
        """Proper volumes of cells."""
        if self.arrays is not None:
            return np.asarray(self.arrays.sqrt_gamma * self.grid.cell_volumes())
        if self.metric is not None:
            return volume_elements(self.metric, self.grid)
        return self.grid.cell_volumes()

    @cached_property
    def density_factor(self) -> Array | float:
        """sqrt(gamma) over that of flat space: what makes a flux density of B^i."""
        return 1.0 if self.geometry is None else self.geometry.sqrt_gamma

    def from_stored(self, values: Array, kind: Kind | None, basis: components.Basis) -> Array:
        """A vector of the file as ours; a velocity if it has a kind."""
        if kind is None:
            vector = components.to_cartesian(self.own, values, basis)
        else:
            found = motion(self.own, values, kind, basis, self.geometry, self.moving)
            vector = found.velocity if found.lorentz is None else found.eulerian * found.lorentz
        frame = placement(self.grid)
        return vector if frame is None else turned(frame[1], vector)

    def to_stored(self, vector: Array, kind: Kind | None, basis: components.Basis) -> Array:
        """The inverse of `from_stored`."""
        frame = placement(self.grid)
        own = vector if frame is None else turned(frame[1].T, vector)
        if kind is None:
            return components.from_cartesian(self.own, own, basis)
        return stored_velocity(self.own, self.motion(own).velocity, kind, basis, self.geometry, self.moving)

    def motion(self, vector: Array) -> Motion:
        """Velocities of all kinds from one of ours, in whichever frame it is."""
        kind: Kind = "coordinate" if self.geometry is None else "W eulerian"
        return motion(self.own, vector, kind, "cartesian", self.geometry)

    def elements(self, velocity: Array | None) -> Array:
        """What a density in the frame of the gas is multiplied by to give the content of a cell: W times its volume."""
        if self.geometry is None or velocity is None:
            return self.volumes
        u = velocity / self.geometry.light
        return np.asarray(self.volumes * np.sqrt(1.0 + self.geometry.dot(u, u)))


def coordinate_volumes(grid: Grid) -> Array:
    """Products of the steps of the three coordinates, to broadcast."""
    a, b, c = (np.diff(nodes) for nodes in grid.nodes)
    return np.asarray(a[:, None, None] * b[None, :, None] * c[None, None, :])


def metric_of(job: Job, kind: str) -> Metric | None:
    """The metric that both sides share, in the chart that a kind of grid has."""
    wanted = job.metric
    if wanted is None:
        return None
    light = wanted.light
    if light is None:
        light = 1.0 if job.units is None else job.units.of("target").light
    chart = "spheroidal" if kind in ("spherical", "kerr-schild") else "cartesian"
    return named_metric(wanted.name, wanted.mass, wanted.spin, chart, light)


def space_of(
    job: Job, side: Side, grid: Grid, arrays: Mapping[str, Any] | None = None, moving: Array | None = None
) -> Space:
    """The space of one side.

    Parameters
    ----------
    job : Job
    side : "source" or "target"
    grid : Grid
        At its place.
    arrays : mapping, optional
        Arguments of `geometry_from_arrays`, where the side has a metric of its own.
    moving : ndarray, optional
        Velocity of the grid's points.

    Raises
    ------
    JobError
        If a metric does not go with the grid.
    DataError
        If arrays do not make a metric.
    """
    wanted = job.source.grid if side == "source" or job.target.grid is None else job.target.grid
    metric = metric_of(job, wanted.kind)
    if metric is None and not arrays:
        return Space(grid, moving=moving)
    if placement(grid) is not None:
        raise JobError(f"{side}.grid.place: a grid in a metric stays where its coordinates are; leave the key out")
    try:
        if arrays:
            light = 1.0 if job.metric is None or job.metric.light is None else job.metric.light
            found = geometry_from_arrays(grid, **arrays, light=light)
            return Space(grid, None, found, moving)
        space = Space(grid, metric, None, moving)
        assert space.geometry is not None  # made here, so that a misfit is told before the work
    except DataError as error:
        raise (DataError if arrays else JobError)(f"{side}: {error}") from None
    return space
