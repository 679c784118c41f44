"""The names of all figures of a report: what a limit, a comparison and a reference may speak of."""

from __future__ import annotations

from collections.abc import Iterable

STEPS = ("source", "cleaned", "moved", "stored")
"""The field along a job: as read, without monopoles, on the target, and as the file holds it."""

LOSSES = {"cleaning": "cleaned", "moving": "moved", "storing": "stored"}
"""What may lose energy, and the step it leads to."""

FIELD = (
    "cells",
    *(f"divergence.{norm}" for norm in ("linf", "l1", "l2")),
    *(f"divergence.scaled.{norm}" for norm in ("linf", "l1", "l2")),
    "divergence.net_flux",
    *(f"energy.{part}" for part in ("total", "axis1", "axis2", "axis3")),
    "strength.largest",
    *(f"{wall}_wall.{part}" for wall in ("inner", "outer") for part in ("net", "relative", "north")),
)
"""Of the field at each step."""

JOB = (
    "divergence",
    "energy_change",
    "mass_change",
    *(f"energy_lost.{loss}" for loss in LOSSES),
    "coverage.volume",
    "cleaning.largest_change",
    "cleaning.rms_change",
)
"""Of the job as a whole."""

AGAINST = ("vector_correlation", "cosine", "normalised_error", "mean_error", "energy_ratio")
"""Of the field as stored against that of another file on the same grid."""

REGION = ("divergence", "energy", "energy_change", "strength")
"""Of a region, for the field as stored."""

FLUID = ("source", "moved", "added_outside", "stored", "change")
"""Of the total of a conserved quantity."""


def known(conserved: Iterable[str] = (), regions: Iterable[str] = ()) -> list[str]:
    """The dotted names of all figures of a job, measured or not.

    Parameters
    ----------
    conserved, regions : iterable of str
        Names of conserved quantities of the target, and of regions.

    Examples
    --------
    >>> known()[:3], "stored.energy.total" in known(), known(regions=["core"])[-1]
    (['divergence', 'energy_change', 'mass_change'], True, 'regions.core.strength')
    """
    return [
        *JOB,
        *(f"against.{figure}" for figure in AGAINST),
        *(f"{step}.{figure}" for step in STEPS for figure in FIELD),
        *(f"fluid.{name}.{figure}" for name in conserved for figure in FLUID),
        *(f"regions.{name}.{figure}" for name in regions for figure in REGION),
    ]
