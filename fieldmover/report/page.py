"""The report as one HTML page that opens from disk: no network, no script, all pictures inside.

It leads with the verdict and the limits, goes on with what was kept and lost along the steps of the job, shows it, and
ends with what was read, written and assumed. Everything comes from the numbers of report.json and the pictures.
"""

from __future__ import annotations

import base64
import json
from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from fieldmover.report.charts import bars, lines
from fieldmover.report.figures import Picture
from fieldmover.report.formats import escaped, short
from fieldmover.report.meaning import meaning
from fieldmover.report.style import CSS
from fieldmover.report.text import (
    Rows,
    against_table,
    allowed,
    field_table,
    fluid_table,
    found_text,
    region_table,
    verdict,
)

POLICY = "default-src 'none'; img-src data:; style-src 'unsafe-inline'"
"""What a browser may load for this page: what is in it."""


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
        ("steps", "What was kept and lost", _steps(report)),
        ("pictures", "Pictures", _pictures(pictures)),
        ("divergence", "Where the divergence sits", _divergence(report)),
        ("curves", "Profile and spectrum", _curves(report)),
        ("files", "What was read, written and assumed", _files(report)),
        ("job", "The job", _job(report)),
    ]
    shown = [section for section in sections if section[2]]
    links = "".join(f'<li><a href="#{name}">{head}</a></li>' for name, head, _ in shown)
    body = "".join(
        f'<section id="{name}" aria-labelledby="{name}-head"><h2 id="{name}-head">{head}</h2>{inside}</section>\n'
        for name, head, inside in shown
    )
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
    return (
        f'<p class="verdict {"ok" if good else "exceeded"}"><span aria-hidden="true">{"✔" if good else "✘"}</span> '
        f"{escaped(said[0].upper() + said[1:])}{count}</p>"
        f'<p class="faint">fieldmover {escaped(report["command"])}'
        + (f", snapshot at time {report['time']:.6g}" if report["time"] is not None else "")
        + f"; {report['seconds']:.1f} s, {report['peak_memory'] / 2**30:.2f} GiB of memory at most.</p>"
    )


def _limits(report: dict[str, Any]) -> str:
    rows = []
    for limit in report["limits"]:
        word = (
            '<span class="ok">✔ kept</span>'
            if limit["passed"]
            else '<span class="exceeded">✘ exceeded</span>'
        )
        cells = (found_text(limit), allowed(limit))
        row = "".join(f"<td>{escaped(cell)}</td>" for cell in cells)
        rows.append(f'<tr><th scope="row">{escaped(limit["name"])}</th><td>{word}</td>{row}</tr>')
    if not rows:
        return "<p>The job sets no limits.</p>"
    heads = ("figure", "verdict", "found", "at most")
    meanings = {limit["name"]: meaning(limit["name"]) for limit in report["limits"]}
    return (
        _scroll("Limits", _head(heads) + f"<tbody>{''.join(rows)}</tbody>")
        + f"<h3>Meaning</h3>{_list(meanings)}"
    )


def _steps(report: dict[str, Any]) -> str:
    heads, rows = field_table(report)
    parts = [_table("The field, step by step", heads, rows)]
    for caption, (heads, rows) in {
        "Totals of conserved quantities": fluid_table(report),
        "Regions, of the field as stored": region_table(report),
        "Against another file": against_table(report),
    }.items():
        if rows:
            parts.append(_table(caption, heads, rows))
    covered = report["energy_covered"]
    if covered:
        first = next(iter(covered.values()))
        values = {
            step: (energy, f"{short(energy)} ({energy / first - 1:+.2e})" if first else short(energy))
            for step, energy in covered.items()
        }
        text = "Magnetic energy of the covered part along the steps: " + ", ".join(
            f"{step} {shown}" for step, (_, shown) in values.items()
        )
        caption = "Magnetic energy of the covered part; in brackets the relative change against the source."
        parts.append(_figure(bars(values, text), caption))
    found = report["coverage"]
    if found:
        parts.append(
            f"<p>The source reaches {100 * found['volume']:.4g} % of the volume of the target: of "
            f"{found['cells']} cells it covers {found['whole']} wholly and {found['cut']} in part.</p>"
        )
    return "".join(parts)


def _pictures(pictures: Sequence[Picture]) -> str:
    planes: dict[str, list[str]] = {}
    for p in pictures:
        planes.setdefault(p.plane, []).append(
            f'<figure><img src="data:image/png;base64,{base64.b64encode(p.png).decode()}" alt="{escaped(p.text)}">'
            f"<figcaption>{escaped(p.title)}</figcaption></figure>"
        )
    return "".join(
        f'<h3>Plane {escaped(plane)}</h3><div class="grid">{"".join(shown)}</div>'
        for plane, shown in planes.items()
    )


def _divergence(report: dict[str, Any]) -> str:
    found = report["divergences"]
    if not found:
        return ""
    curves, counts = {}, []
    for step, values in found.items():
        bins = values["histogram"]
        curves[step] = [(top, float(cells)) for top, cells in zip(bins["to"], bins["cells"], strict=True)]
        most = max(zip(bins["cells"], bins["to"], strict=True))
        counts.append(f"{step}: most cells ({most[0]}) up to {most[1]:.0e}")
    chart = lines(
        curves, ("relative divergence, up to", "cells"), "Cells by divergence. " + "; ".join(counts)
    )
    parts = [_figure(chart, "Number of cells in each decade of |net flux| / sum of |flux|.")]
    heads = ("cell", "x", "y", "z", "|net| / sum of |flux|", "net flux")
    for step, values in found.items():
        rows = [
            (str(w["cell"]), *(short(x) for x in w["position"]), short(w["relative"]), short(w["net"]))
            for w in values["worst_cells"]
        ]
        parts.append(_table(f"Worst cells, {step}", heads, rows))
    return "".join(parts)


def _curves(report: dict[str, Any]) -> str:
    parts = []
    found = report["profile"]
    if found:
        middles = [0.5 * (a + b) for a, b in zip(found["radii"], found["radii"][1:], strict=False)]
        curves = {step: list(zip(middles, e, strict=True)) for step, e in found["energy"].items()}
        peaks = [
            f"{step} largest ({short(max(e))}) at {short(middles[e.index(max(e))])}"
            for step, e in found["energy"].items()
        ]
        text = "Magnetic energy by distance from the origin, covered part: " + "; ".join(peaks)
        chart = lines(curves, ("distance from the origin", "energy of a shell"), text, (False, True))
        parts.append(_figure(chart, "Magnetic energy between spheres about the origin, covered part."))
    if report["spectra"]:
        curves = {s: list(zip(v["k"], v["energy"], strict=True)) for s, v in report["spectra"].items()}
        said = [f"{s} largest ({short(max(v['energy']))})" for s, v in report["spectra"].items()]
        chart = lines(
            curves, ("wave number k", "energy"), "Magnetic energy by wave number: " + "; ".join(said)
        )
        parts.append(_figure(chart, "Magnetic energy by wave number; the box is taken to repeat."))
    return f'<div class="grid">{"".join(parts)}</div>' if parts else ""


def _files(report: dict[str, Any]) -> str:
    files: Rows = [(role, f["name"], str(f["bytes"]), f["sha256"]) for role, f in report["files"].items()]
    grids = {
        f"grid, {step}": found["grid"]
        for step, found in report["fields"].items()
        if step in ("source", "stored")
    }
    parts = [
        _table("Files", ("file", "name", "bytes", "SHA-256"), files),
        f"<h3>Grids</h3>{_list(grids)}",
        f"<h3>Conventions</h3>{_list(_flat(report['conventions']))}",
    ]
    cleaning = report["cleaning"]
    if cleaning:
        told = ("method", "iterations", "stopped", "energy_removed", "largest_change", "rms_change")
        parts.append(
            f"<h3>Removal of monopoles</h3>{_list({key.replace('_', ' '): cleaning[key] for key in told})}"
        )
    times: Rows = [(stage["name"], f"{stage['seconds']:.2f}") for stage in report["stages"]]
    parts.append(_table("Time of each stage", ("stage", "seconds"), times))
    parts.append(f"<h3>Versions</h3>{_list(report['versions'])}")
    return "".join(parts)


def _job(report: dict[str, Any]) -> str:
    changes = report["job"]["changes"]
    changed = f"<p>Changed by --set: {escaped(', '.join(changes))}</p>" if changes else ""
    return (
        f'{changed}<pre tabindex="0" role="region" aria-label="The job file"><code>{escaped(report["job"]["text"])}'
        "</code></pre>"
    )


def _flat(values: Mapping[str, Any], prefix: str = "") -> dict[str, Any]:
    flat: dict[str, Any] = {}
    for key, value in values.items():
        flat.update(
            _flat(value, f"{prefix}{key}, ") if isinstance(value, Mapping) else {f"{prefix}{key}": value}
        )
    return flat


def _list(values: Mapping[str, Any]) -> str:
    return (
        "<dl>"
        + "".join(f"<dt>{escaped(key)}</dt><dd>{escaped(_said(v))}</dd>" for key, v in values.items())
        + "</dl>"
    )


def _said(value: Any) -> str:
    if isinstance(value, float):
        return short(value)
    return value if isinstance(value, str) else json.dumps(value, ensure_ascii=False)


def _table(label: str, heads: tuple[str, ...], rows: Rows) -> str:
    body = "".join(
        f'<tr><th scope="row">{escaped(row[0].strip())}</th>'
        + "".join(f"<td>{escaped(cell)}</td>" for cell in row[1:])
        + "</tr>"
        for row in rows
    )
    return _scroll(label, f"{_head(heads)}<tbody>{body}</tbody>")


def _head(heads: Iterable[str]) -> str:
    cells = "".join(f'<th scope="col">{escaped(head)}</th>' if head else "<td></td>" for head in heads)
    return f"<thead><tr>{cells}</tr></thead>"


def _scroll(label: str, inside: str) -> str:
    """A table that scrolls by itself where the page is narrow, by keyboard too."""
    return (
        f'<div class="scroll" tabindex="0" role="region" aria-label="{escaped(label)}"><table>'
        f"<caption>{escaped(label)}</caption>{inside}</table></div>"
    )


def _figure(inside: str, caption: str) -> str:
    return f"<figure>{inside}<figcaption>{escaped(caption)}</figcaption></figure>"
