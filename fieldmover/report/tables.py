"""The tables of a report, each once: for the terminal, the page and the summary alike."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from fieldmover.report.formats import said, short

Rows = Sequence[tuple[str, ...]]

NORMS = (("largest", "linf"), ("root mean square", "l2"), ("mean", "l1"))
LOST = (("cleaning", "cleaned"), ("moving", "moved"), ("storing", "stored"))


@dataclass(frozen=True)
class Table:
    """Rows of text under heads.

    Attributes
    ----------
    caption, note : str
        What it shows, and what a reader must know about it.
    heads : tuple of str
    rows : sequence of tuple of str
        Empty where there is nothing to show.
    """

    caption: str
    heads: tuple[str, ...]
    rows: Rows
    note: str = ""


EMPTY = Table("", (), [])


def brief(report: Mapping[str, Any]) -> list[Table]:
    """Those that a log should show."""
    return _filled(report, steps, totals, boxes, health, regions, against)


def kept(report: Mapping[str, Any]) -> list[Table]:
    """What was kept and lost."""
    return _filled(report, steps, stencil, totals, gas, turning, boxes, charge, perturbation, health, regions)


def others(report: Mapping[str, Any]) -> list[Table]:
    """What else was measured."""
    return _filled(report, surfaces, curved, helicity, extremes, agreement, against, side_by_side)


def _filled(report: Mapping[str, Any], *made: Callable[[Mapping[str, Any]], Table]) -> list[Table]:
    return [found for make in made if (found := make(report)).rows]


def steps(report: Mapping[str, Any]) -> Table:
    """Divergence and energy along the steps of the job; what was lost at each, on a line of its own."""
    fields, covered, lost = report["fields"], report["energy_covered"], report["figures"]["energy_lost"]
    names = list(fields)
    rows: list[tuple[str, ...]] = [
        (f"divergence, {label}", *(short(fields[step]["divergence"][key]) for step in names)) for label, key in NORMS
    ]
    scaled = (short(fields[step]["divergence"]["scaled"]["linf"]) for step in names)
    rows.append(("h |div B| / |B|, largest", *scaled))
    rows.append(("magnetic energy, whole grid", *(short(fields[step]["energy"]["total"]) for step in names)))
    if covered:
        rows.append(("magnetic energy, covered part", *(short(covered.get(step)) for step in names)))
        for loss, after in LOST:
            if loss in lost:
                cells = (short(lost[loss]) if step == after else "" for step in names)
                rows.append((f"  lost to {loss}, relative", *cells))
        last = short(report["figures"]["energy_change"])
        rows.append(("  change in all, relative", *[""] * (len(names) - 1), last))
    note = (
        "Divergence: |net flux| of a cell over the sum of |flux| through its faces. Energy: half the integral of B², "
        "Heaviside-Lorentz. The covered part: the cells of the target that the source covers wholly. A negative loss "
        "is a gain."
    )
    return Table("The field, step by step", ("", *names), rows, note)


def totals(report: Mapping[str, Any]) -> Table:
    """Totals of conserved quantities."""
    found = report["fluid"]
    rare = [key for key in ("removed_by_blend", "added_by_cure") if any(totals.get(key) for totals in found.values())]
    keys = ("source", "moved", "added_outside", *rare, "stored", "change")
    rows = [(f"total of {name}", *(short(totals[key]) for key in keys)) for name, totals in found.items()]
    note = "Change: |stored - added + removed - moved| / moved."
    return Table("Totals of conserved quantities", ("", *(_words(key) for key in keys)), rows, note)


def gas(report: Mapping[str, Any]) -> Table:
    """Mass, momentum, angular momentum and energies of the gas."""
    found = report.get("gas") or {}
    rows: list[tuple[str, ...]] = []
    for name, before in found.get("before", {}).items():
        after, change = found["stored"][name], short(found["change"][name])
        if isinstance(before, Mapping):
            rows += [(f"{_words(name)}, {axis}", short(v), short(after[axis]), "") for axis, v in before.items()]
            rows.append((f"  {_words(name)}, size of the change", "", "", change))
        else:
            rows.append((_words(name), short(before), short(after), change))
    note = "Over the cells that the source covers wholly; changes are relative. Angular momentum is about the origin."
    return Table("Mass, momentum and energy of the gas", ("", "source", "stored", "change"), rows, note)


def turning(report: Mapping[str, Any]) -> Table:
    """Angular momentum about an axis, and what was done to keep it."""
    found = report.get("angular_momentum")
    keys = ("source", "arrived", "moved", "stored", "turn")
    rows = [("angular momentum", *(short(found[key]) for key in keys))] if found else []
    heads = ("", "whole source", "of it in the target", "as moved", "as returned", "rate of turning added")
    return Table("Angular momentum about the axis of the job", heads, rows)


def boxes(report: Mapping[str, Any]) -> Table:
    """The boxes of a nested target, each as stored."""
    rows = [
        (box["group"], *(short(box[key]) for key in ("divergence", "energy", "mass")), box["grid"].strip("<>"))
        for box in report.get("boxes") or []
    ]
    return Table("Boxes of the target", ("group", "divergence", "magnetic energy", "mass", "grid"), rows)


def charge(report: Mapping[str, Any]) -> Table:
    """Net flux out of a hole, moved as the field of a point."""
    found = report.get("charge")
    rows = [] if not found else [(_words(name), said(value)) for name, value in found.items()]
    note = "Net flux out of the hole of the source, moved as the field of a point charge."
    return Table("Net flux", ("", "found"), rows, note)


def perturbation(report: Mapping[str, Any]) -> Table:
    """Random changes that the job wanted."""
    found = report.get("perturbation")
    rows = [] if not found else [(_words(name), said(value)) for name, value in found.items()]
    return Table("Random changes of the potential", ("", "found"), rows, "Relative; they leave no divergence.")


def health(report: Mapping[str, Any]) -> Table:
    """What in the state of the gas a receiving code would stumble over."""
    rows = []
    for found in report.get("health") or []:
        numbers = (short(found[key]) for key in ("value", "limit", "mass_added", "energy_added"))
        right = "-" if found["count"] == 0 else "yes" if found["applied"] else "no"
        rows.append(
            (found["rule"], str(found["count"]), _place(found["first"]), _place(found["worst"]), *numbers, right)
        )
    heads = ("rule", "cells", "first", "worst", "value there", "allowed", "mass added", "energy added", "put right")
    note = "Cells that break a rule, indices from 0; mass and energy that putting them right adds or would add."
    return Table("Health of the state", heads, rows, note)


def stencil(report: Mapping[str, Any]) -> Table:
    """Divergence of the stored numbers as the receiving code will see it."""
    found = report.get("stencil")
    if not found or found["stencil"] == "faces":  # which the steps show
        return EMPTY
    rows = [(label, short(found[key]), short(found["scaled"][key])) for label, key in NORMS]
    note = f"Largest |net flux| of a cell: {short(found['net_flux'])}. Worst cell: {_place(found['cell'])}."
    heads = ("", "|net flux| / sum of |flux|", "h |div B| / |B|")
    return Table(f"Divergence in the receiving code's stencil ({found['stencil']})", heads, rows, note)


def surfaces(report: Mapping[str, Any]) -> Table:
    """Flux through the surfaces that the job names."""
    keys = ("source_flux", "flux", "change", "source_unsigned", "unsigned")
    meant = report.get("surfaces_meant") or {}
    rows = [
        (name, *(short(found[key]) for key in keys), str(meant.get(name, "")))
        for name, found in (report.get("surfaces") or {}).items()
    ]
    heads = ("", "flux, source", "flux, stored", "change", "unsigned, source", "unsigned, stored", "surface")
    note = "Unsigned: the integral of |B.n|. Change: the difference of the fluxes over the unsigned flux of the source."
    return Table("Flux through surfaces", heads, rows, note)


def curved(report: Mapping[str, Any]) -> Table:
    """Magnetic energy in the metric of the job."""
    found = report.get("curved") or {}
    row = ("magnetic energy", *(short(figures["energy"]) for figures in found.values()))
    note = "Half of gamma_ij B^i B^j over proper volumes of the whole grid."
    return Table("In the metric", ("", *found), [row] if found else [], note)


def helicity(report: Mapping[str, Any]) -> Table:
    """Relative helicity and free energy."""
    found, missing = report.get("helicity") or {}, report.get("helicity_missing") or {}
    labels = {
        "value": "relative helicity",
        "energy": "magnetic energy",
        "reference_energy": "energy of the reference",
        "free_energy": "free energy",
    }
    names = [*found, *missing]
    rows = [
        (label, *(short(found[step][key]) if step in found else "not measured" for step in names))
        for key, label in labels.items()
    ]
    note = "The reference is the field without currents that has the same flux through the walls."
    note += "".join(f" {step}: {why}." for step, why in missing.items())
    return Table("Helicity", ("", *names), rows if names else [], note)


def extremes(report: Mapping[str, Any]) -> Table:
    """Extremes of the state, and where they are."""
    labels = {
        "b2_over_rho_largest": "largest b² / rho",
        "beta_smallest": "smallest beta",
        "beta_largest": "largest beta",
        "speed_largest": "largest speed",
        "lorentz_largest": "largest Lorentz factor",
    }
    where = report.get("extremes_at") or {}
    rows = [
        (f"{label}, {step}", short(values[key]), *_where(where.get(step, {}).get(key)))
        for key, label in labels.items()
        for step, values in (report.get("extremes") or {}).items()
        if values.get(key) is not None
    ]
    return Table("Extremes of the state", ("", "value", "cell", "x, y, z"), rows)


def regions(report: Mapping[str, Any]) -> Table:
    """Figures of the regions that the job names."""
    keys = ("divergence", "energy", "energy_change", "strength")
    rows = [(f"region {name}", *(short(found[key]) for key in keys)) for name, found in report["regions"].items()]
    heads = ("", "divergence", "energy", "change of energy", "largest |B|")
    return Table("Regions, of the field as stored", heads, rows)


def agreement(report: Mapping[str, Any]) -> Table:
    """The field as stored against the source, where the grids overlap."""
    equal = {"vector_correlation": "1", "cosine": "1", "normalised_error": "0", "mean_error": "0", "energy_ratio": "1"}
    found = report.get("agreement") or {}
    rows = [(_words(name), short(value), equal.get(name, "")) for name, value in found.items()]
    note = "Figures of Schrijver et al. (2006) where the source reaches; overlap: that part of the target's volume."
    return Table("The field as stored against the source", ("", "found", "if equal"), rows, note)


def against(report: Mapping[str, Any]) -> Table:
    """The field and its figures against those of another file."""
    found = report["against"]
    if found is None:
        return EMPTY
    field = report["figures"]["against"]
    rows = [(_words(name), "", short(value), "") for name, value in field.items()]
    rows += [
        (name, short(d["before"]), short(d["after"]), short(d["relative"])) for name, d in found["figures"].items()
    ]
    heads = ("", report["files"]["other"]["name"], "target", "relative change")
    return Table("Against another file", heads, rows)


def side_by_side(report: Mapping[str, Any]) -> Table:
    """What projection and relaxation changed."""
    found = report.get("side_by_side")
    if not found:
        return EMPTY
    labels = {
        "energy": "energy of the change",
        "divergence": "divergence left, largest",
        "largest_change": "largest change of a cell",
        "seconds": "seconds",
    }
    ways = ("projection", "relaxation")
    rows = [(label, *(short(found[f"{key}_of_{way}"]) for way in ways)) for key, label in labels.items()]
    note = (
        f"Energy of the difference of the two results: {short(found['energy_of_difference'])}. Correlation of the two "
        f"changes: {short(found['correlation'])}, 1 where one is a multiple of the other."
    )
    return Table("Projection and relaxation side by side", ("", *ways), rows, note)


def _words(name: str) -> str:
    return name.replace("_", " ")


def _place(cell: Any) -> str:
    return "-" if cell is None else str(list(cell))


def _where(at: Mapping[str, Any] | None) -> tuple[str, str]:
    if at is None:
        return "-", "-"
    return _place(at["cell"]), ", ".join(f"{x:.4g}" for x in at["position"])
