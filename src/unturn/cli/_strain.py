"""`unturn strain`: compute, write back, print the summary."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from unturn.cli import _options as o
from unturn.cli._shared import EVERY, PLACES, strain_options
from unturn.cli._strain_job import Failure, StrainJob
from unturn.errors import UnturnError, UsageError

if TYPE_CHECKING:
    from unturn.options import StrainOptions


@strain_options(*EVERY, *PLACES)
def strain(
    files: Annotated[list[Path], typer.Argument(metavar="FILE...", help="Result files.", readable=False)],
    output: Annotated[
        Path | None,
        typer.Option(
            "-o",
            "--output",
            metavar="OUT",
            help="Output file, or an existing folder. "
            "Default: the input's name with .strain before the suffix.",
        ),
    ] = None,
    *,
    options: StrainOptions,
    step: o.Step = "last",
    keep_going: Annotated[
        bool,
        typer.Option(
            "--keep-going",
            help="With --step all: leave out a step that fails, name it, and go on; the exit status is still that of "
            "the failure.",
        ),
    ] = False,
    mode: Annotated[
        bool, typer.Option("--mode", help="A mode shape: no verdict, values per unit amplitude.")
    ] = False,
    displacement_table: o.Table = None,
    zero_step: o.ZeroStep = None,
    region: Annotated[
        list[str] | None,
        typer.Option(
            metavar="NAME", help="Summarise this region only (repeatable): a group, or array=value."
        ),
    ] = None,
    prefix: o.Prefix = "",
    overwrite: o.Overwrite = False,
    picture: Annotated[
        Path | None,
        typer.Option(metavar="FILE.png", help="Also draw the equivalent strain on the deformed shape."),
    ] = None,
    json: o.Json = None,
) -> None:
    """Add strain, rotation and equivalent strain to result files and say where they can be trusted."""
    from unturn.cli._output import Places, check_place

    check_place(picture, json, [*files, *([displacement_table] if displacement_table is not None else [])])
    _check(files, options, output, picture, displacement_table)
    if displacement_table is not None:
        options = replace(options, displacement="displacement")
    job = StrainJob(
        places=Places(output, files, (picture, json)),
        options=options,
        zero_step=zero_step,
        summary={"regions": tuple(region or ()), "solve": options.solve, "mode": mode,
                 "at": "mean" if options.at == "mean" else "centroid",
                 "equivalent_poisson": options.equivalent_poisson, "full": json is not None},
        table=displacement_table, step=step, keep_going=keep_going, prefix=prefix, overwrite=overwrite, picture=picture,
        text_to_stderr=str(json) == "-",
    )  # fmt: skip
    _run(job, files, json)


def _check(
    files: list[Path], options: StrainOptions, output: Path | None, picture: Path | None, table: Path | None
) -> None:
    """Refuse options of the command that do not fit each other."""
    from unturn.cli._output import is_folder

    if options.displacement is not None and table is not None:
        raise UsageError("--displacement and --displacement-table exclude each other: give one of them.")
    if picture is not None and len(files) > 1:
        raise UsageError("--picture FILE.png draws one file; give one input file with it.")
    if picture is not None and options.at == "quadrature":
        raise UsageError("--picture draws meshes, and --at quadrature gives points: leave one of them out.")
    if output is not None and not is_folder(output) and len(files) > 1:
        raise UsageError(f"-o {output}: with several input files the output must be an existing folder.")


def _run(job: StrainJob, files: list[Path], json: Path | None) -> None:
    """Do all files; a file or step that fails does not stop the others, and decides the exit status."""
    from unturn.cli._output import write_json

    data: list[dict[str, Any]] = []
    failed: list[Failure] = []
    for number, path in enumerate(files):
        if number:
            typer.echo(err=job.text_to_stderr)
        try:
            data += job.run(path)
        except UnturnError as error:
            if len(files) == 1:
                raise
            typer.echo(f"unturn: {error}", err=True)
            failed.append(Failure(str(path), None, None, error))
    if json is not None:
        alone = len(files) == 1 and len(data) == 1 and not job.failed
        several = {
            "schema": "unturn.summaries/1",
            "results": data,
            "failed": [f.data() for f in (*job.failed, *failed)],
        }
        write_json(data[0] if alone else several, json)
    if job.failed:
        n = len(job.failed)
        typer.echo(f"unturn: {n} step{'s' * (n != 1)} failed", err=True)
    if failed:
        typer.echo(f"unturn: {len(failed)} of {len(files)} files failed", err=True)
    if failed or job.failed:
        raise typer.Exit(max(f.error.exit_status for f in (*job.failed, *failed)))
