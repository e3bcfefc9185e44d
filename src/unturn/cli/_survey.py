"""`unturn survey`: what a result file holds; changes nothing."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from unturn.cli import _options as o


def survey(
    file: Annotated[Path, typer.Argument(metavar="FILE", help="Result file.", readable=False)],
    step: o.Step = "last",
    displacement: o.Displacement = None,
    displacement_scale: o.Scale = 1.0,
    coordinates: o.Coordinates = o.CoordinatesChoice.reference,
    json: o.Json = None,
    threads: o.Threads = None,
) -> None:
    """Say what a result file holds, which array is the displacement, and what looks wrong."""
    from unturn import io
    from unturn.cli._output import check_place, write_json
    from unturn.cli._steps import chosen_step
    from unturn.survey import survey_result, survey_text

    check_place(None, json, [file])
    opened = io.open_result(file)
    result = opened.read(chosen_step(opened, "last" if step == "all" else step))
    found = survey_result(
        result,
        displacement=displacement,
        displacement_scale=displacement_scale,
        coordinates=coordinates.value,
        threads=threads,
    )
    if json is not None:
        write_json(found, json)
    if str(json) != "-":
        typer.echo(survey_text(found))
