"""From fields on the target grid to the file that the receiving code reads."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fieldmover import __version__, cells_from_flux
from fieldmover.conventions import components
from fieldmover.conventions.units import size_of
from fieldmover.conventions.vector_potential import cells_from_potential, edges_from_potential
from fieldmover.diagnostics import relative_divergence
from fieldmover.errors import GridError, JobError
from fieldmover.forms.fields import FaceFlux, Three
from fieldmover.grids.placement import unplaced
from fieldmover.jobs.boxes import Around
from fieldmover.jobs.load import Loaded
from fieldmover.jobs.read import State, basis_of, flux_from_stored, quantity_from_stored
from fieldmover.jobs.schema import VELOCITY, TargetQuantity
from fieldmover.jobs.space import coordinate_volumes
from fieldmover.projection.cells import project_cells
from fieldmover.projection.potential import potential
from fieldmover.snapshots.layout import Layout
from fieldmover.snapshots.viewable import sidecar, write_view, xdmf
from fieldmover.snapshots.write import Output, write_text

Array = NDArray[np.float64]

OWN = "/fieldmover"
"""Our own group in an output: nodes, the job and the report."""


class Store:
    """Writes the state of the target into an open output, and reads it back.

    Parameters
    ----------
    loaded : Loaded
        Tells names, axis order, unit and precision.
    output : Output
    layers : Around, optional
        What lies round the target, to be written with it.
    """

    def __init__(self, loaded: Loaded, output: Output, layers: Around | None = None) -> None:
        self.loaded = loaded
        self._target = loaded.job.target
        self._output = output
        self._layers = layers
        self._layout = Layout(self._target.axes)
        self._same_units = loaded.job.units is None
        self.stencil_cleaning: dict[str, Any] | None = None  # what it took to suit the stencil of the receiver
        self._type = np.float32 if self._target.precision == "single" else np.float64

    def write_state(self, state: State) -> None:
        """Magnetic field and fluid, and our own nodes and job text."""
        self.write_arrays(state)
        for axis, nodes in enumerate(state.grid.nodes, start=1):
            self._output.write(f"{OWN}/nodes/q{axis}", np.array(nodes), {"kind": state.grid.kind})
        self._text("job", self.loaded.text)
        if self._target.view:
            write_view(self._output, state.grid, _viewed(state))

    def write_arrays(self, state: State) -> None:
        """Magnetic field and fluid."""
        magnetic = self._target.magnetic
        unit = size_of(magnetic.unit)
        units = magnetic.unit if isinstance(magnetic.unit, str) else f"{unit!r} Heaviside-Lorentz"
        arrays = self._faces(state) if magnetic.at == "faces" else self._field_in_cells(state)
        for name, array, axis in zip(magnetic.data, arrays, (1, 2, 3), strict=True):
            where = f"faces normal to q{axis}" if magnetic.at == "faces" else "cells"
            self._write(name, array / unit, where, units)
        self._write_potential(FaceFlux(state.space.own, state.flux.faces))
        for name, quantity in self._target.fluid.items():
            self._write_quantity(name, quantity, state)

    def _faces(self, state: State) -> Three:
        """Components on faces, layers included."""
        magnetic = self._target.magnetic
        flux = state.flux if self._layers is None else self._layers.flux
        own = FaceFlux(unplaced(flux.grid), flux.faces)  # the receiving code knows nothing of the common frame
        return components.faces_from_flux(own, magnetic.basis or "physical", magnetic.densitised, state.space.metric)

    def _field_in_cells(self, state: State) -> Three:
        """Components in cells, layers included."""
        a, b, c = self._cells(state)
        if self._layers is None:
            return a, b, c
        cartesian = (self._target.magnetic.basis or "physical") == "cartesian"
        outer = self._layers.with_inside(self._cells(self._layers.state), np.stack([a, b, c]))
        one, two, three = (self._layers.cells(part, axis, cartesian) for axis, part in enumerate(outer))
        return one, two, three

    def _cells(self, state: State) -> Array:
        """Mean fields of cells, without the divergence that the receiving code's stencil would see."""
        magnetic, own = self._target.magnetic, state.space.own
        flux = FaceFlux(own, state.flux.faces)
        scale = components.cell_density(own) if magnetic.densitised else 1.0 / state.space.density_factor
        if magnetic.stencil == "faces":
            return np.asarray(cells_from_flux(flux, basis=magnetic.basis or "physical") * scale)
        cells = cells_from_flux(flux, basis="cartesian")  # the same in any basis of such a grid
        try:
            cells, found = project_cells(own, cells, magnetic.stencil)
        except GridError as error:
            told = f'target.magnetic.stencil = "{magnetic.stencil}"'
            raise JobError(f"{self.loaded.path}: {told}: {error}") from None
        self.stencil_cleaning = found.as_dict()
        return np.asarray(cells * scale)

    def _write_potential(self, flux: FaceFlux) -> None:
        wanted = self._target.potential
        if wanted is None:
            return
        pot, basis, unit = potential(flux, wanted.gauge), wanted.basis or "physical", size_of(wanted.unit)
        at_edges = wanted.at == "edges"
        arrays = edges_from_potential(pot, basis) if at_edges else cells_from_potential(pot, basis)
        units = f"{wanted.unit if isinstance(wanted.unit, str) else repr(unit) + ' Heaviside-Lorentz'} x length"
        for name, array, axis in zip(wanted.data, arrays, (1, 2, 3), strict=True):
            self._write(name, array / unit, f"edges along q{axis}" if at_edges else "cells", units)

    def _write_quantity(self, name: str, quantity: TargetQuantity, state: State) -> None:
        parts = self._stored(name, quantity, state)
        basis = basis_of(quantity, state.space.own)
        if self._layers is not None:
            outer = self._layers.with_inside(self._stored(name, quantity, self._layers.state), parts)
            parts = np.stack(
                [
                    self._layers.cells(part, axis if quantity.vector else None, basis == "cartesian")
                    for axis, part in enumerate(outer)
                ]
            )
        names = quantity.data if isinstance(quantity.data, list) else [quantity.data]
        for dataset, part in zip(names, parts, strict=True):
            self._write(dataset, part, "cells", "as in the source" if self._same_units else "the target's own")

    def _stored(self, name: str, quantity: TargetQuantity, state: State) -> Array:
        """A quantity as the receiving code has it, one or three arrays."""
        values = state.fluid[name]
        if not quantity.vector:
            factor = state.elements / coordinate_volumes(state.grid) if quantity.densitised else 1.0
            return np.asarray(values * factor)[None]
        kind = (quantity.kind or "coordinate") if name == VELOCITY else None
        return state.space.to_stored(values, kind, basis_of(quantity, state.space.own))

    def publish_view(self, state: State) -> None:
        """The XDMF file beside the output, if the job asks for it; the output has its name by then."""
        if self._target.view:
            path = self._output.path
            text = xdmf(path.name, state.grid, _viewed(state), state.time or 0.0)
            write_text(sidecar(path), text)

    def read_state(self, state: State) -> State:
        """What the file now holds, storing errors included."""
        magnetic = self._target.magnetic
        a, b, c = (self._read(name) for name in magnetic.data)
        flux = flux_from_stored(state.space, (a, b, c), magnetic, magnetic.at)
        fluid: dict[str, Array] = {}
        for name, quantity in sorted(self._target.fluid.items(), key=lambda item: item[0] != VELOCITY):
            fluid[name] = self._read_quantity(name, quantity, state, fluid.get(VELOCITY))
        return State(state.path, FaceFlux(state.grid, flux.faces), state.space, fluid, state.time)

    def read_cells(self) -> Array | None:
        """The components of the field as the file now holds them; None where it is not at cells."""
        magnetic = self._target.magnetic
        if magnetic.at != "cells":
            return None
        return size_of(magnetic.unit) * np.stack([self._read(name) for name in magnetic.data])

    def write_report(self, text: str) -> None:
        """The report beside the data it speaks of."""
        self._text("report", text)

    def _read_quantity(self, name: str, quantity: TargetQuantity, state: State, velocity: Array | None) -> Array:
        """A scalar, or Cartesian components in the common frame."""
        if isinstance(quantity.data, str):
            values = self._read(quantity.data)
            if quantity.densitised:
                values = values * coordinate_volumes(state.grid) / state.space.elements(velocity)
            return values
        vector = np.stack([self._read(part) for part in quantity.data])
        return quantity_from_stored(state.space, vector, quantity, name, basis_of(quantity, state.space.own))

    def _read(self, name: str) -> Array:
        whole = self._layout.inside(self._output.read(name))
        inside = tuple(slice(n, whole.shape[d] - n) for d, n in enumerate(self._target.ghosts))
        return np.ascontiguousarray(whole[inside], dtype=np.float64)

    def _write(self, name: str, array: Array, location: str, units: str) -> None:
        largest, holds = float(np.abs(array).max()), np.finfo(self._type)
        if largest > float(holds.max) or 0.0 < largest < float(holds.tiny):
            raise JobError(
                f"{self.loaded.path}: dataset {name!r}: values of up to {largest:.6g} do not fit into target.precision "
                f'= "{self._target.precision}", which holds {holds.tiny:.2g} to {holds.max:.2g}; choose other units'
            )
        stored = np.ascontiguousarray(self._layout.outside(array), dtype=self._type)
        attributes = {"units": units, "location": location, "axis_order": self._target.axes}
        self._output.write(name, stored, attributes)

    def _text(self, name: str, text: str) -> None:
        data = np.frombuffer(text.encode(), dtype=np.uint8)
        self._output.write(f"{OWN}/{name}", data, {"content": "UTF-8 text", "version": __version__})


def _viewed(state: State) -> dict[str, Array]:
    """What viewers see: mean fields of cells, Heaviside-Lorentz, where divergence sits, and the fluid."""
    field = {"magnetic field": cells_from_flux(state.flux, basis="cartesian")}
    return {**field, "divergence": relative_divergence(state.flux), **state.fluid}


def bytes_needed(loaded: Loaded, shape: tuple[int, int, int]) -> int:
    """What the arrays of an output take, roughly, for a grid of so many cells along each axis."""
    target = loaded.job.target
    sizes = [1 if isinstance(quantity.data, str) else 3 for quantity in target.fluid.values()]
    arrays = 3 + 3 * (target.potential is not None) + sum(sizes)
    view = 4 * (arrays + 1) + 24 if target.view else 0
    return int(1.1 * math.prod(shape) * (arrays * (4 if target.precision == "single" else 8) + view))
