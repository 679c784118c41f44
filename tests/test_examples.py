"""The worked examples run as their files say, and keep what they promise."""

from __future__ import annotations

import importlib.util
import json
import re
import shutil
import subprocess
import sys
from functools import partial
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
        "large-target",
    ]
    assert set(FOLDERS) == {"hand-over", "finer-grid", "gate", "large-target"}
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


def circulations(axis: int, nodes: list, to_cartesian) -> np.ndarray:
    """Of the potential (0, x / 2, exp(-4 (x^2 + y^2))) along the edges of a warped grid, by Gauss's rule."""
    low, high = nodes[axis][:-1], nodes[axis][1:]
    across = np.zeros((3, 1, 1, 1))
    across[axis] = 1e-6
    total = 0.0
    for point, weight in zip(*np.polynomial.legendre.leggauss(6), strict=True):
        at = [*nodes]
        at[axis] = 0.5 * (low + high) + 0.5 * (high - low) * point
        q = np.stack(np.meshgrid(*at, indexing="ij"))
        x, y, _ = to_cartesian(*q)
        ahead, behind = (np.stack(to_cartesian(*(q + sign * across))) for sign in (1, -1))
        a = np.stack([0 * x, 0.5 * x, np.exp(-4 * (x**2 + y**2))])
        length = 0.5 * (high - low) / 2e-6
        total = total + weight * (a * (ahead - behind)).sum(axis=0) * np.expand_dims(
            length, [d for d in (0, 1, 2) if d != axis]
        )
    return total


def test_finer_grid(there):
    """Fluxes through the warped faces against the potential that made the snapshot, integrated round each face."""
    folder = there("finer-grid")
    assert main(["move", "job.toml", "--quiet"]) == 0
    assert figures(folder / "tube-fine-report")["fields"]["stored"]["divergence"]["linf"] < 1e-14
    space: dict = {}
    exec((folder / "warp.py").read_text(), space)
    q, z = np.linspace(-0.65, 0.65, 33), np.linspace(-1, 1, 33)
    nodes = [q, q, z]
    a1, a2, a3 = (
        circulations(axis, nodes, partial(space["to_cartesian"], winding=0.5, crowding=0.4)) for axis in range(3)
    )
    exact = (
        np.diff(a3, axis=1) - np.diff(a2, axis=2),
        np.diff(a1, axis=2) - np.diff(a3, axis=0),
        np.diff(a2, axis=0) - np.diff(a1, axis=1),
    )
    with h5py.File("tube-fine.h5") as file:
        for axis, (name, truth) in enumerate(zip(("b1", "b2", "b3"), exact, strict=True)):
            b = file[name][()]
            for other in {0, 1, 2} - {axis}:
                b = b * np.expand_dims(np.diff(nodes[other]), [d for d in (0, 1, 2) if d != other])
            assert np.abs(b - truth).max() < 2e-3 * np.abs(truth).max()
        # In a plane of constant z the field along z is 1/2 and a face is a rectangle.
        width = np.diff(q * (0.6 + 0.4 * (q / 0.65) ** 2))
        assert exact[2][:, :, 7] == pytest.approx(0.5 * np.outer(width, width), rel=1e-9)
        assert file["VTKHDF"].attrs["Type"] == b"StructuredGrid"
    assert Path("tube-fine.xdmf").exists()


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


def test_large_target(tmp_path):
    spec = importlib.util.spec_from_file_location("large_target", EXAMPLES / "large-target" / "run.py")
    example = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(example)
    assert example.main(20, tmp_path / "box.h5") < 1e-15
    with h5py.File(tmp_path / "box.h5") as file:
        assert file["flux1"].shape == (21, 20, 20)
        assert file["flux2"][:].any()
