"""`unturn strain`: compute, write back, print the summary."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from unturn.cli import _options as o
from unturn.errors import InputError, UnturnError, UsageError

if TYPE_CHECKING:
    from unturn.io import ResultFile
    from unturn.result import Result
    from unturn.summary import Summary


def strain(
    files: Annotated[list[Path], typer.Argument(metavar="FILE...", help="Result files.")],
    output: Annotated[
        Path | None,
        typer.Option("-o", "--output", metavar="OUT", help="Output file, or an existing folder. "
                     "Default: the input's name with .strain before the suffix."),
    ] = None,
    measures: Annotated[
        str | None,
        typer.Option(metavar="LIST", help="Arrays to add, by comma; 'all' for every one. "
                     "Default: strain,rotation,equivalent_strain,principal_strain."),
    ] = None,
    at: Annotated[o.LocationChoice, typer.Option(help="Where values are taken.")] = o.LocationChoice.centroid,
    step: o.Step = "last",
    solve: Annotated[
        o.SolveChoice, typer.Option(help="What the solve was; it decides what the verdict says.")
    ] = o.SolveChoice.unknown,
    mode: Annotated[bool, typer.Option("--mode", help="A mode shape: no verdict, values per unit amplitude.")] = False,
    displacement: o.Displacement = None,
    displacement_table: o.Table = None,
    displacement_scale: o.Scale = 1.0,
    coordinates: o.Coordinates = o.CoordinatesChoice.reference,
    plane: o.Plane = None,
    axis: o.Axis = o.AxisChoice.y,
    poisson: o.Poisson = None,
    equivalent_poisson: Annotated[
        float | None,
        typer.Option(metavar="NU", help="Equivalent strain as 1/(1+NU) times the norm of the principal differences."),
    ] = None,
    region: Annotated[
        list[str] | None,
        typer.Option(metavar="NAME", help="Summarise this region only (repeatable): a group, or array=value."),
    ] = None,
    alive: o.Alive = None,
    skin: o.Skin = False,
    prefix: Annotated[str, typer.Option(metavar="TEXT", help="Goes before the name of each new array.")] = "",
    overwrite: Annotated[bool, typer.Option("--overwrite", help="Replace arrays of the same name.")] = False,
    picture: Annotated[
        Path | None, typer.Option(metavar="FILE.png", help="Also draw the equivalent strain on the deformed shape.")
    ] = None,
    json: o.Json = None,
    threads: o.Threads = None,
) -> None:
    """Add strain, rotation and equivalent strain to result files and say where they can be trusted."""
    job = _Job(
        output=output,
        several=len(files) > 1,
        measures=[m.strip() for m in measures.split(",") if m.strip()] if measures else None,
        model={
            "displacement": displacement, "displacement_scale": displacement_scale,
            "coordinates": coordinates.value, "skin": skin, "alive": alive,
        },
        plane=(plane.value if plane else None, poisson, axis.value),
        fields={"at": at.value, "equivalent_poisson": equivalent_poisson, "threads": threads},
        summary={"regions": tuple(region or ()), "solve": solve.value, "mode": mode, "at": at.value,
                 "equivalent_poisson": equivalent_poisson, "full": json is not None},
        table=displacement_table, step=step, prefix=prefix, overwrite=overwrite, picture=picture,
    )  # fmt: skip
    if picture is not None and len(files) > 1:
        raise UsageError("--picture FILE.png draws one file; give one input file with it.")
    data: list[dict[str, Any]] = []
    failed: list[UnturnError] = []
    for number, path in enumerate(files):
        if number:
            typer.echo()
        try:
            data += job.run(path)
        except UnturnError as error:
            if len(files) == 1:
                raise
            typer.echo(f"unturn: {error}", err=True)
            failed.append(error)
    if json is not None:
        from unturn.cli._output import write_json

        write_json(data[0] if len(files) == 1 and len(data) == 1 else {"schema": "unturn.summaries/1", "results": data},
                   json)  # fmt: skip
    if failed:
        typer.echo(f"unturn: {len(failed)} of {len(files)} files failed", err=True)
        raise typer.Exit(max(e.exit_status for e in failed))


@dataclass(frozen=True)
class _Job:
    output: Path | None
    several: bool
    measures: list[str] | None
    model: dict[str, Any]
    plane: tuple[Any, float | None, Any]
    fields: dict[str, Any]
    summary: dict[str, Any]
    table: Path | None
    step: str
    prefix: str
    overwrite: bool
    picture: Path | None

    def run(self, path: Path) -> list[dict[str, Any]]:
        """Do one file and return its summaries as data."""
        from unturn import io

        opened = io.open_result(path)
        if self.step == "all" and opened.steps is not None:
            return self._series(opened, path)
        result = opened.read(chosen_step(opened, "last" if self.step == "all" else self.step))
        result, summary = self._compute(result)
        out = self._target(path, series=False)
        lost = io.write(result, out)
        self._print(summary, out, lost)
        return [self._data(summary, out)]

    def _series(self, opened: ResultFile, path: Path) -> list[dict[str, Any]]:
        from unturn import io

        assert opened.steps is not None
        out = self._target(path, series=True)
        data, summary = [], None
        with io.series_writer(out) as writer:
            for index, value in enumerate(opened.steps):
                result, summary = self._compute(opened.read(index))
                writer.add(result, value)
                data.append(self._data(summary, out))
                typer.echo(_step_line(summary, index, value))
        if summary is None:
            raise InputError(f"{path}: the series holds no step.")
        typer.echo()
        self._print(summary, out, ())
        return data

    def _compute(self, result: Result) -> tuple[Result, Summary]:
        from unturn._api import add_fields
        from unturn.fields import compute_fields
        from unturn.model import PlaneOptions, build_model
        from unturn.summary import SummaryOptions, summarise

        if self.table is not None:
            from unturn.io.table import attach_displacement_table, read_displacement_table

            result = attach_displacement_table(result, read_displacement_table(self.table))
            self.model["displacement"] = self.model["displacement"] or "displacement"
        model = build_model(result, plane=PlaneOptions(*self.plane), **self.model)
        fields = compute_fields(model, self.measures, diagnose=True, **self.fields)
        summary = summarise(fields, SummaryOptions(**self.summary), threads=self.fields["threads"])
        return add_fields(result, fields, prefix=self.prefix, overwrite=self.overwrite), summary

    def _target(self, path: Path, series: bool) -> Path:
        from unturn.cli._output import output_path
        from unturn.io import writable_suffix

        return output_path(path, self.output, self.several, writable_suffix(path, series=series))

    def _print(self, summary: Summary, out: Path, lost: tuple[str, ...]) -> None:
        from unturn.summary_text import summary_text

        typer.echo(summary_text(summary))
        result = summary.fields.model.result
        before = len(result.point_data) + len(result.cell_data) + len(result.field_data)
        n = len(summary.fields.arrays)
        typer.echo(f"wrote {out}: {n} array{'s' * (n != 1)} added, {before} unchanged")
        for sentence in lost:
            typer.echo(f"note: {sentence}")
        if self.picture is not None:
            from unturn.cli._picture import draw_summary

            typer.echo(draw_summary(summary, self.picture))

    def _data(self, summary: Summary, out: Path) -> dict[str, Any]:
        from unturn.summary import summary_data

        return {**summary_data(summary), "output": str(out)}


def chosen_step(opened: ResultFile, step: str) -> int:
    """Return the zero-based number of the step asked for.

    Raises
    ------
    UsageError
        Neither ``last`` nor ``all`` nor the number of a step that exists.
    """
    n = 1 if opened.steps is None else len(opened.steps)
    if step == "last":
        return n - 1
    try:
        number = int(step)
    except ValueError:
        raise UsageError(f"--step {step!r}: use 'last', 'all' or a number from 0 to {n - 1}.") from None
    if not 0 <= number < n:
        raise UsageError(f"{opened.path} has {n} step{'s' * (n != 1)}, 0 to {n - 1}; --step {number} does not exist.")
    return number


def _step_line(summary: Summary, index: int, value: float) -> str:
    parts = []
    for r in summary.regions[:5]:
        peak = r.statistics.get("equivalent_strain")
        largest = f"equivalent up to {peak.maximum * 1e6:.0f} microstrain, " if peak else ""
        parts.append(f"{r.region.name}: {largest}turn {r.verdict.largest_rotation:.3g} degrees, {r.verdict.level}")
    return f"step {index}  t = {value:g}   " + "; ".join(parts)
