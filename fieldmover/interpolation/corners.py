"""A cell seen in the index coordinates of another grid: its corners, and the trilinear function that joins them."""

from __future__ import annotations

import numpy as np

from fieldmover import compute
from fieldmover.interpolation.view import ON_POLE

_UNEVEN = 1.25  # largest ratio of Jacobians within the middle half of a cell that counts as a parallelepiped
_BULGE = 0.05  # largest difference between the volume of a cell and that of its eight corners


@compute.inlined
def corners_of(x, i, j, k, c):
    """Copy components at the corners of a cell (corner number: 4 a + 2 b + c)."""
    for n in range(8):
        for d in range(3):
            c[n, d] = x[d, i + (n >> 2), j + ((n >> 1) & 1), k + (n & 1)]


@compute.kernel
def corner_coordinates(xi, i, j, k, shape, turns, rings, ends, c):
    """Index coordinates of the corners of a cell, as `corners_of`, made continuous; False if NaN.

    A corner on a pole has no azimuth of its own and takes that of the corners it shares an edge with.
    """
    corners_of(xi, i, j, k, c)
    fine = not np.isnan(c.sum())
    for axis in range(3):
        ring = rings[axis]
        if ring < 0 or not fine:
            continue
        on_pole = 0
        for n in range(8):
            low, high = abs(c[n, axis]) < ON_POLE, abs(c[n, axis] - shape[axis]) < ON_POLE
            if (ends[axis, 0] and low) or (ends[axis, 1] and high):
                on_pole |= 1 << n
        for n in range(8):
            if on_pole >> n & 1:
                total, count, reference = 0.0, 0, 0.0
                for step in (1, 2, 4):
                    other = n ^ step
                    if not on_pole >> other & 1:
                        value = c[other, ring]
                        if count == 0:
                            reference = value
                        elif turns[ring] > 0:
                            value -= turns[ring] * np.round((value - reference) / turns[ring])
                        total += value
                        count += 1
                if count > 0:
                    c[n, ring] = total / count
    for axis in range(3):
        if turns[axis] > 0:
            for n in range(1, 8):
                c[n, axis] -= turns[axis] * np.round((c[n, axis] - c[0, axis]) / turns[axis])
    return fine


@compute.inlined
def expand(c, p):
    """Coefficients of the trilinear function with the corners c about the middle: 1, a, b, e, ab, ae, be, abe.

    a, b and e go from -1/2 to 1/2.
    """
    for d in range(3):
        s0, s1, s2, s3 = c[0, d] + c[1, d], c[2, d] + c[3, d], c[4, d] + c[5, d], c[6, d] + c[7, d]
        t0, t1, t2, t3 = c[1, d] - c[0, d], c[3, d] - c[2, d], c[5, d] - c[4, d], c[7, d] - c[6, d]
        p[0, d] = 0.125 * (s0 + s1 + s2 + s3)
        p[1, d], p[2, d] = 0.25 * (s2 + s3 - s0 - s1), 0.25 * (s1 + s3 - s0 - s2)
        p[3, d] = 0.25 * (t0 + t1 + t2 + t3)
        p[4, d], p[5, d] = 0.5 * (s0 + s3 - s1 - s2), 0.5 * (t2 + t3 - t0 - t1)
        p[6, d], p[7, d] = 0.5 * (t1 + t3 - t0 - t2), t0 + t3 - t1 - t2


@compute.inlined
def value(p, d, a, b, e):
    """Component d of a trilinear function."""
    return (
        p[0, d] + a * p[1, d] + b * (p[2, d] + a * p[4, d]) + e * (p[3, d] + a * p[5, d] + b * (p[6, d] + a * p[7, d]))
    )


@compute.inlined
def _triple(p, f, g, h):
    """Determinant of three coefficients."""
    return (
        p[f, 0] * (p[g, 1] * p[h, 2] - p[g, 2] * p[h, 1])
        + p[f, 1] * (p[g, 2] * p[h, 0] - p[g, 0] * p[h, 2])
        + p[f, 2] * (p[g, 0] * p[h, 1] - p[g, 1] * p[h, 0])
    )


@compute.inlined
def jacobian(p):
    """Jacobian of a trilinear function: its mean over the middle half of the cell and its three slopes."""
    mean = _triple(p, 1, 2, 3) + (_triple(p, 1, 4, 5) + _triple(p, 4, 2, 6) + _triple(p, 5, 6, 3)) / 16
    return (
        mean,
        _triple(p, 1, 4, 3) + _triple(p, 1, 2, 5),
        _triple(p, 4, 2, 3) + _triple(p, 1, 2, 6),
        _triple(p, 5, 2, 3) + _triple(p, 1, 6, 3),
    )


@compute.kernel
def _jacobian_at(p, a, b, e):
    """Jacobian of a trilinear function at a place, exactly."""
    t = np.empty((3, 3))
    for d in range(3):
        t[0, d] = p[1, d] + b * p[4, d] + e * (p[5, d] + b * p[7, d])
        t[1, d] = p[2, d] + a * p[4, d] + e * (p[6, d] + a * p[7, d])
        t[2, d] = p[3, d] + a * p[5, d] + b * (p[6, d] + a * p[7, d])
    return _triple(t, 0, 1, 2)


@compute.inlined
def _at_corners(jacobian):
    """A Jacobian as `jacobian` gives it at the four corners of a tetrahedron."""
    a, b, e = 0.25 * jacobian[1], 0.25 * jacobian[2], 0.25 * jacobian[3]
    middle = jacobian[0]
    return middle - a - b - e, middle - a + b + e, middle + a - b + e, middle + a + b - e


@compute.kernel
def _exactly_at_corners(p):
    return (
        _jacobian_at(p, -0.25, -0.25, -0.25),
        _jacobian_at(p, -0.25, 0.25, 0.25),
        _jacobian_at(p, 0.25, -0.25, 0.25),
        _jacobian_at(p, 0.25, 0.25, -0.25),
    )


@compute.kernel
def _even(there, here, mean, volume):
    """Whether four Jacobians of an image differ little, or as little as those of the cell; see `is_regular`."""
    least, most, least_ratio, most_ratio = np.inf, 0.0, np.inf, 0.0
    for n in range(4):
        if not (here[n] > 0 and there[n] > 0):
            return False
        ratio = there[n] / here[n]
        least, most = min(least, there[n]), max(most, there[n])
        least_ratio, most_ratio = min(least_ratio, ratio), max(most_ratio, ratio)
    even = most <= _UNEVEN * least or most_ratio <= _UNEVEN * least_ratio
    return even and abs(mean - volume) <= _BULGE * volume


@compute.kernel
def is_regular(seen, own, volume):
    """Whether a cell is near enough to a parallelepiped, or at least changes its shape as its volume does.

    At a pole of its own grid a cell is a wedge, and seen in another grid without one, so is its image. The arguments
    are the Jacobians of the image and of the cell itself.
    """
    return _even(_at_corners(seen), _at_corners(own), own[0], volume)


@compute.kernel
def is_regular_after_all(p, y, own, volume, upright):
    """As `is_regular`, from p and y themselves: where a cell narrows along two axes a Jacobian has more than slopes."""
    if not own[0] > 0.25 * (abs(own[1]) + abs(own[2]) + abs(own[3])):
        return False
    here = (volume, volume, volume, volume) if upright else _exactly_at_corners(y)
    return _even(_exactly_at_corners(p), here, 0.25 * (here[0] + here[1] + here[2] + here[3]), volume)
