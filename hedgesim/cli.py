"""The commands: parse, call, print."""

import signal
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from types import FrameType

import click

from hedgesim import __version__
from hedgesim.errors import ExperimentError, RunError

FAILED, WRONG_INPUT = 1, 2

_file = click.argument("file", type=click.Path(path_type=Path))
_set = click.option(
    "--set",
    "overrides",
    multiple=True,
    metavar="path.to.key=value",
    help="Replace a value of the experiment; may be repeated. List items are numbered from 0: book.0.quantity=-100.",
)


@click.group(context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="hedgesim", message="%(prog)s %(version)s")
def main() -> None:
    """Find how often an option book should be delta-hedged.

    Exit status: 0 done, 1 the run failed, 2 the input is wrong.
    """


@main.command()
@_file
@click.option("--out", type=click.Path(path_type=Path), help="Folder for the results; default reports/NAME.")
@click.option("--overwrite", is_flag=True, help="Replace results of another experiment in that folder.")
@click.option(
    "--threads", type=click.IntRange(min=1), help="Threads; default one for each core. Results do not differ."
)
@_set
@click.option("--ledger", is_flag=True, help="Also write the P&L components of every path and schedule.")
@click.option("--quiet", is_flag=True, help="Print only the folder of the results.")
def run(
    file: Path,
    out: Path | None,
    overwrite: bool,
    threads: int | None,
    overrides: tuple[str, ...],
    ledger: bool,
    quiet: bool,
) -> None:
    """Run the experiment in FILE and write its report."""
    with _exit_status(), _terminated_as_interrupted():
        from hedgesim.experiment.run import run_file

        folder = run_file(
            file, out=out, overwrite=overwrite, threads=threads, overrides=overrides, ledger=ledger, quiet=quiet
        )
        click.echo(str(folder))


@main.command()
@_file
@_set
def check(file: Path, overrides: tuple[str, ...]) -> None:
    """Check the experiment in FILE and show what would be run."""
    with _exit_status():
        from hedgesim.experiment.loader import load_experiment

        loaded = load_experiment(file, overrides)

        from hedgesim.experiment.resolve import describe

        for line in describe(loaded):
            click.echo(line)


@main.command()
def schema() -> None:
    """Print the JSON Schema of the experiment file, for editors."""
    import json

    from hedgesim.experiment.schema import json_schema

    click.echo(json.dumps(json_schema(), indent=2))


@contextmanager
def _terminated_as_interrupted() -> Iterator[None]:
    """Treat a request to terminate as Ctrl-C, so that what is half-written is cleared away."""

    def interrupt(number: int, frame: FrameType | None) -> None:
        raise KeyboardInterrupt

    before = signal.signal(signal.SIGTERM, interrupt)
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)


@contextmanager
def _exit_status() -> Iterator[None]:
    try:
        yield
    except ExperimentError as error:
        for problem in error.problems:
            click.echo(str(problem), err=True)
        sys.exit(WRONG_INPUT)
    except RunError as error:
        click.echo(str(error), err=True)
        sys.exit(FAILED)
    except KeyboardInterrupt:
        click.echo("stopped, nothing written", err=True)
        sys.exit(FAILED)
