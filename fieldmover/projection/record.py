"""What a cleaning did, in figures."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.forms.fields import FaceFlux, Three
from fieldmover.grids.axes import centres_of
from fieldmover.grids.grid import Grid, at, volume_factors
from fieldmover.projection.operator import Balance

Array = NDArray[np.float64]

_SLAB = 1 << 15


@dataclass(frozen=True)
class Norms:
    """|net flux| / (sum of |flux| over the faces) of cells not excised: largest, mean, root mean square."""

    linf: float
    l1: float
    l2: float


@dataclass(frozen=True)
class Record:
    """Figures of one call of `project`.

    Attributes
    ----------
    method : str
        "none" (nothing to do), "direct" or "conjugate gradients".
    iterations : int
        Solves of the direct solver, or iterations.
    history : list of float
        Largest net flux left after each, relative to the largest before.
    stopped : str
        Why: "divergence-free already", "round-off" or "tolerance reached".
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


def norms(balance: Balance) -> Norms:
    return Norms(balance.linf, balance.l1, balance.l2)


def compare(before: FaceFlux, after: Three, conductances: Three) -> dict[str, Any]:
    """The figures of `Record` on energies and changes.

    Parameters
    ----------
    before : FaceFlux
    after : tuple of three ndarrays
    conductances : tuple of three ndarrays
        Metric ones, of all faces.
    """
    grid = before.grid
    n1, n2, n3 = grid.shape
    slabs = compute.slabs(n1, _SLAB // (n2 * n3))
    volume = _volumes(grid)

    def energy(rows: slice) -> float:
        return float(_energies(_weights(grid, conductances, rows), _of_cells(before.faces, rows)).sum())

    old = math.fsum(compute.for_each(energy, slabs))
    density = old / math.fsum(float(volume(rows).sum()) for rows in slabs)

    def work(rows: slice) -> tuple[float, float, float, int]:
        weights, a, b = (
            _weights(grid, conductances, rows),
            _of_cells(before.faces, rows),
            _of_cells(after, rows),
        )
        change = _energies(weights, [y - x for x, y in zip(a, b, strict=True)])
        size = np.maximum(_energies(weights, a), density * volume(rows))
        ratio = np.divide(change, size, out=np.zeros_like(size), where=size > 0)
        worst = int(np.argmax(ratio))
        new = float(_energies(weights, b).sum())
        return new, float(change.sum()), float(ratio.flat[worst]), worst + rows.start * n2 * n3

    parts = compute.for_each(work, slabs)
    new, change = (math.fsum(part[i] for part in parts) for i in (0, 1))
    largest, worst = max((part[2:] for part in parts), key=lambda found: found[0])
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
    }


def _volumes(grid: Grid) -> Callable[[slice], Array]:
    """Volumes of the cells in rows of axis 1: closed forms, or the Jacobian at the cell centres."""
    factors = volume_factors(grid)
    if factors is not None:
        v1, v2, v3 = factors
        return lambda rows: v1[rows, None, None] * v2[:, None] * v3
    (q1, q2, q3), (d1, d2, d3) = map(centres_of, grid.nodes), map(np.diff, grid.nodes)

    def at_centres(rows: slice) -> Array:
        j = grid.map.jacobian(q1[rows, None, None], q2[:, None], q3)
        steps = d1[rows, None, None] * d2[:, None] * d3
        return np.asarray(np.einsum("i...,i...", j[:, 0], np.cross(j[:, 1], j[:, 2], axis=0)) * steps)

    return at_centres


def _of_cells(faces: Three, rows: slice) -> list[Array]:
    """The faces of the cells in rows of axis 1."""
    return [faces[0][rows.start : rows.stop + 1], faces[1][rows], faces[2][rows]]


def _weights(grid: Grid, conductances: Three, rows: slice) -> list[Array]:
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
