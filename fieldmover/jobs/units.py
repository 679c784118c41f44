"""From the units of the snapshot's code to those of the receiving one."""

from __future__ import annotations

from fieldmover.jobs.schema import DIMENSIONS, Job


def ratio(job: Job, quantity: str) -> float:
    """The source's unit of a quantity ("field" and "flux" too) in that of the target; 1 without units."""
    return 1.0 if job.units is None else job.units.of("source").into(job.units.of("target"), quantity)


def size_of_quantity(job: Job, name: str) -> float:
    """What a stored number of the source is multiplied by to be one of the receiving code."""
    dimension = job.source.fluid[name].dimension or DIMENSIONS.get(name, "none")
    return 1.0 if dimension == "none" else ratio(job, dimension)
