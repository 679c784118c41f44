"""A report in which every table has rows, and pictures for it, without the work of a job."""

from __future__ import annotations

import hashlib
from pathlib import Path
from typing import Any

import numpy as np

import fieldmover as fm
from fieldmover.jobs.demo import job_text
from fieldmover.jobs.details import divergences, profile
from fieldmover.jobs.load import load
from fieldmover.jobs.record import Record
from fieldmover.report.figures import Picture, Plane, pictures

LIMITS = [
    {"name": "divergence", "limit": 1e-12, "reference": None, "found": 2e-16, "value": 2e-16, "passed": True},
    {"name": "energy_change", "limit": 0.02, "reference": None, "found": 0.3, "value": 0.3, "passed": False},
    {
        "name": "stored.energy.total", "limit": 0.1, "reference": {"report": "good.json", "value": 2.0},
        "found": None, "value": None, "passed": False,
    },
]  # fmt: skip
PLACE = {"cell": [1, 2, 3], "position": [0.1, 0.2, 0.3]}
NORMS = {"linf": 0.1, "l1": 0.01, "l2": 0.02}
GAS = {
    "mass": 1.0, "momentum": dict.fromkeys("xyz", 1.0), "angular_momentum": dict.fromkeys("xyz", -1.234567e-5),
    "kinetic_energy": 1.0, "internal_energy": None,
}  # fmt: skip
TOTALS = {
    "source": 2.0,
    "moved": 1.0,
    "added_outside": 0.0,
    "removed_by_blend": 0.2,
    "added_by_cure": 0.1,
    "stored": 1.0,
    "change": 0.0,
}
SURFACE = dict.fromkeys(("source_flux", "source_unsigned", "flux", "unsigned", "change"), -1.234567e-5)
HELICITY = {"value": 0.1, "energy": 2.0, "reference_energy": 1.0, "free_energy": 1.0}
EXTREMES = {"b2_over_rho_largest": 2.0, "beta_smallest": 0.1, "beta_largest": None, "speed_largest": 3.0}
AGREEMENT = {"vector_correlation": 0.9, "overlap": 0.8}
BROKEN = {"rule": "magnetisation", "count": 123456, "first": [0, 0, 1], "worst": [2, 3, 4], "value": 0.0, "limit": 1e-6}
SOUND = {"rule": "speed", "count": 0, "first": None, "worst": None, "value": None, "limit": None}
COST = {"mass_added": -1.234567e-5, "energy_added": 1.234567e-5}
WAYS = ("projection", "relaxation")
COMPARED = ("energy", "divergence", "largest_change", "seconds")
SIDE_BY_SIDE = {f"{key}_of_{way}": 0.1 for way in WAYS for key in COMPARED}


def full_report(folder: Path) -> dict[str, Any]:
    """As in report.json; the numbers are of several makes and do not fit together."""
    (folder / "ring.toml").write_text(job_text(), encoding="utf-8")
    record = Record(load(folder / "ring.toml"), "move")
    grid = fm.spherical_grid(np.linspace(1, 2, 5), np.linspace(0, np.pi, 5), np.linspace(0, 2 * np.pi, 9))
    flux = fm.flux_from_function(grid, lambda x, y, z: (y * z, x * x, x))
    record.cleaning(fm.project(flux)[1].as_dict())
    for step in ("source", "cleaned", "moved", "stored"):
        record.field(step, flux)
    record.energies({"source": 2.0, "cleaned": 1.9, "moved": 1.95, "stored": 1.95})
    record.coverage(np.ones(grid.shape), grid.cell_volumes())
    energy, k = np.geomspace(1, 1e-20, 30), np.arange(30.0)
    files = {
        role: {"name": f"{role}-of-the-run.h5", "bytes": 123456789, "sha256": hashlib.sha256(role.encode()).hexdigest()}
        for role in ("source", "target", "other")
    }
    return record.values | {
        "limits": LIMITS,
        "verdict": "limits exceeded",
        "time": 12.5,
        "stages": [{"name": "reading", "seconds": 1.5, "peak_memory": 1}],
        "fluid": {"density": TOTALS},
        "gas": {"before": GAS, "stored": GAS, "change": dict.fromkeys(GAS, 1e-9)},
        "stencil": {"stencil": "central", **NORMS, "scaled": NORMS, "net_flux": 1e-3, **PLACE},
        "angular_momentum": {"source": 3.0, "arrived": 2.0, "moved": 1.9, "stored": 2.0, "turn": 1e-3},
        "boxes": [{"group": "/", "divergence": 1e-16, "energy": 1.0, "mass": None, "grid": repr(grid)}],
        "charge": {"net_flux": 0.5, "cell": None, "centre": [0.0, 0.0, 0.5]},
        "perturbation": {"size": 0.01, "seed": 7, "energy_change": None},
        "stencil_cleaning": record.values["cleaning"],
        "surfaces": {"lid": SURFACE},
        "surfaces_meant": {"lid": "sphere of radius 1.5 about (0, 0, 0)"},
        "helicity": {"stored": HELICITY},
        "helicity_missing": {"source": "the grid has a hole"},
        "extremes": {"source": EXTREMES, "stored": EXTREMES},
        "extremes_at": {"source": dict.fromkeys(EXTREMES, PLACE)},
        "regions": {"core": {"divergence": 0.1, "energy": 1.0, "energy_change": None, "strength": 2.0}},
        "agreement": AGREEMENT,
        "against": {"figures": {"energy.total": {"before": 1.0, "after": 1.1, "change": 0.1, "relative": 0.1}}},
        "figures": record.values["figures"] | {"against": AGREEMENT},
        "divergences": divergences({"source": flux, "stored": flux}),
        "profile": profile(grid, {"source": grid.cell_volumes(), "stored": grid.cell_volumes()}),
        "spectra": {"stored": {"k": k.tolist(), "energy": energy.tolist()}},
        "files": files,
        "side_by_side": {**SIDE_BY_SIDE, "energy_of_difference": 0.3, "correlation": 0.9},
        "health": [{**BROKEN, **COST, "applied": True}, {**SOUND, **COST, "applied": False}],
    }


def some_pictures() -> list[Picture]:
    """Ten, of two planes."""
    box = fm.cartesian_grid(*[np.linspace(-2, 2, 6)] * 3)
    ball = fm.spherical_grid(np.linspace(0.5, 1.5, 5), np.linspace(0, np.pi, 9), np.linspace(0, 2 * np.pi, 17))
    sides = [(q.centres(), np.abs(q.centres()[0]) * 1e-5) for q in (ball, box)]
    return pictures([Plane.through(box, 1), Plane.through(box, 2)], [ball, box], sides)
