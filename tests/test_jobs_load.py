"""Job files: what they may say, and how mistakes in them are told."""

from __future__ import annotations

import math
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fieldmover.errors import JobError
from fieldmover.jobs.demo import job_text
from fieldmover.jobs.load import line_of, load
from fieldmover.jobs.numbers import number

GOOD = """\
[source]
file = "in.h5"
time = "/state@time"

[source.grid]
kind = "spherical"
nodes = ["/r", { from = 0, to = "pi", cells = 8, spacing = "sinh", ratio = 3 }, [0, 1, "pi"]]

[source.magnetic]
at = "cells"
data = ["/b1", "/b2", "/b3"]
basis = "physical"
unit = "gaussian"

[source.fluid.density]
data = "/rho"
carry = "conserve"

[source.fluid.velocity]
data = ["/v1", "/v2", "/v3"]
basis = "physical"
carry = "by mass"

[target]
file = "out.h5"
[target.grid]
kind = "cartesian"
nodes = [{ from = -1, to = 1, cells = 4 }, { from = -1, to = 1, cells = 4 }, [0, 1]]
[target.magnetic]
data = ["/Bx", "/By", "/Bz"]
unit = 2.5
[target.fluid]
density = "/rho"
velocity = { data = ["/vx", "/vy", "/vz"], outside = 1 }
[limits]
divergence = 1e-12
"""


@pytest.fixture
def told(tmp_path):
    """Load a job with some text replaced, and return what is said about it."""

    def told(*changes: tuple[str, str], override: tuple[str, ...] = ()) -> str:
        text = GOOD
        for old, new in changes:
            assert old in text
            text = text.replace(old, new, 1)
        path = tmp_path / "job.toml"
        path.write_text(text)
        with pytest.raises(JobError) as caught:
            load(path, override)
        assert caught.value.exit_status == 2
        assert str(caught.value).startswith(str(path)) or override
        return str(caught.value)

    return told


def test_a_good_job(tmp_path):
    path = tmp_path / "job.toml"
    path.write_text(GOOD)
    loaded = load(path)
    job = loaded.job
    assert loaded.source == tmp_path / "in.h5"
    assert loaded.target == tmp_path / "out.h5"
    assert job.source.axes == "q1 q2 q3"
    assert job.source.time == "/state@time"
    assert job.source.grid.nodes[1].to == math.pi
    assert job.source.grid.nodes[2] == [0, 1, math.pi]
    assert job.target.magnetic.unit == 2.5
    assert job.target.fluid["density"].data == "/rho"
    assert job.target.fluid["velocity"].outside == 1
    assert job.move.order == 3
    assert job.move.outside == "least energy"
    assert "mass_change" not in job.limits


def test_the_demo_job_is_good(tmp_path):
    path = tmp_path / "job.toml"
    path.write_text(job_text())
    assert load(path).job.move.outside == "least energy"


def test_the_example_is_the_demo_job():
    example = Path(__file__).parent.parent / "examples" / "ring.toml"
    assert example.read_text(encoding="utf-8") == job_text()


def test_all_mistakes_are_told_at_once_with_their_lines(told):
    message = told(
        ('"spherical"', '"sphericall"'),
        ('at = "cells"', 'att = "cells"'),
        ("divergence", "divergense"),
        ("2.5", "-2.5"),
    )
    assert "5 mistakes" in message
    for line in (
        "line 6: source.grid.kind: found 'sphericall'; expected",
        "did you mean 'spherical'?",
        "line 10: source.magnetic.att: unknown key (did you mean 'at'?)",
        'line 9: source.magnetic.at: missing; give "faces", "cells" or "edges"',
        'line 31: target.magnetic.unit: found -2.5; give "gaussian", "heaviside-lorentz" or a number above 0',
        "line 36: limits.divergense: there is no such figure; the nearest is 'divergence'",
    ):
        assert line in message


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        (
            'unit = "gaussian"',
            "",
            'line 9: source.magnetic.unit: missing; give "gaussian", "heaviside-lorentz" or a',
        ),
        ('unit = "gaussian"', 'unit = "tesla"', "found 'tesla'; give \"gaussian\""),
        ('unit = "gaussian"', "unit = true", "found True; give"),
        (
            '["/b1", "/b2", "/b3"]',
            '["/b1", "/b2"]',
            "line 11: source.magnetic.data: found 2 values; expected 3",
        ),
        ('["/b1", "/b2", "/b3"]', '["/b1", "/b2", 3]', "source.magnetic.data[2]: found 3"),
        ("cells = 8", "cells = 8.0", "source.grid.nodes[1].cells: found 8.0"),
        ("cells = 8", "cells = 0", "source.grid.nodes[1].cells: found 0"),
        ("ratio = 3", "ratio = 1", "source.grid.nodes[1].ratio: found 1"),
        (", ratio = 3", "", "source.grid.nodes[1]: give ratio"),
        ('to = "pi"', 'to = "tau"', "source.grid.nodes[1].to: 'tau' is not a number"),
        ("from = 0", "from = 4", "source.grid.nodes[1]: from 4 to 3.14159: the end must lie above the start"),
        ('"sinh", ratio = 3', '"log"', "log spacing from 0; expected a start above 0"),
        ('[0, 1, "pi"]', "[0, 1, 1]", "source.grid.nodes[2]: positions must increase: 1, then 1 at [2]"),
        ('nodes = ["/r"', 'centres = ["/r"', "source.grid.centres[1]"),
        ('nodes = ["/r"', 'nodess = ["/r"', "unknown key (did you mean 'nodes'?)"),
        ("[0, 1]]", '"/x"]', "target.grid: '/x' is a dataset; give file, the HDF5 file it lies in"),
        (
            'kind = "cartesian"',
            'kind = "cartesian"\nperiodic = [true, false]',
            "periodic: found 2 values; expected 3",
        ),
        (
            'kind = "spherical"',
            'kind = "spherical"\nperiodic = [false, false, true]',
            "periodic is not for spherical grids; a spherical one has its seam where nodes span 2 pi",
        ),
        (
            'basis = "physical"\nunit',
            "unit",
            'line 9: source.magnetic.basis: missing; give "physical", "coordinate"',
        ),
        ('basis = "physical"\ncarry', "carry", "line 19: source.fluid.velocity.basis: missing"),
        ('at = "cells"', 'at = "faces"\ndensitised = true', "source.magnetic.densitised: goes with"),
        (
            'at = "cells"\ndata = ["/b1", "/b2", "/b3"]\nbasis = "physical"',
            'at = "faces"\ndata = ["/b1", "/b2", "/b3"]\nbasis = "cartesian"',
            '"cartesian" goes with at = "cells"',
        ),
        ('carry = "conserve"', 'carry = "by mass"', 'source.fluid.velocity.carry: "by mass" needs a scalar'),
        ('carry = "by mass"', 'carry = "conserve"', "source.fluid.velocity.carry: a vector is carried"),
        ('carry = "conserve"', 'carry = "keep"', "found 'keep'; expected 'conserve', 'by mass' or 'point'"),
        (
            'density = "/rho"',
            'densty = "/rho"',
            "target.fluid.densty: not among the quantities of source.fluid",
        ),
        ('density = "/rho"', 'density = ["/a", "/b", "/c"]', "target.fluid.density: the source has a scalar"),
        ('density = "/rho"', 'density = "Bx"', "target.fluid.density: dataset 'Bx' is named twice"),
        ('density = "/rho"', 'density = "/fieldmover/rho"', "the group /fieldmover is kept"),
        ('density = "/rho"', 'density = { data = "/rho", outside = -1 }', "a density is not negative"),
        ("divergence = 1e-12", "mass_change = 1\n[source.fluid.x]\ndata = 3", "source.fluid.x.data: found 3"),
        ("divergence = 1e-12", "divergence = nan", "limits.divergence: found nan"),
        ("divergence = 1e-12", "divergence = -1", "limits.divergence: found -1"),
        ('time = "/state@time"', 'time = "state"', "source.time: 'state' is not a number"),
        ('time = "/state@time"', 'axes = "q3 q2"', "source.axes: found 'q3 q2'; expected"),
        ('time = "/state@time"', "ghosts = [1, -1, 0]", "source.ghosts[1]: found -1"),
        ("[limits]", "[limit]", "line 35: limit: unknown key (did you mean 'limits'?)"),
        ("[limits]", "[move]\norder = 2\n[limits]", "line 36: move.order: found 2; expected 1, 3, 5 or 'limited'"),
    ],
)
def test_each_mistake_in_plain_words(told, old, new, words):
    assert words in told((old, new))


def test_a_limit_on_a_mass_that_is_not_moved(told):
    message = told(('density = "/rho"\n', ""), ("divergence = 1e-12", "mass_change = 1e-9"))
    assert "line 35: limits.mass_change: needs target.fluid.density" in message


def test_what_is_no_job_file(tmp_path):
    cases = {"none.toml": None, "bytes.toml": b"\xff\xfe", "syntax.toml": b"a = \n", "folder.toml": "folder"}
    for name, content in cases.items():
        path = tmp_path / name
        if content == "folder":
            path.mkdir()
        elif content is not None:
            path.write_bytes(content)
    for name, words in {
        "none.toml": "no such file",
        "bytes.toml": "not UTF-8",
        "syntax.toml": "line 1",
        "folder.toml": "is a directory",
    }.items():
        with pytest.raises(JobError, match=words):
            load(tmp_path / name)


def test_values_replaced_on_the_command_line(tmp_path, told):
    path = tmp_path / "job.toml"
    path.write_text(GOOD)
    loaded = load(path, ['target.precision="single"', "move.order = 1", "limits.mass_change=1e-9"])
    assert loaded.job.target.precision == "single"
    assert loaded.job.move.order == 1
    assert loaded.job.limits["mass_change"] == 1e-9
    assert "--set: move.order: found 4" in told(override=("move.order=4",))
    assert "expected key=value" in told(override=("move.order",))
    assert "text needs quotes" in told(override=("title=ring",))
    assert "'file' is no table" in told(override=("source.file.name=1",))


def test_lines_of_keys():
    text = '[a]\n"b" = 1 # [c]\n\n["a".c]\n d.e = """\n x = 1\n"""\n[f]\ng = { h = 1 }\n'
    for place, line in {
        ("a", "b"): 2,
        ("a", "c"): 4,
        ("a", "c", "d", "e"): 5,
        ("f", "g", "h"): 9,
        ("f", "z"): 8,
        ("z",): 1,
    }.items():
        assert line_of(text, place) == line


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("2 pi", 2 * math.pi),
        ("pi/2", math.pi / 2),
        ("-pi", -math.pi),
        ("2(1+1)", 4),
        ("1e3", 1000),
        ("45 deg", math.pi / 4),
        ("2pi / 3", 2 * math.pi / 3),
        (" 3 ", 3),
    ],
)
def test_arithmetic(text, value):
    assert number(text) == pytest.approx(value, rel=1e-15)


@pytest.mark.parametrize(
    "text",
    [
        "",
        "x",
        "pi.real",
        "__import__('os')",
        "2**9",
        "9**9**9",
        "1/0",
        "1e999",
        "[1]",
        "1,2",
        "True",
        "pi pi",
        "pi()",
        "lambda: 1",
        "'1'",
        "(" * 90,
        "1" * 101,
        "1 if 1 else 2",
        "2j",
        "nan",
        "inf",
    ],
)
def test_anything_else_is_no_number(text):
    with pytest.raises(ValueError, match="is not a number"):
        number(text)


@given(st.text(max_size=120))
def test_no_text_does_harm(text):
    try:
        value = number(text)
    except ValueError:
        return
    assert math.isfinite(value)
