"""The report as one HTML page that opens from disk: no network, no script, all pictures inside.

It leads with the verdict and the limits, goes on with what was kept and lost along the steps of the job, shows it, and
ends with what was read, written and assumed. Everything comes from the numbers of report.json and the pictures.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

from fieldmover.report.assumed import files, job
from fieldmover.report.charts import chart_of
from fieldmover.report.elements import beside, figure, head_row, pairs, scrolling, section
from fieldmover.report.figures import Picture
from fieldmover.report.formats import escaped
from fieldmover.report.kept import curves, divergence, kept, measured
from fieldmover.report.meaning import meaning
from fieldmover.report.style import CSS
from fieldmover.report.text import allowed, found_text, verdict

POLICY = "default-src 'none'; img-src data:; style-src 'unsafe-inline'"
"""What a browser may load for this page: what is in it."""
ROOM = 2_000_000
"""Bytes for all maps, which take a third more in the page."""


def page(report: dict[str, Any], pictures: Sequence[Picture] = ()) -> str:
    """The text of report.html.

    Parameters
    ----------
    report : dict
        As in report.json.
    pictures : sequence of Picture
    """
    title = report["title"] or f"fieldmover {report['command']}"
    sections = [
        ("limits", "Limits", _limits(report)),
        ("kept", "What was kept and lost", kept(report)),
        ("pictures", "Pictures", _pictures(pictures)),
        ("divergence", "Where the divergence sits", divergence(report)),
        ("curves", "Profile and spectrum", curves(report)),
        ("measures", "Further figures", measured(report)),
        ("files", "What was read, written and assumed", files(report)),
        ("job", "The job", job(report)),
    ]
    shown = [found for found in sections if found[2]]
    links = "".join(f'<li><a href="#{name}">{head}</a></li>' for name, head, _ in shown)
    body = "".join(section(*found) for found in shown)
    return (
        '<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        f'<meta http-equiv="Content-Security-Policy" content="{POLICY}">\n'
        f"<title>{escaped(title)}: {escaped(verdict(report))}</title>\n<style>{CSS}</style>\n</head>\n<body>\n"
        '<a class="skip" href="#main">To the report</a>\n'
        f"<header><h1>{escaped(title)}</h1>{_verdict(report)}</header>\n"
        f'<nav aria-label="Sections"><ul>{links}</ul></nav>\n<main id="main">\n{body}</main>\n</body>\n</html>\n'
    )


def _verdict(report: dict[str, Any]) -> str:
    limits = report["limits"]
    kept = sum(1 for limit in limits if limit["passed"])
    good = kept == len(limits)
    count = f" ({kept} of {len(limits)} limits kept)" if limits else ""
    said = verdict(report)
    names = " to ".join(report["files"][role]["name"] for role in ("source", "target") if role in report["files"])
    facts = [
        f"fieldmover {report['command']}" + (f", {names}" if names else ""),
        f"snapshot at time {report['time']:.6g}" if report["time"] is not None else "",
        f"{report['seconds']:.1f} s, {report['peak_memory'] / 2**30:.2f} GiB of memory at most",
    ]
    return (
        f'<p class="verdict {"ok" if good else "exceeded"}"><span aria-hidden="true">{"✔" if good else "✘"}</span> '
        f"{escaped(said[0].upper() + said[1:])}{count}</p>"
        f'<p class="faint">{escaped("; ".join(fact for fact in facts if fact))}.</p>'
    )


def _limits(report: dict[str, Any]) -> str:
    rows = []
    for limit in report["limits"]:
        word = '<span class="ok">✔ kept</span>' if limit["passed"] else '<span class="exceeded">✘ exceeded</span>'
        cells = (found_text(limit), allowed(limit))
        row = "".join(f"<td>{escaped(cell)}</td>" for cell in cells)
        rows.append(f'<tr><th scope="row">{escaped(limit["name"])}</th><td>{word}</td>{row}</tr>')
    if not rows:
        return "<p>The job sets no limits.</p>"
    heads = ("figure", "verdict", "found", "allowed")
    meanings = {limit["name"]: meaning(limit["name"]) for limit in report["limits"]}
    return (
        scrolling("What was found against what is allowed", head_row(heads) + f"<tbody>{''.join(rows)}</tbody>")
        + f"<h3>Meaning</h3>{pairs(meanings)}"
    )


def _pictures(pictures: Sequence[Picture]) -> str:
    planes: dict[str, list[str]] = {}
    for p in _fitting(pictures):
        planes.setdefault(p.plane, []).append(figure(chart_of(p), f"{p.title}: {p.numbers}"))
    shown = "".join(f"<h3>Plane {escaped(plane)}</h3>{beside(maps)}" for plane, maps in planes.items())
    told = "<p>All maps of one kind in a plane have one scale. Grey: the grid has no cells there.</p>"
    return told + shown if shown else ""


def _fitting(pictures: Sequence[Picture]) -> Sequence[Picture]:
    """Maps full of detail take fewer pixels, so that the page stays small; their own files keep all."""
    size = sum(len(p.map) for p in pictures)
    return pictures if size <= ROOM else [p.smaller(0.95 * math.sqrt(ROOM / size)) for p in pictures]
