"""Formulas as text: values beside Python's own arithmetic, and everything else refused with its place."""

from __future__ import annotations

import math
import subprocess
import sys

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fieldmover.errors import FieldError, JobError
from fieldmover.expressions import FUNCTIONS, Expression

NAMES = {"rho", "u", "density", "B2", "r"}
VALUES = {"rho": np.array([1.0, 2.0, 0.5]), "u": np.array([3.0, -1.0, 0.0]), "B2": 4.0, "r": np.array([1.0, 10.0, 5.0])}

numbers = st.floats(0.01, 100).map(lambda x: format(x, ".3f"))
operands = numbers | st.sampled_from(["rho", "u", "B2"])
formulas = st.recursive(
    operands,
    lambda inner: (
        st.tuples(inner, st.sampled_from(["+", "-", "*", "/"]), inner).map(lambda t: f"({t[0]} {t[1]} {t[2]})")
        | st.tuples(inner, st.sampled_from(["<", "<=", ">", ">="]), inner).map(lambda t: f"({t[0]} {t[1]} {t[2]})")
        | inner.map(lambda t: f"-{t}")
        | inner.map(lambda t: f"sqrt(abs({t}))")
    ),
    max_leaves=12,
)


@given(formulas)
def test_formulas_are_what_python_makes_of_them(text):
    """Python itself, on one cell at a time, is the reference."""
    scope = {"sqrt": math.sqrt, "abs": abs, "__builtins__": {}}
    expected = []
    for cell in range(3):
        values = {name: float(np.broadcast_to(v, 3)[cell]) for name, v in VALUES.items()}
        try:
            expected.append(float(eval(text, scope, values)))  # the test's own text
        except ZeroDivisionError:
            expected.append(np.nan)
    found = Expression(text, NAMES).evaluate(VALUES, (3,), finite=False)
    known = np.isfinite(expected)
    np.testing.assert_allclose(found[known], np.array(expected)[known], rtol=1e-12, atol=1e-300)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("(5/3 - 1) * rho * u", [2.0, -4 / 3, 0.0]),
        ("rho ** -2", [1.0, 0.25, 4.0]),
        ("-rho**2", [-1.0, -4.0, -0.25]),
        ("2 ** 3 ** 0.5", [2 ** (3**0.5)] * 3),
        ("min(rho, 1, u)", [1.0, -1.0, 0.0]),
        ("max(rho, u)", [3.0, 2.0, 0.5]),
        ("where(u > 0, u, 1e-3)", [3.0, 1e-3, 1e-3]),
        ("where(u, rho, 7)", [1.0, 2.0, 7.0]),
        ("-(u > 0)", [-1.0, 0.0, 0.0]),
        ("where(0.6 < rho <= 1, 1, 0)", [1.0, 0.0, 0.0]),
        ("(rho > 0.6) * B2 + (u < 0)", [4.0, 5.0, 0.0]),
        ("atan2(u, rho)", [math.atan2(3, 1), math.atan2(-1, 2), 0.0]),
        ("log10(r) + tanh(0) + cos(pi)", [-1.0, 0.0, math.log10(5) - 1]),
        ("  rho\n  + 1 ", [2.0, 3.0, 1.5]),
    ],
)
def test_values(text, expected):
    np.testing.assert_allclose(Expression(text, NAMES).evaluate(VALUES, (3,)), expected, rtol=1e-15, atol=1e-16)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("r > 2 and rho < 1", [False, False, True]),
        ("r > 2 or u > 0", [True, True, True]),
        ("not r > 2", [True, False, False]),
        ("not (r > 2 and u)", [True, False, True]),
        ("u or r > 2", [True, True, True]),
        ("not u", [False, False, True]),
        ("1 <= r < 10", [True, False, True]),
        ("rho == 2", [False, True, False]),
        ("rho != 2", [True, False, True]),
    ],
)
def test_masks(text, expected):
    found = Expression(text, NAMES).mask(VALUES)
    assert found.dtype == bool
    assert found.tolist() == expected


def test_names_that_are_used_are_known_and_the_others_not_needed():
    found = Expression("rho * max(u, 0) + pi", NAMES)
    assert found.names == {"rho", "u"}
    assert found.evaluate({"rho": 1.0, "u": 1.0}, (2, 1)).shape == (2, 1)
    assert Expression("0.25", NAMES).evaluate({}, (2, 3)).tolist() == [[0.25] * 3] * 2


def test_a_name_of_the_job_hides_a_constant():
    assert Expression("pi", {"pi"}).evaluate({"pi": 3.0}) == 3.0


def test_results_are_no_views_of_what_was_given():
    rho = np.ones(3)
    Expression("rho", NAMES).evaluate({"rho": rho})[0] = 5.0
    assert rho[0] == 1.0


@pytest.mark.parametrize(
    ("text", "place", "message"),
    [
        ("rho + densiti", 7, r"unknown name 'densiti' \(did you mean 'density'\?\); known are B2, density, r, rho, u"),
        ("  xyz", 3, "unknown name 'xyz'; known are"),
        ("rho * open('x')", 7, "unknown function 'open'"),
        ("__import__('os').system('ls')", 1, "only a function's name may be called"),
        ("sqr(rho)", 1, r"did you mean 'sqrt'\?"),
        ("rho.real", 1, "a dot after a name is not known"),
        ("rho[0]", 1, "square brackets are not known"),
        ("1 + (lambda: 1)()", 5, "only a function's name may be called"),
        ("rho ^ 2", 1, r"write \*\*"),
        ("rho > 1 & u > 1", 7, "write and"),
        ("rho > 1 | u > 1", 7, "write or"),
        ("~rho", 1, "write not"),
        ("rho if u else 1", 1, r"write where\(condition, a, b\)"),
        ("rho % 2", 1, "% is not known"),
        ("rho + 'a'", 7, "expected numbers, names"),
        ("rho + True", 7, "expected numbers, names"),
        ("1j * rho", 1, "expected numbers, names"),
        ("[rho, u]", 1, "expected numbers, names"),
        ("rho is u", 1, "expected numbers, names"),
        ("max(*rho, u)", 5, "expected numbers, names"),
        ("max(rho)", 1, "max has 1 arguments, expected 2 or more"),
        ("sqrt(rho, u)", 1, "sqrt has 2 arguments, expected 1"),
        ("where(rho, out=u)", 1, "takes no arguments by name"),
        ("sqrt + 1", 1, r"sqrt is a function: expected sqrt\(...\)"),
        ("rho ** 1e6", 8, r"power 1e\+06, expected at most 100"),
        ("rho ** -(101)", 10, "power 101, expected at most 100"),
        ("1e999 * rho", 1, "beyond the range"),
        ("9" * 400 + "* rho", 1, "beyond the range"),
        ("-" * 150 + "rho", 102, "nested more than 100 deep"),
    ],
)
def test_what_is_no_formula_is_refused_with_its_place(text, place, message):
    with pytest.raises(JobError, match=message) as caught:
        Expression(text, NAMES)
    assert f"character {place}:" in str(caught.value)
    assert len(str(caught.value)) < 400


def test_places_are_counted_in_characters():
    with pytest.raises(JobError, match=r"'é \+ rho.x', character 5: a dot"):
        Expression("é + rho.x", {"é", "rho"})


@pytest.mark.parametrize("text", ["", "rho +", "rho := 1", "rho; u", "rho\x00", "(" * 300 + "rho" + ")" * 300])
def test_what_python_cannot_parse_is_refused(text):
    with pytest.raises(JobError, match=r"character \d+: not a formula"):
        Expression(text, NAMES)


def test_a_long_text_is_refused():
    with pytest.raises(JobError, match="2001 characters, expected at most 2000"):
        Expression("1" * 2001, NAMES)


def test_values_that_are_not_finite_are_counted_and_located():
    with pytest.raises(
        FieldError, match=r"'log\(u\)' gives 2 values that are not finite, the first \(nan\) at index \[1\]"
    ):
        Expression("log(u)", NAMES).evaluate(VALUES)
    assert np.isneginf(Expression("log(u)", NAMES).evaluate(VALUES, finite=False)[2])


def test_shapes_must_fit():
    with pytest.raises(FieldError, match=r"shapes differ: rho \(3,\), u \(2,\)"):
        Expression("rho + u", NAMES).evaluate({"rho": np.ones(3), "u": np.ones(2)})


def test_a_number_is_no_mask():
    with pytest.raises(JobError, match="expected a comparison"):
        Expression("rho + 1", NAMES).mask(VALUES)


def test_functions_are_those_of_numpy():
    for name, (own, count) in FUNCTIONS.items():
        arguments = ["0.3", "0.4", "0.5"][: count or 2]
        found = Expression(f"{name}({', '.join(arguments)})", ()).evaluate({})
        assert found == getattr(np, own)(*map(float, arguments))


def test_checking_a_formula_needs_no_numpy():
    code = (
        "import sys; from fieldmover.expressions import Expression; Expression('a > 1', {'a'}); "
        "sys.exit('numpy' in sys.modules)"
    )
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
