"""Magnetic fields in closed form: a vector potential A and the field B = curl A, in Cartesian components.

Both are written down by hand from the published formulas, so that `test_fields` can take the curl with sympy
and find a slip in either. For that the functions take the mathematics they use as a last argument: NumPy by
default, sympy in the test. Heaviside-Lorentz units: the energy of a field is half the integral of its square.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from types import SimpleNamespace

import numpy as np
import scipy.special

Components = tuple[np.ndarray, np.ndarray, np.ndarray]
VectorFunction = Callable[..., Components]


def _j1_over_s(s):
    """j1(s)/s for the spherical Bessel function j1, 1/3 at s = 0."""
    s = np.asarray(s, dtype=float)
    small = np.abs(s) < 1e-2
    safe = np.where(small, 1.0, s)
    return np.where(small, 1 / 3 - s**2 / 30 + s**4 / 840, scipy.special.spherical_jn(1, safe) / safe)


NUMERIC = SimpleNamespace(
    sin=np.sin,
    cos=np.cos,
    sqrt=np.sqrt,
    j0=lambda s: scipy.special.spherical_jn(0, s),
    j1_over_s=_j1_over_s,
    bessel0=scipy.special.j0,
    bessel1=scipy.special.j1,
    safe=lambda s: np.where(s == 0, 1.0, s),  # a divisor whose numerator vanishes with it
)


@dataclass(frozen=True)
class Field:
    """A pair A, B = curl A; both take x, y, z and return three Cartesian components."""

    name: str
    a: VectorFunction
    b: VectorFunction


# -- Fields of our own ---------------------------------------------------------------------------------------

WAVE_NUMBER = 2.0


def _wave_a(x, y, z, m=NUMERIC):
    k = WAVE_NUMBER
    return (
        m.sin(k * y + 0.3) * m.cos(0.8 * k * z),
        m.cos(0.9 * k * x) * m.sin(0.7 * k * z + 0.2),
        m.sin(0.6 * k * x + 0.5) * m.cos(k * y),
    )


def _wave_b(x, y, z, m=NUMERIC):
    k = WAVE_NUMBER
    ax_y = k * m.cos(k * y + 0.3) * m.cos(0.8 * k * z)
    ax_z = -0.8 * k * m.sin(k * y + 0.3) * m.sin(0.8 * k * z)
    ay_x = -0.9 * k * m.sin(0.9 * k * x) * m.sin(0.7 * k * z + 0.2)
    ay_z = 0.7 * k * m.cos(0.9 * k * x) * m.cos(0.7 * k * z + 0.2)
    az_x = 0.6 * k * m.cos(0.6 * k * x + 0.5) * m.cos(k * y)
    az_y = -k * m.sin(0.6 * k * x + 0.5) * m.sin(k * y)
    return az_y - ay_z, ax_z - az_x, ay_x - ax_y


# A smooth field without symmetry; its shortest wave length is pi, so a box of side 1 holds a third of a wave.
WAVE = Field("wave", _wave_a, _wave_b)


def _linear_b(x, y, z, m=NUMERIC):
    return x + 2 * y - z, 3 * x - 2 * y + z, x + y + z


def _linear_a(x, y, z, m=NUMERIC):
    # curl(B x X) = (n + 2) B for a solenoidal B that is homogeneous of degree n: here n = 1.
    bx, by, bz = _linear_b(x, y, z)
    return (by * z - bz * y) / 3, (bz * x - bx * z) / 3, (bx * y - by * x) / 3


# Linear and solenoidal: what a divergence-preserving refinement reproduces exactly (Toth & Roe, J. Comput.
# Phys. 180, 736, 2002, from the abstract; the field is our own).
LINEAR = Field("linear", _linear_a, _linear_b)


def uniform(bx: float, by: float, bz: float) -> Field:
    """The uniform field B with A = B x X / 2."""

    def a(x, y, z, m=NUMERIC):
        return (by * z - bz * y) / 2, (bz * x - bx * z) / 2, (bx * y - by * x) / 2

    def b(x, y, z, m=NUMERIC):
        return bx + 0 * x, by + 0 * x, bz + 0 * x

    return Field("uniform", a, b)


# -- Published fields ----------------------------------------------------------------------------------------


def dipole(mx: float = 0.0, my: float = 0.0, mz: float = 1.0) -> Field:
    """The point dipole: A = m x X / r^3, B = 3 (m.X) X / r^5 - m / r^3 (textbook)."""

    def a(x, y, z, m=NUMERIC):
        r3 = m.sqrt(x * x + y * y + z * z) ** 3
        return (my * z - mz * y) / r3, (mz * x - mx * z) / r3, (mx * y - my * x) / r3

    def b(x, y, z, m=NUMERIC):
        r = m.sqrt(x * x + y * y + z * z)
        along = 3 * (mx * x + my * y + mz * z) / r**5
        return along * x - mx / r**3, along * y - my / r**3, along * z - mz / r**3

    return Field("dipole", a, b)


# int_{1<r<2} B^2 dV = (8 pi/3)(1 - 1/8) and the flux 2 pi m / r through the hemisphere z > 0, m = 1, both by
# hand.
DIPOLE_SQUARE_1_2 = 7.330382858376184

ABC_A, ABC_B, ABC_C = 1.0, (2 / 3) ** 0.5, (1 / 3) ** 0.5


def _abc(x, y, z, m=NUMERIC):
    return (
        ABC_A * m.sin(z) + ABC_C * m.cos(y),
        ABC_B * m.sin(x) + ABC_A * m.cos(z),
        ABC_C * m.sin(y) + ABC_B * m.cos(x),
    )


# Arnold 1965; Childress 1970; Dombre et al., J. Fluid Mech. 167, 353 (1986). curl B = B, so A = B.
ABC = Field("ABC", _abc, _abc)
ABC_SQUARE = 496.1004268847971  # 16 pi^3: int B^2 over [0, 2 pi]^3, which is also the helicity
ABC_FLUX_Z0 = 2.189449512278973  # through z = 0, [0, pi/2]^2

LUNDQUIST_ALPHA = 2.4048255576957727686  # first zero of J0 (Abramowitz & Stegun, table 9.5)


def _lundquist_b(x, y, z, m=NUMERIC):
    R = m.sqrt(x * x + y * y)
    across = m.bessel1(LUNDQUIST_ALPHA * R) / m.safe(R)
    return -across * y, across * x, m.bessel0(LUNDQUIST_ALPHA * R) + 0 * z


def _lundquist_a(x, y, z, m=NUMERIC):
    bx, by, bz = _lundquist_b(x, y, z, m)
    return bx / LUNDQUIST_ALPHA, by / LUNDQUIST_ALPHA, bz / LUNDQUIST_ALPHA


# S. Lundquist, Ark. Fys. 2, 361 (1950): B = (0, J1(alpha R), J0(alpha R)) in (R, phi, z), radius 1, axial
# flux only.
LUNDQUIST = Field("Lundquist cylinder", _lundquist_a, _lundquist_b)
LUNDQUIST_SQUARE = 1.69340718362923  # int B^2 per unit length within R < 1
LUNDQUIST_AXIAL_FLUX = 1.356397729885107
LUNDQUIST_AZIMUTHAL_FLUX = 0.4158305773156237  # per unit length

SPHEROMAK_ALPHA = 4.4934094579090641753  # first root of tan s = s


def _spheromak_b(x, y, z, m=NUMERIC):
    # In spherical components B_r = 2 f cos(theta), B_theta = -(j0 - f) sin(theta), B_phi = j1 sin(theta), f =
    # j1(s)/s; d(s j1)/ds = s j0 - j1 turns the published B_theta into this form. The rest is the change of
    # basis.
    r = m.sqrt(x * x + y * y + z * z)
    s = SPHEROMAK_ALPHA * r
    f, j0 = m.j1_over_s(s), m.j0(s)
    radial = (3 * f - j0) * z / m.safe(r * r)
    turn = SPHEROMAK_ALPHA * f
    return radial * x - turn * y, radial * y + turn * x, radial * z + j0 - f


def _spheromak_a(x, y, z, m=NUMERIC):
    bx, by, bz = _spheromak_b(x, y, z, m)
    return bx / SPHEROMAK_ALPHA, by / SPHEROMAK_ALPHA, bz / SPHEROMAK_ALPHA


# Chandrasekhar & Kendall, ApJ 126, 457 (1957); Rosenbluth & Bussac, Nucl. Fusion 19, 489 (1979). Radius 1, B0
# = 1, B_r = 0 on the surface.
SPHEROMAK = Field("spheromak", _spheromak_a, _spheromak_b)
SPHEROMAK_SQUARE = 0.39534178295309561769  # int B^2 over r < 1
SPHEROMAK_AXIS = 0.6106070002507649  # cylindrical radius of the magnetic axis in z = 0
SPHEROMAK_POLOIDAL_FLUX = 0.3308289381928857  # through the disc within the magnetic axis
SPHEROMAK_TOROIDAL_FLUX = 0.2606831867030788  # through a half-plane phi = constant
SPHEROMAK_POINT = (0.5, 1.0)  # r, theta
SPHEROMAK_AT_POINT = (0.2082656672507928, -0.1300125662862872, 0.3643644607330933)  # B_r, B_theta, B_phi

HOPF_SCALE = 4 / np.pi


def _hopf_vector(x, y, z):
    return 2 * (y - x * z), -2 * (x + y * z), -1 + x * x + y * y - z * z


def _hopf_b(x, y, z, m=NUMERIC):
    s = HOPF_SCALE / (1 + x * x + y * y + z * z) ** 3
    vx, vy, vz = _hopf_vector(x, y, z)
    return s * vx, s * vy, s * vz


def _hopf_a(x, y, z, m=NUMERIC):
    s = HOPF_SCALE / 4 / (1 + x * x + y * y + z * z) ** 2
    vx, vy, vz = _hopf_vector(x, y, z)
    return s * vx, s * vy, s * vz


# Kamchatnov, Sov. Phys. JETP 55, 69 (1982); Ranada, Lett. Math. Phys. 18, 97 (1989). Energy 1/2 int B^2 = 1
# in all space.
HOPF = Field("Hopf", _hopf_a, _hopf_b)
HOPF_ENERGY = {2.0: 0.9662712845514202, 4.0: 0.9983266857746732}  # within r < radius
HOPF_DISC_FLUX = -1.0  # through the unit disc z = 0

FIELDS = (WAVE, LINEAR, uniform(0.3, -0.4, 1.1), dipole(0.2, -0.5, 1.0), ABC, LUNDQUIST, SPHEROMAK, HOPF)
