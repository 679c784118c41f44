"""The page on what was read, written and assumed: what two sides must agree on before any number counts."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from fieldmover.report.elements import pairs, table
from fieldmover.report.formats import escaped, said
from fieldmover.report.tables import Rows, Table

SIDES = ("source", "target")


def files(report: dict[str, Any]) -> str:
    """Files, grids, conventions, times, versions."""
    named: Rows = [(role, f["name"], str(f["bytes"]), f["sha256"]) for role, f in report["files"].items()]
    grids = {
        step: found["grid"].strip("<>") for step, found in report["fields"].items() if step in ("source", "stored")
    }
    coverage = report["coverage"]
    if coverage:
        grids["covered"] = (
            f"{100 * coverage['volume']:.4g} % of the volume of the target: {coverage['whole']} cells wholly, "
            f"{coverage['cut']} in part, of {coverage['cells']}"
        )
    times: Rows = [(stage["name"], f"{stage['seconds']:.2f}") for stage in report["stages"]]
    return (
        table(Table("Files", ("file", "name", "bytes", "SHA-256"), named))
        + f"<h3>Grids</h3>{pairs(grids)}"
        + _conventions(report["conventions"])
        + table(Table("Time of each stage", ("stage", "seconds"), times))
        + f"<h3>Versions</h3>{pairs(report['versions'])}"
    )


def job(report: dict[str, Any]) -> str:
    """The job file, word for word, and what the command line changed in it."""
    changes = report["job"]["changes"]
    changed = f"<p>Changed by --set: {escaped(', '.join(changes))}</p>" if changes else ""
    return (
        f'{changed}<pre tabindex="0" role="region" aria-label="The job file"><code>{escaped(report["job"]["text"])}'
        "</code></pre>"
    )


def _conventions(found: Mapping[str, Any]) -> str:
    """What holds for both files, then how each of them is understood."""
    common = _flat({key: value for key, value in found.items() if key not in SIDES})
    sides = [_flat(found.get(side, {})) for side in SIDES]
    names = list(dict.fromkeys(name for side in sides for name in side))
    rows: Rows = [(name, *(said(side[name]) if name in side else "" for side in sides)) for name in names]
    return f"<h3>Conventions</h3>{pairs(common)}" + table(Table("How each file is understood", ("", *SIDES), rows))


def _flat(values: Mapping[str, Any], prefix: str = "") -> dict[str, Any]:
    flat: dict[str, Any] = {}
    for key, value in values.items():
        name = f"{prefix}{key}"
        if value is not None:  # what the job leaves open
            flat.update(_flat(value, f"{name}, ") if isinstance(value, Mapping) else {name: value})
    return flat
