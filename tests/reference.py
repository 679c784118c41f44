"""Slow and plain twins of what the package does fast; nothing here imports the package.

Integrals by Gauss-Legendre points and textbook Jacobians, incidence by loops over single cells, and the usual
practice that a move is compared with: plain splines of the components.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from scipy.interpolate import BSpline, make_interp_spline

Array = np.ndarray


def _spherical(r, t, p):
    st, ct, sp, cp = np.sin(t), np.cos(t), np.sin(p), np.cos(p)
    position = (r * st * cp, r * st * sp, r * ct)
    tangents = (
        (st * cp, st * sp, ct),
        (r * ct * cp, r * ct * sp, -r * st),
        (-r * st * sp, r * st * cp, 0 * r),
    )
    return position, tangents


def _cylindrical(R, p, z):
    s, c = np.sin(p), np.cos(p)
    return (R * c, R * s, z), ((c, s, 0 * R), (-R * s, R * c, 0 * R), (0 * R, 0 * R, 1 + 0 * R))


def _cartesian(x, y, z):
    o, i = 0 * x, 1 + 0 * x
    return (x, y, z), ((i, o, o), (o, i, o), (o, o, i))


# q1, q2, q3 -> (x, y, z), (tangent along q1, along q2, along q3)
MAPS: dict[str, Callable] = {"cartesian": _cartesian, "cylindrical": _cylindrical, "spherical": _spherical}


def _slabs(grid, along: Sequence[int], points: int):
    """Broadcast (rows, q, weight) over slabs of axis 1 and Gauss points of the axes integrated over."""
    abscissae, weights = np.polynomial.legendre.leggauss(points)
    middle = [0.5 * (q[1:] + q[:-1]) if d in along else q for d, q in enumerate(grid.nodes)]
    half = [0.5 * np.diff(q) for q in grid.nodes]
    for start in range(0, middle[0].size, 16):
        rows = slice(start, min(start + 16, middle[0].size))
        for choice in np.ndindex(*(points,) * len(along)):
            q, weight = list(middle), 1.0
            for d, c in zip(along, choice, strict=True):
                q[d] = q[d] + abscissae[c] * half[d]
                part = weights[c] * half[d]
                part = part[rows] if d == 0 else part
                weight = weight * part.reshape([-1 if e == d else 1 for e in range(3)])
            q[0] = q[0][rows]
            yield rows, np.meshgrid(*q, indexing="ij"), weight


def circulations(grid, a, points: int = 8) -> list[Array]:
    """Integrals of a(x, y, z) along every edge."""
    found = []
    for axis in range(3):
        total = np.zeros([n if d == axis else n + 1 for d, n in enumerate(grid.shape)])
        for rows, q, weight in _slabs(grid, [axis], points):
            position, tangents = MAPS[grid.kind](*q)
            total[rows] += weight * sum(f * t for f, t in zip(a(*position), tangents[axis], strict=True))
        found.append(total)
    return found


def fluxes(grid, b, points: int = 6) -> list[Array]:
    """Integrals of b(x, y, z) over every face, normal along the axis."""
    found = []
    for axis in range(3):
        total = np.zeros([n + 1 if d == axis else n for d, n in enumerate(grid.shape)])
        one, two = (axis + 1) % 3, (axis + 2) % 3
        for rows, q, weight in _slabs(grid, sorted((one, two)), points):
            position, tangents = MAPS[grid.kind](*q)
            normal = np.cross(np.stack(tangents[one]), np.stack(tangents[two]), axis=0)
            total[rows] += weight * sum(f * n for f, n in zip(b(*position), normal, strict=True))
        found.append(total)
    return found


def circulation_round_faces(edges: Sequence[Array]) -> list[Array]:
    """Sum of the four edges round every face, right-handed about the axis."""
    a1, a2, a3 = edges
    return [
        a3[:, 1:, :] - a3[:, :-1, :] - a2[:, :, 1:] + a2[:, :, :-1],
        a1[:, :, 1:] - a1[:, :, :-1] - a3[1:, :, :] + a3[:-1, :, :],
        a2[1:, :, :] - a2[:-1, :, :] - a1[:, 1:, :] + a1[:, :-1, :],
    ]


def outflow_by_loops(faces: Sequence[Array]) -> Array:
    """Net flux out of every cell, face by face."""
    f1, f2, f3 = faces
    out = np.zeros(tuple(n - (d == 0) for d, n in enumerate(f1.shape)))
    for i, j, k in np.ndindex(*out.shape):
        out[i, j, k] = (
            f1[i + 1, j, k] - f1[i, j, k] + f2[i, j + 1, k] - f2[i, j, k] + f3[i, j, k + 1] - f3[i, j, k]
        )
    return out


def divergence_ratio(faces: Sequence[Array]) -> float:
    """Largest |net flux| of a cell over the sum of |flux| over its faces (cells without flux count 0)."""
    net, total = 0.0, 0.0
    for axis, f in enumerate(faces):
        high = f[tuple(slice(1, None) if d == axis else slice(None) for d in range(3))]
        low = f[tuple(slice(None, -1) if d == axis else slice(None) for d in range(3))]
        net, total = net + (high - low), total + np.abs(high) + np.abs(low)
    return float((np.abs(net) / np.where(total > 0, total, 1.0)).max())


def spline_of(values: Array, axes: Sequence[Array], degree: int, at: Sequence[Array]) -> Array:
    """Tensor-product interpolating spline of one component at scattered points."""
    coefficients, knots = values, []
    for d, axis in enumerate(axes):
        spline = make_interp_spline(axis, coefficients, k=degree, axis=d)
        # SciPy hands the interpolated axis back first.
        coefficients = np.moveaxis(spline.c, 0, d)
        knots.append(spline.t)
    rows = [BSpline.design_matrix(x, t, degree).toarray() for x, t in zip(at, knots, strict=True)]
    return np.einsum("pi,pj,pk,ijk->p", *rows, coefficients, optimize=True)
