"""The command line: what it accepts, and nothing of what it does."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

import click

from fieldmover._version import __version__
from fieldmover.jobs.supervise import run_in_child
from fieldmover.jobs.worker import Options

JOB = click.argument("job", type=click.Path(dir_okay=False))
COMMON = (
    click.option(
        "--report",
        type=click.Path(file_okay=False),
        help="Folder of the report [default: beside the output].",
    ),
    click.option("--threads", type=click.IntRange(min=1), help="Threads to use [default: all processors]."),
    click.option(
        "--set", "changes", multiple=True, metavar="KEY=VALUE", help="Replace one value of the job (TOML)."
    ),
    click.option("--quiet", is_flag=True, help="Show no progress."),
)
DRY = click.option("--dry-run", is_flag=True, help="Only tell what would be read, written and replaced.")
OVERWRITE = click.option("--overwrite", is_flag=True, help="Replace the output if it exists.")


def _common(command: Callable[..., Any]) -> Callable[..., Any]:
    for option in reversed(COMMON):
        command = option(command)
    return command


@click.group(context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="fieldmover")
def cli() -> None:
    """Hand magnetised-gas snapshots from one grid to another, free of divergence.

    Exit status: 0 done and within limits, 1 an error inside the program, 2 the command line or the job is
    wrong, 3 a limit is exceeded, 4 an input is unusable, 5 the output cannot be written, 6 a solver did not
    converge, 7 not enough memory, 130 or 143 stopped by a signal.

    Completion in the shell: eval "$(_FIELDMOVER_COMPLETE=bash_source fieldmover)", or zsh_source, fish_source.
    """


@cli.command()
@JOB
@_common
@OVERWRITE
@DRY
def move(job: str, **options: Any) -> int:
    """Hand a snapshot over: read, clean, move, fill, write, report."""
    return _start(Options("move", job, **options))


@cli.command()
@JOB
@_common
@OVERWRITE
@DRY
def clean(job: str, **options: Any) -> int:
    """Remove monopoles from a snapshot and keep its grid."""
    return _start(Options("clean", job, **options))


@cli.command()
@JOB
@_common
@DRY
@click.option(
    "--make-limits",
    type=click.FloatRange(min=0),
    metavar="MARGIN",
    help="Write limits.toml beside the report: limits these files keep, with that margin (0.1 is 10 %).",
)
@click.option(
    "--against",
    type=click.Path(dir_okay=False),
    metavar="FILE",
    help="Compare the target with a file laid out like it.",
)
def check(job: str, **options: Any) -> int:
    """Measure the files of a job against its limits."""
    return _start(Options("check", job, **options))


@cli.command()
@click.argument("file", type=click.Path(dir_okay=False))
@click.option("--job", type=click.Path(dir_okay=False), help="Write a job to start from.")
@click.option("--overwrite", is_flag=True, help="Replace that job if it exists.")
def survey(file: str, **options: Any) -> int:
    """Tell what lies in an HDF5 file, and what it looks like."""
    return _start(Options("survey", file, **options))


@cli.command()
@click.argument("folder", type=click.Path(file_okay=False), default="demo-output")
@_common
@click.option("--overwrite", is_flag=True, help="Replace files of the same names that are not of a demo.")
def demo(folder: str, **options: Any) -> int:
    """Write an example into FOLDER [default: demo-output] and run it."""
    return _start(Options("demo", folder, **options))


def _start(options: Options) -> int:
    threads = {} if options.threads is None else {"OPENBLAS_NUM_THREADS": str(options.threads)}
    return run_in_child("fieldmover.jobs.worker", [options.to_text()], threads)


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line.

    Parameters
    ----------
    arguments : sequence of str, optional
        Default: those of this process.

    Returns
    -------
    int
        The exit status.
    """
    try:
        status = cli.main(
            list(arguments) if arguments is not None else None, "fieldmover", standalone_mode=False
        )
    except click.ClickException as error:
        error.show()
        return 2
    except click.exceptions.Exit as stop:
        return stop.exit_code
    except click.Abort:
        return 130
    return int(status or 0)
