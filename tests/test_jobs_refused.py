"""What a job must not do: lose a file it reads, move a goalpost, write a number that means something else."""

from __future__ import annotations

import json
import os
import shutil

import h5py
import numpy as np
import pytest

from fieldmover.jobs.worker import Options, work

pytestmark = pytest.mark.usefixtures("no_pictures")

SOURCE = """
[source]
file = "in.h5"
[source.grid]
kind = "cartesian"
nodes = ["/x", "/x", "/x"]
[source.magnetic]
at = "cells"
data = ["/b1", "/b2", "/b3"]
unit = 1
[source.fluid.density]
data = "/rho"
carry = "conserve"
"""
GRID = """
[target.grid]
kind = "cartesian"
nodes = [{ from = -1, to = 1, cells = 4 }, { from = -1, to = 1, cells = 4 }, { from = -1, to = 1, cells = 4 }]
"""
TARGET = """
[target]
file = "out.h5"
GRID
[target.magnetic]
data = ["/bx", "/by", "/bz"]
unit = 1
[target.fluid]
density = "/dens"
"""
MOVE = SOURCE + TARGET.replace("GRID", GRID)
CLEAN = SOURCE + TARGET.replace("GRID", "")


@pytest.fixture
def run(tmp_path, capsys):
    """Run a job: exit status and what was said."""
    with h5py.File(tmp_path / "in.h5", "w") as file:
        file["x"] = np.linspace(-1, 1, 7)
        file["rho"] = np.full((6, 6, 6), 2.0)
        for n, value in enumerate((0.3, -0.2, 0.5), start=1):
            file[f"b{n}"] = np.full((6, 6, 6), value)

    def run(text: str, command: str = "move", **options):
        (tmp_path / "job.toml").write_text(text)
        status = work(Options(command, str(tmp_path / "job.toml"), quiet=True, **options))
        shown = capsys.readouterr()
        return status, shown.out + shown.err

    return run


def refused(result: tuple[int, str], words: str, status: int = 2) -> None:
    assert words in result[1]
    assert "Traceback" not in result[1]
    assert result[0] == status


# -- files that must not be lost ----------------------------------------------------------------------------


def test_the_output_replaces_neither_the_job_nor_the_file_of_the_grid(run, tmp_path):
    onto_job = MOVE.replace("out.h5", "job.toml")
    refused(run(onto_job, overwrite=True), "job.toml: the output is the job file")
    assert (tmp_path / "job.toml").read_text() == onto_job
    with h5py.File(tmp_path / "grid.h5", "w") as file:
        file["x"] = np.linspace(-1, 1, 5)
    onto_grid = MOVE.replace(GRID, '[target.grid]\nkind = "cartesian"\nfile = "grid.h5"\nnodes = ["/x", "/x", "/x"]')
    assert run(onto_grid)[0] == 0
    refused(run(onto_grid.replace("out.h5", "grid.h5"), overwrite=True), "the output is target.grid.file")
    with h5py.File(tmp_path / "grid.h5") as file:
        assert list(file) == ["x"]


def test_a_check_does_not_replace_the_report_it_is_compared_with(run, tmp_path):
    limits = '[limits]\nsource.energy.total = { within = 0.1, of = "out-check/report.json" }'
    assert run(MOVE, "check")[0] == 0
    before = (tmp_path / "out-check" / "report.json").read_bytes()
    refused(run(MOVE + limits, "check"), "limits.source.energy.total: this run would replace out-check/report.json")
    assert (tmp_path / "out-check" / "report.json").read_bytes() == before
    assert run(MOVE + limits, "check", report=str(tmp_path / "elsewhere"))[0] == 0


def test_limits_made_from_a_run_hold_however_often_one_checks(run, tmp_path):
    """The second check of a worse file must fail as the first did."""
    assert run(MOVE)[0] == 0
    assert run(MOVE, "check", make_limits=0.1)[0] == 0
    limits = (tmp_path / "out-check" / "limits.toml").read_text()
    assert run(MOVE + limits, "check")[0] == 0
    with h5py.File(tmp_path / "in.h5", "r+") as file:
        file["rho"][...] *= 2
    for _ in range(2):
        status, said = run(MOVE + limits, "check")
        assert status == 3
        assert "fluid.density.source" in said.partition("limits exceeded:")[2]


@pytest.mark.parametrize("margin", [float("nan"), float("inf")])
def test_a_margin_is_a_number(run, tmp_path, margin):
    refused(run(MOVE, "check", make_limits=margin), "expected a margin like 0.1")
    assert not (tmp_path / "out-check").exists()


def test_a_survey_does_not_replace_the_file_it_looks_at(run, tmp_path, capsys):
    before = (tmp_path / "in.h5").read_bytes()
    status = work(Options("survey", str(tmp_path / "in.h5"), job=str(tmp_path / "in.h5"), overwrite=True))
    refused((status, capsys.readouterr().err), "the job would replace the file that is looked at")
    assert (tmp_path / "in.h5").read_bytes() == before


def test_a_survey_leaves_the_terminal_alone(tmp_path, capsys):
    with h5py.File(tmp_path / "in.h5", "w") as file:
        file["a\x1b[31m\nb"] = np.ones((2, 2, 2))
        file["rho"] = np.ones((2, 2, 2))
    assert work(Options("survey", str(tmp_path / "in.h5"))) == 0
    said = capsys.readouterr().out
    assert "\x1b" not in said
    assert "/a?[31m?b" in said


def test_a_survey_takes_the_usual_order_of_axes(tmp_path, capsys):
    """Two axes are equally long, so that shapes allow q3 q1 q2 too."""
    with h5py.File(tmp_path / "in.h5", "w") as file:
        for name, cells in (("x", 4), ("y", 4), ("z", 6)):
            file[name] = np.arange(cells + 1.0)
        for name in ("bx", "by", "bz"):
            file[name] = np.ones((6, 4, 4))
    assert work(Options("survey", str(tmp_path / "in.h5"))) == 0
    assert "axes as stored (guess): q3 q2 q1" in capsys.readouterr().out


@pytest.mark.skipif(not os.path.exists("/dev/full"), reason="this system has no full device")
def test_results_that_cannot_be_printed(run, monkeypatch):
    with open("/dev/full", "w") as full:
        monkeypatch.setattr("sys.stdout", full)
        refused(run(MOVE), "stdout: cannot be written: no space left on device", 5)


# -- datasets that cannot be written ------------------------------------------------------------------------

FINER = """finer = [{ nodes = [[-0.5, -0.25, 0], [-0.5, -0.25, 0], [-0.5, -0.25, 0]], group = "GROUP" }]
[target.magnetic]"""


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ('"/dens"', '"/bx/dens"', "dataset '/bx/dens' and dataset 'bx': one cannot lie within the other"),
        ('"/bx", "/by"', '"/b/x", "/b"', "dataset '/b' and dataset 'b/x': one cannot lie within the other"),
        ('"/dens"', '"/"', "expected the path of a dataset"),
        ('"/dens"', '"/a/b/"', "expected the path of a dataset"),
        ('"/dens"', '"/a/./b"', "expected the path of a dataset"),
        ('"/dens"', '"/de ns"', "expected the path of a dataset"),
        ("[target.magnetic]", FINER.replace("GROUP", "/bx"), "dataset '/bx/by' and dataset 'bx'"),
    ],
)
def test_names_of_datasets(run, tmp_path, old, new, words):
    text = MOVE.replace(old, new)
    refused(run(text), words)
    assert not (tmp_path / "out.h5").exists()


def test_the_group_of_the_view_is_kept_for_it(run):
    text = MOVE.replace('"/dens"', '"/VTKHDF/dens"')
    refused(run(text, changes=("target.view=true",)), "the group /VTKHDF is kept for the view")
    assert run(text)[0] == 0


def test_a_dataset_of_a_box_is_not_one_of_the_grid(run):
    text = MOVE.replace("[target.magnetic]", FINER.replace("GROUP", "/f")).replace('"/dens"', '"/f/bx"')
    refused(run(text), "dataset '/f/bx' is named twice")
    assert run(text.replace('"/f/bx"', '"/f/d"'))[0] == 0


@pytest.mark.parametrize(("unit", "words"), [("1e-40", "values of up to 5e+39"), ("1e40", "values of up to 5e-41")])
def test_numbers_that_single_precision_does_not_hold(run, tmp_path, unit, words):
    text = MOVE.replace('file = "out.h5"', 'file = "out.h5"\nprecision = "single"')
    text = text.replace('"/bz"]\nunit = 1', f'"/bz"]\nunit = {unit}')
    result = run(text)
    refused(result, "do not fit into target.precision")
    assert words.split("5e")[1] in result[1]
    assert not list(tmp_path.glob("out*"))


# -- numbers that would mean something else -----------------------------------------------------------------


def test_clean_makes_what_the_target_makes_of_formulas(run, tmp_path):
    made = 'density = { data = "/dens", formula = "3 * density" }\nother = { data = "/w", formula = "density + B * x" }'
    status, said = run(CLEAN.replace('density = "/dens"', made), "clean")
    assert status == 0, said
    with h5py.File(tmp_path / "out.h5") as file:
        assert np.allclose(file["dens"], 6.0, rtol=1e-14)
        x = np.linspace(-1, 1, 7)
        middle = 0.5 * (x[1:] + x[:-1])
        assert np.allclose(file["w"], (2.0 + np.sqrt(0.38) * middle)[:, None, None], rtol=1e-9)


@pytest.mark.parametrize("key", ["perturb = { size = 0.1 }", 'net_flux = "point"', "blend = 0.1"])
def test_clean_moves_nothing(run, key):
    refused(run(CLEAN + f"[move]\n{key}", "clean"), f"move.{key.split()[0]}: clean moves nothing")


def test_the_background_of_a_density_is_not_negative(run, tmp_path):
    text = MOVE.replace("from = -1, to = 1", "from = -2, to = 2")
    text = text.replace('density = "/dens"', 'density = { data = "/dens", outside = "x" }')
    refused(run(text), "target.fluid.density.outside: falls to -1.5")
    assert not (tmp_path / "out.h5").exists()


METRIC = '[metric]\nname = "schwarzschild"\nmass = 0.01'
SPHERE = SOURCE.replace('"cartesian"', '"spherical"').replace(
    'nodes = ["/x", "/x", "/x"]', "nodes = [[1, 2], [1, 2], [0, 1]]"
)


@pytest.mark.parametrize("at", ["cells", "faces", "edges"])
def test_unit_vectors_are_not_settled_in_curved_space(run, at):
    text = SPHERE.replace('at = "cells"', f'at = "{at}"\nbasis = "physical"') + TARGET.replace("GRID", GRID) + METRIC
    refused(run(text), "source.magnetic.basis: unit vectors of the grid are not settled in curved space")


def test_faces_do_not_know_a_metric_from_cells(run):
    names = '["/rho", "/b1", "/b1", "/rho", "/b1", "/rho"]'
    grid = '[target.grid]\nkind = "cartesian"\nfile = "in.h5"\nnodes = ["/x", "/x", "/x"]'
    text = SOURCE.replace("[source.magnetic]", f"[source.metric]\ngamma = {names}\n[source.magnetic]")
    text += TARGET.replace("GRID", f"{grid}\n[target.metric]\ngamma = {names}")
    refused(run(text), "target.magnetic.densitised: arrays of a metric are known in cells alone")


def test_positions_in_single_precision_lose_nothing_at_the_poles(run, tmp_path):
    """Meridians that miss their opposites by a rounding error would make the pole a wall."""
    nodes = [np.linspace(1, 3, 9), np.linspace(0, np.pi, 9), np.linspace(0, 2 * np.pi, 13)]
    r, theta, _ = np.meshgrid(*(0.5 * (q[1:] + q[:-1]) for q in nodes), indexing="ij")
    text = SPHERE.replace("nodes = [[1, 2], [1, 2], [0, 1]]", 'nodes = ["/q1", "/q2", "/q3"]')
    text = text.replace('at = "cells"', 'at = "cells"\nbasis = "physical"') + TARGET.replace("GRID", GRID)
    found = []
    for kind in (np.float64, np.float32):
        with h5py.File(tmp_path / "in.h5", "w") as file:
            file["b1"], file["b2"], file["b3"] = np.cos(theta), -np.sin(theta), 0 * r
            file["rho"] = 1 / r
            for n, q in enumerate(nodes, start=1):
                file[f"q{n}"] = q.astype(kind)
        assert run(text, overwrite=True)[0] == 0
        with h5py.File(tmp_path / "out.h5") as file:
            found.append([file[name][()] for name in ("bx", "bz", "dens")])
    for double, single in zip(*found, strict=True):
        assert np.abs(double - single).max() < 1e-6


def test_random_changes_are_no_loss_of_the_cleaning(run, tmp_path):
    lost = []
    for more in ("", "[move]\nperturb = { size = 0.5 }"):
        assert run(MOVE + more, overwrite=True)[0] == 0
        report = json.loads((tmp_path / "out-report" / "report.json").read_text())
        lost.append(report["figures"]["energy_lost"]["cleaning"])
    assert list(report["energy_covered"]) == ["source", "cleaned", "perturbed", "moved", "stored"]
    assert report["energy_covered"]["perturbed"] > 1.001 * report["energy_covered"]["cleaned"]
    assert lost[0] == lost[1]


def test_a_target_that_the_source_misses_is_a_mistake(run, tmp_path):
    """Of units of length, most often."""
    refused(run(MOVE.replace("from = -1, to = 1", "from = 100, to = 200")), "has no cell that the source reaches")
    assert not list(tmp_path.glob("out*"))


def test_formulas_of_regions_call_quantities_as_other_formulas_do(run, tmp_path):
    energy = '[source.fluid."internal energy"]\ndata = "/rho"\ncarry = "by mass"'
    text = MOVE.replace("[target]", f"{energy}\n[target]") + '"internal energy" = "/e"\n'
    status, said = run(text + '[regions]\nwarm = { where = "internal_energy > 1 and x > 0" }')
    assert status == 0, said
    report = json.loads((tmp_path / "out-report" / "report.json").read_text())
    assert report["regions"]["warm"]["energy"] == pytest.approx(0.5 * 0.38 * 4, rel=1e-9)


def test_the_report_says_whose_units_its_numbers_have(run, tmp_path):
    same = "[units]\nsource = { geometrised = 1 }\ntarget = { geometrised = 1 }"
    for more, words in (("", "of the snapshot"), (same, "of the receiving code")):
        assert run(f"{MOVE}\n{more}", overwrite=True)[0] == 0
        report = json.loads((tmp_path / "out-report" / "report.json").read_text())
        assert report["conventions"]["inside"].endswith(words)


def test_a_wall_along_the_field_is_no_monopole(run, tmp_path):
    """A field about an axis, with rounding errors as a turn of its components makes them."""
    noise = 1e-16 * np.random.default_rng(1).standard_normal((8, 8, 12))
    nodes = [np.linspace(1, 3, 9), np.linspace(0, np.pi, 9), np.linspace(0, 2 * np.pi, 13)]
    r, theta, _ = np.meshgrid(*(0.5 * (q[1:] + q[:-1]) for q in nodes), indexing="ij")
    with h5py.File(tmp_path / "in.h5", "w") as file:
        file["b1"], file["b2"], file["b3"], file["rho"] = noise, 0 * r, np.sin(theta) / r, 1 + 0 * r
        for n, q in enumerate(nodes, start=1):
            file[f"q{n}"] = q
    text = SPHERE.replace("nodes = [[1, 2], [1, 2], [0, 1]]", 'nodes = ["/q1", "/q2", "/q3"]')
    text = text.replace('at = "cells"', 'at = "cells"\nbasis = "physical"') + TARGET.replace("GRID", GRID)
    text = text.replace("from = -1, to = 1", "from = -2, to = 2")
    for clean in ("when needed", "always"):
        status, said = run(f'{text}\n[move]\nclean = "{clean}"\n[limits]\ndivergence = 1e-12', overwrite=True)
        assert status == 0, said
    x, y, z = np.meshgrid(np.linspace(-2, 2, 5), *[np.linspace(-1.5, 1.5, 4)] * 2, indexing="ij")
    square = x**2 + y**2 + z**2
    with h5py.File(tmp_path / "out.h5") as file:
        inside = (square > 2) & (square < 8)
        assert np.abs(file["bx"] + y / square)[inside].max() < 0.1


# -- maps ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("body", "words"),
    [
        ("raise RuntimeError('boom')", "warp.py:warp fails: RuntimeError: boom"),
        ("import sys; sys.exit(0)", "a map's Python file asked to end: sys.exit(0)"),
    ],
)
def test_a_map_that_fails_is_the_mistake_of_its_file(run, tmp_path, body, words):
    (tmp_path / "warp.py").write_text(f"def warp(a, b, c):\n    {body}\n")
    warped = GRID.replace('"cartesian"', '"warped"\nmap = { python = "warp.py:warp" }')
    text = MOVE.replace(GRID, warped).replace('"/bz"]', '"/bz"]\nbasis = "physical"')
    refused(run(text), words)
    assert not list(tmp_path.glob("out*"))


# -- what a dry run and --set tell --------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("command", "more", "status", "words"),
    [
        ("clean", "", 2, "clean keeps the grid of the source"),
        ("move", "[regions]\nfar = { centre = [9, 9, 9], radius = 1 }", 2, "regions.far"),
        ("move", "[surfaces]\nwide = { sphere = 5 }", 2, "surfaces.wide"),
        ("move", '[report]\nplanes = ["y = 7"]', 2, "y = 7 misses the grid"),
        ("move", "[limits]\ndivergence = { within = 1, of = 'none.json' }", 2, "none.json: no such file"),
        ("move", '[source.fluid.other]\ndata = "/x"\ncarry = "point"', 4, "dataset '/x' has shape (7,)"),
    ],
)
def test_a_dry_run_tells_what_can_be_told_without_the_fields(run, tmp_path, command, more, status, words):
    refused(run(f"{MOVE}\n{more}", command, dry_run=True), words, status)
    assert sorted(path.name for path in tmp_path.iterdir()) == ["in.h5", "job.toml"]


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ('"/dens"', '{ data = "/dens", outside = "foo(x)" }', "target.fluid.density.outside: expression 'foo(x)'"),
        (
            "[target.fluid]",
            '[units]\nsource = { geometrised = 1 }\ntarget = { geometrised = 1, mass_in = "lb" }\n[target.fluid]',
            "mass in 'lb', expected one of M_sun, g, kg",
        ),
        ("unit = 1\n[source", "unit = inf\n[source", 'magnetic.unit: found inf; give "gaussian"'),
        ('file = "in.h5"', 'file = "in.h5"\nghosts = [3, 0, 0]', "ghosts [3, 0, 0] at each end leave no cell"),
    ],
)
def test_one_plain_message(run, old, new, words):
    status, said = run(MOVE.replace(old, new))
    assert status in (2, 4)
    assert words in said
    assert said.count("\n") <= 2


def test_one_value_is_set_not_lines_of_a_file(run):
    refused(run(MOVE, changes=('title="a"\nmove.order=1',)), "is not a TOML value")


def test_a_job_may_begin_with_a_byte_order_mark(run):
    assert run("\ufeff" + MOVE, "check")[0] == 0


def test_files_with_nothing_to_compare_are_named(run, tmp_path):
    assert run(MOVE)[0] == 0
    shutil.copy(tmp_path / "out.h5", tmp_path / "far.h5")
    far = MOVE.replace("out.h5", "far.h5").replace("from = -1, to = 1", "from = 9, to = 11")
    (tmp_path / "far.toml").write_text(far)
    refused(run(MOVE, "check", against=str(tmp_path / "far.toml")), "far.h5: fields to compare", 4)


def test_limits_of_a_region_called_like_a_key_of_limits(run, tmp_path):
    more = "[regions]\nwithin = { radius = 0.9 }\n[limits]\nregions.within.energy = 1e9"
    assert run(f"{MOVE}\n{more}")[0] == 0
    report = json.loads((tmp_path / "out-report" / "report.json").read_text())
    assert [limit["name"] for limit in report["limits"]] == ["regions.within.energy"]
