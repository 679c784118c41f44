"""From a TOML file to a checked job, with every mistake told at once and by its line."""

from __future__ import annotations

import difflib
import re
import tomllib
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, get_args

from pydantic import BaseModel, ValidationError

from fieldmover.errors import JobError
from fieldmover.jobs.schema import TAGS, Job, mistakes

Place = tuple[str | int, ...]


@dataclass(frozen=True)
class Loaded:
    """A job together with where it came from.

    Attributes
    ----------
    job : Job
    path : Path
        The job file; paths in it are relative to its folder.
    text : str
        The file as it was.
    changes : tuple of str
        What `--set` replaced.
    """

    job: Job
    path: Path
    text: str
    changes: tuple[str, ...] = ()

    @property
    def source(self) -> Path:
        """The snapshot to read."""
        return self.path.parent / self.job.source.file

    @property
    def target(self) -> Path:
        """The file to write."""
        return self.path.parent / self.job.target.file


def load(path: Path, changes: Sequence[str] = ()) -> Loaded:
    """Read and check a job file.

    Parameters
    ----------
    path : Path
        A TOML file.
    changes : sequence of str
        `key=value` each, the value written as in TOML: `target.precision="single"`.

    Raises
    ------
    JobError
        If the file cannot be read, is not TOML or says anything that is not understood: all mistakes, with
        lines.
    """
    try:
        text = path.read_text(encoding="utf-8-sig")
        values = tomllib.loads(text)
    except OSError as error:
        raise JobError(f"{path}: {(error.strerror or str(error)).lower()}") from None
    except UnicodeDecodeError as error:
        raise JobError(f"{path}: not UTF-8 text: {error.reason} at byte {error.start}") from None
    except tomllib.TOMLDecodeError as error:
        raise JobError(f"{path}: not TOML: {error}") from None
    changed = [_apply(values, change) for change in changes]
    told: list[tuple[Place, str]]
    try:
        job = Job.model_validate(values)
        told = list(mistakes(job))
    except ValidationError as error:
        told = [_explained(found) for found in error.errors(include_url=False)]
    if told:
        lines = [_located(place, message, text, changed) for place, message in told]
        count = "1 mistake" if len(lines) == 1 else f"{len(lines)} mistakes"
        raise JobError("\n  ".join([f"{path}: {count}", *lines]))
    return Loaded(job, path, text, tuple(changes))


def _apply(values: dict[str, Any], change: str) -> Place:
    """Replace one value and return its place."""
    key, equals, value = change.partition("=")
    parts = [part.strip() for part in key.split(".")]
    if not equals or not all(parts):
        raise JobError(f"--set {change}: expected key=value, for example target.precision='\"single\"'")
    try:
        (new,) = tomllib.loads(f"value = {value}").values()  # more than one: lines of a whole file
    except ValueError:
        raise JobError(f"--set {change}: {value!r} is not a TOML value; text needs quotes: {key}='\"...\"'") from None
    table = values
    for part in parts[:-1]:
        table = table.setdefault(part, {})
        if not isinstance(table, dict):
            raise JobError(f"--set {change}: {part!r} is no table")
    table[parts[-1]] = new
    return tuple(parts)


def _located(place: Place, message: str, text: str, changed: list[Place]) -> str:
    where = "".join(f"[{part}]" if isinstance(part, int) else f".{part}" for part in place).lstrip(".")
    line = "--set" if any(place[: len(keys)] == keys for keys in changed) else f"line {line_of(text, place)}"
    return f"{line}: {where}: {message}"


def _explained(found: Any) -> tuple[Place, str]:
    """Place and plain words of what validation found."""
    place = tuple(part for part in found["loc"] if part not in TAGS)
    return place, _explain(found, place)


def _explain(found: Any, place: Place) -> str:
    value, kind, context = found["input"], found["type"], found.get("ctx", {})
    if kind == "missing":
        table, key = _table_at(place[:-1]), str(place[-1])
        about = next((f.description for n, f in table.model_fields.items() if (f.alias or n) == key), None)
        return f"missing; give {about or 'this table'}"
    if kind == "extra_forbidden":
        known = [field.alias or name for name, field in _table_at(place[:-1]).model_fields.items()]
        return f"unknown key{_meant(str(place[-1]), known)}; known here: {', '.join(known)}"
    if kind == "literal_error":
        near = _meant(value, re.findall(r"'([^']*)'", context["expected"])) if isinstance(value, str) else ""
        return f"found {value!r}; expected {context['expected']}{near}"
    if kind in ("too_short", "too_long"):
        return f"found {len(value)} values; expected {context.get('min_length', context.get('max_length'))}"
    if kind == "value_error":
        return str(context["error"])
    return f"found {_short(value)}; {found['msg'][0].lower()}{found['msg'][1:]}"


def _short(value: Any) -> str:
    text = repr(value)
    return text if len(text) <= 60 else text[:57] + "..."


def _meant(wrong: str, known: Iterable[str]) -> str:
    near = difflib.get_close_matches(wrong, list(known), 1, 0.5)
    return f" (did you mean {near[0]!r}?)" if near else ""


def _table_at(place: Place) -> type[BaseModel]:
    """The model that describes the table at a place of the job."""
    table: type[BaseModel] = Job
    for part in place:
        for name, field in table.model_fields.items():
            if part in (name, field.alias):
                table = next(iter(_tables_in(field.annotation)), table)
    return table


def _tables_in(annotation: Any) -> list[type[BaseModel]]:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return [annotation]
    return [table for inner in get_args(annotation) for table in _tables_in(inner)]


_HEADER = re.compile(r"^\s*\[+([^\[\]]+)\]+\s*(?:#.*)?$")
_KEY = re.compile(r"""^\s*((?:"[^"]*"|'[^']*'|[\w-]+)(?:\s*\.\s*(?:"[^"]*"|'[^']*'|[\w-]+))*)\s*=""")
_PART = re.compile(r""""([^"]*)"|'([^']*)'|([\w-]+)""")


def line_of(text: str, place: Place) -> int:
    """The line of a TOML text that sets the key at `place`, or the table nearest to it (1 at worst).

    Examples
    --------
    >>> line_of('[a]\\nb = 1\\n[a.c]\\nd = { e = 2 }', ("a", "c", "d", "e"))
    4
    """
    best, depth = 1, 0
    place = tuple(part for name in place for part in str(name).split("."))
    table: tuple[str, ...] = ()
    for count, line in enumerate(text.splitlines(), start=1):
        if header := _HEADER.match(line):
            keys = table = _keys(header[1])
        elif key := _KEY.match(line):
            keys = (*table, *_keys(key[1]))
        else:
            continue
        if len(keys) > depth and keys == place[: len(keys)]:
            best, depth = count, len(keys)
    return best


def _keys(text: str) -> tuple[str, ...]:
    return tuple(part for found in _PART.findall(text) for part in "".join(found).split("."))
