"""A view of an output for general viewers: XDMF 3, an open XML format that points into the HDF5 file.

Viewers know no fluxes through faces. They get averages over cells in Cartesian components, single precision, and the
positions of the nodes; the numbers to go on with stay where the receiving code wants them.
"""

from __future__ import annotations

import xml.etree.ElementTree as ElementTree
from collections.abc import Mapping
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from fieldmover.grids.grid import Grid
from fieldmover.snapshots.write import Output

Array = NDArray[np.float64]


def sidecar(path: Path) -> Path:
    """Where the XDMF file of an output lies."""
    return path.with_suffix(".xdmf")


def write_view(output: Output, group: str, grid: Grid, fields: Mapping[str, Array]) -> None:
    """Store nodes and fields of cells as viewers want them: x fastest, vector components last.

    Parameters
    ----------
    output : Output
    group : str
        Where they go in the file.
    grid : Grid
    fields : mapping
        Name to (n1, n2, n3), or (3, n1, n2, n3) Cartesian components.
    """
    if grid.kind == "cartesian":
        for name, nodes in zip("xyz", grid.nodes, strict=True):
            output.write(f"{group}/{name}", np.array(nodes))
    else:
        output.write(f"{group}/points", np.ascontiguousarray(grid.node_positions().transpose(3, 2, 1, 0)))
    for name, values in fields.items():
        turned = values.transpose(3, 2, 1, 0) if values.ndim == 4 else values.transpose(2, 1, 0)
        output.write(f"{group}/{_plain(name)}", np.ascontiguousarray(turned, dtype=np.float32))


def xdmf(file: str, group: str, grid: Grid, fields: Mapping[str, Array], time: float) -> str:
    """The text of the XDMF file for what `write_view` stored.

    Parameters
    ----------
    file : str
        Name of the HDF5 file, in the same folder.
    group, grid, fields
        As in `write_view`.
    time : float

    Examples
    --------
    >>> import fieldmover as fm
    >>> grid = fm.cartesian_grid([0, 1, 2], [0, 1], [0, 1])
    >>> text = xdmf("a.h5", "/view", grid, {"rho": np.ones(grid.shape)}, 0.5)
    >>> "a.h5:/view/rho" in text, 'Dimensions="1 1 2"' in text
    (True, True)
    """
    n1, n2, n3 = grid.shape
    root = ElementTree.Element("Xdmf", {"Version": "3.0"})
    domain = ElementTree.SubElement(root, "Domain")
    mesh = ElementTree.SubElement(domain, "Grid", {"Name": "target", "GridType": "Uniform"})
    ElementTree.SubElement(mesh, "Time", {"Value": repr(float(time))})
    straight = grid.kind == "cartesian"
    topology = {
        "TopologyType": "3DRectMesh" if straight else "3DSMesh",
        "Dimensions": f"{n3 + 1} {n2 + 1} {n1 + 1}",
    }
    ElementTree.SubElement(mesh, "Topology", topology)
    geometry = ElementTree.SubElement(mesh, "Geometry", {"GeometryType": "VXVYVZ" if straight else "XYZ"})
    if straight:
        for name, n in zip("xyz", grid.shape, strict=True):
            _item(geometry, f"{file}:{group}/{name}", (n + 1,), 8)
    else:
        _item(geometry, f"{file}:{group}/points", (n3 + 1, n2 + 1, n1 + 1, 3), 8)
    for name, values in fields.items():
        kind, shape = ("Vector", (n3, n2, n1, 3)) if values.ndim == 4 else ("Scalar", (n3, n2, n1))
        about = {"Name": name, "AttributeType": kind, "Center": "Cell"}
        attribute = ElementTree.SubElement(mesh, "Attribute", about)
        _item(attribute, f"{file}:{group}/{_plain(name)}", shape, 4)
    ElementTree.indent(root)
    return '<?xml version="1.0" encoding="UTF-8"?>\n' + ElementTree.tostring(root, encoding="unicode") + "\n"


def _item(parent: ElementTree.Element, where: str, shape: tuple[int, ...], precision: int) -> None:
    about = {"Format": "HDF", "NumberType": "Float", "Precision": str(precision)}
    item = ElementTree.SubElement(parent, "DataItem", {**about, "Dimensions": " ".join(map(str, shape))})
    item.text = where


def _plain(name: str) -> str:
    return name.replace(" ", "_")
