"""What a cleaning did, in figures."""

from __future__ import annotations

import math
import time
from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.forms.fields import FaceFlux, Three
from fieldmover.forms.measures import Conductances, near_volumes
from fieldmover.grids.axes import centres_of
from fieldmover.grids.grid import Grid, at
from fieldmover.projection.operator import Balance
from fieldmover.projection.request import hole_axis

Array = NDArray[np.float64]
Regions = Mapping[str, NDArray[np.bool_]]

_SLAB = 1 << 15


@dataclass(frozen=True)
class Norms:
    """|net flux| / (sum of |flux| over the faces) of cells not excised: largest, mean, root mean square."""

    linf: float
    l1: float
    l2: float


@dataclass(frozen=True)
class Record:
    """Figures of one call of `project`, `relax` or `project_cells`.

    Attributes
    ----------
    method : str
        "none" (nothing to do), "direct", "conjugate gradients" or "relaxation".
    iterations : int
        Solves of the direct solver, iterations, or steps.
    history : list of float
        Largest net flux left after each, relative to the largest before.
    stopped : str
        Why: "divergence-free already", "round-off", "tolerance reached" or "steps done".
    divergence_before, divergence_after : Norms
    energy_before, energy_after, energy_removed : float
        Half the integral of B^2 (Heaviside-Lorentz), unit B^2 L^3.
    energy_of_change : float
        That of the difference of the two fluxes; equal to `energy_removed` without weights, where no fixed wall
        and no frozen face carries flux.
    largest_change : float
        Largest |change of B| in a cell, relative to its |B| or, if that is larger, the root mean square of B.
    rms_change : float
        Root mean square of the change of B relative to that of B.
    largest_change_cell : tuple of three int
    largest_change_at : tuple of three float
        Cartesian position of its centre.
    change_in_regions : dict of str to float
        Share of `energy_of_change` in each region asked for.
    charge_before, charge_after : float or None
        Net flux out of the hole through a closed inner wall; None where there is no such wall.
    frozen_faces, excised_cells : int
    seconds : float
    """

    method: str
    iterations: int
    history: list[float]
    stopped: str
    divergence_before: Norms
    divergence_after: Norms
    energy_before: float
    energy_after: float
    energy_removed: float
    energy_of_change: float
    largest_change: float
    rms_change: float
    largest_change_cell: tuple[int, int, int]
    largest_change_at: tuple[float, float, float]
    change_in_regions: dict[str, float]
    charge_before: float | None
    charge_after: float | None
    frozen_faces: int
    excised_cells: int
    seconds: float

    def as_dict(self) -> dict[str, Any]:
        """The figures as plain JSON types."""
        found = asdict(self)
        for name in ("largest_change_cell", "largest_change_at"):
            found[name] = list(found[name])
        return found


@dataclass(frozen=True, eq=False)
class Cleaned:
    """Fluxes with less divergence, and how they came about."""

    faces: Three
    method: str
    history: list[float]
    stopped: str
    before: Balance
    after: Balance


def record_of(
    flux: FaceFlux, done: Cleaned, conductances: Conductances, regions: Regions, counts: tuple[int, int], started: float
) -> Record:
    """The record of what was done to `flux`; `compare` says what conductances and regions are.

    `counts` are those of frozen faces and excised cells, `started` is a time by `time.perf_counter`.
    """
    around = hole_axis(flux.grid)
    charges = [None if around is None else math.fsum(f[around][at(around, 0)].flat) for f in (flux.faces, done.faces)]
    return Record(
        method=done.method,
        iterations=len(done.history),
        history=done.history,
        stopped=done.stopped,
        divergence_before=_norms(done.before),
        divergence_after=_norms(done.after),
        **compare(flux, done.faces, conductances, regions),
        charge_before=charges[0],
        charge_after=charges[1],
        frozen_faces=counts[0],
        excised_cells=counts[1],
        seconds=time.perf_counter() - started,
    )


def _norms(balance: Balance) -> Norms:
    return Norms(balance.linf, balance.l1, balance.l2)


def compare(before: FaceFlux, after: Three, conductances: Conductances, regions: Regions) -> dict[str, Any]:
    """The figures of `Record` on energies and changes.

    Parameters
    ----------
    before : FaceFlux
    after : tuple of three ndarrays
    conductances : sequence of three ndarrays or Products
        Metric ones, of all faces.
    regions : mapping of str to bool ndarray, shape (n1, n2, n3)
    """
    grid = before.grid
    n1, n2, n3 = grid.shape
    slabs = compute.slabs(n1, _SLAB // (n2 * n3))

    def energy(rows: slice) -> float:
        return float(_energies(_weights(grid, conductances, rows), _of_cells(before.faces, rows)).sum())

    old = math.fsum(compute.for_each(energy, slabs))
    volume = math.fsum(compute.for_each(lambda rows: float(near_volumes(grid, rows).sum()), slabs))
    density = old / volume if volume > 0 else 0.0  # of a ring of two cells hardly any volume is seen

    def work(rows: slice) -> tuple[float, float, float, int, list[float]]:
        weights, a, b = (
            _weights(grid, conductances, rows),
            _of_cells(before.faces, rows),
            _of_cells(after, rows),
        )
        change = _energies(weights, [y - x for x, y in zip(a, b, strict=True)])
        size = np.maximum(_energies(weights, a), density * near_volumes(grid, rows))
        ratio = np.divide(change, size, out=np.zeros_like(size), where=size > 0)
        worst = int(np.argmax(ratio))
        new = float(_energies(weights, b).sum())
        within = [float(change[mask[rows]].sum()) for mask in regions.values()]
        return new, float(change.sum()), float(ratio.flat[worst]), worst + rows.start * n2 * n3, within

    parts = compute.for_each(work, slabs)
    new, change = math.fsum(part[0] for part in parts), math.fsum(part[1] for part in parts)
    largest, worst = max((part[2:4] for part in parts), key=lambda found: found[0])
    within = [math.fsum(sums) for sums in zip(*(part[4] for part in parts), strict=True)]
    i, j, k = np.unravel_index(worst, grid.shape)
    cell = (int(i), int(j), int(k))
    return {
        "energy_before": old,
        "energy_after": new,
        "energy_removed": old - new,
        "energy_of_change": change,
        "largest_change": math.sqrt(largest),
        "rms_change": math.sqrt(change / old) if old > 0 else 0.0,
        "largest_change_cell": cell,
        "largest_change_at": _centre(grid, cell),
        "change_in_regions": {
            name: part / change if change > 0 else 0.0 for name, part in zip(regions, within, strict=True)
        },
    }


def _of_cells(faces: Conductances, rows: slice) -> list[Array]:
    """The faces of the cells in rows of axis 1."""
    return [faces[0][rows.start : rows.stop + 1], faces[1][rows], faces[2][rows]]


def _weights(grid: Grid, conductances: Conductances, rows: slice) -> list[Array]:
    """What turns F^2 into energy of the cell beside it: half the energy for each, in a wall all for one."""
    weights = []
    for axis, g in enumerate(_of_cells(conductances, rows)):
        w = np.divide(0.25, g, out=np.zeros_like(g), where=g > 0)
        if not grid.periodic[axis]:
            w[at(axis, 0)] *= 2.0 if axis > 0 or rows.start == 0 else 1.0
            w[at(axis, -1)] *= 2.0 if axis > 0 or rows.stop == grid.shape[0] else 1.0
        weights.append(w)
    return weights


def _energies(weights: list[Array], faces: list[Array]) -> Array:
    """Energy of cells."""
    total = np.zeros([n - (axis == 0) for axis, n in enumerate(faces[0].shape)])
    for axis, (w, f) in enumerate(zip(weights, faces, strict=True)):
        energy = w * f * f
        total += energy[at(axis, slice(None, -1))]
        total += energy[at(axis, slice(1, None))]
    return total


def _centre(grid: Grid, cell: tuple[int, int, int]) -> tuple[float, float, float]:
    q = [centres_of(nodes)[i : i + 1] for nodes, i in zip(grid.nodes, cell, strict=True)]
    x, y, z = (float(c[0]) for c in grid.map.to_cartesian(q[0], q[1], q[2]))
    return x, y, z
