"""What a job file may say.

Every key has a default where one is honest. What is not listed here is a mistake, told with the nearest known key.
"""

from fieldmover.jobs.schema.fields import MASS, Magnetic
from fieldmover.jobs.schema.grids import AnyGrid, Map, Placement, SourceGrid, Spaced, Symmetry, TargetGrid
from fieldmover.jobs.schema.job import Job, Source
from fieldmover.jobs.schema.measures import Region, Within
from fieldmover.jobs.schema.tables import TAGS

__all__ = [
    "MASS",
    "TAGS",
    "AnyGrid",
    "Job",
    "Magnetic",
    "Map",
    "Placement",
    "Region",
    "Source",
    "SourceGrid",
    "Spaced",
    "Symmetry",
    "TargetGrid",
    "Within",
]
