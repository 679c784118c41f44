"""Guesses about unknown files, and a look ahead at what a job would do."""

from __future__ import annotations

import json
import re
import tomllib

import h5py
import numpy as np
import pytest

from fieldmover.jobs.demo import job_text, write_snapshot
from fieldmover.jobs.guess import Guess, guess
from fieldmover.jobs.load import load
from fieldmover.jobs.survey import UNKNOWN, survey
from fieldmover.jobs.survey import job_text as written
from fieldmover.jobs.worker import Options, work
from fieldmover.snapshots.gate import Item, Snapshot
from fieldmover.snapshots.layout import Layout, staggering


def seen(arrays: dict[str, np.ndarray]) -> Guess:
    items = [Item(name, np.shape(a), str(np.asarray(a).dtype), None) for name, a in arrays.items()]
    return guess(items, lambda name: np.asarray(arrays[name], dtype=float))


def stored(at, names, cells, order="q1 q2 q3", ghosts=(0, 0, 0)):
    """Three components as a file would hold them."""
    layout = Layout(order, ghosts)
    return {
        name: np.zeros(layout.stored_shape(tuple(np.add(cells, staggering(at, d))))) for d, name in enumerate(names)
    }


X, Y, Z = np.linspace(0, 1, 7), np.linspace(0, 1, 9), np.linspace(0, 1, 12)
CELLS = (6, 8, 11)


@pytest.mark.parametrize("order", ["q1 q2 q3", "q3 q2 q1", "q2 q3 q1"])
@pytest.mark.parametrize("at", ["faces", "cells"])
@pytest.mark.parametrize("ghosts", [(0, 0, 0), (2, 2, 1)])
@pytest.mark.parametrize("centres", [False, True])
def test_layouts_are_read_from_shapes(order, at, ghosts, centres):
    axes = [0.5 * (q[1:] + q[:-1]) if centres else q for q in (X, Y, Z)]
    names = ("/bx", "/by", "/bz")
    found = seen({**dict(zip(("/x", "/y", "/z"), axes, strict=True)), **stored(at, names, CELLS, order, ghosts)})
    assert (found.kind, found.order, found.at, found.centres) == ("cartesian", order, at, centres)
    assert tuple(found.ghosts) == ghosts
    assert found.magnetic == names
    sure = (
        "likely" if any(ghosts) and at == "cells" else "sure"
    )  # more ghosts on one axis and fewer on another would fit too
    assert ("axes as stored", sure) in [reason[:2] for reason in found.reasons]


def test_equal_lengths_leave_the_order_open():
    found = seen({"/x": X, "/y": X, "/z": X, **stored("cells", ("/b/x", "/b/y", "/b/z"), (6, 6, 6))})
    (how,) = [reason for reason in found.reasons if reason[0] == "axes as stored"]
    assert how[1] == "guess"
    assert "would fit too" in how[2]
    assert found.magnetic == ("/b/x", "/b/y", "/b/z")


def test_a_vector_potential():
    found = seen({"/x1f": X, "/x2f": Y, "/x3f": Z, **stored("edges", ("/A1", "/A2", "/A3"), CELLS)})
    assert (found.potential, found.magnetic, found.kind) == (True, ("/A1", "/A2", "/A3"), None)
    assert found.axes == ["/x1f", "/x2f", "/x3f"]


@pytest.mark.parametrize("layers", [0, 2])
def test_ghosts_that_angles_show(layers):
    def longer(start, stop, cells):
        step = (stop - start) / cells
        return np.linspace(start - layers * step, stop + layers * step, cells + 2 * layers + 1)

    axes = {"/R": longer(1, 2, 5), "/phi": longer(0, 2 * np.pi, 8), "/z": longer(-1, 1, 6)}
    cells = (5 + 2 * layers, 8 + 2 * layers, 6 + 2 * layers)
    found = seen({**axes, **stored("cells", ("/B_R", "/B_phi", "/B_z"), cells)})
    assert found.kind == "cylindrical"
    assert found.ghosts == [layers] * 3


def test_ghosts_that_an_attribute_tells():
    arrays = {
        "/x": X,
        "/y": Y,
        "/z": Z,
        "/mesh@nghost": np.array(2),
        **stored("cells", ("/b1", "/b2", "/b3"), CELLS),
    }
    assert seen(arrays).ghosts == [2, 2, 2]


def test_what_is_left_out_is_named():
    arrays = {"/x": X, "/y": Y, "/z": Z, **stored("cells", ("/b/x", "/b/y", "/b/z"), CELLS)}
    arrays |= {"/rho": np.zeros(CELLS), "/eint": np.zeros(CELLS), "/mask": np.zeros((2, 2, 2))}
    (said,) = [why for what, _, why in seen(arrays).reasons if what == "left out"]
    assert said.startswith("/eint: ")
    del arrays["/eint"]
    assert "left out" not in [what for what, *_ in seen(arrays).reasons]


def test_what_viewers_see_is_not_taken_for_the_state():
    arrays = {"/x": X, "/y": Y, "/z": Z, **stored("cells", ("/b/x", "/b/y", "/b/z"), CELLS)}
    arrays |= {"/VTKHDF/CellData/density": np.zeros(CELLS), "/density": np.zeros(CELLS)}
    found = seen(arrays)
    assert found.density == "/density"
    assert "left out" not in [what for what, *_ in found.reasons]


def test_names_cannot_break_out_of_a_comment(tmp_path):
    found = Guess(magnetic=("/bx", "/by", "/bz"))
    found.say("left out", "sure", '/a\n[limits]\ndivergence = 9\r# "')
    text = written(tmp_path / "a\nb\U0001f9f2.h5", tmp_path / "job.toml", found)
    job = tomllib.loads(text)
    assert job["limits"]["divergence"] == 1e-12
    assert job["source"]["file"] == "a\nb\U0001f9f2.h5"


def test_a_file_of_nothing_that_is_known(tmp_path):
    path = tmp_path / "odd.h5"
    with h5py.File(path, "w") as file:
        file["table"] = np.zeros((4, 5))
        file["words"] = "text"
        file["elsewhere"] = h5py.ExternalLink("other.h5", "/x")
    said = survey(path, tmp_path / "job.toml")
    assert "/table" in said
    assert "refused: its type is object" in said
    assert "elsewhere" not in said
    assert "magnetic field (guess): no three three-dimensional datasets" in said
    assert (tmp_path / "job.toml").read_text().count(UNKNOWN) > 5


def test_the_job_for_the_demo_runs_when_the_marks_are_filled_in(tmp_path, capsys):
    write_snapshot(tmp_path / "ring.h5", (24, 16, 32))
    job = tmp_path / "job.toml"
    assert work(Options("survey", str(tmp_path / "ring.h5"), job=str(job))) == 0
    said = capsys.readouterr().out
    for words in (
        "axes as stored (sure): q3 q2 q1",
        "ghosts (likely): [3, 3, 3]",
        "grid (likely): spherical",
    ):
        assert words in said
    text = job.read_text()
    assert "# ghosts (likely): [3, 3, 3]: angles reach beyond their range" in text
    assert work(Options("move", str(job), quiet=True)) == 2
    told = capsys.readouterr().err
    places = [count for count, line in enumerate(text.splitlines(), 1) if UNKNOWN in line]
    assert [int(n) for n in re.findall(r"^  line (\d+):", told, re.MULTILINE)] == places
    nodes = "[" + "{ from = -6.5, to = 6.5, cells = 16 }, " * 3 + "]"
    for mark, value in {"basis": '"physical"', "nodes": nodes, "unit": '"gaussian"'}.items():
        text = text.replace(f'{mark} = "{UNKNOWN}"', f"{mark} = {value}")
    assert UNKNOWN not in text
    job.write_text(text)
    extra = ('move.outside="least energy"', "limits.energy_change=0.2")
    assert work(Options("move", str(job), quiet=True, changes=extra)) == 0
    (tmp_path / "demo.toml").write_text(job_text().replace("cells = 128", "cells = 16"))
    assert work(Options("move", str(tmp_path / "demo.toml"), quiet=True, changes=extra[1:])) == 0
    names = ("ring-moved-report", "ring-cartesian-report")
    found = [json.loads((tmp_path / name / "report.json").read_text()) for name in names]
    assert found[0]["fields"]["source"] == found[1]["fields"]["source"]
    assert found[0]["fluid"]["density"]["source"] == found[1]["fluid"]["density"]["source"]


def test_a_job_is_not_replaced_unasked(tmp_path, capsys):
    write_snapshot(tmp_path / "ring.h5", (4, 4, 4))
    (tmp_path / "job.toml").write_text("mine")
    options = {"command": "survey", "path": str(tmp_path / "ring.h5"), "job": str(tmp_path / "job.toml")}
    assert work(Options(**options)) == 2
    assert "exists; give --overwrite" in capsys.readouterr().err
    assert work(Options(**options, overwrite=True)) == 0
    assert work(Options("survey", str(tmp_path / "none.h5"))) == 4


def test_the_contents_of_a_file_pass_the_gate(tmp_path):
    path = tmp_path / "a.h5"
    with h5py.File(path, "w") as file:
        file["a/x"] = np.zeros((2, 3), dtype=np.float32)
        file["a"].attrs["time"] = 2.0
        file["a"].attrs["name"] = "text"
        file["b"] = file["a"]  # a second name for the same group
        file["far"] = h5py.ExternalLink("/etc/passwd", "/x")
    with Snapshot(path) as snapshot:
        found = snapshot.contents()
        assert snapshot.size("/a/x") == 24
    assert [(item.name, item.shape, item.type) for item in found] == [
        ("/a/x", (2, 3), "float32"),
        ("/a@time", (), "float64"),
    ]


# -- a look ahead -------------------------------------------------------------------------------------------


@pytest.fixture
def job(tmp_path):
    write_snapshot(tmp_path / "ring.h5", (24, 16, 32))
    path = tmp_path / "ring.toml"
    path.write_text(job_text().replace("cells = 128", "cells = 16"))
    return path


def test_a_dry_run_tells_and_does_nothing(job, capsys):
    before = sorted(job.parent.rglob("*"))
    assert work(Options("move", str(job), dry_run=True)) == 0
    said = capsys.readouterr().out
    assert sorted(job.parent.rglob("*")) == before
    for words in (
        "reads",
        "/field/b_theta",
        f"{4 * 30 * 22 * 38} bytes",
        "writes",
        "ring-cartesian.h5",
        "report.html",
    ):
        assert words in said
    assert "replaces" not in said
    assert work(Options("move", str(job), quiet=True, changes=("limits.energy_change=1",))) == 0
    written = (job.parent / "ring-cartesian.h5").stat().st_size
    capsys.readouterr()
    assert work(Options("move", str(job), dry_run=True)) == 2
    assert "exists; give --overwrite" in capsys.readouterr().err
    assert work(Options("move", str(job), dry_run=True, overwrite=True)) == 0
    said = capsys.readouterr().out
    assert said.count("replaces") == 5
    foreseen = float(re.search(r"about ([\d.]+) MB", said)[1])
    assert written / 1e6 < 1.4 * foreseen + 0.2
    assert work(Options("check", str(job), dry_run=True)) == 0
    assert "writes" in capsys.readouterr().out


def test_a_dry_run_finds_the_mistakes_that_can_be_seen(job, capsys):
    for change, status in (('source.fluid.density.data="/gas/rhoo"', 4), ('target.file="none/x.h5"', 2)):
        assert work(Options("move", str(job), dry_run=True, changes=(change,))) == status
    load(job)
    capsys.readouterr()
    assert work(Options("move", str(job), dry_run=True, report=str(job / "report"))) == 5
    assert capsys.readouterr().err.count("\n") == 1


def test_a_report_folder_that_cannot_be_made(job, capsys):
    """Root may write anywhere but into /proc."""
    assert work(Options("move", str(job), quiet=True, report="/proc/none/report")) == 5
    said = capsys.readouterr().err
    assert said.startswith("fieldmover: /proc/none/report: cannot be written")
    assert said.count("\n") == 1
    assert not (job.parent / "ring-cartesian.h5").exists()
