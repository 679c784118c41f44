"""The scripts that are not run by the other tests: the comparison script and the dispatcher of measurements."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import numpy as np

from scripts import plain_scipy_move
from scripts.benchmarks.speed import ball, physical_components
from tests import cases, reference
from tests.fields import WAVE
from tests.test_accuracy import CASES

ROOT = Path(__file__).resolve().parent.parent


def bench(*arguments: str) -> subprocess.CompletedProcess:
    return subprocess.run(
        [sys.executable, str(ROOT / "scripts" / "bench"), *arguments], capture_output=True, text=True, check=False
    )


def test_the_comparison_script_does_the_job_it_is_compared_on():
    """It must be a fair rival: free of divergence on its faces, and second-order away from the walls."""
    errors = []
    for n in (16, 32):
        source, target = ball(n, 2 * n), cases.box_inside(n)
        steps = [float(np.diff(q)[0]) for q in target.nodes]
        areas = [np.prod(steps) / h for h in steps]
        b = plain_scipy_move.move(physical_components(source, WAVE.b), *source.nodes, *target.nodes)
        assert reference.divergence_ratio([f * area for f, area in zip(b, areas, strict=True)]) < 1e-13
        exact = [f / area for f, area in zip(reference.fluxes(target, WAVE.b, points=3), areas, strict=True)]
        inner = (slice(n // 4, -n // 4),) * 3
        errors.append(max(np.abs(f - e)[inner].max() for f, e in zip(b, exact, strict=True)))
    assert errors[1] < errors[0] / 3, errors


def test_bench_lists_what_it_knows():
    done = bench("no-such-thing")
    assert done.returncode == 1
    for name in ("accuracy", "speed", "'no-such-thing'"):
        assert name in done.stderr


def test_bench_accuracy_prints_a_row_for_every_case():
    done = bench("accuracy", "--cells", "6", "8")
    assert done.returncode == 0, done.stderr
    assert len(done.stdout.splitlines()) == 2 + len(CASES)
