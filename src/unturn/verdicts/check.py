"""Holding a result against a limits file, one step in memory at a time."""

from __future__ import annotations

import datetime
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Protocol

from unturn.errors import InputError, UnturnError, UsageError
from unturn.pipeline import StrainOptions, settled
from unturn.result import Result
from unturn.rigid import RigidMotion
from unturn.verdicts.certainty import plus_minus_at
from unturn.verdicts.conclude import conclude
from unturn.verdicts.finding import Finding
from unturn.verdicts.limit import Limit, Limits
from unturn.verdicts.measured import Measured, measure_all
from unturn.verdicts.over_steps import OverSteps
from unturn.verdicts.preconditions import PRECONDITIONS, Evidence
from unturn.verdicts.statistic import STATISTICS
from unturn.verdicts.step import Step
from unturn.written_regions.select import NoRegion


class Opened(Protocol):
    """A result whose steps are read one by one, see `unturn.io.ResultFile`."""

    path: str
    steps: tuple[float, ...] | None

    def read(self, step: int = 0) -> Result:
        """Read one step."""
        ...


@dataclass
class InMemory:
    """A result in memory as if it were a file."""

    result: Result
    path: str = ""
    steps: tuple[float, ...] | None = None

    def read(self, step: int = 0) -> Result:
        """Return the result."""
        return self.result


@dataclass(frozen=True)
class Checked:
    """The verdicts on one result, and why it cannot be used (None when it can)."""

    findings: tuple[Finding, ...]
    unusable: UnturnError | None = None


def check_result(
    opened: Opened,
    limits: Limits,
    group: str,
    *,
    today: datetime.date | None = None,
    threads: int | None = None,
    progress: Callable[[int], None] | None = None,
) -> Checked:
    """Return the verdict on every condition and limit, in the order of the file.

    Parameters
    ----------
    opened
        The result.
    limits
        See `read_limits`.
    group
        Name of the result in the verdicts.
    today
        For waivers; None: the date of the system.
    threads
        None: all processors.
    progress
        Called with the number of steps done.
    """
    run = _Run(opened, limits, threads)
    with run.over:
        for done, number in enumerate(run.needed, 1):
            run.step(number)
            if progress is not None:
                progress(done)
        run.finish()
    return run.concluded(group, today or datetime.date.today())


def unreadable(error: UnturnError, limits: Limits, group: str) -> Checked:
    """Return the verdicts on a result that cannot be opened: every limit is an error, none is left away."""
    why = f"the result cannot be used: {error}"
    failed = [Measured(None, None, error=why)]
    findings = [replace(f, state="error", message=why) for f in conditions(limits, evidence(limits), group)]
    findings += [conclude(limit, group, failed, datetime.date.min) for limit in limits.limits]
    return Checked(tuple(findings), error)


def evidence(limits: Limits, path: str = "", times: tuple[float, ...] | None = None) -> Evidence:
    """Return what is known of a result before a step is read."""
    regions = tuple(dict.fromkeys(limit.region for limit in limits.limits))
    return Evidence(path, Path(limits.path).absolute().parent, times, regions)


def needed_steps(limits: Limits, n: int) -> list[int]:
    """Return the steps that must be read of a series of n, in order."""
    every = any(PRECONDITIONS[key].every_step for key in limits.required)
    wanted = set(range(n)) if every else {n - 1}
    for limit in limits.limits:
        wanted.update(s for s in _steps_of(limit, n) if s < n)
    return sorted(wanted)


def _steps_of(limit: Limit, n: int) -> Sequence[int]:
    if limit.steps == "all":
        return range(n)
    return (n - 1,) if limit.steps == "last" else limit.steps


class _Run:
    """What is known after some of the steps."""

    def __init__(self, opened: Opened, limits: Limits, threads: int | None) -> None:
        self.opened, self.limits, self.threads = opened, limits, threads
        self.times = opened.steps
        self.n = 1 if self.times is None else len(self.times)
        if not self.n:
            raise InputError(f"{opened.path}: the series holds no step.")
        self.needed = needed_steps(limits, self.n)
        self.plain = [v for v in limits.limits if not STATISTICS[v.statistic].over_steps]
        self.over = OverSteps([v for v in limits.limits if STATISTICS[v.statistic].over_steps], self.times)
        self.measured: dict[str, list[Measured]] = {v.id: [] for v in limits.limits}
        self.seen = evidence(limits, opened.path, self.times)
        self.unusable: UnturnError | None = None
        self.motions: Sequence[RigidMotion] = ()
        self.options: StrainOptions | None = None
        self.zero: Result | None = None
        for limit in limits.limits:
            self._missing_steps(limit)

    def _missing_steps(self, limit: Limit) -> None:
        gone = [s for s in _steps_of(limit, self.n) if s >= self.n]
        steps = f"the result has {self.n} step{'s' * (self.n != 1)}, counted from 0"
        self.measured[limit.id] += [
            Measured(s, None, error=f"step {s} does not exist: {steps}") for s in gone
        ]

    def step(self, number: int) -> None:
        """Take one step."""
        time = None if self.times is None else self.times[number]
        wanting = [v for v in self.plain if number in _steps_of(v, self.n)]
        over = [v for v in self.over.limits if number in _steps_of(v, self.n)]
        if over:
            self.over.forget()
        try:
            step = self._read(number, time)
        except UnturnError as error:
            self._failed(number, time, error, [*wanting, *over])
            return
        self.motions = step.motions
        for limit, measured in zip(wanting, measure_all(step, wanting)):
            self.measured[limit.id].append(measured)
        self.over.add(step, over)
        self._take_evidence(step)

    def _read(self, number: int, time: float | None) -> Step:
        if self.options is None:
            self._prepare()
        assert self.options is not None
        result = self.opened.read(number)
        return Step(number, time, result, self.limits, self.options, self.zero, self.motions, self.threads)

    def _prepare(self) -> None:
        """Settle what holds for the whole series: the kind of a flat mesh, the zero step."""
        options, zero_step = self.limits.options, self.limits.zero_step
        if zero_step is not None:
            if self.times is None or zero_step >= self.n:
                raise UsageError(f"zero_step {zero_step}: the result has {self.n} step{'s' * (self.n != 1)}.")
            self.zero = self.opened.read(zero_step)
        if self.n > 1 and options.plane is None:
            options = settled(options, self.opened.read(self.n - 1))
        self.options = options

    def _failed(self, number: int, time: float | None, error: UnturnError, wanting: Iterable[Limit]) -> None:
        self.unusable = self.unusable or error
        self.seen.unread[number] = str(error)
        for limit in wanting:
            self.measured[limit.id].append(Measured(number, time, error=str(error)))

    def _take_evidence(self, step: Step) -> None:
        seen = self.seen
        seen.n_cells[step.number] = step.result.n_cells
        for reason, cells in step.base.fields.left_out.items():
            seen.left_out.setdefault(reason, (step.number, len(cells)))
        if "small_strain" in self.limits.required:
            wanted = self.limits.required["small_strain"]
            for region in wanted if isinstance(wanted, dict) else seen.regions:
                try:
                    seen.judged(region, step.verdict(region), step.number)
                except NoRegion as error:
                    seen.verdicts[region] = str(error)

    def finish(self) -> None:
        """Take what is of all steps together; the plus and minus of a range is that of the two steps that make it."""
        found = self.over.finish()
        reach = {r.limit.id: 0.0 for r in found}
        for number in sorted({s for r in found for s in r.steps}):
            here = [r for r in found if number in r.steps]
            step = self._read(number, None)
            asked = [(r.limit.quantity, r.limit.statistic == "tensor_range", r.cell) for r in here]
            for r, plus_minus in zip(here, plus_minus_at(step, asked)):
                reach[r.limit.id] += plus_minus
        for r in found:
            measured = replace(r.measured, plus_minus=reach[r.limit.id]) if r.steps else r.measured
            self.measured[r.limit.id].append(measured)

    def concluded(self, group: str, today: datetime.date) -> Checked:
        """Return every verdict."""
        findings = list(conditions(self.limits, self.seen, group))
        failed = [f.id for f in findings if f.state != "met"]
        stopped = f"the result is not what it must be: {', '.join(failed)}" if failed else ""
        for limit in self.limits.limits:
            findings.append(conclude(limit, group, self.measured[limit.id], today, stopped))
        return Checked(tuple(findings), self.unusable)


def conditions(limits: Limits, seen: Evidence, group: str) -> Iterable[Finding]:
    """Return the verdict on everything that the result must be."""
    for key, value in limits.required.items():
        row = PRECONDITIONS[key]
        if row.test is None:
            continue
        for tested in row.test(seen, value, limits.required):
            name = f"result/{key}" + (f"/{tested.part}" if tested.part else "")
            wanted = value[tested.part] if isinstance(value, dict) else value
            title = f"in {tested.part}: {row.words(wanted)}" if tested.part else row.words(value)
            yield Finding(
                name, group, title, "met" if tested.holds else "error", "" if tested.holds else tested.message,
                tested.value, tested.bound, unit=tested.unit, details={"required": value},
            )  # fmt: skip
