"""The limits of a job held against what was measured, and limits made from a good run."""

from __future__ import annotations

import json
import math
import re
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from fieldmover.diagnostics.limits import Verdict, check_limits, flattened
from fieldmover.errors import JobError
from fieldmover.jobs.schema.measures import AtLeast, Within

SMALL = ("divergence", "change", "net", "relative", "linf", "l1", "l2", "net_flux", "north", "error")
"""Ends of names of figures that should vanish: their limits are absolute,"""
LOST = ("energy_lost.", "gas.change.")
"""as are those of figures with these beginnings."""
SIGNED = re.compile(r"gas\.(before|stored)\..*momentum|surfaces\..*flux$|helicity\..*\.(value|free_energy)$")
"""Sums with both signs, which may vanish: no limit is made from them but from what they changed by."""

ROUND_OFF = 1e-14
"""Of relative figures; a limit below it would fail on another machine."""


GROUPS = ("stencil", "surfaces", "helicity", "gas", "extremes", "agreement", "curved")
"""Of a report; in those of earlier versions they are missing."""


def figures_of(report: Mapping[str, Any]) -> dict[str, float | None]:
    """All figures of a report by dotted name."""
    return flattened(
        {
            **report["figures"],
            **report["fields"],
            "fluid": report["fluid"],
            "regions": report["regions"],
            "coverage": report["coverage"] or {},
            **{group: report.get(group) or {} for group in GROUPS},
        }
    )


def read_report(path: Path) -> dict[str, Any]:
    """A report.json made by this version or an earlier one.

    Raises
    ------
    JobError
        If it cannot be read, or is no report.
    """
    try:
        report = json.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise JobError(f"{path}: {(error.strerror or str(error)).lower()}") from None
    except ValueError as error:
        raise JobError(f"{path}: not a report: {error}") from None
    if not isinstance(report, dict) or report.get("schema", {}).get("name") != "fieldmover report":
        raise JobError(f"{path}: found JSON that is no report of fieldmover")
    missing = [key for key in ("figures", "fields", "fluid", "regions", "coverage") if key not in report]
    if missing:
        raise JobError(f"{path}: a report of another version: it has no {missing[0]!r}")
    return report


def verdicts(
    found: Mapping[str, float | None], limits: Mapping[str, float | Within | AtLeast], folder: Path
) -> list[dict[str, Any]]:
    """Each limit with what was found.

    Parameters
    ----------
    found : mapping
        Every figure the job knows, None where it was not measured: such a figure fails.
    limits : mapping
        By name: the largest magnitude, `Within` or `AtLeast`.
    folder : Path
        That reports to compare with are named relative to.

    Returns
    -------
    list of dict
        "name", "found" (a relative change for `Within`), "limit", "passed", "value" (the figure itself),
        "reference" (None, or the report and its value), "least" (whether it is a limit from below).

    Raises
    ------
    JobError
        If a report to compare with is none, or has no such figure.
    """
    out = []
    for name, limit in limits.items():
        value = found[name]
        if isinstance(limit, AtLeast):
            passed = value is not None and value >= limit.at_least
            verdict = Verdict(name, value, limit.at_least, passed)
            out.append({**vars(verdict), "value": value, "reference": None, "least": True})
            continue
        if isinstance(limit, Within):
            before = _before(folder / limit.of, name)
            reference = {"report": limit.of, "value": before}
            measured, most = None if value is None else _change(before, value), limit.within
        else:
            reference, measured, most = None, value, limit
        (verdict,) = check_limits({name: measured}, {name: most})
        out.append({**vars(verdict), "value": value, "reference": reference, "least": False})
    return out


def _before(path: Path, name: str) -> float:
    value = figures_of(read_report(path)).get(name)
    if value is None:
        raise JobError(f"{path}: has no {name!r} to compare with; it was not measured there")
    return value


def _change(before: float, after: float) -> float | None:
    if before == 0:
        return 0.0 if after == 0 else None
    return (after - before) / abs(before)


def limits_table(report: Mapping[str, Any], names: list[str], margin: float, path: str) -> str:
    """A table of limits, in TOML, that a good run just passes.

    Parameters
    ----------
    report : mapping
        Of that run.
    names : list of str
        Figures to limit; those that were not measured are left out.
    margin : float
        What a figure may exceed what was found, relative.
    path : str
        Of its report.json, as the job names files: figures that should not vanish are compared with it.
    """
    found = figures_of(report)
    lines = [f"# made from {path} with a margin of {margin:g}", "[limits]"]
    for name in names:
        value = found.get(name)
        if value is None or SIGNED.match(name):
            continue
        key = name if re.fullmatch(r"[A-Za-z0-9_.-]+", name) else json.dumps(name)
        if name.startswith(LOST) or name.rsplit(".", 1)[-1].endswith(SMALL):
            lines.append(f"{key} = {_rounded_up(max(abs(value) * (1 + margin), ROUND_OFF))}")
        else:
            lines.append(f"{key} = {{ within = {margin!r}, of = {json.dumps(path)} }}")
    return "\n".join(lines) + "\n"


def _rounded_up(value: float) -> str:
    """With two digits, not below the value.

    Examples
    --------
    >>> _rounded_up(1.234e-5), _rounded_up(1e-14)
    ('1.3e-05', '1.0e-14')
    """
    exponent = math.floor(math.log10(value))
    digits = math.ceil(round(value / 10.0 ** (exponent - 1), 9))
    return f"{digits / 10:.1f}e{exponent:+03d}"
