"""What a job tells while it runs, and how long its stages took.

On a terminal one line is redrawn; anywhere else each stage leaves a plain line, and a long one says every 15
s that it is still at work. All of it goes to stderr, so that results on stdout can be piped.
"""

from __future__ import annotations

import resource
import sys
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import TextIO

REDRAW = 0.5  # seconds between two states of the line on a terminal
STILL = 15.0  # seconds between two plain lines
BAR = 20  # characters


@dataclass(frozen=True)
class Stage:
    """A finished stage: its name, its seconds and the most bytes of memory the process took by its end."""

    name: str
    seconds: float
    peak_memory: int


class Progress:
    """Times the stages of a job and shows where it is.

    Parameters
    ----------
    total : int
        How many stages there will be.
    quiet : bool
        Show nothing.
    stream : text stream, optional
        Default stderr.

    Examples
    --------
    >>> progress = Progress(1, quiet=True)
    >>> with progress.stage("rest"):
    ...     pass
    >>> progress.stages[0].name
    'rest'
    """

    def __init__(self, total: int, quiet: bool = False, stream: TextIO | None = None) -> None:
        self.total = total
        self.quiet = quiet
        self.stages: list[Stage] = []
        self._stream = sys.stderr if stream is None else stream
        self._redraws = self._stream.isatty()

    @contextmanager
    def stage(self, name: str) -> Iterator[None]:
        """A stage of the job: timed, and shown while it lasts."""
        start, done = time.perf_counter(), threading.Event()
        ticker = threading.Thread(target=self._tick, args=(name, start, done), daemon=True)
        if not self.quiet:
            ticker.start()
        try:
            yield
        finally:
            done.set()
            if ticker.is_alive():
                ticker.join()
        self.stages.append(Stage(name, time.perf_counter() - start, peak_memory()))
        self._show(name, self.stages[-1].seconds, finished=True)

    def _tick(self, name: str, start: float, done: threading.Event) -> None:
        while not done.wait(REDRAW if self._redraws else STILL):
            self._show(name, time.perf_counter() - start, finished=False)

    def _show(self, name: str, seconds: float, finished: bool) -> None:
        if self.quiet:
            return
        count, memory = len(self.stages) + (not finished), peak_memory() / 2**30
        if self._redraws:
            full = BAR * len(self.stages) // self.total
            bar = "#" * full + "." * (BAR - full)
            line = f"[{bar}] {count}/{self.total} {name}  {seconds:.1f} s  {memory:.2f} GiB"
            last = finished and count == self.total
            self._stream.write(f"\r{line}\x1b[K" + ("\n" if last else ""))
        else:
            still = "" if finished else "still "
            self._stream.write(f"{count}/{self.total} {still}{name}  {seconds:.1f} s  {memory:.2f} GiB\n")
        self._stream.flush()


def peak_memory() -> int:
    """The most memory this process has used so far, in bytes."""
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return int(peak) if sys.platform == "darwin" else int(peak) * 1024
