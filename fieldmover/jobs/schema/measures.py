"""What a job wants measured and shown: limits, regions, the report."""

from __future__ import annotations

import re
from difflib import get_close_matches
from typing import Annotated, Any

from pydantic import AfterValidator, BeforeValidator, Discriminator, Field, Tag, model_validator

from fieldmover.jobs.names import known
from fieldmover.jobs.numbers import number
from fieldmover.jobs.schema.tables import Number, Table, Text, Three, increasing


def _sort_of_limit(value: Any) -> str:
    return "relative" if isinstance(value, dict | Within) else "absolute"


def _dotted(value: Any, prefix: str = "") -> Any:
    """Nested tables of limits as one with dotted names; a table that says `within` is a limit itself."""
    if not isinstance(value, dict):
        return value
    flat: dict[str, Any] = {}
    for key, entry in value.items():
        group = isinstance(entry, dict) and not entry.keys() & {"within", "of"}
        flat.update(_dotted(entry, f"{prefix}{key}.") if group else {f"{prefix}{key}": entry})
    return flat


def _figure(name: str) -> str:
    """A name that some job may have; those of its own regions and quantities are looked at later."""
    if not name.startswith(("regions.", "fluid.")):
        among(name, known())
    return name


def among(name: str, names: list[str]) -> None:
    if name not in names:
        near = get_close_matches(name, names, 1, 0.0)
        raise ValueError(f"there is no such figure; the nearest is {near[0]!r}")


class Within(Table):
    """A limit on the relative change of a figure against a report made before."""

    within: Number = Field(ge=0, description="the largest relative change")
    of: Text = Field(description="the report.json to compare with")


Limit = Annotated[
    Annotated[Number, Field(ge=0), Tag("absolute")] | Annotated[Within, Tag("relative")],
    Discriminator(_sort_of_limit),
]
Limits = Annotated[dict[Annotated[str, AfterValidator(_figure)], Limit], BeforeValidator(_dotted)]
"""Figures of the report that must not be exceeded, by name."""


def _plane(value: Any) -> Any:
    """Axis and position of a plane written "y = 0"."""
    match = re.fullmatch(r"\s*([xyz])\s*=\s*(.+)", value) if isinstance(value, str) else None
    if match is None:
        raise ValueError(f'found {value!r}; give a plane like "y = 0"')
    return "xyz".index(match[1]), number(match[2].strip())


class Report(Table):
    """What the report shows."""

    planes: Annotated[list[Annotated[Any, BeforeValidator(_plane)]], Field(min_length=1, max_length=4)] | None = None


class Region(Table):
    """A part of space: a box, a ball or a shell, in Cartesian coordinates."""

    from_: Annotated[list[Number], Three] | None = Field(default=None, alias="from")
    to: Annotated[list[Number], Three] | None = None
    centre: Annotated[list[Number], Three] = [0.0, 0.0, 0.0]
    radius: Annotated[Number, Field(gt=0)] | None = None
    radii: Annotated[list[Number], Field(min_length=2, max_length=2), AfterValidator(increasing)] | None = None

    @model_validator(mode="after")
    def _one_shape(self) -> Region:
        shapes = [self.from_ is not None and self.to is not None, self.radius is not None]
        shapes.append(self.radii is not None)
        if sum(shapes) != 1 or (self.from_ is None) != (self.to is None):
            raise ValueError("give from and to (a box), centre and radius (a ball) or centre and radii (a shell)")
        return self
