"""The record of a job: every figure once, as plain JSON."""

from __future__ import annotations

import hashlib
import math
import platform
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fieldmover._version import __version__
from fieldmover.diagnostics import compare_fields, compare_fluxes, diagnose, differences
from fieldmover.diagnostics.cells import same_place
from fieldmover.diagnostics.limits import finite
from fieldmover.forms.fields import FaceFlux
from fieldmover.jobs.load import Loaded
from fieldmover.jobs.names import LOSSES, known
from fieldmover.jobs.progress import Progress, peak_memory
from fieldmover.jobs.schema import MASS
from fieldmover.jobs.verdicts import figures_of, verdicts
from fieldmover.report.figures import Picture
from fieldmover.report.formats import SCHEMA

Array = NDArray[np.float64]


class Record:
    """What a job found.

    Attributes
    ----------
    values : dict
        The report: plain JSON with finite numbers only.
    names : list of str
        Every figure the job knows, measured or not.

    Raises
    ------
    JobError
        If a report to compare with cannot be read or lacks a figure.
    """

    def __init__(self, loaded: Loaded, command: str) -> None:
        job = loaded.job
        self._limits, self._folder = job.limits, loaded.path.parent
        self.names = known(job.conserved, job.regions, job.surfaces)
        self.values: dict[str, Any] = {
            "schema": SCHEMA,
            "command": command,
            "title": job.title,
            "time": None,
            "verdict": None,
            "limits": [],
            "figures": {"divergence": None, "energy_change": None, "mass_change": None, "energy_lost": {}},
            "fields": {},
            "regions": {},
            "surfaces": {},
            "surfaces_meant": {},
            "stencil": None,
            "helicity": {},
            "curved": {},
            "helicity_missing": {},
            "gas": {},
            "extremes": {},
            "extremes_at": {},
            "agreement": None,
            "cleaning": None,
            "stencil_cleaning": None,
            "side_by_side": None,
            "health": [],
            "angular_momentum": None,
            "perturbation": None,
            "charge": None,
            "boxes": [],
            "coverage": None,
            "energy_covered": {},
            "fluid": {},
            "against": None,
            "divergences": {},
            "profile": None,
            "spectra": {},
            "files": {},
            "stages": [],
            "seconds": 0.0,
            "peak_memory": 0,
            "pictures": [],
            "conventions": _conventions(loaded),
            "job": {"text": loaded.text, "changes": list(loaded.changes)},
            "versions": {
                "fieldmover": __version__,
                "python": platform.python_version(),
                **{name: version(name) for name in ("numpy", "scipy", "numba", "h5py")},
            },
        }
        verdicts(dict.fromkeys(self.names), self._limits, self._folder)  # a bad reference is told before work

    @property
    def exceeded(self) -> list[str]:
        """Names of the limits that are not kept."""
        return [limit["name"] for limit in self.values["limits"] if not limit["passed"]]

    def file(self, role: str, path: Path) -> None:
        """Name, size and checksum of a file."""
        with open(path, "rb") as file:
            digest = hashlib.file_digest(file, "sha256").hexdigest()
        self.values["files"][role] = {"name": path.name, "bytes": path.stat().st_size, "sha256": digest}

    def field(self, step: str, flux: FaceFlux) -> None:
        """The figures of the field at one step of the job; limits hold for the last."""
        found = diagnose(flux).as_dict()
        self.values["fields"][step] = {"grid": repr(flux.grid), **found}
        self.values["figures"]["divergence"] = found["divergence"]["linf"]

    def stencil(self, found: dict[str, Any]) -> None:
        """Divergence of the stored numbers as the receiving code takes it; limits hold for it."""
        self.values["stencil"] = found
        self.values["figures"]["divergence"] = found["linf"]

    def cleaning(self, found: dict[str, Any]) -> None:
        """What the removal of monopoles did."""
        self.values["cleaning"] = found
        self.values["figures"]["cleaning"] = {name: found[name] for name in ("largest_change", "rms_change")}

    def coverage(self, covered: Array, volumes: Array) -> None:
        """How much of the target the source reaches: cells, and the part of the volume."""
        self.values["coverage"] = {
            "cells": covered.size,
            "whole": int(np.count_nonzero(covered >= 1)),
            "cut": int(np.count_nonzero((covered > 0) & (covered < 1))),
            "volume": float((covered * volumes).sum() / volumes.sum()),
        }

    def energies(self, steps: dict[str, float]) -> None:
        """Energy over the cells that the source covers wholly, step by step, the first the reference."""
        self.values["energy_covered"] = steps
        figures, names = self.values["figures"], list(steps)
        first = steps[names[0]]
        figures["energy_change"] = change(first, steps[names[-1]])
        for loss, after in LOSSES.items():
            if after in steps and len(names) > 2:
                lost = steps[names[names.index(after) - 1]] - steps[after]
                figures["energy_lost"][loss] = finite(lost / first) if first else change(0.0, lost)

    def fluid(self, totals: dict[str, Any]) -> None:
        """Totals of conserved quantities."""
        self.values["fluid"] = totals
        self.values["figures"]["mass_change"] = totals[MASS]["change"] if MASS in totals else None

    def against(self, other: FaceFlux, stored: FaceFlux) -> None:
        """The field as stored, and its figures, against those of another file, where the grids overlap."""
        figures = differences(diagnose(other).as_dict(), self.values["fields"]["stored"])
        if same_place(other.grid, stored.grid):
            field = {**compare_fluxes(other, stored).as_dict(), "overlap": 1.0}
        else:
            field = compare_fields(other, stored).as_dict()
        self.values["against"] = {"figures": {name: vars(found) for name, found in figures.items()}}
        self.values["figures"]["against"] = field

    def pictures(self, pictures: list[Picture]) -> None:
        """What they show, in words."""
        self.values["pictures"] = [{"plane": p.plane, "title": p.title, "text": p.text} for p in pictures]

    def finish(self, progress: Progress) -> None:
        """Hold the figures against the limits; note times and memory."""
        found = {**dict.fromkeys(self.names), **figures_of(self.values)}
        self.values["limits"] = verdicts(found, self._limits, self._folder)
        self.values["verdict"] = "limits exceeded" if self.exceeded else "within limits"
        self.values["stages"] = [vars(stage) for stage in progress.stages]
        self.values["seconds"] = sum(stage.seconds for stage in progress.stages)
        self.values["peak_memory"] = peak_memory()


def change(before: float | None, after: float | None) -> float | None:
    """Relative change; 0 if both are 0, None if it has no meaning."""
    if before is None or after is None:
        return None
    if before == 0:
        return 0.0 if after == 0 else None
    found = after / before - 1.0
    return found if math.isfinite(found) else None


def _conventions(loaded: Loaded) -> dict[str, Any]:
    """How the numbers of both files are understood: what a reader must agree with first."""
    job = loaded.job
    sides: dict[str, Any] = {"source": job.source, "target": job.target}
    whose = "the snapshot" if job.units is None else "the receiving code"
    found: dict[str, Any] = {
        "inside": f"Heaviside-Lorentz: the energy density is B^2 / 2; lengths, masses and times of {whose}",
        "moved by": job.move.model_dump(),
    }
    for side, table in sides.items():
        found[side] = {
            "magnetic field": table.magnetic.model_dump(exclude_none=True),
            "axes as stored": table.axes,
            "fluid": {name: quantity.model_dump(exclude_none=True) for name, quantity in table.fluid.items()},
        }
    found["source"]["ghosts"] = job.source.ghosts
    found["target"]["precision"] = job.target.precision
    return found
