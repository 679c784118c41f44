"""Eigenvectors of the second difference along one axis: fast transforms where it is uniform, else a matrix.

Uniform axes have trigonometric eigenvectors, one kind for each pair of ends (Buzbee, Golub & Nielson 1970, On
direct methods for solving Poisson's equations; Strang 1999, The discrete cosine transform). For all others
the generalised eigenvectors are computed once and applied as a matrix (fast diagonalisation: Lynch, Rice &
Thomas 1964, Direct solution of partial difference equations by tensor product methods).

Every basis is real and works in place, also on a periodic axis, where cosines and sines lie interleaved; so a
transform needs no memory but the array itself.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import scipy.fft
import scipy.fftpack
import scipy.linalg
from numpy.typing import NDArray

Array = NDArray[np.float64]
Transform = Callable[[Array, int], Array]

_UNIFORM = 1e-9  # scatter that rounding may bring into equal steps; a second solve removes what it leaves


@dataclass(frozen=True, eq=False)
class Line:
    """A chain of points along one axis: conductances between neighbours and to what lies beyond the ends.

    Attributes
    ----------
    links : ndarray, shape (n - 1,)
        Conductance between each point and the next.
    low, high : float
        Conductance from the first and last point to ground; 0 where the chain simply ends.
    wrap : float
        Conductance between the last point and the first; 0 unless the axis has a seam.
    """

    links: Array
    low: float = 0.0
    high: float = 0.0
    wrap: float = 0.0

    @property
    def size(self) -> int:
        return int(self.links.size) + 1

    @property
    def grounded(self) -> bool:
        return self.low > 0 or self.high > 0

    def matrix(self) -> Array:
        """The symmetric matrix K, (K p)_i = sum of conductance x (p_i - neighbour), shape (n, n)."""
        degree = np.zeros(self.size)
        degree[:-1] += self.links
        degree[1:] += self.links
        degree[0] += self.low + self.wrap
        degree[-1] += self.high + self.wrap
        K = np.diag(degree) - np.diag(self.links, 1) - np.diag(self.links, -1)
        K[0, -1] -= self.wrap
        K[-1, 0] -= self.wrap
        return K


@dataclass(frozen=True, eq=False)
class Basis:
    """Solutions of K v = value x mass x v along one axis, and the transforms to and from their amplitudes.

    Attributes
    ----------
    values : ndarray, shape (n,)
        Eigenvalues; exactly 0 for the constant vector where the chain is not grounded.
    forward, backward : callable
        ``forward(x, axis)`` returns amplitudes, ``backward`` undoes it; both may overwrite `x`. What they do
        to a right-hand side is ``backward(forward(x) / (scale x value))``, which solves K p = x.
    scale : float
    fast : bool
        Whether the transforms are fast ones.
    """

    values: Array
    forward: Transform
    backward: Transform
    scale: float
    fast: bool


def basis_of(line: Line, mass: Array) -> Basis:
    """Choose the basis of one axis.

    Parameters
    ----------
    line : Line
    mass : ndarray, shape (n,)
        Positive.

    Returns
    -------
    Basis

    Examples
    --------
    >>> basis_of(Line(np.ones(3), wrap=1.0), np.ones(4)).values.round(12)
    array([0., 2., 2., 4.])
    >>> basis_of(Line(np.ones(3), low=2.0, high=2.0), np.ones(4)).fast
    True
    """
    return _trigonometric(line, mass) or _dense(line, mass)


def is_fast(line: Line, mass: Array) -> bool:
    """Whether `basis_of` finds fast transforms for this axis."""
    return _trigonometric(line, mass) is not None


def _trigonometric(line: Line, mass: Array) -> Basis | None:
    n = line.size
    if n < 3 or not _equal(line.links):
        return None
    link, inner, k = float(line.links.mean()), float(mass[1:-1].mean()), np.arange(n)
    forward: Transform
    backward: Transform
    if line.wrap:
        if not (_equal(mass) and _close(line.wrap, link)):
            return None
        angle, forward, backward = 2 * ((k + 1) // 2) / n, _fourier, _inverse_fourier
    elif _equal(mass * [2.0, *[1.0] * (n - 2), 2.0]) and not line.grounded:  # nodes from wall to wall
        angle, forward, backward = k / (n - 1), _cosines_of_nodes, _inverse_cosines_of_nodes
    else:
        # The grounded wall of a cell lies half a cell beyond its centre.
        ends = [end if end == 0 else end / (2 * link) for end in (line.low, line.high)]
        if not (_equal(mass) and all(end == 0 or _close(end, 1.0) for end in ends)):
            return None
        shift, name, kind = _CELL_TRANSFORMS[ends[0] > 0, ends[1] > 0]
        angle, forward, backward = (k + shift) / n, _of_type(name, kind), _of_type("i" + name, kind)
    return Basis(4 * link / inner * np.sin(0.5 * np.pi * angle) ** 2, forward, backward, inner, True)


# Keyed by whether the low and the high wall are grounded: shift of the frequencies, transform, its type.
_CELL_TRANSFORMS = {
    (False, False): (0.0, "dct", 2),
    (True, True): (1.0, "dst", 2),
    (False, True): (0.5, "dct", 4),
    (True, False): (0.5, "dst", 4),
}


def _dense(line: Line, mass: Array) -> Basis:
    root = np.sqrt(mass)
    values, vectors = scipy.linalg.eigh(line.matrix() / np.outer(root, root))
    vectors /= root[:, None]
    if not line.grounded:  # the constant vector is known exactly, and its value must not be a rounding error
        values[0], vectors[:, 0] = 0.0, 1.0 / np.sqrt(mass.sum())
    matrix, transposed = vectors.copy(), vectors.T.copy()
    return Basis(
        np.maximum(values, 0.0),
        lambda x, axis: _apply(transposed, x, axis),
        lambda x, axis: _apply(matrix, x, axis),
        1.0,
        False,
    )


def _equal(values: Array) -> bool:
    return bool(np.ptp(values) <= _UNIFORM * np.abs(values).max())


def _close(value: float, expected: float) -> bool:
    return abs(value - expected) <= _UNIFORM * abs(expected)


def _apply(matrix: Array, x: Array, axis: int) -> Array:
    """The matrix times every line of x along `axis`, as few products."""
    if axis == 0:
        return np.asarray((matrix @ x.reshape(x.shape[0], -1)).reshape(x.shape))
    if axis == x.ndim - 1:
        return np.asarray((x.reshape(-1, x.shape[-1]) @ matrix.T).reshape(x.shape))
    return np.asarray(matrix @ x)


def _of_type(name: str, kind: int) -> Transform:
    function = getattr(scipy.fft, name)
    return lambda x, axis: np.asarray(function(x, type=kind, axis=axis, overwrite_x=True))


def _fourier(x: Array, axis: int) -> Array:
    return np.asarray(scipy.fftpack.rfft(x, axis=axis, overwrite_x=True))


def _inverse_fourier(x: Array, axis: int) -> Array:
    return np.asarray(scipy.fftpack.irfft(x, axis=axis, overwrite_x=True))


def _cosines_of_nodes(x: Array, axis: int) -> Array:
    # The outermost points have half the mass; division by it gives them the full weight of the transform.
    ends = np.moveaxis(x, axis, 0)
    ends[[0, -1]] *= 2.0
    return np.asarray(scipy.fft.dct(x, type=1, axis=axis, overwrite_x=True))


def _inverse_cosines_of_nodes(x: Array, axis: int) -> Array:
    return np.asarray(scipy.fft.idct(x, type=1, axis=axis, overwrite_x=True))
