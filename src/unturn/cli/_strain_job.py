"""The work of `unturn strain` on one file: steps read, computed, written and told."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import typer

from unturn.cli._steps import chosen_step
from unturn.errors import InputError, UnturnError, UsageError

if TYPE_CHECKING:
    from unturn.cli._output import Places
    from unturn.io import ResultFile
    from unturn.options import StrainOptions
    from unturn.pipeline import Computed
    from unturn.result import Result
    from unturn.stepwise import Stepwise
    from unturn.summary import Summary


Made = TypeVar("Made")


@dataclass(frozen=True)
class Failure:
    """A file, or a step of it, that could not be used."""

    file: str
    step: int | None
    value: float | None
    error: UnturnError

    def data(self) -> dict[str, Any]:
        """Return it as plain data for JSON."""
        step = None if self.step is None else {"index": self.step, "value": self.value}
        return {"file": self.file, "step": step, "error": str(self.error)}


@dataclass(frozen=True)
class StrainJob:
    """What `unturn strain` was asked for, and the steps that failed so far.

    Attributes
    ----------
    places
        Where the outputs go.
    options
        Of the library.
    zero_step
        The step from which displacements are measured.
    summary
        Keywords of `SummaryOptions`.
    table
        File with the displacement of a mesh without.
    step
        ``last``, ``all`` or a number.
    keep_going
        Whether the other steps of a series go on when one fails.
    prefix, overwrite
        As in `unturn._api.add_fields`.
    picture
        Picture to draw.
    text_to_stderr
        Whether the standard output is for the JSON.
    failed
        Steps that were left out.
    """

    places: Places
    options: StrainOptions
    zero_step: int | None
    summary: dict[str, Any]
    table: Path | None
    step: str
    keep_going: bool
    prefix: str
    overwrite: bool
    picture: Path | None
    text_to_stderr: bool
    failed: list[Failure] = field(default_factory=list)

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
            if self.options.own_mesh:
                raise UsageError(
                    f"--at {self.options.at} makes a mesh of its own; give one --step of the series."
                )
            return self._series(opened, path)
        return self._one(opened, path)

    def _one(self, opened: ResultFile, path: Path) -> list[dict[str, Any]]:
        from unturn import io
        from unturn.stepwise import Stepwise

        number = chosen_step(opened, "last" if self.step == "all" else self.step)
        stepwise = Stepwise(self.options, self._zero(opened))
        if stepwise.series:
            stepwise = self._after_earlier(opened, number, stepwise.series[0])
        result = opened.read(number)
        out = self._target(path, result, series=False)
        result, summary, computed = self._compute(stepwise, result, alone=True)
        lost = io.write(result, out)
        self._print(summary, computed, out, lost, result if self.options.own_mesh else None)
        return [self._data(summary, out)]

    def _after_earlier(self, opened: ResultFile, number: int, asked: str) -> Stepwise:
        """Return a series that has gone through the steps from which what changes at a step is measured."""
        from unturn.stepwise import Stepwise

        if opened.steps is None:
            raise UsageError(
                f"{opened.path} holds one state, and {asked} is what changes between the steps of a series: leave it out of "
                "--measures."
            )
        _, options = self._last(opened)
        stepwise = Stepwise(options, self._zero(opened))
        for index in range(stepwise.first_needed(number), number):
            self._try(opened, index, stepwise.pass_over)
        return stepwise

    def _series(self, opened: ResultFile, path: Path) -> list[dict[str, Any]]:
        from unturn import io
        from unturn.stepwise import Stepwise

        assert opened.steps is not None
        if not opened.steps:
            raise InputError(f"{path}: the series holds no step.")
        last, options = self._last(opened)
        out = self._target(path, last, series=True)
        stepwise = Stepwise(options, self._zero(opened))
        del last  # one step in memory at a time
        data: list[dict[str, Any]] = []
        with io.series_writer(out) as writer:
            for index, value in enumerate(opened.steps):
                made = self._try(opened, index, lambda result: self._compute(stepwise, result))
                if made is not None:
                    result, summary, computed = made
                    writer.add(result, value)
                    data.append(self._data(summary, out))
                    self._say(step_line(summary, index, value))
            if not data:
                raise self._nothing_left(opened)
        self._say("")
        self._print(summary, computed, out, ())
        if stepwise.series and len(data) < len(opened.steps):
            self._say("note: after a step that failed, changes are those since the last one before it")
        return data

    def _last(self, opened: ResultFile) -> tuple[Result, StrainOptions]:
        """Return the last step that can be used, and the options with the kind of a flat mesh settled by it."""
        from unturn.pipeline import settled

        assert opened.steps is not None
        errors: list[UnturnError] = []
        for index in reversed(range(len(opened.steps))):
            try:
                last = opened.read(index)
                return last, settled(self.options, last)
            except InputError as error:
                errors.append(_at_step(opened, index, error))
                if self.step == "all" and not self.keep_going:
                    break
        raise errors[-1]

    def _nothing_left(self, opened: ResultFile) -> UnturnError:
        """Return the error of the first step of a file none of whose steps can be used; the file then counts as failed."""
        first = next(f for f in self.failed if f.file == opened.path)
        self.failed[:] = [f for f in self.failed if f.file != opened.path]
        return _at_step(opened, first.step or 0, first.error)

    def _try(self, opened: ResultFile, index: int, work: Callable[[Result], Made]) -> Made | None:
        """Return what is made of a step; None when it fails and the others go on."""
        assert opened.steps is not None
        try:
            return work(opened.read(index))
        except (InputError, UsageError) as error:
            if not self.keep_going:
                wrong_usage = isinstance(error, UsageError) and index == 0  # no fault of the step
                raise error if wrong_usage else _at_step(opened, index, error) from error
            self._say(f"FAILED, left out: step {index}: {error}")
            self.failed.append(Failure(opened.path, index, opened.steps[index], error))
            return None

    def _say(self, text: str) -> None:
        typer.echo(text, err=self.text_to_stderr)

    def _zero(self, opened: ResultFile) -> Result | None:
        if self.zero_step is None:
            return None
        if opened.steps is None:
            raise UsageError(f"{opened.path} is not a series: --zero-step has nothing to measure from.")
        return opened.read(chosen_step(opened, str(self.zero_step), "--zero-step"))

    def _compute(
        self, stepwise: Stepwise, result: Result, alone: bool = False
    ) -> tuple[Result, Summary, Computed]:
        from unturn._api import add_fields
        from unturn.summary import SummaryOptions, summarise

        if self.table is not None:
            from unturn.io.table import attach_displacement_table, read_displacement_table

            result = attach_displacement_table(result, read_displacement_table(self.table))
        computed = stepwise.compute(result, diagnose=True)
        if alone:  # of a series, one such step is no reason to lose the others
            computed.require_some()
        summary = summarise(computed, SummaryOptions(**self.summary), threads=self.options.threads)
        result = add_fields(result, computed, prefix=self.prefix, overwrite=self.overwrite)
        return result, summary, computed

    def _target(self, path: Path, result: Result, series: bool) -> Path:
        from unturn.io import check_target, writable_suffix

        own = self.options.own_mesh
        split = self.options.borders == "split"
        suffix = ".vtu" if own else writable_suffix(path, result, series=series, duplicated=split)
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
        points, cells, _ = computed.arrays() if own is None else ({}, {}, {})
        n = len(points) + len(cells) + (3 if summary.removals else 0)
        if own is None:
            self._say(
                f"wrote {out}: {n} array{'s' * (n != 1)} added, {before} unchanged{_duplicated(computed)}"
            )
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


def _at_step(opened: ResultFile, index: int, error: UnturnError) -> UnturnError:
    assert opened.steps is not None
    return type(error)(f"at step {index} (t = {opened.steps[index]:g}): {error}")


def _duplicated(computed: Computed) -> str:
    if computed.nodes is None or computed.nodes.layout.cells is None:
        return ""
    n = len(computed.nodes.layout.point) - computed.fields.model.result.n_points
    return f"; {n} points on borders duplicated"


def step_line(summary: Summary, index: int, value: float) -> str:
    """Return one line on a step of a series."""
    from unturn.series import SERIES_MEASURES

    parts = []
    for r in summary.regions[:5]:
        if r.verdict.worst_cell < 0 and not math.isfinite(r.verdict.size):
            parts.append(f"{r.region.name}: no cell was computed")
            continue
        own = {n: s for n, s in r.statistics.items() if n not in SERIES_MEASURES}
        peak = next((s for n, s in own.items() if n.startswith("equivalent_strain")), None)
        largest = f"equivalent up to {peak.maximum * 1e6:.0f} microstrain, " if peak else ""
        parts.append(
            f"{r.region.name}: {largest}turn {r.verdict.largest_rotation:.3g} degrees, {r.verdict.level}"
        )
    return f"step {index}  t = {value:g}   " + "; ".join(parts)
