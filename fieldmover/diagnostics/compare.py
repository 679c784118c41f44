"""Two fields on one grid or on two, and two sets of figures, side by side."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.diagnostics.cells import Mask, cell_slabs, cell_volumes, checked_mask, mean_field, same_place
from fieldmover.diagnostics.limits import flattened
from fieldmover.diagnostics.samples import FluxSpline
from fieldmover.errors import FieldError
from fieldmover.forms.fields import FaceFlux
from fieldmover.grids.axes import centres_of
from fieldmover.interpolation.locate import Locator, inside

Array = NDArray[np.float64]

_POINTS = 1 << 16  # points compared at a time


@dataclass(frozen=True)
class VectorFigures:
    """How near a field b is to a reference B.

    After Schrijver et al. (2006), Nonlinear force-free modeling of coronal magnetic fields. Part I, Solar
    Physics 235, 161 (definitions from memory).

    Sums carry the weights of the points, means are over the weights. A figure is None where its denominator
    vanishes.

    Attributes
    ----------
    vector_correlation : float or None
        sum B.b / sqrt(sum B^2 sum b^2); 1 for equal fields.
    cosine : float or None
        Mean of B.b / (|B| |b|) over the points where neither vanishes; 1 for equal directions.
    normalised_error : float or None
        sum |b - B| / sum |B|; 0 for equal fields.
    mean_error : float or None
        Mean of |b - B| / |B| over the points where B does not vanish; 0 for equal fields.
    energy_ratio : float or None
        sum b^2 / sum B^2.
    """

    vector_correlation: float | None
    cosine: float | None
    normalised_error: float | None
    mean_error: float | None
    energy_ratio: float | None

    def as_dict(self) -> dict[str, float | None]:
        """Plain JSON."""
        return asdict(self)


@dataclass(frozen=True)
class FieldComparison:
    """Two fields where their grids overlap.

    Attributes
    ----------
    figures : VectorFigures
    points : int
        Cell centres compared.
    overlap : float
        Part of the volume of the second field's grid that was compared: cells whose centre lies in the other one. Where
        not all cells are looked at, as those tell.
    """

    figures: VectorFigures
    points: int
    overlap: float

    def as_dict(self) -> dict[str, float | None]:
        """Plain JSON."""
        return {**self.figures.as_dict(), "overlap": self.overlap}


@dataclass(frozen=True)
class Difference:
    """One figure before and after.

    Attributes
    ----------
    before, after : float or None
    change : float or None
        after - before; None where either is undefined.
    relative : float or None
        change / |before|; None where that is undefined.
    """

    before: float | None
    after: float | None
    change: float | None
    relative: float | None


def compare_vectors(reference: Array, field: Array, weights: Array | None = None) -> VectorFigures:
    """Figures of a vector field against a reference at the same points.

    Parameters
    ----------
    reference, field : ndarrays, shape (3, ...)
        Components in one orthonormal basis, unit B.
    weights : ndarray, shape (...), optional
        1 by default.

    Returns
    -------
    VectorFigures

    Raises
    ------
    FieldError
        If the shapes differ.

    Examples
    --------
    >>> import numpy as np
    >>> b = np.array([[1.0, 2.0], [0.0, 1.0], [3.0, 0.0]])
    >>> figures = compare_vectors(b, 1.1 * b)
    >>> round(figures.normalised_error, 12), round(figures.energy_ratio, 12)
    (0.1, 1.21)
    """
    if np.shape(reference) != np.shape(field) or np.shape(field)[:1] != (3,):
        raise FieldError(f"vectors: shapes {np.shape(reference)} and {np.shape(field)}, expected equal ones, 3 first")
    sums = _Sums()
    sums.add(reference, field, 1.0 if weights is None else weights)
    return sums.figures()


def compare_fluxes(reference: FaceFlux, field: FaceFlux) -> VectorFigures:
    """Figures of the mean fields of all cells, weighted by their volumes.

    Parameters
    ----------
    reference, field : FaceFlux
        On grids with all nodes in the same places.

    Returns
    -------
    VectorFigures

    Raises
    ------
    FieldError
        If the grids differ.

    Examples
    --------
    >>> import fieldmover as fm
    >>> grid = fm.cartesian_grid([0, 1, 2], [0, 1], [0, 1])
    >>> one = fm.flux_from_function(grid, lambda x, y, z: (1 + 0 * x, 0 * y, 0 * z))
    >>> other = fm.flux_from_function(grid, lambda x, y, z: (3 + 0 * x, 0 * y, 0 * z))
    >>> round(compare_fluxes(one, other).energy_ratio, 12)
    9.0
    """
    if not same_place(reference.grid, field.grid):
        raise FieldError(
            f"fields to compare: on {reference.grid!r} and {field.grid!r}, expected nodes in the same places"
        )
    sums = _Sums()
    for rows in cell_slabs(reference.grid):
        (first, volumes), (second, _) = mean_field(reference, rows), mean_field(field, rows)
        sums.add(first, second, volumes)
    return sums.figures()


def compare_fields(
    reference: FaceFlux, field: FaceFlux, where: Mask | None = None, most: int | None = None
) -> FieldComparison:
    """Figures of a field against a reference on any other grid, where the two overlap.

    Both fields are evaluated, by cubic splines of their fluxes, at the cell centres of `field` that lie in the grid of
    the reference, and weighted by the cells' volumes.

    Parameters
    ----------
    reference, field : FaceFlux
        In one Cartesian frame.
    where : bool ndarray, shape (n1, n2, n3), optional
        Cells of `field` to compare; all by default. Splines ring beside jumps: leave out what lies beside a fill.
    most : int, optional
        Where there are more cells than this, look at so many of them, evenly spread; at all by default.

    Returns
    -------
    FieldComparison
        Fields that agree differ by the error of the splines: fourth order in the cell sizes.

    Raises
    ------
    FieldError
        If the mask does not fit, or nothing is left to compare.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> def b(x, y, z):
    ...     return y, z, 1 + x
    >>> ball = fm.spherical_grid(np.linspace(1, 2, 9), np.linspace(0, np.pi, 17), np.linspace(0, 2 * np.pi, 33))
    >>> box = fm.cartesian_grid(*[np.linspace(0, 2, 9)] * 3)
    >>> found = compare_fields(fm.flux_from_function(ball, b), fm.flux_from_function(box, b))
    >>> found.figures.normalised_error < 1e-3, round(found.overlap, 2)  # pi / 6 less the hole
    (True, 0.46)
    """
    grid = field.grid
    wanted = np.ones(grid.shape, dtype=np.bool_) if where is None else checked_mask(grid, where, "where")
    cells = np.flatnonzero(wanted)
    volumes = cell_volumes(grid).ravel()
    share = float(volumes[cells].sum() / volumes.sum())
    if most is not None and cells.size > most:
        cells = cells[np.linspace(0, cells.size - 1, most).astype(np.int64)]
    volumes = volumes[cells]
    middles, locator = [centres_of(nodes) for nodes in grid.nodes], Locator(reference.grid)

    def locate(part: slice) -> tuple[Array, NDArray[np.bool_]]:
        places = np.unravel_index(cells[part], grid.shape)
        x = np.stack(grid.map.to_cartesian(*(q[i] for q, i in zip(middles, places, strict=True))))
        return x, inside(reference.grid, locator.coordinates(x))

    parts = compute.slabs(cells.size, _POINTS)
    located = compute.for_each(locate, parts)
    points = sum(int(within.sum()) for _, within in located)
    if points == 0:
        which = "" if where is None else "that is wanted "
        raise FieldError(
            f"fields to compare: {grid!r} has no cell centre {which}in {reference.grid!r}, expected an overlap"
        )
    sums, reached = _Sums(), 0.0
    first, second = FluxSpline(reference), FluxSpline(field)
    for part, (x, within) in zip(parts, located, strict=True):
        weights = volumes[part][within]
        sums.add(first.at(x[:, within]), second.at(x[:, within]), weights)
        reached += float(weights.sum())
    return FieldComparison(sums.figures(), points, share * reached / float(volumes.sum()))


def differences(before: Mapping[str, Any], after: Mapping[str, Any]) -> dict[str, Difference]:
    """Figure by figure what changed, for all names that both sets have.

    Parameters
    ----------
    before, after : mappings
        As `Diagnosis.as_dict` gives them.

    Returns
    -------
    dict
        Dotted name to `Difference`, in the order of `before`.

    Examples
    --------
    >>> differences({"energy": {"total": 2.0}}, {"energy": {"total": 1.5}})["energy.total"].relative
    -0.25
    """
    old, new = flattened(before), flattened(after)
    return {name: _difference(value, new[name]) for name, value in old.items() if name in new}


def _difference(before: float | None, after: float | None) -> Difference:
    if before is None or after is None:
        return Difference(before, after, None, None)
    change = after - before
    return Difference(before, after, change, change / abs(before) if before else None)


@dataclass
class _Sums:
    """What the figures are made of; `both` and `one` are for means over points where fields do not vanish."""

    product: float = 0.0
    square: float = 0.0
    other_square: float = 0.0
    size: float = 0.0
    gap: float = 0.0
    cosine: float = 0.0
    error: float = 0.0
    both: float = 0.0
    one: float = 0.0

    def add(self, B: Array, b: Array, weights: Array | float) -> None:
        product, square, other = (np.einsum("i...,i...", p, q) for p, q in ((B, b), (B, B), (b, b)))
        size, gap = np.sqrt(square), np.sqrt(((b - B) ** 2).sum(axis=0))
        both, one = (square > 0) & (other > 0), square > 0
        self.product += float((product * weights).sum())
        self.square += float((square * weights).sum())
        self.other_square += float((other * weights).sum())
        self.size += float((size * weights).sum())
        self.gap += float((gap * weights).sum())
        cosine = np.divide(product, size * np.sqrt(other), out=np.zeros_like(product), where=both)
        self.cosine += float((cosine * weights).sum())
        self.error += float((np.divide(gap, size, out=np.zeros_like(gap), where=one) * weights).sum())
        self.both += float((both * weights).sum())
        self.one += float((one * weights).sum())

    def figures(self) -> VectorFigures:
        return VectorFigures(
            _ratio(self.product, float(np.sqrt(self.square * self.other_square))),
            _ratio(self.cosine, self.both),
            _ratio(self.gap, self.size),
            _ratio(self.error, self.one),
            _ratio(self.other_square, self.square),
        )


def _ratio(above: float, below: float) -> float | None:
    """None where there is no finite quotient."""
    return above / below if below > 0 and np.isfinite(above / below) else None
