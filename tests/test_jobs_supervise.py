"""The parent process: whatever becomes of the child, there is a message, a status and no rest."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time

import pytest

from fieldmover.jobs.supervise import run_in_child


@pytest.fixture
def child(tmp_path, monkeypatch):
    """Run some lines of Python as a supervised child."""
    monkeypatch.setenv("PYTHONPATH", os.pathsep.join([str(tmp_path), os.getcwd()]))

    def child(script: str, *arguments: str) -> int:
        (tmp_path / "the_child.py").write_text(script)
        return run_in_child("the_child", list(arguments))

    return child


@pytest.mark.parametrize("status", [0, 2, 5])
def test_the_status_is_that_of_the_child(child, status):
    assert child("import sys; sys.exit(int(sys.argv[1]))", str(status)) == status


@pytest.mark.parametrize(("number", "status", "words"), [
    (signal.SIGSEGV, 1, "died by SIGSEGV"),
    (signal.SIGABRT, 1, "died by SIGABRT"),
    (signal.SIGKILL, 7, "not enough memory"),
])  # fmt: skip
def test_a_violent_death_is_told_and_cleaned_up_after(child, tmp_path, capfd, number, status, words):
    script = (
        "import os, sys\n"
        "from pathlib import Path\n"
        "from fieldmover.jobs.supervise import note\n"
        "path = Path(sys.argv[1])\n"
        "path.touch()\n"
        "note(path)\n"
        "import resource; resource.setrlimit(resource.RLIMIT_CORE, (0, 0))\n"
        "os.kill(os.getpid(), int(sys.argv[2]))\n"
    )
    partial = tmp_path / "out.h5.part-1"
    assert child(script, str(partial), str(int(number))) == status
    assert words in capfd.readouterr().err
    assert not partial.exists()


def test_without_a_parent_there_is_nobody_to_tell(monkeypatch, tmp_path):
    monkeypatch.delenv("FIELDMOVER_NOTES", raising=False)
    from fieldmover.jobs.supervise import note

    note(tmp_path / "out.h5.part-1")
    assert os.listdir(tmp_path) == []


@pytest.mark.parametrize(
    ("number", "status"), [(signal.SIGTERM, 143), (signal.SIGINT, 130), (signal.SIGHUP, 129)]
)
@pytest.mark.parametrize("stubborn", [False, True])
def test_signals_to_the_parent_end_the_child(tmp_path, number, status, stubborn):
    ignoring = "signal.signal(signal.SIGTERM, signal.SIG_IGN)\n" if stubborn else ""
    (tmp_path / "the_child.py").write_text(
        "import signal, sys, time\n"
        "from pathlib import Path\n"
        "from fieldmover.jobs.supervise import note\n"
        f"{ignoring}"
        "path = Path(sys.argv[1])\n"
        "path.write_text('half')\n"
        "note(path)\n"
        "time.sleep(60)\n"
    )
    script = (
        "import sys\n"
        "from fieldmover.jobs import supervise\n"
        "supervise.PATIENCE = 0.3\n"
        "sys.exit(supervise.run_in_child('the_child', sys.argv[1:]))\n"
    )
    partial = tmp_path / "out.h5.part-1"
    path = os.pathsep.join([str(tmp_path), os.getcwd()])
    parent = subprocess.Popen(
        [sys.executable, "-c", script, str(partial)],
        env={**os.environ, "PYTHONPATH": path},
        start_new_session=True,
    )
    wait_for(lambda: partial.exists() and partial.read_text())
    time.sleep(0.1)
    started = time.monotonic()
    parent.send_signal(number)
    assert parent.wait(10) == status
    assert time.monotonic() - started < 5
    assert not partial.exists()


def wait_for(condition, seconds=10.0):
    end = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < end, "waited in vain"
        time.sleep(0.02)
