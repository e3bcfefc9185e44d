"""The program: its commands, and what its exit status says."""

from __future__ import annotations

import contextlib
import io
import signal
import sys
import threading
from collections.abc import Iterator
from typing import Annotated

import typer

from unturn.cli import (
    _check,
    _compare,
    _convergence,
    _envelope,
    _patchtest,
    _pictures,
    _report,
    _strain,
    _survey,
)
from unturn.errors import UnturnError

_SIGPIPE = 13  # which not every system has

_EPILOG = (
    "Exit status: 0 done, and every limit met; 1 a limit or tolerance exceeded or undecided; 2 wrong usage; 3 the input "
    "cannot be used; 70 a fault of unturn. Results are as good as the solve, the mesh and the loads behind them; limits "
    "come from the governing code and a licensed engineer."
)

app = typer.Typer(
    name="unturn",
    help="Take the turning out of a finished finite-element result: strain, rotation and equivalent strain "
    "from nodal displacements, written back as mesh arrays.",
    epilog=_EPILOG,
    add_completion=False,
    rich_markup_mode=None,
    no_args_is_help=True,
    context_settings={"help_option_names": ["-h", "--help"]},
    pretty_exceptions_enable=False,
)
app.command("survey")(_survey.survey)
app.command("strain")(_strain.strain)
app.command("picture")(_pictures.picture)
app.command("report")(_report.report)
app.command("check")(_check.check)
app.command("compare")(_compare.compare)
app.command("envelope")(_envelope.envelope)
app.command("convergence")(_convergence.convergence)
app.command("patchtest")(_patchtest.patchtest)


def _show_version(value: bool) -> None:
    if value:
        from unturn._version import __version__

        typer.echo(f"unturn {__version__}")
        raise typer.Exit


@app.callback()
def _options(
    version: Annotated[
        bool,
        typer.Option("--version", callback=_show_version, is_eager=True, help="Print the version and exit."),
    ] = False,
    debug: Annotated[bool, typer.Option("--debug", help="Show the traceback of an error.")] = False,
) -> None:
    pass


def main() -> None:
    """Run the program and exit."""
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):  # names that the terminal cannot show are no reason to fail
            stream.reconfigure(errors="backslashreplace")
    with _stopped_in_order():
        _run("--debug" in sys.argv[1:])


@contextlib.contextmanager
def _stopped_in_order() -> Iterator[None]:
    """Let a request to end the program unwind it, so that unfinished files are removed."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = signal.signal(signal.SIGTERM, lambda number, _: sys.exit(128 + number))
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)


def _run(debug: bool) -> None:
    try:
        app()
    except SystemExit as stop:
        if isinstance(stop.__context__, BrokenPipeError):  # whoever read our text stopped: no broken limit
            sys.exit(128 + _SIGPIPE)
        raise
    except UnturnError as error:
        if debug:
            raise
        typer.echo(f"unturn: {error}", err=True)
        sys.exit(error.exit_status)
    except KeyboardInterrupt:
        typer.echo("unturn: stopped", err=True)
        sys.exit(130)
    except Exception as error:  # a fault of ours must not look like a broken limit
        if debug:
            raise
        typer.echo(
            f"unturn: a fault of unturn, please report it with the file: {type(error).__name__}: {error}. "
            "'unturn --debug ...' shows where.",
            err=True,
        )
        sys.exit(UnturnError.exit_status)
