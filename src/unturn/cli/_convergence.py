"""`unturn convergence`: what three meshes of one part say of named quantities."""

from __future__ import annotations

from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from unturn.cli import _options as o
from unturn.cli._shared import EVERY, CellsOnly, strain_options
from unturn.errors import UsageError

if TYPE_CHECKING:
    from unturn.pipeline import StrainOptions
    from unturn.result import Result


# quantities name their measures, and components by the axes of the file
_OPTIONS = [n for n in EVERY if n not in ("measures", "base", "recovery", "frame")]


@strain_options(*_OPTIONS, at=CellsOnly)
def convergence(
    coarse: Annotated[
        Path, typer.Argument(metavar="COARSE", help="Result on the coarsest mesh.", readable=False)
    ],
    medium: Annotated[
        Path, typer.Argument(metavar="MEDIUM", help="Result on the mesh between.", readable=False)
    ],
    fine: Annotated[Path, typer.Argument(metavar="FINE", help="Result on the finest mesh.", readable=False)],
    quantity: Annotated[
        list[str] | None,
        typer.Option(
            metavar="TEXT",
            help="What is followed (repeatable): 'peak NAME', 'lowest NAME' or 'percentile Q NAME', each with "
            "'in REGION' or 'within R of X,Y,Z' after it where wanted; 'value NAME at X,Y,Z'. NAME is one number: "
            "equivalent_strain, principal_strain_1, strain_XX ...",
        ),
    ] = None,
    *,
    options: StrainOptions,
    step: o.Step = "last",
    json: o.Json = None,
) -> None:
    """Follow quantities over three meshes: observed order, extrapolated value, grid convergence index."""
    from unturn.cli._output import check_place, write_json
    from unturn.convergence_text import refinement_data, refinement_text
    from unturn.mesh_study import study_meshes
    from unturn.quantity_text import FORMS, parse_quantity

    if not quantity:
        raise UsageError(f"say what is to be followed over the meshes with --quantity: {FORMS}.")
    if step == "all":
        raise UsageError("--step all: a refinement study follows one step; give its number or 'last'.")
    check_place(None, json, (coarse, medium, fine))
    quantities = [parse_quantity(text) for text in quantity]
    meshes = [partial(_read, path, step) for path in (coarse, medium, fine)]
    found = study_meshes(meshes, quantities, options)
    typer.echo(refinement_text(found), err=str(json) == "-")
    if json is not None:
        write_json(refinement_data(found), json)
    if found.undecided:
        n = len(quantities)
        typer.echo(
            f"unturn: {found.undecided} of {n} quantit{'y has' if n == 1 else 'ies have'} no order", err=True
        )
        raise typer.Exit(1)


def _read(path: Path, step: str) -> Result:
    from unturn import io
    from unturn.cli._steps import chosen_step

    opened = io.open_result(path)
    return opened.read(chosen_step(opened, step))
