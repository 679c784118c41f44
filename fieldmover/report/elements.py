"""Pieces of the page: tables, lists, figures, sections."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from fieldmover.report.formats import escaped, said
from fieldmover.report.tables import Table

LONG = 32
"""Letters from which on a cell may have several lines."""


def section(name: str, head: str, inside: str) -> str:
    """A part of the page under its heading."""
    return f'<section id="{name}" aria-labelledby="{name}-head"><h2 id="{name}-head">{head}</h2>{inside}</section>\n'


def table(found: Table) -> str:
    """Rows of text under a caption, a note below; the first cell of each row is its heading.

    Examples
    --------
    >>> table(Table("Totals", ("", "mass"), [("source", "1")])).count('scope="row"')
    1
    """
    body = "".join(
        f'<tr><th scope="row"{_indent(row[0])}>{escaped(row[0].strip())}</th>'
        + "".join(f"<td{_long(cell)}>{escaped(cell)}</td>" for cell in row[1:])
        + "</tr>"
        for row in found.rows
    )
    note = f'<p class="faint">{prose(found.note)}</p>' if found.note else ""
    shown = scrolling(found.caption, head_row(found.heads) + f"<tbody>{body}</tbody>")
    return f'<div class="block">{shown}{note}</div>'


def head_row(heads: Iterable[str]) -> str:
    """The head of a table; a column without a heading stays empty."""
    cells = "".join(f'<th scope="col">{escaped(head)}</th>' if head else "<td></td>" for head in heads)
    return f"<thead><tr>{cells}</tr></thead>"


def scrolling(caption: str, inside: str) -> str:
    """A table that scrolls by itself where the page is narrow, by keyboard too."""
    name = escaped(caption)
    return (
        f'<div class="scroll" tabindex="0" role="region" aria-label="{name}"><table><caption>{name}</caption>'
        f"{inside}</table></div>"
    )


def pairs(values: Mapping[str, Any]) -> str:
    """Terms and what belongs to them."""
    items = "".join(f"<dt>{escaped(key)}</dt><dd>{escaped(said(v))}</dd>" for key, v in values.items())
    return f"<dl>{items}</dl>"


def figure(inside: str, caption: str) -> str:
    """A chart or map with its caption."""
    return f"<figure>{inside}<figcaption>{prose(caption)}</figcaption></figure>"


def beside(figures: Sequence[str]) -> str:
    """Figures side by side, as many as there is room for."""
    return f'<div class="grid">{"".join(figures)}</div>' if figures else ""


def prose(text: str) -> str:
    """Text for HTML whose numbers are not broken at a minus sign.

    Examples
    --------
    >>> prose("at most 1e-05")
    'at most <span class="number">1e-05</span>'
    """
    return re.sub(r"-?\d[\d.]*e[-+]\d+", r'<span class="number">\g<0></span>', escaped(text))


def _long(text: str) -> str:
    return ' class="long"' if len(text) > LONG else ""


def _indent(text: str) -> str:
    return ' class="part"' if text.startswith(" ") else ""
