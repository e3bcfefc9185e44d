"""`unturn picture`: offscreen pictures, from options or from a plan."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from unturn.cli import _options as o
from unturn.cli._picture_options import picture_options
from unturn.cli._shared import strain_options
from unturn.errors import UsageError
from unturn.picture_keys import STRAIN_OPTIONS

if TYPE_CHECKING:
    from unturn.io import ResultFile
    from unturn.options import StrainOptions
    from unturn.picture_keys import PictureRequest
    from unturn.pictures.computing import Step
    from unturn.pictures.drawing import Drawn


@strain_options(*STRAIN_OPTIONS)
@picture_options
def picture(
    file: Annotated[Path, typer.Argument(metavar="FILE", help="Result file.", readable=False)],
    output: Annotated[
        Path | None,
        typer.Option(
            "-o",
            "--output",
            metavar="OUT",
            help="The picture (.png; .gif: all steps of a series), or with --plan an existing folder. "
            "Default: the input's name with .png, or its folder.",
        ),
    ] = None,
    plan: Annotated[
        Path | None,
        typer.Option(
            metavar="PLAN.toml",
            help="Draw the pictures of a plan; it also says how the result is read.",
            readable=False,
        ),
    ] = None,
    *,
    asked: object,
    options: StrainOptions,
    step: o.Step = "last",
    displacement_table: o.Table = None,
    zero_step: o.ZeroStep = None,
    csv: Annotated[
        Path | None,
        typer.Option("--csv", metavar="FILE", help="Also write the values that are drawn as a table."),
    ] = None,
    show: Annotated[
        bool, typer.Option("--show", help="Also open a window with the picture's scene.")
    ] = False,
    json: o.Json = None,
) -> None:
    """Draw pictures of a result without a screen: from options, or the pictures of a plan."""
    from unturn.options import told

    job = _Job(file, step, displacement_table, json)
    assert isinstance(asked, dict)
    if plan is None:
        request = request_of_options(asked, options)
        job.single(request, options, zero_step, output, csv, show)
        return
    given = [*asked, *told(options, None)]
    for name, value in (("zero_step", zero_step), ("csv", csv), ("show", show or None)):
        given += [name] if value is not None else []
    if given:
        raise UsageError(
            f"--plan says what is drawn and how the result is read: write {given[0]!r} into the plan, and leave "
            f"--{given[0].replace('_', '-')} out."
        )
    job.planned(plan, output, options.threads)


def request_of_options(asked: dict[str, Any], options: StrainOptions) -> PictureRequest:
    """Return the request of the options of the command line."""
    from unturn.picture_keys import request_of

    return request_of({**asked, "at": options.at}, "--{}")


@dataclass(frozen=True)
class _Job:
    file: Path
    step: str
    table: Path | None
    json: Path | None

    def single(
        self, request: PictureRequest, options: StrainOptions, zero_step: int | None, output: Path | None,
        csv: Path | None, show: bool,
    ) -> None:  # fmt: skip
        """Draw one picture."""
        from unturn.pictures.drawing import draw_all
        from unturn.pictures.told import write_values
        from unturn.pictures.window import check_display, show_scene

        target = output or self.file.with_suffix(".png")
        if target.suffix.lower() not in (".png", ".gif"):
            raise UsageError(
                f"{target}: pictures are written as PNG, series also as GIF: give a name that ends in .png or .gif. For "
                "print, --size and --dpi make them as fine as needed."
            )
        if show:
            check_display()
        self._check(target, csv)
        opened = self._opened()
        if target.suffix.lower() == ".gif":
            self._animate(opened, request, options, zero_step, target, csv or show)
            return
        step = self._step(opened, self._number(opened), [request], options, zero_step)
        drawn = draw_all(step, [request], [target])
        if csv is not None:
            write_values(drawn[0], csv)
        self._tell(drawn, [] if csv is None else [csv])
        if show:
            show_scene(drawn[0])

    def planned(self, path: Path, folder: Path | None, threads: int | None) -> None:
        """Draw the pictures of a plan."""
        from unturn.cli._output import is_folder
        from unturn.pictures.drawing import draw_all
        from unturn.pictures.plan import read_plan
        from unturn.pictures.told import write_values

        plan = read_plan(path)
        folder = self.file.parent if folder is None else folder
        if not is_folder(folder):
            raise UsageError(f"-o {folder}: with --plan the output is an existing folder; make it first.")
        targets = [folder / f"{p.name}.png" for p in plan.pictures]
        self._check(*targets, *(folder / f"{name}.csv" for name in sorted(plan.csv)), plan=path)
        opened = self._opened()
        options = replace(plan.options, threads=threads)
        step = self._step(opened, self._number(opened), plan.pictures, options, plan.zero_step,
                          surface_poisson=plan.surface_poisson, regions=plan.regions)  # fmt: skip
        drawn = draw_all(step, plan.pictures, targets, plan.title)
        tables = [(d, folder / f"{d.request.name}.csv") for d in drawn if d.request.name in plan.csv]
        for one, place in tables:
            write_values(one, place)
        self._tell(drawn, [place for _, place in tables])

    def _check(self, *targets: Path | None, plan: Path | None = None) -> None:
        from unturn.cli._output import check_places

        inputs = [path for path in (self.file, self.table, plan) if path is not None]
        check_places((*targets, self.json), inputs)

    def _opened(self) -> ResultFile:
        from unturn import io

        return io.open_result(self.file)

    def _number(self, opened: ResultFile) -> int:
        from unturn.cli._steps import chosen_step

        if self.step == "all":
            raise UsageError("a picture shows one --step; all of them are drawn with -o NAME.gif.")
        return chosen_step(opened, self.step)

    def _step(
        self, opened: ResultFile, number: int, requests: Sequence[PictureRequest], options: StrainOptions,
        zero_step: int | None, **of_plan: Any,
    ) -> Step:  # fmt: skip
        from unturn.cli._steps import chosen_step
        from unturn.pictures.computing import Step

        result = opened.read(number)
        if self.table is not None:
            from unturn.io.table import attach_displacement_table, read_displacement_table

            result = attach_displacement_table(result, read_displacement_table(self.table))
            options = replace(options, displacement="displacement")
        zero = None
        if zero_step is not None:
            if opened.steps is None:
                raise UsageError(f"{opened.path} is not a series: --zero-step has nothing to measure from.")
            zero = opened.read(chosen_step(opened, str(zero_step), "--zero-step"))
        return Step(result, requests, options, zero, **of_plan)

    def _animate(
        self, opened: ResultFile, request: PictureRequest, options: StrainOptions, zero_step: int | None, target: Path,
        more: object,
    ) -> None:  # fmt: skip
        from functools import lru_cache

        from unturn.pictures.animation import draw_series
        from unturn.pictures.told import pictures_data, series_data, series_text
        from unturn.pipeline import settled

        if opened.steps is None:
            raise UsageError(f"{opened.path} is not a series: there is nothing that moves. Draw it as PNG.")
        if more or self.table is not None or self.step not in ("all", "last"):
            raise UsageError("an animation shows all steps: --csv, --show, --step and --displacement-table belong to a "
                             "picture of one.")  # fmt: skip
        n = len(opened.steps)
        options = settled(options, opened.read(n - 1))
        step = lru_cache(maxsize=12)(lambda k: self._step(opened, k, [request], options, zero_step))
        drawn = draw_series(step, n, request, target)
        self._say(series_text(drawn), pictures_data(str(self.file), [series_data(drawn)], []))

    def _tell(self, drawn: Sequence[Drawn], tables: Sequence[Path]) -> None:
        from unturn.pictures.told import drawn_data, drawn_text, pictures_data

        lines = [drawn_text(d) for d in drawn] + [f"wrote {place}" for place in tables]
        data = [drawn_data(d) for d in drawn]
        self._say("\n".join(lines), pictures_data(str(self.file), data, tables))

    def _say(self, text: str, data: dict[str, Any]) -> None:
        from unturn.cli._output import write_json

        typer.echo(text, err=str(self.json) == "-")
        if self.json is not None:
            write_json(data, self.json)
