"""Views of an output: as XML and HDF5 readers see them, and as VTK's own readers do where it is installed."""

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
from fieldmover.grids.placement import placed, turn_about
from fieldmover.jobs.demo import Ring, job_text, write_snapshot
from fieldmover.jobs.worker import Options, work
from fieldmover.snapshots.viewable import shape_of, write_view, xdmf
from fieldmover.snapshots.write import Output

X, Y, Z = np.linspace(-1, 2, 5), np.linspace(0, 1, 4), np.linspace(3, 4, 3)
BOX = fm.cartesian_grid(X, Y, Z)
GRIDS = {
    "ImageData": BOX,
    "RectilinearGrid": fm.cartesian_grid(X**3, Y, Z),
    "StructuredGrid": fm.spherical_grid(Z, np.linspace(0, np.pi, 6), np.linspace(0, 2 * np.pi, 7)),
    "StructuredGrid, a turned box": placed(BOX, (5, 0, 0), turn_about((0, 0, 1), 0.3)),
}
TOPOLOGY = {"ImageData": "3DCoRectMesh", "RectilinearGrid": "3DRectMesh", "StructuredGrid": "3DSMesh"}


@pytest.fixture(scope="module", params=GRIDS)
def view(request, tmp_path_factory):
    """A file that holds the position of each cell, and a number for it; its XDMF file; the grid; what VTK calls it."""
    grid, kind = GRIDS[request.param], request.param.split(",")[0]
    fields = {"where it is": grid.centres(), "number": np.arange(np.prod(grid.shape), dtype=float).reshape(grid.shape)}
    path = tmp_path_factory.mktemp("view") / "out.h5"
    with Output(path) as output:
        write_view(output, grid, fields)
        output.publish()
    path.with_suffix(".xdmf").write_text(xdmf(path.name, grid, fields, 12.5))
    return path, grid, kind


def test_the_group_is_as_the_standard_has_it(view):
    """Attributes and shapes of VTKHDF (VTK documentation, "VTKHDF file format"; from memory), read by h5py alone."""
    path, grid, kind = view
    n1, n2, n3 = grid.shape
    assert shape_of(grid) == kind
    with h5py.File(path) as file:
        group = file["VTKHDF"]
        about = h5py.h5a.open(group.id, b"Type").get_type()
        assert isinstance(about, h5py.h5t.TypeStringID)
        assert not about.is_variable_str()
        assert about.get_cset() == h5py.h5t.CSET_ASCII
        assert group.attrs["Type"].decode() == kind
        assert group.attrs["Version"].dtype == np.int64
        assert list(group.attrs["Version"]) == [2, 8]
        if kind == "ImageData":
            assert list(group.attrs["WholeExtent"]) == [0, n1, 0, n2, 0, n3]
            assert group.attrs["Origin"] == pytest.approx([-1, 0, 3])
            assert group.attrs["Spacing"] == pytest.approx([0.75, 1 / 3, 0.5])
            assert group.attrs["Direction"] == pytest.approx(np.eye(3).ravel())
        else:
            assert list(group.attrs["Dimensions"]) == [n1 + 1, n2 + 1, n3 + 1]
        if kind == "RectilinearGrid":
            for name, nodes in zip(("XCoordinates", "YCoordinates", "ZCoordinates"), grid.nodes, strict=True):
                assert np.array_equal(group[name], nodes)
        if kind == "StructuredGrid":
            assert np.array_equal(group["Points"], grid.node_positions().transpose(3, 2, 1, 0))
        assert group["CellData/where_it_is"].shape == (n3, n2, n1, 3)
        assert group["CellData/number"].shape == (n3, n2, n1)
        assert group["CellData/number"][1, 2, 0] == 2 * n3 + 1
        assert all(item.fletcher32 for item in group["CellData"].values())
    assert b"GCOL" not in path.read_bytes()  # nothing in HDF5's heap, which has no checksums


def test_the_xdmf_file_points_at_the_group(view):
    path, grid, kind = view
    root = ElementTree.parse(path.with_suffix(".xdmf")).getroot()
    assert (root.tag, root.get("Version")) == ("Xdmf", "3.0")
    assert [attribute.get("Name") for attribute in root.iter("Attribute")] == ["where it is", "number"]
    assert [attribute.get("Center") for attribute in root.iter("Attribute")] == ["Cell", "Cell"]
    topology = root.find(".//Topology")
    assert topology.get("TopologyType") == TOPOLOGY[kind]
    assert topology.get("Dimensions") == " ".join(str(n + 1) for n in grid.shape[::-1])
    assert float(root.find(".//Time").get("Value")) == 12.5
    inline, stored = [], []
    for item in root.iter("DataItem"):
        if item.get("Format") == "XML":
            inline.append([float(word) for word in item.text.split()])
            continue
        file, name = item.text.split(":")
        stored.append(name)
        with h5py.File(path.with_name(file)) as opened:
            assert opened[name].shape == tuple(map(int, item.get("Dimensions").split()))
            assert opened[name].dtype.itemsize == int(item.get("Precision"))
    if kind == "ImageData":
        assert inline[0] == [3, 0, -1]  # z first
        assert inline[1] == pytest.approx([0.5, 1 / 3, 0.75])
    assert all(name.startswith("/VTKHDF/") for name in stored)
    assert len(stored) + len(inline) == {"ImageData": 4, "RectilinearGrid": 5, "StructuredGrid": 3}[kind]


NETCDF = """
import json, sys, netCDF4
group = netCDF4.Dataset(sys.argv[1])["VTKHDF"]
cells = group["CellData"].variables
print(json.dumps([group.Type, group.Version.tolist(), {name: cells[name][:].data.tolist() for name in cells}]))
"""


@pytest.mark.skipif(find_spec("netCDF4") is None, reason="netCDF4 is not installed")
def test_the_netcdf_library_reads_the_group(view):
    """Another library, with an HDF5 of its own."""
    path, grid, kind = view
    done = subprocess.run([sys.executable, "-c", NETCDF, str(path)], capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    found, version, cells = json.loads(done.stdout)
    assert (found, version) == (kind, [2, 8])
    numbers = np.arange(np.prod(grid.shape), dtype=float).reshape(grid.shape)
    assert np.array_equal(cells["number"], numbers.T)
    assert np.allclose(cells["where_it_is"], grid.centres().transpose(3, 2, 1, 0), atol=1e-5)


READ = """
import json, sys, vtk
from vtkmodules.util.numpy_support import vtk_to_numpy
reader = vtk.vtkHDFReader() if sys.argv[1].endswith(".h5") else vtk.vtkXdmfReader()
reader.SetFileName(sys.argv[1])
reader.Update()
data = reader.GetOutputDataObject(0)
cells = data.GetCellData()
names = [cells.GetArrayName(i) for i in range(cells.GetNumberOfArrays())]
fields = {name: vtk_to_numpy(cells.GetArray(name)).tolist() for name in names}
middles = []
for i in range(data.GetNumberOfCells()):
    points = data.GetCell(i).GetPoints()
    corners = [points.GetPoint(j) for j in range(points.GetNumberOfPoints())]
    middles.append([sum(x) / len(corners) for x in zip(*corners)])
print(json.dumps([data.GetClassName(), data.GetBounds(), fields, middles]))
"""


def seen_by_vtk(path):
    """In a process of its own: VTK's readers have been known to crash."""
    done = subprocess.run([sys.executable, "-c", READ, str(path)], capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    assert "ERR" not in done.stderr
    return json.loads(done.stdout)


@pytest.mark.skipif(find_spec("vtk") is None, reason="VTK is not installed (extra: viewers)")
@pytest.mark.parametrize("suffix", [".h5", ".xdmf"])
def test_vtk_sees_each_cell_where_it_is(view, suffix):
    path, grid, kind = view
    found, bounds, fields, middles = seen_by_vtk(path.with_suffix(suffix))
    if kind == "ImageData":
        assert found in ("vtkImageData", "vtkUniformGrid")
    else:
        assert found == f"vtk{kind}"
    positions = grid.node_positions().reshape(3, -1)
    assert bounds == pytest.approx(np.stack([positions.min(axis=1), positions.max(axis=1)], axis=1).ravel())
    names = {name.replace(" ", "_"): values for name, values in fields.items()}
    assert set(names) == {"where_it_is", "number"}
    numbers = np.arange(np.prod(grid.shape)).reshape(grid.shape)
    assert np.array_equal(names["number"], numbers.transpose(2, 1, 0).ravel())  # x fastest
    corners = grid.node_positions()
    for axis in (1, 2, 3):
        corners = 0.5 * (np.delete(corners, -1, axis) + np.delete(corners, 0, axis))
    for seen, meant in ((middles, corners), (names["where_it_is"], grid.centres())):
        assert np.abs(np.array(seen) - meant.transpose(3, 2, 1, 0).reshape(-1, 3)).max() < 1e-5  # single precision


# -- as part of a job ---------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def moved(tmp_path_factory):
    """The folder of a job with a view, and its grid."""
    folder = tmp_path_factory.mktemp("job")
    write_snapshot(folder / "ring.h5", (24, 16, 32))
    text = job_text().replace("cells = 128", "cells = 16")
    text = text[: text.index("[limits]")].replace('file = "ring-cartesian.h5"', 'file = "out.h5"\nview = true')
    (folder / "job.toml").write_text(text)
    assert work(Options("move", str(folder / "job.toml"), quiet=True)) == 0
    return folder, fm.cartesian_grid(*[np.linspace(-6.5, 6.5, 17)] * 3)


def test_the_view_shows_the_scene(moved):
    """Against the scene in closed form, x fastest; away from the star."""
    folder, grid = moved
    x = grid.centres().transpose(3, 2, 1, 0)
    r = np.sqrt((x**2).sum(axis=-1))
    far = (r > 2.5) & (r < 5.5)
    with h5py.File(folder / "out.h5") as file:
        cells = file["VTKHDF/CellData"]
        assert set(cells) == {"magnetic_field", "divergence", "density", "velocity"}
        b, v = cells["magnetic_field"][()], cells["velocity"][()]
    for found, exact in ((b, Ring().field(x.T) / np.sqrt(4 * np.pi)), (v, Ring().velocity(x.T))):
        difference = np.abs(found - exact.T)[far]
        assert np.median(difference) < 0.03 * np.abs(exact).max()
    root = ElementTree.parse(folder / "out.xdmf").getroot()
    names = [attribute.get("Name") for attribute in root.iter("Attribute")]
    assert names == ["magnetic field", "divergence", "density", "velocity"]
    assert float(root.find(".//Time").get("Value")) == 12.5


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
