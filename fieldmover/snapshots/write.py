"""Files that are either complete or not there.

An output is written under a temporary name in its own folder, synced, and only then given its name. HDF5
keeps working on a file after a failed write and may crash when it is closed, so it writes through a small
file object that remembers the first error, pretends success from then on, and lets the writer raise the error
at a safe place.

Every dataset is chunked and carries checksums; nothing has variable length, because HDF5 keeps such values in
a heap without checksums. The format is that of HDF5 1.10, which old readers know.
"""

from __future__ import annotations

import errno
import os
import re
import socket
from collections.abc import Mapping
from pathlib import Path
from types import TracebackType
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fieldmover.errors import OutputError
from fieldmover.snapshots.gate import hdf5

CHUNK = 64  # values along each axis at most: 2 MiB in double precision
MARGIN = 2**20  # bytes kept free beside what the arrays take

Attribute = str | int | float | NDArray[Any]


class LatchingFile:
    """What HDF5 writes to: the first error is kept, and every later call pretends success.

    Parameters
    ----------
    descriptor : int
        An open file, readable and writable.
    """

    def __init__(self, descriptor: int) -> None:
        self.error: BaseException | None = None
        self._descriptor = descriptor
        self._at = 0

    def seek(self, offset: int, whence: int = os.SEEK_SET) -> int:
        start = {os.SEEK_SET: 0, os.SEEK_CUR: self._at, os.SEEK_END: os.fstat(self._descriptor).st_size}[
            whence
        ]
        self._at = start + offset
        return self._at

    def tell(self) -> int:
        return self._at

    def read(self, size: int) -> bytes:
        """HDF5 reads by `readinto`; h5py knows a file object by this name."""
        buffer = bytearray(size)
        return bytes(buffer[: self.readinto(buffer)])

    def readinto(self, buffer: Any) -> int:
        return self._latched(lambda: os.preadv(self._descriptor, [buffer], self._at), len(buffer))

    def write(self, data: Any) -> int:
        size, written = len(data), 0
        while written < size:
            rest = memoryview(data)[written:]
            step = self._latched(lambda rest=rest: os.pwrite(self._descriptor, rest, self._at), len(rest))
            self._at += step
            written += step
        return size

    def truncate(self, size: int) -> int:
        def cut() -> int:
            os.ftruncate(self._descriptor, size)
            return size

        return self._latched(cut, size)

    def flush(self) -> None:
        """Nothing is kept back; the writer syncs when the file is complete."""

    def _latched(self, call: Any, pretended: int) -> int:
        if self.error is None:
            try:
                return int(call())
            except BaseException as error:  # a signal too must not unwind through HDF5
                self.error = error
        return pretended

    def check(self) -> None:
        """Raise the error that was kept."""
        if self.error is not None:
            raise self.error


class Output:
    """A new HDF5 file: a context manager that leaves nothing behind unless :meth:`publish` was reached.

    Parameters
    ----------
    path : path
        The name the file gets when it is complete.
    overwrite : bool
        Whether a file of that name is replaced.
    size : int
        Bytes the arrays will take; less free space is an error before anything is written.

    Raises
    ------
    OutputError
        If the folder, the space or the disk does not allow it, or the name is taken.

    Examples
    --------
    >>> import tempfile
    >>> path = Path(tempfile.mkdtemp()) / "out.h5"
    >>> with Output(path) as output:
    ...     output.write("/rho", np.ones((4, 4, 4)), {"location": "cells"})
    ...     output.publish()
    >>> with hdf5().File(path) as file:
    ...     print(file["rho"].shape, file["rho"].fletcher32, file["rho"].attrs["location"])
    (4, 4, 4) True b'cells'
    """

    def __init__(self, path: str | os.PathLike[str], overwrite: bool = False, size: int = 0) -> None:
        self.path = Path(path)
        self.overwrite = overwrite
        self.partial = partial_name(self.path, os.getpid())
        remove_stale(self.path)
        check_space(self.path, size)
        try:
            self._descriptor = os.open(self.partial, os.O_RDWR | os.O_CREAT | os.O_EXCL, 0o666)
        except OSError as error:
            raise self._error(error) from None
        self._latch = LatchingFile(self._descriptor)
        self._closed = False
        try:
            self._file = hdf5().File(self._latch, "w", libver=("v110", "v110"))
        except BaseException:
            self._remove()
            raise

    def __enter__(self) -> Output:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        try:
            if not self._closed:
                self._file.close()
        finally:
            self._remove()

    def create(
        self, name: str, shape: tuple[int, ...], dtype: Any, attributes: Mapping[str, Attribute] | None = None
    ) -> None:
        """A dataset to be filled by :meth:`write_slab`, chunked evenly and checksummed."""
        dataset = self._file.create_dataset(name, shape, dtype, chunks=chunks(shape), fletcher32=True)
        _describe(dataset, attributes or {})
        self._check()

    def describe(self, name: str, attributes: Mapping[str, Attribute]) -> None:
        """Attributes of a group, made if missing."""
        _describe(self._file.require_group(name), attributes)
        self._check()

    def write_slab(self, name: str, where: tuple[slice, ...], array: NDArray) -> None:
        """Fill a part of a dataset; whole chunks at a time are fastest."""
        self._file[name][where] = array
        self._check()

    def write(self, name: str, array: NDArray, attributes: Mapping[str, Attribute] | None = None) -> None:
        """A whole dataset."""
        self.create(name, array.shape, array.dtype, attributes)
        self.write_slab(name, (), array)

    def read(self, name: str) -> NDArray[Any]:
        """What a dataset holds now, in the type it is stored in."""
        self._file.flush()
        self._check()
        return np.asarray(self._file[name][()])

    def publish(self) -> None:
        """Close and sync the file and give it its name."""
        self._closed = True
        self._file.close()
        self._check()
        try:
            os.fsync(self._descriptor)
            publish(self.partial, self.path, self.overwrite)
        except OSError as error:
            raise self._error(error) from None

    def _remove(self) -> None:
        os.close(self._descriptor)
        self.partial.unlink(missing_ok=True)

    def _check(self) -> None:
        try:
            self._latch.check()
        except OSError as error:
            raise self._error(error) from None

    def _error(self, error: OSError) -> OutputError:
        if isinstance(error, FileExistsError) and not self.overwrite:
            return OutputError(f"{self.path}: exists; give --overwrite to replace it")
        return unwritable(self.path, error)


def _describe(thing: Any, attributes: Mapping[str, Attribute]) -> None:
    """Attributes as HDF5 keeps them outside its heap: text has a fixed length."""
    for key, value in attributes.items():
        thing.attrs[key] = np.bytes_(value.encode("ascii")) if isinstance(value, str) else value


def check_space(path: Path, size: int) -> None:
    """Find out before hours of work whether an output of `size` bytes can be written.

    Raises
    ------
    OutputError
        If the folder is missing or closed to this user, or has too little space.
    """
    folder, needed = path.parent, size + MARGIN
    try:
        there = os.statvfs(folder)
        if not os.access(folder, os.W_OK):
            raise PermissionError(errno.EACCES, os.strerror(errno.EACCES))
    except OSError as error:
        raise unwritable(path, error) from None
    free = there.f_bavail * there.f_frsize
    if needed > free:
        raise OutputError(f"{path}: {needed} bytes are needed, {needed - free} more than are free")


def publish(partial: Path, path: Path, overwrite: bool) -> None:
    """Give a complete file its name.

    On file systems without hard links an empty file holds the name for the moment before it is replaced.

    Raises
    ------
    FileExistsError
        If the name is taken and `overwrite` is false.
    OSError
        If the file system refuses.
    """
    if overwrite:
        os.replace(partial, path)
    else:
        try:
            os.link(partial, path)
        except OSError as error:
            if error.errno not in (errno.EPERM, errno.EOPNOTSUPP, errno.ENOSYS):
                raise
            os.close(os.open(path, os.O_CREAT | os.O_EXCL, 0o666))
            try:
                os.replace(partial, path)
            except OSError:
                os.unlink(path)
                raise
        else:
            os.unlink(partial)
    folder = os.open(path.parent, os.O_RDONLY)
    try:
        os.fsync(folder)
    finally:
        os.close(folder)


def write_text(path: Path, text: str) -> None:
    """Replace a small text file as a whole; errors as `write_bytes`."""
    write_bytes(path, text.encode())


def write_bytes(path: Path, content: bytes) -> None:
    """Replace a small file as a whole.

    Raises
    ------
    OutputError
        If it cannot be written.
    """
    partial = partial_name(path, os.getpid())
    try:
        with open(partial, "wb") as file:
            file.write(content)
            file.flush()
            os.fsync(file.fileno())
        publish(partial, path, overwrite=True)
    except OSError as error:
        raise unwritable(path, error) from None
    finally:
        partial.unlink(missing_ok=True)


def partial_name(path: Path, process: int) -> Path:
    """The temporary name of an output, beside it, that tells which process writes it."""
    return path.with_name(f"{path.name}.part-{socket.gethostname()}-{process}")


def remove_stale(path: Path) -> None:
    """Remove what processes of this machine that died left behind when they wrote `path`."""
    pattern = re.compile(re.escape(f"{path.name}.part-{socket.gethostname()}-") + r"(\d+)")
    try:
        names = os.listdir(path.parent)
    except OSError:
        return
    for name in names:
        match = pattern.fullmatch(name)
        if match and not _alive(int(match[1])):
            path.with_name(name).unlink(missing_ok=True)


def unwritable(path: Path, error: OSError) -> OutputError:
    """What the system says about a path, as an error of ours."""
    return OutputError(f"{path}: cannot be written: {(error.strerror or str(error)).lower()}")


def _alive(process: int) -> bool:
    try:
        os.kill(process, 0)
    except ProcessLookupError:
        return False
    except OSError:
        pass
    return True


def chunks(shape: tuple[int, ...]) -> tuple[int, ...]:
    """Chunks of equal size, so that those at the end are as full as the others.

    Examples
    --------
    >>> chunks((129, 128, 64)), chunks((3_000_000,))
    ((43, 64, 64), (262144,))
    """
    if len(shape) == 1:
        return (min(shape[0], CHUNK**3),)
    return tuple(-(-n // -(-n // CHUNK)) for n in shape)
