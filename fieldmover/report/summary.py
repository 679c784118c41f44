"""A summary in Markdown, for the log of a CI run."""

from __future__ import annotations

import os
import re
from pathlib import Path
from typing import Any

from fieldmover.report.tables import Rows, brief
from fieldmover.report.text import limit_rows, verdict
from fieldmover.snapshots.write import unwritable

STEP_SUMMARY = "GITHUB_STEP_SUMMARY"
"""Names the file that a CI service shows beside a run."""
CAP = 900_000
"""Bytes; such services refuse a file of more than 1 MiB."""


def markdown(report: dict[str, Any]) -> str:
    """The text of summary.md.

    Parameters
    ----------
    report : dict
        As in report.json.
    """
    sign = "❌" if any(not limit["passed"] for limit in report["limits"]) else "✅"
    parts = [f"## {sign} {_plain(verdict(report))}", _plain(report["title"])]
    if report["limits"]:
        parts.append(_table(("limit", "found", "allowed", "verdict"), limit_rows(report)))
    parts += [_table(found.heads, found.rows) for found in brief(report)]
    parts += [f"- {role}: `{f['name']}`, SHA-256 `{f['sha256']}`" for role, f in report["files"].items()]
    return "\n\n".join(part for part in parts if part) + "\n"


def append_step_summary(text: str) -> None:
    """Add the summary to the file that the CI service names, if it does, and never beyond its cap.

    Raises
    ------
    OutputError
        If that file cannot be written.
    """
    name = os.environ.get(STEP_SUMMARY)
    if not name:
        return
    path = Path(name)
    try:
        with open(path, "ab") as file:
            room = CAP - file.tell()
            data = text.encode()
            if len(data) > room:
                data = data[: max(room, 0)].decode(errors="ignore").encode()
            file.write(data)
    except OSError as error:
        raise unwritable(path, error) from None


def _table(heads: tuple[str, ...], rows: Rows) -> str:
    lines = [heads, ("---", *["---:"] * (len(heads) - 1)), *rows]
    return "\n".join("| " + " | ".join(_plain(cell.strip()) for cell in line) + " |" for line in lines)


def _plain(text: str) -> str:
    """Text without the meaning that Markdown or HTML would give it."""
    flat = " ".join(text.split())
    return re.sub(r"([\\`*_{}\[\]<>|#!~&])", r"\\\1", flat)
