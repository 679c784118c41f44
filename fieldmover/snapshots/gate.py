"""The one way into an HDF5 file.

A snapshot comes from elsewhere and may be damaged, half written or made to harm. Every dataset and attribute
is reached through :class:`Snapshot`, which follows plain links only, takes plain numbers only, looks at sizes
before it allocates, and says whether the file changed while it was read.
"""

from __future__ import annotations

import difflib
import math
import os
import stat
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fieldmover.errors import DataError, FieldmoverError, NotEnoughMemory

SOFT_LINK_HOPS = 16
LARGEST_RATIO = 1000  # of unpacked to stored bytes; deflate itself cannot pass 1032
SMALL = 16 * 2**20  # bytes below which no ratio does harm
BUILT_IN_FILTERS = {1, 2, 3, 4, 5, 6, 32000}  # deflate, shuffle, fletcher32, szip, nbit, scale-offset, lzf

Selection = tuple[slice, ...]


def hdf5() -> Any:
    """h5py, imported late (it is slow) and with filter plugins from outside switched off."""
    os.environ.setdefault("HDF5_PLUGIN_PRELOAD", "::")
    import h5py

    return h5py


def memory_available() -> int:
    """Bytes this machine can still give (what the kernel estimates, else all it has)."""
    try:
        with open("/proc/meminfo", encoding="ascii") as lines:
            for line in lines:
                if line.startswith("MemAvailable:"):
                    return int(line.split()[1]) * 1024
    except (OSError, ValueError):
        pass
    return os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES")


@dataclass(frozen=True)
class Item:
    """A dataset of a file, or a number among its attributes: `path@attribute`.

    Attributes
    ----------
    name : str
    shape : tuple of int
    type : str
    refused : str or None
        Why it is not read.
    """

    name: str
    shape: tuple[int, ...]
    type: str
    refused: str | None


class Snapshot:
    """An HDF5 file opened for reading: a context manager whose methods all pass the gate.

    Parameters
    ----------
    path : path
        The file. Symbolic links are followed; what they lead to must be a regular file.
    memory : int, optional
        The most bytes one dataset may take (default: the memory that is free).

    Raises
    ------
    DataError
        If the file is missing, is not a regular HDF5 file, is truncated, is being written, or has changed
        by the time it is closed.

    Examples
    --------
    >>> import tempfile, pathlib
    >>> path = pathlib.Path(tempfile.mkdtemp()) / "small.h5"
    >>> with hdf5().File(path, "w") as file:
    ...     file["/state/rho"] = np.ones((4, 3))
    ...     file["/state"].attrs["time"] = 2.5
    >>> with Snapshot(path) as snapshot:
    ...     print(snapshot.shape("/state/rho"), snapshot.number("/state@time"))
    (4, 3) 2.5
    """

    def __init__(self, path: str | os.PathLike[str], memory: int | None = None) -> None:
        self.path = Path(path)
        self._memory = memory_available() if memory is None else memory
        self._before = self._stat()
        if not stat.S_ISREG(self._before.st_mode):
            raise self._error(f"found {_kind(self._before.st_mode)}; expected an HDF5 file")
        self._file = self._open()

    def __enter__(self) -> Snapshot:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._file.close()
        if kind is None:
            self._check_unchanged()

    def shape(self, name: str) -> tuple[int, ...]:
        """The shape of a dataset as stored."""
        return tuple(self._dataset(name).shape)

    def size(self, name: str) -> int:
        """The bytes that the numbers of a dataset take."""
        dataset = self._dataset(name)
        return int(math.prod(dataset.shape) * dataset.dtype.itemsize)

    def contents(self) -> list[Item]:
        """Every dataset of the file, in the order of names, and every number among the attributes.

        Links that lead elsewhere are not followed.
        """
        found: list[Item] = []

        def visit(name: str, thing: Any) -> None:
            path = f"/{name}"
            if isinstance(thing, hdf5().Dataset):
                shape = tuple(thing.shape or ())
                found.append(Item(path, shape, str(thing.dtype), self._refusal(thing)))
            found.extend(
                Item(f"{path}@{key}", (), str(kind.dtype), None)
                for key in thing.attrs
                if (kind := thing.attrs.get_id(key)).dtype.kind in "fiu" and math.prod(kind.shape) == 1
            )

        with self._reading("/"):
            self._file.visititems(visit)
        return sorted(found, key=lambda item: item.name)

    def read(self, name: str, where: Selection = ()) -> NDArray[Any]:
        """The numbers of a dataset (or of a part of it) as stored, in the byte order of this machine."""
        dataset = self._dataset(name)
        with self._reading(name):
            array = np.asarray(dataset[where])
        return array.astype(array.dtype.newbyteorder("="), copy=False)

    def number(self, name: str) -> float:
        """One finite number: a dataset of one element, or an attribute written `path@attribute`."""
        path, _, attribute = name.partition("@")
        value = self._attribute(path, attribute) if attribute else self._single(path)
        if not math.isfinite(value):
            raise self._error(f"{name!r} is {value}; expected a finite number")
        return value

    def _single(self, path: str) -> float:
        if math.prod(self.shape(path)) != 1:
            raise self._error(f"dataset {path!r} has shape {self.shape(path)}; expected one number")
        return float(self.read(path).reshape(()))

    def _attribute(self, path: str, attribute: str) -> float:
        with self._reading(f"{path}@{attribute}"):
            attributes = self._object(path).attrs
            if attribute not in attributes:
                raise self._error(f"{path!r} has no attribute {attribute!r}{_near(attribute, attributes)}")
            found = attributes.get_id(attribute)
            if found.dtype.kind not in "fiub" or math.prod(found.shape) != 1:
                raise self._error(
                    f"attribute {attribute!r} of {path!r} is {found.dtype} {found.shape}; expected one number"
                )
            return float(np.asarray(attributes[attribute]).reshape(()))

    def _dataset(self, name: str) -> Any:
        """The dataset called `name`, if everything about it is harmless; the file's only way to numbers."""
        with self._reading(name):
            dataset = self._object(name)
            if not isinstance(dataset, hdf5().Dataset):
                raise self._error(f"{name!r} is a group{_members(dataset)}; expected a dataset")
            refused = self._refusal(dataset)
        if refused:
            raise self._error(f"dataset {name!r} refused: {refused}")
        return dataset

    def _object(self, name: str) -> Any:
        """Walk the links of a path one by one, so that none leads out of the file or in circles."""
        h5py = hdf5()
        here, hops = self._file, 0
        parts = _parts(name)
        while parts:
            part = parts.pop(0)
            link = here.get(part, getlink=True) if isinstance(here, h5py.Group) else None
            if link is None:
                raise self._error(f"no dataset {name!r}: {here.name!r} has no {part!r}{_near(part, here)}")
            if isinstance(link, h5py.SoftLink):
                hops += 1
                if hops > SOFT_LINK_HOPS:
                    raise self._error(f"{name!r} refused: more than {SOFT_LINK_HOPS} soft links in a row")
                parts = _parts(link.path) + parts
                here = self._file if link.path.startswith("/") else here
            elif isinstance(link, h5py.HardLink):
                here = here[part]
            else:
                raise self._error(f"{name!r} refused: {part!r} links to another file")
        return here

    def _refusal(self, dataset: Any) -> str | None:
        """Why a dataset is not read, or None."""
        if dataset.external:
            return "its numbers lie in another file (external storage)"
        if dataset.is_virtual:
            return "its numbers lie in other datasets (virtual dataset)"
        if dataset.dtype.kind not in "fiub":
            return f"its type is {dataset.dtype}; expected real numbers"
        if dataset.shape is None or 0 in dataset.shape:
            return "it is empty"
        layout = dataset.id.get_create_plist()
        filters = {layout.get_filter(i)[0] for i in range(layout.get_nfilters())}
        if foreign := filters - BUILT_IN_FILTERS:
            return f"it is packed by a filter that HDF5 itself does not have (number {min(foreign)})"
        size = math.prod(dataset.shape) * dataset.dtype.itemsize
        chunk = math.prod(dataset.chunks or (0,)) * dataset.dtype.itemsize
        stored = dataset.id.get_storage_size()
        if stored == 0:
            return "it was declared but never written"
        if size > LARGEST_RATIO * stored and size > SMALL:
            return f"{stored} stored bytes would become {size}"
        if max(size, chunk) > self._memory:
            raise NotEnoughMemory(
                f"{self.path}: dataset {dataset.name!r} of shape {dataset.shape} needs {max(size, chunk)} "
                f"bytes; {self._memory} are free"
            )
        return None

    def _stat(self) -> os.stat_result:
        try:
            return os.stat(self.path)
        except OSError as error:
            raise self._error(_reason(error)) from None

    def _open(self) -> Any:
        h5py = hdf5()
        try:
            if not os.access(self.path, os.R_OK):
                raise PermissionError(13, "Permission denied")
            if not h5py.is_hdf5(self.path):
                raise self._error(f"not an HDF5 file ({self._before.st_size} bytes)")
            return h5py.File(self.path, "r", locking="best-effort")
        except BlockingIOError:
            raise self._error("another program is writing it") from None
        except OSError as error:
            raise self._error(_reason(error)) from None

    def _check_unchanged(self) -> None:
        now = self._stat()
        for key in ("st_dev", "st_ino", "st_size", "st_mtime_ns"):
            if getattr(now, key) != getattr(self._before, key):
                raise self._error("changed while it was read; try again when nothing writes to it")

    @contextmanager
    def _reading(self, name: str) -> Iterator[None]:
        """What a damaged file makes HDF5 raise (nearly any exception) becomes one DataError."""
        try:
            yield
        except FieldmoverError:
            raise
        except MemoryError as error:
            raise NotEnoughMemory(f"{self.path}: {name!r}: {error}") from None
        except Exception as error:
            raise self._error(f"{name!r} cannot be read, the file may be damaged: {error}") from error

    def _error(self, message: str) -> DataError:
        return DataError(f"{self.path}: {message}")


def _parts(path: str) -> list[str]:
    return [part for part in path.split("/") if part not in ("", ".")]


def _near(wanted: str, names: Any) -> str:
    """The name that was probably meant, or those there are."""
    names = [str(name) for name in names] if hasattr(names, "keys") else []
    near = difflib.get_close_matches(wanted, names, 1)
    if near:
        return f" (did you mean {near[0]!r}?)"
    return f"; it has {', '.join(names[:12])}{' ...' if len(names) > 12 else ''}" if names else ""


def _members(group: Any) -> str:
    names = list(group) if hasattr(group, "keys") else []
    return f" of {', '.join(names[:12])}" if names else ""


def _kind(mode: int) -> str:
    kinds = {stat.S_IFDIR: "a folder", stat.S_IFIFO: "a pipe", stat.S_IFSOCK: "a socket"}
    return kinds.get(stat.S_IFMT(mode), "a device")


def _reason(error: OSError) -> str:
    """The cause in plain words."""
    text = str(error)
    if "truncated file" in text:
        return f"truncated: {text[text.index('truncated file') :].rstrip(')')}"
    return os.strerror(error.errno).lower() if error.errno else text
