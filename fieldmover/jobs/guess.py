"""What an unknown file looks like: grid, staggering, ghosts and axis order, from shapes and names of the trade.

Every guess says how sure it is ("sure", "likely", "guess") and why. What cannot be seen in a file at all, such as the
unit of its numbers, is not guessed.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from itertools import product

import numpy as np
from numpy.typing import NDArray

from fieldmover.snapshots.gate import Item
from fieldmover.snapshots.layout import ORDERS, Place, staggering

Array = NDArray[np.float64]
Triple = tuple[str, str, str]

LETTERS: dict[str, tuple[tuple[str, ...], ...]] = {
    "spherical": (("r", "rad", "radius"), ("theta", "th", "t"), ("phi", "ph", "p")),
    "cylindrical": (("r", "rad", "radius", "s"), ("phi", "ph", "p"), ("z",)),
    "cartesian": (("x",), ("y",), ("z",)),
}
"""What people call the axes of each kind of grid."""

NUMBERS = (("1", "x1", "q1"), ("2", "x2", "q2"), ("3", "x3", "q3"))
ENDING = r"_?(?:f|face|faces|node|nodes|edge|edges|if|c|cc|centre|centres|center|centers|v)?"
BASES = {
    "magnetic field": r"b|bf|bc|bcc|mag|magnetic|magnetic_field|bfield|b_field",
    "vector potential": r"a|vecpot|vector_potential",
    "velocity": r"v|vel|velocity|u",
}
SCALARS = {"density": r"rho|dens|density|d"}
GHOSTS = r"n?_?(?:ghosts?|ghost_cells|ghost_zones|nghost|ng|nguard|guard|halo)"
USUAL = ("q1 q2 q3", "q3 q2 q1")
"""Orders of axes that most codes have; the first is taken where shapes allow several."""
MOST_GHOSTS = 8
VIEW = "/VTKHDF/"
"""What viewers see, a copy of what lies elsewhere."""
CLOSE = 1e-5  # a full turn in single precision, ghosts added


@dataclass
class Guess:
    """What was found. Names are datasets; empty where nothing fits.

    Attributes
    ----------
    kind : str or None
    axes : list of str
        Datasets of positions along q1, q2, q3.
    centres : bool
        Whether these are cell centres.
    order : str
        Axes as stored.
    ghosts : list of int
    at : "faces", "cells" or "edges"
    magnetic : tuple of three str, or empty
    potential : bool
        Whether `magnetic` is a vector potential.
    density : str or None
    velocity : tuple of three str, or empty
    time : str or None
    reasons : list of (what, how sure, why)
    """

    kind: str | None = None
    axes: list[str] = field(default_factory=list)
    centres: bool = False
    order: str = "q1 q2 q3"
    ghosts: list[int] = field(default_factory=lambda: [0, 0, 0])
    at: Place = "cells"
    magnetic: Triple | tuple[()] = ()
    potential: bool = False
    density: str | None = None
    velocity: Triple | tuple[()] = ()
    time: str | None = None
    reasons: list[tuple[str, str, str]] = field(default_factory=list)

    def say(self, what: str, sure: str, why: str) -> None:
        """Note a reason."""
        self.reasons.append((what, sure, why))


def guess(items: Sequence[Item], read: Callable[[str], Array]) -> Guess:
    """Guess what a file holds.

    Parameters
    ----------
    items : sequence of Item
        What lies in it.
    read : callable
        Name of a one-dimensional dataset to its numbers.
    """
    found = Guess()
    usable = [
        item for item in items if item.refused is None and "@" not in item.name and not item.name.startswith(VIEW)
    ]
    lines = {item.name: item.shape[0] for item in usable if len(item.shape) == 1 and item.shape[0] > 1}
    boxes = {item.name: item.shape for item in usable if len(item.shape) == 3}
    _axes(found, [name for name in lines if _increases(read(name))])
    _fields(found, boxes)
    if found.magnetic and found.axes:
        _layout(found, [boxes[name] for name in found.magnetic], [lines[name] for name in found.axes])
        _ghosts(found, [read(name) for name in found.axes], items, read)
    _others(found, boxes)
    times = [item.name for item in items if re.fullmatch(r"(?i)time|t", _last(item.name)) and np.prod(item.shape) == 1]
    if times:
        found.time = times[0]
        found.say("time", "likely", f"{times[0]} is one number of that name")
    return found


def _last(name: str) -> str:
    return re.split(r"[/@]", name)[-1]


def _increases(values: Array) -> bool:
    return bool(np.all(np.diff(values) > 0))


def _axes(found: Guess, names: list[str]) -> None:
    for kind, words in {**LETTERS, "": NUMBERS}.items():
        matches = [[n for n in names if _is_axis(_last(n), options)] for options in words]
        if all(matches):
            found.kind, found.axes = kind or None, [_best(options) for options in matches]
            shown = ", ".join(found.axes)
            if kind:
                found.say("grid", "likely", f"{kind}: {shown} increase and are called so")
            else:
                found.say("grid", "guess", f"{shown} look like positions; the kind of the grid cannot be seen")
            return
    found.say("grid", "guess", "no three increasing one-dimensional datasets with names of axes")


def _is_axis(name: str, options: tuple[str, ...]) -> bool:
    return re.fullmatch(rf"(?:{'|'.join(options)}){ENDING}", name, re.IGNORECASE) is not None


def _best(names: list[str]) -> str:
    """Nodes rather than centres, else the first."""
    return next((name for name in names if re.search(r"(?:f|faces?|nodes?|edges?|if)$", name, re.I)), names[0])


def _fields(found: Guess, boxes: Mapping[str, tuple[int, ...]]) -> None:
    sets = [*([LETTERS[found.kind]] if found.kind else LETTERS.values()), NUMBERS]
    triples = {what: _triple(boxes, bases, sets) for what, bases in BASES.items()}
    found.magnetic = triples["magnetic field"] or triples["vector potential"]
    found.potential = not triples["magnetic field"] and bool(found.magnetic)
    found.velocity = triples["velocity"]
    if found.magnetic:
        what = "vector potential" if found.potential else "magnetic field"
        found.say(what, "likely", f"{', '.join(found.magnetic)} are called so")
    else:
        found.say("magnetic field", "guess", "no three three-dimensional datasets with names of its components")
    for name in boxes:
        if re.fullmatch(rf"(?i){SCALARS['density']}", _last(name)):
            found.density = name
            found.say("density", "likely", f"{name} is called so")
            break
    if found.velocity:
        found.say("velocity", "likely", f"{', '.join(found.velocity)} are called so")


def _others(found: Guess, boxes: Mapping[str, tuple[int, ...]]) -> None:
    """What lies on the same grid and was not recognised."""
    used = {*found.magnetic, *found.velocity, found.density}
    shapes = {boxes[name] for name in (*found.magnetic, *found.velocity, found.density) if name}
    left = [name for name, shape in boxes.items() if name not in used and shape in shapes]
    if left:
        found.say(
            "left out", "sure", f"{', '.join(left)}: as large as the rest; name them in source.fluid if they are to go"
        )


def _triple(boxes: Mapping[str, tuple[int, ...]], bases: str, sets: list) -> Triple | tuple[()]:
    """Three datasets `base + component`, their groups and bases equal."""
    for words in sets:
        for first in boxes:
            for a, b, c in product(*words):
                match = re.fullmatch(rf"(.*?(?:^|/))((?:{bases})_?){a}({ENDING})", first, re.IGNORECASE)
                if match is None:
                    continue
                others = [f"{match[1]}{match[2]}{word}{match[3]}" for word in (b, c)]
                low = {name.lower(): name for name in boxes}
                if all(name.lower() in low for name in others):
                    return first, low[others[0].lower()], low[others[1].lower()]
        named = [
            [
                name
                for name in boxes
                if re.fullmatch(rf"(?:{bases})/(?:{'|'.join(w)})", "/".join(name.split("/")[-2:]), re.I)
            ]
            for w in words
        ]
        if all(named):  # one group for each vector, one dataset for each component
            return named[0][0], named[1][0], named[2][0]
    return ()


def _layout(found: Guess, shapes: list[tuple[int, ...]], lengths: list[int]) -> None:
    """Axis order, staggering and ghosts that the shapes allow."""
    fits = []
    places: tuple[Place, ...] = ("edges",) if found.potential else ("faces", "cells")
    for (order, axes), at, centres in product(ORDERS.items(), places, (False, True)):
        extra = 0 if centres else 1
        ghosts = set()
        for component, shape in enumerate(shapes):
            more = staggering(at, component)
            cells = [shape[axes.index(axis)] - more[axis] for axis in range(3)]
            ghosts.add(tuple(n - (length - extra) for n, length in zip(cells, lengths, strict=True)))
        (difference, *rest) = ghosts
        if not rest and all(d % 2 == 0 and 0 <= d <= 2 * MOST_GHOSTS for d in difference):
            unlike = max(difference) - min(difference)
            fits.append(((sum(difference), unlike), order, at, centres, [d // 2 for d in difference]))
    if not fits:
        found.say("layout", "guess", f"shapes {shapes} do not fit positions of {lengths} values")
        return
    best = [fit for fit in fits if fit[0] == min(fits)[0]]  # the fewest ghosts, as many on each axis
    best.sort(key=lambda fit: fit[1] not in USUAL)
    _, found.order, found.at, found.centres, found.ghosts = best[0]
    orders = list(dict.fromkeys(fit[1] for fit in best))
    shown = ", ".join(dict.fromkeys(map(str, shapes)))
    why = f"shape {shown} against {lengths} positions"
    others = [fit[1] for fit in fits if fit[1] != found.order]
    sure = "guess" if len(orders) > 1 else "likely" if others else "sure"
    found.say("axes as stored", sure, f"{found.order}: {why}" + (f"; {others[0]} would fit too" if others else ""))
    found.say("where values sit", "sure" if len(best) == len(orders) else "likely", f"{found.at}: {why}")
    found.say("positions", "sure", "cell centres" if found.centres else "nodes: one more than cells")


def _ghosts(found: Guess, positions: list[Array], items: Sequence[Item], read: Callable[[str], Array]) -> None:
    """Ghosts that the positions include: seen in angles, told by an attribute, else as on the other axes."""
    if any(found.ghosts):
        found.say("ghosts", "likely", f"{found.ghosts}: the arrays have more cells than the positions")
        return
    seen = [_outside(found.kind, axis, q, found.centres) for axis, q in enumerate(positions)]
    told = [item.name for item in items if re.fullmatch(GHOSTS, _last(item.name), re.I) and np.prod(item.shape) == 1]
    if told:
        count = int(read(told[0]).reshape(-1)[0])
        found.ghosts = [count] * 3
        found.say("ghosts", "likely", f"{count} at each end: {told[0]}")
        return
    known = [count for count in seen if count is not None]
    most = max(known, default=0)
    found.ghosts = [most if count is None else count for count in seen]
    if most:
        found.say(
            "ghosts",
            "likely",
            f"{found.ghosts}: angles reach beyond their range; other axes taken to be alike",
        )
    else:
        found.say("ghosts", "likely" if known else "guess", "none: no position lies outside its range")


def _outside(kind: str | None, axis: int, q: Array, centres: bool) -> int | None:
    """Layers of positions beyond the range of an angle or a radius; None where there is no range."""
    if (kind, axis) in (("spherical", 1), ("cylindrical", 0)):
        return int(np.count_nonzero(q < -CLOSE)) if q[0] < CLOSE else None
    if (kind, axis) in (("spherical", 2), ("cylindrical", 1)):
        for count in range(min(MOST_GHOSTS, (q.size - 2) // 2) + 1):
            inner = q[count : q.size - count]
            span = inner[-1] - inner[0] + (0.5 * (inner[1] - inner[0] + inner[-1] - inner[-2]) if centres else 0.0)
            if abs(span - 2 * np.pi) < CLOSE * 10:
                return count
    return None
