"""All files of a report, each written as a whole."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from fieldmover.errors import OutputError
from fieldmover.report.figures import Picture
from fieldmover.report.formats import write_json
from fieldmover.report.junit import junit
from fieldmover.report.page import page
from fieldmover.report.summary import append_step_summary, markdown
from fieldmover.snapshots.write import unwritable, write_bytes, write_text

FILES = ("report.html", "report.json", "report.xml", "summary.md")


def write_report(folder: Path, report: dict[str, Any], pictures: Sequence[Picture]) -> Path:
    """Write the files of a report; return the page.

    Raises
    ------
    OutputError
        If one of them cannot be written.
    """
    make_folder(folder)
    write_json(folder, report)
    write_text(folder / "report.xml", junit(report))
    summary = markdown(report)
    write_text(folder / "summary.md", summary)
    path = folder / "report.html"
    write_text(path, page(report, pictures))
    for picture in pictures:  # also for slides and notes
        write_bytes(folder / picture.file_name, picture.png)
    append_step_summary(summary)
    return path


def make_folder(folder: Path) -> None:
    """The folder of a report, made if missing.

    Raises
    ------
    OutputError
        If it cannot be.
    """
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise unwritable(folder, error) from None


def check_folder(folder: Path) -> None:
    """Find out before the work whether a report can be written, without leaving a folder behind.

    Raises
    ------
    OutputError
        If the folder, or the one it would be made in, is none or closed to this user.
    """
    there = next(path for path in (folder.absolute(), *folder.absolute().parents) if path.exists())
    if not there.is_dir():
        raise OutputError(f"{folder}: cannot be written: {there} is not a folder")
    if not os.access(there, os.W_OK | os.X_OK):
        raise OutputError(f"{folder}: cannot be written: permission denied")
