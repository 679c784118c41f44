"""Figures against the limits a job sets."""

from __future__ import annotations

import difflib
import math
from collections.abc import Mapping
from dataclasses import dataclass
from numbers import Real
from typing import Any

from fieldmover.errors import JobError

SHORT = {"divergence": "divergence.linf"}
"""Short names of figures."""


@dataclass(frozen=True)
class Verdict:
    """One limit and what was found.

    Attributes
    ----------
    name : str
        As in the limits.
    found : float or None
        None where the figure is undefined or not finite.
    limit : float
    passed : bool
        Whether |found| <= limit (a job's `at_least`: found >= limit); False without a number.
    """

    name: str
    found: float | None
    limit: float
    passed: bool


def check_limits(figures: Mapping[str, Any], limits: Mapping[str, float]) -> list[Verdict]:
    """Hold figures against limits.

    Parameters
    ----------
    figures : mapping
        Name to number, None or another such mapping, as `Diagnosis.as_dict` gives it; more may be added
        beside it.
    limits : mapping
        Largest magnitude allowed, by dotted name ("energy.total") or a short one ("divergence" stands for
        "divergence.linf").

    Returns
    -------
    list of Verdict
        In the order of the limits. A figure that is undefined or not a number never passes.

    Raises
    ------
    JobError
        If a name is unknown, or a limit is not a finite number from 0 on.

    Examples
    --------
    >>> figures = {"divergence": {"linf": 1e-16}, "loss": -0.3}
    >>> [verdict.passed for verdict in check_limits(figures, {"divergence": 1e-12, "loss": 0.1})]
    [True, False]
    """
    flat = flattened(figures)
    names = [*flat, *(short for short, name in SHORT.items() if name in flat)]
    verdicts = []
    for name, limit in limits.items():
        if name not in names:
            near = difflib.get_close_matches(name, names, n=1, cutoff=0.0)
            hint = f"; the nearest is {near[0]!r}" if near else ""
            raise JobError(f"limit {name!r}: there is no such figure{hint}")
        if not _is_number(limit) or not 0 <= limit < math.inf:
            raise JobError(f"limit {name!r}: {limit!r}, expected a finite number that is not negative")
        found = flat[name if name in flat else SHORT[name]]
        most = float(limit)
        verdicts.append(Verdict(name, found, most, found is not None and abs(found) <= most))
    return verdicts


def flattened(figures: Mapping[str, Any], prefix: str = "") -> dict[str, float | None]:
    """Dotted names of all figures that are numbers or undefined; None stands for what is not finite.

    Examples
    --------
    >>> flattened({"energy": {"total": 2, "axis1": None}, "worst_cell": [1, 2, 3]})
    {'energy.total': 2.0, 'energy.axis1': None}
    """
    flat: dict[str, float | None] = {}
    for name, value in figures.items():
        if isinstance(value, Mapping):
            flat.update(flattened(value, f"{prefix}{name}."))
        elif value is None or _is_number(value):
            flat[prefix + name] = finite(value)
    return flat


def finite(value: float | None) -> float | None:
    """The number, or None where it is not finite."""
    return None if value is None or not math.isfinite(value) else float(value)


def _is_number(value: object) -> bool:
    return isinstance(value, Real) and not isinstance(value, bool)
