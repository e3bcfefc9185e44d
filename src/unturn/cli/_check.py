"""`unturn check`: results held against a limits file that an engineer reviews."""

from __future__ import annotations

import datetime
import os
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from unturn.cli import _options as o
from unturn.cli import _reports as r
from unturn.errors import UnturnError, UsageError

if TYPE_CHECKING:
    from unturn.verdicts.check import Checked
    from unturn.verdicts.finding import Finding
    from unturn.verdicts.limit import Limits


def check(
    files: Annotated[
        list[Path],
        typer.Argument(
            metavar="FILE... LIMITS",
            help="Result files, and last the limits: a TOML file. With --explain the limits alone.",
            readable=False,
        ),
    ],
    explain: Annotated[
        bool, typer.Option("--explain", help="Say in words what would be tested; no result is read.")
    ] = False,
    allow_undecided: r.AllowUndecided = False,
    today: Annotated[
        str | None,
        typer.Option(
            metavar="DATE", help="Day on which waivers are judged, as 2027-03-31. Default: the system's."
        ),
    ] = None,
    json: o.Json = None,
    junit: r.Junit = None,
    markdown: r.Markdown = None,
    csv: r.Csv = None,
    threads: o.Threads = None,
) -> None:
    """Hold results against limits: met, exceeded or undecided, each with its value, margin and place."""
    from unturn.verdicts.explain import explain_limits
    from unturn.verdicts.finding import Report, hashed_file
    from unturn.verdicts.inputs import hashed_inputs
    from unturn.verdicts.read_limits import read_limits

    day = date_of(today)
    places = r.ReportPlaces(json, junit, markdown, csv)
    if explain and len(files) > 1:
        raise UsageError("--explain reads no result: give the limits file alone.")
    if not explain and len(files) < 2:
        raise UsageError(
            "give the result files and, last, the limits file; --explain takes the limits file alone."
        )
    places.check(files)
    limits = read_limits(files[-1])
    if explain:
        typer.echo(explain_limits(limits, day))
        return
    results = files[:-1]
    _check_names(results)
    inputs = [hashed_file("limits", files[-1])]
    findings: list[Finding] = []
    unusable: list[UnturnError] = []
    for path in results:
        checked = _one(path, limits, day, threads)
        findings += checked.findings
        if checked.unusable is None:
            inputs += hashed_inputs("result", path)
        else:
            unusable.append(checked.unusable)
            typer.echo(f"unturn: {path}: {checked.unusable}", err=True)
    places.put(
        Report(
            "check", tuple(findings), tuple(inputs), allow_undecided,
            settings={"title": limits.title, "limits": limits.written, "today": day.isoformat(), **limits.settings},
        ),
        at_least=max((e.exit_status for e in unusable), default=0),
    )  # fmt: skip


def date_of(text: str | None) -> datetime.date:
    """Return the day of ``--today``.

    Raises
    ------
    UsageError
        It is no date.
    """
    if text is None:
        return datetime.date.today()
    try:
        return datetime.date.fromisoformat(text)
    except ValueError:
        raise UsageError(f"--today {text!r} is no date; write it as 2027-03-31.") from None


def _check_names(results: Sequence[Path]) -> None:
    """Refuse one file given twice: its verdicts could not be told apart."""
    seen: dict[str, Path] = {}
    for path in results:
        place = os.path.realpath(path)
        if place in seen:
            raise UsageError(f"{path} and {seen[place]} are the same file: give each result once.")
        seen[place] = path


def _one(path: Path, limits: Limits, day: datetime.date, threads: int | None) -> Checked:
    """Return the verdicts on one file; one that cannot be opened has an error for every limit."""
    from unturn import io
    from unturn.cli._progress import progress_bar
    from unturn.verdicts.check import check_result, needed_steps, unreadable

    try:
        opened = io.open_result(path)
        n = 1 if opened.steps is None else len(opened.steps)
        with progress_bar(path.name, len(needed_steps(limits, n))) as progress:
            return check_result(opened, limits, str(path), today=day, threads=threads, progress=progress)
    except UnturnError as error:
        return unreadable(error, limits, str(path))
