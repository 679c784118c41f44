"""What a job would do: what it reads, writes and replaces, and what that takes."""

from __future__ import annotations

import math
from pathlib import Path

from fieldmover.jobs.boxes import target_of
from fieldmover.jobs.grids import target_grid
from fieldmover.jobs.load import Loaded
from fieldmover.jobs.read import source_datasets
from fieldmover.jobs.record import Record
from fieldmover.jobs.run import check_cleaning, check_output, report_folder, total_bytes, wishes
from fieldmover.jobs.store import bytes_needed
from fieldmover.report.formats import table
from fieldmover.report.write import FILES, check_folder
from fieldmover.snapshots.gate import memory_available
from fieldmover.snapshots.viewable import sidecar
from fieldmover.snapshots.write import check_space

BASE, PER_SOURCE_CELL, PER_TARGET_CELL = 0.29e9, 360.0, 235.0
"""Bytes of memory, fitted to jobs of 0.8 to 2.7 million source cells and 0.1 to 3 million target cells."""
START, SECONDS_PER_SOURCE_CELL, SECONDS_PER_TARGET_CELL = 3.0, 5e-6, 2e-6
"""Measured on the same jobs with two cores; a rough guide elsewhere."""


def foresee(loaded: Loaded, command: str, folder: Path | None = None, overwrite: bool = False) -> str:
    """What `--dry-run` prints; mistakes that can be seen without the fields are raised as in the job itself.

    Parameters
    ----------
    loaded : Loaded
    command : "move", "clean" or "check"
    folder : Path, optional
        Of the report.
    overwrite : bool

    Raises
    ------
    JobError, DataError, OutputError
        See `fieldmover.errors`.
    """
    writes = command != "check"
    folder = folder or report_folder(loaded, "report" if writes else "check")
    check_folder(folder)
    if command == "clean":
        check_cleaning(loaded)
    if writes:
        check_output(loaded, overwrite)
    Record(loaded, command)  # a report to compare with that is none is told
    source, datasets = source_datasets(loaded)
    target, size = source, bytes_needed(loaded, source.shape)
    if loaded.job.target.grid is not None or command == "move":
        whole = target_of(loaded, target_grid(loaded))
        target, size = whole.grid, total_bytes(loaded, whole)
    if writes:
        check_space(loaded.target, size)
    wishes(loaded, target if writes or loaded.target.exists() else source, folder)
    cells, others = math.prod(source.shape), math.prod(target.shape)
    lines = [
        f"reads {loaded.source}",
        table([(n, f"{size} bytes") for n, size in datasets.items()], ("", "")),
    ]
    lines.append(f"on {source!r}")
    if writes:
        verb = "replaces" if loaded.target.exists() else "writes"
        lines.append(f"{verb} {loaded.target}, about {size / 1e6:.1f} MB on {target!r}")
        if loaded.job.target.view:
            lines.append(f"{verb} {sidecar(loaded.target)}")
    elif loaded.target.exists():
        lines.append(f"reads {loaded.target}, {loaded.target.stat().st_size / 1e6:.1f} MB on {target!r}")
    for name in FILES:
        verb = "replaces" if (folder / name).exists() else "writes"
        lines.append(f"{verb} {folder / name}")
    memory = BASE + PER_SOURCE_CELL * cells + PER_TARGET_CELL * others
    seconds = START + SECONDS_PER_SOURCE_CELL * cells + SECONDS_PER_TARGET_CELL * others
    lines.append(f"memory: about {memory / 2**30:.2f} GiB; {memory_available() / 2**30:.2f} GiB are free")
    lines.append(f"time: about {seconds:.0f} s on two cores")
    return "\n".join(lines)
