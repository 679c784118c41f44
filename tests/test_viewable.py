"""Views of an output in XDMF: as XML and HDF5 readers see them, and VTK's own reader where it is installed."""

from __future__ import annotations

import json
import subprocess
import sys
import xml.etree.ElementTree as ElementTree
from importlib.util import find_spec

import h5py
import numpy as np
import pytest

import fieldmover as fm
from fieldmover.jobs.demo import Ring, job_text, write_snapshot
from fieldmover.jobs.worker import Options, work

BALL = """kind  = "spherical"
nodes = [
    { from = 1.5, to = 6, cells = 10 },
    { from = 0, to = "pi", cells = 8 },
    { from = 0, to = "2 pi", cells = 12 },
]

[target.magnetic]
basis = "physical"
"""


@pytest.fixture(scope="module", params=["cartesian", "spherical"])
def moved(request, tmp_path_factory):
    """The folder of a job with a view, and its grid."""
    folder = tmp_path_factory.mktemp("view")
    write_snapshot(folder / "ring.h5", (24, 16, 32))
    text = job_text().replace("cells = 128", "cells = 16")
    text = text[: text.index("[limits]")].replace(
        'file = "ring-cartesian.h5"', 'file = "out.h5"\nview = true'
    )
    grid = fm.cartesian_grid(*[np.linspace(-6.5, 6.5, 17)] * 3)
    if request.param == "spherical":
        a, b = text.index('kind  = "cartesian"'), text.index("[target.magnetic]") + len("[target.magnetic]\n")
        text = (
            text[:a]
            + BALL
            + text[b:].replace('["/vx"', '{ basis = "physical", data = ["/vx"').replace('"/vz"]', '"/vz"] }')
        )
        nodes = np.linspace(1.5, 6, 11), np.linspace(0, np.pi, 9), np.linspace(0, 2 * np.pi, 13)
        grid = fm.spherical_grid(*nodes)
    (folder / "job.toml").write_text(text)
    assert work(Options("move", str(folder / "job.toml"), quiet=True)) == 0
    return folder, grid


def test_every_item_is_there_and_has_the_shape_that_is_told(moved):
    folder, grid = moved
    root = ElementTree.parse(folder / "out.xdmf").getroot()
    assert (root.tag, root.get("Version")) == ("Xdmf", "3.0")
    items = list(root.iter("DataItem"))
    names = [attribute.get("Name") for attribute in root.iter("Attribute")]
    assert names == ["magnetic field", "divergence", "density", "velocity"]
    for item in items:
        file, name = item.text.split(":")
        with h5py.File(folder / file) as opened:
            assert opened[name].shape == tuple(map(int, item.get("Dimensions").split()))
            assert opened[name].dtype.itemsize == int(item.get("Precision"))
            assert opened[name].fletcher32
    assert root.find(".//Topology").get("Dimensions") == " ".join(str(n + 1) for n in grid.shape[::-1])
    assert float(root.find(".//Time").get("Value")) == 12.5


def test_the_view_shows_the_scene(moved):
    """Against the scene in closed form, x fastest; away from the star."""
    folder, grid = moved
    x = grid.centres().transpose(3, 2, 1, 0)
    r = np.sqrt((x**2).sum(axis=-1))
    far = (r > 2.5) & (r < 5.5)
    with h5py.File(folder / "out.h5") as file:
        b, v = file["fieldmover/view/magnetic_field"][()], file["fieldmover/view/velocity"][()]
    for found, exact in ((b, Ring().field(x.T) / np.sqrt(4 * np.pi)), (v, Ring().velocity(x.T))):
        difference = np.abs(found - exact.T)[far]
        assert np.median(difference) < 0.03 * np.abs(exact).max()


READ = """
import json, sys, vtk
from vtkmodules.util.numpy_support import vtk_to_numpy
reader = vtk.vtkXdmfReader()
reader.SetFileName(sys.argv[1])
reader.Update()
data = reader.GetOutputDataObject(0)
cells = data.GetCellData()
b = vtk_to_numpy(cells.GetArray("magnetic field"))
names = [cells.GetArrayName(i) for i in range(cells.GetNumberOfArrays())]
print(json.dumps([data.GetClassName(), data.GetBounds(), names, b.shape, b[123].tolist()]))
"""


@pytest.mark.skipif(find_spec("vtk") is None, reason="VTK is not installed")
def test_vtk_reads_the_view(moved):
    folder, grid = moved
    command = [sys.executable, "-c", READ, str(folder / "out.xdmf")]
    done = subprocess.run(command, capture_output=True, text=True, check=True)
    kind, bounds, names, shape, value = json.loads(done.stdout)
    assert kind == ("vtkRectilinearGrid" if grid.kind == "cartesian" else "vtkStructuredGrid")
    positions = grid.node_positions().reshape(3, -1)
    assert np.allclose(bounds, np.stack([positions.min(axis=1), positions.max(axis=1)], axis=1).ravel())
    assert sorted(names) == ["density", "divergence", "magnetic field", "velocity"]
    assert shape == [np.prod(grid.shape), 3]
    with h5py.File(folder / "out.h5") as file:
        assert np.allclose(value, file["fieldmover/view/magnetic_field"][()].reshape(-1, 3)[123])


def test_a_name_that_readers_would_misread_and_a_view_that_exists(tmp_path, capsys):
    write_snapshot(tmp_path / "ring.h5", (4, 4, 4))
    job = tmp_path / "job.toml"
    for name in ("a:b.h5", "a b.h5", "a&b.h5", "a.xdmf"):
        job.write_text(job_text().replace('"ring-cartesian.h5"', f'"{name}"\nview = true'))
        assert work(Options("move", str(job), quiet=True)) == 2
        assert "target.view: file" in capsys.readouterr().err
    job.write_text(job_text().replace('"ring-cartesian.h5"', '"out.h5"\nview = true'))
    (tmp_path / "out.xdmf").write_text("mine")
    assert work(Options("move", str(job), quiet=True)) == 2
    assert "out.xdmf: exists" in capsys.readouterr().err
    assert (tmp_path / "out.xdmf").read_text() == "mine"
