"""Two result files compared: which steps belong together, and what all of them come to."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from typing import Literal

from unturn.errors import InputError, UsageError
from unturn.io import ResultFile
from unturn.pipeline import settled
from unturn.result import Result
from unturn.verdicts.compare import Compared, CompareOptions, compare_states
from unturn.verdicts.finding import WORST_FIRST, Finding, Place
from unturn.verdicts.overlay import Overlay
from unturn.verdicts.wording import number, short_name

Step = Literal["last", "all"] | int
_SAME_TIME = 1e-6
"""Share of the time of the series within which two steps have the same time."""
_MOST_NAMED = 5


@dataclass(frozen=True)
class StepPair:
    """The positions of a step in both files, and its time in the reference (None: no series)."""

    ours: int
    theirs: int
    time: float | None


@dataclass(frozen=True)
class SeriesCompared:
    """What the comparison of all steps found: of each thing the worst step, and sentences for the reader."""

    findings: tuple[Finding, ...]
    notes: tuple[str, ...]


def paired_steps(
    result: ResultFile, reference: ResultFile, step: Step
) -> tuple[list[StepPair], list[Finding]]:
    """Return the steps that belong together, and findings on those that do not.

    Parameters
    ----------
    result, reference
        As opened.
    step
        ``last``, ``all`` (matched by their times) or a zero-based number in both.

    Raises
    ------
    UsageError
        There is no such step, or one of the files is no series.
    """
    ours, theirs = result.steps, reference.steps
    group = short_name(result.path)
    if step == "all" and ours is not None and theirs is not None:
        return _by_time(group, ours, theirs)
    if step == "all" and (ours is None) is not (theirs is None):
        lone = result if ours is None else reference
        raise UsageError(
            f"{lone.path} is no series, and the other file is: compare one step of it with --step N."
        )
    pair = StepPair(_position(result, step), _position(reference, step), None)
    if theirs is None and ours is None:
        return [pair], []
    title = "the same step is compared"
    if ours is None or theirs is None:
        words = "the result is no series" if ours is None else "the reference is no series"
        return [pair], [Finding("steps", group, title, "warning", f"{words}: its one state is compared")]
    pair = replace(pair, time=theirs[pair.theirs])
    at, meant = ours[pair.ours], theirs[pair.theirs]
    found: dict[str, object] = {"steps": len(ours), "reference_steps": len(theirs)}
    if abs(at - meant) <= _tolerance(theirs):
        message = "" if len(ours) == len(theirs) else f"{len(ours)} steps; {len(theirs)} in the reference"
        return [pair], [Finding("steps", group, title, "met", message, details=found)]
    message = (
        f"step {pair.ours} has t = {number(at, digits=17)}; step {pair.theirs} of the reference t = "
        f"{number(meant, digits=17)}: another state, or a series that is not finished"
    )
    return [pair], [Finding("steps", group, title, "exceeded", message, details=found)]


def _position(opened: ResultFile, step: Step) -> int:
    n = 1 if opened.steps is None else len(opened.steps)
    if isinstance(step, str):
        return n - 1
    if not 0 <= step < n:
        raise UsageError(
            f"{opened.path} has {n} step{'s' * (n != 1)}, 0 to {n - 1}; step {step} does not exist."
        )
    return step


def _tolerance(times: Sequence[float]) -> float:
    return _SAME_TIME * max(max(times) - min(times), max(map(abs, times)) * 1e-3)


def _by_time(
    group: str, ours: Sequence[float], theirs: Sequence[float]
) -> tuple[list[StepPair], list[Finding]]:
    tolerance = _tolerance(theirs)
    pairs, missing, taken = [], [], set()
    for position, time in enumerate(theirs):
        nearest = min(range(len(ours)), key=lambda k, t=time: abs(ours[k] - t))  # type: ignore[misc]
        if abs(ours[nearest] - time) <= tolerance and nearest not in taken:
            pairs.append(StepPair(nearest, position, time))
            taken.add(nearest)
        else:
            missing.append(position)
    new = [k for k in range(len(ours)) if k not in taken]
    sentences = []
    if missing:
        sentences.append(f"the result has no step at {_times(theirs, missing)}")
    if new:
        sentences.append(
            f"the result has steps that the reference has not, at {_times(ours, new)}: they are not compared"
        )
    state: Literal["met", "warning", "exceeded"] = "exceeded" if missing else "warning" if new else "met"
    details = {"steps": len(ours), "reference_steps": len(theirs), "compared": len(pairs)}
    title = "every step of the reference is compared"
    return pairs, [Finding("steps", group, title, state, "; ".join(sentences), details=details)]


def _times(times: Sequence[float], which: Sequence[int]) -> str:
    named = ", ".join(number(times[k], digits=17) for k in which[:_MOST_NAMED])
    more = len(which) - _MOST_NAMED
    return f"t = {named}" + (f" and {more} more" if more > 0 else "")


def compare_opened(
    result: ResultFile,
    reference: ResultFile,
    step: Step,
    options: CompareOptions,
    keep: Callable[[Result, float | None], None] = lambda result, time: None,
) -> SeriesCompared:
    """Return what the comparison of two files found.

    Parameters
    ----------
    result, reference
        As opened.
    step
        See `paired_steps`.
    options
        What is compared.
    keep
        Takes the reference with the differences of each step, as it comes, and its time.

    Raises
    ------
    UsageError, InputError
        See `compare_states`; the message names the step.
    """
    pairs, found = paired_steps(result, reference, step)
    if not pairs:
        return SeriesCompared(tuple(found), ())
    if len(pairs) > 1 and options.measures:
        last = reference.read(pairs[-1].theirs)
        options = replace(options, strain=settled(options.strain, last))
        del last  # one step in memory at a time
    worst: dict[str, Finding] = {}
    failing: dict[str, list[int]] = {}
    notes: dict[str, None] = {}
    overlay: Overlay | None = None
    for pair in pairs:
        compared = _one(result, reference, pair, options, overlay)
        overlay = compared.overlay
        notes.update(dict.fromkeys(compared.notes))
        for finding in _at_step(compared.findings, pair):
            if not finding.passes():
                failing.setdefault(finding.id, []).append(pair.theirs)
            if finding.id not in worst or _severity(finding) > _severity(worst[finding.id]):
                worst[finding.id] = finding
        keep(compared.differences, pair.time)
    if len(pairs) > 1:
        told = [
            replace(f, details={**f.details, "steps_not_met": failing.get(f.id, [])}) for f in worst.values()
        ]
    else:
        told = list(worst.values())
    return SeriesCompared((*found, *told), tuple(notes))


def _one(
    result: ResultFile, reference: ResultFile, pair: StepPair, options: CompareOptions, before: Overlay | None
) -> Compared:
    try:
        return compare_states(result.read(pair.ours), reference.read(pair.theirs), options, before)
    except (InputError, UsageError) as error:
        if pair.time is None:
            raise
        raise type(error)(f"at t = {number(pair.time, digits=17)}: {error}") from error


def _at_step(findings: Sequence[Finding], pair: StepPair) -> Iterator[Finding]:
    for finding in findings:
        if pair.time is None or not (finding.value is not None or finding.place):
            yield finding
            continue
        place: Place = {**finding.place, "step": pair.theirs, "time": pair.time}
        yield replace(finding, place=place)


def _severity(f: Finding) -> tuple[int, float]:
    """Return how bad a finding is: its state, then its value against its bound."""
    ratio = 0.0
    if f.value is not None and f.high is not None:
        ratio = f.value / f.high if f.high > 0 else (math.inf if f.value > 0 else 0.0)
    return -WORST_FIRST.index(f.state), ratio
