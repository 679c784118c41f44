"""Figures that fill a curve, a list or a table: histogram, worst cells, profile, spectrum, helicity."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fieldmover.diagnostics import (
    WorstCell,
    power_spectrum,
    relative_divergence,
    relative_helicity,
    worst_cells,
)
from fieldmover.diagnostics.limits import finite
from fieldmover.diagnostics.solenoidal import with_potential
from fieldmover.errors import ChargeError, FieldError
from fieldmover.forms.fields import FaceFlux
from fieldmover.forms.incidence import d1
from fieldmover.grids.grid import Grid

Array = NDArray[np.float64]

EXPONENTS = np.arange(-18, 1)
"""Bins of divergence, one a decade; what is smaller, zero too, falls into the first."""
SHELLS = 24


def histogram(divergence: Array) -> dict[str, list]:
    """How many cells have a relative divergence in each decade; what is not a number counts as largest.

    Returns
    -------
    dict
        "from" and "to", the bounds of each bin, and "cells".

    Examples
    --------
    >>> found = histogram(np.array([0.0, 2e-3, 3e-3, 1.0]))
    >>> found["cells"][0], found["cells"][-3], found["cells"][-1], found["from"][-3]
    (1, 2, 1, 0.001)
    """
    with np.errstate(divide="ignore"):
        exponents = np.nan_to_num(np.floor(np.log10(divergence.ravel())), nan=0.0)
    places = np.clip(exponents, EXPONENTS[0], EXPONENTS[-2]).astype(np.int64) - EXPONENTS[0]
    counts = np.bincount(places, minlength=EXPONENTS.size - 1)
    bounds = [float(f"1e{e}") for e in EXPONENTS]
    return {"from": [0.0, *bounds[1:-1]], "to": bounds[1:], "cells": counts.tolist()}


def profile(grid: Grid, energies: Mapping[str, Array]) -> dict[str, Any]:
    """Energy between spheres about the origin, step by step.

    Parameters
    ----------
    grid : Grid
    energies : mapping
        Step to energies of cells, (n1, n2, n3); cells to leave out carry 0.

    Returns
    -------
    dict
        "radii", the bounds, and "energy", step to one number for each shell.
    """
    r = np.sqrt((grid.centres() ** 2).sum(axis=0)).ravel()
    bounds = np.linspace(r.min(), r.max(), SHELLS + 1)
    shell = np.clip(np.searchsorted(bounds, r, side="right") - 1, 0, SHELLS - 1)
    sums = {
        step: np.bincount(shell, weights=cells.ravel(), minlength=SHELLS).tolist() for step, cells in energies.items()
    }
    return {"radii": bounds.tolist(), "energy": sums}


def spectra(fields: Mapping[str, tuple[Grid, Array]]) -> dict[str, Any]:
    """Energy by wave number of each step whose grid is Cartesian and uniform."""
    found = {}
    for step, (grid, b) in fields.items():
        try:
            k, energy = power_spectrum(grid, b)
        except FieldError:  # another grid: there is no such figure
            continue
        found[step] = {"k": k.tolist(), "energy": energy.tolist()}
    return found


def divergences(fluxes: Mapping[str, FaceFlux]) -> dict[str, dict[str, Any]]:
    """Histogram and worst cells of each step."""
    return {
        step: {
            "histogram": histogram(relative_divergence(flux)),
            "worst_cells": [
                {"cell": list(w.cell), "position": list(w.position), **_numbers(w)} for w in worst_cells(flux)
            ],
        }
        for step, flux in fluxes.items()
    }


def _numbers(worst: WorstCell) -> dict[str, float | None]:
    return {"relative": finite(worst.relative), "net": finite(worst.net)}


def helicity_figures(flux: FaceFlux) -> dict[str, float | None] | str:
    """Relative helicity of a field, less what divergence it has; or why that has no meaning."""
    try:
        pot, _ = with_potential(flux)
        if pot is None:
            return "a closed surface carries net flux, so there is no vector potential"
        found = relative_helicity(FaceFlux(flux.grid, d1(pot.edges)))
    except ChargeError as error:
        return str(error)
    return {name: finite(value) for name, value in found.as_dict().items()}
