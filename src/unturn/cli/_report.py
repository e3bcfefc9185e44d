"""`unturn report`: one page that a reviewer reads, prints and signs."""

from __future__ import annotations

import shlex
import sys
from enum import StrEnum
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from unturn.cli import _options as o
from unturn.cli._shared import EVERY, strain_options
from unturn.cli._steps import chosen_step
from unturn.errors import UsageError

if TYPE_CHECKING:
    from unturn.options import StrainOptions
    from unturn.result import Result


class FormatChoice(StrEnum):
    """What a report is written as."""

    html = "html"
    json = "json"


@strain_options(*(name for name in EVERY if name != "measures"))
def report(
    file: Annotated[Path, typer.Argument(metavar="FILE", help="Result file.", readable=False)],
    plan: Annotated[
        Path | None,
        typer.Argument(
            metavar="[PLAN.toml]", help="What the report says; without one, what is sensible.", readable=False
        ),
    ] = None,
    output: Annotated[
        Path | None,
        typer.Option(
            "-o",
            "--output",
            metavar="OUT",
            help="The report ('-': the standard output). Default: the input's name with .report.html or .report.json.",
        ),
    ] = None,
    *,
    options: StrainOptions,
    kind: Annotated[
        FormatChoice, typer.Option("--format", help="A page, or its content as data.")
    ] = FormatChoice.html,
    folder: Annotated[
        Path | None,
        typer.Option(
            metavar="DIR", help="Also the images and, as CSV, the tables as files in an existing folder."
        ),
    ] = None,
    write_plan: Annotated[
        Path | None,
        typer.Option(
            metavar="PLAN.toml", help="Also write the plan that was made, as a start for one of your own."
        ),
    ] = None,
    step: o.Step = "last",
    zero_step: o.ZeroStep = None,
    today: Annotated[
        str | None,
        typer.Option(
            metavar="DATE",
            help="Date of the report, on which waivers are judged too, as 2027-03-31. Default: the system's.",
        ),
    ] = None,
) -> None:
    """Write a report on a result: one page with everything inside, to read, print and sign."""
    from unturn.cli._check import date_of
    from unturn.cli._output import check_places, is_folder, write_json, write_text
    from unturn.cli._report_files import report_line, write_folder
    from unturn.io import open_result
    from unturn.pictures.plan import parse_plan, read_plan
    from unturn.report.data import report_data
    from unturn.report.gather import Request, gather
    from unturn.report.page import html_page, page_template, sections_of

    day = date_of(today)
    target = output or file.with_name(f"{file.stem}.report.{kind.value}")
    check_places((target, write_plan), [file, *([plan] if plan is not None else [])])
    if folder is not None and not is_folder(folder):
        raise UsageError(f"--folder {folder}: the images and tables go to an existing folder; make it first.")
    if plan is not None:
        _only_the_plan(options, {"zero_step": zero_step, "write_plan": write_plan})
    opened = open_result(file)
    number = chosen_step(opened, step)
    result = opened.read(number)
    text = "" if plan is not None else _start(result, options, zero_step)
    made = (
        read_plan(plan) if plan is not None else parse_plan(text.encode("utf-8", "backslashreplace"), _MADE)
    )
    request = Request(opened, result, number, made, plan, _command(), day, options.threads)
    check_places((target, write_plan), [file, *request.named])
    template = page_template() if kind is FormatChoice.html else None
    content = gather(request)
    sections = sections_of(content)
    if template is None:
        write_json(report_data(content), target)
    else:
        write_text(html_page(content, sections, template), target)
    if write_plan is not None:
        write_text(text, write_plan)
    files = [] if folder is None else write_folder(content, sections, folder, [file, *request.named])
    said = [
        report_line(content, target),
        *([f"wrote {write_plan}: the plan"] if write_plan is not None else []),
    ]
    said += [f"wrote {len(files)} files into {folder}"] if folder is not None else []
    typer.echo("\n".join(said), err="-" in map(str, (target, write_plan)))
    raise typer.Exit(0 if content.passed else 1)


_MADE = "(the plan that was made for this file)"


def _only_the_plan(options: StrainOptions, others: dict[str, Any]) -> None:
    """Refuse options beside a plan: it says how the result is read."""
    from unturn.options import told

    for name in [*told(options, None), *(n for n, value in others.items() if value is not None)]:
        if name == "write_plan":
            raise UsageError(
                "--write-plan writes the plan that is made where none is given: leave it out, or the plan."
            )
        key = "at of [report]" if name == "at" else f"{name} of [reading]"
        raise UsageError(
            f"the plan says how the result is read: write {key} into it, and leave --{name.replace('_', '-')} out."
        )


def _start(result: Result, options: StrainOptions, zero_step: int | None) -> str:
    """Return the plan of a report that is asked for without one."""
    from unturn.pipeline import model_of
    from unturn.report.start import plan_text

    if options.at == "quadrature":
        raise UsageError("a report tells values at centroid, mean, nodes or surface: give --at one of these.")
    return plan_text(result.path, model_of(result, options), options, zero_step, {"at": options.at})


def _command() -> str:
    return shlex.join(["unturn", *sys.argv[1:]])
