"""`unturn strain`: compute, write back, print the summary."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from unturn.cli import _options as o
from unturn.cli._shared import EVERY, strain_options
from unturn.errors import InputError, UnturnError, UsageError

if TYPE_CHECKING:
    from unturn.cli._output import Places
    from unturn.io import ResultFile
    from unturn.pipeline import Computed, StrainOptions
    from unturn.result import Result
    from unturn.rigid import RigidMotion
    from unturn.summary import Summary


@strain_options(*EVERY)
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
    mode: Annotated[
        bool, typer.Option("--mode", help="A mode shape: no verdict, values per unit amplitude.")
    ] = False,
    displacement_table: o.Table = None,
    zero_step: Annotated[
        int | None, typer.Option(metavar="N", help="Measure displacements from this step of the series.")
    ] = None,
    region: Annotated[
        list[str] | None,
        typer.Option(
            metavar="NAME", help="Summarise this region only (repeatable): a group, or array=value."
        ),
    ] = None,
    prefix: Annotated[str, typer.Option(metavar="TEXT", help="Goes before the name of each new array.")] = "",
    overwrite: Annotated[bool, typer.Option("--overwrite", help="Replace arrays of the same name.")] = False,
    picture: Annotated[
        Path | None,
        typer.Option(metavar="FILE.png", help="Also draw the equivalent strain on the deformed shape."),
    ] = None,
    json: o.Json = None,
) -> None:
    """Add strain, rotation and equivalent strain to result files and say where they can be trusted."""
    from unturn.cli._output import Places, check_place, is_folder, write_json

    check_place(picture, json, files)
    if options.displacement is not None and displacement_table is not None:
        raise UsageError("--displacement and --displacement-table exclude each other: give one of them.")
    if picture is not None and len(files) > 1:
        raise UsageError("--picture FILE.png draws one file; give one input file with it.")
    if picture is not None and options.at == "quadrature":
        raise UsageError("--picture draws meshes, and --at quadrature gives points: leave one of them out.")
    if output is not None and not is_folder(output) and len(files) > 1:
        raise UsageError(f"-o {output}: with several input files the output must be an existing folder.")
    job = _Job(
        places=Places(output, files, (picture, json)),
        options=options,
        zero_step=zero_step,
        summary={"regions": tuple(region or ()), "solve": options.solve, "mode": mode,
                 "at": "mean" if options.at == "mean" else "centroid",
                 "equivalent_poisson": options.equivalent_poisson, "full": json is not None},
        table=displacement_table, step=step, prefix=prefix, overwrite=overwrite, picture=picture,
        text_to_stderr=str(json) == "-",
    )  # fmt: skip
    data: list[dict[str, Any]] = []
    failed: list[UnturnError] = []
    for number, path in enumerate(files):
        if number:
            typer.echo(err=job.text_to_stderr)
        try:
            data += job.run(path)
        except UnturnError as error:
            if len(files) == 1:
                raise
            typer.echo(f"unturn: {error}", err=True)
            failed.append(error)
    if json is not None:
        write_json(data[0] if len(files) == 1 and len(data) == 1 else {"schema": "unturn.summaries/1", "results": data},
                   json)  # fmt: skip
    if failed:
        typer.echo(f"unturn: {len(failed)} of {len(files)} files failed", err=True)
        raise typer.Exit(max(e.exit_status for e in failed))


@dataclass(frozen=True)
class _Job:
    places: Places
    options: StrainOptions
    zero_step: int | None
    summary: dict[str, Any]
    table: Path | None
    step: str
    prefix: str
    overwrite: bool
    picture: Path | None
    text_to_stderr: bool  # stdout is for the JSON then

    @property
    def _own_mesh(self) -> bool:
        from unturn.pipeline import OWN_MESH

        return self.options.at in OWN_MESH

    def run(self, path: Path) -> list[dict[str, Any]]:
        """Do one file and return its summaries as data."""
        from unturn import io

        opened = io.open_result(path)
        if (
            self.table is not None
            and opened.steps is not None
            and (self.step == "all" or self.zero_step is not None)
        ):
            raise UsageError(
                f"{path}: --displacement-table holds the displacement of one state, and --step all and --zero-step need "
                "that of every step."
            )
        if self.step == "all" and opened.steps is not None:
            if self._own_mesh:
                raise UsageError(
                    f"--at {self.options.at} makes a mesh of its own; give one --step of the series."
                )
            return self._series(opened, path)
        result = opened.read(chosen_step(opened, "last" if self.step == "all" else self.step))
        out = self._target(path, result, series=False)
        result, summary, computed = self._compute(result, self._zero(opened), alone=True)
        lost = io.write(result, out)
        self._print(summary, computed, out, lost, result if self._own_mesh else None)
        return [self._data(summary, out)]

    def _series(self, opened: ResultFile, path: Path) -> list[dict[str, Any]]:
        from unturn import io
        from unturn.pipeline import settled

        assert opened.steps is not None
        last = opened.read(len(opened.steps) - 1)
        out = self._target(path, last, series=True)
        job = self if self.table is not None else replace(self, options=settled(self.options, last))
        del last  # one step in memory at a time
        data, summary = [], None
        zero = self._zero(opened)
        previous: tuple[RigidMotion, ...] = ()
        with io.series_writer(out) as writer:
            for index, value in enumerate(opened.steps):
                try:
                    result, summary, computed = job._compute(opened.read(index), zero, previous)
                except InputError as error:
                    raise type(error)(f"at step {index} (t = {value:g}): {error}") from error
                previous = tuple(r.motion for r in summary.removals)
                writer.add(result, value)
                data.append(self._data(summary, out))
                self._say(_step_line(summary, index, value))
        if summary is None:
            raise InputError(f"{path}: the series holds no step.")
        self._say("")
        self._print(summary, computed, out, ())
        return data

    def _say(self, text: str) -> None:
        typer.echo(text, err=self.text_to_stderr)

    def _zero(self, opened: ResultFile) -> Result | None:
        if self.zero_step is None:
            return None
        if opened.steps is None:
            raise UsageError(f"{opened.path} is not a series: --zero-step has nothing to measure from.")
        return opened.read(chosen_step(opened, str(self.zero_step), "--zero-step"))

    def _compute(
        self, result: Result, zero: Result | None, previous: tuple[RigidMotion, ...] = (), alone: bool = False
    ) -> tuple[Result, Summary, Computed]:
        from unturn._api import add_fields
        from unturn.pipeline import compute
        from unturn.summary import SummaryOptions, summarise

        options = self.options
        if self.table is not None:
            from unturn.io.table import attach_displacement_table, read_displacement_table

            result = attach_displacement_table(result, read_displacement_table(self.table))
            options = replace(options, displacement="displacement")
        computed = compute(result, options, zero=zero, diagnose=True, previous=previous)
        if alone:  # of a series, one such step is no reason to lose the others
            computed.require_some()
        summary = summarise(computed, SummaryOptions(**self.summary), threads=options.threads)
        result = add_fields(result, computed, prefix=self.prefix, overwrite=self.overwrite)
        return result, summary, computed

    def _target(self, path: Path, result: Result, series: bool) -> Path:
        from unturn.io import check_target, writable_suffix

        own = self._own_mesh
        suffix = ".vtu" if own else writable_suffix(path, result, series=series)
        out = self.places.of(path, suffix, self.options.at if own else "strain")
        check_target(out, series=series)
        return out

    def _print(
        self,
        summary: Summary,
        computed: Computed,
        out: Path,
        lost: tuple[str, ...],
        own: Result | None = None,
    ) -> None:
        from unturn.summary_text import summary_text

        self._say(summary_text(summary))
        result = summary.fields.model.result
        before = len(result.point_data) + len(result.cell_data) + len(result.field_data)
        found = summary.fields if computed.nodes is None else computed.nodes
        n = len(found.arrays) + (3 if summary.removals else 0)
        if own is None:
            self._say(f"wrote {out}: {n} array{'s' * (n != 1)} added, {before} unchanged")
        else:
            what = "faces" if self.options.at == "surface" else "quadrature points"
            self._say(
                f"wrote {out}: {own.n_cells} {what} with {len(own.cell_data) + len(own.point_data)} arrays"
            )
        for sentence in lost:
            self._say(f"note: {sentence}")
        if self.picture is not None:
            from unturn.cli._picture import draw_summary

            self._say(draw_summary(summary, computed, self.options.at, self.picture))

    def _data(self, summary: Summary, out: Path) -> dict[str, Any]:
        from unturn.summary import summary_data

        return {**summary_data(summary), "output": str(out)}


def chosen_step(opened: ResultFile, step: str, option: str = "--step") -> int:
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
        raise UsageError(
            f"{opened.path} has {n} step{'s' * (n != 1)}, 0 to {n - 1}; {option} {number} does not exist."
        )
    return number


def _step_line(summary: Summary, index: int, value: float) -> str:
    parts = []
    for r in summary.regions[:5]:
        if r.verdict.worst_cell < 0 and not math.isfinite(r.verdict.size):
            parts.append(f"{r.region.name}: no cell was computed")
            continue
        peak = next((s for n, s in r.statistics.items() if n.startswith("equivalent_strain")), None)
        largest = f"equivalent up to {peak.maximum * 1e6:.0f} microstrain, " if peak else ""
        parts.append(
            f"{r.region.name}: {largest}turn {r.verdict.largest_rotation:.3g} degrees, {r.verdict.level}"
        )
    return f"step {index}  t = {value:g}   " + "; ".join(parts)
