"""What a job file may say.

Every key has a default where one is honest. What is not listed here is a mistake, told with the nearest known key.
"""

from fieldmover.jobs.schema.fields import Magnetic
from fieldmover.jobs.schema.gas import (
    DIMENSIONS,
    MASS,
    PRESSURE,
    VELOCITY,
    SourceQuantity,
    TargetQuantity,
    formula,
)
from fieldmover.jobs.schema.grids import AnyGrid, Map, Placement, SourceGrid, Spaced, Symmetry, TargetGrid
from fieldmover.jobs.schema.job import Job, Move, Source
from fieldmover.jobs.schema.measures import Region, Within
from fieldmover.jobs.schema.mistakes import formula_names, mistakes
from fieldmover.jobs.schema.tables import TAGS, plain

__all__ = [
    "DIMENSIONS",
    "MASS",
    "PRESSURE",
    "TAGS",
    "VELOCITY",
    "AnyGrid",
    "Job",
    "Magnetic",
    "Map",
    "Move",
    "Placement",
    "Region",
    "Source",
    "SourceGrid",
    "SourceQuantity",
    "Spaced",
    "Symmetry",
    "TargetGrid",
    "TargetQuantity",
    "Within",
    "formula",
    "formula_names",
    "mistakes",
    "plain",
]
