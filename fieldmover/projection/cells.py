"""Remove from values at cell centres the divergence that a code takes from them.

A stencil D takes the divergence of B at points; of all fields with D B' = 0 at all of them B' = B - D^T p, with
(D D^T) p = D B, is nearest to B in the mean square. On even Cartesian grids D D^T is a sum of products of one
matrix per axis, and sines or Fourier modes are eigenvectors of all of them (Brackbill & Barnes 1980, The effect of
nonzero div B on the numerical solution of the magnetohydrodynamic equations; Strang 1999, The discrete cosine
transform).

Stencils do not see everything. Central differences join every second cell only, so a periodic box with even
numbers of cells falls apart into eight lattices, and a constant on each makes no difference; the corner stencil is
blind to any mode that changes sign from cell to cell along two axes. Such modes of p are those whose eigenvalue
is zero. They are known by their numbers, not by a tolerance, and D B holds none of them whatever B is; p is given
none either. So modes of B that the stencil does not see, the mean field among them, stay as they are.
"""

from __future__ import annotations

import math
import time
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Literal, get_args

import numpy as np
import scipy.fft
import scipy.fftpack
from numpy.typing import ArrayLike, NDArray

from fieldmover import compute
from fieldmover.errors import FieldError, GridError
from fieldmover.grids.axes import centres_of
from fieldmover.grids.grid import Grid, at
from fieldmover.projection.bases import Transform
from fieldmover.projection.record import Norms, Record, Regions
from fieldmover.projection.request import region_masks

Array = NDArray[np.float64]
Stencil = Literal["central", "corners"]

_UNIFORM = 1e-9  # scatter of equal steps
_CLEAN = 4e-15  # largest divergence, over the largest sum of its terms' sizes, that is rounding
_SOLVES = 3  # weak modes take a second one


def project_cells(
    grid: Grid, b: ArrayLike, stencil: Stencil = "central", regions: Mapping[str, ArrayLike] | None = None
) -> tuple[Array, Record]:
    """Remove the divergence of values at cell centres, as a given stencil takes it, by the least change.

    Parameters
    ----------
    grid : Grid
        Cartesian with even steps along each axis.
    b : array_like, shape (3, n1, n2, n3)
        Cartesian components of B.
    stencil : {"central", "corners"}
        "central": differences between the cells before and after, at every cell that has both along all axes.
        "corners": differences of cells averaged over the other two axes, at every corner with cells all round.
    regions : mapping of str to bool arrays, shape (n1, n2, n3), optional
        Cells of which the record says what share of the change is in them.

    Returns
    -------
    b : ndarray, shape (3, n1, n2, n3)
        Its divergence is zero to round-off. Modes that the stencil does not see are as they were.
    record : Record
        Its norms are those of |divergence| / (sum of the sizes of its terms).

    Raises
    ------
    GridError
        If the grid is not Cartesian with even steps, or has too few cells between two walls.
    FieldError
        If the values are not finite or do not fit the grid.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> grid = fm.cartesian_grid(*[np.linspace(0, 1, 9)] * 3, periodic=(True, True, False))
    >>> b = np.random.default_rng(0).normal(size=(3, 8, 8, 8))
    >>> clean, record = project_cells(grid, b, stencil="corners")
    >>> record.divergence_before.linf > 0.5, record.divergence_after.linf < 1e-13
    (True, True)
    """
    started = time.perf_counter()
    divergence, inside = CellDivergence(grid, stencil), region_masks(grid, regions)
    before = np.asarray(b, dtype=np.float64)
    if before.shape != (3, *grid.shape):
        raise FieldError(f"b: shape {before.shape}, expected {(3, *grid.shape)}")
    if not np.isfinite(before).all():
        raise FieldError(f"b: {int((~np.isfinite(before)).sum())} values are not finite, expected numbers")
    left, first, size = _balance(divergence, before)
    after, largest = before, float(np.abs(left).max())
    history: list[float] = []
    if largest > _CLEAN * size:
        after = before.copy()
        while not history or (history[-1] * largest > _CLEAN * size and len(history) < _SOLVES):
            divergence.correct(after, divergence.solve(left))
            left = divergence.of(after)
            history.append(float(np.abs(left).max()) / largest)
    del left
    record = Record(
        method="direct" if history else "none",
        iterations=len(history),
        history=history,
        stopped="round-off" if history else "divergence-free already",
        divergence_before=first,
        divergence_after=_balance(divergence, after)[1],
        **_compare(grid, before, after, inside),
        charge_before=None,
        charge_after=None,
        frozen_faces=0,
        excised_cells=0,
        seconds=time.perf_counter() - started,
    )
    return after, record


@dataclass(frozen=True, eq=False)
class _Axis:
    """The matrices of one axis: differences x[i + reach] - x[i] over their distance, and what the others' do here.

    Attributes
    ----------
    cells, step, seam
    reach : int
        2 (central) or 1 (corners).
    slopes, weights : ndarray
        Eigenvalues of M M^T for M the differences, and what is done along the axis for those of other axes.
    """

    cells: int
    step: float
    seam: bool
    reach: int
    slopes: Array
    weights: Array

    @property
    def pad(self) -> tuple[int, int]:
        """Copies from beyond the seam that let it be treated as if there were none."""
        return (self.reach - 1, 1) if self.seam else (0, 0)

    def forward(self, x: Array, axis: int) -> Array:
        return np.asarray(scipy.fftpack.rfft(x, axis=axis)) if self.seam else self._sines(x, axis)

    def backward(self, x: Array, axis: int) -> Array:
        return np.asarray(scipy.fftpack.irfft(x, axis=axis)) if self.seam else self._sines(x, axis)

    def _sines(self, x: Array, axis: int) -> Array:
        """Sine transforms, their own inverse, of each chain that the differences join."""
        for start in range(self.reach):
            chain = at(axis, slice(start, None, self.reach))
            if x[chain].size:
                x[chain] = scipy.fft.dst(x[chain], type=1, axis=axis, norm="ortho")
        return x


def _axis(nodes: Array, seam: bool, reach: int) -> _Axis:
    n, step = nodes.size - 1, float(nodes[-1] - nodes[0]) / (nodes.size - 1)
    if seam:
        m = (np.arange(n) + 1) // 2  # waves in the box
        angle = 2.0 * np.pi * m / n
        signs_change = 2 * m == n
    elif reach == 2:
        chains = [(n - 1) // 2, (n - 2) // 2]
        angle, signs_change = np.empty(n - 2), np.zeros(n - 2, dtype=bool)
        for start, points in enumerate(chains):
            angle[start::2] = 0.5 * np.pi * np.arange(1, points + 1) / (points + 1)
    else:
        angle, signs_change = np.pi * np.arange(1, n) / n, np.zeros(n - 1, dtype=bool)
    if reach == 2:
        slopes, weights = np.where(signs_change, 0.0, np.sin(angle) / step) ** 2, np.ones(angle.size)
    else:
        slopes = (2.0 * np.sin(0.5 * angle) / step) ** 2
        weights = np.where(signs_change, 0.0, np.cos(0.5 * angle)) ** 2
    return _Axis(n, step, seam, reach, slopes, weights)


class CellDivergence:
    """A stencil D on a grid."""

    def __init__(self, grid: Grid, stencil: Stencil) -> None:
        if stencil not in get_args(Stencil):
            raise FieldError(f"stencil: {stencil!r}, expected one of {', '.join(map(repr, get_args(Stencil)))}")
        if grid.kind != "cartesian":
            raise GridError(f"cells of a {grid.kind} grid: expected a Cartesian grid with even steps")
        self.reach = 2 if stencil == "central" else 1
        for name, nodes, seam in zip(grid.map.names, grid.nodes, grid.periodic, strict=True):
            steps = np.diff(nodes)
            if np.ptp(steps) > _UNIFORM * steps.max():
                raise GridError(
                    f"cells along {name}: steps from {steps.min():.6g} to {steps.max():.6g}, expected equal ones"
                )
            if not seam and steps.size <= self.reach:
                raise GridError(
                    f"cells along {name}: {steps.size}, expected at least {self.reach + 1} between walls, or a seam"
                )
        self.axes = [_axis(nodes, seam, self.reach) for nodes, seam in zip(grid.nodes, grid.periodic, strict=True)]

    def of(self, b: Array) -> Array:
        """D b."""
        total = self._term(b, 0, -1.0)
        for axis in (1, 2):
            total += self._term(b, axis, -1.0)
        return total

    def sizes(self, b: Array) -> Array:
        """The same with the sizes of all terms."""
        size = np.abs(b)
        return self._term(size, 0, 1.0) + self._term(size, 1, 1.0) + self._term(size, 2, 1.0)

    def _term(self, b: Array, axis: int, sign: float) -> Array:
        """What the component along an axis adds; `sign` is that of the lower neighbour."""
        x = np.pad(b[axis], [a.pad for a in self.axes], mode="wrap")
        for d in range(3):
            low, high = at(d, slice(None, -self.reach)), at(d, slice(self.reach, None))
            if d == axis:
                x = (x[high] + sign * x[low]) / (self.reach * self.axes[d].step)
            elif self.reach == 2:
                x = x[at(d, slice(1, -1))]
            else:
                x = 0.5 * (x[high] + x[low])
        return np.asarray(x)

    def correct(self, b: Array, p: Array) -> None:
        """b -= D^T p, in place."""
        for axis, component in enumerate(b):
            x = p / (self.reach * self.axes[axis].step)
            for d in range(3):
                if self.reach == 2 and d != axis:
                    x = np.pad(x, [(1, 1) if e == d else (0, 0) for e in range(3)])
                    continue
                wider = np.zeros([n + self.reach * (e == d) for e, n in enumerate(x.shape)])
                wider[at(d, slice(self.reach, None))] += x if d == axis else 0.5 * x
                wider[at(d, slice(None, -self.reach))] -= x if d == axis else -0.5 * x
                x = wider
            for d, a in enumerate(self.axes):
                if a.seam:
                    before, _ = a.pad
                    x[at(d, before)] += x[at(d, -1)]
                    if before:
                        x[at(d, -2)] += x[at(d, 0)]
                    x = x[at(d, slice(before, -1))]
            component -= x

    def solve(self, rhs: Array) -> Array:
        """p with D D^T p = rhs."""
        x = rhs
        for d, axis in enumerate(self.axes):
            x = _spread(x, axis.forward, d)
        s1, s2, s3 = (a.slopes for a in self.axes)
        w1, w2, w3 = (a.weights for a in self.axes)
        for i, plane in enumerate(x):
            values = s1[i] * np.outer(w2, w3) + w1[i] * (np.outer(s2, w3) + np.outer(w2, s3))
            plane *= np.divide(1.0, values, out=np.zeros_like(values), where=values > 0)
        for d, axis in enumerate(self.axes):
            x = _spread(x, axis.backward, d)
        return x


def _spread(x: Array, transform: Transform, axis: int) -> Array:
    """A transform along one axis, spread over the threads by slabs of another."""
    other = 1 if axis == 0 else 0
    out = np.empty_like(x)

    def work(part: slice) -> None:
        out[at(other, part)] = transform(x[at(other, part)].copy(), axis)

    compute.for_each(work, compute.slabs(x.shape[other], 4))
    return out


def _balance(divergence: CellDivergence, b: Array) -> tuple[Array, Norms, float]:
    """D b, its norms relative to the sizes of its terms, the largest of these."""
    found, size = divergence.of(b), divergence.sizes(b)
    largest = float(size.max())
    ratio = np.divide(np.abs(found), size, out=size, where=size > 0)
    return found, Norms(float(ratio.max()), float(ratio.mean()), math.sqrt(float((ratio**2).mean()))), largest


def _compare(grid: Grid, before: Array, after: Array, regions: Regions) -> dict[str, Any]:
    """The figures of `Record` on energies and changes."""
    volume = math.prod(float(nodes[1] - nodes[0]) for nodes in grid.nodes)
    old, new = (np.einsum("d...,d...", b, b) for b in (before, after))
    difference = after - before
    change = np.einsum("d...,d...", difference, difference)
    size = np.maximum(old, old.mean())
    ratio = np.divide(change, size, out=np.zeros_like(size), where=size > 0)
    cell = tuple(int(i) for i in np.unravel_index(int(np.argmax(ratio)), grid.shape))
    energies = [0.5 * volume * float(square.sum()) for square in (old, new, change)]
    return {
        "energy_before": energies[0],
        "energy_after": energies[1],
        "energy_removed": energies[0] - energies[1],
        "energy_of_change": energies[2],
        "largest_change": math.sqrt(float(ratio[cell])),
        "rms_change": math.sqrt(energies[2] / energies[0]) if energies[0] > 0 else 0.0,
        "largest_change_cell": cell,
        "largest_change_at": tuple(float(centres_of(q)[i]) for q, i in zip(grid.nodes, cell, strict=True)),
        "change_in_regions": {
            name: float(change[mask].sum() / change.sum()) if change.any() else 0.0 for name, mask in regions.items()
        },
    }
