"""Where the nodes of a target lie in a source, brick by brick.

On most bricks the source's coordinates are a smooth function of the target's. Then the polynomial through some hundred
Chebyshev points of the brick gives them at all its nodes, and its derivatives are the tangents of the target's axes in
the source: no node need be located on its own, and a brick is kept in some kilobytes. How large the last
coefficients are tells whether the polynomial is good enough (Trefethen 2013, Approximation Theory and Approximation
Practice, chapters 3 and 8; from memory). Near an axis of the source, and at the walls of one without closed form, it
is not; there every node is located.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from itertools import pairwise, product

import numpy as np
from numpy.polynomial import chebyshev
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.grids.grid import Grid
from fieldmover.interpolation.locate import Locator

Array = NDArray[np.float64]
Part = tuple[slice, ...]

BRICK = (16, 16, 32)
"""Nodes located together: their part of the source's coefficients stays in cache."""

_FIRST = 4  # points along each axis at first, then as many as the fall of the coefficients promises to do
_MOST_MORE = 8
_SHARE = 4  # a polynomial must spare so many nodes for each of its points
_RESOLVED = 1e-8  # of a cell: largest of the last two coefficients along an axis. The first left out is far smaller


@dataclass(frozen=True, eq=False)
class Brick:
    """Some nodes of the target in the source's coordinates.

    Attributes
    ----------
    part : tuple of three slices
        Which nodes.
    coefficients : ndarray, shape (3, m1, m2, m3), or None
        Of the Chebyshev polynomial on the brick, for the three coordinates.
    q, dq : ndarrays, shapes (3, n1, n2, n3) and (3, 3, n1, n2, n3), or None
        Coordinates and tangents where there is no polynomial.
    """

    part: Part
    coefficients: Array | None
    q: Array | None = None
    dq: Array | None = None

    @property
    def nbytes(self) -> int:
        return sum(a.nbytes for a in (self.coefficients, self.q, self.dq) if a is not None)


class NodePlaces:
    """The nodes of a target in a source's coordinates.

    Parameters
    ----------
    locator : Locator
        Of the source.
    target : Grid

    Attributes
    ----------
    starts : tuple of three ndarrays
        First node of each brick along each axis, and the number of nodes.
    bricks : list of lists of Brick
        One list for each brick along axis 1.
    """

    def __init__(self, locator: Locator, target: Grid) -> None:
        self.locator, self.target = locator, target
        one, two, three = (brick_starts(n, size) for n, size in zip(target.node_shape(), BRICK, strict=True))
        self.starts = (one, two, three)
        parts = [[slice(int(a), int(b)) for a, b in pairwise(s)] for s in self.starts]
        self._kept: dict[tuple[int, int, int], tuple[Array, Array, Array]] = {}
        found = compute.for_each(self._locate, product(*parts))
        across = len(parts[1]) * len(parts[2])
        self.bricks = [found[n : n + across] for n in range(0, len(found), across)]

    @property
    def nbytes(self) -> int:
        """Memory of all bricks, bytes."""
        return sum(brick.nbytes for row in self.bricks for brick in row)

    def at_nodes(self, brick: Brick) -> tuple[Array, Array]:
        """Coordinates (3, n1, n2, n3) of a brick's nodes and tangents (3, 3, n1, n2, n3).

        Tangents [:, d] are per unit of the target's coordinate d."""
        c = brick.coefficients
        if c is None:
            assert brick.q is not None
            assert brick.dq is not None
            return brick.q.copy(), brick.dq
        (_, t1, d1), (_, t2, d2), (_, t3, d3) = (self._tables(d, brick.part[d], c.shape[d + 1]) for d in range(3))
        n1, n2, n3 = (t.shape[0] for t in (t1, t2, t3))
        level, along3 = c @ t3.T, c @ d3.T
        level, along2, along3 = (a.reshape(3, -1, n2 * n3) for a in (t2 @ level, d2 @ level, t2 @ along3))
        q, dq = np.empty((3, n1, n2 * n3)), np.empty((3, 3, n1, n2 * n3))
        np.matmul(t1, level, out=q)
        np.matmul(d1, level, out=dq[:, 0])
        np.matmul(t1, along2, out=dq[:, 1])
        np.matmul(t1, along3, out=dq[:, 2])
        return q.reshape(3, n1, n2, n3), dq.reshape(3, 3, n1, n2, n3)

    def _tables(self, axis: int, part: slice, count: int) -> tuple[Array, Array, Array]:
        """Chebyshev points between nodes of an axis; polynomials (n, count) at the nodes, and their derivatives."""
        key = axis, part.start, count
        if key not in self._kept:
            nodes = self.target.nodes[axis][part]
            half, middle = 0.5 * (nodes[-1] - nodes[0]), 0.5 * (nodes[-1] + nodes[0])
            s = (nodes - middle) / half
            slopes = chebyshev.chebvander(s, count - 2) @ chebyshev.chebder(np.eye(count)) / half
            self._kept[key] = middle + half * _points(count), chebyshev.chebvander(s, count - 1), slopes
        return self._kept[key]

    def touched(self, axis: int) -> NDArray[np.bool_]:
        """Which cells along an axis of the source hold nodes of the target, or lie between nodes of a brick."""
        nodes, n = self.locator.grid.nodes[axis], self.locator.grid.shape[axis]
        turn = np.ptp(nodes) if self.locator.grid.periodic[axis] else 0.0

        def cells(q: Array) -> NDArray[np.int64]:
            turns = np.floor((q - nodes[0]) / turn) if turn else 0.0 * q
            place = np.clip(np.searchsorted(nodes, q - turns * turn, side="right") - 1, 0, n - 1)
            return np.asarray(place + n * turns.astype(np.int64))

        touched = np.zeros(n, dtype=bool)
        ends = []
        for brick in (one for row in self.bricks for one in row):
            if brick.coefficients is None:
                assert brick.q is not None
                q = brick.q[axis].ravel()
                touched[cells(q[np.isfinite(q)]) % n] = True
            else:
                c = brick.coefficients[axis].ravel()
                reach = np.abs(c[1:]).sum()
                ends.append([c[0] - reach, c[0] + reach])
        for low, high in np.unique(cells(np.array(ends).reshape(-1, 2)), axis=0):
            touched[np.arange(low, high + 1) % n] = True
        return touched

    def _locate(self, part: Part) -> Brick:
        nodes = [q[p] for q, p in zip(self.target.nodes, part, strict=True)]
        counts, coefficients = [_FIRST] * 3, None
        while _SHARE * np.prod(counts) <= np.prod([q.size for q in nodes]):
            found = self._polynomial(part, counts, coefficients)
            if found is None:
                break
            coefficients, more = found
            if not any(more):
                return Brick(part, coefficients)
            counts = [n + m for n, m in zip(counts, more, strict=True)]
        q1, q2, q3 = nodes[0][:, None, None], nodes[1][None, :, None], nodes[2][None, None, :]
        x = np.stack(self.target.map.to_cartesian(q1, q2, q3))
        tangents = self.target.map.jacobian(q1, q2, q3)
        q, dq = self.locator.pull_back(x.reshape(3, -1), tangents.reshape(3, 3, -1))
        return Brick(part, None, q.reshape(x.shape), dq.reshape(tangents.shape))

    def _polynomial(self, part: Part, counts: list[int], rough: Array | None) -> tuple[Array, list[int]] | None:
        """Coefficients of the polynomial through Chebyshev points, and how many more points it needs along each axis.

        The search for the points starts from a polynomial through fewer. None where points have no coordinates.
        """
        p1, p2, p3 = (self._tables(axis, p, count)[0] for axis, (p, count) in enumerate(zip(part, counts, strict=True)))
        x = np.stack(self.target.map.to_cartesian(p1[:, None, None], p2[None, :, None], p3[None, None, :]))
        start = None
        if rough is not None:
            start = _along_all([_refine(few, n) for few, n in zip(rough.shape[1:], counts, strict=True)], rough)
            start = start.reshape(3, -1)
            self.locator.close(start)
        q = self.locator.coordinates(x.reshape(3, -1), start)
        if not np.isfinite(q).all():
            return None
        source = self.locator.grid
        widths = np.empty(3)
        for d, nodes in enumerate(source.nodes):
            if source.periodic[d]:
                turn = np.ptp(nodes)
                q[d] += turn * np.round((q[d, 0] - q[d]) / turn)
            first, last = np.searchsorted(nodes, [q[d].min(), q[d].max()])
            widths[d] = np.diff(nodes[max(first - 1, 0) : last + 1]).min(initial=np.diff(nodes).max())
        c = _along_all([_transform(n) for n in counts], q.reshape(3, *counts))
        sizes = np.abs(c) / widths[:, None, None, None]
        return c, [_more_points(sizes.max(axis=tuple(e for e in range(4) if e != axis + 1))) for axis in range(3)]


def _more_points(sizes: Array) -> int:
    """How many more coefficients along an axis are needed, from the size of those of degree 0, 1, ..."""
    tail = float(sizes[-2:].max())
    if tail < _RESOLVED:
        return 0
    fall = np.log(max(float(sizes[1]) / tail, 1.5)) / (sizes.size - 3)  # of the logarithm, for each degree
    return int(np.clip(np.ceil(np.log(tail / _RESOLVED) / fall), 1, _MOST_MORE))


def _along_all(matrices: list[Array], c: Array) -> Array:
    """Matrices (n, m) applied along the last three axes of an array (3, m1, m2, m3)."""
    one, two, three = matrices
    n1, n2, n3 = (a.shape[0] for a in matrices)
    c = two @ (c @ three.T)
    return np.asarray((one @ c.reshape(3, -1, n2 * n3)).reshape(3, n1, n2, n3))


def brick_starts(nodes: int, size: int) -> NDArray[np.int64]:
    """First nodes of bricks of a size and the number of nodes; what is less than half a brick goes to the last one."""
    starts = np.arange(0, max(nodes - size // 2, 1), size)
    return np.append(starts, nodes)


@cache
def _points(count: int) -> Array:
    return np.asarray(np.cos(np.pi * (np.arange(count) + 0.5) / count))


@cache
def _transform(count: int) -> Array:
    """Matrix from values at the Chebyshev points to coefficients."""
    matrix = 2.0 / count * chebyshev.chebvander(_points(count), count - 1).T
    matrix[0] *= 0.5
    return np.asarray(matrix)


@cache
def _refine(few: int, count: int) -> Array:
    """Matrix from coefficients of few polynomials to values at `count` Chebyshev points."""
    return np.asarray(chebyshev.chebvander(_points(count), few - 1))
