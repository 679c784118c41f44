"""Limits of every sort, regions, references, limits made from a good run, and what is refused about them."""

from __future__ import annotations

import json
import os
import re
import tomllib

import h5py
import numpy as np
import pytest

from fieldmover.errors import JobError
from fieldmover.jobs.demo import job_text, write_snapshot
from fieldmover.jobs.schema import Within
from fieldmover.jobs.verdicts import limits_table, verdicts
from fieldmover.jobs.worker import Options, work

pytestmark = pytest.mark.usefixtures("no_pictures")

JOB = job_text().replace("cells = 128", "cells = 16")
JOB = JOB[: JOB.index("[limits]")]


@pytest.fixture(scope="module")
def moved(tmp_path_factory):
    """A small hand-over that was done and is good, with its report."""
    folder = tmp_path_factory.mktemp("good")
    write_snapshot(folder / "ring.h5", (24, 16, 32))
    (folder / "job.toml").write_text(JOB)
    assert work(Options("move", str(folder / "job.toml"), report=str(folder / "good"), quiet=True)) == 0
    return folder


@pytest.fixture
def check(moved, tmp_path, capsys):
    """Check with other tables at the end of the job: exit status, what is said, report."""

    def check(tables: str, **options):
        job = moved / "other.toml"
        job.write_text(JOB + tables)
        status = work(Options("check", str(job), report=str(tmp_path / "report"), quiet=True, **options))
        shown = capsys.readouterr()
        path = tmp_path / "report" / "report.json"
        return status, shown.out + shown.err, json.loads(path.read_text()) if path.exists() else None

    return check


def test_limits_on_any_figure(check):
    status, said, report = check("""
        [limits]
        stored.energy.total = 1e-3
        "source.divergence.l1" = 1
        coverage.volume = 1
        fluid.density.change = 1e-10
        regions.ring.energy_change = 1e-9
        [regions]
        ring = { radii = [3, 5] }
    """)
    assert status == 3
    assert "limits exceeded: stored.energy.total, regions.ring.energy_change" in said
    assert [limit["passed"] for limit in report["limits"]] == [False, True, True, True, False]


def test_what_a_check_does_not_measure_fails(check):
    status, said, _ = check("[limits]\nenergy_lost.cleaning = 1\nmoved.energy.total = 1e9\n")
    assert status == 3
    assert "energy_lost.cleaning (not measured), moved.energy.total (not measured)" in said


def test_limits_against_a_report_made_before(check):
    table = "[limits]\nstored.energy.total = { within = 1e-12, of = 'good/report.json' }\n"
    status, said, report = check(table)
    assert status == 0
    (limit,) = report["limits"]
    assert limit["found"] == 0
    assert limit["reference"] == {"report": "good/report.json", "value": limit["value"]}
    assert "within 1e-12 of" in said


def test_a_change_against_a_report(tmp_path):
    report = {
        "schema": {"name": "fieldmover report", "version": 2},
        "figures": {"energy_change": 2.0},
        "fields": {},
    }
    report |= {"fluid": {}, "regions": {"core": {"energy": 0.0}}, "coverage": None}
    (tmp_path / "old.json").write_text(json.dumps(report))

    def passed(name, value, within):
        limit = {name: Within(within=within, of="old.json")}
        (found,) = verdicts({name: value}, limit, tmp_path)
        return found["passed"]

    assert passed("energy_change", 1.9, 0.06)
    assert not passed("energy_change", 1.9, 0.04)
    assert not passed("energy_change", None, 1e9)
    assert passed("regions.core.energy", 0.0, 0.0)
    assert not passed("regions.core.energy", 1e-9, 1e9)  # no relative change against 0


@pytest.mark.parametrize(
    ("table", "words"),
    [
        ("divergense = 1", "limits.divergense: there is no such figure; the nearest is 'divergence'"),
        ("regions.rign.energy = 1", "there is no such figure; the nearest is 'regions.ring.energy'"),
        ("fluid.velocity.change = 1", "fluid.velocity.change: there is no such figure"),
        ("divergence = { within = -1, of = 'x' }", "limits.divergence.within: found -1"),
        (
            "divergence = { within = 1 }",
            "limits.divergence.of: missing; give the report.json to compare with",
        ),
        ("divergence = { within = 1, of = 'none.json' }", "none.json: no such file"),
        ("divergence = { within = 1, of = 'job.toml' }", "job.toml: not a report"),
        ("divergence = { within = 1, of = 'list.json' }", "list.json: found JSON that is no report"),
        (
            "energy_change = { within = 1, of = 'good/report.json' }\nmoved.strength.largest = 'x'",
            "'x' is not a number",
        ),
        (
            "coverage.volume = 1\n[regions.far]\nradius = 1\ncentre = [90, 0, 0]",
            "regions.far: shell of radii",
        ),
        ("coverage.volume = 1\n[regions.far]\nradius = 1\nradii = [1, 2]", "give from and to (a box)"),
        ("coverage.volume = 1\n[regions.far]\nfrom = [1, 2, 3]", "give from and to (a box)"),
        ("coverage.volume = 1\n[regions.far]\nradii = [2, 1]", "must increase"),
        ("coverage.volume = 1\n[report]\nplanes = ['y = 9']", "report.planes: y = 9 misses the grid"),
        ("coverage.volume = 1\n[report]\nplanes = ['q = 9']", 'give a plane like "y = 0"'),
    ],
)
def test_what_is_refused(check, moved, table, words):
    (moved / "list.json").write_text("[]")
    status, said, report = check(f"[regions]\nring = {{ radii = [3, 5] }}\n[limits]\n{table}\n")
    assert status == 2
    assert words in said
    assert report is None


def test_planes_of_the_report(check, pictures):
    _, _, report = check('[report]\nplanes = ["x = 1", "z = -2.5"]\n')
    assert [picture["plane"] for picture in report["pictures"]] == ["x = 1"] * 5 + ["z = -2.5"] * 5


# -- limits made from a good run ----------------------------------------------------------------------------


def test_limits_made_from_a_good_run_pass_there_and_fail_on_a_worse_file(check, moved, tmp_path):
    status, said, _ = check("[regions]\nring = { radii = [3, 5] }\n", make_limits=0.1)
    assert status == 0
    assert f"limits: {tmp_path / 'report' / 'limits.toml'}" in said
    table = (tmp_path / "report" / "limits.toml").read_text()
    assert str(tmp_path) not in table  # files are named from the folder of the job
    limits = tomllib.loads(table)["limits"]
    assert limits["divergence"] == 1e-14
    assert limits["stored"]["energy"]["total"]["within"] == 0.1
    assert "energy_change" in limits["regions"]["ring"]
    good = tmp_path / "good-limits.toml"
    kept = os.path.relpath(tmp_path / "kept.json", moved)
    good.write_text(re.sub(r'of = "[^"]*"', f'of = "{kept}"', table))
    (tmp_path / "kept.json").write_bytes((tmp_path / "report" / "report.json").read_bytes())
    tables = "[regions]\nring = { radii = [3, 5] }\n" + good.read_text()
    status, said, report = check(tables)
    assert (status, len(report["limits"]) > 40) == (0, True), said
    with h5py.File(moved / "ring-cartesian.h5", "r+") as file:
        before = file["By"][()]
        file["By"][...] = before * 1.3
    try:
        status, said, _ = check(tables)
    finally:
        with h5py.File(moved / "ring-cartesian.h5", "r+") as file:
            file["By"][...] = before
    assert status == 3
    assert "regions.ring.energy" in said


def test_made_limits_are_rounded_up_and_leave_out_what_was_not_measured(tmp_path):
    report = {
        "figures": {"divergence": 1.234e-5, "energy_change": -0.1, "mass_change": None},
        "coverage": None,
    }
    report |= {
        "fields": {"stored": {"energy": {"total": 2.0}}},
        "fluid": {"hot gas": {"change": 2.0}},
        "regions": {},
    }
    names = ["fluid.hot gas.change", "divergence", "energy_change", "mass_change", "stored.energy.total"]
    text = limits_table(report, names, 0.5, "good/r.json")
    assert tomllib.loads(text)["limits"] == {
        "fluid.hot gas.change": 3.0,
        "divergence": 1.9e-5,
        "energy_change": 0.15,
        "stored": {"energy": {"total": {"within": 0.5, "of": "good/r.json"}}},
    }


def test_a_report_of_another_version_is_told(tmp_path):
    (tmp_path / "old.json").write_text('{"schema": {"name": "fieldmover report", "version": 1}}')
    with pytest.raises(JobError, match="a report of another version: it has no 'figures'"):
        verdicts({"divergence": 1.0}, {"divergence": Within(within=1, of="old.json")}, tmp_path)


# -- two files ----------------------------------------------------------------------------------------------


def test_a_target_against_another_run(check, moved, tmp_path):
    other = moved / "other.h5"
    other.write_bytes((moved / "ring-cartesian.h5").read_bytes())
    with h5py.File(other, "r+") as file:
        for name in ("Bx", "By", "Bz"):
            file[name][...] *= 1.25
    limits = "[limits]\nagainst.cosine = 1.000001\nagainst.normalised_error = 0.1\nagainst.energy_ratio = 1\n"
    status, said, report = check(limits, against=str(other))
    assert status == 3
    assert "limits exceeded: against.normalised_error" in said
    found = report["figures"]["against"]
    assert found["energy_ratio"] == pytest.approx(0.64)
    assert found["normalised_error"] == pytest.approx(0.2)
    energy = report["against"]["figures"]["energy.total"]
    assert energy["relative"] == pytest.approx(-0.36)
    for text in (
        said,
        (tmp_path / "report" / "report.html").read_text(),
        (tmp_path / "report" / "summary.md").read_text(),
    ):
        assert "energy.total" in text
        assert "other.h5" in text


def test_two_files_with_nothing_to_compare(check, moved):
    status, said, _ = check("", against=str(moved / "ring.h5"))
    assert status == 4
    assert "ring.h5: no dataset '/Bx'" in said
    status, said, _ = check("", against=str(moved / "ring.h5"), changes=('target.file="none.h5"',))
    assert status == 2
    assert "there is nothing to compare with" in said


# -- clean --------------------------------------------------------------------------------------------------

CLEAN = JOB.replace(JOB[JOB.index("[target.grid]") : JOB.index("[target.magnetic]")], "")
CLEAN = CLEAN.replace('at   = "faces"', 'at   = "faces"\nbasis = "physical"')
CLEAN = CLEAN.replace("velocity = [", 'velocity = { basis = "physical", data = [').replace(
    '"/vz"]', '"/vz"] }'
)


def test_clean_keeps_grid_and_fluid(tmp_path, capsys):
    write_snapshot(tmp_path / "ring.h5", (24, 16, 32))
    job = tmp_path / "job.toml"
    job.write_text(CLEAN + "[limits]\ndivergence = 1e-12\nmass_change = 1e-12\nenergy_change = 0.01\n")
    assert work(Options("clean", str(job), quiet=True)) == 0, capsys.readouterr()
    with h5py.File(tmp_path / "ring-cartesian.h5") as new, h5py.File(tmp_path / "ring.h5") as old:
        inside = (slice(3, -3),) * 3
        for one, other in (("density", "gas/rho"), ("vy", "gas/v_theta")):
            assert np.abs(new[one][()] - old[other][inside]).max() < 1e-6
        assert new["Bx"].shape == (32, 16, 25)
    report = json.loads((tmp_path / "ring-cartesian-report" / "report.json").read_text())
    assert list(report["fields"]) == ["source", "cleaned", "stored"]
    assert report["fields"]["source"]["divergence"]["linf"] > 1e-4
    assert report["figures"]["energy_lost"]["cleaning"] == pytest.approx(
        -report["figures"]["energy_change"], rel=1e-6
    )
    assert report["coverage"]["whole"] == 24 * 16 * 32
    assert work(Options("check", str(job), quiet=True)) == 0


def test_clean_and_move_want_different_jobs(tmp_path, capsys):
    write_snapshot(tmp_path / "ring.h5", (12, 8, 16))
    job = tmp_path / "job.toml"
    for text, command, words in (
        (JOB, "clean", "clean keeps the grid"),
        (CLEAN, "move", "target.grid: missing"),
    ):
        job.write_text(text)
        assert work(Options(command, str(job), quiet=True)) == 2
        assert words in capsys.readouterr().err
