"""What each figure means, in one sentence: a number without its definition settles no argument."""

from __future__ import annotations

WHOLE = {
    "divergence": "Largest |net flux| of a cell over the sum of |flux| through its faces, of the field as stored.",
    "energy_change": "Relative change of the magnetic energy from the source to the field as stored, over the "
    "target cells that the source covers wholly.",
    "mass_change": "|stored - added outside - moved| / moved, of the total of the density.",
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
    "added_outside": "What the constant outside the source added to the total.",
    "cells": "Number of cells.",
}

REGION = {
    "divergence": "Largest |net flux| of a cell over the sum of |flux| through its faces, within the region.",
    "energy": "Half the integral of B^2 over the cells whose centre lies in the region.",
    "energy_change": "Relative change of the energy of the region against the source, over the cells it covers wholly.",
    "strength": "Root of twice the largest energy density of a cell of the region.",
}

TOTAL = {
    "source": "Total over the source.",
    "moved": "Total that arrived on the target.",
    "stored": "Total of the numbers as stored.",
    "change": "|stored - added outside - moved| / moved.",
}


def meaning(name: str) -> str:
    """One sentence on a figure, by its dotted name.

    Examples
    --------
    >>> meaning("stored.energy.total")
    'Half the integral of B^2 over all cells.'
    >>> meaning("regions.core.energy")
    'Half the integral of B^2 over the cells whose centre lies in the region.'
    """
    if name in WHOLE:
        return WHOLE[name]
    last = name.rsplit(".", 1)[-1]
    if name.startswith("regions."):
        return REGION[last]
    if name.startswith("fluid.") and last in TOTAL:
        return TOTAL[last]
    return next(text for ending, text in ENDINGS.items() if name.endswith(ending))
