"""The separable operator nearest to one with arbitrary conductances: the preconditioner of all that is not.

The logarithm of the conductances of each axis is fitted by a sum of three functions of one index each, in the
least squares sense, over the faces that may change; so the factors are geometric means. Two axes must then
agree on the masses of each other (see `separable`); the through axis is the one for which they nearly do, and
the mean of both is taken.

Two helps are for what no product of factors can follow. Weights that vary from place to place alike in all
directions go into a scale s of the unknowns, so that the operator is near to s M s (Concus & Golub 1973, Use of
fast direct methods for the efficient numerical solution of nonseparable elliptic equations). Cells that have lost
some of their faces to a mask get a share of a Jacobi step, since M holds them much too tight.
"""

from __future__ import annotations

from itertools import combinations

import numpy as np
from numpy.typing import NDArray

from fieldmover.forms.fields import Three
from fieldmover.forms.measures import Factors
from fieldmover.grids.grid import at, outer
from fieldmover.projection.bases import Line
from fieldmover.projection.operator import ProjectionOperator
from fieldmover.projection.separable import for_cells

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Single = NDArray[np.float32]

_HELD = 1e-9  # weight of a face that must not change: it speaks where no other does
_SWEEPS, _SETTLED = 50, 1e-3


def nearest_factors(conductances: Three, free: tuple[Mask, Mask, Mask] | None = None) -> Factors:
    """Factors of one index each whose products are nearest to given conductances, and separable.

    Parameters
    ----------
    conductances : tuple of three ndarrays
        Of the faces normal to each axis; 0 on collapsed faces, which are left out.
    free : tuple of three bool ndarrays, optional
        Faces that count; all by default.

    Returns
    -------
    nested tuple of ndarrays
        ``factors[d][e]`` as `forms.measures.face_factors` gives them.

    Examples
    --------
    >>> x, y, z = np.arange(1.0, 4), np.arange(1.0, 3), np.arange(1.0, 3)
    >>> def product(*f):
    ...     return np.einsum("i,j,k", *f)
    >>> g = product(x, y[:2], z[:2]), product(x[:2], x, z[:2]), product(x[:2], y[:2], x)
    >>> factors = nearest_factors(g)
    >>> bool(np.allclose(product(*factors[0]), g[0]))
    True
    """
    masks = free if free is not None else (None, None, None)
    logs = [_additive_fit(d, g, mask) for d, (g, mask) in enumerate(zip(conductances, masks, strict=True))]
    t, a, b = min([(0, 1, 2), (1, 0, 2), (2, 0, 1)], key=lambda order: _disagreement(logs, order))
    for one, other, e in ((t, b, a), (t, a, b)):
        logs[one][e] = logs[other][e] = 0.5 * (logs[one][e] + logs[other][e])
    g1, g2, g3 = ((np.exp(f1), np.exp(f2), np.exp(f3)) for f1, f2, f3 in logs)
    return g1, g2, g3


def common_scale(conductances: Three, factors: Factors) -> Single:
    """Scale s of the cells that brings products of factors nearer: conductance ~ s x product x s of the neighbour.

    Parameters
    ----------
    conductances : tuple of three ndarrays
    factors : nested tuple of ndarrays

    Returns
    -------
    float32 ndarray, shape (n1, n2, n3)
        Root of the geometric mean, over the faces of each cell, of conductance over product. Few digits do: they
        change how fast an iteration goes, not where it ends.
    """
    total = np.zeros(conductances[0][:-1].shape)
    for axis, g in enumerate(conductances):
        ratio = outer(factors[axis])
        np.divide(g, ratio, out=ratio, where=g > 0)
        ratio[g == 0] = 1.0  # collapsed
        np.log(ratio, out=ratio)
        total += ratio[at(axis, slice(None, -1))]
        total += ratio[at(axis, slice(1, None))]
    total /= 12.0
    return np.exp(total, out=total).astype(np.float32)


def weakened_cells(whole: Array, left: Array) -> tuple[NDArray[np.intp], Array]:
    """Cells that masks took faces from, and what of a damped Jacobi step they need.

    Parameters
    ----------
    whole, left : ndarray
        Sum of the conductances of each cell's faces, without and with the masks.

    Returns
    -------
    flat indices and factors
    """
    cells = np.flatnonzero((left > 0) & (left < whole))
    return cells, 0.5 / left.flat[cells] - 0.5 / whole.flat[cells]


class Preconditioner:
    """Inverse of a projection operator with conductances that are products of factors.

    Exact where the operator itself has these factors and no masks.

    Parameters
    ----------
    operator : ProjectionOperator
    factors : nested tuple of ndarrays
    scale : ndarray, optional
        `common_scale`.
    weakened : tuple of two ndarrays, optional
        `weakened_cells`.
    """

    def __init__(
        self,
        operator: ProjectionOperator,
        factors: Factors,
        scale: Single | None = None,
        weakened: tuple[NDArray[np.intp], Array] | None = None,
    ) -> None:
        self._operator = operator
        self._scale, self._weakened = scale, weakened
        self._masked = not operator.active.all()
        hole = operator.hole
        self._response: Array | None = None
        if hole is not None and operator.open_walls[hole][1]:
            c, others = factors[hole][hole], [factors[hole][e] for e in range(3) if e != hole]
            line = Line(c[1:-1], low=float(c[0]), high=float(c[-1]))
            self._response = np.linalg.solve(line.matrix(), np.eye(1, line.size)[0] * c[0])
            self._wall = c[0] * np.outer(*others)
        # With nothing else grounded the hole may as well be: what flows into it is nothing.
        self._solver = for_cells(factors, operator.periodic, operator.open_walls)

    def __call__(self, r: Array, out: Array) -> None:
        """Put the (approximate) solution p of L p = r into `out`."""
        if self._scale is None:
            self._solver.solve(r, out)
        else:
            np.divide(r, self._scale, out=out)
            self._solver.solve(out, out)
        hole = self._operator.hole
        if hole is not None and self._response is not None:
            # Sherman & Morrison (1950): the wall grounded, then its potential set free.
            u = self._response.reshape([-1 if e == hole else 1 for e in range(3)])
            inflow = float((self._wall * out[at(hole, 0)]).sum())
            out += u * (inflow / (self._wall.sum() * (1.0 - self._response[0])))
        if self._scale is not None:
            out /= self._scale
        if self._weakened is not None:
            cells, share = self._weakened
            out.reshape(-1)[cells] += share * r.reshape(-1)[cells]
        if self._masked:
            out *= self._operator.active


def _disagreement(logs: list[list[Array]], order: tuple[int, int, int]) -> float:
    """Mean square by which axes t and b differ on the masses along a, and t and a on those along b."""
    t, a, b = order

    def apart(one: Array, other: Array) -> float:
        return float(np.mean(np.subtract(one, other, out=np.zeros_like(one), where=one != other) ** 2))

    return apart(logs[t][a], logs[b][a]) + apart(logs[t][b], logs[a][b])


def _additive_fit(axis: int, conductance: Array, free: Mask | None) -> list[Array]:
    """Functions f1(i), f2(j), f3(k) with a sum nearest to log(conductance); all but one have mean 0.

    Each function in turn takes the weighted mean of what the others leave, which needs only sums over planes
    and lines.
    """
    positive = conductance > 0
    log = np.log(conductance, out=np.zeros_like(conductance), where=positive)
    weight = positive.astype(np.float64)
    if free is not None:
        weight *= np.where(free, 1.0, _HELD)
    log *= weight
    sums = [log.sum(axis=tuple(e for e in range(3) if e != d)) for d in range(3)]
    pairs = {(d, e): weight.sum(axis=3 - d - e) for d, e in combinations(range(3), 2)}
    pairs |= {(e, d): table.T for (d, e), table in pairs.items()}
    totals = [pairs[d, (d + 1) % 3].sum(axis=1) for d in range(3)]
    functions = [np.zeros(n) for n in conductance.shape]
    for _ in range(_SWEEPS):
        largest = 0.0
        for d in range(3):
            rest = sums[d] - sum(pairs[d, e] @ functions[e] for e in range(3) if e != d)
            new = np.divide(rest, totals[d], out=np.zeros_like(rest), where=totals[d] > 0)
            largest = max(largest, float(np.abs(new - functions[d]).max()))
            functions[d] = new
        if largest < _SETTLED:
            break
    for d in range(3):
        if d != axis:
            mean = functions[d][totals[d] > 0].mean()
            functions[axis] += mean
            functions[d] -= mean
    for d in range(3):
        functions[d][totals[d] == 0] = -np.inf  # a pole
    return functions
