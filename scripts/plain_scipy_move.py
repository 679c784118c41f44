"""What a careful user writes today with NumPy and SciPy alone; scripts/bench sets fieldmover beside it.

Cell-centred physical components on a spherical grid are interpolated by cubic splines at the cell centres of
a Cartesian box, turned to Cartesian components, averaged to the faces, and cleaned by a projection with sine
transforms (walls of the box open). It ends divergence-free on the faces, but the interpolation and the
averaging have lost the fluxes of the source, and the projection cannot know them.
"""

from __future__ import annotations

import numpy as np
import scipy.fft
from scipy.ndimage import map_coordinates

WORKERS = 2


def to_faces(b: np.ndarray, axis: int) -> np.ndarray:
    """Average of neighbouring cells on every face normal to `axis`; wall faces take the cell beside them."""
    padded = np.pad(b, [(1, 1) if d == axis else (0, 0) for d in range(3)], mode="edge")
    low = padded[tuple(slice(None, -1) if d == axis else slice(None) for d in range(3))]
    high = padded[tuple(slice(1, None) if d == axis else slice(None) for d in range(3))]
    return 0.5 * (low + high)


def interpolate(b, r, theta, phi, x, y, z):
    """Cartesian components at the cell centres of the box, from cell-centred (b_r, b_theta, b_phi).

    All axes are node arrays; r is spaced evenly in its logarithm, theta and phi evenly.
    """
    cx, cy, cz = (0.5 * (q[1:] + q[:-1]) for q in (x, y, z))
    X, Y, Z = np.meshgrid(cx, cy, cz, indexing="ij")
    rho = np.hypot(X, Y)
    radius, polar, azimuth = np.hypot(rho, Z), np.arctan2(rho, Z), np.arctan2(Y, X) % (2 * np.pi)
    pad = 4  # cells repeated across the seam
    at = np.stack(
        [
            np.log(radius / r[0]) / np.log(r[1] / r[0]) - 0.5,
            (polar - theta[0]) / (theta[1] - theta[0]) - 0.5,
            azimuth / (phi[1] - phi[0]) - 0.5 + pad,
        ]
    )
    wrapped = [np.concatenate([c[..., -pad:], c, c[..., :pad]], axis=2) for c in b]
    br, bt, bp = (map_coordinates(c, at, order=3, mode="nearest") for c in wrapped)
    st, ct, sp, cp = np.sin(polar), np.cos(polar), np.sin(azimuth), np.cos(azimuth)
    return (
        (br * st + bt * ct) * cp - bp * sp,
        (br * st + bt * ct) * sp + bp * cp,
        br * ct - bt * st,
    )


def project(faces, spacing):
    """Divergence-free faces nearest to `faces` (normal components), on an even box with open walls."""
    net = sum(np.diff(f, axis=d) / h for d, (f, h) in enumerate(zip(faces, spacing, strict=True)))
    symbol = 0.0
    for d, (n, h) in enumerate(zip(net.shape, spacing, strict=True)):
        eigenvalues = (2 * np.sin(np.pi * np.arange(1, n + 1) / (2 * n)) / h) ** 2
        symbol = symbol + eigenvalues.reshape([-1 if e == d else 1 for e in range(3)])
    p = scipy.fft.idstn(scipy.fft.dstn(net, type=2, workers=WORKERS) / symbol, type=2, workers=WORKERS)
    cleaned = []
    for d, (f, h) in enumerate(zip(faces, spacing, strict=True)):
        padded = np.pad(p, [(1, 1) if e == d else (0, 0) for e in range(3)])
        for end, inner in ((0, 1), (-1, -2)):  # odd reflection: p is 0 on the wall
            pick = tuple(end if e == d else slice(None) for e in range(3))
            padded[pick] = -padded[tuple(inner if e == d else slice(None) for e in range(3))]
        cleaned.append(f + np.diff(padded, axis=d) / h)
    return cleaned


def move(b, r, theta, phi, x, y, z):
    """Face-centred normal components in the box, divergence-free on the faces."""
    cartesian = interpolate(b, r, theta, phi, x, y, z)
    faces = [to_faces(c, d) for d, c in enumerate(cartesian)]
    return project(faces, [q[1] - q[0] for q in (x, y, z)])
