"""The closed forms that other tests trust: curl A = B by sympy, and values from the literature."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest
import sympy

from tests import fields

SYMBOLIC = SimpleNamespace(
    sin=sympy.sin,
    cos=sympy.cos,
    sqrt=sympy.sqrt,
    j0=lambda s: sympy.sin(s) / s,
    j1_over_s=lambda s: (sympy.sin(s) / s**2 - sympy.cos(s) / s) / s,
    bessel0=lambda s: sympy.besselj(0, s),
    bessel1=lambda s: sympy.besselj(1, s),
    safe=lambda s: s,
)
POINT = (0.31, -0.47, 0.23)


@pytest.mark.parametrize("field", fields.FIELDS, ids=lambda f: f.name)
def test_the_curl_of_a_is_b(field):
    x, y, z = q = sympy.symbols("x y z", real=True)
    ax, ay, az = field.a(x, y, z, SYMBOLIC)
    curl = (az.diff(y) - ay.diff(z), ax.diff(z) - az.diff(x), ay.diff(x) - ax.diff(y))
    at = dict(zip(q, map(sympy.Float, POINT), strict=True))
    found = [float(sympy.sympify(c).evalf(30, subs=at)) for c in curl]
    np.testing.assert_allclose(found, np.array(field.b(*POINT), dtype=float), rtol=1e-12, atol=1e-13)


@pytest.mark.parametrize("field", fields.FIELDS, ids=lambda f: f.name)
def test_numpy_and_sympy_see_the_same_potential(field):
    x, y, z = q = sympy.symbols("x y z", real=True)
    at = dict(zip(q, map(sympy.Float, POINT), strict=True))
    found = [float(sympy.sympify(c).evalf(30, subs=at)) for c in field.a(x, y, z, SYMBOLIC)]
    np.testing.assert_allclose(found, np.array(field.a(*POINT), dtype=float), rtol=1e-12, atol=1e-13)


def test_the_spheromak_has_its_published_components():
    r, theta = fields.SPHEROMAK_POINT
    bx, by, bz = fields.SPHEROMAK.b(r * np.sin(theta), 0.0, r * np.cos(theta))
    found = (
        bx * np.sin(theta) + bz * np.cos(theta),
        bx * np.cos(theta) - bz * np.sin(theta),
        by,
    )
    np.testing.assert_allclose(found, fields.SPHEROMAK_AT_POINT, rtol=1e-13)


@pytest.mark.parametrize("field", [fields.SPHEROMAK, fields.LUNDQUIST], ids=lambda f: f.name)
def test_fields_with_an_axis_are_finite_and_smooth_there(field):
    near = np.array(field.b(np.array([0.0, 1e-5]), np.array([0.0, 0.0]), np.array([0.0, 1e-5])))
    assert np.isfinite(near).all()
    np.testing.assert_allclose(near[:, 0], near[:, 1], atol=1e-4)
