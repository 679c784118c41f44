"""What fields are: fluxes, circulations, contents; the derivatives between them; metric weights."""

from fieldmover.forms.fields import CellContent, EdgePotential, FaceFlux
from fieldmover.forms.incidence import curl, divergence
from fieldmover.forms.sample import flux_from_function, potential_from_function
from fieldmover.forms.symmetry import perturbed, unfold, unfold_values

__all__ = [
    "CellContent",
    "EdgePotential",
    "FaceFlux",
    "curl",
    "divergence",
    "flux_from_function",
    "perturbed",
    "potential_from_function",
    "unfold",
    "unfold_values",
]
