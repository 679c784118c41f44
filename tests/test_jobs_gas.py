"""The gas in jobs: units, kinds of velocity, metrics, formulas, backgrounds, and what the receiver can evolve."""

from __future__ import annotations

import json

import h5py
import numpy as np
import pytest

import fieldmover as fm
from fieldmover.jobs.worker import Options, work

pytestmark = pytest.mark.usefixtures("no_pictures")

BOX = "[{ from = -1, to = 1, cells = 8 }, { from = -1, to = 1, cells = 8 }, { from = -1, to = 1, cells = 8 }]"
SMALL = BOX.replace("-1", "-0.5").replace("to = 1", "to = 0.5").replace("cells = 8", "cells = 5")
CELLS = (8, 8, 8)
COMMON = {
    "grid": f'kind = "cartesian"\nnodes = {BOX}',
    "magnetic": 'at = "cells"\ndata = ["/b1", "/b2", "/b3"]\nunit = 1',
    "fluid": '[source.fluid.density]\ndata = "/rho"\ncarry = "conserve"',
    "target": f'kind = "cartesian"\nnodes = {SMALL}',
    "out": 'density = "/rho"',
    "more": "",
}


def job(**changes: str) -> str:
    part = {**COMMON, **changes}
    return f"""
[source]
file = "in.h5"
time = 3
[source.grid]
{part["grid"]}
[source.magnetic]
{part["magnetic"]}
{part["fluid"]}
[target]
file = "out.h5"
[target.grid]
{part["target"]}
[target.magnetic]
data = ["/bx", "/by", "/bz"]
unit = 1
[target.fluid]
{part["out"]}
{part["more"]}
"""


@pytest.fixture
def run(tmp_path):
    def run(text: str, arrays: dict, status: int = 0):
        with h5py.File(tmp_path / "in.h5", "w") as file:
            for name, values in arrays.items():
                file[name] = values
        (tmp_path / "job.toml").write_text(text)
        assert work(Options("move", str(tmp_path / "job.toml"), quiet=True, overwrite=True)) == status
        if status:
            assert not (tmp_path / "out.h5").exists()
            return None
        with h5py.File(tmp_path / "out.h5") as file:
            found = {name: file[name][()] for name in file if name != "fieldmover"}
        return found, json.loads((tmp_path / "out-report" / "report.json").read_text())

    return run


def uniform(shape=CELLS, **more):
    arrays = {name: np.full(shape, value) for name, value in (("b1", 0.3), ("b2", -0.2), ("b3", 0.5), ("rho", 2.0))}
    return {**arrays, **{name: np.broadcast_to(value, shape) for name, value in more.items()}}


VELOCITY = """
[source.fluid.velocity]
data = ["/v1", "/v2", "/v3"]
carry = "by mass"
"""


def test_units_of_both_codes(run):
    """By hand: a length of 1 is 2 cm here and 0.5 cm there, and so on."""
    target = BOX.replace("from = -1", "from = -4").replace("to = 1", "to = 4")
    text = job(
        target=f'kind = "cartesian"\nnodes = {target}',
        fluid=COMMON["fluid"] + VELOCITY + '[source.fluid.pressure]\ndata = "/p"\ncarry = "point"\n',
        out='density = "/rho"\nvelocity = ["/vx", "/vy", "/vz"]\npressure = "/p"',
        more="[units]\nsource = { length = 2, mass = 3, time = 4 }\ntarget = { length = 0.5, mass = 1, time = 1 }",
    )
    found, report = run(text, uniform(v1=0.1, v2=0.2, v3=-0.3, p=1.5))
    length, mass, time = 2 / 0.5, 3.0, 4.0
    assert np.allclose(found["rho"], 2.0 * mass / length**3, rtol=1e-12)
    assert np.allclose(found["vz"], -0.3 * length / time, rtol=1e-12)
    pressure = mass / (length * time**2)
    assert np.allclose(found["p"], 1.5 * pressure, rtol=1e-12)
    assert np.allclose(found["bx"], 0.3 * np.sqrt(pressure), rtol=1e-9)  # B^2 / 2 is a pressure
    assert np.isclose(report["time"], 3 * time)
    assert np.isclose(report["fluid"]["density"]["stored"], 2.0 * 8 * mass)
    assert report["figures"]["mass_change"] < 1e-13


def test_free_fall_on_to_a_hole(run):
    """u^i of rest at infinity in Kerr-Schild coordinates, M = 1: u^r = -s, u^t = (1 + s + s^2) / (1 + s), s^2 = 2 / r.

    Derived from the conserved energy, -u_t = 1; the value at r = 4 stands in Bardeen, Press & Teukolsky (1972), units
    of these; from memory.
    """
    grid = fm.spherical_grid(np.geomspace(3, 12, 25), np.linspace(0, np.pi, 25), np.linspace(0, 2 * np.pi, 33))
    r = np.linalg.norm(grid.centres(), axis=0)
    s = np.sqrt(2 / r)
    nodes = [q.tolist() for q in grid.nodes]
    target = "[{ from = 3, to = 5, cells = 6 }, { from = 3, to = 5, cells = 6 }, { from = 3, to = 5, cells = 6 }]"
    text = job(
        grid=f'kind = "spherical"\nnodes = {nodes}',
        magnetic='at = "cells"\ndata = ["/b1", "/b2", "/b3"]\nunit = 1\nbasis = "coordinate"\ndensitised = true',
        fluid=COMMON["fluid"] + VELOCITY + 'kind = "four-velocity"\nbasis = "coordinate"\n',
        target=f'kind = "cartesian"\nnodes = {target}',
        out='density = "/rho"\nvelocity = { data = ["/vx", "/vy", "/vz"], kind = "coordinate" }',
        more='[metric]\nname = "schwarzschild"',
    )
    zero = np.zeros(grid.shape)
    arrays = {"b1": np.sin(grid.centres()[2] * 0) * 0, "b2": zero, "b3": zero, "rho": zero + 3.0}
    found, report = run(text, {**arrays, "v1": -s, "v2": zero, "v3": zero})
    box = fm.cartesian_grid(*[np.linspace(3, 5, 7)] * 3)
    x, y, z = box.centres()
    r = np.sqrt(x * x + y * y + z * z)
    s = np.sqrt(2 / r)
    radial = -s * (1 + s) / (1 + s + s * s)
    for name, c in (("vx", x), ("vy", y), ("vz", z)):
        assert np.abs(found[name] - radial * c / r).max() < 2e-3
    assert np.abs(found["rho"] - 3.0).max() < 0.01
    # Mass: rho u^t sqrt(-g), with sqrt(-g) = 1 in these coordinates; one value a cell is a sum of second order.
    u_t = (1 + s + s * s) / (1 + s)
    assert np.isclose(report["fluid"]["density"]["stored"], (3.0 * u_t * box.cell_volumes()).sum(), rtol=2e-3)
    assert report["figures"]["mass_change"] < 1e-12


def test_a_densitised_density_holds_metric_and_motion(run):
    """D = sqrt(gamma) W rho of the file is the content of a unit of coordinate volume: its sum stays."""
    grid = fm.spherical_grid(np.linspace(3, 6, 13), np.linspace(0.5, 2.5, 13), np.linspace(0, 2 * np.pi, 17))
    nodes = [q.tolist() for q in grid.nodes]
    coarse = [nodes[0][::2], nodes[1][::3], nodes[2][::4]]
    text = job(
        grid=f'kind = "kerr-schild"\nnodes = {nodes}',
        magnetic='at = "cells"\ndata = ["/b1", "/b2", "/b3"]\nunit = 1\nbasis = "coordinate"',
        fluid=COMMON["fluid"] + "\ndensitised = true" + VELOCITY + 'kind = "W eulerian"\nbasis = "coordinate"\n',
        target=f'kind = "kerr-schild"\nnodes = {coarse}',
        out='density = { data = "/rho", densitised = true }',
        more='[metric]\nname = "kerr"\nspin = 0.9',
    ).replace("[target.magnetic]", '[target.magnetic]\nbasis = "coordinate"\nat = "cells"')
    zero = np.zeros(grid.shape)
    density = np.random.default_rng(0).uniform(1, 2, grid.shape)
    arrays = {"b1": zero, "b2": zero, "b3": zero, "v1": zero + 0.2, "v2": zero, "v3": zero + 0.01, "rho": density}
    found, report = run(text, arrays)
    before = density * np.einsum("i,j,k->ijk", *[np.diff(q) for q in nodes])
    after = found["rho"] * np.einsum("i,j,k->ijk", *[np.diff(q) for q in coarse])
    assert np.isclose(report["fluid"]["density"]["source"], before.sum(), rtol=1e-12)
    # In the same coordinates cells join, so that every content is a sum.
    joined = before.reshape(6, 2, 4, 3, 4, 4).sum(axis=(1, 3, 5))
    assert np.abs(after - joined).max() < 1e-11 * joined.max()
    assert report["figures"]["mass_change"] < 1e-12


def test_formulas_on_both_sides(run):
    text = job(
        fluid=COMMON["fluid"]
        + '\n[source.fluid.pressure]\ndata = "/p"\ncarry = "point"'
        + '\n[source.fluid."internal energy"]\nformula = "pressure / (5/3 - 1) / density"\ncarry = "by mass"'
        + VELOCITY,
        out='density = "/rho"\nspeed = { data = "/s", formula = "sqrt(velocity_x**2 + velocity_y**2)" }\n'
        'heat = { data = "/p", formula = "(5/3 - 1) * density * internal_energy" }\n'
        'magnetic = { data = "/m", formula = "B**2 / 2 + 0 * r" }',
    )
    found, _ = run(text, uniform(p=1.5, v1=0.3, v2=0.4, v3=9.0))
    assert np.allclose(found["p"], 1.5, rtol=1e-12)
    assert np.allclose(found["s"], 0.5, rtol=1e-12)
    assert np.allclose(found["m"], 0.5 * (0.09 + 0.04 + 0.25), rtol=1e-9)
    assert "internal energy" not in found


def test_a_background_in_the_corners(run):
    """The source is a ball; outside it density falls as a power of radius."""
    grid = fm.spherical_grid(np.linspace(0.1, 1, 10), np.linspace(0, np.pi, 9), np.linspace(0, 2 * np.pi, 17))
    text = job(
        grid=f'kind = "spherical"\nnodes = {[q.tolist() for q in grid.nodes]}',
        magnetic='at = "cells"\ndata = ["/b1", "/b2", "/b3"]\nunit = 1\nbasis = "cartesian"',
        fluid=COMMON["fluid"] + VELOCITY + 'basis = "cartesian"\n',
        target='kind = "cartesian"\nnodes = [[0.9, 1.5, 2.1], [0.9, 1.5, 2.1], [-0.1, 0.1]]'.replace("0.9", "0.4"),
        out='density = { data = "/rho", outside = "1e-3 * r**-2" }\n'
        'velocity = { data = ["/vx", "/vy", "/vz"], outside = ["0.1 * x", 0, "-2"] }',
    )
    found, report = run(text, uniform(grid.shape, v1=1.0, v2=0.0, v3=0.0))
    x = y = 1.8
    assert np.isclose(found["rho"][1, 1, 0], 1e-3 / (x * x + y * y), rtol=1e-12)
    assert np.isclose(found["vx"][1, 1, 0], 0.18)
    assert np.isclose(found["vz"][1, 1, 0], -2)
    assert report["fluid"]["density"]["added_outside"] > 0
    assert report["figures"]["mass_change"] < 1e-12


def test_a_map_that_turns(tmp_path, run):
    """What rests on a grid that turns with rate 2 moves with 2 R."""
    (tmp_path / "turning.py").write_text(
        "import numpy as np\n\ndef turning(R, phi, z, phase):\n"
        "    return R * np.cos(phi + phase), R * np.sin(phi + phase), z\n"
    )
    grid = fm.cylindrical_grid(np.linspace(0.2, 1.2, 13), np.linspace(0, 2 * np.pi, 33), np.linspace(-1, 1, 9))
    nodes = [q.tolist() for q in grid.nodes]
    text = job(
        grid=f'kind = "warped"\nnodes = {nodes}\nperiodic = [false, true, false]\n'
        'map = { python = "turning.py:turning", parameters = { phase = 0.3 }, rates = { phase = 2 } }',
        magnetic='at = "cells"\ndata = ["/b1", "/b2", "/b3"]\nunit = 1\nbasis = "cartesian"',
        fluid=COMMON["fluid"] + VELOCITY + 'basis = "coordinate"\n',
        target=f'kind = "cartesian"\nnodes = {SMALL}'.replace("-0.5", "0.3").replace("0.5", "0.8"),
        out='velocity = ["/vx", "/vy", "/vz"]',
    )
    found, _ = run(text, uniform(grid.shape, v1=0.0, v2=0.0, v3=0.0))
    x, y, _ = fm.cartesian_grid(*[np.linspace(0.3, 0.8, 6)] * 3).centres()
    assert np.abs(found["vx"] + 2 * y).max() < 0.02
    assert np.abs(found["vy"] - 2 * x).max() < 0.02


def test_angular_momentum_is_kept_if_asked_for(run):
    """A ring that turns about an axis off the centre of the grid."""
    grid = fm.spherical_grid(np.linspace(0.1, 0.9, 17), np.linspace(0, np.pi, 13), np.linspace(0, 2 * np.pi, 25))
    x, y, z = grid.centres()
    density = np.exp(-((np.hypot(x, y) - 0.5) ** 2 + z * z) / 0.02)
    arrays = {**uniform(grid.shape, v1=-(y - 0.1), v2=x, v3=0.0), "rho": density}
    text = job(
        grid=f'kind = "spherical"\nnodes = {[q.tolist() for q in grid.nodes]}',
        magnetic='at = "cells"\ndata = ["/b1", "/b2", "/b3"]\nunit = 1\nbasis = "cartesian"',
        fluid=COMMON["fluid"] + VELOCITY + 'basis = "cartesian"\n',
        target=f'kind = "cartesian"\nnodes = {BOX.replace("cells = 8", "cells = 12")}',
        out='density = "/rho"\nvelocity = ["/vx", "/vy", "/vz"]',
        more='[move]\nkeep = "angular momentum"\naxis = { centre = [0, 0.1, 0] }',
    )
    box = fm.cartesian_grid(*[np.linspace(-1, 1, 13)] * 3)
    whole = (density * grid.cell_volumes() * (x * x + (y - 0.1) ** 2)).sum()
    sums = []
    for what in (text, text.replace('keep = "angular momentum"\n', "")):
        found, report = run(what, arrays)
        bx, by, _ = box.centres()
        mass = found["rho"] * box.cell_volumes()
        sums.append((mass * (bx * found["vy"] - (by - 0.1) * found["vx"])).sum())
        assert np.isclose(report["angular_momentum"]["stored"], sums[-1], rtol=1e-12)
    assert abs(sums[0] / whole - 1) < 1e-12
    assert abs(sums[1] / whole - 1) > 1e-6


def test_a_transition_to_the_background(run):
    wide = BOX.replace("cells = 8", "cells = 16").replace("-1", "-1.5").replace("to = 1", "to = 1.5")
    text = job(
        fluid=COMMON["fluid"] + '\n[source.fluid.tracer]\ndata = "/t"\ncarry = "point"',
        target=f'kind = "cartesian"\nnodes = {wide}',
        out='density = { data = "/rho", outside = 0.5 }\ntracer = { data = "/t", outside = 1.0 }',
        more="[move]\nblend = 0.5",
    )
    found, report = run(text, uniform(t=3.0))
    line = found["rho"][:, 8, 8]
    assert line[0] == 0.5
    assert abs(line[8] - 2.0) <= np.spacing(2.0)  # a sum over the parts of a cell
    assert (np.diff(line[:9]) >= -np.spacing(2.0)).all()
    assert ((line > 0.5 + 1e-9) & (line < 2 - 1e-9)).sum() > 2
    assert found["t"].min() == 1.0
    assert abs(found["t"].max() - 3.0) < 1e-12
    assert report["fluid"]["density"]["removed_by_blend"] > 0
    assert report["figures"]["mass_change"] < 1e-12


def test_random_changes_without_divergence(run):
    plain, _ = run(job(), uniform())
    arrays = {**uniform(), "b3": 1 + np.random.default_rng(0).random(CELLS)}
    before, _ = run(job(), arrays)
    found, report = run(job(more="[move]\nperturb = { size = 0.01, seed = 5 }"), arrays)
    again, _ = run(job(more="[move]\nperturb = { size = 0.01, seed = 5 }"), arrays)
    other, _ = run(job(more="[move]\nperturb = { size = 0.01, seed = 6 }"), arrays)
    assert 0 < np.abs(found["bz"] - before["bz"]).max() < 0.5
    assert (found["bz"] == again["bz"]).all()
    assert (found["bz"] != other["bz"]).any()
    assert report["figures"]["divergence"] < 1e-14
    assert report["perturbation"]["size"] == 0.01
    assert plain["bx"].shape == found["bx"].shape


HEALTH = "[health]\ndensity_floor = 0.5\n"


@pytest.mark.parametrize("cure", ["refuse", "report", "apply"])
def test_what_the_receiver_cannot_evolve(tmp_path, run, capsys, cure):
    arrays = uniform()
    arrays["rho"] = arrays["rho"].copy()
    arrays["rho"][:4] = 0.1
    done = run(job(more=f'{HEALTH}cure = "{cure}"'), arrays, status=4 if cure == "refuse" else 0)
    if done is None:
        told = capsys.readouterr().err
        assert "refused" in told
        assert "density in " in told
        return
    found, report = done
    rule = next(rule for rule in report["health"] if rule["rule"] == "density")
    assert rule["count"] > 0
    assert rule["applied"] == (cure == "apply")
    assert (found["rho"].min() >= 0.5) == (cure == "apply")
    assert report["figures"]["mass_change"] < 1e-12  # what floors add is told apart
    added = report["fluid"]["density"]["added_by_cure"]
    assert np.isclose(added, rule["mass_added"]) if cure == "apply" else added == 0
    assert work(Options("check", str(tmp_path / "job.toml"), quiet=True)) == 0
    again = json.loads((tmp_path / "out-check" / "report.json").read_text())
    assert again["figures"]["mass_change"] < 1e-12


def test_the_metric_of_a_file(run):
    """Flat space in twice the length: gamma = 4, sqrt(gamma) = 8; what is coordinate volume 1 holds 8."""
    gamma = {"g11": 4.0, "g12": 0.0, "g13": 0.0, "g22": 4.0, "g23": 0.0, "g33": 4.0, "lapse": 1.0}
    names = '["/g11", "/g12", "/g13", "/g22", "/g23", "/g33"]'
    text = job(
        grid=f'kind = "cartesian"\nnodes = {BOX}\n[source.metric]\nlapse = "/lapse"\ngamma = {names}',
        fluid=COMMON["fluid"] + VELOCITY + 'kind = "eulerian"\n',
        out='density = { data = "/rho", densitised = true }\n'
        'velocity = { data = ["/vx", "/vy", "/vz"], kind = "W eulerian" }',
        target=f'kind = "cartesian"\nnodes = {BOX}\nfile = "in.h5"\n[target.metric]\ngamma = {names}',
    ).replace(f'nodes = {BOX}\nfile = "in.h5"', 'nodes = ["/x", "/x", "/x"]\nfile = "in.h5"')
    in_flux = 'unit = 1\nbasis = "coordinate"\ndensitised = true\n[target.fluid]'
    text = text.replace("unit = 1\n[target.fluid]", in_flux)
    found, report = run(text, {**uniform(v1=0.3, v2=0.0, v3=0.0, **gamma), "x": np.linspace(-1, 1, 9)})
    lorentz = 1 / np.sqrt(1 - 4 * 0.09)
    # Proper volume 8 x 8, B^2 = 4 times the sum of squares of B^i.
    energy = 0.5 * 4 * (0.09 + 0.04 + 0.25) * 8 * 8
    assert np.allclose([part["energy"] for part in report["curved"].values()], energy, rtol=1e-9)
    assert np.allclose(found["vx"], 0.3 * lorentz, rtol=1e-12)
    assert np.allclose(found["rho"], 2.0 * 8 * lorentz, rtol=1e-12)
    assert np.allclose(found["bx"], 0.3 * 8, rtol=1e-12)


@pytest.mark.parametrize(
    ("changes", "status", "words"),
    [
        ({"fluid": COMMON["fluid"] + VELOCITY + 'kind = "four-velocity"'}, 2, "needs a metric"),
        ({"fluid": COMMON["fluid"] + VELOCITY + 'kind = "fast"'}, 2, "'coordinate', 'eulerian'"),
        ({"fluid": COMMON["fluid"] + VELOCITY, "more": '[metric]\nname = "flat"'}, 4, "as fast as light or faster"),
        ({"more": '[metric]\nname = "kerr"\nspin = 2'}, 2, "expected a length of at most the mass"),
        ({"more": '[metric]\nname = "flat"\nspin = 0.1'}, 2, 'spin goes with name = "kerr"'),
        ({"more": "[units]\nsource = { length = 1 }\ntarget = { geometrised = 1 }"}, 2, "does not settle"),
        (
            {"more": "[units]\nsource = { length = 1, mass = 1, time = 1, velocity = 2 }\n"
             "target = { length = 1, mass = 1, time = 1 }"},
            2,
            "expected no unit twice",
        ),
        ({"out": 'density = "/rho"\nx = { data = "/x", formula = "densty + 1" }'}, 2, "did you mean 'density'?"),
        ({"out": 'density = "/rho"\nx = { data = "/x", formula = "open(1)" }'}, 2, "target.fluid.x.formula"),
        ({"out": 'density = "/rho"\nx = { data = "/x", formula = "log(-density)" }'}, 2, "not finite"),
        ({"out": 'density = { data = "/rho", outside = "q + 1" }'}, 2, "unknown name 'q'"),
        ({"more": "[health]\nlorentz_ceiling = 10"}, 2, "needs target.fluid.velocity"),
        ({"more": "[health]\nlorentz_ceiling = 0.5"}, 2, "health.lorentz_ceiling"),
        ({"grid": COMMON["grid"] + '\n[source.metric]\nlapse = "/rho"'}, 2, "one side has a metric"),
        (
            {"grid": f'kind = "kerr-schild"\nnodes = {BOX}'},
            2,
            '"kerr-schild" needs [metric], for the spin',
        ),
        (
            {"grid": 'kind = "spherical"\nnodes = [[3, 4], [1, 2], [0, 1]]',
             "more": '[metric]\nname = "kerr"\nspin = 0.5', "magnetic": COMMON["magnetic"] + '\nbasis = "coordinate"'},
            2,
            "expected kerr_schild_grid",
        ),
    ],
)  # fmt: skip
def test_mistakes(run, capsys, changes, status, words):
    shape = (1, 1, 1) if "[3, 4]" in changes.get("grid", "") else CELLS
    assert run(job(**changes), uniform(shape, v1=2.0, v2=0.0, v3=0.0), status=status) is None
    assert words in capsys.readouterr().err
