"""From the tables of a job to grids."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

import fieldmover as fm
from fieldmover.conventions.velocity import grid_velocity
from fieldmover.errors import DataError, GridError, JobError
from fieldmover.grids.grid import Grid
from fieldmover.grids.kerr import kerr_schild_grid
from fieldmover.grids.nested import NestedGrid, nested_grid
from fieldmover.grids.placement import placement, turn_about
from fieldmover.grids.tabulated import nodes_from_centres
from fieldmover.grids.warps import Function, crowded_grid, crowded_map, load_map
from fieldmover.jobs.load import Loaded
from fieldmover.jobs.schema import AnyGrid, Map, Placement, Source, SourceGrid, Spaced, TargetGrid
from fieldmover.jobs.units import ratio
from fieldmover.snapshots.axes import MEANING, Angle, from_centres, from_dataset, spaced
from fieldmover.snapshots.gate import Snapshot
from fieldmover.snapshots.layout import Layout, read_axis, read_positions

Array = NDArray[np.float64]
Find = Callable[[Any], float]
Side = Literal["source", "target"]

NOWHERE: tuple[Angle | None, ...] = (None, None, None)
_STEP = 1e-3  # by which the fastest parameter of a moving map is changed to see how positions move


def source_grid(loaded: Loaded, snapshot: Snapshot, layout: Layout) -> Grid:
    """The grid of the snapshot, in the frame of its own code.

    Raises
    ------
    DataError
        If positions in the file are missing or do not make a grid.
    JobError
        If positions or a map in the job do not.
    """
    source, wanted = loaded.job.source, loaded.job.source.grid
    if wanted.kind == "tabulated":
        nodes = [
            read_positions(snapshot, name, layout, _stored_cells(snapshot, source, layout), wanted.at or "nodes")
            for name in wanted.positions or []
        ]
    else:
        nodes = _source_nodes(snapshot, source, wanted, layout)
    where = f"{snapshot.path}" if wanted.datasets else f"{loaded.path}: source.grid"
    nodes = _in_units_of_target(wanted, nodes, ratio(loaded.job, "length"))
    return _made(loaded, "source", nodes, where, bool(wanted.datasets), _finder(snapshot))


def moving(loaded: Loaded, side: Side, grid: Grid) -> Array | None:
    """Velocity of a grid's points in the frame of its code, where the job says how parameters of its map change.

    Parameters
    ----------
    loaded : Loaded
    side : "source" or "target"
    grid : Grid
        Not placed.

    Returns
    -------
    (3, n1, n2, n3) array, or None

    Raises
    ------
    DataError
        If a parameter is not in the snapshot.
    """
    wanted = _table(loaded, side)
    if wanted.map is None or not wanted.map.rates:
        return None
    chosen = wanted.map
    with Snapshot(loaded.source) as snapshot:
        find = _finder(snapshot)
        rates = {name: find(value) for name, value in chosen.rates.items()}
        values = _parameters(chosen, find)
    fastest = max(abs(rate) for rate in rates.values())
    if fastest == 0.0:
        return None

    def later(time: float) -> Function:
        return _function(loaded, side, {name: v + time * rates.get(name, 0.0) for name, v in values.items()})

    # Rates are per unit of time of the side's own code.
    return grid_velocity(grid, later, _STEP / fastest) / (ratio(loaded.job, "time") if side == "source" else 1.0)


def target_grid(loaded: Loaded) -> Grid:
    """The grid that a job writes to, at its place in the common frame.

    Raises
    ------
    JobError
        If there is none, or its positions do not make a grid.
    DataError
        If positions in a file are missing or do not make a grid.
    """
    wanted = loaded.job.target.grid
    if wanted is None:
        raise JobError(
            f"{loaded.path}: target.grid: missing; give this table (only clean keeps the grid of the source)"
        )
    if wanted.file is None:
        nodes = [own_nodes(axis) for axis in wanted.nodes or []]
        return at_place(_made(loaded, "target", nodes, f"{loaded.path}: target.grid", False), wanted.place)
    path = loaded.path.parent / wanted.file
    with Snapshot(path) as snapshot:
        nodes = _target_nodes(snapshot, wanted)
    return at_place(_made(loaded, "target", nodes, f"{path}", True), wanted.place)


def nested_target(loaded: Loaded, grid: Grid) -> NestedGrid | None:
    """The target with its finer boxes, at its place; None if the job has none.

    Parameters
    ----------
    loaded : Loaded
    grid : Grid
        As `target_grid` makes it.

    Raises
    ------
    JobError
        If the boxes do not fit into each other.
    """
    wanted = loaded.job.target.grid
    if wanted is None or not wanted.finer:
        return None
    levels: list[list[tuple[Array, Array, Array]]] = [[grid.nodes]]
    for level in range(1, max(box.level for box in wanted.finer) + 1):
        boxes = [[own_nodes(axis) for axis in box.nodes] for box in wanted.finer if box.level == level]
        levels.append([(a, b, c) for a, b, c in boxes])
    try:
        nested = nested_grid(levels)
    except GridError as error:
        raise JobError(f"{loaded.path}: target.grid.finer: {error}") from None
    where = placement(grid)
    return nested if where is None else nested.placed(*where)


def groups_of(loaded: Loaded) -> list[str]:
    """Groups of the output that hold the finer boxes, in the order of the nested grid."""
    wanted = loaded.job.target.grid
    return [] if wanted is None else [box.group for box in sorted(wanted.finer, key=lambda box: box.level)]


def own_nodes(axis: Any) -> Array:
    """Nodes of one axis by a rule or a list of the job."""
    if isinstance(axis, Spaced):
        return spaced(axis.from_, axis.to, axis.cells, axis.spacing, axis.ratio or 1.0)
    return np.array(axis, dtype=np.float64)


def at_place(grid: Grid, place: Placement | None) -> Grid:
    """A grid at its place in the common frame."""
    if place is None:
        return grid
    turn = None if place.turn is None else turn_about(place.turn.about, place.turn.angle)
    return fm.placed(grid, place.origin, turn)


def _source_nodes(snapshot: Snapshot, source: Source, wanted: SourceGrid, layout: Layout) -> list[Array]:
    stored, meaning = _stored_cells(snapshot, source, layout), _meaning(wanted)
    nodes = []
    for axis, given in enumerate(wanted.nodes or wanted.centres or []):
        if isinstance(given, str):
            centres = wanted.centres is not None
            nodes.append(read_axis(snapshot, given, axis, layout, stored[axis], meaning[axis], centres))
        elif wanted.centres is not None and isinstance(given, list):
            nodes.append(from_centres(np.array(given), 0, meaning[axis]))
        else:
            nodes.append(own_nodes(given))
    return nodes


def _target_nodes(snapshot: Snapshot, wanted: TargetGrid) -> list[Array]:
    """Positions of the receiving code, as they stand in its file."""
    if wanted.kind == "tabulated":
        return [np.asarray(snapshot.read(name), dtype=np.float64) for name in wanted.positions or []]
    meaning = _meaning(wanted)
    return [
        from_dataset(snapshot.read(given), meaning[axis]) if isinstance(given, str) else own_nodes(given)
        for axis, given in enumerate(wanted.nodes or [])
    ]


def _stored_cells(snapshot: Snapshot, source: Source, layout: Layout) -> tuple[int, int, int]:
    return layout.stored_cells(snapshot, source.magnetic.data[0], source.magnetic.at, 0)


def _meaning(grid: AnyGrid) -> tuple[Angle | None, ...]:
    """What the axes measure, where ends may be special."""
    if grid.kind == "kerr-schild" or (grid.map is not None and grid.map.crowded is not None):
        return MEANING["spherical"]
    return NOWHERE if grid.kind == "warped" else MEANING[grid.kind]


def _in_units_of_target(wanted: AnyGrid, nodes: list[Array], size: float) -> list[Array]:
    """Positions of the source in the target's unit of length; coordinates of a map of the user's stay as they are."""
    if size == 1.0 or (wanted.map is not None and wanted.map.python is not None):
        return nodes
    if wanted.kind == "tabulated":
        return [size * q for q in nodes]
    meaning = _meaning(wanted)
    return [q if meaning[axis] in ("polar", "azimuth") else size * q for axis, q in enumerate(nodes)]


def _finder(snapshot: Snapshot) -> Find:
    """Numbers of the job, or where they lie in the snapshot."""

    def find(value: Any) -> float:
        return snapshot.number(value) if isinstance(value, str) else float(value)

    return find


def _table(loaded: Loaded, side: Side) -> AnyGrid:
    """What the job says of the grid of a side; cleaning keeps that of the source."""
    target = loaded.job.target.grid
    return loaded.job.source.grid if side == "source" or target is None else target


def _made(loaded: Loaded, side: Side, nodes: list[Array], where: str, stored: bool, find: Find | None = None) -> Grid:
    """A grid of these nodes; `stored` tells whose mistake a bad one is, the file's or the job's."""
    wanted = _table(loaded, side)
    try:
        if wanted.map is None:
            return _plain(loaded, wanted, nodes)
        if find is not None:
            return _warped(loaded, side, nodes, _parameters(wanted.map, find))
        with Snapshot(loaded.source) as snapshot:
            return _warped(loaded, side, nodes, _parameters(wanted.map, _finder(snapshot)))
    except JobError as error:
        raise JobError(f"{where}: {error}") from None
    except GridError as error:
        raise (DataError if stored else JobError)(f"{where}: {error}") from None


def _plain(loaded: Loaded, wanted: AnyGrid, nodes: list[Array]) -> Grid:
    a, b, c = nodes
    periodic = _periodic(wanted)
    if wanted.kind == "cartesian":
        return fm.cartesian_grid(a, b, c, periodic=periodic)
    if wanted.kind == "cylindrical":
        return fm.cylindrical_grid(a, b, c)
    if wanted.kind == "spherical":
        return fm.spherical_grid(a, b, c)
    if wanted.kind == "kerr-schild":
        return kerr_schild_grid(a, b, c, 0.0 if loaded.job.metric is None else loaded.job.metric.spin)
    if wanted.at == "cells":
        a, b, c = nodes_from_centres(a, b, c, periodic, _poles(wanted))
    return fm.tabulated_grid(a, b, c, periodic, _poles(wanted))


def _parameters(chosen: Map, find: Find) -> dict[str, float]:
    given = dict(chosen.crowded) if chosen.crowded is not None else chosen.parameters
    return {name: find(value) for name, value in given.items()}


def _warped(loaded: Loaded, side: Side, nodes: list[Array], parameters: Mapping[str, float]) -> Grid:
    wanted = _table(loaded, side)
    a, b, c = nodes
    if wanted.map is not None and wanted.map.crowded is not None:
        return crowded_grid(a, b, c, **_crowding(loaded, side, parameters))
    return fm.warped_grid(a, b, c, _function(loaded, side, parameters), _periodic(wanted), _poles(wanted))


def _function(loaded: Loaded, side: Side, parameters: Mapping[str, float]) -> Function:
    """The map of a side, with positions in the target's unit of length."""
    chosen = _table(loaded, side).map
    if chosen is None or chosen.python is None:
        return crowded_map(**_crowding(loaded, side, parameters))
    file, _, name = chosen.python.rpartition(":")
    own = _told(load_map(Path(loaded.path.parent, file), name, parameters), chosen.python)
    size = ratio(loaded.job, "length") if side == "source" else 1.0
    if size == 1.0:
        return own

    def scaled(q1: Array, q2: Array, q3: Array) -> tuple[Array, Array, Array]:
        x, y, z = own(q1, q2, q3)
        return size * x, size * y, size * z

    return scaled


def _told(function: Function, name: str) -> Function:
    """A function of the user's whose mistakes are told as such."""

    def called(q1: Array, q2: Array, q3: Array) -> tuple[Array, Array, Array]:
        try:
            return function(q1, q2, q3)
        except Exception as error:
            raise JobError(f"map: {name} fails: {type(error).__name__}: {error}") from error

    return called


def _crowding(loaded: Loaded, side: Side, parameters: Mapping[str, float]) -> dict[str, float]:
    size = ratio(loaded.job, "length") if side == "source" else 1.0
    return {**parameters, "separation": size * parameters["separation"]}


def _periodic(wanted: AnyGrid) -> tuple[bool, bool, bool]:
    a, b, c = wanted.periodic or (False, False, False)
    return a, b, c


def _poles(wanted: AnyGrid) -> tuple[Any, Any, Any]:
    a, b, c = (None if pole == "none" else pole for pole in wanted.poles or ["none"] * 3)
    return a, b, c
