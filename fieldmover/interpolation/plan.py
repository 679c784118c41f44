"""Moves of many snapshots between the same two grids: what depends on the grids only is done once."""

from __future__ import annotations

from typing import Literal, Protocol, get_args

import numpy as np
from numpy.typing import NDArray

from fieldmover.errors import FieldError
from fieldmover.forms.fields import EdgePotential, FaceFlux, Three, close_edges
from fieldmover.grids.grid import Grid, at
from fieldmover.interpolation.aligned import Aligned, nodes_in
from fieldmover.interpolation.coverage import Outside, fill, known_faces
from fieldmover.interpolation.limited import move_limited
from fieldmover.interpolation.plan_across import Across
from fieldmover.interpolation.plan_exact import exact_faces
from fieldmover.interpolation.uniform import split_uniform, uniform_edges, uniform_faces
from fieldmover.projection.potential import potential

Array = NDArray[np.float64]
Known = tuple[NDArray[np.bool_], NDArray[np.bool_], NDArray[np.bool_]]
Order = Literal[1, 3, 5, "limited"]


class Part(Protocol):
    """A potential on its way to a target."""

    def edges(self, cells: slice) -> tuple[Three, Known]: ...


class FluxPlan:
    """A pair of grids, prepared for moving many fluxes from one to the other.

    Holds where the target's nodes lie in the source. Measured: 2 bytes a node where the source's coordinates are a
    smooth function of the target's (4.4 MB for 128^3 nodes, full sphere to a box beside its axis); 96 bytes a node
    elsewhere, round an axis of the source say. Of a warped source also the spline of its nodes, 24 bytes for each.

    Parameters
    ----------
    source, target : Grid
        In the same Cartesian frame and unit of length.
    order : {1, 3, 5, "limited"}
        As for `move_flux`.

    Attributes
    ----------
    nbytes : int
        Memory that the plan holds for the target's nodes.

    Raises
    ------
    FieldError
        If the order is unknown.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> source = fm.cylindrical_grid(np.linspace(0, 2, 9), np.linspace(0, 2 * np.pi, 17), np.linspace(-1, 1, 9))
    >>> box = fm.cartesian_grid(*[np.linspace(-0.5, 0.5, 5)] * 3)
    >>> plan = FluxPlan(source, box)
    >>> snapshots = [fm.potential_from_function(source, lambda x, y, z: (-b * y, b * x, 0 * z)) for b in (1, 2)]
    >>> [round(float(plan.move(fm.curl(pot)).f3.sum()), 3) for pot in snapshots]
    [10.0, 20.0]
    """

    def __init__(self, source: Grid, target: Grid, order: Order = 3) -> None:
        if order not in get_args(Order):
            raise FieldError(f"order: {order!r}, expected one of {', '.join(map(repr, get_args(Order)))}")
        self.source, self.target, self.order = source, target, order
        self._way = (Across if nodes_in(source, target) is None else Aligned)(source, target)

    @property
    def nbytes(self) -> int:
        return self._way.nbytes

    def move(self, flux: FaceFlux, outside: Outside = "least energy") -> FaceFlux:
        """Move a flux, with the bits that `move_flux` gives.

        Parameters
        ----------
        flux : FaceFlux
            On the plan's source, or on a grid with the same nodes.
        outside : {"least energy", "zero", "refuse"}
            As for `move_flux`.

        Returns
        -------
        FaceFlux
            On the plan's target.

        Raises
        ------
        FieldError, ChargeError
            As `move_flux`, and if the flux is on another grid.
        """
        if outside not in get_args(Outside):
            raise FieldError(f"outside: {outside!r}, expected one of {', '.join(map(repr, get_args(Outside)))}")
        edges, known, uniform = FluxOnItsWay(self, flux).slab(self.target, slice(0, self.target.shape[0]))
        faces, quantum = exact_faces(edges, uniform)
        covered = known_faces(known)
        if all(c.all() for c in covered):
            return FaceFlux(self.target, faces)
        return fill(FaceFlux(self.target, faces), covered, outside, quantum)

    def start(self, pot: EdgePotential) -> Part:
        """Fit the spline of a potential, of which the circulations on slabs of the target can then be asked for."""
        if self.order == "limited":
            return _Limited(self._way, pot)
        return self._way.start(pot, self.order)

    def checked(self, flux: FaceFlux) -> FaceFlux:
        """The flux on the plan's own source.

        Raises
        ------
        FieldError
            If it is on another grid.
        """
        grid, source = flux.grid, self.source
        same = grid is source or (
            (grid.kind, grid.periodic, grid.poles) == (source.kind, source.periodic, source.poles)
            and all(np.array_equal(a, b) for a, b in zip(grid.nodes, source.nodes, strict=True))
            and (grid.map == source.map or np.array_equal(grid.node_positions(), source.node_positions()))
        )
        if not same:
            raise FieldError(f"the flux is on {grid!r}, expected the source of the plan, {source!r}")
        return FaceFlux(source, flux.faces)


class FluxOnItsWay:
    """A flux between the grids of a plan: the mean field of a periodic box apart, the rest as a potential.

    Parameters
    ----------
    plan : FluxPlan
    flux : FaceFlux
    """

    def __init__(self, plan: FluxPlan, flux: FaceFlux) -> None:
        self._mean, rest = split_uniform(plan.checked(flux))
        self._part = plan.start(potential(rest))

    def slab(self, grid: Grid, cells: slice) -> tuple[Three, Known, Three | None]:
        """What a slab of the target carries; `grid` is the target's part there.

        Returns
        -------
        edges : tuple of three ndarrays
            Circulations; 0 on edges that leave the source.
        known : tuple of three bool ndarrays
            Edges that lie wholly in the source.
        uniform : tuple of three ndarrays or None
            Fluxes of the mean field, to be added to the curl of the edges.
        """
        edges, known = self._part.edges(cells)
        close(grid, edges, known)
        if not self._mean.any():
            return edges, known, None
        uniform = uniform_faces(grid, self._mean)
        if uniform is None:
            for a, b in zip(edges, uniform_edges(grid, self._mean), strict=True):
                a += b
        return edges, known, uniform


class _Limited:
    """A potential on its way at order "limited": all of the target at once, since limits look around."""

    def __init__(self, way: Aligned | Across, pot: EdgePotential) -> None:
        self._way, self._pot = way, pot

    def edges(self, cells: slice) -> tuple[Three, Known]:
        return move_limited(self._pot, self._way.target, self._at_order)

    def _at_order(self, pot: EdgePotential, target: Grid, order: Literal[1, 3]) -> tuple[Three, Known]:
        edges, known = self._way.start(pot, order).edges(slice(0, target.shape[0]))
        close(target, edges, known)
        return edges, known


def close(target: Grid, edges: Three, known: Known) -> None:
    """Make circulations obey seams and poles, and what is known of them seams, in place."""
    close_edges(target, edges)
    for axis in range(3):
        for mask in known:
            if target.periodic[axis] and mask.shape[axis] > target.shape[axis]:
                mask[at(axis, 0)] &= mask[at(axis, -1)]
                mask[at(axis, -1)] = mask[at(axis, 0)]
