"""Charts and maps as inline SVG: they scale, follow the light or dark colours of the page, and carry a text.

Series differ by dash as well as by colour, and each is named above the frame.
"""

from __future__ import annotations

import base64
import math
from collections.abc import Mapping, Sequence

from fieldmover.report.figures import Picture
from fieldmover.report.formats import escaped

WIDTH, HEIGHT = 440, 280
LEFT, RIGHT, TOP, BOTTOM = 62, 14, 30, 46
DASHES = ("", "6 4", "2 3", "9 3 2 3")
TICKS = 6
"""About so many along an axis."""
SIDE = 300
"""Of a map, the longer one."""
SUPERSCRIPTS = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")

Points = Sequence[tuple[float, float]]
Bins = Sequence[tuple[float, float, float]]  # from, to, count


def bars(values: Mapping[str, tuple[float, str]], text: str) -> str:
    """Horizontal bars from 0, each with its label and its number; negative ones lead to the left.

    Parameters
    ----------
    values : mapping
        Label to (value, its text).
    text : str
        Alternative text.
    """
    step, first, last = 34, 78, 268
    found = [value for value, _ in values.values()]
    low, high = min(0.0, *found), max(0.0, *found)
    span = (high - low) or 1.0
    zero = first + (last - first) * -low / span
    rows = []
    for count, (label, (value, shown)) in enumerate(values.items()):
        y, end = 6 + count * step, zero + (last - first) * value / span
        rows.append(
            f'<text x="{first - 8}" y="{y + 17}" text-anchor="end">{escaped(label)}</text>'
            f'<rect class="bar" x="{min(zero, end):.1f}" y="{y}" width="{abs(end - zero):.1f}" height="24"/>'
            f'<text x="{max(zero, end) + 6:.1f}" y="{y + 17}">{escaped(shown)}</text>'
        )
    height = 12 + step * len(values)
    rows.append(f'<path class="axis" d="M{zero:.1f} 0 V{height}"/>')
    return svg("".join(rows), WIDTH, height, text)


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
    >>> found = lines({"after": [(1, 10), (10, 1)]}, ("k", "energy"), "Energy falls from 10 to 1.")
    >>> found.count('class="s0"'), "Energy falls" in found
    (2, True)
    """
    kept = {
        name: [point for point in points if all(p > 0 or not is_log for p, is_log in zip(point, log, strict=True))]
        for name, points in series.items()
    }
    flat = [point for points in kept.values() for point in points]
    if not flat:
        return f"<p>{escaped(text)}</p>"
    x, y = (Axis([point[d] for point in flat], is_log) for d, is_log in enumerate(log))
    paths = {
        name: " ".join(f"{'L' if i else 'M'}{_x(x, a):.1f} {_y(y, b):.1f}" for i, (a, b) in enumerate(points))
        for name, points in kept.items()
    }
    return _curves(paths, (x, y), labels, text)


def histogram(series: Mapping[str, Bins], labels: tuple[str, str], text: str) -> str:
    """Histograms on common logarithmic axes.

    Parameters
    ----------
    series : mapping
        Name to bins (from, to, count); a first bin from 0 is shown as one decade.
    labels, text
        As for `lines`.
    """
    kept = {
        name: [(low or high / 10, high, count) for low, high, count in bins if count > 0]
        for name, bins in series.items()
    }
    flat = [found for bins in kept.values() for found in bins]
    if not flat:
        return f"<p>{escaped(text)}</p>"
    x = Axis([edge for low, high, _ in flat for edge in (low, high)], True)
    y = Axis([0.5, 2.0 * max(count for *_, count in flat)], True, tight=True)  # a single cell stands out too
    base, paths = _y(y, 0.5), {}
    for name, bins in kept.items():
        path, end = "", None
        for low, high, count in bins:
            path += f"{f'M{_x(x, low):.1f} {base:.1f} ' if low != end else ''}L{_x(x, low):.1f} {_y(y, count):.1f} "
            path += f"H{_x(x, high):.1f} "
            end = high
        paths[name] = path.strip()
    return _curves(paths, (x, y), labels, text)


def chart_of(picture: Picture) -> str:
    """A map with axes and colour bar in the colours of the page."""
    left, right, low, high = picture.extent
    unit = SIDE / max(right - left, high - low)
    wide, tall = unit * (right - left), unit * (high - low)
    x, y, top = 46, 26.0, 26.0
    long, beside = max(tall, 120.0), x + wide + 12
    width, height = max(beside + 66, 240.0), top + long + 42
    y += long - tall  # a low map stands at the foot of its colour bar
    across, up = Axis([left, right], False), Axis([low, high], False)
    bar = Axis([picture.scale.low, picture.scale.high], True, tight=True)
    parts = [
        _image(picture.map, x, y, wide, tall),
        _image(picture.bar, beside, top, 14, long),
        f'<rect class="axis" x="{x}" y="{y:.1f}" width="{wide:.1f}" height="{tall:.1f}"/>',
        f'<rect class="axis" x="{beside:.1f}" y="{top}" width="14" height="{long:.1f}"/>',
        f'<text x="{width:.1f}" y="14" text-anchor="end">{escaped(picture.scale.label)}</text>',
    ]
    foot = top + long
    for part, label in across.ticks():
        at = x + part * wide
        parts.append(f'<path class="axis" d="M{at:.1f} {foot:.1f} v4"/>')
        parts.append(f'<text x="{at:.1f}" y="{foot + 17:.1f}" text-anchor="middle">{label}</text>')
    for part, label in up.ticks():
        at = foot - part * tall
        parts.append(f'<path class="axis" d="M{x} {at:.1f} h-4"/>')
        parts.append(f'<text x="{x - 7}" y="{at + 4:.1f}" text-anchor="end">{label}</text>')
    for part, label in bar.ticks():
        at = foot - part * long
        parts.append(f'<path class="axis" d="M{beside + 14:.1f} {at:.1f} h4"/>')
        parts.append(f'<text x="{beside + 21:.1f}" y="{at + 4:.1f}">{label}</text>')
    parts.append(f'<text x="{x + wide / 2:.1f}" y="{foot + 34:.1f}" text-anchor="middle">{picture.axes[0]}</text>')
    parts.append(f'<text x="6" y="{foot - tall / 2:.1f}">{picture.axes[1]}</text>')
    return svg("".join(parts), width, height, picture.text)


class Axis:
    """Where values lie between 0 and 1, and the ticks there; logarithmic axes end at whole decades unless tight."""

    def __init__(self, values: list[float], log: bool, tight: bool = False) -> None:
        self.log = log
        low, high = (math.log10(v) if log else v for v in (min(values), max(values)))
        if log and not tight:
            low, high = math.floor(low), math.ceil(high)
        if high <= low:
            low, high = low - 1, high + 1
        self.low, self.high = low, high

    def place(self, value: float) -> float:
        return ((math.log10(value) if self.log else value) - self.low) / (self.high - self.low)

    def ticks(self) -> list[tuple[float, str]]:
        """Places and texts: powers of ten, or round steps.

        Examples
        --------
        >>> [text for _, text in Axis([1e-4, 1e2], True).ticks()]
        ['10⁻⁴', '0.001', '0.01', '0.1', '1', '10', '100']
        >>> [text for _, text in Axis([0.15, 0.6], True, tight=True).ticks()]
        ['0.2', '0.5']
        """
        span = self.high - self.low
        if self.log:
            whole = range(math.ceil(self.low - 1e-9), math.floor(self.high + 1e-9) + 1)
            if len(whole) < 2:
                marks = [m * 10.0**e for e in range(math.floor(self.low), math.ceil(self.high)) for m in (1, 2, 5)]
                marks = [m for m in marks if self.low - 1e-9 <= math.log10(m) <= self.high + 1e-9]
                return [(self.place(m), _power(m)) for m in marks]
            step = max(1, math.ceil(span / TICKS))
            return [((e - self.low) / span, _power(10.0**e)) for e in whole if e % step == 0]
        rough = span / TICKS
        power = 10.0 ** math.floor(math.log10(rough))
        size = power * next((f for f in (1, 2, 5) if f * power >= rough), 10)
        first = math.ceil(self.low / size - 1e-9)
        marks = [(first + i) * size for i in range(math.floor(span / size + 1e-9) + 1)]
        return [((m - self.low) / span, f"{m:.4g}") for m in marks if m <= self.high + 1e-9]


def _power(value: float) -> str:
    """A mark of a logarithmic axis."""
    if 5e-4 < value < 999:
        return f"{value:g}"
    exponent = math.floor(math.log10(value) + 1e-9)
    factor = round(value / 10.0**exponent)
    return ("" if factor == 1 else f"{factor}·") + "10" + str(exponent).translate(SUPERSCRIPTS)


def _x(axis: Axis, value: float) -> float:
    return LEFT + axis.place(value) * (WIDTH - LEFT - RIGHT)


def _y(axis: Axis, value: float) -> float:
    return HEIGHT - BOTTOM - axis.place(value) * (HEIGHT - TOP - BOTTOM)


def _curves(paths: Mapping[str, str], axes: tuple[Axis, Axis], labels: tuple[str, str], text: str) -> str:
    """Paths in a frame, their names above it."""
    parts = [_frame(axes, labels)]
    for count, (name, path) in enumerate(paths.items()):
        dash = f' stroke-dasharray="{DASHES[count % 4]}"' if DASHES[count % 4] else ""
        parts.append(f'<path class="s{count % 4}" d="{path}"{dash}/>' if path else "")
        x = LEFT + 96 * count
        parts.append(
            f'<line class="s{count % 4}" x1="{x}" x2="{x + 28}" y1="12" y2="12"{dash}/>'
            f'<text x="{x + 34}" y="16">{escaped(name)}</text>'
        )
    return svg("".join(parts), WIDTH, HEIGHT, text)


def _frame(axes: tuple[Axis, Axis], labels: tuple[str, str]) -> str:
    parts = [f'<path class="axis" d="M{LEFT} {TOP} V{HEIGHT - BOTTOM} H{WIDTH - RIGHT}"/>']
    for part, text in axes[0].ticks():
        x = LEFT + part * (WIDTH - LEFT - RIGHT)
        parts.append(f'<line class="grid" x1="{x:.1f}" x2="{x:.1f}" y1="{TOP}" y2="{HEIGHT - BOTTOM}"/>')
        parts.append(f'<text x="{x:.1f}" y="{HEIGHT - BOTTOM + 16}" text-anchor="middle">{text}</text>')
    for part, text in axes[1].ticks():
        y = HEIGHT - BOTTOM - part * (HEIGHT - TOP - BOTTOM)
        parts.append(f'<line class="grid" x1="{LEFT}" x2="{WIDTH - RIGHT}" y1="{y:.1f}" y2="{y:.1f}"/>')
        parts.append(f'<text x="{LEFT - 6}" y="{y + 4:.1f}" text-anchor="end">{text}</text>')
    across, up = LEFT + (WIDTH - LEFT - RIGHT) / 2, TOP + (HEIGHT - TOP - BOTTOM) / 2
    parts.append(f'<text x="{across}" y="{HEIGHT - 8}" text-anchor="middle">{escaped(labels[0])}</text>')
    parts.append(f'<text transform="translate(14 {up}) rotate(-90)" text-anchor="middle">{escaped(labels[1])}</text>')
    return "".join(parts)


def _image(png: bytes, x: float, y: float, width: float, height: float) -> str:
    return (
        f'<image x="{x:.1f}" y="{y:.1f}" width="{width:.1f}" height="{height:.1f}" preserveAspectRatio="none" '
        f'href="data:image/png;base64,{base64.b64encode(png).decode()}"/>'
    )


def svg(inside: str, width: float, height: float, text: str) -> str:
    """A drawing with an alternative text, as wide as there is room."""
    return f'<svg viewBox="0 0 {width:.0f} {height:.0f}" role="img" aria-label="{escaped(text)}">{inside}</svg>'
