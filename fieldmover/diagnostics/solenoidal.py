"""The part of a flux that has a vector potential, and what is left."""

from __future__ import annotations

from fieldmover.errors import ChargeError, FieldError
from fieldmover.forms.fields import EdgePotential, FaceFlux
from fieldmover.projection.potential import potential
from fieldmover.projection.project import project
from fieldmover.projection.request import checked_flux


def with_potential(flux: FaceFlux) -> tuple[EdgePotential | None, FaceFlux | None]:
    """Potential of a flux, less its divergence where it has any.

    Parameters
    ----------
    flux : FaceFlux

    Returns
    -------
    pot : EdgePotential or None
        Of the flux, or of the nearest one without divergence or charge; None where closed planes carry flux.
    left : FaceFlux or None
        What the potential leaves out; None if nothing.

    Raises
    ------
    FieldError
        If the flux is not finite.
    NotConverged
        As `project`, which removes the divergence.
    """
    checked_flux(flux)
    try:
        return potential(flux), None
    except FieldError:  # divergence, or charge in a hole
        clean, _ = project(flux)
    try:
        pot = potential(clean)
    except ChargeError:  # mean flux along the seam of a grid that is not a box
        return None, flux
    f1, f2, f3 = (a - b for a, b in zip(flux.faces, clean.faces, strict=True))
    return pot, FaceFlux(flux.grid, (f1, f2, f3))
