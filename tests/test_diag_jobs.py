"""What a job has measured: surfaces, helicity, regions by formula, the gas, the receiver's stencil, agreement."""

from __future__ import annotations

import json
import re
from pathlib import Path

import h5py
import numpy as np
import pytest

import fieldmover as fm
from fieldmover.conventions.metrics import named_metric
from fieldmover.diagnostics.fluid import EXTREMES
from fieldmover.diagnostics.regions import PLACES
from fieldmover.jobs import names
from fieldmover.jobs.demo import job_text, write_snapshot
from fieldmover.jobs.gas import extreme_figures
from fieldmover.jobs.measure import cell_values
from fieldmover.jobs.read import State
from fieldmover.jobs.space import Space
from fieldmover.jobs.verdicts import figures_of
from fieldmover.jobs.worker import Options, work

pytestmark = pytest.mark.usefixtures("no_pictures")

JOB = job_text().replace("cells = 128", "cells = 16")
JOB = JOB[: JOB.index("[limits]")]
MORE = """
[report]
helicity = true
planes = ["z = 0"]
[regions]
ring = { radii = [3, 5] }
north = { where = "z > 0 and not r < 1.5" }
strong = { where = "B > 0.1" }
thick = { where = "density > 1e-3 and R < 6" }
[surfaces]
lid = { disc = 3, normal = "z", centre = [0, 0, 1] }
under = { disc = 3, normal = "-z", centre = [0, 0, 1], inner = 1 }
ball = { sphere = 2.5 }
half = { hemisphere = 2.5, normal = [1, 1, 0] }
top = { cap = 2.5, angle = "30 deg" }
"""


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    """A small hand-over with everything measured."""
    folder = tmp_path_factory.mktemp("more")
    write_snapshot(folder / "ring.h5", (24, 16, 32))
    (folder / "job.toml").write_text(JOB + MORE)
    assert work(Options("move", str(folder / "job.toml"), report=str(folder / "done"), quiet=True)) == 0
    return folder


@pytest.fixture(scope="module")
def moved(folder):
    return json.loads((folder / "done" / "report.json").read_text())


@pytest.fixture
def run(folder, tmp_path, capsys):
    def run(text, command="check", **options):
        job = folder / "other.toml"
        job.write_text(text)
        status = work(Options(command, str(job), report=str(tmp_path / "report"), quiet=True, **options))
        shown = capsys.readouterr()
        path = tmp_path / "report" / "report.json"
        return status, shown.out + shown.err, json.loads(path.read_text()) if path.exists() else None

    return run


def test_every_name_is_measured_and_every_figure_has_a_name(moved):
    found = figures_of(moved)
    known = names.known(["density"], ["ring", "north", "strong", "thick"], ["lid", "under", "ball", "half", "top"])
    assert set(found) <= set(known), set(found) - set(known)
    missing = {name for name in known if name not in found}
    assert all(name.startswith(("against.", "curved.")) for name in missing), missing
    nothing = {name for name, value in found.items() if value is None}
    assert all(re.search("beta|internal_energy|_wall|lorentz", name) for name in nothing), nothing


def test_words_that_the_command_line_knows_before_numpy():
    assert names.PLACES == PLACES
    assert names.EXTREMES == EXTREMES


def test_flux_through_surfaces_before_and_after(moved):
    through = moved["surfaces"]
    assert abs(through["ball"]["flux"]) < 1e-14
    assert abs(through["ball"]["change"]) < 1e-6
    for name in ("lid", "under", "half", "top"):
        figures = through[name]
        assert figures["source_unsigned"] >= abs(figures["source_flux"]) > 0
        assert 0 < abs(figures["change"]) < (0.05 if name in ("lid", "half") else 1)  # 16^3 cells
        np.testing.assert_allclose(
            figures["change"], (figures["flux"] - figures["source_flux"]) / figures["source_unsigned"], rtol=1e-12
        )
    assert moved["surfaces_meant"]["under"] == "disc of radii 1 and 3 about (0, 0, 1), normal (0, 0, -1)"


def test_sums_over_the_gas(moved):
    gas, fluid = moved["gas"], moved["fluid"]["density"]
    assert gas["change"]["mass"] < 1e-13
    assert gas["change"]["momentum"] < 1e-13
    assert 0 < gas["change"]["angular_momentum"] < 1e-2
    assert -1e-2 < gas["change"]["kinetic_energy"] < 0  # mixing takes from it
    np.testing.assert_allclose(gas["stored"]["mass"], fluid["stored"], rtol=1e-3)
    spin = gas["stored"]["angular_momentum"]
    assert spin["z"] > abs(spin["x"]) > 1e4 * abs(spin["y"])  # the ring is tilted about y


def test_helicity_and_free_energy(moved):
    for step in ("source", "stored"):
        found = moved["helicity"][step]
        assert found["free_energy"] > 0
        np.testing.assert_allclose(found["energy"] - found["reference_energy"], found["free_energy"], rtol=1e-12)
    np.testing.assert_allclose(
        moved["helicity"]["stored"]["energy"], moved["fields"]["stored"]["energy"]["total"], rtol=1e-9
    )
    assert moved["helicity_missing"] == {}


def test_regions_by_formula(folder, moved):
    with h5py.File(folder / "ring-cartesian.h5") as file:
        density = np.transpose(file["density"][()])
    regions = moved["regions"]
    assert regions["strong"]["strength"] == pytest.approx(moved["fields"]["stored"]["strength"]["largest"])
    assert 0 < regions["north"]["energy"] < moved["fields"]["stored"]["energy"]["total"]
    assert density.max() > 1e-3 > density.min()
    assert regions["thick"]["strength"] > 0


def test_extremes_and_their_places(moved):
    for step in ("source", "stored"):
        values, places = moved["extremes"][step], moved["extremes_at"][step]
        assert values["beta_smallest"] is None
        assert "beta_smallest" not in places
        assert values["speed_largest"] > 0
        assert len(places["speed_largest"]["position"]) == 3


def test_a_check_measures_the_same_and_limits_what_cannot_vanish_by_chance(run, moved, tmp_path):
    limits = "[limits]\nsurfaces.lid.change = 1e-3\nagreement.normalised_error = 0.5\n"
    status, said, report = run(JOB + MORE + limits, make_limits=0.1)
    assert status == 3, said
    assert "limits exceeded: surfaces.lid.change" in said
    for group in ("stencil", "surfaces", "gas", "extremes", "agreement", "helicity"):
        assert report[group] == moved[group], group
    table = (tmp_path / "report" / "limits.toml").read_text()
    assert "surfaces.lid.change = " in table
    assert "gas.change.momentum = 1.0e-14" in table
    assert not re.search(r"^(surfaces\.\w+\.flux|gas\.stored\.momentum|helicity\.stored\.value)", table, re.MULTILINE)


def test_a_source_alone_is_measured_too(run):
    text = (JOB + MORE).replace('"ring-cartesian.h5"', '"none-yet.h5"')
    status, said, report = run(text.replace("[surfaces]", "[limits]\nsurfaces.ball.source_flux = 1e-9\n[surfaces]"))
    assert status == 3, said  # the snapshot has monopoles
    assert "surfaces.ball.source_flux" in said
    assert report["surfaces"]["ball"]["flux"] is None
    assert report["helicity"]["source"]["value"] != 0
    assert report["agreement"] is None


CELLS = JOB.replace('at   = "faces"', 'at   = "cells"\nstencil = "central"').replace("ring-cartesian.h5", "cells.h5")
ONE = '[report]\nplanes = ["z = 0"]\n'


def test_the_stencil_of_the_receiver(run):
    """Cells written for a stencil are free of its divergence, and of no other."""
    limits = ONE + "[limits]\ndivergence = 1e-12\nstencil.scaled.linf = 1e-12\n"
    assert 'stencil = "central"' in CELLS
    status, said, report = run(CELLS + limits, "move", overwrite=True)
    assert status == 0, said
    assert report["stencil"]["stencil"] == "central"
    assert report["figures"]["divergence"] == report["stencil"]["linf"] < 1e-12
    assert report["fields"]["stored"]["divergence"]["linf"] > 1e-6  # of the faces between such cells
    other = CELLS.replace('"central"', '"corners"')
    status, said, report = run(other + limits)
    assert status == 3, said
    assert "limits exceeded: divergence, stencil.scaled.linf" in said


def test_another_run_on_another_grid(run, folder, tmp_path):
    """Its job says where its field lies; figures and fields are compared where the grids overlap."""
    coarse = (JOB + MORE).replace("cells = 16", "cells = 12").replace("ring-cartesian.h5", "coarse.h5")
    (folder / "coarse.toml").write_text(coarse)
    assert work(Options("move", str(folder / "coarse.toml"), report=str(tmp_path / "coarse"), quiet=True)) == 0
    limits = MORE + "[limits]\nagainst.normalised_error = 1e-3\nagainst.overlap = 1.0001\n"
    status, said, report = run(JOB + limits, against=str(folder / "coarse.toml"))
    assert status == 3, said
    assert "limits exceeded: against.normalised_error" in said
    assert report["figures"]["against"]["overlap"] == pytest.approx(1)
    assert 1e-3 < report["figures"]["against"]["normalised_error"] < 1
    assert report["files"]["other"]["name"] == "coarse.h5"
    figures = report["against"]["figures"]
    assert figures["cells"]["before"] == 12**3
    assert figures["surfaces.lid.flux"]["after"] == report["surfaces"]["lid"]["flux"]
    assert 0 < abs(figures["surfaces.lid.flux"]["relative"]) < 0.5
    assert abs(figures["gas.mass"]["relative"]) < 1e-2
    assert figures["gas.angular_momentum.z"]["before"] > 0
    assert figures["extremes.speed_largest"]["before"] > 0
    assert figures["helicity.value"]["before"] != figures["helicity.value"]["after"]
    far = (folder / "coarse.toml").read_text().replace("from = -6.5, to = 6.5", "from = 50, to = 60")
    (folder / "far.toml").write_text(far)
    status, said, _ = run(JOB, against=str(folder / "far.toml"))
    assert status == 4
    assert "has no cell centre in" in said


@pytest.mark.parametrize(
    ("table", "words"),
    [
        (
            "[regions]\nhere = { where = 'zz > 0' }",
            "regions.here.where: expression 'zz > 0', character 1: unknown name 'zz'",
        ),
        ("[regions]\nhere = { where = 'velocity > 0' }", "unknown name 'velocity'"),
        ("[regions]\nhere = { where = 'z + 1' }", "expected a comparison that holds or not"),
        ("[regions]\nhere = { where = 'open(z)' }", "unknown function 'open'"),
        ("[regions]\nhere = { where = 'z > 99' }", "regions.here: where 'z > 99': no cell centre"),
        ("[regions]\nhere = { where = 'z > 0', radius = 2 }", "or where (a formula)"),
        ("[regions]\nhere = { where = 'B > 1e9' }", "regions.here: where 'B > 1e9': no cell centre"),
        (
            "[surfaces]\nlid = { disc = 30 }",
            "surfaces.lid: disc of radius 30 about (0, 0, 0), normal (0, 0, 1) leaves the grid",
        ),
        ("[surfaces]\nlid = { disc = -1 }", "surfaces.lid.disc: found -1"),
        ("[surfaces]\nlid = { radius = 1 }", "surfaces.lid.radius: unknown key"),
        ("[surfaces]\nlid = { sphere = 1, disc = 1 }", "give one of sphere, hemisphere, cap or disc"),
        ("[surfaces]\nlid = { sphere = 1, normal = 'x' }", "a sphere has no normal"),
        ("[surfaces]\nlid = { disc = 1, normal = 'up' }", "found 'up'; give"),
        ("[surfaces]\nlid = { disc = 1, inner = 2 }", "smaller than the disc's"),
        ("[surfaces]\nlid = { cap = 1 }", "give angle"),
        ("[surfaces]\nlid = { disc = 1 }\n[limits]\nsurfaces.lit.flux = 1", "the nearest is 'surfaces.lid.flux'"),
        ("[limits]\nhelicity.stored.valeu = 1", "the nearest is 'helicity.stored.value'"),
        ("[limits]\nextremes.stored.beta_least = 1", "the nearest is 'extremes.stored.beta_largest'"),
    ],
)
def test_what_is_refused(run, table, words):
    status, said, report = run(JOB + table + "\n")
    assert (status, report) == (2, None), said
    assert words in said


def test_limits_from_below(run):
    limits = "agreement.cosine = { at_least = 0.9 }\nextremes.stored.speed_largest = { at_least = 10 }\n"
    status, said, report = run(JOB + ONE + "[limits]\n" + limits + "extremes.stored.beta_smallest = { at_least = 0 }\n")
    assert status == 3
    assert "limits exceeded: extremes.stored.speed_largest, extremes.stored.beta_smallest (not measured)" in said
    assert "at least 10" in said
    assert [(limit["passed"], limit["least"]) for limit in report["limits"]] == [
        (True, True),
        (False, True),
        (False, True),
    ]
    status, said, _ = run(JOB + "[limits]\nenergy_change = { at_least = 'x' }\n")
    assert status == 2
    assert "limits.energy_change.at_least: 'x' is not a number" in said
    assert "unknown key" in run(JOB + "[limits]\nenergy_change = { at_least = 0, within = 1 }\n")[1]


def test_helicity_without_meaning_is_told(run, folder):
    """A cube whose ends meet, with mean flux: no periodic potential."""
    with h5py.File(folder / "cube.h5", "w") as file:
        for axis, name in enumerate("xyz"):
            shape = [8 + (d == axis) for d in range(3)]
            file[name] = np.full(shape, 1.0 if name == "z" else 0.0)
    nodes = ", ".join(["{ from = 0, to = 1, cells = 8 }"] * 3)
    grid = f'kind = "cartesian"\nnodes = [{nodes}]\nperiodic = [true, true, true]\n'
    field = 'at = "faces"\ndata = ["/x", "/y", "/z"]\nunit = "heaviside-lorentz"\n'
    text = (
        f'[source]\nfile = "cube.h5"\n[source.grid]\n{grid}[source.magnetic]\n{field}'
        f'[target]\nfile = "cube-out.h5"\n[target.grid]\n{grid}[target.magnetic]\n{field}'
        "[report]\nhelicity = true\n[limits]\nhelicity.source.value = 1\n"
    )
    status, said, report = run(text)
    assert status == 3, said
    assert "helicity.source.value (not measured)" in said
    assert report["helicity"] == {}
    assert "net flux" in report["helicity_missing"]["source"]


def test_extremes_in_a_metric():
    """A circular orbit at r = 6 M: W = sqrt(3/2), v = 1/sqrt(3) for Eulerian observers of Kerr-Schild slices (Bardeen,
    Press & Teukolsky, ApJ 178, 347, 1972, and by hand); B across it: b^2 = B^2 / W^2 with sqrt(gamma) = sqrt(4/3)."""
    h = 1e-4
    grid = fm.cartesian_grid([6 - h, 6 + h], [-h, h], [-h, h])
    space = Space(grid, named_metric("schwarzschild"))
    velocity = np.array([0.0, 6 * 6**-1.5, 0.0]).reshape(3, 1, 1, 1)
    flux = fm.flux_from_function(grid, lambda x, y, z: (0 * x, 0 * y, 2 + 0 * z))
    fluid = {
        "density": np.full(grid.shape, 4.0),
        "pressure": np.full(grid.shape, 3.0),
        "velocity": space.from_stored(velocity, "coordinate", "cartesian"),
    }
    values, places = extreme_figures(State(Path("none.h5"), flux, space, fluid))
    expected = {
        "b2_over_rho_largest": 2 / 4,
        "beta_smallest": 6 / 2,
        "beta_largest": 6 / 2,
        "speed_largest": 3**-0.5,
        "lorentz_largest": 1.5**0.5,
    }
    assert values == pytest.approx(expected, rel=1e-6)
    assert cell_values(State(Path("none.h5"), flux, space, fluid), np.full(grid.shape, 2.0))["B"].item() == 2
    assert places["lorentz_largest"]["position"] == pytest.approx([6, 0, 0], abs=1e-12)
