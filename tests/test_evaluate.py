"""Splines of a potential at points: against SciPy, and kernels that are compiled once for all processes."""

from __future__ import annotations

import os
import subprocess
import sys

import numpy as np
import pytest
from scipy.interpolate import make_interp_spline

import fieldmover as fm
from fieldmover.interpolation.evaluate import PotentialSpline

TWICE = """
import gc
import numpy as np
import fieldmover as fm
from fieldmover.interpolation import evaluate
grid = fm.cartesian_grid(*[np.linspace(0, 1, 7)] * 3)
spline = evaluate.PotentialSpline(fm.potential_from_function(grid, lambda x, y, z: (y, z, x)), 3)
spline.covectors(np.full((3, 1), 0.4))
spline.straight(np.full((3, 1), 0.4), np.full((3, 1), 0.6))
kernels = [kernel for kernel in gc.get_objects() if type(kernel).__name__ == "CPUDispatcher"]
own = [kernel for kernel in kernels if kernel.py_func.__module__.startswith("fieldmover")]
print(sum(sum(kernel.stats.cache_misses.values()) for kernel in own))
"""


@pytest.mark.parametrize("order", [3, 5])
@pytest.mark.parametrize("axis", range(3))
def test_across_an_axis_a_component_is_the_spline_through_its_values(order, axis):
    """Not-a-knot ends and nodes of any distance; along its own axis, and another, the component is constant."""
    nodes = [np.cumsum(np.r_[0.0, 1 + 0.5 * np.sin(np.arange(9 + d))]) for d in range(3)]
    grid = fm.cartesian_grid(*nodes)
    along = (axis + 1) % 3
    values = np.random.default_rng(axis).normal(size=nodes[axis].size)
    edges = [np.zeros(grid.edge_shape(d)) for d in range(3)]
    lengths = np.diff(nodes[along])
    shape = [-1 if d == axis else 1 for d in range(3)]
    edges[along] += values.reshape(shape) * lengths.reshape([-1 if d == along else 1 for d in range(3)])
    q = np.stack([np.random.default_rng(d).uniform(n[0], n[-1], 200) for d, n in enumerate(nodes)])
    found = PotentialSpline(fm.EdgePotential(grid, tuple(edges)), order).covectors(q)
    expected = make_interp_spline(nodes[axis], values, order)(q[axis])
    np.testing.assert_allclose(found[along], expected, atol=1e-12 * np.abs(expected).max())
    assert not found[axis].any()


def test_a_second_process_compiles_nothing(tmp_path):
    where = {**os.environ, "NUMBA_CACHE_DIR": str(tmp_path)}
    misses = [
        int(subprocess.run([sys.executable, "-c", TWICE], env=where, capture_output=True, text=True, check=True).stdout)
        for _ in range(2)
    ]
    assert misses[0] > 0
    assert misses[1] == 0
