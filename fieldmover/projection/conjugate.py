"""Conjugate gradients (Hestenes & Stiefel 1952, Methods of conjugate gradients for solving linear systems).

Vectors are updated block by block, and sums are added in the order of the blocks: the same bits on any number
of threads.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute

Array = NDArray[np.float64]

_BLOCK = 1 << 16


@dataclass(frozen=True, eq=False)
class Solution:
    """Result of `conjugate_gradients`.

    Attributes
    ----------
    p : ndarray
    history : list of float
        Largest residual after each iteration, relative to the largest right-hand side, as the recursion gives
        it.
    reason : str
        Why the iteration stopped: "converged", "stalled" (no progress for a long time) or "limit" (of
        iterations).
    """

    p: Array
    history: list[float]
    reason: str


def conjugate_gradients(
    apply: Callable[[Array, Array], float],
    precondition: Callable[[Array, Array], object],
    rhs: Array,
    tolerance: float,
    limit: int = 1000,
    patience: int = 60,
) -> Solution:
    """Solve L p = rhs for a symmetric positive (semi)definite L.

    Parameters
    ----------
    apply : callable
        ``apply(s, out)`` puts L s into `out` and returns the scalar product of s and L s.
    precondition : callable
        ``precondition(r, out)`` puts an approximate solution of L z = r into `out`; symmetric.
    rhs : ndarray
        Consistent, if L has a null space. Overwritten by the residual of the recursion.
    tolerance : float
        Stop when max |residual| <= tolerance x max |rhs|.
    limit : int
        Most iterations to do.
    patience : int
        Stop when the smallest residual is this many iterations old.

    Returns
    -------
    Solution
        Also when not converged.

    Examples
    --------
    >>> L = np.array([[2.0, -1.0], [-1.0, 2.0]])
    >>> def apply(s, out):
    ...     out[...] = L @ s
    ...     return float(s @ out)
    >>> conjugate_gradients(apply, lambda r, out: np.copyto(out, r), np.array([1.0, 0.0]), 1e-14).p.round(12)
    array([0.66666667, 0.33333333])
    """
    p, z, history = np.zeros_like(rhs), np.empty_like(rhs), [1.0]
    scale = float(np.abs(rhs).max())
    if scale == 0:
        return Solution(p, [], "converged")
    precondition(rhs, z)
    s = z.copy()
    product, best = _product(rhs, z), 0
    while history[-1] > tolerance:
        if len(history) > limit:
            return Solution(p, history[1:], "limit")
        if len(history) - best > patience:
            return Solution(p, history[1:], "stalled")
        curvature = apply(s, z)
        if not curvature > 0:
            return Solution(p, history[1:], "stalled")
        history.append(_advance(p, rhs, s, z, product / curvature) / scale)
        best = best if history[best] <= history[-1] else len(history) - 1
        precondition(rhs, z)
        before, product = product, _product(rhs, z)
        _turn(s, z, product / before)
    return Solution(p, history[1:], "converged")


def _product(a: Array, b: Array) -> float:
    x, y = a.reshape(-1), b.reshape(-1)
    return math.fsum(
        compute.for_each(lambda part: float(np.einsum("i,i", x[part], y[part])), compute.slabs(x.size, _BLOCK))
    )


def _advance(p: Array, r: Array, s: Array, q: Array, step: float) -> float:
    """p += step s, r -= step q; the largest |r|."""
    p, r, s, q = (x.reshape(-1) for x in (p, r, s, q))

    def work(part: slice) -> float:
        change = step * s[part]
        p[part] += change
        np.multiply(q[part], step, out=change)
        r[part] -= change
        return float(np.abs(r[part], out=change).max())

    return max(compute.for_each(work, compute.slabs(p.size, _BLOCK)))


def _turn(s: Array, z: Array, factor: float) -> None:
    """s = z + factor s."""
    s, z = s.reshape(-1), z.reshape(-1)

    def work(part: slice) -> None:
        s[part] *= factor
        s[part] += z[part]

    compute.for_each(work, compute.slabs(s.size, _BLOCK))
