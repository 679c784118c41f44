"""Removing the monopoles of a snapshot, as the job wants it."""

from __future__ import annotations

from contextlib import suppress
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fieldmover.diagnostics import cell_energies, closed_walls
from fieldmover.errors import ChargeError, DataError, FieldError, JobError
from fieldmover.expressions import Expression
from fieldmover.forms import FaceFlux, curl
from fieldmover.forms.symmetry import perturbed
from fieldmover.grids.grid import at
from fieldmover.interpolation.uniform import split_uniform
from fieldmover.jobs.load import Loaded
from fieldmover.jobs.record import Record
from fieldmover.jobs.regions import region_masks
from fieldmover.projection.potential import potential
from fieldmover.projection.project import project
from fieldmover.projection.relax import relax, side_by_side

Array = NDArray[np.float64]

CLEAN_ENOUGH = 1e-12
"""Relative divergence that needs no cleaning."""
CHARGE = 1e-2
"""Part of the flux through a closed inner wall that may be net; more is no error of discretisation."""
ROUND_OFF = 1e-13
"""Part of the flux through all faces that is none: a wall along the field has no more, of either sign."""


def cleaned(loaded: Loaded, flux: FaceFlux, record: Record, when: str, to_move: bool) -> FaceFlux:
    """The field without monopoles; a hole in the grid may not hide a real one.

    Parameters
    ----------
    loaded : Loaded
    flux : FaceFlux
        As read.
    record : Record
        Gets what the cleaning did.
    when : "when needed", "always" or "never"
    to_move : bool
        Whether the field goes to another grid, where what a relaxation leaves cannot go.

    Raises
    ------
    DataError
        If the hole in a shell carries net flux, or a solver cannot do what the job wants.
    JobError
        If a region holds no cell of the grid, or walls and weights do not fit it.
    NotConverged
        If the solver stops before its tolerance.
    """
    divergence = record.values["fields"]["source"]["divergence"]["linf"]
    inner = None if _hole(loaded, to_move) == "free" else closed_walls(flux)[0]
    noise = ROUND_OFF * float(sum(np.abs(f).sum() for f in flux.faces))
    # Net flux that is rounding error keeps a field from having a potential, however small it is.
    noisy = inner is not None and CLEAN_ENOUGH * inner.gross < abs(inner.net) <= noise
    if when == "never" or (when == "when needed" and divergence <= CLEAN_ENOUGH and not noisy):
        return flux
    if inner is not None and abs(inner.net) > max(CHARGE * inner.gross, noise):
        raise DataError(
            f"{loaded.source}: net magnetic flux {inner.net:.6g} through the closed inner wall, "
            f"{abs(inner.net) / inner.gross:.2g} of all that passes it; a field without monopoles has none"
        )
    if to_move and loaded.job.clean.excised is not None:
        raise JobError(
            f"{loaded.path}: clean.excised: cells that may hold monopoles cannot be moved; leave the key out, or clean "
            "the snapshot on its own grid"
        )
    how, regions = _arguments(loaded, flux, to_move)
    try:
        if loaded.job.clean.method == "relax":
            return _relaxed(loaded, flux, record, how, regions, to_move)
        if loaded.job.clean.tolerance is not None:
            how["tolerance"] = loaded.job.clean.tolerance
        flux, found = project(flux, **how, regions=regions)
    except ChargeError as error:
        raise DataError(f"{loaded.source}: {error}") from None
    except FieldError as error:
        raise JobError(f"{loaded.path}: clean: {error}") from None
    record.cleaning(found.as_dict())
    return flux


def perturbed_flux(loaded: Loaded, flux: FaceFlux, record: Record) -> FaceFlux:
    """The field with the random changes that the job wants, which leave no divergence.

    Raises
    ------
    DataError
        If the field has no potential.
    """
    wanted = loaded.job.move.perturb
    if wanted is None:
        return flux
    _, rest = split_uniform(flux)
    try:
        pot = potential(rest)
    except ChargeError as error:
        raise DataError(f"{loaded.source}: {error}") from None
    changed = curl(perturbed(pot, wanted.size, wanted.seed))
    a, b, c = (f + (new - old) for f, new, old in zip(flux.faces, changed.faces, curl(pot).faces, strict=True))
    after = FaceFlux(flux.grid, (a, b, c))
    before = float(cell_energies(flux).sum())
    change = float(cell_energies(after).sum()) / before - 1.0 if before > 0 else None
    record.values["perturbation"] = {"size": wanted.size, "seed": wanted.seed, "energy_change": change}
    return after


def _hole(loaded: Loaded, to_move: bool) -> str:
    """Whether the hole in a shell may carry net flux: where a point charge takes it on, it may."""
    return "free" if to_move and loaded.job.move.net_flux == "point" else loaded.job.clean.hole


def _arguments(loaded: Loaded, flux: FaceFlux, to_move: bool) -> tuple[dict[str, Any], dict[str, NDArray[np.bool_]]]:
    """What `project` and `relax` are to keep, and the regions in which changes are counted."""
    job, grid = loaded.job, flux.grid
    values = {"B": np.sqrt(2.0 * cell_energies(flux) / grid.cell_volumes())}
    masks = region_masks(grid, {name: job.regions[name] for name in job.clean.regions}, values)
    how: dict[str, Any] = {"walls": job.clean.walls, "hole": _hole(loaded, to_move)}
    if job.clean.weights is not None:
        formula = Expression(job.clean.weights, ["B"])
        how["weights"] = lambda strength: formula.evaluate({"B": strength}, strength.shape)
    if job.clean.frozen is not None:
        how["frozen"] = _faces_of(masks[job.clean.frozen])
    if job.clean.excised is not None:
        how["excised"] = masks[job.clean.excised]
    for name, region in job.regions.items():
        with suppress(JobError):  # a region of the target may lie outside the source
            masks.update(region_masks(grid, {name: region}, values))
    return how, masks


def _relaxed(
    loaded: Loaded, flux: FaceFlux, record: Record, how: dict[str, Any], regions: dict[str, Any], to_move: bool
) -> FaceFlux:
    """Relaxation beside projection; the rest of it is projected away if the field is to be moved."""
    wanted = loaded.job.clean
    given = {"tolerance": wanted.tolerance, "steps": wanted.steps, "damping": wanted.damping}
    options: dict[str, Any] = {name: value for name, value in given.items() if value is not None}
    relaxed, slow = relax(flux, **how, **options, regions=regions)
    projected, quick = project(flux, **how)
    record.cleaning(slow.as_dict())
    both = {"projection": quick, "relaxation": slow}
    record.values["side_by_side"] = {
        **side_by_side(flux, projected, relaxed),
        **{f"divergence_of_{name}": found.divergence_after.linf for name, found in both.items()},
        **{f"largest_change_of_{name}": found.largest_change for name, found in both.items()},
        **{f"seconds_of_{name}": found.seconds for name, found in both.items()},
    }
    return project(relaxed, **how)[0] if to_move else relaxed


def _faces_of(cells: NDArray[np.bool_]) -> tuple[NDArray[np.bool_], ...]:
    """All faces of the marked cells."""
    masks = []
    for axis in range(3):
        wide = np.zeros([n + (d == axis) for d, n in enumerate(cells.shape)], dtype=bool)
        wide[at(axis, slice(None, -1))] |= cells
        wide[at(axis, slice(1, None))] |= cells
        masks.append(wide)
    return tuple(masks)
