"""What a job wants measured and shown: limits, regions, surfaces, the report."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from difflib import get_close_matches
from typing import Annotated, Any

from pydantic import AfterValidator, BeforeValidator, Discriminator, Field, Tag, model_validator

from fieldmover.errors import JobError
from fieldmover.expressions import Expression
from fieldmover.jobs.names import PLACES, STRENGTH, known
from fieldmover.jobs.numbers import number
from fieldmover.jobs.schema.tables import Mistake, Number, Table, Text, Three, increasing


def _sort_of_limit(value: Any) -> str:
    if isinstance(value, AtLeast) or (isinstance(value, dict) and "at_least" in value and "within" not in value):
        return "lower"
    return "relative" if isinstance(value, dict | Within) else "absolute"


def _dotted(value: Any, prefix: str = "") -> Any:
    """Nested tables of limits as one with dotted names; a table that says `within` or `at_least` is a limit itself."""
    if not isinstance(value, dict):
        return value
    flat: dict[str, Any] = {}
    for key, entry in value.items():
        group = isinstance(entry, dict) and all(
            isinstance(part, dict) for name, part in entry.items() if name in ("within", "of", "at_least")
        )
        flat.update(_dotted(entry, f"{prefix}{key}.") if group else {f"{prefix}{key}": entry})
    return flat


def _figure(name: str) -> str:
    """A name that some job may have; those of its own regions, surfaces and quantities are looked at later."""
    if not name.startswith(("regions.", "surfaces.", "fluid.")):
        among(name, known())
    return name


def among(name: str, names: list[str]) -> None:
    """Refuse a name that is not one of some, and tell the nearest that is."""
    if name not in names:
        near = get_close_matches(name, names, 1, 0.0)
        raise ValueError(f"there is no such figure; the nearest is {near[0]!r}")


class Within(Table):
    """A limit on the relative change of a figure against a report made before."""

    within: Number = Field(ge=0, description="the largest relative change")
    of: Text = Field(description="the report.json to compare with")


class AtLeast(Table):
    """A limit from below: `{ at_least = 0.99 }`."""

    at_least: Number = Field(description="the smallest value allowed")


Limit = Annotated[
    Annotated[Number, Field(ge=0), Tag("absolute")]
    | Annotated[Within, Tag("relative")]
    | Annotated[AtLeast, Tag("lower")],
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
    """What the report shows and measures beside what it always does."""

    planes: Annotated[list[Annotated[Any, BeforeValidator(_plane)]], Field(min_length=1, max_length=4)] | None = None
    helicity: bool = False


Position = Annotated[list[Number], Three]
Radius = Annotated[Number, Field(gt=0)]
Radii = Annotated[list[Number], Field(min_length=2, max_length=2), AfterValidator(increasing)]


class Region(Table):
    """A part of space: a box, a ball or a shell, in Cartesian coordinates, or wherever a formula holds."""

    from_: Position | None = Field(default=None, alias="from")
    to: Position | None = None
    centre: Position = [0.0, 0.0, 0.0]
    radius: Radius | None = None
    radii: Radii | None = None
    where: Text | None = None

    @model_validator(mode="after")
    def _one_shape(self) -> Region:
        shapes = [self.from_ is not None and self.to is not None, self.radius is not None]
        shapes += [self.radii is not None, self.where is not None]
        if sum(shapes) != 1 or (self.from_ is None) != (self.to is None):
            raise ValueError(
                "give from and to (a box), centre and radius (a ball), centre and radii (a shell) or where (a formula)"
            )
        return self


def formula_of(where: str, quantities: Iterable[str]) -> Expression:
    """The formula of a region.

    Raises
    ------
    JobError
        If it is none, uses a name that is no place, strength or quantity, or is no comparison.
    """
    formula = Expression(where, {*PLACES, STRENGTH, *quantities})
    if not formula.is_mask:
        raise JobError(f"expression {where!r}: expected a comparison that holds or not, like r < 2")
    return formula


def region_mistakes(regions: Mapping[str, Region], quantities: Iterable[str]) -> list[Mistake]:
    """What is wrong with the formulas of regions, in a job with these scalar quantities."""
    found: list[Mistake] = []
    for name, region in regions.items():
        if region.where is not None:
            try:
                formula_of(region.where, quantities)
            except JobError as error:
                found.append((("regions", name, "where"), str(error)))
    return found


def _normal(value: Any) -> Any:
    """One of the six directions of the axes, or a vector."""
    if isinstance(value, str) and re.fullmatch(r"-?[xyz]", value):
        sign = -1.0 if value[0] == "-" else 1.0
        return [sign * (name == value[-1]) for name in "xyz"]
    numbers = isinstance(value, list) and all(isinstance(v, int | float) and not isinstance(v, bool) for v in value)
    if numbers and len(value) == 3 and any(value):
        return [float(v) for v in value]
    raise ValueError(f'found {value!r}; give "x", "y", "z", "-x", "-y", "-z" or three numbers, not all 0')


class Through(Table):
    """A surface that flux goes through: `{ disc = 2.0, normal = "z", centre = [0, 0, 1] }`."""

    sphere: Radius | None = None
    hemisphere: Radius | None = None
    cap: Radius | None = None
    disc: Radius | None = None
    centre: Position = [0.0, 0.0, 0.0]
    normal: Annotated[Any, BeforeValidator(_normal)] = None
    angle: Annotated[Number, Field(gt=0)] | None = None
    inner: Radius | None = None

    @model_validator(mode="after")
    def _one_kind(self) -> Through:
        if sum(size is not None for size in (self.sphere, self.hemisphere, self.cap, self.disc)) != 1:
            raise ValueError("give one of sphere, hemisphere, cap or disc: its radius")
        if self.sphere is not None and self.normal is not None:
            raise ValueError("a sphere has no normal")
        if (self.cap is None) != (self.angle is None):
            raise ValueError('give angle, from the normal to the rim, with a cap, and only then: angle = "30 deg"')
        if self.inner is not None and (self.disc is None or self.inner >= self.disc):
            raise ValueError("inner is the radius of the hole in a disc, smaller than the disc's")
        return self
