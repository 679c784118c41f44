"""The field at any point of a grid: splines of its fluxes."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.forms.fields import FaceFlux
from fieldmover.interpolation.evaluate import hunt
from fieldmover.interpolation.locate import Locator, inside
from fieldmover.interpolation.splines import crosses_pole, fit_form, grid_splines

Array = NDArray[np.float64]

_DEGREE = 3
_POINTS = 1 << 14  # points at a time
_ACROSS = (0.5, 1.0, -0.5, -1.0)  # cells from a pole, on a meridian and its opposite


class FluxSpline:
    """Spline 2-form of a flux: cubic along the normal of the faces, quadratic in their planes, every flux kept.

    Parameters
    ----------
    flux : FaceFlux
        With divergence or without.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> ball = fm.spherical_grid(np.linspace(1, 2, 9), np.linspace(0, np.pi, 9), np.linspace(0, 2 * np.pi, 17))
    >>> spline = FluxSpline(fm.flux_from_function(ball, lambda x, y, z: (0 * x, 0 * y, 1 + 0 * z)))
    >>> spline.at(np.array([[0.0], [0.8], [1.1]])).ravel().round(2) + 0.0
    array([0., 0., 1.])
    """

    def __init__(self, flux: FaceFlux) -> None:
        self.grid = flux.grid
        self._locator = Locator(flux.grid)
        splines = grid_splines(flux.grid, _DEGREE, sharp=True)
        self._coefficients = tuple(
            fit_form(flux.grid, splines, face, tuple(d for d in range(3) if d != axis))
            for axis, face in enumerate(flux.faces)
        )
        self._poles = [
            (axis, end, ring)
            for axis, ring in enumerate(flux.grid.ring_axis)
            if ring is not None
            for end in flux.grid.pole_ends(axis)
        ]
        self._tables = tuple((s.nodes, s.value_pieces, s.cell_pieces, s.value_first, s.cell_first) for s in splines)

    def at(self, x: Array) -> Array:
        """Cartesian components of B at points.

        Parameters
        ----------
        x : ndarray, shape (3, N)
            Cartesian positions.

        Returns
        -------
        ndarray, shape (3, N)
            NaN outside the grid.
        """
        out = np.empty(x.shape)

        def work(part: slice) -> None:
            q = self._locator.coordinates(x[:, part])
            q[:, ~inside(self.grid, q)] = np.nan
            out[:, part] = self._beside_poles(q)

        compute.for_each(work, compute.slabs(x.shape[1], _POINTS))
        return out

    def _beside_poles(self, q: Array) -> Array:
        """B at grid coordinates; where these have a pole, by the cubic through four points across it.

        There the densities vanish with the volume, and what their splines leave would be divided by it.
        """
        b = self._away_from_poles(q)
        for axis, end, ring in self._poles:
            nodes, turn = self.grid.nodes[axis], self.grid.nodes[ring]
            width = nodes[1] - nodes[0] if end == 0 else nodes[-2] - nodes[-1]
            away = (q[axis] - nodes[end]) / width
            near = np.flatnonzero(away < _ACROSS[0])
            if near.size == 0:
                continue
            closed = crosses_pole(self.grid, axis)
            total, weights = np.zeros((3, near.size)), _lagrange(away[near]) if closed else np.ones((1, near.size))
            for distance, weight in zip(_ACROSS, weights, strict=False):
                other = q[:, near].copy()
                other[axis] = nodes[end] + abs(distance) * width
                if distance < 0:
                    other[ring] = turn[0] + np.mod(other[ring] - turn[0] + 0.5 * np.ptp(turn), np.ptp(turn))
                total += weight * self._away_from_poles(other)
            b[:, near] = total
        return b

    def _away_from_poles(self, q: Array) -> Array:
        j = self.grid.map.jacobian(q[0], q[1], q[2])
        volume = np.einsum("in,in->n", j[:, 0], np.cross(j[:, 1], j[:, 2], axis=0))
        densities = np.empty(q.shape)
        _densities(q, *self._tables, *self._coefficients, densities)
        with np.errstate(invalid="ignore", divide="ignore"):  # on a pole itself
            return np.asarray(np.einsum("ijn,jn->in", j, densities) / volume)


def _lagrange(t: Array) -> Array:
    """Weights of the points at `_ACROSS` in the cubic at t, shape (4, N)."""
    weights = np.ones((len(_ACROSS), t.size))
    for m, a in enumerate(_ACROSS):
        for c in _ACROSS:
            if c != a:
                weights[m] *= (t - c) / (a - c)
    return weights


@compute.kernel
def _powers(value, table, cell, pieces, out):  # type: ignore[no-untyped-def]
    """Values at a point of the basis functions that are active in its cell."""
    nodes = table[0]
    s = (value - nodes[cell]) / (nodes[cell + 1] - nodes[cell])
    for m in range(pieces.shape[1]):
        x = 0.0
        for power in range(pieces.shape[2] - 1, -1, -1):
            x = x * s + pieces[cell, m, power]
        out[m] = x


@compute.kernel
def _product(coefficients, i, j, k, a, b, c):  # type: ignore[no-untyped-def]
    total = 0.0
    for r in range(a.size):
        for s in range(b.size):
            line = 0.0
            for t in range(c.size):
                line += c[t] * coefficients[i + r, j + s, k + t]
            total += a[r] * b[s] * line
    return total


@compute.kernel
def _densities(q, t1, t2, t3, c1, c2, c3, out):  # type: ignore[no-untyped-def]
    """det(J) B^i, the flux per unit of the other two coordinates, at points in grid coordinates."""
    v1, v2, v3 = np.empty(t1[1].shape[1]), np.empty(t2[1].shape[1]), np.empty(t3[1].shape[1])
    w1, w2, w3 = np.empty(t1[2].shape[1]), np.empty(t2[2].shape[1]), np.empty(t3[2].shape[1])
    i, j, k = 0, 0, 0
    for n in range(q.shape[1]):
        if np.isnan(q[0, n]):
            out[0, n], out[1, n], out[2, n] = np.nan, np.nan, np.nan
            continue
        i, j, k = hunt(q[0, n], t1[0], i), hunt(q[1, n], t2[0], j), hunt(q[2, n], t3[0], k)
        _powers(q[0, n], t1, i, t1[1], v1)
        _powers(q[1, n], t2, j, t2[1], v2)
        _powers(q[2, n], t3, k, t3[1], v3)
        _powers(q[0, n], t1, i, t1[2], w1)
        _powers(q[1, n], t2, j, t2[2], w2)
        _powers(q[2, n], t3, k, t3[2], w3)
        out[0, n] = _product(c1, t1[3][i], t2[4][j], t3[4][k], v1, w2, w3)
        out[1, n] = _product(c2, t1[4][i], t2[3][j], t3[4][k], w1, v2, w3)
        out[2, n] = _product(c3, t1[4][i], t2[4][j], t3[3][k], w1, w2, v3)
