"""`unturn patchtest`: known fields on the user's own mesh; and the record of an installation."""

from __future__ import annotations

from enum import StrEnum
from pathlib import Path
from typing import Annotated

import typer

from unturn.cli import _options as o
from unturn.cli import _reports as r


class AlsoAtChoice(StrEnum):
    """Where else errors are looked at."""

    nodes = "nodes"
    surface = "surface"


def patchtest(
    file: Annotated[
        Path, typer.Argument(metavar="FILE", help="Result or mesh file; its displacement is not used.", readable=False)
    ],
    at: Annotated[
        list[AlsoAtChoice] | None,
        typer.Option(help="Also there (repeatable): recovered at nodes, on free faces of solids. Informative."),
    ] = None,
    region: Annotated[
        list[str] | None,
        typer.Option(metavar="NAME", help="Only this region (repeatable): a group, or array=value."),
    ] = None,
    step: o.Step = "last",
    alive: o.Alive = None,
    skin: o.Skin = False,
    json: o.Json = None,
    junit: r.Junit = None,
    markdown: r.Markdown = None,
    csv: r.Csv = None,
    allow_undecided: r.AllowUndecided = False,
    threads: o.Threads = None,
) -> None:
    """Impose known fields on the mesh of a file and show the error made on exactly this mesh."""
    from unturn import io
    from unturn.cli._strain import chosen_step
    from unturn.verdicts.finding import hashed_file
    from unturn.verdicts.patchtest import PatchTestOptions, patch_test
    from unturn.verdicts.patchtest_report import patch_report

    places = r.ReportPlaces(json, junit, markdown, csv)
    places.check([file])
    opened = io.open_result(file)
    result = opened.read(chosen_step(opened, step))
    where = tuple(dict.fromkeys(a.value for a in at or ()))
    options = PatchTestOptions(tuple(region or ()), where, skin, alive, threads)
    places.put(patch_report(patch_test(result, options), str(file), [hashed_file("mesh", file)], allow_undecided))
