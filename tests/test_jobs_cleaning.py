"""Cleaning as a job wants it: walls, masks, weights, relaxation, stencils; a vector potential to start from."""

from __future__ import annotations

import json

import h5py
import numpy as np
import pytest

import fieldmover as fm
from fieldmover.conventions.components import faces_from_flux
from fieldmover.grids.grid import at as at_axis
from fieldmover.jobs.worker import Options, work

pytestmark = pytest.mark.usefixtures("no_pictures")

N = 12
AXIS = f"{{ from = -1, to = 1, cells = {N} }}"
BOX = f"[{AXIS}, {AXIS}, {AXIS}]"
BALL = "[regions]\nball = { radius = 0.4 }\n"


def job(clean: str, at: str = "faces", extra: str = "", target: str = "") -> str:
    return f"""
[source]
file = "in.h5"
[source.grid]
kind = "cartesian"
nodes = {BOX}
[source.magnetic]
at = "{at}"
data = ["/b1", "/b2", "/b3"]
unit = 1
[target]
file = "out.h5"
{target}
[target.magnetic]
at = "{at}"
data = ["/b1", "/b2", "/b3"]
unit = 1
{extra}
[clean]
{clean}
"""


@pytest.fixture
def grid():
    return fm.cartesian_grid(*[np.linspace(-1, 1, N + 1)] * 3)


@pytest.fixture
def dirty(grid):
    """A field with monopoles everywhere."""
    rng = np.random.default_rng(3)
    pot = fm.potential_from_function(grid, lambda x, y, z: (np.sin(y + z), x * z, np.cos(x - y)))
    flux = fm.curl(pot)
    a, b, c = (f + 0.1 * abs(f).max() * rng.standard_normal(f.shape) for f in flux.faces)
    return fm.FaceFlux(grid, (a, b, c))


@pytest.fixture
def run(tmp_path, dirty):
    def run(text: str, command: str = "clean", status: int = 0, at: str = "faces"):
        with h5py.File(tmp_path / "in.h5", "w") as file:
            stored = faces_from_flux(dirty, "physical") if at == "faces" else fm.cells_from_flux(dirty)
            for name, values in zip(("b1", "b2", "b3"), stored, strict=True):
                file[name] = values
        (tmp_path / "job.toml").write_text(text)
        assert work(Options(command, str(tmp_path / "job.toml"), quiet=True, overwrite=True)) == status
        if status:
            return None
        with h5py.File(tmp_path / "out.h5") as file:
            arrays = {name: file[name][()] for name in file if name != "fieldmover"}
        return arrays, json.loads((tmp_path / "out-report" / "report.json").read_text())

    return run


def same_faces(grid, found, expected):
    stored = faces_from_flux(expected, "physical")
    for name, values in zip(("b1", "b2", "b3"), stored, strict=True):
        assert np.abs(found[name] - values).max() < 1e-12


def test_walls(run, grid, dirty):
    found, _ = run(job('walls = { x = "open", y = ["open", "fixed"], z = "fixed" }'))
    same_faces(grid, found, fm.project(dirty, walls={"x": "open", "y": ("open", "fixed"), "z": "fixed"})[0])


def test_fixed_walls_that_carry_net_flux(run, capsys):
    run(job('walls = "fixed"'), status=4)
    assert "net flux" in capsys.readouterr().err


def test_weights_by_a_formula(run, grid, dirty):
    found, _ = run(job('weights = "1 + 10 * B**2"'))
    same_faces(grid, found, fm.project(dirty, weights=lambda b: 1 + 10 * b**2)[0])


def test_frozen_and_excised_regions(run, grid, dirty):
    x, y, z = grid.centres()
    ball = x * x + y * y + z * z <= 0.16
    found, report = run(job('excised = "ball"', extra=BALL))
    same_faces(grid, found, fm.project(dirty, excised=ball)[0])
    assert report["cleaning"]["excised_cells"] == ball.sum()
    assert 0 < report["cleaning"]["change_in_regions"]["ball"] < 1


def test_a_frozen_region_with_monopoles_in_it(run, capsys):
    run(job('frozen = "ball"', extra=BALL), status=4)
    assert "net flux" in capsys.readouterr().err


def test_a_frozen_region_keeps_its_faces(tmp_path, run, grid, dirty):
    clean = fm.project(dirty)[0]
    x, y, z = grid.centres()
    ball = x * x + y * y + z * z <= 0.16
    faces = [f.copy() for f in clean.faces]
    faces[0][-1] += 0.01  # monopoles at a wall, far from the ball
    spoilt = fm.FaceFlux(grid, (faces[0], faces[1], faces[2]))
    text = job('frozen = "ball"', extra=BALL)
    run(text.replace('"in.h5"', '"other.h5"'), status=4)
    with h5py.File(tmp_path / "other.h5", "w") as file:
        for name, values in zip(("b1", "b2", "b3"), faces_from_flux(spoilt, "physical"), strict=True):
            file[name] = values
    found, report = run(text.replace('"in.h5"', '"other.h5"'))
    before = faces_from_flux(spoilt, "physical")[0]
    inside = np.zeros(before.shape, dtype=bool)
    inside[:-1] |= ball
    inside[1:] |= ball
    assert np.abs(found["b1"] - before)[inside].max() < 1e-13
    assert np.abs(found["b1"] - before)[~inside].max() > 1e-3
    assert report["cleaning"]["frozen_faces"] > 0


def test_relaxation_is_shown_beside_projection(run, grid, dirty):
    found, report = run(job('method = "relax"\ntolerance = 0.01'))
    both = report["side_by_side"]
    assert report["cleaning"]["method"] == "relaxation"
    assert both["divergence_of_projection"] < 1e-14 < both["divergence_of_relaxation"]
    # What is left is long waves, so both change nearly the same.
    assert both["energy_of_difference"] < 0.05 * both["energy_of_projection"]
    assert both["correlation"] > 0.95
    assert report["figures"]["divergence"] > 1e-6  # a relaxed field is written as it is
    exact, _ = run(job(""))
    assert np.abs(found["b1"] - exact["b1"]).max() > 1e-6


def test_a_relaxed_field_is_projected_before_it_is_moved(run):
    target = f'[target.grid]\nkind = "cartesian"\nnodes = {BOX.replace("-1", "-0.5").replace("to = 1", "to = 0.5")}'
    _, report = run(job('method = "relax"\nsteps = 30', target=target), command="move")
    assert report["cleaning"]["iterations"] == 30
    assert report["figures"]["divergence"] < 1e-14


@pytest.mark.parametrize("stencil", ["central", "corners"])
def test_values_in_cells_suit_the_stencil_of_the_receiver(run, grid, stencil):
    before, after = job("", at="cells").split("[target.magnetic]")
    found, report = run(f'{before}[target.magnetic]\nstencil = "{stencil}"{after}', at="cells")
    b = np.stack([found["b1"], found["b2"], found["b3"]])
    h = 2 / N
    if stencil == "central":
        parts = [np.roll(b[d], -1, d) - np.roll(b[d], 1, d) for d in range(3)]
        inner = (slice(1, -1),) * 3
        net = sum(parts)[inner] / (2 * h)
    else:
        net = 0
        for d in range(3):
            part = np.diff(b[d], axis=d)
            for e in range(3):
                if e != d:
                    part = 0.5 * (part[at_axis(e, slice(0, -1))] + part[at_axis(e, slice(1, None))])
            net = net + part / h
    assert np.abs(net).max() < 1e-12 * np.abs(b).max() / h
    # The mean of two opposite faces has no divergence at corners to begin with: eight net fluxes add up to it.
    before = report["stencil_cleaning"]["divergence_before"]["linf"]
    assert before > 1e-3 if stencil == "central" else before < 1e-14


@pytest.mark.parametrize("gauge", ["smooth", "axial", "none"])
@pytest.mark.parametrize("at", ["edges", "cells"])
def test_a_vector_potential_to_start_from(run, grid, gauge, at):
    table = f'[target.potential]\ndata = ["/a1", "/a2", "/a3"]\nat = "{at}"\nunit = 2\ngauge = "{gauge}"\n'
    found, _ = run(job("", extra=table))
    a = [2 * found[name] for name in ("a1", "a2", "a3")]
    h = 2 / N
    if at == "edges":
        flux = fm.curl(fm.EdgePotential(grid, (a[0] * h, a[1] * h, a[2] * h)))
        same_faces(grid, found, flux)
    else:
        bz = (a[1][2:, 1:-1] - a[1][:-2, 1:-1]) / (2 * h) - (a[0][1:-1, 2:] - a[0][1:-1, :-2]) / (2 * h)
        # Central differences of mean values: bz averaged over the four columns around, and up and down.
        mean = 0.5 * (found["b3"][1:-1, 1:-1, 1:] + found["b3"][1:-1, 1:-1, :-1])
        assert np.corrcoef(bz.ravel(), mean.ravel())[0, 1] > 0.9
    if gauge == "axial":
        assert not a[0].any()


@pytest.mark.parametrize(
    ("clean", "words"),
    [
        ('method = "relaxed"', "did you mean 'relax'"),
        ("steps = 3", 'steps and damping go with method = "relax"'),
        ('excised = "hole"', "clean.excised: no region 'hole'; the job has ball"),
        ('walls = { r = "open" }', "axis 'r', expected x, y, z"),
        ('weights = "1 / C"', "unknown name 'C'"),
        ('weights = "B - 100"', "weights"),
        ("tolerance = 1e-30", "round-off"),
        ("tolerance = 2", "clean.tolerance"),
        ('frozen = "everything"', "every face is"),
        ('excised = "everything"', "every cell is"),
    ],
)
def test_mistakes_in_cleaning(tmp_path, run, capsys, clean, words):
    text = job(clean, extra=BALL + "everything = { radius = 10 }\n" * ("everything" in clean))
    run(text, status=2)
    assert words in capsys.readouterr().err
    assert not (tmp_path / "out.h5").exists()


def test_excised_cells_cannot_be_moved(run, capsys):
    target = f'[target.grid]\nkind = "cartesian"\nnodes = {BOX.replace("-1", "-0.5").replace("to = 1", "to = 0.5")}'
    run(job('excised = "ball"', target=target, extra=BALL), command="move", status=2)
    assert "clean.excised: cells that may hold monopoles cannot be moved" in capsys.readouterr().err


def test_a_stencil_needs_values_in_cells_of_an_even_box(run, capsys):
    before, after = job("").split("[target.magnetic]")
    run(f'{before}[target.magnetic]\nstencil = "central"{after}', status=2)
    assert 'takes the divergence of values at = "cells"' in capsys.readouterr().err
