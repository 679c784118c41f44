"""Words and numbers of a job file, and the table that refuses all else."""

from __future__ import annotations

import math
import re
from itertools import pairwise
from typing import Annotated, Any, Literal

from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Discriminator,
    Field,
    StringConstraints,
    Tag,
)

from fieldmover.jobs.numbers import number

Basis = Literal["physical", "coordinate", "cartesian"]
AxisOrder = Literal["q1 q2 q3", "q1 q3 q2", "q2 q1 q3", "q2 q3 q1", "q3 q1 q2", "q3 q2 q1"]

Mistake = tuple[tuple[str, ...], str]

TAGS = {"rule", "list", "dataset", "scalar", "vector", "absolute", "relative", "lower", "[key]"}
"""Names of alternatives, which validation puts into places and messages leave out."""
UNITS = ("gaussian", "heaviside-lorentz")


def from_text(value: Any) -> Any:
    """A number, also of a text like "pi / 2"; anything else as it is."""
    return number(value) if isinstance(value, str) else value


def sought(value: Any) -> Any:
    """A number, or where to find it: a dataset or `path@attribute`, which begin with a slash."""
    return value if isinstance(value, str) and value.startswith("/") else from_text(value)


def unit_of(value: Any) -> Any:
    """A unit of the magnetic field, by name or as a number above 0."""
    is_number = isinstance(value, int | float) and not isinstance(value, bool)
    if value in UNITS or (is_number and 0 < value < math.inf):
        return value
    raise ValueError(f'found {value!r}; give "gaussian", "heaviside-lorentz" or a number above 0')


def increasing(values: list[float]) -> list[float]:
    """Refuse positions that do not increase."""
    for place, (a, b) in enumerate(pairwise(values)):
        if not a < b:
            raise ValueError(f"positions must increase: {a:g}, then {b:g} at [{place + 1}]")
    return values


def name_of(value: str) -> str:
    """Refuse what is no name for a quantity."""
    if not re.fullmatch(r"[A-Za-z][\w -]{,99}", value):
        raise ValueError(f"found {value[:40]!r}; expected a name: a letter, then letters, digits, spaces, _ and -")
    return value


def plain(name: str) -> str:
    """The name of a quantity in formulas: spaces and hyphens are not for them."""
    return re.sub(r"[ -]", "_", name)


def path_of_data(value: str) -> str:
    """Refuse what is no path of a dataset."""
    parts = value.removeprefix("/").split("/")
    if any(part in ("", ".") or re.search(r"[\s@]", part) for part in parts):
        raise ValueError(f"found {value!r}; expected the path of a dataset like /state/rho, without spaces and @")
    return value


def sort_of_data(value: Any) -> str:
    """Which alternative data are: one dataset, or one for each component."""
    return "vector" if isinstance(value, list) else "scalar"


Three = Field(min_length=3, max_length=3)
Number = Annotated[float, BeforeValidator(from_text)]
Sought = Annotated[float | str, BeforeValidator(sought)]
"""A number, or where the snapshot holds it."""
Text = Annotated[str, StringConstraints(min_length=1, max_length=1000)]
Dataset = Annotated[str, StringConstraints(max_length=1000), AfterValidator(path_of_data)]
Components = Annotated[list[Dataset], Three]
Unit = Annotated[str | float, BeforeValidator(unit_of)]
Data = Annotated[Annotated[Dataset, Tag("scalar")] | Annotated[Components, Tag("vector")], Discriminator(sort_of_data)]
Quantity = Annotated[str, AfterValidator(name_of)]


class Table(BaseModel):
    """A table of the job: unknown keys, other types and numbers that are not finite are refused."""

    model_config = ConfigDict(extra="forbid", strict=True, frozen=True, allow_inf_nan=False)
