"""What a field is worth: divergence, energy, flux through surfaces, helicity, comparison, limits."""

from fieldmover.diagnostics.compare import (
    Difference,
    FieldComparison,
    VectorFigures,
    compare_fields,
    compare_fluxes,
    compare_vectors,
    differences,
)
from fieldmover.diagnostics.divergence import WorstCell, relative_divergence, worst_cells
from fieldmover.diagnostics.energy import (
    cell_energies,
    energy_by_shell,
    energy_in,
    energy_of_cells,
    power_spectrum,
)
from fieldmover.diagnostics.fluid import Extreme, FluidSums, fluid_extremes, fluid_sums, squares
from fieldmover.diagnostics.helicity import Helicity, RelativeHelicity, helicity, potential_field, relative_helicity
from fieldmover.diagnostics.limits import Verdict, check_limits
from fieldmover.diagnostics.regions import box_cells, expression_cells, places, shell_cells
from fieldmover.diagnostics.samples import FluxSpline
from fieldmover.diagnostics.stencils import StencilDivergence, stencil_divergence
from fieldmover.diagnostics.summary import Diagnosis, diagnose
from fieldmover.diagnostics.surfaces import Surface, SurfaceFlux, cap, disc, hemisphere, sphere, surface_fluxes
from fieldmover.diagnostics.walls import Wall, closed_walls

__all__ = [
    "Diagnosis",
    "Difference",
    "Extreme",
    "FieldComparison",
    "FluidSums",
    "FluxSpline",
    "Helicity",
    "RelativeHelicity",
    "StencilDivergence",
    "Surface",
    "SurfaceFlux",
    "VectorFigures",
    "Verdict",
    "Wall",
    "WorstCell",
    "box_cells",
    "cap",
    "cell_energies",
    "check_limits",
    "closed_walls",
    "compare_fields",
    "compare_fluxes",
    "compare_vectors",
    "diagnose",
    "differences",
    "disc",
    "energy_by_shell",
    "energy_in",
    "energy_of_cells",
    "expression_cells",
    "fluid_extremes",
    "fluid_sums",
    "helicity",
    "hemisphere",
    "places",
    "potential_field",
    "power_spectrum",
    "relative_divergence",
    "relative_helicity",
    "shell_cells",
    "sphere",
    "squares",
    "stencil_divergence",
    "surface_fluxes",
    "worst_cells",
]
