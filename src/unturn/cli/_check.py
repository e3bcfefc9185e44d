"""`unturn check`: results held against a limits file that an engineer reviews."""

from __future__ import annotations

import datetime
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from unturn.cli import _options as o
from unturn.errors import UnturnError, UsageError

if TYPE_CHECKING:
    from unturn.verdicts.check import Checked
    from unturn.verdicts.limit import Limits


def check(
    files: Annotated[
        list[Path],
        typer.Argument(
            metavar="FILE... LIMITS",
            help="Result files, and last the limits: a TOML file. With --explain the limits alone will do.",
            readable=False,
        ),
    ],
    explain: Annotated[
        bool, typer.Option("--explain", help="Say in words what would be tested; no result is read.")
    ] = False,
    allow_undecided: Annotated[
        bool,
        typer.Option(
            "--allow-undecided",
            help="Let the exit status pass what is undecided; it is printed all the same.",
        ),
    ] = False,
    today: Annotated[
        str | None,
        typer.Option(
            metavar="DATE", help="Date by which waivers expire, as 2027-03-31. Default: the system's."
        ),
    ] = None,
    junit: Annotated[
        Path | None,
        typer.Option("--junit", metavar="FILE.xml", help="Also write JUnit XML, one case a limit."),
    ] = None,
    json: o.Json = None,
    markdown: Annotated[
        Path | None,
        typer.Option("--markdown", metavar="FILE.md", help="Also write a table for a merge request."),
    ] = None,
    csv: Annotated[Path | None, typer.Option("--csv", metavar="FILE.csv", help="Also write CSV.")] = None,
    threads: o.Threads = None,
) -> None:
    """Hold results against limits: met, exceeded or undecided, each with its value, margin and place."""
    from unturn.verdicts.explain import explain_limits
    from unturn.verdicts.finding import Report, hashed_file
    from unturn.verdicts.read_limits import read_limits

    day = _date(today)
    limits = read_limits(files[-1])
    if explain:
        if len(files) > 1:
            raise UsageError("--explain reads no result: give the limits file alone.")
        typer.echo(explain_limits(limits, day))
        return
    results = files[:-1]
    _check_names(results)
    print(hashed_file, Report, results)
