"""Targets of jobs with finer boxes, with ghost layers, and of fields whose hole carries net flux."""

from __future__ import annotations

import json

import h5py
import numpy as np
import pytest

import fieldmover as fm
from fieldmover.conventions.components import faces_from_flux
from fieldmover.interpolation.charge import point_charge_flux
from fieldmover.jobs.worker import Options, work

pytestmark = pytest.mark.usefixtures("no_pictures")

BALL = fm.spherical_grid(np.linspace(0.2, 2, 19), np.linspace(0, np.pi, 13), np.linspace(0, 2 * np.pi, 25))


def axis(low, high, cells):
    return f"{{ from = {low}, to = {high}, cells = {cells} }}"


def box(low, high, cells):
    return f"[{', '.join([axis(low, high, cells)] * 3)}]"


def job(target: str, target_more: str = "", more: str = "") -> str:
    return f"""
[source]
file = "in.h5"
[source.grid]
kind = "spherical"
nodes = {[q.tolist() for q in BALL.nodes]}
[source.magnetic]
at = "faces"
basis = "physical"
data = ["/b1", "/b2", "/b3"]
unit = 1
[source.fluid.density]
data = "/rho"
carry = "conserve"
[source.fluid.velocity]
data = ["/v1", "/v2", "/v3"]
basis = "cartesian"
carry = "by mass"
[target]
file = "out.h5"
{target_more}
[target.grid]
{target}
[target.magnetic]
data = ["/bx", "/by", "/bz"]
unit = 1
basis = "physical"
[target.fluid]
density = "/rho"
velocity = {{ data = ["/vx", "/vy", "/vz"], basis = "physical" }}
{more}
"""


@pytest.fixture
def run(tmp_path):
    def run(text: str, status: int = 0, command: str = "move", flux: fm.FaceFlux | None = None):
        if flux is None:
            pot = fm.potential_from_function(BALL, lambda x, y, z: (np.sin(y), x * z, np.cos(x)))
            flux = fm.curl(pot)
        x, y, z = BALL.centres()
        with h5py.File(tmp_path / "in.h5", "w") as file:
            for name, values in zip(("b1", "b2", "b3"), faces_from_flux(flux, "physical"), strict=True):
                file[name] = values
            file["rho"] = 1 + 0.2 * np.sin(x + y)
            for name, values in zip(("v1", "v2", "v3"), (-y, x, 0.3 * z), strict=True):
                file[name] = values
        (tmp_path / "job.toml").write_text(text)
        assert work(Options(command, str(tmp_path / "job.toml"), quiet=True, overwrite=True)) == status
        if status:
            return None
        folder = "out-report" if command == "move" else "out-check"
        with h5py.File(tmp_path / "out.h5") as file:
            found = {}
            file.visititems(lambda name, it: found.__setitem__(name, it[()]) if isinstance(it, h5py.Dataset) else None)
        return found, json.loads((tmp_path / folder / "report.json").read_text())

    return run


FINER = f"""kind = "cartesian"
nodes = {box(-1, 1, 8)}
[[target.grid.finer]]
group = "/fine"
nodes = {box(-0.5, 0.5, 8)}
[[target.grid.finer]]
level = 2
group = "/finest"
nodes = {box(0, 0.25, 6)}
"""


def test_finer_boxes(run):
    found, report = run(job(FINER))
    h = {"": 0.25, "fine/": 0.125, "finest/": 0.25 / 6}
    for group, step in h.items():
        bx, by, bz = (found[f"{group}{name}"] for name in ("bx", "by", "bz"))
        net = np.diff(bx, axis=0) + np.diff(by, axis=1) + np.diff(bz, axis=2)
        assert np.abs(net).max() < 1e-12
        assert found[f"{group}rho"].shape == net.shape
        assert step > 0
    fine = found["fine/bx"][::2].reshape(5, 4, 2, 4, 2).mean(axis=(2, 4))
    assert np.abs(fine - found["bx"][2:7, 2:6, 2:6]).max() < 1e-13
    mean = found["fine/rho"].reshape(4, 2, 4, 2, 4, 2).mean(axis=(1, 3, 5))
    assert np.abs(mean - found["rho"][2:6, 2:6, 2:6]).max() < 1e-13
    assert [part["group"] for part in report["boxes"]] == ["/", "/fine", "/finest"]
    assert report["figures"]["divergence"] < 1e-12
    assert report["figures"]["mass_change"] < 1e-12
    _, again = run(job(FINER), command="check")
    assert [part["mass"] for part in again["boxes"]] == [part["mass"] for part in report["boxes"]]


def test_ghost_layers_of_a_box(run):
    target = f'kind = "cartesian"\nnodes = {box(0.4, 0.9, 8)}'
    plain, _ = run(job(target))
    found, report = run(job(target, "ghosts = [2, 1, 0]"))
    assert found["bx"].shape == (13, 10, 8)
    assert (found["bx"][2:-2, 1:-1] == plain["bx"]).all()
    assert np.abs(found["rho"][2:-2, 1:-1] - plain["rho"]).max() < 1e-14
    assert np.abs(found["vy"][2:-2, 1:-1] - plain["vy"]).max() < 1e-14
    net = sum(np.diff(found[name], axis=d) for d, name in enumerate(("bx", "by", "bz")))
    assert np.abs(net).max() < 1e-12
    wide = np.linspace(0.4 - 0.125, 0.9 + 0.125, 13)
    grid = fm.cartesian_grid(wide, np.linspace(0.3375, 0.9625, 11), np.linspace(0.4, 0.9, 9))
    x, y, _ = grid.centres()
    assert np.abs(found["rho"] - 1 - 0.2 * np.sin(x + y)).max() < 0.02
    assert report["figures"]["divergence"] < 1e-14
    _, again = run(job(target, "ghosts = [2, 1, 0]"), command="check")
    assert again["fields"]["stored"]["energy"] == report["fields"]["stored"]["energy"]


def test_ghost_layers_round_a_pole_and_a_seam(run):
    coarse = [np.linspace(0.5, 1.5, 9), np.linspace(0, np.pi, 9), np.linspace(0, 2 * np.pi, 17)]
    target = f'kind = "spherical"\nnodes = {[q.tolist() for q in coarse]}'
    found, _ = run(job(target, "ghosts = [0, 2, 2]"))
    b2, vphi, vr = found["by"], found["vz"], found["vx"]
    assert b2.shape == (8, 13, 20)
    # The seam repeats; across the pole lies the cell half a turn away, whose azimuthal unit vector is reversed.
    assert (found["rho"][:, :, :2] == found["rho"][:, :, -4:-2]).all()
    assert (found["rho"][:, 1, 2:-2] == np.roll(found["rho"][:, 2, 2:-2], 8, axis=1)).all()
    assert (vphi[:, 1, 2:-2] == -np.roll(vphi[:, 2, 2:-2], 8, axis=1)).all()
    assert (vr[:, 1, 2:-2] == np.roll(vr[:, 2, 2:-2], 8, axis=1)).all()


def test_a_hole_that_carries_net_flux(run, capsys):
    flux = point_charge_flux(BALL, 4 * np.pi)
    text = job(f'kind = "cartesian"\nnodes = {box(-1, 1, 7)}')
    run(text, status=4, flux=flux)
    assert "carries a net flux of 12.566" in capsys.readouterr().err
    found, report = run(text + '\n[move]\nnet_flux = "point"\n', flux=flux)
    assert np.isclose(report["charge"]["net_flux"], 4 * np.pi)
    assert report["charge"]["cell"] == [3, 3, 3]
    assert report["figures"]["divergence"] < 1e-12  # but for the cell that holds it
    # The field of a unit charge: flux through a rectangle at distance a from its corner over it, in closed form
    # (Khadjavi 1968, from memory): the wall x = 1 is a sixth of the sphere.
    assert np.isclose(found["bx"][-1].sum() * (2 / 7) ** 2, 4 * np.pi / 6, rtol=1e-6)
    net = sum(np.diff(found[name], axis=d) for d, name in enumerate(("bx", "by", "bz"))) * (2 / 7) ** 2
    assert np.isclose(net[3, 3, 3], 4 * np.pi)
    net[3, 3, 3] = 0
    assert np.abs(net).max() < 1e-12
    run(text + '\n[move]\nnet_flux = "point"\npoint = [0.8, 0, 0]\n', status=2, flux=flux)
    assert "move.point = [0.8, 0.0, 0.0]: point charge: the centre" in capsys.readouterr().err
    _, again = run(text + '\n[move]\nnet_flux = "point"\n', flux=flux, command="check")
    assert again["charge"] == report["charge"]
    assert again["figures"]["divergence"] == report["figures"]["divergence"]


@pytest.mark.parametrize(
    ("target", "target_more", "more", "words"),
    [
        (FINER.replace("0.25, cells = 6", "0.2, cells = 6"), "", "", "target.grid.finer"),
        (FINER.replace('"/finest"', '"/fine"'), "", "", "expected another one for each box"),
        (FINER.replace('"/finest"', '"/fieldmover"'), "", "", "not /fieldmover"),
        (FINER, "ghosts = [1, 1, 1]", "", "finer boxes have none"),
        (FINER, "", '[move]\nkeep = "angular momentum"', "does not go with finer boxes"),
        (FINER.replace('kind = "cartesian"', 'kind = "cylindrical"'), "", "", "finer boxes lie in a cartesian grid"),
        (f'kind = "cartesian"\nnodes = {box(-1, 1, 4)}', "ghosts = [-1, 0, 0]", "", "target.ghosts[0]"),
        ('kind = "spherical"\nnodes = [[0.3, 0.9], [0.5, 1], [0, 1]]', "ghosts = [1, 0, 0]", "", "target.ghosts"),
    ],
)
def test_mistakes(tmp_path, run, capsys, target, target_more, more, words):
    assert run(job(target, target_more, more), status=2) is None
    assert words in capsys.readouterr().err
    assert not (tmp_path / "out.h5").exists()
