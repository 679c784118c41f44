"""What a field is worth: divergence, energy, flux through surfaces, helicity, comparison, limits."""

from fieldmover.diagnostics.compare import (
    Difference,
    VectorFigures,
    compare_fluxes,
    compare_vectors,
    differences,
)
from fieldmover.diagnostics.divergence import WorstCell, relative_divergence, worst_cells
from fieldmover.diagnostics.energy import (
    box_cells,
    cell_energies,
    energy_by_shell,
    energy_in,
    energy_of_cells,
    power_spectrum,
    shell_cells,
)
from fieldmover.diagnostics.fluid import FluidSums, fluid_sums
from fieldmover.diagnostics.helicity import Helicity, helicity
from fieldmover.diagnostics.limits import Verdict, check_limits
from fieldmover.diagnostics.summary import Diagnosis, diagnose
from fieldmover.diagnostics.surfaces import Wall, cap_flux, closed_walls, disc_flux

__all__ = [
    "Diagnosis",
    "Difference",
    "FluidSums",
    "Helicity",
    "VectorFigures",
    "Verdict",
    "Wall",
    "WorstCell",
    "box_cells",
    "cap_flux",
    "cell_energies",
    "check_limits",
    "closed_walls",
    "compare_fluxes",
    "compare_vectors",
    "diagnose",
    "differences",
    "disc_flux",
    "energy_by_shell",
    "energy_in",
    "energy_of_cells",
    "fluid_sums",
    "helicity",
    "power_spectrum",
    "relative_divergence",
    "shell_cells",
    "worst_cells",
]
