"""The child process: one command, run to its exit status."""

from __future__ import annotations

import json
import os
import signal
import sys
import traceback
from dataclasses import asdict, dataclass
from pathlib import Path
from types import FrameType

from fieldmover.errors import FieldmoverError, JobError, OutputError


@dataclass(frozen=True)
class Options:
    """What the command line says.

    Attributes
    ----------
    command : "move", "clean", "check", "demo" or "survey"
    path : str
        The job file, the folder of the demo or the file to survey.
    report : str or None
        The folder of the report (default: beside the output).
    threads : int or None
    changes : tuple of str
        `key=value`, in place of what the job says.
    overwrite, quiet : bool
    dry_run : bool
        Only tell what would be done.
    make_limits : float or None
        Margin of limits to be made from a check.
    against : str or None
        A file to compare the target of a check with.
    job : str or None
        Where a survey writes a job.
    """

    command: str
    path: str
    report: str | None = None
    threads: int | None = None
    changes: tuple[str, ...] = ()
    overwrite: bool = False
    quiet: bool = False
    dry_run: bool = False
    make_limits: float | None = None
    against: str | None = None
    job: str | None = None

    def to_text(self) -> str:
        """For the command line of the child."""
        return json.dumps(asdict(self))


class Stopped(BaseException):
    """A signal asked the process to end."""


def work(options: Options) -> int:
    """Run one command and return its exit status; what goes wrong is one message on stderr."""
    try:
        return _run(options)
    except FieldmoverError as error:
        sys.stderr.write(f"fieldmover: {error}\n")
        return error.exit_status
    except MemoryError as error:
        sys.stderr.write(f"fieldmover: not enough memory: {error}\n")
        return 7
    except SystemExit as stop:
        sys.stderr.write(f"fieldmover: a map's Python file asked to end: sys.exit({stop.code!r}); expected a map\n")
        return JobError.exit_status
    except Exception:
        traceback.print_exc()
        sys.stderr.write("fieldmover: an error inside the program (above), not in the job\n")
        return 1


def _run(options: Options) -> int:
    path = Path(options.path)
    if options.command == "survey":
        from fieldmover.jobs.survey import survey

        _print(survey(path, None if options.job is None else Path(options.job), options.overwrite))
        return 0
    from fieldmover.jobs.load import load

    report = None if options.report is None else Path(options.report)
    command, overwrite = options.command, options.overwrite
    if command == "demo":
        from fieldmover.jobs.demo import write_demo

        path, command, overwrite = write_demo(path, overwrite), "move", True
    loaded = load(path, options.changes)
    if options.dry_run:
        from fieldmover.jobs.foresee import foresee

        _print(foresee(loaded, command, report, overwrite))
        return 0
    from fieldmover.jobs import run  # slow to import, so a mistake in the job is told before

    if options.threads is not None:
        from fieldmover.compute import set_threads

        set_threads(options.threads)
    if command == "check":
        against = None if options.against is None else Path(options.against)
        outcome = run.check(loaded, report, options.quiet, options.make_limits, against)
    else:
        work = run.clean if command == "clean" else run.move
        outcome = work(loaded, report, overwrite, options.quiet)
    _print(outcome.text)
    return outcome.exit_status


def _print(text: str) -> None:
    try:
        print(text, flush=True)
    except OSError as error:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        if not isinstance(error, BrokenPipeError):  # whose reader has seen enough
            raise OutputError(f"stdout: cannot be written: {(error.strerror or str(error)).lower()}") from None


def _stop(number: int, frame: FrameType | None) -> None:
    raise Stopped


if __name__ == "__main__":
    signal.signal(signal.SIGTERM, _stop)
    values = json.loads(sys.argv[1])
    try:
        sys.exit(work(Options(**{**values, "changes": tuple(values["changes"])})))
    except Stopped:
        sys.exit(143)
