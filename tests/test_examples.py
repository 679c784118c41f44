"""The worked examples run as their files say, and keep what they promise."""

from __future__ import annotations

import json
import re
import shutil
import subprocess
import sys
from pathlib import Path

import h5py
import numpy as np
import pytest

from fieldmover.cli import main
from fieldmover.jobs.demo import job_text

EXAMPLES = Path(__file__).resolve().parent.parent / "examples"
FOLDERS = sorted(path.name for path in EXAMPLES.iterdir() if path.is_dir())


@pytest.fixture
def there(tmp_path, monkeypatch):
    """Copy an example, write its snapshot and go there."""

    def there(name: str) -> Path:
        folder = tmp_path / name
        shutil.copytree(EXAMPLES / name, folder)
        monkeypatch.chdir(folder)
        monkeypatch.setenv("PYTHONPATH", str(EXAMPLES.parent))
        subprocess.run([sys.executable, "make_snapshot.py"], check=True)
        return folder

    return there


def figures(folder: Path) -> dict:
    return json.loads((folder / "report.json").read_text())


def test_the_list_names_every_example():
    text = (EXAMPLES / "README.md").read_text()
    assert [match for match in re.findall(r"^\| \[([\w-]+)\]", text, re.MULTILINE)] == [
        "hand-over",
        "finer-grid",
        "gate",
    ]
    assert set(FOLDERS) == {"hand-over", "finer-grid", "gate"}
    assert (EXAMPLES / "ring.toml").read_text() == job_text()


def test_hand_over(there):
    folder = there("hand-over")
    assert main(["move", "job.toml", "--quiet"]) == 0
    with h5py.File("box.h5") as file:
        assert file["Bx"].shape == (32, 32, 29)
    assert Path("box.xdmf").exists()
    report = figures(folder / "box-report")
    assert set(report["regions"]) == {"crest", "midst"}
    assert {picture["plane"] for picture in report["pictures"]} == {"y = 0", "x = 2"}
    assert report["time"] == 3.0


def test_finer_grid(there):
    there("finer-grid")
    assert main(["move", "job.toml", "--quiet"]) == 0
    with h5py.File("tube.h5") as old, h5py.File("tube-fine.h5") as new:
        for axis, name in enumerate(("bx", "by", "bz")):
            coarse, fine = old[name][()], new[name][()]
            fine = fine[tuple(slice(None, None, 2) if d == axis else slice(None) for d in range(3))]
            for d in {0, 1, 2} - {axis}:
                fine = 0.5 * (np.take(fine, range(0, 48, 2), d) + np.take(fine, range(1, 48, 2), d))
            assert np.abs(fine - coarse).max() < 1e-12 * max(np.abs(coarse).max(), 1)


def test_gate(there, monkeypatch):
    folder = there("gate")
    monkeypatch.setenv("GITHUB_STEP_SUMMARY", str(folder / "steps.md"))
    commands = re.findall(r"- run: fieldmover (.*)", (folder / "workflow.yml").read_text())
    assert [command.split()[0] for command in commands] == ["move", "check"]
    for command in commands:
        assert main(command.split()) == 0
    assert (folder / "steps.md").read_text().count("within limits") == 2
    assert (folder / "report" / "report.xml").exists()
    with h5py.File("loops-box.h5", "r+") as file:
        file["Bz"][12, 12, 16] *= 1.001
    assert main(commands[1].split()) == 3
    assert "limits exceeded: divergence" in (folder / "steps.md").read_text().replace("\\", "")
