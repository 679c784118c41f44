"""What lies in an HDF5 file, what it looks like, and a job to start from."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from fieldmover.errors import JobError
from fieldmover.jobs.guess import Guess, guess
from fieldmover.report.formats import table
from fieldmover.snapshots.gate import Item, Snapshot
from fieldmover.snapshots.write import write_text

UNKNOWN = "FILL IN"
"""Stands in a job for what no file tells; such a job is refused with the line."""


def survey(path: Path, job: Path | None = None, overwrite: bool = False) -> str:
    """List a file, guess what it holds and write a job to start from.

    Parameters
    ----------
    path : Path
        An HDF5 file.
    job : Path, optional
        Where the job goes.
    overwrite : bool
        Whether a file of that name is replaced.

    Returns
    -------
    str
        For the terminal.

    Raises
    ------
    DataError
        If the file cannot be read.
    JobError
        If the job exists, or is the file itself.
    OutputError
        If it cannot be written.
    """
    if job is not None and job.exists():
        if path.exists() and job.samefile(path):
            raise JobError(f"{job}: the job would replace the file that is looked at; give it another name")
        if not overwrite:
            raise JobError(f"{job}: exists; give --overwrite to replace it")
    with Snapshot(path) as snapshot:
        items = snapshot.contents()

        def read(name: str) -> NDArray[np.float64]:
            if "@" in name:
                return np.array([snapshot.number(name)])
            return np.asarray(snapshot.read(name), dtype=np.float64)

        found = guess(items, read)
    lines = [f"{path}: {len(items)} datasets and numbers", "", _listing(items), ""]
    lines += [f"{what} ({sure}): {_printable(why)}" for what, sure, why in found.reasons]
    if job is None:
        lines += ["", "give --job JOB.toml to write a job to start from"]
    else:
        write_text(job, job_text(path, job, found))
        lines += ["", f"wrote {job}: replace each {UNKNOWN!r} in it"]
    return "\n".join(lines)


def job_text(path: Path, job: Path, found: Guess) -> str:
    """A job for what was guessed; what is not known stands as FILL IN."""
    try:
        file = path.resolve().relative_to(job.resolve().parent).as_posix()
    except ValueError:
        file = str(path.resolve())
    straight = found.kind == "cartesian"
    basis = "" if straight else f'basis = "{UNKNOWN}"  # physical (orthonormal), coordinate (B^i) or cartesian\n'
    kind = found.kind or UNKNOWN
    axes = _list(found.axes or [UNKNOWN] * 3)
    why = "".join(f"# {what} ({sure}): {_printable(reason)}\n" for what, sure, reason in found.reasons)
    text = (
        f"# Guessed from {_quoted(path.name)}; look through it before you trust it.\n{why}"
        f"\n[source]\nfile = {_quoted(file)}\naxes = {_quoted(found.order)}\nghosts = {found.ghosts}\n"
        + (f"time = {_quoted(found.time)}\n" if found.time else "")
        + f"\n[source.grid]\nkind = {_quoted(kind)}\n{'centres' if found.centres else 'nodes'} = {axes}\n"
        f"\n[source.magnetic]\nat = {_quoted(found.at)}\ndata = {_list(found.magnetic or [UNKNOWN] * 3)}\n{basis}"
        f'unit = "{UNKNOWN}"  # gaussian, heaviside-lorentz or a number\n'
    )
    target = ""
    if found.density:
        text += f'\n[source.fluid.density]\ndata = {_quoted(found.density)}\ncarry = "conserve"\n'
        target = 'density = "/density"\n'
        if found.velocity:
            text += f'\n[source.fluid.velocity]\ndata = {_list(found.velocity)}\n{basis}carry = "by mass"\n'
            target += 'velocity = ["/vx", "/vy", "/vz"]\n'
    return text + (
        f"\n[target]\nfile = {_quoted(path.stem + '-moved.h5')}\n"
        f'\n[target.grid]\nkind = "cartesian"\nnodes = "{UNKNOWN}"'
        "  # such as [{ from = -1, to = 1, cells = 64 }, ...], one for each axis\n"
        '\n[target.magnetic]\nat = "faces"\ndata = ["/Bx", "/By", "/Bz"]\n'
        f'unit = "{UNKNOWN}"  # gaussian, heaviside-lorentz or a number\n'
        + (f"\n[target.fluid]\n{target}" if target else "")
        + "\n[limits]\ndivergence = 1e-12\nenergy_change = 0.02\n"
        + ("mass_change = 1e-10\n" if found.density else "")
    )


def _quoted(text: str) -> str:
    """A string of TOML; JSON writes some letters as pairs of escapes, which TOML does not know."""
    return json.dumps(text, ensure_ascii=False)


def _printable(text: str) -> str:
    """Text that stays within a line, and does nothing to a terminal, whatever datasets are called."""
    return "".join(c if c.isprintable() else "?" for c in text)


def _list(names: list[str] | tuple[str, ...]) -> str:
    return f"[{', '.join(_quoted(name) for name in names)}]"


def _listing(items: list[Item]) -> str:
    rows = [
        (
            _printable(item.name),
            " x ".join(map(str, item.shape)) or "1",
            item.type,
            f"refused: {item.refused}" if item.refused else "",
        )
        for item in items
    ]
    return table(rows, ("dataset", "shape", "type", ""))
