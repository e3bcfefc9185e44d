"""From a result and a plan to the content of a report."""

from __future__ import annotations

import datetime
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from unturn.errors import UsageError
from unturn.io import ResultFile, open_result
from unturn.pictures.plan import Plan
from unturn.pipeline import Computed
from unturn.report.content import Beyond, Content, FileRecord, element_of, extremes_of
from unturn.report.drawing import draw_pictures
from unturn.report.over_steps import over_steps
from unturn.report.plots import check_plotting
from unturn.report.side import side_of
from unturn.report.versus import compare_with
from unturn.result import Result
from unturn.statistics import statistics
from unturn.summary import Summary, leading
from unturn.verdicts.check import check_result
from unturn.verdicts.finding import InputFile, Report, hashed_file
from unturn.verdicts.inputs import hashed_inputs
from unturn.verdicts.read_limits import read_limits
from unturn.verdicts.wording import short_name


@dataclass(frozen=True)
class Request:
    """What a report is made of and how it came about.

    Attributes
    ----------
    opened, result, step
        The result: all of it, and the step that is reported with its zero-based number.
    plan
        What the report says.
    plan_path
        Where the plan lies; None for one that was made here.
    command
        The command line, for the record.
    date
        Of the report; waivers of limits are judged on it.
    threads
        None: all processors.
    """

    opened: ResultFile
    result: Result
    step: int
    plan: Plan
    plan_path: Path | None
    command: str
    date: datetime.date
    threads: int | None = None

    def beside(self, name: str) -> Path:
        """Return a file that the plan names: relative to the plan."""
        return Path(name) if self.plan_path is None else self.plan_path.parent / name

    @property
    def named(self) -> list[Path]:
        """The plan and every file that it names."""
        wish = self.plan.report
        named = [self.beside(n) for n in (wish.limits, wish.reference, wish.tolerances) if n]
        return named if self.plan_path is None else [self.plan_path, *named]


def gather(request: Request) -> Content:
    """Return the content of a report.

    Raises
    ------
    UsageError
        The plan asks for something that does not exist.
    InputError
        A result cannot be used.
    MissingExtraError
        No graphics library, or no plotting library.
    """
    plan, wish = request.plan, request.plan.report
    opened = request.opened
    series = wish.steps and opened.steps is not None and len(opened.steps) > 1
    if series:
        check_plotting()
    side = side_of(opened, request.result, plan, request.threads)
    pictures = draw_pictures(side, plan)
    limits = _limits(opened, request) if wish.limits else None
    versus = None
    if wish.reference:
        reference = open_result(request.beside(wish.reference))
        old = reference.read(_same_step(reference, request.step, opened))
        base = side_of(reference, old, plan, request.threads)
        tolerances = request.beside(wish.tolerances) if wish.tolerances else None
        versus = compare_with(side, base, plan, tolerances)
    return Content(
        wish,
        plan.title or f"Strain in {short_name(opened.path)}",
        request.date,
        request.command,
        tuple(_files(request)),
        side.summary,
        tuple(extremes_of(side.summary)),
        tuple(_beyond(side.computed, side.summary)),
        tuple(pictures),
        limits,
        versus,
        over_steps(opened, plan, side.summary, request.threads) if series else None,
    )


def _same_step(reference: ResultFile, step: int, opened: ResultFile) -> int:
    """Return the step of the reference: the last for the last, else the one of the same number."""
    if reference.steps is None:
        return 0
    n, last = len(reference.steps), 1 if opened.steps is None else len(opened.steps)
    if step == last - 1:
        return n - 1
    if step >= n:
        raise UsageError(
            f"{reference.path}: the reference has steps 0 to {n - 1}, and no step {step} to compare with."
        )
    return step


def _limits(opened: ResultFile, request: Request) -> Report:
    """Return the verdicts on the limits."""
    path = request.beside(request.plan.report.limits)
    limits = read_limits(path)
    group = opened.path
    checked = check_result(opened, limits, group, today=request.date, threads=request.threads)
    settings = {
        "title": limits.title,
        "limits": limits.written,
        "today": request.date.isoformat(),
        **limits.settings,
    }
    return Report("check", checked.findings, (hashed_file("limits", path),), settings=settings)


def _files(request: Request) -> list[FileRecord]:
    """Return the records of every file behind the report."""
    wish = request.plan.report
    inputs: list[InputFile] = [*hashed_inputs("result", request.opened.path)]
    if request.plan_path is not None:
        inputs.append(hashed_file("plan", request.plan_path))
    for role in ("limits", "tolerances"):
        if name := getattr(wish, role):
            inputs.append(hashed_file(role, request.beside(name)))
    if wish.reference:
        inputs += hashed_inputs("reference", request.beside(wish.reference))
    return [_record(i) for i in inputs]


def _record(file: InputFile) -> FileRecord:
    try:
        found = Path(file.path).stat()
    except OSError:  # several files that are one record
        return FileRecord(file.role, file.path, file.sha256, None, None)
    changed = datetime.datetime.fromtimestamp(found.st_mtime, datetime.UTC)
    return FileRecord(file.role, file.path, file.sha256, found.st_size, f"{changed:%Y-%m-%d %H:%M:%S} UTC")


def _beyond(computed: Computed, summary: Summary) -> list[Beyond]:
    """Return what is computed and in no region of the report, with its peak, the highest dimension first."""
    d = computed.fields.diagnostics
    assert d is not None
    rest = d.dimension > 0
    for region in summary.regions:
        mine = region.region.cells
        rest[mine[d.dimension[mine] == d.dimension[mine].max()]] = False
    name = leading(summary.regions[0])
    fixed = {"principal_strain_1": d.principal[:, 0], "angle_of_turn": d.angle}
    values = fixed[name] if name in fixed else computed.fields.arrays[name]
    found = []
    for dimension in sorted(set(d.dimension[rest].tolist()), reverse=True):
        cells = np.flatnonzero(rest & (d.dimension == dimension))
        peak = statistics(values, d.volume, cells, ())
        if not peak.count:  # they are told as cells without a value
            continue
        unit = "radian" if name == "angle_of_turn" else "strain"
        where = element_of(summary, peak.at_maximum)
        found.append(Beyond(dimension, peak.count, name, peak.maximum, peak.at_maximum, where, unit))
    return found
