"""Edge potential of a divergence-free flux.

Running sums give some potential in a few additions per edge. A scalar solve on the nodes then makes it smooth:
of all gauges the one with the least weighted norm. The curl of the result is the flux to round-off whatever
the accuracy of that solve, because adding a gradient changes no circulation.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Literal, get_args

import numpy as np
from numpy.typing import NDArray

from fieldmover import compute
from fieldmover.errors import ChargeError, FieldError, GridError
from fieldmover.forms.fields import EdgePotential, FaceFlux, Three, close_edges
from fieldmover.forms.incidence import d2
from fieldmover.grids.grid import Grid, area_factors, outer
from fieldmover.projection.gauge import smoothing_gauge

Array = NDArray[np.float64]
Gauge = Literal["smooth", "axial", "none"]

_ROWS = 8  # planes per task
_IN_CACHE = 1 << 15  # cells in work at a time
_LAST_BITS = 1e-15
_ROUND_OFF = 1e-10  # what counts as zero beside the sum of the fluxes it is the balance of


def potential(flux: FaceFlux, gauge: Gauge = "smooth") -> EdgePotential:
    """Vector potential of a flux: circulations along all edges whose curl is the flux.

    Parameters
    ----------
    flux : FaceFlux
        Divergence-free to round-off.
    gauge : {"smooth", "axial", "none"}
        "smooth": least sum of w a^2 with w = dual area / edge length, the discrete form of div A = 0 with no A
        through the walls; on warped grids with the w of a plain one with the same poles and seams. "axial": no
        component along the first axis without seam and poles, x or r (DeVore 2000, Magnetic helicity generation by
        solar differential rotation, has z), smooth in the surface where that begins; along a seam, where all axes
        have one, as little as there can be. "none": as running sums leave it.

    Returns
    -------
    EdgePotential
        Unit B L^2.

    Raises
    ------
    FieldError
        If the flux has divergence (`project` removes it).
    ChargeError
        If a closed surface of the grid, a sphere or a periodic plane, carries net flux (`mean_flux` takes it out
        of periodic boxes).

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> grid = fm.spherical_grid([1, 1.5, 2], np.linspace(0, np.pi, 9), np.linspace(0, 2 * np.pi, 17))
    >>> flux = fm.curl(fm.potential_from_function(grid, lambda x, y, z: (z, x, y)))
    >>> again = fm.curl(fm.potential(flux))
    >>> bool(max(abs(a - b).max() for a, b in zip(flux.faces, again.faces)) < 1e-14)
    True
    """
    if gauge not in get_args(Gauge):
        raise FieldError(f"gauge: {gauge!r}, expected one of {', '.join(map(repr, get_args(Gauge)))}")
    _check_divergence(flux)
    edges = _running_sums(flux.grid, flux.faces)
    close_edges(flux.grid, edges)
    if gauge != "none":
        _subtract_gradient(edges, smoothing_gauge(flux.grid, edges))
    if gauge == "axial":
        _make_axial(flux.grid, edges)
    return EdgePotential(flux.grid, edges)


def mean_flux(flux: FaceFlux) -> tuple[FaceFlux, FaceFlux]:
    """Split off the mean field through periodic planes, which has no vector potential on a periodic grid.

    Parameters
    ----------
    flux : FaceFlux
        On a Cartesian grid; divergence-free, so that all planes normal to an axis carry the same.

    Returns
    -------
    mean : FaceFlux
        Of the uniform field that carries what each plane does that is periodic along both its axes; 0 along other
        axes.
    rest : FaceFlux
        What is left of the flux; it has a potential.

    Raises
    ------
    GridError
        If the grid is not Cartesian.

    Examples
    --------
    >>> import numpy as np, fieldmover as fm
    >>> grid = fm.cartesian_grid(*[np.linspace(0, 1, 5)] * 3, periodic=(True, True, True))
    >>> flux = fm.flux_from_function(grid, lambda x, y, z: (0 * x, 2 + np.sin(2 * np.pi * x), 0 * x))
    >>> mean, rest = mean_flux(flux)
    >>> round(float(mean.f2[0, 0, 0]), 12)  # 2 x area
    0.125
    >>> bool(np.isfinite(fm.potential(rest).edges[2]).all())
    True
    """
    grid = flux.grid
    factors = area_factors(grid)
    if grid.kind != "cartesian" or factors is None:
        raise GridError(f"mean field of a {grid.kind} grid: expected a Cartesian one")
    mean = []
    for axis, f in enumerate(flux.faces):
        area = outer(factors[axis])
        closed = all(seam for d, seam in enumerate(grid.periodic) if d != axis)
        mean.append(area * (float(f.sum() / area.sum()) if closed else 0.0))
    f1, f2, f3 = rest = [f - m for f, m in zip(flux.faces, mean, strict=True)]
    for r, m in zip(rest, mean, strict=True):
        r[np.abs(r) < _LAST_BITS * np.abs(m)] = 0.0  # of a uniform field nothing must be left to have a sum
    return FaceFlux(grid, (mean[0], mean[1], mean[2])), FaceFlux(grid, (f1, f2, f3))


def _make_axial(grid: Grid, edges: Three) -> None:
    """Take the component along one axis out of a potential, by the gradient of its running sum."""
    r = _sum_axis(grid)
    if grid.poles[r] == "both":
        raise FieldError("gauge: 'axial', but every axis has a seam or two poles; expected 'smooth' or 'none'")
    g = np.zeros(grid.node_shape())
    along, sums = np.moveaxis(edges[r], r, 0), np.moveaxis(g, r, 0)
    rest = along.mean(axis=0) if grid.periodic[r] else np.zeros(along.shape[1:])
    np.cumsum(along - rest, axis=0, out=sums[1:])
    if grid.periodic[r]:
        sums[-1] = 0.0
    if grid.poles[r] == "high":
        sums -= sums[-1].copy()
    _subtract_gradient(edges, g)
    along[...] = rest
    close_edges(grid, edges)


def _sum_axis(grid: Grid) -> int:
    """The axis to add up along: an interval if there is one."""
    return min(range(3), key=lambda d: (grid.periodic[d], grid.poles[d] == "both", grid.poles[d] is not None, d))


def _subtract_gradient(edges: Three, g: Array) -> None:
    """a -= d0 g, in place."""
    a1, a2, a3 = edges

    def work(rows: slice) -> None:
        part = g[rows]
        a2[rows] -= np.diff(part, axis=1)
        a3[rows] -= np.diff(part, axis=2)
        inner = slice(rows.start, min(rows.stop, a1.shape[0]))
        a1[inner] -= g[inner.start + 1 : inner.stop + 1] - g[inner]

    compute.for_each(work, compute.slabs(g.shape[0], _ROWS))


def _check_divergence(flux: FaceFlux) -> None:
    n1, n2, n3 = flux.grid.shape

    def work(rows: slice) -> tuple[float, float]:
        f1, f2, f3 = parts = flux.f1[rows.start : rows.stop + 1], flux.f2[rows], flux.f3[rows]
        net, more = f1[1:] - f1[:-1], f2[:, 1:] - f2[:, :-1]
        net += more
        net += np.subtract(f3[:, :, 1:], f3[:, :, :-1], out=more)
        return _largest([net]), _largest(parts)

    net_of_slabs, of_slabs = np.array(compute.for_each(work, compute.slabs(n1, _IN_CACHE // (n2 * n3)))).T
    largest = float(of_slabs.max())
    if not np.isfinite(largest):
        raise FieldError("the flux holds values that are not finite, expected numbers")
    if net_of_slabs.max() > _ROUND_OFF * 6 * largest:
        net = np.abs(d2(flux.faces))
        place = np.unravel_index(int(np.argmax(net)), net.shape)
        raise FieldError(
            f"the flux has divergence: net flux {net[place]:.6g} in cell {[int(i) for i in place]} where the largest "
            f"face flux is {largest:.6g}, expected zero to round-off; remove it by project() first"
        )


def _largest(arrays: Sequence[Array]) -> float:
    """Largest absolute value; NaN if there is one."""
    return float(np.max([max(float(a.max()), -float(a.min())) for a in arrays]))


def _running_sums(grid: Grid, faces: Three) -> Three:
    """Potential with no component along one axis, the first that is an interval if there is any.

    With axes (r, a, b) in cyclic order and A_r = 0: F_a = -d_r A_b and F_b = d_r A_a; what is left is
    F_r = d_a A_b - d_b A_a on the surface where the sums begin.
    """
    r = _sum_axis(grid)
    order = (r, (r + 1) % 3, (r + 2) % 3)
    turned = [faces[d].transpose(order) for d in order]
    edges: list[Array] = [np.zeros(grid.edge_shape(d)) for d in range(3)]
    a_r, a_a, a_b = (edges[d].transpose(order) for d in order)
    f_r, f_a, f_b = turned
    largest = max(max(float(f.max()), -float(f.min())) for f in faces)
    if grid.periodic[r]:
        _refuse_charge(grid, f_a[:, 0], largest, (order[1], order[2], r))
        _refuse_charge(grid, f_b[:, :, 0], largest, (order[2], r, order[1]))
        loop = _loop_circulation(f_a.sum(axis=0), f_b.sum(axis=0))
        a_r[:] = loop / grid.shape[r]
        f_a, f_b = f_a - np.diff(a_r, axis=2), f_b + np.diff(a_r, axis=1)
    backward = grid.poles[r] == "high"
    first = -1 if backward else 0
    if grid.poles[r] is None:
        a_a[first], a_b[first] = _surface(grid, order, f_r[first], largest)

    def work(columns: slice) -> None:
        for i in range(grid.shape[r]):
            if backward:
                here, there, of = grid.shape[r] - 1 - i, grid.shape[r] - i, grid.shape[r] - 1 - i
                np.add(a_b[there, columns], f_a[of, columns], out=a_b[here, columns])
                np.subtract(a_a[there, columns], f_b[of, columns], out=a_a[here, columns])
            else:
                np.subtract(a_b[i, columns], f_a[i, columns], out=a_b[i + 1, columns])
                np.add(a_a[i, columns], f_b[i, columns], out=a_a[i + 1, columns])

    compute.for_each(work, compute.slabs(a_b.shape[1], 4 * _ROWS))
    return edges[0], edges[1], edges[2]


def _surface(grid: Grid, order: tuple[int, int, int], f: Array, largest: float) -> tuple[Array, Array]:
    """Circulations (A_a, A_b) on a surface with d_a A_b - d_b A_a = f, f of shape (n_a, n_b)."""
    _, a, b = order
    closed_a, closed_b = (grid.periodic[d] or grid.poles[d] == "both" for d in (a, b))
    a_a, a_b = np.zeros((f.shape[0], f.shape[1] + 1)), np.zeros((f.shape[0] + 1, f.shape[1]))
    if not closed_a:
        a_b[:] = _from_pole(f, 0, grid.poles[a] == "high")
    elif not closed_b:
        a_a[:] = -_from_pole(f, 1, grid.poles[b] == "high")
    else:
        _refuse_charge(grid, f, largest, order)
        around = np.zeros(f.shape[1] + 1)  # what all wedges together must carry round
        around[1:-1] = -np.cumsum(f.sum(axis=0))[:-1]
        a_a[:] = around / f.shape[0]
        a_b[1:] = np.cumsum(f + np.diff(a_a, axis=1), axis=0)
        a_b[-1] = 0.0
    return a_a, a_b


def _from_pole(f: Array, axis: int, backward: bool) -> Array:
    """Running sums from 0 at the low end, or to 0 at the high end."""
    zero = np.zeros_like(np.take(f, [0], axis=axis))
    sums = np.concatenate([zero, np.cumsum(f, axis=axis)], axis=axis)
    return sums - np.take(sums, [-1], axis=axis) if backward else sums


def _loop_circulation(f_a: Array, f_b: Array) -> Array:
    """Circulation G of A round each loop of a periodic axis, from summed fluxes: d_b G = f_a, d_a G = -f_b."""
    first = np.concatenate([[0.0], np.cumsum(f_a[0])])
    first[-1] = 0.0
    loop = first - np.concatenate([np.zeros((1, first.size)), np.cumsum(f_b, axis=0)])
    loop[-1] = loop[0]
    return np.asarray(loop)


def _refuse_charge(grid: Grid, f: Array, largest: float, order: tuple[int, int, int]) -> None:
    """Refuse net flux through the closed surface normal to axis order[0], unless the field runs along it: what goes
    through is round-off of the largest flux anywhere then.
    """
    net, total = float(f.sum()), float(np.abs(f).sum())
    if abs(net) <= _ROUND_OFF * total + _LAST_BITS * f.size * largest:
        return
    normal, a, b = order
    names = grid.map.names
    hint = ""
    if grid.periodic[a] and grid.periodic[b]:
        what = f"mean field along {names[normal]}: each periodic plane"
        hint = " (mean_flux() splits it off)" if grid.kind == "cartesian" else ""
    else:
        what = f"charge in the hole inside {names[normal]} = {grid.nodes[normal][0]:.6g}: its surface"
    raise ChargeError(
        f"{what} carries a net flux of {net:.9g} (of {total:.6g} in and out), expected 0: such a field has no vector "
        f"potential{hint}",
        net,
    )
