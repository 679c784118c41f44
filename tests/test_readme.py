"""README.md: its Python and its job file run, links lead somewhere, exit statuses are those of the code."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path

import h5py
import numpy as np
import pytest

from fieldmover import errors
from fieldmover.cli import main
from fieldmover.jobs.load import _table_at

ROOT = Path(__file__).resolve().parent.parent
README = (ROOT / "README.md").read_text(encoding="utf-8")


def block(language: str) -> str:
    found = re.findall(rf"```{language}\n(.*?)```", README, flags=re.DOTALL)
    assert len(found) == 1
    return found[0]


def test_the_python_example_runs(capsys):
    names: dict = {}
    exec(block("python"), names)
    assert float(capsys.readouterr().out) < 4e-15
    # The moved dipole against the formula, near the equator where the source's cells are best.
    x, y, z = names["target"].centres()
    r = np.sqrt(x**2 + y**2 + z**2)
    there = (r > 1.3) & (r < 2) & (np.abs(z) < 0.3)
    exact = (2 * z**2 - x**2 - y**2) / r**5
    assert np.abs(names["bz"] - exact)[there].max() < 0.05 * np.abs(exact[there]).max()


def test_the_python_example_is_short():
    assert len(block("python").splitlines()) <= 11


def snapshot(path: Path, ghosts: int = 2) -> None:
    """A dipole and a smooth density on a full sphere, stored as the job of the README says."""
    r, theta, phi = np.geomspace(0.8, 4, 25), np.linspace(0, np.pi, 25), np.linspace(0, 2 * np.pi, 33)
    R, T, _ = np.meshgrid(*(0.5 * (q[1:] + q[:-1]) for q in (r, theta, phi)), indexing="ij")
    values = {
        "/b/r": 2 * np.cos(T) / R**3,
        "/b/theta": np.sin(T) / R**3,
        "/b/phi": 0.1 * np.sin(T) / R,
        "/rho": R**-2,
    }
    with h5py.File(path, "w") as file:
        for name, nodes in zip(("r", "theta", "phi"), (r, theta, phi), strict=True):
            file[f"/mesh/{name}"] = nodes
        for name, array in values.items():
            file[name] = np.pad(array, ghosts, mode="edge").transpose(2, 1, 0)


def test_the_job_runs_and_passes_its_limits(tmp_path):
    snapshot(tmp_path / "sphere.h5")
    job = tmp_path / "sphere-to-box.toml"
    job.write_text(block("toml"), encoding="utf-8")
    assert main(["move", str(job), "--quiet"]) == 0
    with h5py.File(tmp_path / "box.h5") as file:
        assert file["/Bx"].shape == (33, 32, 32)
        assert file["/density"][()].min() > 0
    assert main(["check", str(job), "--quiet"]) == 0


def test_every_key_that_is_shown_is_known():
    """The indented parts of job files, against the models that read them."""
    shown = 0
    for part in re.findall(r"(?:^    (?:\[|#|\w).*\n|^\n(?=    [\[\w#]))+", README, flags=re.MULTILINE):
        text = "\n".join(line[4:] for line in part.splitlines() if not line.startswith("    fieldmover "))
        if not re.search(r"^\[", text, flags=re.MULTILINE):
            continue
        for place, table in tables(tomllib.loads(text), ()):
            model = _table_at(place)
            known = {field.alias or name for name, field in model.model_fields.items()}
            free = place[-1:] in (("regions",), ("surfaces",), ("limits",), ("fluid",)) or place[-2:-1] == ("units",)
            free = free or "limits" in place or place[-1] in ("parameters", "rates", "walls") or place == ("units",)
            assert free or set(table) <= known, (place, set(table) - known)
            shown += len(table)
    assert shown > 60


def tables(values, place):
    """All tables of a TOML text with their places; regions and the like lead to the model of their entries."""
    for key, value in values.items():
        for table in value if isinstance(value, list) else [value]:
            if isinstance(table, dict):
                yield (*place, key), table
                yield from tables(table, (*place, key))


def test_links_lead_somewhere():
    targets = re.findall(r"\]\(([^)#:]+)\)", README)
    assert len(targets) > 3
    for target in targets:
        assert (ROOT / target).is_file(), target


@pytest.mark.parametrize("file", ["README.md", "DEVELOPERS.md"])
def test_named_files_exist(file):
    text = (ROOT / file).read_text(encoding="utf-8")
    for name in re.findall(r"(?:scripts|tests|examples|fieldmover)/[\w./-]*\w", text):
        assert (ROOT / name).exists(), name


def test_exit_statuses_are_those_of_the_errors():
    rows = {int(status) for status in re.findall(r"^\| (\d) \|", README, flags=re.MULTILINE)}
    kinds = [kind for kind in vars(errors).values() if isinstance(kind, type) and issubclass(kind, Exception)]
    assert rows == {0} | {kind.exit_status for kind in kinds}
