"""The page on the field and the fluid themselves: what was kept and lost, where, and at which scale."""

from __future__ import annotations

from typing import Any

from fieldmover.report import tables
from fieldmover.report.charts import bars, histogram, lines
from fieldmover.report.elements import beside, figure, pairs, prose, table
from fieldmover.report.formats import short
from fieldmover.report.tables import Rows, Table
from fieldmover.report.text import in_short

CLEANING = (
    "method", "iterations", "stopped", "energy_removed", "largest_change", "largest_change_cell",
    "largest_change_at", "rms_change", "frozen_faces", "excised_cells",
)  # fmt: skip
DECADES = 12
"""Of a spectrum, below its largest value; further down is rounding."""


def kept(report: dict[str, Any]) -> str:
    """Along the steps of the job: in words, tables and bars."""
    told = "".join(f"<li>{prose(said)}</li>" for said in in_short(report))
    first, *others = (table(found) for found in tables.kept(report))
    return f'<ul>{told}</ul>{first}{beside(_energies(report))}<div class="blocks">{"".join(others)}</div>'


def measured(report: dict[str, Any]) -> str:
    """Figures beside the steps of the job."""
    parts = [table(found) for found in tables.others(report)]
    cleanings = {
        "Removal of monopoles": report["cleaning"],
        "Stored values made divergence-free in the receiving code's stencil": report.get("stencil_cleaning"),
    }
    for head, found in cleanings.items():
        if found:
            told = {key.replace("_", " "): found[key] for key in CLEANING}
            parts.append(f'<div class="block"><h3>{head}</h3>{pairs(told)}</div>')
    return f'<div class="blocks">{"".join(parts)}</div>' if parts else ""


def _energies(report: dict[str, Any]) -> list[str]:
    """Energy along the steps, and what each step changed of it."""
    covered = report["energy_covered"]
    if len(covered) < 2:
        return []
    (_, first), *later = covered.items()
    told = ", ".join(f"{step} {short(energy)}" for step, energy in covered.items())
    whole = bars({step: (e, short(e)) for step, e in covered.items()}, f"Magnetic energy along the steps: {told}")
    shown = [figure(whole, "Magnetic energy of the covered part, step by step.")]
    if first:
        changes = {step: energy / first - 1 for step, energy in later}
        told = ", ".join(f"{step} {change:+.2e}" for step, change in changes.items())
        chart = bars({s: (c, f"{c:+.2e}") for s, c in changes.items()}, f"Relative change against the source: {told}")
        shown.append(figure(chart, "Its relative change against the source."))
    return shown


def divergence(report: dict[str, Any]) -> str:
    """How many cells have how much of it, and the worst of them."""
    found = report["divergences"]
    if not found:
        return ""
    series, counts = {}, []
    for step, values in found.items():
        bins = values["histogram"]
        series[step] = list(zip(bins["from"], bins["to"], bins["cells"], strict=True))
        _, high, most = max(series[step], key=lambda found: found[2])
        counts.append(f"{step}: most cells ({most}) up to {high:.0e}")
    chart = histogram(series, ("|net flux| / sum of |flux|", "cells"), "Cells by divergence. " + "; ".join(counts))
    shown = figure(chart, "Number of cells in each decade; cells without any divergence stand in the first.")
    heads = ("cell", "|net flux| / sum", "net flux", "x", "y", "z")
    worst = []
    for step, values in found.items():
        rows: Rows = [
            (str(w["cell"]), short(w["relative"]), short(w["net"]), *(f"{x:.4g}" for x in w["position"]))
            for w in values["worst_cells"]
        ]
        worst.append(table(Table(f"Worst cells, {step} (indices from 0)", heads, rows)))
    return f'{shown}<div class="blocks">{"".join(worst)}</div>'


def curves(report: dict[str, Any]) -> str:
    """Energy by distance and by wave number."""
    parts = []
    found = report["profile"]
    if found:
        middles = [0.5 * (a + b) for a, b in zip(found["radii"], found["radii"][1:], strict=False)]
        series = {step: list(zip(middles, e, strict=True)) for step, e in found["energy"].items()}
        peaks = [
            f"{step} largest ({short(max(e))}) at {short(middles[e.index(max(e))])}"
            for step, e in found["energy"].items()
        ]
        text = "Magnetic energy by distance from the origin, covered part: " + "; ".join(peaks)
        chart = lines(series, ("distance from the origin", "energy of a shell"), text, (False, True))
        parts.append(figure(chart, "Magnetic energy between spheres about the origin, covered part."))
    if report["spectra"]:
        most = max(max(v["energy"]) for v in report["spectra"].values())
        series = {
            step: [(k, e) for k, e in zip(v["k"], v["energy"], strict=True) if e >= most * 10.0**-DECADES]
            for step, v in report["spectra"].items()
        }
        peaks = [
            f"{step} largest ({short(max(v['energy']))}) at k = {short(v['k'][v['energy'].index(max(v['energy']))])}"
            for step, v in report["spectra"].items()
        ]
        text = "Magnetic energy by wave number: " + "; ".join(peaks)
        chart = lines(series, ("wave number k", "energy"), text)
        parts.append(figure(chart, "Magnetic energy by wave number; the box is taken to repeat."))
    return beside(parts)
