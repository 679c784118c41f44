"""Errors of moved fluxes as the grids are refined, beside the ceilings the tests hold them to."""

from __future__ import annotations

import argparse
import time

import numpy as np

from tests.test_accuracy import CASES


def run(arguments: list[str]) -> None:
    parser = argparse.ArgumentParser(prog="scripts/bench accuracy", description=__doc__)
    parser.add_argument("--cells", type=int, nargs="+", default=[16, 32, 64, 128], help="along each axis")
    chosen = parser.parse_args(arguments).cells
    print("Largest error of a flux over the largest flux; (order) against the grid before.")
    print(f"{'case':44s}" + "".join(f"{f'N = {n}':>19s}" for n in chosen) + "   seconds")
    for case in CASES:
        began, errors = time.perf_counter(), []
        for n in chosen:
            errors.append(case.error(n))
        cells = [f"{errors[0]:.2e}        "]
        for i in range(1, len(errors)):
            order = np.log(errors[i - 1] / errors[i]) / np.log(chosen[i] / chosen[i - 1])
            cells.append(f"{errors[i]:.2e} ({order:4.1f}) ")
        seconds = time.perf_counter() - began
        print(f"{case.name:44s}" + "".join(f"{c:>19s}" for c in cells) + f"{seconds:10.1f}")
        for n, error in zip(chosen, errors, strict=True):
            if n in case.ceilings and error > case.ceilings[n]:
                print(f"    N = {n}: above its ceiling {case.ceilings[n]:.2e}")
