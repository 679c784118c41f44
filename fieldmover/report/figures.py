"""Pictures of planes through source and target: strength and lines of the field, and its divergence.

Colours come from maps that stay readable without colour vision and in grey. All panels of one plane share one
scale. Every picture has an alternative text with its numbers.
"""

from __future__ import annotations

import io
import re
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fieldmover.errors import JobError
from fieldmover.grids.grid import Grid
from fieldmover.interpolation.locate import Locator

Array = NDArray[np.float64]
Panel = tuple[str, Array, Array | None]  # title, values, field for lines

Scale = tuple[float, float, str, str]  # from, to, colour map, label

PIXELS = 320  # along the longer side of the plane
STRENGTHS, DIVERGENCES = "cividis", "magma"
NOWHERE = "#d9d9d9"  # where a side has no cells
FLOOR = 1e-17  # of divergences shown: exact zeros have no place on a logarithmic scale
NAMES = "xyz"


@dataclass(frozen=True)
class Picture:
    """One panel: its plane, what it shows, PNG bytes and the alternative text."""

    plane: str
    title: str
    png: bytes
    text: str

    @property
    def file_name(self) -> str:
        """The picture's own file in the report: words of its title and plane, joined by hyphens."""
        return "-".join(re.findall(r"[a-z0-9.]+", f"{self.title} {self.plane}".lower())) + ".png"


@dataclass(frozen=True)
class Plane:
    """Points of a plane at right angles to a Cartesian axis.

    Attributes
    ----------
    axis : int
        The axis at right angles: 0, 1 or 2.
    position : float
        Where the plane cuts it.
    across, up : (nu,) and (nv,) arrays
        Centres of the pixels along the other two axes.
    """

    axis: int
    position: float
    across: Array
    up: Array

    @property
    def others(self) -> tuple[int, int]:
        """The axes that the picture shows, the horizontal one first."""
        a, b = (axis for axis in range(3) if axis != self.axis)
        return a, b

    @property
    def name(self) -> str:
        return f"{NAMES[self.axis]} = {self.position:.4g}"

    @classmethod
    def through(cls, grid: Grid, axis: int, position: float | None = None) -> Plane:
        """A plane that shows a grid; by default at 0 if the grid reaches there, else in its middle.

        Raises
        ------
        JobError
            If the plane misses the grid.
        """
        positions = grid.node_positions().reshape(3, -1)
        low, high = positions.min(axis=1), positions.max(axis=1)
        if position is None:
            position = 0.0 if low[axis] <= 0 <= high[axis] else float(0.5 * (low[axis] + high[axis]))
        if not low[axis] <= position <= high[axis]:
            raise JobError(
                f"report.planes: {NAMES[axis]} = {position:g} misses the grid, which reaches from "
                f"{low[axis]:.6g} to {high[axis]:.6g}"
            )
        shown = [other for other in range(3) if other != axis]
        step = max(high[other] - low[other] for other in shown) / PIXELS
        across, up = (
            low[other] + (np.arange(n) + 0.5) * (high[other] - low[other]) / n
            for other, n in ((o, max(2, round((high[o] - low[o]) / step))) for o in shown)
        )
        return cls(axis, position, across, up)

    def cells_of(self, grid: Grid) -> NDArray[np.int64]:
        """The flat index of the cell that holds each pixel, shape (nv, nu); -1 outside the grid."""
        u, v = np.meshgrid(self.across, self.up)
        points = np.empty((3, u.size))
        points[self.axis] = self.position
        points[self.others[0]], points[self.others[1]] = u.ravel(), v.ravel()
        return Locator(grid).cells(points).reshape(u.shape)


def pictures(
    planes: Sequence[Plane], grids: Sequence[Grid], sides: Sequence[tuple[Array, Array]]
) -> list[Picture]:
    """All panels of all planes.

    Parameters
    ----------
    planes : sequence of Plane
    grids : sequence of Grid
        Of the source and, where there is one, of the target.
    sides : sequence of pairs (field, divergence)
        For each grid: Cartesian components at cell centres, (3, n1, n2, n3), Heaviside-Lorentz; relative
        divergence of cells, (n1, n2, n3).

    Returns
    -------
    list of Picture
        For each plane the field of source and target and their difference, and the divergence of both.
    """
    found = []
    for plane in planes:
        cells = [plane.cells_of(grid) for grid in grids]
        fields = [_at(field, where) for (field, _), where in zip(sides, cells, strict=True)]
        divergences = [_at(divergence, where) for (_, divergence), where in zip(sides, cells, strict=True)]
        found += _fields(plane, fields) + _divergences(plane, divergences)
    return found


SIDES = ("source", "target as stored")


def _at(values: Array, cells: NDArray[np.int64]) -> Array:
    """Values of cells, last axes (n1, n2, n3), at the pixels; NaN outside the grid."""
    flat = values.reshape(*values.shape[:-3], -1)
    return np.where(cells >= 0, flat[..., np.maximum(cells, 0)], np.nan)


def _fields(plane: Plane, b: list[Array]) -> list[Picture]:
    panels: list[Panel] = [
        (f"|B|, {side}", np.sqrt((field**2).sum(axis=0)), field)
        for side, field in zip(SIDES, b, strict=False)
    ]
    strengths = [values for _, values, _ in panels]
    high = max(_largest(values) for values in strengths) or 1.0
    least = min((float(np.nanmin(values)) for values in strengths if np.isfinite(values).any()), default=0.0)
    if len(b) == 2:
        difference = np.sqrt(((b[1] - b[0]) ** 2).sum(axis=0))
        panels.append(("|B of target - B of source|", difference, None))
        if np.isfinite(difference).any():
            least = min(least, float(np.nanmedian(difference)))  # most of it is to be seen
    low = min(max(least, 1e-4 * high), 0.5 * high)
    scale = (low, high, STRENGTHS, "|B|, Heaviside-Lorentz")
    return [_picture(plane, panel, scale) for panel in panels]


def _divergences(plane: Plane, found: list[Array]) -> list[Picture]:
    high = max(max(_largest(values) for values in found), 10 * FLOOR)
    scale = (FLOOR, high, DIVERGENCES, "|net flux| / sum of |flux| of a cell")
    return [
        _picture(plane, (f"divergence, {side}", values, None), scale)
        for side, values in zip(SIDES, found, strict=False)
    ]


def _largest(values: Array) -> float:
    """0 where nothing is shown."""
    return float(np.nanmax(values, initial=0.0))


def _picture(plane: Plane, panel: Panel, scale: Scale) -> Picture:
    title, values, b = panel
    low, high, _, label = scale
    seen = values[np.isfinite(values)]
    numbers = (
        f"up to {seen.max():.4g}, median {np.median(seen):.4g}"
        if seen.size
        else "no cell of it lies in this plane"
    )
    lines = ", with field lines" if b is not None and seen.size and seen.max() > 0 else ""
    text = (
        f"Map of {title} in the plane {plane.name}{lines}: {numbers}. Logarithmic colours from {low:.3g} to "
        f"{high:.3g}: {label}."
    )
    png = _drawn(plane, values, b if lines else None, scale)
    return Picture(plane.name, title, png, text)


def _drawn(plane: Plane, values: Array, b: Array | None, scale: Scale) -> bytes:
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.colors import LogNorm
    from matplotlib.figure import Figure

    low, high, colours, label = scale
    (u, v), (du, dv) = (plane.across, plane.up), (np.diff(q[:2])[0] / 2 for q in (plane.across, plane.up))
    figure = Figure(figsize=(5.0, 4.4))
    canvas = FigureCanvasAgg(figure)
    axes: Any = figure.add_axes((0.12, 0.12, 0.68, 0.82))
    bar: Any = figure.add_axes((0.82, 0.12, 0.035, 0.82))
    axes.set_facecolor(NOWHERE)
    extent = (u[0] - du, u[-1] + du, v[0] - dv, v[-1] + dv)
    image = axes.imshow(
        np.clip(values, low, None), origin="lower", extent=extent, cmap=colours, norm=LogNorm(low, high),
        interpolation="nearest",
    )  # fmt: skip
    if b is not None:
        style = {"color": "white", "linewidth": 0.6, "density": 1.1, "arrowsize": 0.6}
        axes.streamplot(u, v, b[plane.others[0]], b[plane.others[1]], **style)
    axes.set(xlim=extent[:2], ylim=extent[2:])  # field lines would widen them
    axes.set_xlabel(NAMES[plane.others[0]])
    axes.set_ylabel(NAMES[plane.others[1]])
    axes.set_aspect("equal")
    figure.colorbar(image, cax=bar)
    figure.text(0.98, 0.955, label, ha="right", va="bottom", fontsize=9)
    canvas.draw()
    return _png(np.asarray(canvas.buffer_rgba()))


def _png(pixels: NDArray[np.uint8]) -> bytes:
    """PNG with a palette, which takes a third of the bytes; colour maps have no more shades."""
    from PIL import Image

    out = io.BytesIO()
    image = Image.fromarray(np.ascontiguousarray(pixels[..., :3]))
    image.quantize(256, method=Image.Quantize.MAXCOVERAGE, dither=Image.Dither.NONE).save(
        out, "png", optimize=True
    )
    return out.getvalue()
