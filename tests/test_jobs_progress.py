"""What a job shows while it runs, and the formats of what it found."""

from __future__ import annotations

import io
import json
import re
import time

import pytest

from fieldmover.errors import OutputError
from fieldmover.jobs import progress as module
from fieldmover.jobs.progress import Progress, peak_memory
from fieldmover.report.formats import short, table, to_json, write_json


class Terminal(io.StringIO):
    def isatty(self):
        return True


def run(stream, quiet=False):
    progress = Progress(2, quiet, stream)
    for name in ("reading", "moving"):
        with progress.stage(name):
            time.sleep(0.06)
    return progress, stream.getvalue()


def test_plain_lines_in_a_log(monkeypatch):
    monkeypatch.setattr(module, "STILL", 0.04)
    progress, shown = run(io.StringIO())
    assert [stage.name for stage in progress.stages] == ["reading", "moving"]
    assert all(0.05 < stage.seconds < 1 for stage in progress.stages)
    lines = shown.splitlines()
    assert re.fullmatch(r"1/2 still reading  0\.\d s  \d\.\d\d GiB", lines[0])
    assert re.fullmatch(r"1/2 reading  0\.\d s  \d\.\d\d GiB", lines[1])
    assert lines[-1].startswith("2/2 moving")
    assert "\r" not in shown
    assert "\x1b" not in shown


def test_one_line_on_a_terminal(monkeypatch):
    monkeypatch.setattr(module, "REDRAW", 0.02)
    _, shown = run(Terminal())
    assert shown.count("\n") == 1
    assert shown.endswith("\n")
    assert "[##########..........] 2/2 moving" in shown
    assert "[####################] 2/2 moving" in shown


def test_nothing_when_quiet():
    progress, shown = run(io.StringIO(), quiet=True)
    assert shown == ""
    assert len(progress.stages) == 2


def test_a_stage_that_fails_is_not_finished():
    progress = Progress(1, stream=io.StringIO())
    with pytest.raises(KeyError), progress.stage("reading"):
        raise KeyError
    assert progress.stages == []


def test_peak_memory_is_in_bytes():
    assert 2**20 < peak_memory() < 2**40


def test_a_report_never_holds_a_number_that_is_none(tmp_path):
    for bad in (float("nan"), float("inf")):
        with pytest.raises(ValueError, match="not JSON compliant"):
            to_json({"a": bad})
    path = write_json(tmp_path, {"title": "Größe", "a": [1, 2.5, None]})
    assert json.loads(path.read_text(encoding="utf-8")) == {"title": "Größe", "a": [1, 2.5, None]}
    with pytest.raises(OutputError, match=r"report\.json: cannot be written"):
        write_json(tmp_path / "none", {})


def test_the_table_lines_up():
    text = table([("a", "1", ""), ("longer", "22", "x")], ("", "one", "two"))
    assert text.splitlines() == ["        one  two", "a         1", "longer   22    x"]
    assert [short(value) for value in (1e5, 99999, 1e-3, 9e-4, -2.5)] == [
        "1.000e+05",
        "99999",
        "0.001",
        "9.000e-04",
        "-2.5",
    ]
