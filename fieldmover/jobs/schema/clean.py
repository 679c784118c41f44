"""How a job removes monopoles."""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import AfterValidator, Field, model_validator

from fieldmover.errors import JobError
from fieldmover.expressions import Expression
from fieldmover.jobs.schema.tables import Number, Quantity, Table, Text

Wall = Literal["open", "fixed"]
Pair = Annotated[list[Wall], Field(min_length=2, max_length=2)]


def _of_strength(text: str) -> str:
    try:
        Expression(text, ["B"])
    except JobError as error:
        raise ValueError(str(error)) from None
    return text


class Clean(Table):
    """What may change, and by which method."""

    method: Literal["project", "relax"] = "project"
    walls: Wall | dict[str, Wall | Pair] = "open"
    hole: Literal["neutral", "free"] = "neutral"
    tolerance: Annotated[Number, Field(gt=0, lt=1)] | None = None
    weights: Annotated[Text, AfterValidator(_of_strength)] | None = None
    frozen: Quantity | None = None
    excised: Quantity | None = None
    steps: Annotated[int, Field(ge=1)] | None = None
    damping: Annotated[Number, Field(gt=0)] | None = None

    @property
    def regions(self) -> list[str]:
        """Names of the regions it speaks of."""
        return [name for name in (self.frozen, self.excised) if name is not None]

    @model_validator(mode="after")
    def _fits(self) -> Any:
        if self.method != "relax" and (self.steps is not None or self.damping is not None):
            raise ValueError('steps and damping go with method = "relax"')
        if self.steps is not None and self.tolerance is not None:
            raise ValueError("a relaxation ends after so many steps or at a tolerance; give one of the two")
        return self
