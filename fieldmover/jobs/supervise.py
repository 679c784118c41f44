"""A job runs in a child process, because a damaged HDF5 file or a full memory can kill a process outright.

The parent does nothing but wait: it passes signals on, turns a violent death into a message and an exit
status, and removes the temporary file that the dead child could not remove itself.
"""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import threading
from collections.abc import Mapping
from pathlib import Path
from types import FrameType
from typing import Any

NOTES = "FIELDMOVER_NOTES"
"""Names the file descriptor on which a child tells which temporary file it writes."""

PATIENCE = 5.0  # seconds a child gets to clean up after itself


def run_in_child(module: str, arguments: list[str], environment: Mapping[str, str] | None = None) -> int:
    """Run `python -m module arguments` and return the exit status for the caller.

    A child that was killed gives 7 (out of memory, most likely), one that crashed 1, one that was stopped by
    a signal to this process 128 plus the number of the signal.
    """
    reader, writer = os.pipe()
    command = [sys.executable, "-m", module, *arguments]
    variables = {**os.environ, **(environment or {}), NOTES: str(writer)}
    with os.fdopen(reader, "r", encoding="utf-8") as notes:
        with _Signals() as signals:
            child = subprocess.Popen(command, env=variables, pass_fds=[writer])
            os.close(writer)
            signals.forward_to(child)
            status = child.wait()
        partial = [Path(line) for line in notes.read().splitlines()]
    if signals.received:
        _remove(partial)
        return 128 + signals.received[0]
    if status < 0:
        _remove(partial)
        return _explain(-status)
    return status


def note(partial: Path) -> None:
    """Tell the parent, if there is one, which temporary file is being written."""
    if NOTES in os.environ:
        os.write(int(os.environ[NOTES]), f"{partial.absolute()}\n".encode())


class _Signals:
    """Signals to this process go to the child: the first asks it to end, a second or no answer kills it.

    Ctrl-C in a terminal reaches the child as well; it inherits that it is to ignore it. Handlers can be set
    in the main thread only, so elsewhere signals are left alone.
    """

    def __init__(self) -> None:
        self.received: list[int] = []
        self._child: subprocess.Popen[bytes] | None = None
        self._before: dict[int, Any] = {}

    def __enter__(self) -> _Signals:
        if threading.current_thread() is threading.main_thread():
            self._before[signal.SIGINT] = signal.signal(signal.SIGINT, signal.SIG_IGN)
            for number in (signal.SIGTERM, signal.SIGHUP):
                self._before[number] = signal.signal(number, self._receive)
        return self

    def forward_to(self, child: subprocess.Popen[bytes]) -> None:
        """Name the child, and pass on what has come already."""
        self._child = child
        if self._before:
            signal.signal(signal.SIGINT, self._receive)
        if self.received:
            child.terminate()

    def _receive(self, number: int, frame: FrameType | None) -> None:
        self.received.append(number)
        if self._child is None:
            return
        if len(self.received) > 1:
            self._child.kill()
            return
        self._child.terminate()
        impatience = threading.Timer(PATIENCE, self._child.kill)
        impatience.daemon = True
        impatience.start()

    def __exit__(self, *_: object) -> None:
        for number, handler in self._before.items():
            signal.signal(number, handler)


def _explain(number: int) -> int:
    name = signal.Signals(number).name
    if number == signal.SIGKILL:
        sys.stderr.write("fieldmover: killed by the system; most likely there was not enough memory\n")
        return 7
    sys.stderr.write(f"fieldmover: died by {name}; a damaged input file can do that\n")
    return 1


def _remove(partial: list[Path]) -> None:
    for path in partial:
        path.unlink(missing_ok=True)
