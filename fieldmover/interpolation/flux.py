"""Moving magnetic flux between grids: potential, spline 1-form, circulation along every target edge, d1.

The divergence of the result is zero bit for bit (`plan_exact`).
"""

from __future__ import annotations

from fieldmover.forms.fields import EdgePotential, FaceFlux, Three
from fieldmover.grids.grid import Grid
from fieldmover.interpolation.coverage import Outside
from fieldmover.interpolation.plan import FluxPlan, Known, Order, close

__all__ = ["Known", "Order", "Outside", "move_flux", "move_potential"]


def move_flux(flux: FaceFlux, target: Grid, order: Order = 3, outside: Outside = "least energy") -> FaceFlux:
    """Move magnetic flux to another grid with zero divergence.

    Parameters
    ----------
    flux : FaceFlux
        Divergence-free to round-off; `project` makes it so.
    target : Grid
        In the same Cartesian frame and unit of length.
    order : {1, 3, 5, "limited"}
        Degree of the spline. 3 for smooth fields, 5 where they are very well resolved; 1 never overshoots, but smears;
        "limited" is 3 where the field is resolved and between 1 and 3 at sheets and shocks (see `limited`).
    outside : {"least energy", "zero", "refuse"}
        What the target's faces carry where the source does not reach: the divergence-free field of least energy that
        matches the known faces; nothing, but for a layer of two cells that closes the field lines; or an error.

    Returns
    -------
    FaceFlux
        Fluxes on the target, unit as those of the source. The net flux out of every cell is exactly zero.

    Raises
    ------
    FieldError
        If the flux has divergence, the order is unknown, or the target leaves the source with outside="refuse".
    ChargeError
        If the flux has no potential because a closed surface carries net flux. (The mean field of a periodic box is no
        obstacle: it is moved apart.)

    Notes
    -----
    Kreeft, Palha & Gerritsma (2011) and Buffa, Sangalli & Vazquez (2010): the spline 1-form commutes with d, so that
    a gradient added to the potential changes the result by the error of quadrature only.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> source = fm.cylindrical_grid(np.linspace(0, 2, 9), np.linspace(0, 2 * np.pi, 17), np.linspace(-1, 1, 9))
    >>> flux = fm.curl(fm.potential_from_function(source, lambda x, y, z: (-y / 2, x / 2, 0 * z)))
    >>> box = fm.cartesian_grid(*[np.linspace(-0.5, 0.5, 5)] * 3)
    >>> moved = fm.move_flux(flux, box)
    >>> bool(abs(moved.f3 - 1 / 16).max() < 1e-3), float(abs(fm.divergence(moved).cells).max())
    (True, 0.0)
    """
    return FluxPlan(flux.grid, target, order).move(flux, outside)


def move_potential(pot: EdgePotential, target: Grid, order: Order = 3) -> tuple[Three, Known]:
    """Circulation of a source's potential along every edge of another grid.

    Parameters
    ----------
    pot : EdgePotential
        In a smooth gauge: a rough one costs accuracy near poles.
    target : Grid
    order : {1, 3, 5, "limited"}

    Returns
    -------
    edges : tuple of three ndarrays
        Circulations; 0 on edges that leave the source.
    known : tuple of three bool ndarrays
        Edges that lie wholly in the source.
    """
    edges, known = FluxPlan(pot.grid, target, order).start(pot).edges(slice(0, target.shape[0]))
    close(target, edges, known)
    return edges, known
