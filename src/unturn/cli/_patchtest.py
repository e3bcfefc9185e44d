"""`unturn patchtest`: known fields on the user's own mesh; and the record of an installation."""

from __future__ import annotations

import datetime
from enum import StrEnum
from pathlib import Path
from typing import Annotated

import typer

from unturn.cli import _options as o
from unturn.cli import _reports as r
from unturn.errors import UsageError


class AlsoAtChoice(StrEnum):
    """Where else errors are looked at."""

    nodes = "nodes"
    surface = "surface"


def patchtest(
    file: Annotated[
        Path | None,
        typer.Argument(
            metavar="FILE", help="Result or mesh file; its displacement is not used.", readable=False
        ),
    ] = None,
    at: Annotated[
        list[AlsoAtChoice] | None,
        typer.Option(
            metavar="nodes|surface",
            help="Also there (repeatable): recovered at nodes, on free faces of solids. Informative.",
        ),
    ] = None,
    region: Annotated[
        list[str] | None,
        typer.Option(metavar="NAME", help="Only this region (repeatable): a group, or array=value."),
    ] = None,
    step: Annotated[
        str, typer.Option(metavar="last|N", help="Step of a series; N counts from zero.")
    ] = "last",
    alive: o.Alive = None,
    skin: o.Skin = False,
    installation: Annotated[
        bool,
        typer.Option(
            "--installation",
            help="Without FILE: run the published checks on built-in meshes, for a record to sign.",
        ),
    ] = False,
    output: Annotated[
        Path | None,
        typer.Option(
            "-o", "--output", metavar="RECORD.txt", help="Also write the record of --installation there."
        ),
    ] = None,
    today: Annotated[
        str | None,
        typer.Option(metavar="YYYY-MM-DD", help="The date on the record of --installation; default: today."),
    ] = None,
    json: o.Json = None,
    junit: r.Junit = None,
    markdown: r.Markdown = None,
    csv: r.Csv = None,
    allow_undecided: r.AllowUndecided = False,
    threads: o.Threads = None,
) -> None:
    """Impose known fields on the mesh of a file and show the error made on exactly this mesh."""
    from unturn import io
    from unturn.cli._steps import chosen_step
    from unturn.verdicts.finding import hashed_file
    from unturn.verdicts.patchtest import PatchTestOptions, patch_test
    from unturn.verdicts.patchtest_report import patch_report

    places = r.ReportPlaces(json, junit, markdown, csv)
    where = tuple(dict.fromkeys(at or ()))
    if installation:
        for_meshes = file, where, region, alive, skin, allow_undecided, threads
        if any(for_meshes) or step != "last":
            raise UsageError(
                "--installation runs on built-in meshes: leave FILE and the options for it away; "
                "it takes -o, --today, --json, --junit, --markdown and --csv."
            )
        _installation(places, output, today)
    if output is not None or today is not None:
        raise UsageError(
            "-o and --today belong to --installation; say --json, --junit ... for the test of a mesh."
        )
    if file is None:
        raise UsageError("name the file whose mesh is to be tested, or say --installation.")
    places.check([file])
    opened = io.open_result(file)
    result = opened.read(chosen_step(opened, step))
    options = PatchTestOptions(tuple(region or ()), tuple(w.value for w in where), skin, alive, threads)
    places.put(
        patch_report(patch_test(result, options), str(file), [hashed_file("mesh", file)], allow_undecided)
    )


def _installation(places: r.ReportPlaces, output: Path | None, today: str | None) -> None:
    """Run the checks, print and write the record, and end the command."""
    from unturn.cli._output import write_text
    from unturn.verdicts.installation import check_installation, record_data, record_text

    places.check([], output)
    found = check_installation(_date(today))
    text = record_text(found)
    if output is not None:
        write_text(text + "\n", output)
    places.put(found.report, text=text, data=record_data(found))


def _date(today: str | None) -> str:
    if today is None:
        return datetime.date.today().isoformat()
    try:
        return datetime.date.fromisoformat(today).isoformat()
    except ValueError:
        raise UsageError(f"--today {today!r} is not a date; write it as 2026-12-31.") from None
