"""The moves whose accuracy is measured, shared by test_accuracy and scripts/bench accuracy."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

import fieldmover as fm
from tests import reference
from tests.fields import WAVE, Field

Ends = tuple[float, float]


def wedge(n: int) -> fm.Grid:
    """Part of a sphere, radius in logarithmic steps."""
    quarter = np.pi / 4
    return fm.spherical_grid(
        np.geomspace(1, 3, n + 1),
        np.linspace(quarter, 3 * quarter, n + 1),
        np.linspace(-quarter, quarter, n + 1),
    )


def sphere(n: int) -> fm.Grid:
    """Full sphere with both poles and a seam, in cells as large as those of `wedge`."""
    return fm.spherical_grid(
        np.geomspace(1, 3, n + 1), np.linspace(0, np.pi, 2 * n + 1), np.linspace(0, 2 * np.pi, 4 * n + 1)
    )


def pipe(n: int) -> fm.Grid:
    """Full cylinder round its axis."""
    return fm.cylindrical_grid(
        np.linspace(0, 2, n + 1), np.linspace(0, 2 * np.pi, 2 * n + 1), np.linspace(0, 2, n + 1)
    )


def brick(n: int) -> fm.Grid:
    """Box with uneven steps along x."""
    x = np.linspace(0, 1, n + 1)
    return fm.cartesian_grid(
        3 * x + 0.2 * np.sin(np.pi * x) - 1.5, np.linspace(-1.2, 1.3, n + 1), np.linspace(-1, 1.4, n + 1)
    )


def bent(n: int) -> fm.Grid:
    """Box bent by a smooth map without symmetry."""
    q = np.linspace(0, 1, n + 1)

    def to_cartesian(a, b, c):
        x = 2 * a + 0.2 * np.sin(2 * b + c)
        y = 2 * b - 1 + 0.15 * np.sin(3 * a) * np.cos(c)
        z = 2 * c - 1 + 0.2 * np.cos(2 * a + b)
        return x, y, z

    return fm.warped_grid(q, q, q, to_cartesian)


def box(x: Ends, y: Ends, z: Ends) -> Callable[[int], fm.Grid]:
    """Boxes of n^3 even cells."""
    return lambda n: fm.cartesian_grid(*(np.linspace(*ends, n + 1) for ends in (x, y, z)))


# Inside `wedge`, `sphere` and `bent`, off every symmetry.
box_inside = box((1.3, 2.2), (-0.7, 0.6), (-0.6, 0.7))


def inner_shell(n: int) -> fm.Grid:
    """Part of a sphere about the origin that fits into `brick`."""
    return fm.spherical_grid(
        np.linspace(0.3, 0.9, n + 1), np.linspace(0, np.pi, n + 1), np.linspace(0, 2 * np.pi, 2 * n + 1)
    )


@dataclass(frozen=True)
class Case:
    """A move and what it must reach.

    Between the two finest grids errors fall with `expected_order`, or faster by up to `excess`.
    `ceilings[n]` is the largest error of a flux over the largest flux with n cells along each axis.
    """

    name: str
    source: Callable[[int], fm.Grid]
    target: Callable[[int], fm.Grid]
    order: int
    expected_order: float
    ceilings: dict[int, float]
    excess: float = 1.5
    field: Field = WAVE

    def move(self, n: int) -> tuple[fm.FaceFlux, list[np.ndarray]]:
        """The moved flux and the exact one."""
        source = fm.curl(fm.potential_from_function(self.source(n), self.field.a))
        target = self.target(n)
        exact = reference.circulation_round_faces(reference.circulations(target, self.field.a, points=4))
        return fm.move_flux(source, target, order=self.order), exact

    def error(self, n: int) -> float:
        moved, exact = self.move(n)
        return largest_error(moved, exact)


def largest_error(flux: fm.FaceFlux, exact: list[np.ndarray]) -> float:
    """Largest error of a flux over the largest flux."""
    error = max(np.abs(f - e).max() for f, e in zip(flux.faces, exact, strict=True))
    return float(error / max(np.abs(e).max() for e in exact))
