"""The command line, end to end on small inputs, and every refusal with its exit status."""

from __future__ import annotations

import hashlib
import json
import os
import re
import signal
import subprocess
import sys
import time
from pathlib import Path

import h5py
import numpy as np
import pytest

import fieldmover as fm
from fieldmover.cli import main
from fieldmover.conventions.components import faces_from_flux, flux_from_faces
from fieldmover.errors import NotConverged
from fieldmover.jobs.demo import Ring, job_text, write_demo, write_snapshot
from fieldmover.jobs.worker import Options, work

pytestmark = pytest.mark.usefixtures("no_pictures")

CELLS = (24, 16, 32)
JOB = re.sub(r"cells = 128", "cells = 16", job_text()).replace("energy_change = 0.02", "energy_change = 0.2")


class Place:
    """A folder with a small snapshot and its job."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.source = folder / "ring.h5"
        self.job = folder / "ring.toml"
        self.target = folder / "ring-cartesian.h5"
        self.report = folder / "ring-cartesian-report"

    def edit(self, *changes: tuple[str, str]) -> None:
        text = self.job.read_text()
        for old, new in changes:
            assert old in text
            text = text.replace(old, new, 1)
        self.job.write_text(text)

    def change(self, name: str, where: object, value: float) -> None:
        with h5py.File(self.source, "r+") as file:
            file[name][where] = value

    def run(self, command: str = "move", **options: object) -> int:
        return work(Options(command, str(self.job), quiet=True, **options))

    def refused(self, capsys, status: int, *words: str, command: str = "move", **options: object) -> None:
        """The command ends with a status, one message and nothing written."""
        before = self.contents()
        assert self.run(command, **options) == status
        shown = capsys.readouterr()
        assert shown.out == ""
        assert shown.err.startswith("fieldmover: ")
        assert shown.err.count("\n") == 1
        for word in words:
            assert word in shown.err
        assert self.contents() == before

    def contents(self) -> dict[str, str]:
        files = (path for path in self.folder.rglob("*") if path.is_file())
        return {str(path): hashlib.sha256(path.read_bytes()).hexdigest() for path in files}

    def figures(self) -> dict:
        return json.loads((self.report / "report.json").read_text())


@pytest.fixture(scope="module")
def small_snapshot(tmp_path_factory):
    path = tmp_path_factory.mktemp("snapshot") / "ring.h5"
    write_snapshot(path, CELLS)
    return path.read_bytes()


@pytest.fixture
def place(tmp_path, small_snapshot):
    place = Place(tmp_path)
    place.source.write_bytes(small_snapshot)
    place.job.write_text(JOB)
    return place


# -- what works ---------------------------------------------------------------------------------------------


def test_a_hand_over(place, capsys, pictures):
    source = place.source.read_bytes()
    assert place.run() == 0
    shown = capsys.readouterr().out
    for words in (
        "divergence, largest",
        "magnetic energy, covered part",
        "total of density",
        "within limits",
    ):
        assert words in shown
    assert place.source.read_bytes() == source
    assert sorted(os.listdir(place.folder)) == [
        "ring-cartesian-report",
        "ring-cartesian.h5",
        "ring.h5",
        "ring.toml",
    ]
    files = os.listdir(place.report)
    words = sorted(f for f in files if not f.endswith(".png"))
    assert words == ["report.html", "report.json", "report.xml", "summary.md"]
    assert {"b-source-y-0.png", "b-target-as-stored-y-0.png", "divergence-source-y-0.png"} <= set(files)

    report = place.figures()
    assert report["verdict"] == "within limits"
    assert [limit["passed"] for limit in report["limits"]] == [True, True, True]
    fields = report["fields"]
    assert list(fields) == ["source", "cleaned", "moved", "stored"]
    assert fields["source"]["divergence"]["linf"] > 1e-3
    for step in ("cleaned", "moved", "stored"):
        assert fields[step]["divergence"]["linf"] < 4e-15
    assert report["files"]["source"]["sha256"] == hashlib.sha256(source).hexdigest()
    assert report["job"]["text"] == JOB
    assert 0.1 < report["coverage"]["volume"] < 1
    assert report["fluid"]["density"]["change"] < 1e-12
    assert all(picture["text"] for picture in report["pictures"])


def test_the_output_as_another_program_reads_it(place):
    place.run()
    with h5py.File(place.target) as file:
        bx, by, bz = (file[name][()] for name in ("Bx", "By", "Bz"))
        assert (bx.shape, by.shape, bz.shape) == ((16, 16, 17), (16, 17, 16), (17, 16, 16))
        net = np.diff(bx, axis=2) + np.diff(by, axis=1) + np.diff(bz, axis=0)
        assert np.abs(net).max() < 1e-14 * np.abs(bx).max()
        assert file["Bx"].attrs["units"] == b"heaviside-lorentz"
        assert file["Bx"].attrs["location"] == b"faces normal to q1"
        assert file["Bx"].attrs["axis_order"] == b"q3 q2 q1"
        assert file["density"].shape == (16, 16, 16)
        assert file["density"][()].min() > 0
        assert all(file[name].fletcher32 for name in ("Bx", "vz", "fieldmover/report"))
        assert np.allclose(file["fieldmover/nodes/q1"], np.linspace(-6.5, 6.5, 17))
        assert file["fieldmover/job"][()].tobytes().decode() == JOB
        report = json.loads(file["fieldmover/report"][()].tobytes())
        assert report["fields"]["stored"]["divergence"]["linf"] < 4e-15
    assert b"GCOL" not in place.target.read_bytes()[: 2**16]


def test_the_field_that_arrives(place):
    """Against the scene in closed form, in Heaviside-Lorentz units, away from the star and the walls."""
    place.edit(
        ('outside = "least energy"', 'outside = "refuse"'),
    )
    text = place.job.read_text()
    text = re.sub(
        r"\{ from = -6.5, to = 6.5, cells = 16 \},", "{ from = 3, to = 5, cells = 8 },", text, count=1
    )
    place.job.write_text(re.sub(r"from = -6.5, to = 6.5, cells = 16", "from = -1, to = 1, cells = 8", text))
    write_snapshot(place.source, (48, 48, 96))
    limit = "limits.divergence=0.01"  # means over cells keep the flux of no face
    assert place.run(changes=('target.magnetic.at="cells"', limit)) == 0
    with h5py.File(place.target) as file:
        found = np.stack([file[name][()].T for name in ("Bx", "By", "Bz")])
        velocity = np.stack([file[name][()].T for name in ("vx", "vy", "vz")])
        density = file["density"][()].T
    grid = fm.cartesian_grid(np.linspace(3, 5, 9), np.linspace(-1, 1, 9), np.linspace(-1, 1, 9))
    x = grid.centres()
    wanted = Ring().field(x) / np.sqrt(4 * np.pi)
    assert np.abs(found - wanted).max() < 0.03 * np.abs(wanted).max()
    assert np.abs(velocity - Ring().velocity(x)).max() < 0.02
    assert np.abs(density - Ring().density(x)).max() < 0.03


@pytest.mark.parametrize("precision", ["double", "single"])
def test_check_measures_what_was_stored(place, capsys, precision):
    limits = ("limits.divergence=1e-5", "limits.mass_change=1e-5", f'target.precision="{precision}"')
    assert place.run(changes=limits) == 0
    moved = place.figures()
    before = place.contents()
    capsys.readouterr()
    assert place.run("check", report=str(place.folder / "again"), changes=limits) == 0
    assert "within limits" in capsys.readouterr().out
    after = {name: text for name, text in place.contents().items() if "/again/" not in name}
    assert after == before
    checked = json.loads((place.folder / "again" / "report.json").read_text())
    for step in ("source", "stored"):
        assert checked["fields"][step] == moved["fields"][step]
    assert checked["energy_covered"]["stored"] == moved["energy_covered"]["stored"]
    assert checked["fluid"] == moved["fluid"]
    error = moved["fields"]["stored"]["divergence"]["linf"]
    assert error < 4e-15 if precision == "double" else 1e-9 < error < 1e-6


def test_check_finds_a_monopole_in_the_file(place, capsys):
    place.run()
    with h5py.File(place.target, "r+") as file:
        file["By"][8, 9, 8] += 1e-3
    capsys.readouterr()
    assert place.run("check") == 3
    assert "limits exceeded: divergence" in capsys.readouterr().out


def test_check_without_a_target_measures_the_source(place, capsys):
    assert place.run("check") == 3
    shown = capsys.readouterr().out
    assert "limits exceeded: divergence, energy_change (not measured), mass_change (not measured)" in shown


def test_a_limit_that_is_exceeded(place, capsys):
    assert place.run(changes=("limits.energy_change=1e-9",)) == 3
    assert "limits exceeded: energy_change" in capsys.readouterr().out
    assert place.target.exists()


def test_the_same_bits_for_one_and_two_threads(place):
    data = []
    for threads in (1, 2):
        assert place.run(overwrite=True, threads=threads) == 0
        with h5py.File(place.target) as file:
            data.append(
                [file[name][()].tobytes() for name in ("Bx", "By", "Bz", "density", "vx", "vy", "vz")]
            )
    fm.compute.set_threads(len(os.sched_getaffinity(0)))
    assert data[0] == data[1]


def test_a_vector_potential_needs_no_cleaning(place):
    grid = fm.cartesian_grid(*[np.linspace(-1, 1, 17)] * 3)
    pot = fm.potential_from_function(grid, lambda x, y, z: (np.sin(y), np.cos(z), np.sin(x)))
    with h5py.File(place.source, "w") as file:
        for name, edges in zip("xyz", pot.edges, strict=True):
            file[f"a{name}"] = edges / (2 / 16)
    place.job.write_text(
        "[source]\nfile = 'ring.h5'\n"
        "[source.grid]\nkind = 'cartesian'\nnodes = [" + "{ from = -1, to = 1, cells = 16 }, " * 3 + "]\n"
        "[source.magnetic]\nat = 'edges'\ndata = ['/ax', '/ay', '/az']\nunit = 1\n"
        "[target]\nfile = 'ring-cartesian.h5'\n"
        "[target.grid]\nkind = 'cartesian'\nnodes = [" + "{ from = -0.6, to = 0.5, cells = 8 }, " * 3 + "]\n"
        "[target.magnetic]\ndata = ['/Bx', '/By', '/Bz']\nunit = 1\n"
        "[limits]\ndivergence = 1e-14\n"
    )
    assert place.run() == 0
    assert place.figures()["cleaning"] is None
    target = fm.cartesian_grid(*[np.linspace(-0.6, 0.5, 9)] * 3)
    wanted = fm.curl(fm.potential_from_function(target, lambda x, y, z: (np.sin(y), np.cos(z), np.sin(x))))
    with h5py.File(place.target) as file:
        for name, flux in zip(("Bx", "By", "Bz"), wanted.faces, strict=True):
            assert np.abs(file[name][()] * (1.1 / 8) ** 2 - flux).max() < 1e-3 * np.abs(flux).max()


def test_a_field_that_is_zero(place):
    with h5py.File(place.source, "r+") as file:
        for name in ("b_r", "b_theta", "b_phi"):
            file[f"field/{name}"][...] = 0
    assert place.run() == 0
    assert place.figures()["energy_covered"]["stored"] == 0


TURN = '{ from = 0, to = "2 pi", cells = 32 }'
SOURCES = {
    "cartesian": ["{ from = -2, to = 2, cells = 24 }"] * 3,
    "cylindrical": ["{ from = 0, to = 2.5, cells = 20 }", TURN, "{ from = -2, to = 2, cells = 24 }"],
    "spherical": ["{ from = 0.2, to = 3, cells = 24 }", '{ from = 0, to = "pi", cells = 24 }', TURN],
}
TARGETS = {
    "cartesian": [
        "{ from = 0.6, to = 1.4, cells = 8 }",
        "{ from = -0.4, to = 0.4, cells = 8 }",
        "[-0.3, 0, 0.2]",
    ],
    "cylindrical": ["[0.6, 0.8, 1, 1.3]", "[-0.3, 0, 0.2, 0.4]", "{ from = -0.5, to = 0.5, cells = 6 }"],
    "spherical": ["[0.6, 0.8, 1, 1.3]", "[1.3, 1.4, 1.5, 1.7]", "[-0.3, 0, 0.2, 0.4]"],
}


@pytest.mark.parametrize("source", SOURCES)
@pytest.mark.parametrize("target", TARGETS)
@pytest.mark.parametrize(("basis", "densitised"), [("physical", False), ("coordinate", True)])
def test_faces_between_grids_of_every_kind(place, source, target, basis, densitised):
    """A field in closed form, stored on faces in several conventions, against its fluxes on the target."""
    place.job.write_text(
        f"[source]\nfile = 'ring.h5'\naxes = 'q2 q3 q1'\nghosts = [1, 0, 2]\n"
        f"[source.grid]\nkind = '{source}'\nnodes = [{', '.join(SOURCES[source])}]\n"
        f"[source.magnetic]\nat = 'faces'\ndata = ['/b1', '/b2', '/b3']\nunit = 0.5\n"
        f"basis = '{basis}'\ndensitised = {str(densitised).lower()}\n"
        f"[target]\nfile = 'ring-cartesian.h5'\naxes = 'q3 q1 q2'\n"
        f"[target.grid]\nkind = '{target}'\nnodes = [{', '.join(TARGETS[target])}]\n"
        f"[target.magnetic]\ndata = ['/c1', '/c2', '/c3']\nunit = 0.25\n"
        f"basis = '{basis}'\ndensitised = {str(densitised).lower()}\n"
        f"[limits]\ndivergence = 1e-13\nenergy_change = 0.02\n"
    )

    def potential(x, y, z):
        return np.sin(y) * z, 0.5 * x + np.cos(z), np.sin(x) - y

    grids = [make(kind, lines) for kind, lines in ((source, SOURCES[source]), (target, TARGETS[target]))]
    wanted = [fm.curl(fm.potential_from_function(grid, potential)) for grid in grids]
    with h5py.File(place.source, "w") as file:
        for axis, values in enumerate(faces_from_flux(wanted[0], basis, densitised)):
            padded = np.pad(values / 0.5, [(1, 1), (0, 0), (2, 2)], constant_values=np.nan)
            file[f"b{axis + 1}"] = padded.transpose(1, 2, 0)
    assert place.run() == 0
    with h5py.File(place.target) as file:
        stored = [0.25 * file[f"c{axis}"][()].transpose(1, 2, 0) for axis in (1, 2, 3)]
    found = flux_from_faces(grids[1], tuple(stored), basis, densitised)
    scale = max(np.abs(flux).max() for flux in wanted[1].faces)
    for one, two in zip(found.faces, wanted[1].faces, strict=True):
        assert np.abs(one - two).max() < 1e-2 * scale  # a wrong convention is far worse


def make(kind, lines):
    """The grid that a job's lines describe, by other means than the job's."""
    axes = []
    for line in lines:
        numbers = [
            float(word)
            for word in re.findall(
                r"-?[\d.]+", line.replace("2 pi", str(2 * np.pi)).replace("pi", str(np.pi))
            )
        ]
        axes.append(
            numbers if line.startswith("[") else np.linspace(numbers[0], numbers[1], int(numbers[2]) + 1)
        )
    return getattr(fm, f"{kind}_grid")(*axes)


# -- what is refused ----------------------------------------------------------------------------------------


def test_missing_files_and_datasets(place, capsys):
    place.edit(("/gas/rho", "/gas/rhoo"))
    place.refused(capsys, 4, "ring.h5: no dataset '/gas/rhoo'", "did you mean 'rho'?")
    place.source.unlink()
    place.refused(capsys, 4, "ring.h5: no such file")
    place.job.unlink()
    place.refused(capsys, 2, "ring.toml: no such file")


def test_a_wrong_shape(place, capsys):
    place.edit(('"q3 q2 q1"             #', '"q1 q2 q3"             #'))
    place.refused(capsys, 4, "/mesh/r", "shape (31,)")
    place.edit(('"q1 q2 q3"', '"q3 q2 q1"'), ('at    = "cells"', 'at    = "faces"'))
    place.refused(capsys, 4, "shape", "expected")


@pytest.mark.parametrize("bad", [np.nan, np.inf])
def test_values_that_are_not_finite(place, capsys, bad):
    place.change("field/b_theta", (slice(3, 5), 4, 6), bad)
    place.refused(
        capsys, 4, "'/field/b_theta' has 2 values that are NaN or infinite", "[i1, i2, i3] = [3, 1, 0]"
    )


def test_not_finite_ghosts_do_no_harm(place):
    place.change("field/b_theta", (0, 0, 0), np.nan)
    assert place.run() == 0


def test_a_negative_density(place, capsys):
    place.change("gas/rho", (5, 6, 7), -1)
    place.refused(capsys, 4, "'/gas/rho' has 1 negative values", "[4, 3, 2]")


def test_nodes_that_do_not_increase(place, capsys):
    place.change("mesh/r", 8, 0.5)
    place.refused(capsys, 4, "'/mesh/r' does not increase", "[8]")


def test_theta_outside_its_range(place, capsys):
    with h5py.File(place.source, "r+") as file:
        file["mesh/theta"][...] += 0.1
    place.refused(capsys, 4, "theta", "[0, pi]")


def test_target_nodes_that_make_no_grid(place, capsys):
    text = re.sub(r'kind  = "cartesian"', 'kind = "spherical"', place.job.read_text())
    place.job.write_text(
        text.replace("velocity = [", 'velocity = { basis = "cartesian", data = [')
        .replace('"/vz"]', '"/vz"] }')
        .replace('at   = "faces"', 'at   = "faces"\nbasis = "physical"')
    )
    place.refused(capsys, 2, "target.grid: nodes of r: they begin at -6.5, expected r > 0")


def test_a_target_outside_the_source(place, capsys):
    place.edit(('outside = "least energy"', 'outside = "refuse"'))
    place.refused(capsys, 4, "the target leaves the source")


def test_net_flux_through_the_inner_wall(place, capsys):
    with h5py.File(place.source, "r+") as file:
        file["field/b_r"][...] += 1.0
    place.refused(capsys, 4, "net magnetic flux", "through the closed inner wall")
    place.refused(capsys, 4, changes=('move.clean="never"',))


def test_an_unknown_key_with_the_nearest(place, capsys):
    place.edit(("ghosts", "ghost"))
    before = place.contents()
    assert place.run() == 2
    assert "line 9: source.ghost: unknown key (did you mean 'ghosts'?)" in capsys.readouterr().err
    assert place.contents() == before


def test_an_output_that_exists(place, capsys):
    place.target.write_text("precious")
    place.refused(capsys, 2, "exists; give --overwrite")
    assert place.run(overwrite=True) == 0
    assert h5py.is_hdf5(place.target)


@pytest.mark.parametrize("how", ["name", "dotted", "symlink", "hard link"])
def test_the_output_is_the_input(place, capsys, how):
    name = {"name": "ring.h5", "dotted": "./x/../ring.h5"}.get(how, "other.h5")
    if how == "dotted":
        (place.folder / "x").mkdir()
    elif how == "symlink":
        (place.folder / name).symlink_to(place.source)
    elif how == "hard link":
        os.link(place.source, place.folder / name)
    place.edit(('"ring-cartesian.h5"', f'"{name}"'))
    place.refused(capsys, 2, "the output is the input", overwrite=True)


def test_a_folder_that_is_not_there(place, capsys):
    place.edit(('"ring-cartesian.h5"', '"none/out.h5"'))
    place.refused(capsys, 2, "there is no folder")


def test_too_little_space_is_told_before_anything_is_read(place, capsys):
    place.source.unlink()
    text = place.job.read_text().replace("cells = 16", "cells = 20000")
    place.job.write_text(text)
    place.refused(capsys, 5, "bytes are needed", "more than are free")


def test_the_demo_spares_files_that_are_not_its_own(tmp_path, capsys):
    assert write_demo(tmp_path, cells=(8, 4, 8)) == tmp_path / "ring.toml"
    assert write_demo(tmp_path, cells=(8, 4, 8)).exists()
    (tmp_path / "ring.toml").write_text("mine")
    assert work(Options("demo", str(tmp_path), quiet=True)) == 2
    assert "ring.toml: exists and is not of this demo" in capsys.readouterr().err
    assert (tmp_path / "ring.toml").read_text() == "mine"
    write_demo(tmp_path, overwrite=True, cells=(8, 4, 8))
    assert (tmp_path / "ring.toml").read_text() == job_text()
    (tmp_path / "other").touch()
    assert work(Options("demo", str(tmp_path / "other" / "folder"), quiet=True)) == 5


def test_a_report_folder_that_cannot_be_made(place, capsys):
    place.report.write_text("in the way")
    place.refused(capsys, 5, "ring-cartesian-report is not a folder")


# -- the program --------------------------------------------------------------------------------------------


def test_help_is_quick_and_light():
    script = (
        "import sys\n"
        "from fieldmover.cli import main\n"
        "status = main(['--help'])\n"
        "heavy = {'numba', 'h5py', 'matplotlib', 'scipy', 'numpy', 'pydantic'} & set(sys.modules)\n"
        "sys.exit(f'{status} {heavy}' if status or heavy else 0)\n"
    )
    started = time.monotonic()
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    assert "Exit status: 0 done" in done.stdout
    assert time.monotonic() - started < 1  # about 0.1 s when the machine is idle


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["mov"], "No such command"),
        (["move"], "Missing argument"),
        (["move", "job.toml", "--thread", "2"], "No such option"),
        (["move", "job.toml", "--threads", "0"], "Invalid value"),
    ],
)
def test_a_wrong_command_line(capsys, arguments, words):
    assert main(arguments) == 2
    assert words in capsys.readouterr().err


def test_the_version(capsys):
    assert main(["--version"]) == 0
    assert fm.__version__ in capsys.readouterr().out


def test_the_whole_program_in_its_child(place, capfd):
    assert main(["move", str(place.job), "--report", str(place.folder / "here"), "--threads", "1"]) == 0
    shown = capfd.readouterr()
    assert "within limits" in shown.out
    assert re.search(r"^7/7 drawing", shown.err, re.MULTILINE)
    assert (place.folder / "here" / "report.json").exists()
    assert main(["move", str(place.job), "--quiet"]) == 2
    shown = capfd.readouterr()
    assert shown.out == ""
    assert shown.err.startswith("fieldmover: ")


def test_the_reader_of_the_results_may_leave(place):
    command = [sys.executable, "-m", "fieldmover", "move", str(place.job), "--quiet"]
    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as program:
        program.stdout.close()
        assert program.wait(60) == 0
        assert program.stderr.read() == ""


@pytest.mark.parametrize(
    ("error", "status", "words"),
    [
        (ZeroDivisionError("oops"), 1, "an error inside the program (above), not in the job"),
        (MemoryError("8 GiB"), 7, "not enough memory: 8 GiB"),
        (NotConverged("left 1e-3 after 9 iterations", []), 6, "fieldmover: left 1e-3 after 9 iterations"),
    ],
)
def test_what_goes_wrong_inside(place, capsys, monkeypatch, error, status, words):
    def fails(*_, **__):
        raise error

    monkeypatch.setattr("fieldmover.jobs.run.read_source", fails)
    assert place.run() == status
    shown = capsys.readouterr().err
    assert words in shown
    assert ("Traceback" in shown) == (status == 1)


@pytest.mark.parametrize(("number", "status"), [(signal.SIGTERM, 143), (signal.SIGINT, 130)])
def test_stopped_by_a_signal(place, number, status):
    write_snapshot(place.source, (96, 64, 128))
    command = [sys.executable, "-m", "fieldmover", "move", str(place.job)]
    with subprocess.Popen(command, stderr=subprocess.PIPE, text=True) as program:
        line = program.stderr.readline()
        assert line.startswith("1/7 reading")
        program.send_signal(number)
        started = time.monotonic()
        assert program.wait(20) == status
        assert time.monotonic() - started < 8
        assert "Traceback" not in program.stderr.read()
    assert sorted(os.listdir(place.folder)) == ["ring.h5", "ring.toml"]


# -- help for the shell, and quiet --------------------------------------------------------------------------


@pytest.mark.parametrize("shell", ["bash", "zsh", "fish"])
def test_completion_of_the_shell(shell):
    def run(instruction: str, **more: str) -> str:
        variables = {**os.environ, "_FIELDMOVER_COMPLETE": f"{shell}_{instruction}", **more}
        command = [sys.executable, "-m", "fieldmover"]
        return subprocess.run(command, env=variables, capture_output=True, text=True, check=True).stdout

    assert "_FIELDMOVER_COMPLETE" in run("source")
    if shell == "bash":
        assert "clean" in run("complete", COMP_WORDS="fieldmover cl", COMP_CWORD="1")


def test_every_option_reaches_its_command(place, capfd):
    job = str(place.job)
    assert main(["move", job, "--quiet", "--dry-run"]) == 0
    assert main(["survey", str(place.source), "--job", str(place.folder / "new.toml")]) == 0
    assert (place.folder / "new.toml").exists()
    assert main(["clean", job, "--quiet"]) == 2
    assert "clean keeps the grid of the source" in capfd.readouterr().err
    assert main(["move", job, "--quiet"]) == 0
    options = [
        "--against",
        str(place.target),
        "--make-limits",
        "0.1",
        "--report",
        str(place.folder / "again"),
    ]
    assert main(["check", job, "--quiet", *options]) == 0
    assert (place.folder / "again" / "limits.toml").exists()
    assert (
        json.loads((place.folder / "again" / "report.json").read_text())["figures"]["against"]["cosine"]
        > 1 - 1e-12
    )


def test_quiet_shows_no_progress_but_the_results(place, capfd):
    assert main(["move", str(place.job), "--quiet"]) == 0
    shown = capfd.readouterr()
    assert shown.err == ""
    assert "within limits" in shown.out
