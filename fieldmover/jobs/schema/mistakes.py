"""What tables of a job say that is right alone but not together."""

from __future__ import annotations

import re
from collections.abc import Iterable
from itertools import product
from pathlib import PurePath
from typing import Any

from fieldmover.jobs.names import PLACES, STRENGTH, known
from fieldmover.jobs.schema.gas import (
    DIMENSIONS,
    MASS,
    PRESSURE,
    VELOCITY,
    SourceQuantity,
    TargetQuantity,
    formula,
)
from fieldmover.jobs.schema.job import Job
from fieldmover.jobs.schema.measures import among, region_mistakes
from fieldmover.jobs.schema.tables import Basis, Mistake, plain

UNFIT = re.compile(r"[:<>&\"'\s]")
"""In the name of a file with a view: readers of XDMF take these for something else."""


def mistakes(job: Job) -> list[Mistake]:
    """Place and message of each."""
    return [
        *_bases(job),
        *_carried(job),
        *_wanted(job),
        *_formulas(job),
        *_spaces(job),
        *_beyond(job),
        *_names(job),
        *_regions(job),
        *region_mistakes(job.regions, job.scalars),
        *_limits(job),
    ]


def formula_names(quantities: dict[str, Any]) -> list[str]:
    """What formulas over these quantities may use: scalars, components of vectors, the field, positions."""
    found = []
    for name, quantity in quantities.items():
        if quantity.vector:
            found += [f"{plain(name)}_{axis}" for axis in "xyz"]
        else:
            found.append(plain(name))
    return [*found, STRENGTH, *(place for place in PLACES if place not in found)]


def _bases(job: Job) -> list[Mistake]:
    """A vector on a curved grid needs a basis; on a Cartesian one all of them are the same."""
    found: list[Mistake] = []
    sides: list[tuple[str, Any]] = [("source", job.source), ("target", job.target)]
    for side, table in sides:
        kind = (table.grid or job.source.grid).kind
        magnetic, place = table.magnetic, (side, "magnetic")
        if magnetic.basis == "cartesian" and magnetic.at != "cells" and kind != "cartesian":
            found.append(((*place, "basis"), f'"cartesian" goes with at = "cells"; {magnetic.at} follow the grid'))
        if magnetic.densitised and (magnetic.basis != "coordinate" or magnetic.at == "edges"):
            found.append(((*place, "densitised"), 'goes with basis = "coordinate" of a field at faces or cells'))
        vectors: list[tuple[tuple[str, ...], Basis | None]] = [(place, magnetic.basis)]
        if (pot := getattr(table, "potential", None)) is not None:
            vectors.append(((side, "potential"), pot.basis))
        vectors += [((side, "fluid", name), q.basis) for name, q in table.fluid.items() if q.vector]
        for where, basis in vectors:
            if basis is None and kind != "cartesian":
                found.append(((*where, "basis"), 'missing; give "physical", "coordinate" or "cartesian"'))
        for name, quantity in table.fluid.items():
            if quantity.kind is not None and not (quantity.vector and name == VELOCITY):
                found.append(((side, "fluid", name, "kind"), f"is for the vector named {VELOCITY!r}"))
    return found


def _carried(job: Job) -> list[Mistake]:
    """How quantities of the source travel."""
    found: list[Mistake] = []
    mass = job.source.fluid.get(MASS)
    weighs = mass is not None and mass.carry == "conserve" and not mass.vector
    for name, quantity in job.source.fluid.items():
        place = ("source", "fluid", name, "carry")
        if quantity.carry == "conserve" and quantity.vector:
            found.append((place, 'a vector is carried "by mass" or "point"'))
        if quantity.carry == "by mass" and not weighs:
            found.append((place, f'"by mass" needs a scalar source.fluid.{MASS} with carry = "conserve"'))
        if job.units is not None and quantity.dimension is None and name not in DIMENSIONS:
            found.append(
                (("source", "fluid", name, "dimension"), 'missing; with [units] it must be said ("none" is one)')
            )
    if job.health is not None:
        if MASS not in job.target.fluid:
            found.append((("health",), f"needs target.fluid.{MASS}"))
        if job.health.pressure_floor > 0 and PRESSURE not in job.target.fluid:
            found.append((("health", "pressure_floor"), f"needs target.fluid.{PRESSURE}"))
        if job.health.lorentz_ceiling is not None and VELOCITY not in job.target.fluid:
            found.append((("health", "lorentz_ceiling"), f"needs target.fluid.{VELOCITY}"))
    if job.move.keep is not None and VELOCITY not in job.target.fluid:
        found.append((("move", "keep"), f"needs target.fluid.{VELOCITY}"))
    if "mass_change" in job.limits and MASS not in job.conserved:
        found.append((("limits", "mass_change"), f'needs target.fluid.{MASS}, carried by "conserve"'))
    return found


def _wanted(job: Job) -> list[Mistake]:
    """What the target asks for."""
    found: list[Mistake] = []
    source = job.source.fluid
    for name, wanted in job.target.fluid.items():
        place = ("target", "fluid", name)
        given = source.get(name)
        if isinstance(wanted.outside, list) and not wanted.vector:
            found.append(((*place, "outside"), "three values for a scalar; give one"))
        if wanted.formula is not None:
            if wanted.vector or wanted.densitised:
                found.append((place, "a formula makes a plain scalar"))
            continue
        if given is None:
            found.append((place, f"not among the quantities of source.fluid: {', '.join(source) or 'none'}"))
        elif wanted.vector != given.vector:
            found.append((place, f"the source has a {_sort(given)}, this names another number"))
        elif given.carry == "conserve" and isinstance(wanted.outside, float) and wanted.outside < 0:
            found.append(((*place, "outside"), "a density is not negative"))
        elif wanted.densitised and given.carry != "conserve":
            found.append(((*place, "densitised"), 'goes with carry = "conserve" in the source'))
    return found


def _sort(quantity: SourceQuantity | TargetQuantity) -> str:
    return "vector" if quantity.vector else "scalar"


def _formulas(job: Job) -> list[Mistake]:
    """Formulas of quantities: over what is stored in the source, over what is moved in the target."""
    stored = {name: q for name, q in job.source.fluid.items() if q.data is not None}
    sides: list[tuple[str, dict[str, Any], dict[str, Any]]] = [
        ("source", dict(job.source.fluid), stored),
        ("target", dict(job.target.fluid), dict(job.source.fluid)),
    ]
    found: list[Mistake] = []
    for side, quantities, over in sides:
        for name, quantity in quantities.items():
            if quantity.formula is not None:
                try:
                    formula(quantity.formula, formula_names(over))
                except ValueError as error:
                    found.append(((side, "fluid", name, "formula"), str(error)))
    return found


def _spaces(job: Job) -> list[Mistake]:
    """Metrics, moving maps and units beside each other."""
    found: list[Mistake] = []
    sides: list[tuple[str, Any]] = [("source", job.source), ("target", job.target)]
    for side, table in sides:
        curved = job.metric is not None or table.metric is not None
        velocity = table.fluid.get(VELOCITY)
        if velocity is not None and velocity.kind in ("four-velocity", "W eulerian") and not curved:
            told = f'"{velocity.kind}" needs a metric: [metric] with name = "flat" for special relativity'
            found.append(((side, "fluid", VELOCITY, "kind"), told))
        if table.grid is not None and table.grid.kind == "kerr-schild" and job.metric is None:
            found.append(((side, "grid", "kind"), '"kerr-schild" needs [metric], for the spin'))
        found += _in_curved_space(job, side, table)
        if table.metric is not None and job.units is not None:
            found.append(((side, "metric"), "arrays of a metric do not go with [units]; both files need the same"))
    if job.source.metric is not None and job.source.grid.symmetry is not None:
        found.append((("source", "metric"), "arrays of a metric do not go with symmetry"))
    if job.target.metric is not None and (job.target.grid is None or job.target.grid.file is None):
        found.append((("target", "metric"), "needs target.grid.file, the file that its arrays lie in"))
    own = [table.metric is not None for _, table in sides]
    if job.metric is None and any(own) and not all(own):
        side = "target" if own[0] else "source"
        found.append(((side,), f"one side has a metric; give {side}.metric too, or [metric] for both"))
    return found


def _in_curved_space(job: Job, side: str, table: Any) -> list[Mistake]:
    """What only flat space, or a metric in closed form, settles."""
    own = table.metric is not None and table.metric.gamma is not None
    if not own and (job.metric is None or job.metric.name == "flat"):
        return []
    vectors = {"magnetic": table.magnetic.basis}
    if (potential := getattr(table, "potential", None)) is not None:
        vectors["potential"] = potential.basis
    vectors |= {f"fluid.{name}": q.basis for name, q in table.fluid.items() if q.vector and name != VELOCITY}
    told = 'unit vectors of the grid are not settled in curved space; give "coordinate" or "cartesian"'
    found: list[Mistake] = [
        ((side, *name.split(".", 1), "basis"), told) for name, basis in vectors.items() if basis == "physical"
    ]
    magnetic = table.magnetic
    if own and magnetic.at == "faces" and not magnetic.densitised:
        told = 'arrays of a metric are known in cells alone: give densitised = true with values at "faces"'
        found.append(((side, "magnetic", "densitised"), told))
    return found


def _beyond(job: Job) -> list[Mistake]:
    """Ghost layers and finer boxes, and what does not go with them."""
    found: list[Mistake] = []
    target = job.target
    finer = [] if target.grid is None else target.grid.finer
    layers = any(target.ghosts)
    for key, there in (("ghosts", layers), ("grid.finer", bool(finer))):
        place = ("target", *key.split("."))
        if there and target.potential is not None:
            found.append((place, "does not go with target.potential"))
        if there and target.magnetic.stencil != "faces":
            found.append((place, "does not go with another stencil than that of the faces"))
        if there and target.metric is not None:
            found.append((place, "does not go with a metric from arrays"))
        if there and job.health is not None and job.health.cure == "apply":
            found.append((place, 'does not go with health.cure = "apply"'))
    if layers and finer:
        found.append((("target", "ghosts"), "finer boxes have none; leave one of both out"))
    if layers and target.grid is None:
        found.append((("target", "ghosts"), "clean keeps the grid of the source, without ghosts"))
    if finer and job.move.keep is not None:
        found.append((("move", "keep"), "does not go with finer boxes"))
    if finer and (target.view or any(box.group.startswith("/VTKHDF") for box in finer)):
        found.append((("target", "view"), "is for a grid without finer boxes"))
    return found


def _names(job: Job) -> list[Mistake]:
    """Two outputs must not share a dataset, nor use our own group."""
    file = PurePath(job.target.file).name
    if job.target.view and (UNFIT.search(file) or file.endswith(".xdmf")):
        unfit = f'file {file!r}: a view needs a name without : < > & quotes and spaces that does not end in ".xdmf"'
        return [(("target", "view"), unfit)]
    names = [(("target", "magnetic", "data"), name) for name in job.target.magnetic.data]
    if job.target.potential is not None:
        names += [(("target", "potential", "data"), name) for name in job.target.potential.data]
    for quantity, where in job.target.fluid.items():
        data = where.data if isinstance(where.data, list) else [where.data]
        names += [(("target", "fluid", quantity), name) for name in data]
    finer = [] if job.target.grid is None else job.target.grid.finer
    groups = ["", *(f"{box.group.strip('/')}/" for box in finer)]
    found: list[Mistake] = []
    seen: set[str] = set()
    for group, (place, name) in product(groups, names):
        path, shown = group + name.strip("/"), f"/{group}{name.strip('/')}" if group else name
        above = {"/".join(path.split("/")[:n]) for n in range(1, path.count("/") + 1)}
        if path in seen:
            found.append((place, f"dataset {shown!r} is named twice"))
        elif over := above & seen or {other for other in seen if other.startswith(f"{path}/")}:
            found.append((place, f"dataset {shown!r} and dataset {min(over)!r}: one cannot lie within the other"))
        if path.split("/")[0] == "fieldmover":
            found.append((place, f"{name!r}: the group /fieldmover is kept for the report"))
        if job.target.view and path.split("/")[0] == "VTKHDF":
            found.append((place, f"{name!r}: the group /VTKHDF is kept for the view"))
        seen.add(path)
    return found


def _regions(job: Job) -> list[Mistake]:
    """Regions that the cleaning speaks of but the job does not have."""
    known_here = ", ".join(job.regions) or "none"
    return [
        (("clean", key), f"no region {name!r}; the job has {known_here}")
        for key in ("frozen", "excised")
        if (name := getattr(job.clean, key)) is not None and name not in job.regions
    ]


def _limits(job: Job) -> list[Mistake]:
    """Limits on regions and quantities that the job does not have."""
    names: Iterable[str] = known(job.conserved, job.regions, job.surfaces)
    found: list[Mistake] = []
    for name in job.limits:
        try:
            among(name, list(names))
        except ValueError as error:
            found.append((("limits", name), str(error)))
    return found
