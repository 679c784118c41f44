"""Formulas of a job over the quantities of a state and the places of its cells."""

from __future__ import annotations

from collections.abc import Mapping
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from fieldmover.diagnostics import cell_energies, places
from fieldmover.errors import FieldmoverError, JobError
from fieldmover.expressions import Expression
from fieldmover.forms.fields import FaceFlux
from fieldmover.grids.grid import Grid
from fieldmover.jobs.names import PLACES, STRENGTH
from fieldmover.jobs.schema import plain

Array = NDArray[np.float64]


class Values:
    """What formulas may use, made when they do: scalars, components of vectors, strength of the field, positions.

    Parameters
    ----------
    fluid : mapping of str to arrays
        Vectors in Cartesian components.
    flux : FaceFlux
    """

    def __init__(self, fluid: Mapping[str, Array], flux: FaceFlux) -> None:
        self._flux = flux
        self._known: dict[str, Array] = {}
        for name, values in fluid.items():
            if values.ndim == 3:
                self._known[plain(name)] = values
            else:
                self._known.update({f"{plain(name)}_{axis}": part for axis, part in zip("xyz", values, strict=True)})

    @property
    def shape(self) -> tuple[int, int, int]:
        """Of every value."""
        return self._flux.grid.shape

    @property
    def names(self) -> set[str]:
        """All that may be used."""
        return {*self._known, STRENGTH, *PLACES}

    @cached_property
    def _places(self) -> dict[str, Array]:
        return places(self._flux.grid)

    def __getitem__(self, name: str) -> Array:
        if name in self._known:
            return self._known[name]
        if name == STRENGTH:
            return np.sqrt(2.0 * cell_energies(self._flux) / self._flux.grid.cell_volumes())
        return self._places[name]


def evaluated(formula: Expression, values: Values, where: str) -> Array:
    """The values of a formula in every cell.

    Raises
    ------
    JobError
        If one is not finite.
    """
    try:
        return formula.evaluate({name: values[name] for name in formula.names}, values.shape)
    except FieldmoverError as error:
        raise JobError(f"{where}: {error}") from None


def background(value: float | str, grid: Grid, where: str) -> Array | float:
    """What lies outside the source: a number, or a formula of positions.

    Raises
    ------
    JobError
        If a value is not finite.
    """
    if not isinstance(value, str):
        return value
    formula, known = Expression(value, PLACES), places(grid)
    try:
        return formula.evaluate({name: known[name] for name in formula.names}, grid.shape)
    except FieldmoverError as error:
        raise JobError(f"{where}: {error}") from None
