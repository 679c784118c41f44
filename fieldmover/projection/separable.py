"""Direct solver for separable operators on the points (cells or nodes) of a tensor grid.

The operator is

    L = K1 (x) m12 (x) m13  +  m21 (x) K2 (x) m23  +  m31 (x) m32 (x) K3

with K_d the chain of conductances along axis d (`bases.Line`) and m_de positive numbers along axis e. It is
separable where one axis, t, exists such that the other two, a and b, keep their own masses: m_ta ~ m_ba and
m_tb ~ m_ab. This holds for Cartesian (any t), cylindrical (t = R) and spherical grids (t = theta). Amplitudes
in the eigenvectors of (K_a, m_ta) and (K_b, m_tb) then leave one tridiagonal system along t for each pair of
eigenvalues (Lynch, Rice & Thomas 1964, Direct solution of partial difference equations by tensor product
methods; Buzbee, Golub & Nielson 1970, On direct methods for solving Poisson's equations).

The tridiagonal systems are eliminated in terms of the row sums rather than the diagonal, which takes no
differences: small pivots keep their digits, and the null space (no grounded end anywhere) gives a pivot that
is exactly 0.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.projection.bases import Basis, Line, Transform, basis_of, is_fast

Array = NDArray[np.float64]
Factors = Sequence[Sequence[Array]]
Step = Callable[[slice], object]

_SAME = 1e-12  # relative scatter allowed in the ratio of two mass vectors that ought to be proportional
_COLLAPSED = 1e30  # makes amplitudes that a pole does not have vanish there
_COLUMNS = 256  # columns transformed at a time along the first axis
_ASIDE = 8  # numbers of a cache line
_IN_CACHE = 1 << 15  # cells in work at a time: they stay in cache from the first step to the last


class SeparableSolver:
    """A plan for solving L p = rhs, made once for an operator.

    Parameters
    ----------
    lines : sequence of three Line
        The chains K_d.
    masses : 3 x 3 nested sequence of ndarrays
        ``masses[d][e]``, e != d, are m_de; ``masses[d][d]`` is not used.
    collapsed : sequence of (axis, end, ring)
        Poles of a grid of nodes: at index `end` (0 or -1) of `axis` all points along the axis `ring` are one
        point.

    Raises
    ------
    ValueError
        If the operator is not separable.

    Attributes
    ----------
    shape : tuple of three int
    singular : bool
        Whether constants are in the null space. The mean of a right-hand side is then taken out, and the
        solution has mean zero: a symmetric operation.

    Examples
    --------
    >>> lines = [Line(np.ones(n - 1), low=2.0) for n in (4, 5, 6)]
    >>> solver = SeparableSolver(lines, [[np.ones(n) for n in (4, 5, 6)]] * 3)
    >>> p = solver.solve(np.ones((4, 5, 6)))
    >>> around = p[0, 1, 1] + p[2, 1, 1] + p[1, 0, 1] + p[1, 2, 1] + p[1, 1, 0] + p[1, 1, 2]
    >>> round(float(6 * p[1, 1, 1] - around), 12)
    1.0
    """

    def __init__(
        self,
        lines: Sequence[Line],
        masses: Factors,
        collapsed: Sequence[tuple[int, int, int]] = (),
    ) -> None:
        self.shape = (lines[0].size, lines[1].size, lines[2].size)
        self.singular = not any(line.grounded for line in lines)
        t, a, b = _through_axis(lines, masses, {axis for axis, _, _ in collapsed})
        self._axis = t
        # One axis to a thread: the eigenvectors of one are too few to share among several.
        bases = compute.for_each(lambda e: basis_of(lines[e], masses[t][e]), (a, b))
        self._bases: dict[int, Basis] = dict(zip((a, b), bases, strict=True))
        scale = self._bases[a].scale * self._bases[b].scale
        line = lines[t]
        wrap = line.wrap * scale if line.size > 1 else 0.0  # a point is no neighbour of itself
        self._line = Line(line.links * scale, line.low * scale, line.high * scale, wrap)
        self._shifts = {
            a: masses[a][t] * (scale * _ratio(masses[a][b], masses[t][b])),
            b: masses[b][t] * (scale * _ratio(masses[b][a], masses[t][a])),
        }
        for _, end, ring in collapsed:
            self._shifts[ring][end] = _COLLAPSED * (self._line.links.max() + self._shifts[ring].max())

    def solve(self, rhs: Array, out: Array | None = None) -> Array:
        """Solve L p = rhs.

        Parameters
        ----------
        rhs : ndarray, shape `shape`
            Left as it is, unless it is `out`.
        out : ndarray, optional
            Where to put the result.

        Returns
        -------
        ndarray
            p, of mean zero if `singular`.
        """
        if out is None:
            out = np.empty(self.shape)
        np.subtract(rhs, rhs.mean() if self.singular else 0.0, out=out)
        if self._axis == 0:
            self._through_planes(out)
        else:
            self._in_planes(out)
        if self.singular:
            out -= out.mean()
        return out

    def _in_planes(self, x: Array) -> None:
        """Amplitudes along axis 1 first; then each plane is a problem of its own in the other two axes."""
        t, e = self._axis, 3 - self._axis
        outer, inner = self._bases[0], self._bases[e]

        def eliminate(planes: slice) -> None:
            for i in range(planes.start, planes.stop):
                plane = x[i] if t == 1 else np.ascontiguousarray(x[i].T)
                self._eliminate(plane[:, None, :], outer.values[i : i + 1], inner.values, 0, e)
                _replace(x[i], plane if t == 1 else plane.T)

        _along_first(x, outer.forward)
        _by_planes(x, [_within(x, inner.forward, e), eliminate, _within(x, inner.backward, e)])
        _along_first(x, outer.backward)

    def _through_planes(self, x: Array) -> None:
        """Amplitudes along axes 2 and 3, plane by plane; then tridiagonal systems along axis 1."""
        two, three = self._bases[1], self._bases[2]

        def eliminate(columns: slice) -> None:
            part = np.ascontiguousarray(x[:, columns])
            self._eliminate(part, two.values[columns], three.values, 1, 2)
            x[:, columns] = part

        _by_planes(x, [_within(x, basis.forward, e) for e, basis in self._bases.items()])
        compute.for_each(eliminate, compute.slabs(x.shape[1], 4))
        _by_planes(x, [_within(x, basis.backward, e) for e, basis in self._bases.items()])

    def _eliminate(self, x: Array, outer: Array, inner: Array, a: int, b: int) -> None:
        """Solve along the first axis of x; the others hold amplitudes of eigenvalues `outer` and `inner`."""
        line, coefficients = self._line, (outer, self._shifts[a], inner, self._shifts[b])
        if not line.wrap:
            _tridiagonal(x, line.links, line.low, line.high, *coefficients)
            return
        # Closed chain: solve with the last point held, once for the right-hand side and once for the row sums
        # (that is 1 - the response to the last point); then the last point follows from its own equation.
        chain, last, link = x[:-1], x[-1], float(line.links[-1])
        sums = outer[:, None] * self._shifts[a][:, None, None] + inner * self._shifts[b][:, None, None]
        rest = sums[:-1]
        for y in (chain, rest):
            _tridiagonal(y, line.links[:-1], line.wrap, link, *coefficients)
        pivot = sums[-1] + line.wrap * rest[0] + link * rest[-1]
        total = last + line.wrap * chain[0] + link * chain[-1]
        last[...] = np.divide(total, pivot, out=np.zeros_like(total), where=pivot > 0)
        chain += (1.0 - rest) * last


def for_cells(
    factors: Factors, periodic: tuple[bool, bool, bool], open_walls: Sequence[tuple[bool, bool]]
) -> SeparableSolver:
    """Solver for d2 W^-1 d2^T on the cells of a grid.

    Parameters
    ----------
    factors : nested tuple of ndarrays
        Face conductances as products, ``factors[d][e]`` of length n_d + 1 for e = d, n_e elsewhere
        (`forms.measures.face_factors`).
    periodic : tuple of three bool
    open_walls : three pairs of bool
        Whether the low and the high wall of each axis are open; not used on periodic axes.

    Returns
    -------
    SeparableSolver
    """
    lines = []
    for d in range(3):
        c = factors[d][d]
        low, high = (float(c[end]) if is_open else 0.0 for end, is_open in zip((0, -1), open_walls[d], strict=True))
        links = np.ascontiguousarray(c[1:-1])
        lines.append(Line(links, wrap=float(c[0])) if periodic[d] else Line(links, low, high))
    return SeparableSolver(lines, factors)


def for_nodes(
    factors: Factors, periodic: tuple[bool, bool, bool], poles: tuple[str | None, str | None, str | None]
) -> SeparableSolver:
    """Solver for d0^T W d0 on the nodes of a grid, those of a seam once: the last ones are left out.

    Parameters
    ----------
    factors : nested tuple of ndarrays
        Edge weights as products, ``factors[d][e]`` of length n_d for e = d, n_e + 1 elsewhere
        (`forms.measures.edge_factors`). At a pole the ring edges have weight 0.
    periodic : tuple of three bool
    poles : tuple
        For each axis None, "low", "high" or "both".

    Returns
    -------
    SeparableSolver
        Right-hand sides at the nodes of a pole are added up; the solution has one value there.
    """
    lines, masses, collapsed = [], [], []
    for d in range(3):
        c = factors[d][d]
        lines.append(Line(c[:-1].copy(), wrap=float(c[-1])) if periodic[d] else Line(c.copy()))
        masses.append(tuple(m[:-1] if periodic[e] and e != d else m for e, m in enumerate(factors[d])))
        for end in [0] * (poles[d] in ("low", "both")) + [-1] * (poles[d] in ("high", "both")):
            ring = next(e for e in range(3) if e != d and factors[e][d][end] == 0)
            collapsed.append((d, end, ring))
    return SeparableSolver(lines, masses, collapsed)


def _through_axis(lines: Sequence[Line], masses: Factors, required: set[int]) -> tuple[int, int, int]:
    """The axis t for tridiagonal systems that makes the cheapest plan, and the other two in order."""
    best: tuple[float, tuple[int, int, int]] | None = None
    for t in (0, 1, 2):
        a, b = (e for e in range(3) if e != t)
        if required - {t} or not (_same(masses[t][a], masses[b][a]) and _same(masses[t][b], masses[a][b])):
            continue
        cost = 0.5 * (t == 2) + sum(1.0 if is_fast(lines[e], masses[t][e]) else 2 + lines[e].size / 64 for e in (a, b))
        if best is None or cost < best[0]:
            best = cost, (t, a, b)
    if best is None:
        raise ValueError("the operator is not separable: no axis leaves the masses of the other two alone")
    return best[1]


def _ratio(numerator: Array, denominator: Array) -> float:
    return float(numerator.sum() / denominator.sum())


def _same(one: Array, other: Array) -> bool:
    return bool(np.allclose(one, other * _ratio(one, other), rtol=_SAME, atol=0))


def _along_first(x: Array, transform: Transform) -> None:
    """Transform along the first axis in place, some columns at a time."""
    columns = x.reshape(x.shape[0], -1)

    def work(part: slice) -> None:
        _apart(columns[:, part], transform, 0)

    compute.for_each(work, compute.slabs(columns.shape[1], _COLUMNS))


def _within(x: Array, transform: Transform, axis: int) -> Step:
    if axis == 1:
        return lambda planes: _apart(x[planes], transform, axis)
    return lambda planes: _replace(x[planes], transform(x[planes], axis))


def _apart(x: Array, transform: Transform, axis: int) -> None:
    """Transform along an axis whose points lie far apart, on a copy with distances that are no powers of two.

    Those would put all points of a line into the same few places of the cache.
    """
    copy = np.empty((*x.shape[:-1], x.shape[-1] + _ASIDE))[..., :-_ASIDE]
    copy[...] = x
    x[...] = transform(copy, axis)


def _by_planes(x: Array, steps: list[Step]) -> None:
    """Do all steps on some planes, then on the next."""

    def work(planes: slice) -> None:
        for step in steps:
            step(planes)

    compute.for_each(work, compute.slabs(x.shape[0], _IN_CACHE // (x.shape[1] * x.shape[2])))


def _replace(place: Array, value: Array) -> Array:
    """Put a result where its input was, unless it is there already."""
    if not np.may_share_memory(place, value):
        place[...] = value
    return place


@compute.kernel
def _tridiagonal(x, links, low, high, outer, outer_mass, inner, inner_mass):  # type: ignore[no-untyped-def]
    """Solve along the first axis of x, in place.

    The matrix of column (j, k) couples i to i + 1 by -links[i] and has row sums outer[j] outer_mass[i] +
    inner[k] inner_mass[i], plus low and high at the ends. With e the row sum that elimination leaves, the
    pivot is link + e and the next row sum grows by e link / pivot.
    """
    n, width = x.shape[0], x.shape[2]
    ratio = np.empty((n, width))  # link / pivot
    excess = np.empty(width)  # e
    for j in range(x.shape[1]):
        excess[:] = low
        ratio[n - 1, :] = 1.0
        for i in range(n):
            row, before = x[i, j], x[i - 1, j]
            shift = outer[j] * outer_mass[i]
            link_before = links[i - 1] if i > 0 else 0.0
            link = links[i] if i < n - 1 else high
            for k in range(width):
                e = shift + inner[k] * inner_mass[i] + ratio[i - 1, k] * excess[k]
                pivot = link + e
                inverse = 1.0 / pivot if pivot > 0 else 0.0
                row[k] = (row[k] + link_before * before[k]) * inverse
                ratio[i, k] = link * inverse
                excess[k] = e
        for i in range(n - 2, -1, -1):
            row, after = x[i, j], x[i + 1, j]
            for k in range(width):
                row[k] += ratio[i, k] * after[k]
