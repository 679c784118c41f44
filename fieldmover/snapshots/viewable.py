"""A view of an output for general viewers, by two open standards: a group /VTKHDF in the file, an XDMF file beside it.

Viewers know no fluxes through faces. They get averages over cells in Cartesian components, single precision, and the
positions of the nodes; the numbers to go on with stay where the receiving code wants them. The arrays are stored once,
in the group; the XDMF file, which older viewers need for grids that are not uniform boxes, points at them.

VTKHDF 2.8 (Kitware, VTK documentation, "VTKHDF file format"): a uniform box is an ImageData, another box in line with
the axes a RectilinearGrid, anything else a StructuredGrid.
"""

from __future__ import annotations

import xml.etree.ElementTree as ElementTree
from collections.abc import Mapping
from pathlib import Path
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from fieldmover.grids.grid import Grid
from fieldmover.grids.placement import placement
from fieldmover.snapshots.write import Attribute, Output

Array = NDArray[np.float64]
Shape = Literal["ImageData", "RectilinearGrid", "StructuredGrid"]

GROUP = "/VTKHDF"
VERSION = (2, 8)
COORDINATES = ("XCoordinates", "YCoordinates", "ZCoordinates")
UNIFORM = 1e-10
"""Cells of a uniform axis differ by less, relative."""


def sidecar(path: Path) -> Path:
    """Where the XDMF file of an output lies."""
    return path.with_suffix(".xdmf")


def shape_of(grid: Grid) -> Shape:
    """What the standard calls a grid.

    Examples
    --------
    >>> import fieldmover as fm
    >>> shape_of(fm.cartesian_grid([0, 1, 2], [0, 1], [0, 1])), shape_of(fm.cartesian_grid([0, 1, 3], [0, 1], [0, 1]))
    ('ImageData', 'RectilinearGrid')
    """
    if grid.kind != "cartesian" or placement(grid) is not None:
        return "StructuredGrid"
    steps = [np.diff(nodes) for nodes in grid.nodes]
    return "ImageData" if all(np.ptp(h) <= UNIFORM * h.mean() for h in steps) else "RectilinearGrid"


def write_view(output: Output, grid: Grid, fields: Mapping[str, Array]) -> None:
    """Store nodes and fields of cells as viewers want them: x fastest, vector components last.

    Parameters
    ----------
    output : Output
    grid : Grid
    fields : mapping
        Name to (n1, n2, n3), or (3, n1, n2, n3) Cartesian components.
    """
    shape = shape_of(grid)
    about: dict[str, Attribute] = {"Version": np.array(VERSION, dtype=np.int64), "Type": shape}
    if shape == "ImageData":
        about["WholeExtent"] = np.array([(0, n) for n in grid.shape], dtype=np.int64).ravel()
        about["Origin"], about["Spacing"] = _box(grid)
        about["Direction"] = np.eye(3).ravel()
    else:
        about["Dimensions"] = np.array([n + 1 for n in grid.shape], dtype=np.int64)
    output.describe(GROUP, about)
    if shape == "RectilinearGrid":
        for name, nodes in zip(COORDINATES, grid.nodes, strict=True):
            output.write(f"{GROUP}/{name}", np.array(nodes))
    elif shape == "StructuredGrid":
        output.write(f"{GROUP}/Points", np.ascontiguousarray(grid.node_positions().transpose(3, 2, 1, 0)))
    for name, values in fields.items():
        turned = values.transpose(3, 2, 1, 0) if values.ndim == 4 else values.transpose(2, 1, 0)
        output.write(_place(name), np.ascontiguousarray(turned, dtype=np.float32))


def xdmf(file: str, grid: Grid, fields: Mapping[str, Array], time: float) -> str:
    """The text of the XDMF file for what `write_view` stored.

    Parameters
    ----------
    file : str
        Name of the HDF5 file, in the same folder.
    grid, fields
        As in `write_view`.
    time : float

    Examples
    --------
    >>> import fieldmover as fm
    >>> grid = fm.cartesian_grid([0, 1, 2], [0, 1], [0, 1])
    >>> text = xdmf("a.h5", grid, {"rho": np.ones(grid.shape)}, 0.5)
    >>> "a.h5:/VTKHDF/CellData/rho" in text, 'Dimensions="1 1 2"' in text
    (True, True)
    """
    n1, n2, n3 = grid.shape
    root = ElementTree.Element("Xdmf", {"Version": "3.0"})
    domain = ElementTree.SubElement(root, "Domain")
    mesh = ElementTree.SubElement(domain, "Grid", {"Name": "target", "GridType": "Uniform"})
    ElementTree.SubElement(mesh, "Time", {"Value": repr(float(time))})
    topology, points = {
        "ImageData": ("3DCoRectMesh", "ORIGIN_DXDYDZ"),
        "RectilinearGrid": ("3DRectMesh", "VXVYVZ"),
        "StructuredGrid": ("3DSMesh", "XYZ"),
    }[shape_of(grid)]
    sizes = {"TopologyType": topology, "Dimensions": f"{n3 + 1} {n2 + 1} {n1 + 1}"}
    ElementTree.SubElement(mesh, "Topology", sizes)
    geometry = ElementTree.SubElement(mesh, "Geometry", {"GeometryType": points})
    if points == "ORIGIN_DXDYDZ":
        for numbers in _box(grid):
            _item(geometry, " ".join(repr(float(x)) for x in numbers[::-1]), (3,), 8, "XML")  # z first
    elif points == "VXVYVZ":
        for name, n in zip(COORDINATES, grid.shape, strict=True):
            _item(geometry, f"{file}:{GROUP}/{name}", (n + 1,), 8)
    else:
        _item(geometry, f"{file}:{GROUP}/Points", (n3 + 1, n2 + 1, n1 + 1, 3), 8)
    for name, values in fields.items():
        kind, shape = ("Vector", (n3, n2, n1, 3)) if values.ndim == 4 else ("Scalar", (n3, n2, n1))
        about = {"Name": name, "AttributeType": kind, "Center": "Cell"}
        attribute = ElementTree.SubElement(mesh, "Attribute", about)
        _item(attribute, f"{file}:{_place(name)}", shape, 4)
    ElementTree.indent(root)
    return '<?xml version="1.0" encoding="UTF-8"?>\n' + ElementTree.tostring(root, encoding="unicode") + "\n"


def _box(grid: Grid) -> tuple[Array, Array]:
    """Lowest corner and size of the cells of a uniform box."""
    first = np.array([nodes[0] for nodes in grid.nodes])
    return first, np.array([(nodes[-1] - nodes[0]) / (nodes.size - 1) for nodes in grid.nodes])


def _item(parent: ElementTree.Element, text: str, shape: tuple[int, ...], precision: int, form: str = "HDF") -> None:
    about = {"Format": form, "NumberType": "Float", "Precision": str(precision)}
    item = ElementTree.SubElement(parent, "DataItem", {**about, "Dimensions": " ".join(map(str, shape))})
    item.text = text


def _place(name: str) -> str:
    return f"{GROUP}/CellData/{name.replace(' ', '_')}"
