"""What each figure means, in one sentence: a number without its definition settles no argument."""

from __future__ import annotations

WHOLE = {
    "divergence": "Largest |net flux| of a cell over the sum of |flux| through its faces, of the field as stored, in "
    "the stencil of the receiving code.",
    "energy_change": "Relative change of the magnetic energy from the source to the field as stored, over the "
    "target cells that the source covers wholly.",
    "mass_change": "|stored - added + removed - moved| / moved, of the total of the density; outside, by blends and by "
    "cures.",
    "energy_lost.cleaning": "Energy that the removal of monopoles took, over that of the source; covered cells.",
    "energy_lost.moving": "Energy that the move to the target took, over that of the source; covered cells.",
    "energy_lost.storing": "Energy that the rounding of the stored numbers took, over that of the source; "
    "covered cells.",
    "against.vector_correlation": "sum B.b / sqrt(sum B^2 sum b^2) over the cells by volume, B of the other file; "
    "1 for equal fields.",
    "against.cosine": "Mean cosine of the angle between the two fields; 1 for equal directions.",
    "against.normalised_error": "sum |b - B| / sum |B|, B of the other file; 0 for equal fields.",
    "against.mean_error": "Mean of |b - B| / |B|, B of the other file; 0 for equal fields.",
    "against.energy_ratio": "sum b^2 / sum B^2, B of the other file.",
    "against.overlap": "Part of the volume of the target that the other file reaches.",
    "agreement.overlap": "Part of the volume of the target over which it is compared with the source.",
    "agreement.vector_correlation": "sum B.b / sqrt(sum B^2 sum b^2) over the cells by volume, B of the source; 1 for "
    "equal fields.",
    "agreement.cosine": "Mean cosine of the angle between the fields of source and target; 1 for equal directions.",
    "agreement.normalised_error": "sum |b - B| / sum |B|, B of the source; 0 for equal fields.",
    "agreement.mean_error": "Mean of |b - B| / |B|, B of the source; 0 for equal fields.",
    "agreement.energy_ratio": "sum b^2 / sum B^2, B of the source.",
    "coverage.cells": "Number of cells of the target.",
    "coverage.whole": "Number of cells of the target that the source covers wholly.",
    "coverage.cut": "Number of cells of the target that the source covers in part.",
    "coverage.volume": "Part of the volume of the target that the source reaches.",
    "cleaning.largest_change": "Largest change of B in a cell by the cleaning, over its |B| or, if that is larger, "
    "the root mean square of B.",
    "cleaning.rms_change": "Root mean square of the change of B by the cleaning, over that of B.",
}

ENDINGS = {
    "divergence.scaled.linf": "Largest h |div B| / |B| of a cell, h the cube root of its volume.",
    "divergence.scaled.l1": "Mean over the cells of h |div B| / |B|, h the cube root of the volume.",
    "divergence.scaled.l2": "Root mean square over the cells of h |div B| / |B|, h the cube root of the volume.",
    "divergence.linf": "Largest |net flux| of a cell over the sum of |flux| through its faces.",
    "divergence.l1": "Mean over the cells of |net flux| over the sum of |flux| through the faces.",
    "divergence.l2": "Root mean square over the cells of |net flux| over the sum of |flux| through the faces.",
    "divergence.net_flux": "Largest |net flux| out of a cell.",
    "energy.total": "Half the integral of B^2 over all cells.",
    "energy.axis1": "Half the integral of B^2 of the component along axis 1.",
    "energy.axis2": "Half the integral of B^2 of the component along axis 2.",
    "energy.axis3": "Half the integral of B^2 of the component along axis 3.",
    "strength.largest": "Largest |B| of a cell.",
    "wall.net": "Net flux through a closed wall.",
    "wall.relative": "Net flux through a closed wall over the sum of |flux| through its faces.",
    "wall.north": "Flux outward through the northern half of a closed wall.",
    "removed_by_blend": "What the transition to the background outside the source took from the total.",
    "added_by_cure": "What floors and ceilings of the state added to the total.",
    "added_outside": "What the constant outside the source added to the total.",
    "cells": "Number of cells.",
}

REGION = {
    "divergence": "Largest |net flux| of a cell over the sum of |flux| through its faces, within the region.",
    "energy": "Half the integral of B^2 over the cells whose centre lies in the region.",
    "energy_change": "Relative change of the energy of the region against the source, over the cells it covers wholly.",
    "strength": "Root of twice the largest energy density of a cell of the region.",
}

SURFACE = {
    "source_flux": "Net flux through the surface, of the source.",
    "source_unsigned": "Integral of |B.n| over the surface, of the source.",
    "flux": "Net flux through the surface, of the field as stored.",
    "unsigned": "Integral of |B.n| over the surface, of the field as stored.",
    "change": "Change of the net flux over the integral of |B.n| of the source.",
}

HELICITY = {
    "value": "Relative helicity: that of the field without currents with the same flux through the walls is 0.",
    "energy": "Half the integral of B^2.",
    "reference_energy": "Energy of the field without currents with the same flux through the walls.",
    "free_energy": "Energy beyond that of the field without currents with the same flux through the walls.",
}

GAS = {
    "mass": "Mass",
    "momentum": "Momentum",
    "angular_momentum": "Angular momentum about the origin",
    "kinetic_energy": "Kinetic energy",
    "internal_energy": "Internal energy",
}

WHEN = {"before": "of the source", "stored": "of the numbers as stored", "change": "relative change on the way"}

EXTREME = {
    "b2_over_rho_largest": "Largest b^2 / rho of a cell.",
    "beta_smallest": "Smallest ratio of pressure to magnetic pressure of a cell.",
    "beta_largest": "Largest ratio of pressure to magnetic pressure of a cell.",
    "speed_largest": "Largest speed of a cell.",
    "lorentz_largest": "Largest Lorentz factor of a cell.",
}

STENCIL = " In the stencil of the receiving code, of the numbers as stored."

TOTAL = {
    "source": "Total over the source.",
    "moved": "Total that arrived on the target.",
    "stored": "Total of the numbers as stored.",
    "change": "|stored - added + removed - moved| / moved: outside the source, by blends and cures.",
}


CURVED = {"energy": "Half of gamma_ij B^i B^j over the proper volumes of all cells: the magnetic energy in the metric."}

GROUPS = {"curved": CURVED, "regions": REGION, "surfaces": SURFACE, "helicity": HELICITY, "extremes": EXTREME}


def meaning(name: str) -> str:
    """One sentence on a figure, by its dotted name.

    Examples
    --------
    >>> meaning("stored.energy.total")
    'Half the integral of B^2 over all cells.'
    >>> meaning("regions.core.energy")
    'Half the integral of B^2 over the cells whose centre lies in the region.'
    >>> meaning("gas.change.momentum")
    'Momentum over the cells that the source covers wholly, relative change on the way.'
    """
    if name in WHOLE:
        return WHOLE[name]
    first, *_, last = parts = name.split(".")
    if first in GROUPS:
        return GROUPS[first][last]
    if first == "gas":
        along = f" along {parts[3]}" if len(parts) > 3 else ""
        return f"{GAS[parts[2]]}{along} over the cells that the source covers wholly, {WHEN[parts[1]]}."
    if first == "fluid" and last in TOTAL:
        return TOTAL[last]
    if first == "stencil":
        return ENDINGS["divergence" + name.removeprefix("stencil")] + STENCIL
    return next(text for ending, text in ENDINGS.items() if name.endswith(ending))
