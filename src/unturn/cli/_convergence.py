"""`unturn convergence`: what three meshes of one part say of named quantities."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from unturn.cli import _options as o
from unturn.errors import UsageError

if TYPE_CHECKING:
    from unturn.convergence_text import MeshSize
    from unturn.pipeline import StrainOptions
    from unturn.quantities import Found, Quantity


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
    at: Annotated[
        o.LocationChoice, typer.Option(help="Where peaks and percentiles are taken.")
    ] = o.LocationChoice.centroid,
    step: o.Step = "last",
    solve: Annotated[o.SolveChoice, typer.Option(help="What the solve was.")] = o.SolveChoice.unknown,
    displacement: o.Displacement = None,
    displacement_scale: o.Scale = 1.0,
    coordinates: o.Coordinates = o.CoordinatesChoice.reference,
    plane: o.Plane = None,
    axis: o.Axis = o.AxisChoice.y,
    poisson: o.Poisson = None,
    equivalent_poisson: Annotated[
        float | None,
        typer.Option(
            metavar="NU", help="Equivalent strain as 1/(1+NU) times the norm of the principal differences."
        ),
    ] = None,
    alive: o.Alive = None,
    skin: o.Skin = False,
    json: o.Json = None,
    threads: o.Threads = None,
) -> None:
    """Follow quantities over three meshes: observed order, extrapolated value, grid convergence index."""
    from unturn.cli._output import check_place, write_json
    from unturn.convergence_text import refinement, refinement_data, refinement_text
    from unturn.pipeline import StrainOptions
    from unturn.quantities import FORMS, parse_quantity

    if not quantity:
        raise UsageError(f"say what is to be followed over the meshes with --quantity: {FORMS}.")
    if step == "all":
        raise UsageError("--step all: a refinement study follows one step; give its number or 'last'.")
    check_place(None, json, (coarse, medium, fine))
    quantities = [parse_quantity(text) for text in quantity]
    options = StrainOptions(
        displacement=displacement, measures=sorted({q.measure.name for q in quantities}), at=at.value,
        solve=solve.value, plane=plane.value if plane else None, poisson=poisson, axis=axis.value,
        coordinates=coordinates.value, displacement_scale=displacement_scale, equivalent_poisson=equivalent_poisson,
        skin=skin, alive=alive, threads=threads,
    )  # fmt: skip
    meshes, by_mesh = zip(*(_measure(path, step, options, quantities) for path in (coarse, medium, fine)))
    found = refinement(meshes, quantities, list(zip(*by_mesh)))
    typer.echo(refinement_text(found), err=str(json) == "-")
    if json is not None:
        write_json(refinement_data(found), json)
    if found.undecided:
        n = len(quantities)
        typer.echo(
            f"unturn: {found.undecided} of {n} quantit{'y has' if n == 1 else 'ies have'} no order", err=True
        )
        raise typer.Exit(1)


def _measure(
    path: Path, step: str, options: StrainOptions, quantities: list[Quantity]
) -> tuple[MeshSize, list[Found]]:
    """Return the size of one mesh and the quantities on it; one mesh is in memory at a time."""
    from unturn import io
    from unturn.cli._steps import chosen_step
    from unturn.convergence_text import mesh_size
    from unturn.pipeline import compute
    from unturn.quantities import find_quantity

    opened = io.open_result(path)
    fields = compute(opened.read(chosen_step(opened, step)), options, diagnose=True).fields
    return mesh_size(fields), [find_quantity(q, fields, options.equivalent_poisson) for q in quantities]
