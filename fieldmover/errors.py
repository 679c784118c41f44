"""Errors a user can cause.

Each class stands for one action of the reader and carries the exit status of the command line. A message says what
was found, what was expected and where (argument, file and dataset, or line of the job).
"""

from __future__ import annotations


class FieldmoverError(Exception):
    """Base of every error that fieldmover raises on purpose."""

    exit_status = 1


class JobError(FieldmoverError, ValueError):
    """The command line or the job file is wrong."""

    exit_status = 2


class LimitExceeded(FieldmoverError):
    """A figure of the report exceeds the limit the job sets."""

    exit_status = 3


class DataError(FieldmoverError, ValueError):
    """An input is unreadable, damaged, inconsistent or refused."""

    exit_status = 4


class GridError(DataError):
    """Nodes, seams, poles or a map do not make a grid."""


class FieldError(DataError):
    """Field values do not fit their grid or break what a method needs of them."""


class ChargeError(FieldError):
    """A closed surface carries net magnetic flux, so that no vector potential exists.

    Attributes
    ----------
    charge : float
        The net flux, in the unit of the fluxes, outward from the hole.
    """

    def __init__(self, message: str, charge: float) -> None:
        super().__init__(message)
        self.charge = charge


class PlaceError(FieldError):
    """A place that was asked for does not suit the grids."""


class OutputError(FieldmoverError):
    """The output cannot be written."""

    exit_status = 5


class NotConverged(FieldmoverError):
    """An iterative solver stopped before its tolerance.

    Attributes
    ----------
    history : list of float
        Relative residual after each iteration.
    """

    exit_status = 6

    def __init__(self, message: str, history: list[float]) -> None:
        super().__init__(message)
        self.history = history


class NotEnoughMemory(FieldmoverError):
    """The job needs more memory than it may use."""

    exit_status = 7
