"""What a report says in words, and all of it on the terminal."""

from __future__ import annotations

from typing import Any

from fieldmover.report.formats import bound, short, table
from fieldmover.report.tables import LOST, Rows, brief


def terminal(report: dict[str, Any]) -> str:
    """What a command prints.

    Parameters
    ----------
    report : dict
        As in report.json.
    """
    out = []
    for found in brief(report):
        out += [table(found.rows, found.heads), ""]
    if report["limits"]:
        out += [table(limit_rows(report), ("limit", "found", "allowed", "")), ""]
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
        limit["name"] + (" (not measured)" if limit["value"] is None else "") for limit in limits if not limit["passed"]
    ]
    if names:
        return f"limits exceeded: {', '.join(names)}"
    return str(report["verdict"]) if limits else "no limits were set"


def in_short(report: dict[str, Any]) -> list[str]:
    """What was kept and lost, in sentences."""
    fields = report["fields"]
    first, last = next(iter(fields.values())), list(fields.values())[-1]
    before, after = (short(found["divergence"]["linf"]) for found in (first, last))
    many = len(fields) > 1
    said = [f"Divergence: at most {before} in the source" + (f", {after} in the field as stored." if many else ".")]
    covered, lost = report["energy_covered"], report["figures"]["energy_lost"]
    if covered:
        steps = [f"{loss} {_took(lost[loss])}" for loss, _ in LOST if lost.get(loss) is not None]
        told = f": {', '.join(steps)} of it" if steps else ""
        energies = list(covered.values())
        said.append(
            f"Magnetic energy where the source reaches: {short(energies[0])} in the source, {short(energies[-1])} as "
            f"stored{told}."
        )
    for name, found in report["fluid"].items():
        said.append(
            f"Total of {name}: {short(found['moved'])} of {short(found['source'])} lies in the target; as stored it "
            f"differs by {short(found['change'])}, relative."
        )
    coverage = report["coverage"]
    if coverage:
        said.append(
            f"The source reaches {100 * coverage['volume']:.4g} % of the volume of the target: of {coverage['cells']} "
            f"cells it covers {coverage['whole']} wholly and {coverage['cut']} in part."
        )
    return said


def _took(lost: float) -> str:
    if lost == 0:
        return "changed nothing"
    return f"{'took' if lost > 0 else 'added'} {short(abs(lost))}"


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
    >>> allowed({"limit": 1e-12, "reference": None})
    'at most 1e-12'
    >>> allowed({"limit": 0.99, "reference": None, "least": True})
    'at least 0.99'
    """
    reference = limit["reference"]
    if reference is None:
        return f"at {'least' if limit.get('least') else 'most'} {bound(limit['limit'])}"
    return f"within {bound(limit['limit'])} of {short(reference['value'])} ({reference['report']})"
