"""What a file says of its making: findings that cannot be had from the arrays in it."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np

from fieldmover.errors import DataError
from fieldmover.jobs.record import Record
from fieldmover.snapshots.gate import Snapshot


def recall(path: Path, record: Record) -> None:
    """Take what health rules had found, and a point charge, from the report in a file; nothing if it has none."""
    try:
        with Snapshot(path) as snapshot:
            report = json.loads(snapshot.read("/fieldmover/report").tobytes().decode())
        rules, charge = report["health"], report.get("charge")
        record.values["health"] = [rule for rule in rules if isinstance(rule, dict)]
        if charge is not None and np.isfinite(float(charge["net_flux"])):
            record.values["charge"] = charge
    except (DataError, ValueError, KeyError, TypeError):
        return
