"""The names of all figures of a report: what a limit, a comparison and a reference may speak of."""

from __future__ import annotations

from collections.abc import Iterable

STEPS = ("source", "cleaned", "moved", "stored")
"""The field along a job: as read, without monopoles, on the target, and as the file holds it."""

LOSSES = {"cleaning": "cleaned", "moving": "moved", "storing": "stored"}
"""What may lose energy, and the step it leads to."""

PLACES = ("x", "y", "z", "r", "R", "theta", "phi")
"""What a formula of a region may use: the position of a cell, and"""
STRENGTH = "B"
"""the strength of its field; and names of scalar quantities."""

NORMS = ("linf", "l1", "l2", *(f"scaled.{norm}" for norm in ("linf", "l1", "l2")), "net_flux")
"""Of a divergence."""

FIELD = (
    "cells",
    *(f"divergence.{norm}" for norm in NORMS),
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
    *(f"coverage.{part}" for part in ("cells", "whole", "cut", "volume")),
    "cleaning.largest_change",
    "cleaning.rms_change",
)
"""Of the job as a whole."""

AGAINST = ("vector_correlation", "cosine", "normalised_error", "mean_error", "energy_ratio", "overlap")
"""Of the field as stored against the source, or against another file, where the grids overlap."""

MEASURED = ("source", "stored")
"""Steps at which what costs more is measured."""

SURFACE = ("flux", "unsigned", "source_flux", "source_unsigned", "change")
"""Of a surface: net and unsigned flux as stored and in the source; difference of the net ones over the latter."""

HELICITY = ("value", "energy", "reference_energy", "free_energy")
"""Relative to the potential field."""

SUMS = ("mass", "momentum", "angular_momentum", "kinetic_energy", "internal_energy")
"""Of the gas in the cells that the source covers wholly."""

GAS = tuple(
    f"{sum_}.{part}" if part else sum_ for sum_ in SUMS for part in (("x", "y", "z") if "momentum" in sum_ else ("",))
)

CURVED = ("energy",)
"""In a metric: half of gamma_ij B^i B^j over proper volumes, of the whole grid."""

EXTREMES = ("b2_over_rho_largest", "beta_smallest", "beta_largest", "speed_largest", "lorentz_largest")
"""Of the gas and the field."""

REGION = ("divergence", "energy", "energy_change", "strength")
"""Of a region, for the field as stored."""

FLUID = ("source", "moved", "added_outside", "removed_by_blend", "added_by_cure", "stored", "change")
"""Of the total of a conserved quantity."""


def known(conserved: Iterable[str] = (), regions: Iterable[str] = (), surfaces: Iterable[str] = ()) -> list[str]:
    """The dotted names of all figures of a job, measured or not.

    Parameters
    ----------
    conserved, regions, surfaces : iterable of str
        Names of conserved quantities of the target, of regions, and of surfaces.

    Examples
    --------
    >>> known()[:3], "stored.energy.total" in known(), known(regions=["core"])[-1]
    (['divergence', 'energy_change', 'mass_change'], True, 'regions.core.strength')
    """
    return [
        *JOB,
        *(f"stencil.{figure}" for figure in NORMS),
        *(f"agreement.{figure}" for figure in AGAINST),
        *(f"against.{figure}" for figure in AGAINST),
        *(f"{step}.{figure}" for step in STEPS for figure in FIELD),
        *(f"helicity.{step}.{figure}" for step in MEASURED for figure in HELICITY),
        *(f"curved.{step}.{figure}" for step in MEASURED for figure in CURVED),
        *(f"gas.{when}.{figure}" for when in ("before", "stored") for figure in GAS),
        *(f"gas.change.{figure}" for figure in SUMS),
        *(f"extremes.{step}.{figure}" for step in MEASURED for figure in EXTREMES),
        *(f"fluid.{name}.{figure}" for name in conserved for figure in FLUID),
        *(f"surfaces.{name}.{figure}" for name in surfaces for figure in SURFACE),
        *(f"regions.{name}.{figure}" for name in regions for figure in REGION),
    ]
