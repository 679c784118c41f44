"""The report as numbers: one JSON file that everything else is made from, and the table on the terminal."""

from __future__ import annotations

import html
import json
import re
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

from fieldmover.snapshots.write import write_text

SCHEMA = {"name": "fieldmover report", "version": 2}

ILLEGAL = re.compile("[^\t\n\r\x20-\x7e\xa0-\ud7ff\ue000-\ufdcf\ufdf0-\ufffd\U00010000-\U0001fffd]")
"""Characters that XML 1.0 or HTML does not have, or that nobody sees."""


def legal(text: str) -> str:
    """Text that may stand in XML and HTML: other characters become the sign for one that is missing."""
    return ILLEGAL.sub("\ufffd", text)


def escaped(text: str) -> str:
    """Text for HTML, within elements and quoted attributes.

    Examples
    --------
    >>> escaped("a < b")
    'a &lt; b'
    """
    return html.escape(legal(text))


def to_json(report: Mapping[str, Any]) -> str:
    """A report as JSON text.

    Raises
    ------
    ValueError
        If a number is NaN or infinite: a report never passes such a number on.

    Examples
    --------
    >>> print(to_json({"mass": 1.5}))
    {
      "mass": 1.5
    }
    """
    return json.dumps(report, indent=2, allow_nan=False, ensure_ascii=False)


def write_json(folder: Path, report: Mapping[str, Any]) -> Path:
    """Write `report.json` into a folder, as a whole."""
    path = folder / "report.json"
    write_text(path, to_json(report) + "\n")
    return path


def table(rows: Iterable[tuple[str, ...]], heads: tuple[str, ...]) -> str:
    """Rows of text in columns: the first to the left, the others to the right.

    Examples
    --------
    >>> print(table([("mass", "1.25"), ("energy", "3")], ("", "value")))
            value
    mass     1.25
    energy      3
    """
    lines = [heads, *rows]
    widths = [max(len(line[column]) for line in lines) for column in range(len(heads))]
    return "\n".join(
        "  ".join(
            cell.ljust(width) if column == 0 else cell.rjust(width)
            for column, (cell, width) in enumerate(zip(line, widths, strict=True))
        ).rstrip()
        for line in lines
    )


def bound(value: float) -> str:
    """A limit as people write it.

    Examples
    --------
    >>> bound(1e-12), bound(0.02)
    ('1e-12', '0.02')
    """
    return f"{value:.6g}"


def short(value: float | None) -> str:
    """A number for the table.

    Examples
    --------
    >>> short(0.000123456), short(12.5), short(0.0), short(None)
    ('1.235e-04', '12.5', '0', '-')
    """
    if value is None:
        return "-"
    if value == 0 or 1e-3 <= abs(value) < 1e5:
        return f"{value:.6g}"
    return f"{value:.3e}"


def said(value: Any) -> str:
    """A value of a job or a record, as text.

    Examples
    --------
    >>> said(["/bx", "/by"]), said(False), said(1e-12), said(None), said({"from": 0, "to": 1})
    ('/bx, /by', 'no', '1.000e-12', 'none', 'from 0, to 1')
    """
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float):
        return short(value)
    if isinstance(value, Mapping):
        return ", ".join(f"{key} {said(v)}" for key, v in value.items())
    if isinstance(value, list | tuple):
        return ", ".join(said(v) for v in value)
    return "none" if value is None else str(value)
