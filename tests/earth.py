"""The Earth's main field at 2025.0 in Cartesian components, and its published or closed-form figures.

Coefficients: IAGA Working Group V-MOD, International Geomagnetic Reference Field, 14th generation (2024),
doi:10.5281/zenodo.14012302, as shipped by the package ppigrf. Expansion: Alken et al., Earth Planets Space
73:49 (2021). With V = a sum (a/r)^(n+1) ..., P = sum V_n / n over the degrees: B = -grad V and A = grad P x X
(Backus, Parker & Constable, Foundations of Geomagnetism, 1996). Kilometres and nanotesla.

ppigrf itself takes 40 microseconds a point and divides by sin(theta); the sums here use the Cartesian
recursion of Cunningham, Celestial Mechanics 2, 207 (1970) (formulas from memory), which has no poles.
test_earth compares the two.
"""

from __future__ import annotations

from functools import cache

import numpy as np
import pandas as pd
import ppigrf.ppigrf

from tests.fields import Components, Field

RADIUS = 6371.2  # km, reference radius of the expansion
EPOCH = pd.Timestamp(2025, 1, 1)
DEGREE = 13


@cache
def coefficients() -> tuple[np.ndarray, np.ndarray]:
    """Schmidt semi-normalised (g, h) at the epoch, nT, indexed [n, m]."""
    tables = ppigrf.ppigrf.read_shc(ppigrf.ppigrf.shc_fn_igrf14)
    found = []
    for table in tables:
        values = np.zeros((DEGREE + 1, DEGREE + 1))
        for n, m in table.columns:
            values[n, m] = table.loc[EPOCH, (n, m)]
        found.append(values)
    return found[0], found[1]


def _harmonics(x, y, z, degree):
    """{(n, m): (a/r)^(n+1) P_nm(cos theta) exp(i m phi)}, not normalised."""
    scale = RADIUS / (x * x + y * y + z * z)
    u, w, q = scale * (x + 1j * y), scale * z, scale * RADIUS
    found = {(0, 0): np.sqrt(q) + 0j}
    for m in range(degree + 1):
        if m:
            found[m, m] = (2 * m - 1) * u * found[m - 1, m - 1]
        for n in range(m + 1, degree + 1):
            found[n, m] = (2 * n - 1) / (n - m) * w * found[n - 1, m]
            if n - 2 >= m:
                found[n, m] = found[n, m] - (n + m - 1) / (n - m) * q * found[n - 2, m]
    return found


def _gradient(x, y, z, of_degree) -> Components:
    """Gradient of the potential whose degree n is multiplied by of_degree(n)."""
    x, y, z = np.broadcast_arrays(*(np.asarray(c, dtype=float) for c in (x, y, z)))
    harmonics = _harmonics(x, y, z, DEGREE + 1)
    g, h = coefficients()
    gx, gy, gz = np.zeros(x.shape), np.zeros(x.shape), np.zeros(x.shape)
    for n in range(1, DEGREE + 1):
        schmidt = 1.0
        for m in range(n + 1):
            if m:
                schmidt = schmidt / np.sqrt((n + m) * (n - m + 1)) * (np.sqrt(2) if m == 1 else 1.0)
            c = of_degree(n) * schmidt * (g[n, m] - 1j * h[n, m])
            up = -c * harmonics[n + 1, m + 1]  # (d/dx + i d/dy) of the harmonic
            down = (n - m + 2) * (n - m + 1) * c * harmonics[n + 1, m - 1] if m else -c * harmonics[n + 1, 1].conj()
            gx += (up + down).real / 2
            gy += (up - down).imag / 2
            gz -= (n - m + 1) * (c * harmonics[n + 1, m]).real
    return gx, gy, gz


def _b(x, y, z) -> Components:
    gx, gy, gz = _gradient(x, y, z, lambda n: 1.0)
    return -gx, -gy, -gz


def _a(x, y, z) -> Components:
    gx, gy, gz = _gradient(x, y, z, lambda n: 1.0 / n)
    return gy * z - gz * y, gz * x - gx * z, gx * y - gy * x


EARTH = Field("Earth", _a, _b)

# (r km, colatitude deg, longitude deg) -> B_r, B_theta, B_phi (nT), A_theta, A_phi (nT km): 40-digit sums.
POINTS = {
    (6500.0, 30.0, 4.0): (
        -46215.76611922163, -14223.68323520032, 429.066616113973, 11492837.75146541, -95893111.82072102,
    ),
    (7000.0, 90.0, 0.0): (
        9877.386843125782, -20390.31229754439, -1633.901246066529, 18469839.40027152, -145351078.6422592,
    ),
    (8000.0, 100.0, 215.0): (
        4501.450566835992, -15200.88838962062, 3113.97807470958, -23010735.30117822, -119010465.2106467,
    ),
    (12742.4, 65.0, 123.4): (
        -2605.939901376263, -4016.183648859329, -14.99451395081093, -1063379.537919601, -48360462.95460988,
    ),
}  # fmt: skip

# Flux through the northern hemisphere of a sphere, nT km^2, outward: closed form in g_n0, n odd.
HEMISPHERE_FLUX = {RADIUS: -7687682282418.962, 7000.0: -6961213133051.063, 2 * RADIUS: -3765271608788.342}

# Root mean square of |B| over r = RADIUS, nT: Mauersberger 1956; Lowes, J. Geophys. Res. 71, 2179 (1966).
RMS = 43635.60067891813
# Integral of B^2 over RADIUS < r < 2 RADIUS, nT^2 km^3, from the same spectrum.
SQUARE_A_2A = 1.751686652365271e21

# The box x 7500..9500, y and z -1000..1000 km: closed-form figures at 40 digits.
BOX = ((7500.0, 9500.0), (-1000.0, 1000.0), (-1000.0, 1000.0))
BOX_LARGEST, BOX_SMALLEST = 18065.71745224, 7944.62210087  # |B|, nT
CORNERS = {
    (7500.0, -1000.0, -1000.0): (10729.41609055, -3662.3451992, 11705.77645629),
    (9500.0, 1000.0, 1000.0): (-532.20933908, -679.91245363, 8334.41141599),
}
BOX_FLUXES = (
    (25206804322.329693, 7679820388.168855),
    (-7238781730.38105, -1623221553.25251),
    (36923511147.718666, 48834934904.750984),
)  # low and high face along +x, +y, +z, nT km^2
# Circulation of A round the face x = 7500: along +y (low z), +z (high y), -y (high z), -z (low y), nT km^2.
BOX_EDGES = (-234676086494.0635, -29900964660.456997, 254960158556.41656, 34823696920.43359)
BOX_SQUARE = 1.2348076175067187e18  # int B^2 dV, nT^2 km^3
BOX_MEAN = (3612.0968976233708, -1121.2670565451463, 11232.021695048)  # mean B, nT

# Plain tensor-product splines of the orthonormal components, shell nodes RADIUS..2 RADIUS uniform, largest
# error at the 16^3 nodes of the box over the largest |B|: {source (nr, ntheta, nphi): {degree: error}},
# measured with SciPy.
PLAIN_SPLINES = {
    (16, 24, 48): {1: 9.55e-3, 3: 7.90e-5, 5: 4.61e-5},
    (32, 48, 96): {1: 2.66e-3, 3: 5.91e-6, 5: 6.96e-7},
}
