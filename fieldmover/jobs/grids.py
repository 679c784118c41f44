"""From the tables of a job to grids."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

import fieldmover as fm
from fieldmover.errors import DataError, GridError, JobError
from fieldmover.grids.grid import Grid
from fieldmover.grids.placement import turn_about
from fieldmover.grids.tabulated import nodes_from_centres
from fieldmover.grids.warps import crowded_grid, load_map
from fieldmover.jobs.load import Loaded
from fieldmover.jobs.schema import AnyGrid, Map, Placement, Source, SourceGrid, Spaced, TargetGrid
from fieldmover.snapshots.axes import MEANING, Angle, from_centres, from_dataset, spaced
from fieldmover.snapshots.gate import Snapshot
from fieldmover.snapshots.layout import Layout, read_axis, read_positions

Array = NDArray[np.float64]
Find = Callable[[Any], float]

NOWHERE: tuple[Angle | None, ...] = (None, None, None)


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
    return _made(loaded, wanted, nodes, where, bool(wanted.datasets), _finder(loaded, snapshot))


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
        return at_place(_made(loaded, wanted, nodes, f"{loaded.path}: target.grid", False), wanted.place)
    path = loaded.path.parent / wanted.file
    with Snapshot(path) as snapshot:
        nodes = _target_nodes(snapshot, wanted)
    return at_place(_made(loaded, wanted, nodes, f"{path}", True), wanted.place)


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
    if grid.kind == "warped":
        return MEANING["spherical"] if grid.map is not None and grid.map.crowded is not None else NOWHERE
    return MEANING[grid.kind]


def _finder(loaded: Loaded, snapshot: Snapshot) -> Find:
    """Numbers of the job, or where they lie in the snapshot."""

    def find(value: Any) -> float:
        return snapshot.number(value) if isinstance(value, str) else float(value)

    return find


def _made(
    loaded: Loaded, wanted: AnyGrid, nodes: list[Array], where: str, stored: bool, find: Find | None = None
) -> Grid:
    """A grid of these nodes; `stored` tells whose mistake a bad one is, the file's or the job's."""
    try:
        if wanted.map is None:
            return _plain(wanted, nodes)
        if find is not None:
            return _warped(loaded, wanted, wanted.map, nodes, find)
        with Snapshot(loaded.source) as snapshot:
            return _warped(loaded, wanted, wanted.map, nodes, _finder(loaded, snapshot))
    except JobError as error:
        raise JobError(f"{where}: {error}") from None
    except GridError as error:
        raise (DataError if stored else JobError)(f"{where}: {error}") from None


def _plain(wanted: AnyGrid, nodes: list[Array]) -> Grid:
    a, b, c = nodes
    periodic = _periodic(wanted)
    if wanted.kind == "cartesian":
        return fm.cartesian_grid(a, b, c, periodic=periodic)
    if wanted.kind == "cylindrical":
        return fm.cylindrical_grid(a, b, c)
    if wanted.kind == "spherical":
        return fm.spherical_grid(a, b, c)
    if wanted.at == "cells":
        a, b, c = nodes_from_centres(a, b, c, periodic, _poles(wanted))
    return fm.tabulated_grid(a, b, c, periodic, _poles(wanted))


def _warped(loaded: Loaded, wanted: AnyGrid, chosen: Map, nodes: list[Array], find: Find) -> Grid:
    if chosen.crowded is not None:
        crowded = {name: find(value) for name, value in chosen.crowded}
        return crowded_grid(nodes[0], nodes[1], nodes[2], **crowded)
    file, _, name = str(chosen.python).rpartition(":")
    parameters: Mapping[str, float] = {key: find(value) for key, value in chosen.parameters.items()}
    function = load_map(Path(loaded.path.parent, file), name, parameters)
    return fm.warped_grid(nodes[0], nodes[1], nodes[2], function, _periodic(wanted), _poles(wanted))


def _periodic(wanted: AnyGrid) -> tuple[bool, bool, bool]:
    a, b, c = wanted.periodic or (False, False, False)
    return a, b, c


def _poles(wanted: AnyGrid) -> tuple[Any, Any, Any]:
    a, b, c = (None if pole == "none" else pole for pole in wanted.poles or ["none"] * 3)
    return a, b, c
