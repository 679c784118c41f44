"""Charts as inline SVG: they scale, follow the light or dark colours of the page, and carry their numbers as text.

Series differ by dash and marker as well as by colour.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

from fieldmover.report.formats import escaped

WIDTH, HEIGHT = 440, 270
LEFT, RIGHT, TOP, BOTTOM = 62, 14, 14, 46
DASHES = ("", "6 4", "2 3", "9 3 2 3")
TICKS = 6
"""About so many along an axis."""

Points = Sequence[tuple[float, float]]


def bars(values: Mapping[str, tuple[float, str]], text: str) -> str:
    """Horizontal bars from 0, each with its label and its number.

    Parameters
    ----------
    values : mapping
        Label to (value, its text).
    text : str
        Alternative text.
    """
    step, left, room = 34, 78, 190
    most = max((value for value, _ in values.values()), default=0.0) or 1.0
    rows = []
    for count, (label, (value, shown)) in enumerate(values.items()):
        y, length = 6 + count * step, room * max(value, 0.0) / most
        rows.append(
            f'<text x="{left - 8}" y="{y + 17}" text-anchor="end">{escaped(label)}</text>'
            f'<rect class="bar" x="{left}" y="{y}" width="{length:.1f}" height="24"/>'
            f'<text x="{left + length + 6:.1f}" y="{y + 17}">{escaped(shown)}</text>'
        )
    return _svg("".join(rows), WIDTH, 12 + step * len(values), text)


def lines(
    series: Mapping[str, Points], labels: tuple[str, str], text: str, log: tuple[bool, bool] = (True, True)
) -> str:
    """Curves through points on common axes.

    Parameters
    ----------
    series : mapping
        Name to points (x, y). On a logarithmic axis points that are not above 0 are left out.
    labels : pair of str
        Of the axes.
    text : str
        Alternative text.
    log : pair of bool
        Which axes are logarithmic.

    Examples
    --------
    >>> svg = lines({"after": [(1, 10), (10, 1)]}, ("k", "energy"), "Energy falls from 10 to 1.")
    >>> svg.count('class="s0"'), "Energy falls" in svg
    (2, True)
    """
    kept = {
        name: [
            point
            for point in points
            if all(p > 0 or not is_log for p, is_log in zip(point, log, strict=True))
        ]
        for name, points in series.items()
    }
    flat = [point for points in kept.values() for point in points]
    if not flat:
        return f"<p>{escaped(text)}</p>"
    axes = [_Axis([point[d] for point in flat], is_log) for d, is_log in enumerate(log)]
    parts = [_frame(axes, labels)]
    for count, (name, points) in enumerate(kept.items()):
        at = [(_x(axes[0].place(x)), _y(axes[1].place(y))) for x, y in points]
        path = " ".join(f"{'L' if i else 'M'}{x:.1f} {y:.1f}" for i, (x, y) in enumerate(at))
        dash = f' stroke-dasharray="{DASHES[count % 4]}"' if DASHES[count % 4] else ""
        parts.append(f'<path class="s{count % 4}" d="{path}"{dash}/>' if at else "")
        y = TOP + 12 + 17 * count
        parts.append(
            f'<line class="s{count % 4}" x1="{WIDTH - 150}" x2="{WIDTH - 122}" y1="{y}" y2="{y}"{dash}/>'
            f'<text x="{WIDTH - 116}" y="{y + 4}">{escaped(name)}</text>'
        )
    return _svg("".join(parts), WIDTH, HEIGHT, text)


class _Axis:
    """Where values lie between 0 and 1, and the ticks there."""

    def __init__(self, values: list[float], log: bool) -> None:
        self.log = log
        low, high = (math.log10(v) if log else v for v in (min(values), max(values)))
        if log:
            low, high = math.floor(low), math.ceil(high)
        if high <= low:
            low, high = low - 1, high + 1
        self.low, self.high = low, high

    def place(self, value: float) -> float:
        return ((math.log10(value) if self.log else value) - self.low) / (self.high - self.low)

    def ticks(self) -> list[tuple[float, str]]:
        """Places and texts: powers of ten, or round steps."""
        span = self.high - self.low
        if self.log:
            step = float(max(1, math.ceil(span / TICKS)))
        else:
            rough = span / TICKS
            power = 10.0 ** math.floor(math.log10(rough))
            step = power * next((f for f in (1, 2, 5) if f * power >= rough), 10)
        first, count = math.ceil(self.low / step - 1e-9), math.floor(span / step + 1e-9) + 1
        marks = [(first + i) * step for i in range(count)]
        return [
            ((m - self.low) / span, f"1e{m:.0f}" if self.log else f"{m:.4g}")
            for m in marks
            if m <= self.high + 1e-9
        ]


def _x(part: float) -> float:
    return LEFT + part * (WIDTH - LEFT - RIGHT)


def _y(part: float) -> float:
    return HEIGHT - BOTTOM - part * (HEIGHT - TOP - BOTTOM)


def _frame(axes: list[_Axis], labels: tuple[str, str]) -> str:
    parts = [f'<path class="axis" d="M{LEFT} {TOP} V{HEIGHT - BOTTOM} H{WIDTH - RIGHT}"/>']
    for part, text in axes[0].ticks():
        x = _x(part)
        parts.append(f'<line class="grid" x1="{x:.1f}" x2="{x:.1f}" y1="{TOP}" y2="{HEIGHT - BOTTOM}"/>')
        parts.append(f'<text x="{x:.1f}" y="{HEIGHT - BOTTOM + 16}" text-anchor="middle">{text}</text>')
    for part, text in axes[1].ticks():
        y = _y(part)
        parts.append(f'<line class="grid" x1="{LEFT}" x2="{WIDTH - RIGHT}" y1="{y:.1f}" y2="{y:.1f}"/>')
        parts.append(f'<text x="{LEFT - 6}" y="{y + 4:.1f}" text-anchor="end">{text}</text>')
    middle = TOP + (HEIGHT - TOP - BOTTOM) / 2
    parts.append(f'<text x="{_x(0.5)}" y="{HEIGHT - 8}" text-anchor="middle">{escaped(labels[0])}</text>')
    parts.append(
        f'<text transform="translate(14 {middle}) rotate(-90)" text-anchor="middle">{escaped(labels[1])}</text>'
    )
    return "".join(parts)


def _svg(inside: str, width: int, height: int, text: str) -> str:
    return f'<svg viewBox="0 0 {width} {height}" role="img" aria-label="{escaped(text)}">{inside}</svg>'
