"""Least changes of a field: removing its divergence, and finding its potential."""

from fieldmover.projection.potential import potential
from fieldmover.projection.project import project

__all__ = ["potential", "project"]
