"""B-splines that commute with the exterior derivative, one axis at a time.

A value at nodes is interpolated by a spline of odd degree p; an integral over cells (along an edge) is histopolated
by a spline of degree p - 1 in the basis of unit integral (M-splines). The derivative of the first is then the second:
its coefficients are differences of coefficients. Tensor products of the two give splines of node functions,
circulations and fluxes with d(spline) = spline(d). At order 3 the second also gets its leading error at points
removed, which changes no integral over a cell.

Sources: de Boor (1978), A Practical Guide to Splines; Curry & Schoenberg (1966), On Polya frequency functions IV;
Buffa, Sangalli & Vazquez (2010), Isogeometric analysis in electromagnetics; Kreeft, Palha & Gerritsma (2011), Mimetic
framework on curvilinear quadrilaterals of arbitrary order; Gerritsma (2011), Edge functions for spectral element
methods.

An axis is an interval (not-a-knot ends), a seam (periodic), or an axis with poles. Across a pole a
meridian continues on the other side of the ring, so it is fitted together with its opposite: with two poles the
pair closes to a circle, with one pole it is an interval twice as long.

Collocation and histopolation matrices of splines are banded and totally positive, so they are factorised without
pivoting (de Boor & Pinkus 1977, Backward error analysis for totally positive linear systems). Seams add a border of
(p - 1) / 2 columns, eliminated by its Schur complement. Fitting one axis costs about 4 p flops and, blocked by columns,
one read and one write per value.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.grids.axes import Poles, centres_of

Array = NDArray[np.float64]
Index = NDArray[np.int64]

_COLUMNS = 32  # lines solved together: a block of them stays in the first two levels of cache
_LINES = 2048  # lines per task


@dataclass(frozen=True, eq=False)
class LineFit:
    """Factorised matrix that takes the data of a line to spline coefficients.

    `gather` and `mirrored` tell where each row of the unfolded line comes from (row of the data; whether of the
    opposite meridian); `take` which unknown each stored coefficient is (-1: a zero that pads short axes).
    """

    gather: Index
    mirrored: NDArray[np.bool_]
    lower: Array
    upper: Array
    border: Array
    border_row: Array
    corner: Array
    take: Index


@dataclass(frozen=True, eq=False)
class AxisSpline:
    """Splines of one axis: pieces as polynomials in each cell, and the fits.

    Attributes
    ----------
    nodes : ndarray, shape (n + 1,)
    value_pieces, cell_pieces : ndarrays, shapes (n, p + 1, p + 1) and (n, *cell_shape(p, sharp))
        ``pieces[i, m]`` are the coefficients, constant first, of the m-th active basis function in cell i, as a
        polynomial in s = (q - nodes[i]) / (nodes[i + 1] - nodes[i]); cell pieces have unit 1/q.
    value_first, cell_first : ndarrays, shape (n,)
        Index of the first active coefficient.
    values, cells : LineFit
    """

    nodes: Array
    value_pieces: Array
    value_first: Index
    cell_pieces: Array
    cell_first: Index
    values: LineFit
    cells: LineFit


def axis_spline(
    nodes: Array, degree: int, periodic: bool = False, poles: Poles = None, sharp: bool = False
) -> AxisSpline:
    """Splines of one axis.

    Parameters
    ----------
    nodes : ndarray, shape (n + 1,)
    degree : int
        Odd.
    periodic : bool
    poles : None, "low", "high" or "both"
    sharp : bool
        For degree 3: remove the leading error of the cell pieces at points, at the price that they are the derivative
        of the value pieces to order 4 only.

    Returns
    -------
    AxisSpline

    Examples
    --------
    Values of a cubic are reproduced exactly:

    >>> import numpy as np
    >>> x = np.array([0.0, 0.5, 1.5, 2.0, 3.0])
    >>> spline = axis_spline(x, 3)
    >>> c = fit(x[:, None, None] ** 3, spline.values, axis=0)[:, 0, 0]
    >>> float(spline.value_pieces[1].sum(axis=1) @ c[spline.value_first[1]:][:4])
    3.375
    """
    n = nodes.size - 1
    cyclic = periodic or poles == "both"
    line, offset = unfolded(nodes, poles)
    cells = line.size - 1
    p = degree if cyclic else min(degree, cells if cells % 2 else cells - 1)
    knots, place = _knots(line, p, cyclic)
    trimmed = knots[1:-1]
    value_pieces, cell_pieces = _pieces(knots, place, p, line), _pieces(trimmed, place - 1, p - 1, line)
    first = place - p
    spans = trimmed[p:] - trimmed[:-p]
    cell_pieces *= (p / spans)[first[:, None] + np.arange(p)][:, :, None]
    steps = np.diff(line)
    integrals = (cell_pieces / np.arange(1, p + 1)).sum(axis=2) * steps[:, None]
    cell_pieces, windows = _sharpened(cell_pieces, first, line, cyclic) if sharp and p == 3 else (cell_pieces, first)
    at_nodes = value_pieces[:, :, 0]
    if not cyclic:
        at_nodes = np.vstack([at_nodes, value_pieces[-1].sum(axis=1)])
    rows = np.append(first, first[-1]) if not cyclic else first
    real = slice(offset, offset + n)
    last = offset + n - 1
    for_values = int(first[offset]), int(first[last]) + p + 1  # coefficients that the real cells need
    functions, powers = cell_shape(degree, sharp)
    for_cells = int(windows[offset]), int(windows[last]) + cell_pieces.shape[1]
    value_sources, cell_sources = unfolded_sources(n, poles, periodic)
    return AxisSpline(
        nodes,
        _padded(value_pieces[real], degree + 1, degree + 1),
        first[real] - for_values[0],
        _padded(cell_pieces[real], functions, powers),
        windows[real] - for_cells[0],
        _line_fit(at_nodes, rows, cyclic, p, for_values, degree - p, value_sources),
        _line_fit(integrals, first, cyclic, p, for_cells, functions - cell_pieces.shape[1], cell_sources),
    )


def _sharpened(pieces: Array, first: Index, line: Array, cyclic: bool) -> tuple[Array, Index]:
    """Cell pieces of order 3 with the leading error of their point values removed.

    The derivative of a cubic spline of f is off by -h^3 f4 B3(s) / 6 within a cell, f4 being the fourth derivative of f
    and B3 = s^3 - 3 s^2 / 2 + s / 2 the Bernoulli polynomial. It integrates to zero over a cell, so histopolation
    does not see it, but point values and integrals over parts of cells do. With f4 from the change of the pieces'
    second derivative between the neighbours of a cell, the term is added back: five basis functions instead of
    three, cubic in s, and an error of order 4 instead of 3.

    Returns
    -------
    pieces : ndarray, shape (n, 5, 4)
        As given where the line is too short for five coefficients.
    first : ndarray, shape (n,)
    """
    h, n = np.diff(line), line.size - 1
    coefficients = n if cyclic else int(first[-1]) + 3
    if coefficients < 5:
        return pieces, first
    windows = first - 1 if cyclic else np.clip(first - 1, 0, coefficients - 5)
    wide, cells = np.zeros((n, 5, 4)), np.arange(n)
    for m in range(3):
        wide[cells, first - windows + m, :3] += pieces[:, m]
    after, before = (cells + 1, cells - 1) if cyclic else (np.minimum(cells + 1, n - 1), np.maximum(cells - 1, 0))
    centre, span = centres_of(line), line[-1] - line[0]
    distance = centre[after % n] + after // n * span - centre[before % n] - before // n * span
    bernoulli = np.array([0.0, 0.5, -1.5, 1.0]) / 6.0
    for cell, sign in ((after, 1.0), (before, -1.0)):
        place = first[cell % n] + cell // n * n - windows
        for m in range(3):
            second = 2.0 * pieces[cell % n, m, 2] / h[cell % n] ** 2
            wide[cells, place + m] += (sign * h**3 * second / distance)[:, None] * bernoulli
    return wide, windows


def unfolded(nodes: Array, poles: Poles) -> tuple[Array, int]:
    """Nodes of a meridian continued across its poles, and where the real cells begin."""
    if poles == "low":
        return np.concatenate([2 * nodes[0] - nodes[:0:-1], nodes]), nodes.size - 1
    if poles in ("high", "both"):
        return np.concatenate([nodes, 2 * nodes[-1] - nodes[-2::-1]]), 0
    return nodes, 0


def unfolded_sources(n: int, poles: Poles, periodic: bool) -> tuple[tuple[Index, Index], tuple[Index, Index]]:
    """For nodes and for cells of the unfolded line: (row of the data, 1 where it is the opposite meridian's)."""
    up, down = np.arange(n + 1), np.arange(n, -1, -1)
    if poles == "low":
        nodes, cells = [(down[:-1], 1), (up, 0)], [(down[1:], 1), (up[:-1], 0)]
    elif poles == "high":
        nodes, cells = [(up, 0), (down[1:], 1)], [(up[:-1], 0), (down[1:], 1)]
    elif poles == "both":
        nodes, cells = [(up, 0), (down[1:-1], 1)], [(up[:-1], 0), (down[1:], 1)]
    else:
        nodes, cells = [(up[:-1] if periodic else up, 0)], [(up[:-1], 0)]

    def joined(parts: list[tuple[Index, int]]) -> tuple[Index, Index]:
        rows = np.concatenate([part for part, _ in parts])
        return rows, np.concatenate([np.full(part.size, flag) for part, flag in parts])

    return joined(nodes), joined(cells)


def _knots(line: Array, p: int, cyclic: bool) -> tuple[Array, Index]:
    """Knots of degree p, and for each cell the index k of the knot interval [t_k, t_k+1] that holds it."""
    n = line.size - 1
    if cyclic:
        span = line[-1] - line[0]
        turns, inside = np.divmod(np.arange(-p, n + p + 1), n)
        return line[:-1][inside] + span * turns, np.arange(n) + p
    skipped = (p + 1) // 2
    inner = line[skipped : line.size - skipped]
    knots = np.concatenate([np.full(p + 1, line[0]), inner, np.full(p + 1, line[-1])])
    middle = 0.5 * (line[1:] + line[:-1])
    return knots, np.searchsorted(inner, middle) + p


def _pieces(knots: Array, place: Index, p: int, line: Array) -> Array:
    """Polynomials in s of the p + 1 B-splines of degree p active in each cell (Cox-de Boor recurrence)."""
    start, step = line[:-1], np.diff(line)
    pieces = np.zeros((start.size, p + 1, p + 1))
    pieces[:, 0, 0] = 1.0
    for d in range(1, p + 1):
        old, pieces = pieces, np.zeros_like(pieces)
        for m in range(d):  # old[m] is B of index j, degree d - 1
            j = place - d + 1 + m
            width = knots[j + d] - knots[j]
            rising, falling = (start - knots[j]) / width, (knots[j + d] - start) / width
            slope = step / width
            pieces[:, m + 1] += _times_linear(old[:, m], rising, slope)
            pieces[:, m] += _times_linear(old[:, m], falling, -slope)
    return pieces


def _times_linear(polynomial: Array, constant: Array, slope: Array) -> Array:
    out = polynomial * constant[:, None]
    out[:, 1:] += polynomial[:, :-1] * slope[:, None]
    return np.asarray(out)


def cell_shape(degree: int, sharp: bool) -> tuple[int, int]:
    """Number of active basis functions, and of polynomial coefficients, of the splines of cell integrals."""
    return (5, 4) if sharp and degree == 3 else (degree, degree)


def _padded(pieces: Array, functions: int, powers: int) -> Array:
    """Pieces of a short axis in the table size of the others: more basis functions and powers, all zero."""
    return np.ascontiguousarray(
        np.pad(pieces, ((0, 0), (0, functions - pieces.shape[1]), (0, powers - pieces.shape[2])))
    )


def _line_fit(
    entries: Array,
    first: Index,
    cyclic: bool,
    p: int,
    stored: tuple[int, int],
    padding: int,
    sources: tuple[Index, Index],
) -> LineFit:
    """Factorise the matrix whose row i holds `entries[i]` from column `first[i]` on."""
    size = entries.shape[0]
    centre = (p - 1) // 2 if cyclic else 0
    matrix = np.zeros((size, size))
    for m in range(entries.shape[1]):
        columns = (first + m - centre) % size if cyclic else np.minimum(first + m, size - 1)
        np.add.at(matrix, (np.arange(size), columns), entries[:, m])
    s = centre if cyclic and size > 4 * p else 0
    inner = size - s
    lower, upper = _banded_lu(matrix[:inner, :inner])
    border = np.ascontiguousarray(matrix[:inner, inner:])
    _banded_solve(lower, upper, border)
    border_row = np.ascontiguousarray(matrix[inner:, :inner])
    corner = np.asarray(np.linalg.inv(matrix[inner:, inner:] - border_row @ border), dtype=np.float64)
    take = np.arange(*stored)
    take = (take - centre) % size if cyclic else take
    take = np.append(take, np.full(padding, -1))
    rows, mirrored = sources
    return LineFit(
        rows.astype(np.int64),
        mirrored.astype(np.bool_),
        lower,
        upper,
        border,
        border_row,
        corner,
        take.astype(np.int64),
    )


def _banded_lu(matrix: Array) -> tuple[Array, Array]:
    """LU without pivoting; lower[i, k - 1] multiplies row i - k, upper[i, 0] is 1 / pivot, upper[i, k] column i + k."""
    n = matrix.shape[0]
    places = np.argwhere(matrix != 0)
    below = max(0, int((places[:, 0] - places[:, 1]).max()))
    above = max(0, int((places[:, 1] - places[:, 0]).max()))
    lower, upper = np.zeros((n, below)), np.zeros((n, above + 1))
    _factorise(matrix.copy(), lower, upper)
    return lower, upper


def fit(data: Array, line: LineFit, axis: int, opposite: NDArray[np.int64] | None = None, sign: float = 1.0) -> Array:
    """Replace the data along one axis by spline coefficients.

    Parameters
    ----------
    data : ndarray, 3-D
        Node values or cell integrals along `axis`; the repeated last node of a seam may be there or not.
    line : LineFit
        ``AxisSpline.values`` or ``AxisSpline.cells``.
    axis : int
    opposite : ndarray of int, optional
        For each line along `axis`, in the order of the other two, the line across the pole.
    sign : float
        What a value of the opposite line is multiplied by: -1 for integrals along the axis with the pole.

    Returns
    -------
    ndarray
        As `data` with ``len(line.take)`` coefficients along `axis`.
    """
    data = np.ascontiguousarray(data)
    shape = data.shape
    out = np.empty((*shape[:axis], line.take.size, *shape[axis + 1 :]))
    strides = tuple(step // out.itemsize for step in out.strides)
    compute.for_each(
        lambda part: fit_lines(data, line, axis, part, out.reshape(-1), strides, 0, opposite, sign),
        compute.slabs(data.size // shape[axis], _LINES),
    )
    return out


def fit_lines(
    data: Array,
    line: LineFit,
    axis: int,
    part: slice,
    out: Array,
    strides: tuple[int, ...],
    offset: int,
    opposite: Index | None = None,
    sign: float = 1.0,
) -> None:
    """As `fit`, for some of the lines, into any place.

    Parameters
    ----------
    data : ndarray, 3-D, C order
    line, axis, opposite, sign
        As for `fit`.
    part : slice
        Of the lines, counted in the order of the other two axes.
    out : ndarray, 1-D
    strides : tuple of three int
        Steps in `out` along the three axes.
    offset : int
        Where in `out` the first coefficient of the first line goes.
    """
    others = [d for d in range(3) if d != axis]
    inner = data.shape[others[1]]
    in_strides = [step // data.itemsize for step in data.strides]
    across = np.empty(0, dtype=np.int64) if opposite is None else opposite
    steps = np.array([[s[others[0]], s[others[1]], s[axis]] for s in (in_strides, strides)], dtype=np.int64)
    _fit_lines(
        data.reshape(-1), inner, part.start, part.stop, steps, across, sign, line.gather, line.mirrored, line.lower,
        line.upper, line.border, line.border_row, line.corner, line.take, offset, out,
    )  # fmt: skip


def opposite_lines(shape: tuple[int, ...], axis: int, ring: int, cells: int) -> Index:
    """For each line along an axis with poles, the line half a turn away.

    Parameters
    ----------
    shape : tuple of int
        Of the data.
    axis, ring : int
        The axis with poles, and the axis of the ring that shrinks to a point there.
    cells : int
        Number of cells of the ring, even.
    """
    others = [n for d, n in enumerate(shape) if d != axis]
    place = ring - (axis < ring)
    turned = (np.arange(others[place]) + cells // 2) % cells
    lines = np.arange(np.prod(others), dtype=np.int64).reshape(others)
    return np.ascontiguousarray(np.take(lines, turned, axis=place).ravel())


@compute.kernel
def _fit_lines(
    data, inner, start, stop, steps, opposite, sign, gather, mirrored, lower, upper, border, border_row, corner, take,
    offset, out,
):  # fmt: skip
    """Fit lines start to stop; line l is number l // inner, l % inner along the other axes.

    Rows of `steps`: along the two other axes and along the line, in the data and in the result.
    """
    size, s = gather.size, border.shape[1]
    banded = size - s
    block, tail, across = np.empty((size, _COLUMNS)), np.empty(s), np.empty(_COLUMNS, np.int64)
    begin = start
    while begin < stop:
        row, column = begin // inner, begin % inner
        width = min(_COLUMNS, stop - begin, inner - column)
        base = row * steps[0, 0] + column * steps[0, 1]
        base_out = offset + row * steps[1, 0] + column * steps[1, 1]
        if opposite.size > 0:
            for w in range(width):
                other = opposite[begin + w]
                across[w] = other // inner * steps[0, 0] + other % inner * steps[0, 1]
        for e in range(size):
            step = gather[e] * steps[0, 2]
            if mirrored[e]:
                for w in range(width):
                    block[e, w] = sign * data[across[w] + step]
            else:
                for w in range(width):
                    block[e, w] = data[base + step + w * steps[0, 1]]
        _banded_solve(lower, upper, block[:banded, :width])
        if s > 0:
            for b in range(s):
                for i in range(banded):
                    if border_row[b, i] != 0.0:
                        for w in range(width):
                            block[banded + b, w] -= border_row[b, i] * block[i, w]
            for w in range(width):
                for b in range(s):
                    tail[b] = 0.0
                    for c in range(s):
                        tail[b] += corner[b, c] * block[banded + c, w]
                for b in range(s):
                    block[banded + b, w] = tail[b]
            for i in range(banded):
                for b in range(s):
                    ratio = border[i, b]
                    for w in range(width):
                        block[i, w] -= ratio * block[banded + b, w]
        for j in range(take.size):
            step = base_out + j * steps[1, 2]
            for w in range(width):
                out[step + w * steps[1, 1]] = block[take[j], w] if take[j] >= 0 else 0.0
        begin += width


@compute.kernel
def _banded_solve(lower, upper, x):
    """Solve L U x = x for every column, in place."""
    n, width = x.shape
    for i in range(n):
        for k in range(min(lower.shape[1], i)):
            ratio = lower[i, k]
            for w in range(width):
                x[i, w] -= ratio * x[i - 1 - k, w]
    for i in range(n - 1, -1, -1):
        for k in range(1, min(upper.shape[1], n - i)):
            ratio = upper[i, k]
            for w in range(width):
                x[i, w] -= ratio * x[i + k, w]
        for w in range(width):
            x[i, w] *= upper[i, 0]


@compute.kernel
def _factorise(work, lower, upper):
    """Gauss elimination within the band; `work` is used up."""
    n, below, above = work.shape[0], lower.shape[1], upper.shape[1] - 1
    for i in range(n):
        last = min(n, i + above + 1)
        for j in range(i + 1, min(n, i + below + 1)):
            ratio = work[j, i] / work[i, i]
            lower[j, j - i - 1] = ratio
            for k in range(i, last):
                work[j, k] -= ratio * work[i, k]
        upper[i, 0] = 1.0 / work[i, i]
        for k in range(i + 1, last):
            upper[i, k - i] = work[i, k]
