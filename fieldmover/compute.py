"""How kernels are compiled and how work is spread over threads.

Kernels are serial, release the GIL and are cached on disk; one pool of threads drives them over slabs of fixed size.
Slabs never depend on the number of threads, so neither do the bits of a result.
"""

from __future__ import annotations

import os
import tempfile
from collections import deque
from collections.abc import Callable, Iterable
from concurrent.futures import ThreadPoolExecutor
from functools import cache
from pathlib import Path
from typing import TypeVar

import numba
from threadpoolctl import ThreadpoolController

from fieldmover._version import __version__

Item = TypeVar("Item")
Result = TypeVar("Result")


def _cache_folder() -> str | None:
    """A private folder for compiled kernels, or None where none can be written.

    Numba's own first choice is beside the source, which a read-only install does not allow. Cache files hold
    code, so the folder belongs to this user alone.
    """
    if "NUMBA_CACHE_DIR" in os.environ:
        return os.environ["NUMBA_CACHE_DIR"]
    root = os.environ.get("XDG_CACHE_HOME") or os.path.expanduser("~/.cache")
    folder = Path(root) / "fieldmover" / f"kernels-{__version__}"
    try:
        folder.mkdir(mode=0o700, parents=True, exist_ok=True)
        with tempfile.TemporaryFile(dir=folder):
            return str(folder)
    except OSError:
        return None


_folder = _cache_folder()
if _folder is not None:
    numba.config.CACHE_DIR = _folder  # type: ignore[attr-defined]


def cache_lacks(module: str) -> bool:
    """Whether there is a cache, and no kernel of the module of that name in it."""
    return _folder is not None and not any(Path(_folder).glob(f"*/{module}.*.nbi"))


def kernel(function: Callable) -> Callable:
    """Compile a serial kernel: no GIL, NumPy's rules for division, cached on disk where a folder can be written."""
    return numba.njit(nogil=True, cache=_folder is not None, error_model="numpy")(function)


def fast_kernel(function: Callable) -> Callable:
    """As `kernel`, for sums whose order may change within a kernel; only where nothing is tested for NaN."""
    options = {"contract", "reassoc"}
    return numba.njit(nogil=True, cache=_folder is not None, error_model="numpy", fastmath=options)(function)


def inlined(function: Callable) -> Callable:
    """Compile a piece into every kernel that calls it, with that kernel's rules.

    A call of a kernel that takes arrays counts references to each, in memory that all threads write to: tens of
    nanoseconds, too much for what is called at every point.
    """
    return numba.njit(inline="always")(function)


_threads = max(1, len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1)


def set_threads(count: int) -> None:
    """Use `count` threads from now on (default: the processors this process may use).

    Raises
    ------
    ValueError
        If `count` is below 1.
    """
    global _threads
    if count < 1:
        raise ValueError(f"threads: {count} is below 1")
    _threads = int(count)


def threads() -> int:
    """The number of threads in use."""
    return _threads


def for_each(work: Callable[[Item], Result], items: Iterable[Item]) -> list[Result]:
    """Call `work` on every item, spread over the threads; results in the order of the items.

    Threads take items one by one, in order. After an error no more are taken, and of several errors that of the
    first item is raised: the same one on any number of threads. Matrix products within `work` use one thread each.
    """
    waiting = deque(enumerate(items))
    helpers = min(_threads, len(waiting)) - 1
    results: dict[int, Result] = {}
    errors: dict[int, BaseException] = {}

    def take() -> None:
        while not errors:
            try:
                place, item = waiting.popleft()
            except IndexError:
                return
            try:
                results[place] = work(item)
            except BaseException as error:
                errors[place] = error

    with _libraries().limit(limits=1, user_api="blas"):
        if helpers > 0:
            with ThreadPoolExecutor(helpers) as pool:
                for _ in range(helpers):
                    pool.submit(take)
                take()
        else:
            take()
    if errors:
        raise errors[min(errors)]
    return [results[place] for place in sorted(results)]


@cache
def _libraries() -> ThreadpoolController:
    """The libraries with threads of their own, which would compete with ours for the processors."""
    return ThreadpoolController()


def slabs(length: int, size: int) -> list[slice]:
    """Cut range(length) into slices of `size` (the last may be shorter).

    Examples
    --------
    >>> slabs(5, 2)
    [slice(0, 2, None), slice(2, 4, None), slice(4, 5, None)]
    """
    size = max(1, size)
    return [slice(start, min(start + size, length)) for start in range(0, length, size)]
