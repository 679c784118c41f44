"""Pictures of planes through source and target: strength and lines of the field, and its divergence.

Colours come from maps that stay readable without colour vision and in grey. All panels of one plane share one
scale. Every picture has an alternative text with its numbers. It is kept whole, for slides and notes, and as its
bare map and colour bar, to which the page adds axes in its own colours.
"""

from __future__ import annotations

import io
import re
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fieldmover.grids.grid import Grid
from fieldmover.interpolation.locate import Locator
from fieldmover.report.planes import NAMES, Plane

Array = NDArray[np.float64]
Panel = tuple[str, Array, Array | None]  # title, values, field for lines

STRENGTHS, DIVERGENCES = "cividis", "magma"
NOWHERE = "#d9d9d9"  # where a side has no cells
FLOOR = 1e-17  # of divergences shown: exact zeros have no place on a logarithmic scale
SIDES = ("source", "target as stored")

LEFT, BOTTOM, TOP, BAR, GAP, RIGHT = 62, 50, 26, 16, 14, 64  # pixels round the map and its colour bar
FRAME = 2  # pixels of a map that its frame touches
LINES = 100  # points along each side that are enough for field lines
LEAST = (160, 120)  # pixels of width and height that words need, however narrow the plane is


@dataclass(frozen=True)
class Scale:
    """Logarithmic colours."""

    low: float
    high: float
    colours: str
    label: str


@dataclass(frozen=True)
class Picture:
    """One panel.

    Attributes
    ----------
    plane, title : str
        Where it is and what it shows.
    numbers : str
        What a reader would read off it.
    text : str
        Alternative text.
    png : bytes
        The whole picture, on white.
    map, bar : bytes
        PNG of the map alone and of its colour bar alone.
    extent : four float
        Left, right, lower and upper edge of the map.
    axes : pair of str
        Names along it.
    scale : Scale
    """

    plane: str
    title: str
    numbers: str
    text: str
    png: bytes
    map: bytes
    bar: bytes
    extent: tuple[float, float, float, float]
    axes: tuple[str, str]
    scale: Scale

    @property
    def file_name(self) -> str:
        """The picture's own file in the report: words of its title and plane, joined by hyphens."""
        return "-".join(re.findall(r"[a-z0-9.]+", f"{self.title} {self.plane}".lower())) + ".png"

    def smaller(self, part: float) -> Picture:
        """The same with a map of fewer pixels, by this factor along each side."""
        from PIL import Image

        image = Image.open(io.BytesIO(self.map)).convert("RGB")
        wide, tall = (max(1, round(part * n)) for n in image.size)
        few = np.asarray(image.resize((wide, tall), Image.Resampling.BOX))
        return replace(self, map=_png(few))


def pictures(planes: Sequence[Plane], grids: Sequence[Grid], sides: Sequence[tuple[Array, Array]]) -> list[Picture]:
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
    found, locators = [], [Locator(grid) for grid in grids]
    for plane in planes:
        sections = [plane.cut(locator) for locator in locators]
        fields = [section.of_field(b) for section, (b, _) in zip(sections, sides, strict=True)]
        divergences = [section.of_cells(values) for section, (_, values) in zip(sections, sides, strict=True)]
        found += _fields(plane, fields) + _divergences(plane, divergences)
    return found


def _fields(plane: Plane, b: list[Array]) -> list[Picture]:
    panels: list[Panel] = [
        (f"|B|, {side}", np.sqrt((field**2).sum(axis=0)), field) for side, field in zip(SIDES, b, strict=False)
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
    scale = Scale(low, high, STRENGTHS, "|B|, Heaviside-Lorentz")
    return [_picture(plane, panel, scale) for panel in panels]


def _divergences(plane: Plane, found: list[Array]) -> list[Picture]:
    high = max(max(_largest(values) for values in found), 10 * FLOOR)
    scale = Scale(FLOOR, high, DIVERGENCES, "|net flux| / sum of |flux| of a cell")
    return [
        _picture(plane, (f"divergence, {side}", values, None), scale)
        for side, values in zip(SIDES, found, strict=False)
    ]


def _largest(values: Array) -> float:
    """0 where nothing is shown."""
    return float(np.nanmax(values, initial=0.0))


def _picture(plane: Plane, panel: Panel, scale: Scale) -> Picture:
    title, values, b = panel
    seen = values[np.isfinite(values)]
    numbers = (
        f"up to {seen.max():.4g}, median {np.median(seen):.4g}" if seen.size else "no cell of it lies in this plane"
    )
    lines = ", with field lines" if b is not None and seen.size and seen.max() > 0 else ""
    text = (
        f"Map of {title} in the plane {plane.name}{lines}: {numbers}. Logarithmic colours from {scale.low:.3g} to "
        f"{scale.high:.3g}: {scale.label}."
    )
    png, bare, bar = _drawn(plane, values, b if lines else None, scale)
    axes = NAMES[plane.others[0]], NAMES[plane.others[1]]
    return Picture(plane.name, title, numbers, text, png, bare, bar, plane.extent, axes, scale)


def _drawn(plane: Plane, values: Array, b: Array | None, scale: Scale) -> tuple[bytes, bytes, bytes]:
    """The whole picture, and cut out of it the map and the colour bar."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.colors import LogNorm
    from matplotlib.figure import Figure

    wide, tall = plane.across.size, plane.up.size
    width, height = max(wide, LEAST[0]) + LEFT + GAP + BAR + RIGHT, max(tall, LEAST[1]) + BOTTOM + TOP
    beside, long = LEFT + wide + GAP, max(tall, LEAST[1])
    figure = Figure(figsize=(width / 100, height / 100), dpi=100)
    canvas = FigureCanvasAgg(figure)
    axes: Any = figure.add_axes((LEFT / width, BOTTOM / height, wide / width, tall / height))
    bar: Any = figure.add_axes((beside / width, BOTTOM / height, BAR / width, long / height))
    axes.set_facecolor(NOWHERE)
    norm = LogNorm(scale.low, scale.high)
    image = axes.imshow(
        np.clip(values, scale.low, None), origin="lower", extent=plane.extent, cmap=scale.colours, norm=norm,
        interpolation="nearest", aspect="auto",
    )  # fmt: skip
    if b is not None:
        _field_lines(axes, plane, b)
    axes.set(xlim=plane.extent[:2], ylim=plane.extent[2:])  # field lines would widen them
    axes.set_xlabel(NAMES[plane.others[0]])
    axes.set_ylabel(NAMES[plane.others[1]])
    figure.colorbar(image, cax=bar)
    figure.text(0.98, 1 - 20 / height, scale.label, ha="right", va="bottom", fontsize=9)
    canvas.draw()
    pixels = np.asarray(canvas.buffer_rgba())[..., :3]
    foot = height - BOTTOM - FRAME
    rows = slice(foot - tall + 2 * FRAME, foot)
    bar_rows = slice(foot - long + 2 * FRAME, foot)
    column = pixels[bar_rows, beside + BAR // 2 : beside + BAR // 2 + 1]
    lines = b is not None
    return _png(pixels, lines), _png(pixels[rows, LEFT + FRAME : LEFT + wide - FRAME], lines), _png(column)


def _field_lines(axes: Any, plane: Plane, b: Array) -> None:
    """White lines, edged in black so that they stand out from every colour."""
    from matplotlib.patheffects import withStroke

    u, v = (slice(None, None, max(1, q.size // LINES)) for q in (plane.across, plane.up))
    across, up = (b[axis, v, u] for axis in plane.others)
    style = {"color": "white", "linewidth": 0.7, "density": 1.1, "arrowsize": 0.7}
    drawn = axes.streamplot(plane.across[u], plane.up[v], across, up, **style)
    drawn.lines.set_path_effects([withStroke(linewidth=1.5, foreground="black", alpha=0.6)])


def _png(pixels: NDArray[np.uint8], lines: bool = False) -> bytes:
    """PNG with a palette, which takes a third of the bytes; lines on a map have more shades than that, so the best."""
    from PIL import Image

    out = io.BytesIO()
    image = Image.fromarray(np.ascontiguousarray(pixels))
    few = image.quantize(256, method=Image.Quantize.MAXCOVERAGE, kmeans=int(lines), dither=Image.Dither.NONE)
    few.save(out, "png", optimize=True)
    return out.getvalue()
