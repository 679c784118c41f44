"""The report on the terminal, and its tables, which the page and the summary share."""

from __future__ import annotations

from typing import Any

from fieldmover.report.formats import short, table

Rows = list[tuple[str, ...]]

NORMS = (("largest", "linf"), ("root mean square", "l2"), ("mean", "l1"))
LOST = (("cleaning", "cleaned"), ("moving", "moved"), ("storing", "stored"))
TOTALS = ("source", "moved", "added_outside", "stored", "change")


def terminal(report: dict[str, Any]) -> str:
    """What a command prints.

    Parameters
    ----------
    report : dict
        As in report.json.
    """
    heads, rows = field_table(report)
    out = [table(rows, heads), ""]
    for heads, rows in (fluid_table(report), region_table(report), against_table(report)):
        if rows:
            out += [table(rows, heads), ""]
    if report["limits"]:
        out += [table(limit_rows(report), ("limit", "found", "at most", "")), ""]
    memory = report["peak_memory"] / 2**30
    out.append(f"time {report['seconds']:.1f} s, memory {memory:.2f} GiB at most")
    out.append(verdict(report))
    return "\n".join(out)


def verdict(report: dict[str, Any]) -> str:
    """One line: whether the limits are kept, and which are not.

    Examples
    --------
    >>> verdict({"verdict": "within limits", "limits": []})
    'no limits were set'
    """
    limits = report["limits"]
    names = [
        limit["name"] + (" (not measured)" if limit["value"] is None else "")
        for limit in limits
        if not limit["passed"]
    ]
    if names:
        return f"limits exceeded: {', '.join(names)}"
    return str(report["verdict"]) if limits else "no limits were set"


def limit_rows(report: dict[str, Any]) -> Rows:
    """Name, found, limit, verdict of each limit."""
    return [
        (limit["name"], found_text(limit), allowed(limit), "ok" if limit["passed"] else "EXCEEDED")
        for limit in report["limits"]
    ]


def found_text(limit: dict[str, Any]) -> str:
    """What was found, with its change where that is limited."""
    if limit["value"] is None:
        return "not measured"
    if limit["reference"] is None:
        return short(limit["found"])
    return f"{short(limit['value'])} (changed by {short(limit['found'])})"


def allowed(limit: dict[str, Any]) -> str:
    """What a limit allows, in words.

    Examples
    --------
    >>> allowed({"limit": 0.1, "reference": {"report": "good.json", "value": 2.0}})
    'within 0.1 of 2 (good.json)'
    """
    reference = limit["reference"]
    if reference is None:
        return short(limit["limit"])
    return f"within {short(limit['limit'])} of {short(reference['value'])} ({reference['report']})"


def field_table(report: dict[str, Any]) -> tuple[tuple[str, ...], Rows]:
    """Divergence and energy along the steps of the job; what was lost at each, on a line of its own."""
    fields, covered, lost = report["fields"], report["energy_covered"], report["figures"]["energy_lost"]
    steps = list(fields)
    rows: Rows = [
        (f"divergence, {label}", *(short(fields[step]["divergence"][key]) for step in steps))
        for label, key in NORMS
    ]
    rows.append(("magnetic energy, whole grid", *(short(fields[step]["energy"]["total"]) for step in steps)))
    if covered:
        rows.append(("magnetic energy, covered part", *(short(covered.get(step)) for step in steps)))
        for loss, after in LOST:
            if loss in lost:
                rows.append(
                    (
                        f"  lost to {loss}, relative",
                        *(short(lost[loss]) if step == after else "" for step in steps),
                    )
                )
        last = short(report["figures"]["energy_change"])
        rows.append(("  change in all, relative", *[""] * (len(steps) - 1), last))
    return ("", *steps), rows


def fluid_table(report: dict[str, Any]) -> tuple[tuple[str, ...], Rows]:
    """Totals of conserved quantities."""
    rows = [
        (f"total of {name}", *(short(found[key]) for key in TOTALS))
        for name, found in report["fluid"].items()
    ]
    return ("", "source", "moved", "added outside", "stored", "change"), rows


def region_table(report: dict[str, Any]) -> tuple[tuple[str, ...], Rows]:
    """Figures of the regions that the job names."""
    keys = ("divergence", "energy", "energy_change", "strength")
    rows = [
        (f"region {name}", *(short(found[key]) for key in keys)) for name, found in report["regions"].items()
    ]
    return ("", "divergence", "energy", "change of energy", "largest |B|"), rows


def against_table(report: dict[str, Any]) -> tuple[tuple[str, ...], Rows]:
    """The field and its figures against those of another file."""
    found = report["against"]
    if found is None:
        return ("",), []
    field = report["figures"]["against"]
    rows: Rows = [(name.replace("_", " "), "", short(value), "") for name, value in field.items()]
    rows += [
        (name, short(d["before"]), short(d["after"]), short(d["relative"]))
        for name, d in found["figures"].items()
    ]
    return ("", report["files"]["other"]["name"], "target", "relative change"), rows
