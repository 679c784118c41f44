"""Packages import only what stands above them in the table of DEVELOPERS.md."""

from __future__ import annotations

import ast
import re
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
TABLE = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
ROWS = re.findall(r"^\| (`\w+(?:/|\.py)`.*?) \|", TABLE, re.MULTILINE)
LAYERS = [name for row in ROWS for name in re.findall(r"`(\w+)", row)]
FREE = {"__init__", "__main__", "_version"}


def imported(path: Path) -> set[str]:
    """First parts below `fieldmover` of all modules that a file imports, wherever in the file."""
    names = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.ImportFrom) and node.module:
            whole = [f"{node.module}.{alias.name}" for alias in node.names]
        elif isinstance(node, ast.Import):
            whole = [alias.name for alias in node.names]
        else:
            continue
        names |= {name.split(".")[1] for name in whole if name.startswith("fieldmover.")}
    return names


def test_the_table_lists_every_package():
    found = {p.stem for p in (ROOT / "fieldmover").iterdir() if p.suffix == ".py" or (p / "__init__.py").exists()}
    assert found - FREE == set(LAYERS)


@pytest.mark.parametrize("layer", LAYERS)
def test_imports_lead_upwards(layer):
    place = ROOT / "fieldmover" / layer
    files = sorted(place.rglob("*.py")) if place.is_dir() else [place.with_suffix(".py")]
    assert files
    allowed = set(LAYERS[: LAYERS.index(layer) + 1]) | FREE
    for file in files:
        below = {name for name in imported(file) if name in LAYERS} - allowed
        assert not below, f"{file.relative_to(ROOT)} imports {', '.join(sorted(below))}"
