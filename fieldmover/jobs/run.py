"""The commands, each one straight line through the layers."""

from __future__ import annotations

import math
import os
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

import fieldmover as fm
from fieldmover.diagnostics import Surface, cell_energies, relative_divergence
from fieldmover.errors import JobError
from fieldmover.forms.fields import CellContent, FaceFlux
from fieldmover.grids.grid import Grid
from fieldmover.interpolation.fluid import FluidPlan
from fieldmover.jobs.boxes import (
    Around,
    Target,
    around,
    boxes_beside,
    in_group,
    measure_boxes,
    move_field,
    read_finer,
    target_of,
    without_charge,
)
from fieldmover.jobs.cleaning import cleaned, perturbed_flux
from fieldmover.jobs.details import divergences, profile, spectra
from fieldmover.jobs.fluid import move_fluid, totals, with_formulas
from fieldmover.jobs.grids import groups_of, target_grid
from fieldmover.jobs.health import cured, mass_added
from fieldmover.jobs.load import Loaded
from fieldmover.jobs.measure import (
    cell_values,
    measure_against,
    measure_kept,
    measure_more,
    measure_stencil,
    other_state,
)
from fieldmover.jobs.progress import Progress
from fieldmover.jobs.read import State, read_cells, read_source, read_target
from fieldmover.jobs.recall import recall
from fieldmover.jobs.record import Record
from fieldmover.jobs.regions import Cells, by_place, region_figures, region_masks, surfaces_of
from fieldmover.jobs.schema import Move, Within
from fieldmover.jobs.store import Store, bytes_needed
from fieldmover.jobs.supervise import note
from fieldmover.jobs.verdicts import limits_table
from fieldmover.jobs.warm import compiling_fluid
from fieldmover.report.figures import Plane, pictures
from fieldmover.report.formats import to_json
from fieldmover.report.text import terminal
from fieldmover.report.write import check_folder, make_folder, write_report
from fieldmover.snapshots.viewable import sidecar
from fieldmover.snapshots.write import Output, check_space, write_text

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Outcome:
    """What a command found: its exit status and the text for stdout."""

    exit_status: int
    text: str


@dataclass
class Work:
    """What a command carries along: the job, what it found, where its report goes, what it looks at."""

    loaded: Loaded
    record: Record
    progress: Progress
    folder: Path
    planes: list[Plane]
    surfaces: dict[str, Surface]


def move(loaded: Loaded, folder: Path | None = None, overwrite: bool = False, quiet: bool = False) -> Outcome:
    """The whole hand-over: read, clean if needed, move, fill, write, report.

    Parameters
    ----------
    loaded : Loaded
        The job.
    folder : Path, optional
        Where the report goes (default: NAME-report beside the output).
    overwrite : bool
        Whether an output that exists is replaced.
    quiet : bool
        Whether to show no progress.

    Raises
    ------
    JobError
        If the job cannot be carried out as written: the output exists or is the input, the target grid is
        none, a region or a plane of the report misses it.
    DataError, OutputError, NotConverged, NotEnoughMemory
        See `fieldmover.errors`.
    """
    target = target_of(loaded, target_grid(loaded))
    check_output(loaded, overwrite)
    check_space(loaded.target, total_bytes(loaded, target))
    work = _work(loaded, "move", target.grid, folder, Progress(7, quiet))
    job, record, progress = loaded.job, work.record, work.progress
    with compiling_fluid():
        with progress.stage("reading"):
            source = _source(loaded, record)
        with progress.stage("cleaning"):
            clean_flux = cleaned(loaded, source.flux, record, job.move.clean, to_move=True)
            record.field("cleaned", clean_flux)
        changed_flux = perturbed_flux(loaded, clean_flux, record)
        with progress.stage("moving the field"):
            flux, more = move_field(loaded, changed_flux, target, record)
            record.field("moved", flux)
    with progress.stage("moving the fluid"):
        plans, finer = boxes_beside(loaded, source, target, more)
        if not plans[0].coverage.any():
            raise JobError(
                f"{loaded.path}: target.grid: {target.grid!r} has no cell that the source reaches, {source.grid!r}; "
                "expected them to overlap, in one unit of length"
            )
        fluid, angular = move_fluid(job, source, target.space, plans[0], flux)
        record.values["angular_momentum"] = None if angular is None else angular.as_dict()
        moved, record.values["health"] = cured(loaded, State(loaded.target, flux, target.space, fluid, source.time))
        layers = None if target.ghosts is None else around(loaded, source, target, more[0])
    steps = {"cleaned": clean_flux, "moved": flux}
    if changed_flux is not clean_flux:  # neither the cleaning's doing nor that of the move
        steps = {"cleaned": clean_flux, "perturbed": changed_flux, "moved": flux}
    return _store(work, source, moved, plans[0], steps, overwrite, finer, layers)


def clean(loaded: Loaded, folder: Path | None = None, overwrite: bool = False, quiet: bool = False) -> Outcome:
    """Remove monopoles and write the field on the grid it was read on, with the fluid as it was.

    Parameters
    ----------
    loaded, folder, overwrite, quiet
        As in `move`. The job has no target.grid.

    Raises
    ------
    JobError
        If the job gives a target grid, or as in `move`.
    DataError, OutputError, NotConverged, NotEnoughMemory
        See `fieldmover.errors`.
    """
    job = loaded.job
    check_cleaning(loaded)
    check_output(loaded, overwrite)
    check_folder(folder or report_folder(loaded))
    progress, record = Progress(5, quiet), Record(loaded, "clean")
    with progress.stage("reading"):
        source = _source(loaded, record)
        work = _work(loaded, "clean", source.grid, folder, progress, record)
        check_space(loaded.target, bytes_needed(loaded, source.grid.shape))
    with progress.stage("cleaning"):
        flux = cleaned(loaded, source.flux, record, "always", to_move=False)
        record.field("cleaned", flux)
        plan = FluidPlan(source.grid, source.grid)
        fluid = with_formulas(job, source.fluid, flux)
        state, record.values["health"] = cured(loaded, State(loaded.target, flux, source.space, fluid, source.time))
    return _store(work, source, state, plan, {"cleaned": flux}, overwrite)


def check(
    loaded: Loaded,
    folder: Path | None = None,
    quiet: bool = False,
    make_limits: float | None = None,
    against: Path | None = None,
) -> Outcome:
    """Measure the files of a job against its limits; nothing but the report is written.

    The target's file is measured and compared with the source; where there is none yet, the source alone.

    Parameters
    ----------
    loaded, folder, quiet
        As in `move`.
    make_limits : float, optional
        Write limits.toml beside the report: limits that these files keep with that margin, relative.
    against : Path, optional
        A file laid out like the target, of an earlier run say, to compare it with.

    Raises
    ------
    JobError
        If there is no target to compare with the other file.
    DataError, OutputError
        See `fieldmover.errors`.
    """
    folder = folder or report_folder(loaded, "check")
    check_folder(folder)
    if make_limits is not None and not 0.0 <= make_limits < math.inf:
        raise JobError(f"--make-limits {make_limits}: expected a margin like 0.1, which is 10 %")
    there = loaded.target.exists()
    if against is not None and not there:
        raise JobError(f"{loaded.target}: no such file; there is nothing to compare with {against}")
    progress, record = Progress(3, quiet), Record(loaded, "check")
    with progress.stage("reading"):
        source = _source(loaded, record)
        clean = loaded.job.target.grid is None
        target = None if clean else target_of(loaded, target_grid(loaded))
        space = source.space if target is None else target.space
        stored = read_target(loaded, space) if there else source
        finer = [] if target is None or not there else read_finer(loaded, target)
        if there:
            record.file("target", loaded.target)
            recall(loaded.target, record)
    work = _work(loaded, "check", stored.grid, folder, progress, record)
    with progress.stage("measuring"):
        if there:
            record.field("stored", stored.flux)
            measure_stencil(record, loaded, space.grid, read_cells(loaded, space.grid))
            without_charge(record, stored)
            measure_boxes(loaded, record, stored, finer)
            _compare(work, source, stored, FluidPlan(source.grid, stored.grid), {})
        else:
            measure_more(record, loaded, {"source": source}, work.surfaces)
        if against is not None:
            other = other_state(loaded, space, against)
            record.file("other", other.path)
            measure_against(record, loaded, other, stored, work.surfaces)
    outcome = _finish(work, source, stored if there else None)
    if make_limits is None:
        return outcome
    path, reference = folder / "limits.toml", folder / "reference.json"  # which later reports do not replace
    write_text(reference, to_json(record.values))
    named = os.path.relpath(reference, loaded.path.parent)  # as a job names files
    write_text(path, limits_table(record.values, record.names, make_limits, named))
    return replace(outcome, text=f"{outcome.text}\nlimits: {path}")


def total_bytes(loaded: Loaded, target: Target) -> int:
    """What the arrays of an output take on all its grids, roughly."""
    grids = [target.grid if target.ghosts is None else target.ghosts.whole, *target.finer]
    return sum(bytes_needed(loaded, grid.shape) for grid in grids)


def report_folder(loaded: Loaded, suffix: str = "report") -> Path:
    """Where the report of a command goes unless told otherwise."""
    return loaded.target.with_name(f"{loaded.target.stem}-{suffix}")


def check_cleaning(loaded: Loaded) -> None:
    """Refuse a job for `clean` that wants something moved.

    Raises
    ------
    JobError
        If it has a target grid, or keys of move that would change more than the place of things.
    """
    if loaded.job.target.grid is not None:
        raise JobError(f"{loaded.path}: target.grid: clean keeps the grid of the source; leave this table out")
    for name in ("perturb", "keep", "blend", "net_flux"):
        if getattr(loaded.job.move, name) != Move.model_fields[name].default:
            raise JobError(f"{loaded.path}: move.{name}: clean moves nothing; leave this key out")


def check_output(loaded: Loaded, overwrite: bool) -> None:
    """Refuse to lose a file before anything is read."""
    target, grid = loaded.target, loaded.job.target.grid
    inputs = {"the input": loaded.source, "the job file": loaded.path}
    if grid is not None and grid.file is not None:
        inputs["target.grid.file, which the grid is read from"] = loaded.path.parent / grid.file
    for path in (target, sidecar(target)) if loaded.job.target.view else (target,):
        if path.exists():
            for meaning, other in inputs.items():
                if other.exists() and path.samefile(other):
                    raise JobError(f"{path}: the output is {meaning}")
            if not overwrite:
                raise JobError(f"{path}: exists; give --overwrite to replace it")
            if not path.is_file():
                raise JobError(f"{path}: is not a file")
    if not target.parent.is_dir():
        raise JobError(f"{target}: there is no folder {str(target.parent)!r} to write it into")


def _work(
    loaded: Loaded,
    command: str,
    grid: Grid,
    folder: Path | None,
    progress: Progress,
    record: Record | None = None,
) -> Work:
    """What the job wants to see on a grid; mistakes in it are told before the work."""
    folder = folder or report_folder(loaded)
    planes, surfaces = wishes(loaded, grid, folder)
    return Work(loaded, record or Record(loaded, command), progress, folder, planes, surfaces)


def wishes(loaded: Loaded, grid: Grid, folder: Path) -> tuple[list[Plane], dict[str, Surface]]:
    """Planes and surfaces that a job wants to see; what cannot be measured or reported on a grid is an error.

    Raises
    ------
    JobError
        If a region, a plane or a surface misses the grid, or the report would replace one it is compared with.
    OutputError
        If the folder of the report cannot be written.
    """
    check_folder(folder)
    region_masks(grid, by_place(loaded.job))
    own = (folder / "report.json").resolve()
    for name, limit in loaded.job.limits.items():
        if isinstance(limit, Within) and (loaded.path.parent / limit.of).resolve() == own:
            raise JobError(
                f"{loaded.path}: limits.{name}: this run would replace {limit.of}, which it is compared with; give "
                "--report another folder, or keep the good report elsewhere"
            )
    return _planes(loaded, grid), surfaces_of(loaded.job.surfaces, grid)


def _planes(loaded: Loaded, grid: Grid) -> list[Plane]:
    given = loaded.job.report.planes
    if given is None:
        return [Plane.through(grid, 1), Plane.through(grid, 2)]
    return [Plane.through(grid, axis, position) for axis, position in given]


def _source(loaded: Loaded, record: Record) -> State:
    source = read_source(loaded)
    record.file("source", loaded.source)
    record.values["time"] = source.time
    record.field("source", source.flux)
    return source


def _store(
    work: Work,
    source: State,
    moved: State,
    plan: FluidPlan,
    steps: dict[str, FaceFlux],
    overwrite: bool,
    finer: Sequence[State] = (),
    layers: Around | None = None,
) -> Outcome:
    """Write the target, measure what was written, and report."""
    loaded, record, progress = work.loaded, work.record, work.progress
    with Output(loaded.target, overwrite, bytes_needed(loaded, moved.grid.shape)) as output:
        note(output.partial)
        store = Store(loaded, output, layers)
        beside = [Store(in_group(loaded, group), output) for group in groups_of(loaded)]
        with progress.stage("writing"):
            store.write_state(moved)
            for box, state in zip(beside, finer, strict=True):
                box.write_arrays(state)
            record.values["stencil_cleaning"] = store.stencil_cleaning
        with progress.stage("measuring"):
            stored = store.read_state(moved)
            record.field("stored", stored.flux)
            measure_stencil(record, loaded, stored.grid, store.read_cells())
            without_charge(record, stored)
            measure_boxes(loaded, record, stored, [b.read_state(s) for b, s in zip(beside, finer, strict=True)])
            _compare(work, source, stored, plan, steps)
            record.finish(progress)
        store.write_report(to_json(record.values))
        make_folder(work.folder)
        output.publish()
    store.publish_view(moved)
    record.file("target", loaded.target)
    return _finish(work, source, stored)


def _compare(work: Work, source: State, stored: State, plan: FluidPlan, steps: dict[str, FaceFlux]) -> None:
    """Energy over the part that the source covers, step by step; regions; totals of the fluid."""
    record, whole = work.record, plan.coverage >= 1.0
    volumes = stored.grid.cell_volumes()
    record.coverage(plan.coverage, volumes)
    cells, energies = {}, {}
    for name, flux in {"source": source.flux, **steps, "stored": stored.flux}.items():
        found = cell_energies(flux)
        if flux.grid is source.grid and flux.grid is not stored.grid:
            found = plan.move(CellContent(source.grid, found)).cells
        energies[name] = float(found[whole].sum())
        if name in ("source", "stored"):
            cells[name] = found
    record.energies(energies)
    record.values["profile"] = profile(stored.grid, {step: np.where(whole, e, 0.0) for step, e in cells.items()})
    measure_more(record, work.loaded, {"source": source, "stored": stored}, work.surfaces)
    measure_kept(record, source, stored, plan)
    if regions := region_masks(stored.grid, work.loaded.job.regions, cell_values(stored, cells["stored"] / volumes)):
        figures = Cells(relative_divergence(stored.flux), cells["stored"], cells["source"], whole, volumes)
        record.values["regions"] = {name: region_figures(figures, mask) for name, mask in regions.items()}
    record.fluid(totals(work.loaded.job, source, plan, stored, mass_added(record.values["health"])))


def _finish(work: Work, source: State, stored: State | None) -> Outcome:
    """Draw, write the report, and say how it ended."""
    record, progress = work.record, work.progress
    states = {"source": source} if stored is None else {"source": source, "stored": stored}
    with progress.stage("drawing"):
        fields = {step: fm.cells_from_flux(state.flux, basis="cartesian") for step, state in states.items()}
        sides = [(fields[step], relative_divergence(state.flux)) for step, state in states.items()]
        shown = pictures(work.planes, [state.grid for state in states.values()], sides)
        record.pictures(shown)
        record.values["divergences"] = divergences({step: state.flux for step, state in states.items()})
        record.values["spectra"] = spectra({step: (state.grid, fields[step]) for step, state in states.items()})
    record.finish(progress)
    path = write_report(work.folder, record.values, shown)
    return Outcome(3 if record.exceeded else 0, f"{terminal(record.values)}\nreport: {path}")
