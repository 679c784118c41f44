"""Grids that a job can name: warped, tabulated, placed, completed by symmetry, and those of a file."""

from __future__ import annotations

import h5py
import numpy as np
import pytest

import fieldmover as fm
from fieldmover.conventions import components
from fieldmover.grids.placement import turn_about
from fieldmover.grids.warps import crowded_grid
from fieldmover.jobs.worker import Options, work

pytestmark = pytest.mark.usefixtures("no_pictures")

TURNS = np.linspace(0, 2 * np.pi, 17)
WARP = """\
import numpy as np


def wavy(a, b, c, phase, size=0.05):
    return a + size * np.sin(2 * b + phase), b + size * np.cos(a), c + 0 * a
"""
TARGET = """
[target]
file = "out.h5"
[target.grid]
kind = "cartesian"
nodes = [
    { from = -0.5, to = 0.5, cells = 8 },
    { from = -0.5, to = 0.5, cells = 8 },
    { from = -0.5, to = 0.5, cells = 8 },
]
[target.magnetic]
data = ["/bx", "/by", "/bz"]
unit = 1
[target.fluid]
density = "/rho"
velocity = { data = ["/vx", "/vy", "/vz"], basis = "cartesian" }
[move]
outside = "refuse"
[report]
planes = ["z = 0.1"]
"""


def field(x, y, z):
    """A solenoidal field without symmetry."""
    return np.sin(y) + 0.3, np.cos(z) * 0.7, 0.5 * np.sin(x)


def even(x, y, z):
    """The field of a potential along phi: seen in the mirror z -> -z and under any turn about z the same."""
    s2 = x * x + y * y
    return 2 * x * z, 2 * y * z, 1 - 2 * z * z + 0 * s2


def flow(x, y, z):
    return np.stack([0 * x - 0.4 * y, 0.4 * x, 0.2 * np.sin(z)])


def snapshot(path, grid, b, frame=None):
    """Cell-centred field, density and velocity on a grid, vectors Cartesian in its own frame."""
    at = grid.centres()
    turn = np.eye(3) if frame is None else frame
    with h5py.File(path, "w") as file:
        for name, vector in (("b", np.stack(b(*at))), ("v", flow(*at))):
            for axis, part in enumerate(np.einsum("ji,j...->i...", turn, vector)):
                file[f"{name}{axis + 1}"] = part
        file["rho"] = 2.0 + at[0] * 0.1
        file.attrs["phase"] = 0.4


def job(grid: str, basis: str = "cartesian", at: str = "cells") -> str:
    return f"""
[source]
file = "in.h5"
{grid}
[source.magnetic]
at = "{at}"
data = ["/b1", "/b2", "/b3"]
basis = "{basis}"
unit = 1
[source.fluid.density]
data = "/rho"
carry = "conserve"
[source.fluid.velocity]
data = ["/v1", "/v2", "/v3"]
basis = "{basis}"
carry = "by mass"
{TARGET}"""


@pytest.fixture
def run(tmp_path):
    def run(text: str, status: int = 0, command: str = "move", **options) -> dict[str, np.ndarray]:
        (tmp_path / "job.toml").write_text(text)
        assert work(Options(command, str(tmp_path / "job.toml"), quiet=True, overwrite=True, **options)) == status
        if status:
            return {}
        with h5py.File(tmp_path / "out.h5") as file:
            return {name: file[name][()] for name in file if name != "fieldmover"}

    return run


def right(found, b, tolerance):
    """The output holds the field and the flow at their places."""
    nodes = np.linspace(-0.5, 0.5, 9)
    target = fm.cartesian_grid(nodes, nodes, nodes)
    truth = components.faces_from_flux(fm.flux_from_function(target, b), "physical")
    for name, expected in zip(("bx", "by", "bz"), truth, strict=True):
        assert np.abs(found[name] - expected).max() < tolerance
    at = target.centres()
    for name, expected in zip(("vx", "vy", "vz"), flow(*at), strict=True):
        assert np.abs(found[name] - expected).max() < 0.02
    assert np.abs(found["rho"] - 2.0 - 0.1 * at[0]).max() < 0.01


def test_a_warped_source_whose_map_has_a_parameter_of_the_snapshot(tmp_path, run):
    (tmp_path / "warp.py").write_text(WARP)
    q = np.linspace(-1, 1, 25)
    grid = fm.warped_grid(q, q, q, lambda a, b, c: (a + 0.05 * np.sin(2 * b + 0.4), b + 0.05 * np.cos(a), c + 0 * a))
    snapshot(tmp_path / "in.h5", grid, field)
    nodes = "{ from = -1, to = 1, cells = 24 }"
    table = f"""[source.grid]
kind = "warped"
nodes = [{nodes}, {nodes}, {nodes}]
map = {{ python = "warp.py:wavy", parameters = {{ phase = "/@phase", size = 0.05 }} }}"""
    right(run(job(table)), field, 2e-4)
    wrong = np.abs(run(job(table.replace('"/@phase"', "0.9")))["bz"] - run(job(table))["bz"]).max()
    assert wrong > 1e-3  # the parameter counts


def test_cells_crowded_round_two_bodies(tmp_path, run):
    nodes = np.geomspace(0.2, 2, 25), np.linspace(0, np.pi, 17), np.linspace(0, 2 * np.pi, 33)
    grid = crowded_grid(*nodes, separation=1.2, phase=0.3, strength=0.3, width=0.6)
    snapshot(tmp_path / "in.h5", grid, even)
    with h5py.File(tmp_path / "in.h5", "a") as file:
        file["r"], file["theta"], file["phi"] = nodes
    table = """[source.grid]
kind = "warped"
nodes = ["/r", "/theta", "/phi"]
map = { crowded = { separation = 1.2, phase = 0.3, strength = 0.3, width = 0.6 } }"""
    text = job(table).replace("from = -0.5, to = 0.5", "from = 0.3, to = 0.8").replace("z = 0.1", "z = 0.5")
    found = run(text)
    line = np.linspace(0.3, 0.8, 9)
    truth = fm.flux_from_function(fm.cartesian_grid(line, line, line), even)
    for name, expected in zip(("bx", "by", "bz"), components.faces_from_flux(truth, "physical"), strict=True):
        assert np.abs(found[name] - expected).max() < 0.01


@pytest.mark.parametrize("at", ["nodes", "cells"])
@pytest.mark.parametrize("ghosts", [0, 2])
def test_a_table_of_positions(tmp_path, run, at, ghosts):
    q = np.linspace(-1 - ghosts / 12, 1 + ghosts / 12, 25 + 2 * ghosts)
    x, y, z = np.meshgrid(q, q, q, indexing="ij")
    table = fm.tabulated_grid(x + 0.05 * y, y, z + 0.04 * np.sin(x))
    snapshot(tmp_path / "in.h5", table, field)
    with h5py.File(tmp_path / "in.h5", "a") as file:
        for name, part in zip("xyz", table.node_positions() if at == "nodes" else table.centres(), strict=True):
            file[name] = part
    text = f'[source.grid]\nkind = "tabulated"\npositions = ["/x", "/y", "/z"]\nat = "{at}"'
    right(run(job(f"ghosts = [{ghosts}, {ghosts}, {ghosts}]\n{text}")), field, 3e-4)


def test_a_source_turned_and_moved(tmp_path, run):
    q = np.linspace(-1.2, 1.2, 25)
    origin, turn = (0.1, -0.2, 0.05), turn_about((1, 2, 0.5), 0.7)
    grid = fm.placed(fm.cartesian_grid(q, q, q), origin, turn)
    snapshot(tmp_path / "in.h5", grid, field, turn)
    nodes = "{ from = -1.2, to = 1.2, cells = 24 }"
    table = f"""[source.grid]
kind = "cartesian"
nodes = [{nodes}, {nodes}, {nodes}]
place = {{ origin = [0.1, -0.2, 0.05], turn = {{ about = [1, 2, 0.5], angle = 0.7 }} }}"""
    right(run(job(table)), field, 3e-4)


def test_a_target_turned_and_moved(tmp_path, run):
    q = np.linspace(-2, 2, 33)
    snapshot(tmp_path / "in.h5", fm.cartesian_grid(q, q, q), field)
    nodes = "{ from = -2, to = 2, cells = 32 }"
    table = f'[source.grid]\nkind = "cartesian"\nnodes = [{nodes}, {nodes}, {nodes}]'
    place = 'kind = "cartesian"\nplace = { origin = [0.3, 0, 0], turn = { about = [0, 0, 1], angle = "90 deg" } }'
    before, after = job(table).split("[target.grid]")
    text = before + "[target.grid]" + after.replace('kind = "cartesian"', place, 1)
    found = run(text)
    # In the frame of the target x is the common y, and y the common -x.
    nodes = np.linspace(-0.5, 0.5, 9)
    own = fm.cartesian_grid(nodes, nodes, nodes)

    def seen(x, y, z):
        bx, by, bz = field(0.3 - y, x, z)
        return by, -bx, bz

    for name, expected in zip(
        ("bx", "by", "bz"), components.faces_from_flux(fm.flux_from_function(own, seen), "physical"), strict=True
    ):
        assert np.abs(found[name] - expected).max() < 3e-4
    x, y, z = own.centres()
    v = flow(0.3 - y, x, z)
    assert np.abs(found["vx"] - v[1]).max() < 0.01
    assert np.abs(found["vy"] + v[0]).max() < 0.01
    assert run(text, command="check") is not None


@pytest.mark.parametrize("basis", ["cartesian", "physical"])
def test_a_quarter_of_the_northern_half(tmp_path, run, basis):
    part = fm.spherical_grid(np.geomspace(0.1, 2, 33), np.linspace(0, np.pi / 2, 13), np.linspace(0, np.pi / 2, 9))
    snapshot(tmp_path / "in.h5", part, even)
    if basis == "physical":
        at = part.centres()
        with h5py.File(tmp_path / "in.h5", "a") as file:
            for name, vector in (("b", np.stack(even(*at))), ("v", flow(*at))):
                for axis, values in enumerate(components.from_cartesian(part, vector, basis)):
                    file[f"{name}{axis + 1}"][...] = values
    with h5py.File(tmp_path / "in.h5", "a") as file:
        file["rho"][...] = 2.0
    table = """[source.grid]
kind = "spherical"
nodes = [
    { from = 0.1, to = 2, cells = 32, spacing = "log" },
    { from = 0, to = "pi/2", cells = 12 },
    { from = 0, to = "pi/2", cells = 8 },
]
symmetry = { equator = "mirror", wedge = 4 }"""
    text = job(table, basis).replace("from = -0.5, to = 0.5", "from = -1, to = 1")
    found = run(text.replace('outside = "refuse"', 'outside = "least energy"'))
    line = np.linspace(-1, 1, 9)
    target = fm.cartesian_grid(line, line, line)
    truth = components.faces_from_flux(fm.flux_from_function(target, even), "physical")
    for name, expected in zip(("bx", "by", "bz"), truth, strict=True):
        far = np.ones(expected.shape, dtype=bool)
        far[3:6, 3:6, 3:6] = False  # the hole
        assert np.abs(found[name] - expected)[far].max() < 0.02
    x, y, z = target.centres()
    far = np.sqrt(x * x + y * y + z * z) > 0.4
    for name, expected in zip(("vx", "vy", "vz"), flow(x, y, z), strict=True):
        assert np.abs(found[name] - expected)[far].max() < 0.02


def test_a_plane_turned_round_its_axis(tmp_path, run):
    plane = fm.cylindrical_grid(np.linspace(0, 2, 33), np.array([0.0, 2 * np.pi]), np.linspace(-1, 1, 17))
    whole = fm.cylindrical_grid(np.linspace(0, 2, 33), TURNS, np.linspace(-1, 1, 17))
    b = components.faces_from_flux(fm.flux_from_function(whole, even), "physical")
    with h5py.File(tmp_path / "in.h5", "w") as file:
        for name, values in zip(("b1", "b2", "b3"), b, strict=True):
            file[name] = values[:, :1] if values.shape[1] == 16 else values[:, [0, 0]]
        file["rho"] = np.full(plane.shape, 2.0)
        for name in ("v1", "v2", "v3"):
            file[name] = np.zeros(plane.shape)
    table = """[source.grid]
kind = "cylindrical"
nodes = [{ from = 0, to = 2, cells = 32 }, [0, "2 pi"], { from = -1, to = 1, cells = 16 }]
symmetry = { around = 16 }"""
    found = run(job(table, "physical", "faces"))
    nodes = np.linspace(-0.5, 0.5, 9)
    truth = components.faces_from_flux(fm.flux_from_function(fm.cartesian_grid(nodes, nodes, nodes), even), "physical")
    for name, expected in zip(("bx", "by", "bz"), truth, strict=True):
        assert np.abs(found[name] - expected).max() < 5e-3


def test_a_grid_of_the_receiving_code(tmp_path, run):
    q = np.linspace(-1, 1, 17)
    snapshot(tmp_path / "in.h5", fm.cartesian_grid(q, q, q), field)
    nodes = "{ from = -1, to = 1, cells = 16 }"
    table = f'[source.grid]\nkind = "cartesian"\nnodes = [{nodes}, {nodes}, {nodes}]'
    own = np.array([-0.5, -0.2, 0.1, 0.3, 0.5])
    with h5py.File(tmp_path / "grid.h5", "w") as file:
        file["x"] = own
    before, after = job(table).split("[target.grid]")
    axis = "{ from = -0.5, to = 0.5, cells = 8 }"
    after = after.replace(axis, '"/x"', 1).replace('kind = "cartesian"', 'kind = "cartesian"\nfile = "grid.h5"', 1)
    found = run(f"{before}[target.grid]{after}")
    assert found["bx"].shape == (5, 8, 8)


@pytest.mark.parametrize(
    ("table", "words"),
    [
        ('kind = "warped"\nnodes = [[0, 1], [0, 1], [0, 1]]', "a warped grid needs map"),
        (
            'kind = "warped"\nnodes = [[0, 1], [0, 1], [0, 1]]\nmap = { python = "none.py:f" }',
            "there is no file",
        ),
        ('kind = "warped"\nnodes = [[0, 1], [0, 1], [0, 1]]\nmap = { python = "nothing" }', "source.grid.map.python"),
        ('kind = "warped"\nnodes = [[0, 1], [0, 1], [0, 1]]\nmap = { }', 'give either python = "file.py:function"'),
        ('kind = "tabulated"', "a tabulated grid needs positions"),
        ('kind = "tabulated"\npositions = ["/x", "/x", "/y"]', "'/y'"),
        ('kind = "cartesian"\nnodes = [[0, 1], [0, 1], [0, 1]]\npoles = ["low", "none", "none"]', "poles is not for"),
        ('kind = "cartesian"\nnodes = [[0, 1], [0, 1], [0, 1]]\nsymmetry = { }', 'give equator = "mirror"'),
        ('kind = "cartesian"\nnodes = [[0, 1], [0, 1], [0, 1]]\nsymmetry = { wedge = 3 }', "no azimuth"),
        (
            'kind = "cartesian"\nnodes = [[0, 1], [0, 1], [0, 1]]\nplace = { turn = { about = [0, 0, 0], angle = 1 } }',
            "expected an axis",
        ),
        (
            'kind = "warped"\nnodes = [[0, 1], [0, 1], [0, 1]]\nmap = { crowded = { separation = 1 } }\n'
            'poles = ["low", "none", "none"]',
            "leave out both keys",
        ),
    ],
)
def test_mistakes_in_grids(tmp_path, run, capsys, table, words):
    with h5py.File(tmp_path / "in.h5", "w") as file:
        for name in ("b1", "b2", "b3", "v1", "v2", "v3", "rho"):
            file[name] = np.ones((1, 1, 1))
        file["x"] = np.zeros((2, 2, 2))
    (tmp_path / "job.toml").write_text(job(f"[source.grid]\n{table}"))
    status = work(Options("move", str(tmp_path / "job.toml"), quiet=True))
    shown = capsys.readouterr().err
    assert status in (2, 4)
    assert words in shown
    assert not (tmp_path / "out.h5").exists()
