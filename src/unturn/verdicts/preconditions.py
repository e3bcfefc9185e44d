"""What a result must be before any limit counts: the table of conditions."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from unturn import toml_kinds as k
from unturn.io import files_behind
from unturn.verdict import Level, Verdict
from unturn.verdicts.finding import Bound

_LEVELS: tuple[Level, ...] = ("no strain", "holds", "marginal", "does not hold", "not judged")
_LEVEL = k.choice_kind(("holds", "marginal"))
_TIME = 1e-9  # relative: a last time is reached to rounding


@dataclass
class Evidence:
    """What was seen of a result.

    Attributes
    ----------
    path
        Of its file; empty for a result in memory.
    folder
        Of the limits file: names in it are relative to that.
    times
        Of its steps; None when it is no series.
    regions
        That limits are in.
    n_cells
        Of each step that was read.
    left_out
        Reason -> step and number of cells, the first step that has any.
    verdicts
        Region -> worst verdict on its small strain, and the step; or why it has none.
    unread
        Step and what went wrong, for each that could not be read.
    """

    path: str
    folder: Path
    times: tuple[float, ...] | None
    regions: tuple[str, ...] = ()
    n_cells: dict[int, int] = field(default_factory=dict)
    left_out: dict[str, tuple[int, int]] = field(default_factory=dict)
    verdicts: dict[str, tuple[Verdict, int] | str] = field(default_factory=dict)
    unread: dict[int, str] = field(default_factory=dict)

    def judged(self, region: str, verdict: Verdict, step: int) -> None:
        """Take the verdict on a region in a step."""
        before = self.verdicts.get(region)
        if isinstance(before, str):
            return
        if before is None or _LEVELS.index(verdict.level) > _LEVELS.index(before[0].level):
            self.verdicts[region] = (verdict, step)


@dataclass(frozen=True)
class Tested:
    """Whether a condition holds, why not, and the numbers; `part` tells several of one key apart."""

    holds: bool
    message: str = ""
    value: float | None = None
    bound: Bound = None
    unit: str = ""
    part: str = ""


@dataclass(frozen=True)
class Precondition:
    """One condition.

    Parameters
    ----------
    key
        As it is written.
    kind
        Of its value.
    meaning
        One line for people.
    words
        In words, from its value.
    test
        From the evidence, its value and the values of all keys; None for a key that belongs to another.
    every_step
        Whether every step must be looked at.
    belongs_to
        The key without which it says nothing.
    """

    key: str
    kind: k.Kind
    meaning: str
    words: Callable[[Any], str]
    test: Callable[[Evidence, Any, Mapping[str, Any]], Sequence[Tested]] | None
    every_step: bool = False
    belongs_to: str = ""


def _whole_file(seen: Evidence, value: bool, all_: Mapping[str, Any]) -> Sequence[Tested]:
    if not seen.unread:
        return [Tested(True)]
    step, said = next(iter(seen.unread.items()))
    return [Tested(False, f"step {step} cannot be used: {said}")]


def _steps(seen: Evidence, value: int, all_: Mapping[str, Any]) -> Sequence[Tested]:
    n = 1 if seen.times is None else len(seen.times)
    return [Tested(n == value, f"the file has {n} step{'s' * (n != 1)}, not {value}", n, (value, value))]


def _last_time(seen: Evidence, value: float, all_: Mapping[str, Any]) -> Sequence[Tested]:
    if not seen.times:
        return [Tested(False, "the file is not a series: it has no last time")]
    within = all_.get("last_time_within")
    low = value - (_TIME * abs(value) if within is None else within)
    last = seen.times[-1]
    ok = math.isfinite(last) and last >= low
    return [
        Tested(ok, f"the last step is at t = {last:.10g}: {value:.10g} was not reached", last, (low, None))
    ]


def _cells(seen: Evidence, value: int, all_: Mapping[str, Any]) -> Sequence[Tested]:
    within = (all_.get("cells_within_percent") or 0.0) / 100.0
    low, high = math.ceil(value * (1.0 - within) - 1e-9), math.floor(value * (1.0 + within) + 1e-9)
    if not seen.n_cells:
        return [Tested(False, "no step could be read")]
    step, worst = max(seen.n_cells.items(), key=lambda item: abs(item[1] - value))
    ok = low <= worst <= high
    return [Tested(ok, f"step {step} has {worst} cells, not {low} to {high}", worst, (low, high))]


def _newer_than(seen: Evidence, value: str, all_: Mapping[str, Any]) -> Sequence[Tested]:
    if not seen.path:
        return [Tested(False, "the result is in memory and has no age")]
    other = seen.folder / value
    try:
        older = other.stat().st_mtime_ns
        newer = min(p.stat().st_mtime_ns for p in (Path(seen.path), *files_behind(Path(seen.path))))
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or error
        return [Tested(False, f"the ages of the result and of {value} cannot be compared: {reason}")]
    return [Tested(newer > older, f"the result is not newer than {value}: it is of an earlier state")]


def _none_left_out(*reasons: str) -> Callable[[Evidence, Any, Mapping[str, Any]], Sequence[Tested]]:
    def test(seen: Evidence, value: bool, all_: Mapping[str, Any]) -> Sequence[Tested]:
        found = [(r, *seen.left_out[r]) for r in reasons if r in seen.left_out]
        said = "; ".join(f"step {step}: {n} cells ({reason})" for reason, step, n in found)
        return [Tested(not found, said, float(sum(n for *_, n in found)), 0.0)]

    return test


def _small_strain(seen: Evidence, value: Any, all_: Mapping[str, Any]) -> Sequence[Tested]:
    wanted = value if isinstance(value, dict) else dict.fromkeys(seen.regions, value)
    tested = []
    for region, level in wanted.items():
        found = seen.verdicts.get(region, "no step could be judged")
        if isinstance(found, str):
            tested.append(Tested(False, found, part=region))
            continue
        verdict, step = found
        ok = _LEVELS.index(verdict.level) <= _LEVELS.index(level)
        said = (
            f"step {step}: {verdict.level}; error up to {verdict.worst:.2%} of the strain. {verdict.action}"
        )
        tested.append(Tested(ok, said.strip(), part=region))
    return tested


PRECONDITIONS: dict[str, Precondition] = {
    row.key: row
    for row in (
        Precondition("whole_file", k.TRUE, "every step can be read and computed", lambda v: "every step can be used",
                     _whole_file, every_step=True),
        Precondition("steps", k.COUNT, "number of steps", lambda v: f"it has {v} steps", _steps),
        Precondition("last_time", k.NUMBER, "time that the last step must have reached",
                     lambda v: f"its last step reaches t = {v:g}", _last_time),
        Precondition("last_time_within", k.NOT_NEGATIVE, "how much earlier the last step may be; default: rounding",
                     lambda v: f"or at most {v:g} earlier", None, belongs_to="last_time"),
        Precondition("cells", k.COUNT, "number of cells of every step", lambda v: f"it has {v} cells", _cells),
        Precondition("cells_within_percent", k.number_kind("a number from 0 to below 100", lambda x: 0 <= x < 100),
                     "how far that number may be off, in percent; default: not at all", lambda v: f"or {v:g} % more or fewer",
                     None, belongs_to="cells"),
        Precondition("newer_than", k.TEXT, "a file, relative to the limits file, that the result must be newer than",
                     lambda v: f"it is newer than {v}", _newer_than),
        Precondition("small_strain", k.either_kind(_LEVEL, k.table_kind("a table of these by region", _LEVEL)),
                     "how well the small strain must hold in every region that a limit names, or by region",
                     lambda v: "its small strain is " + (f"{v} or better" if isinstance(v, str) else ", ".join(
                         f"{level} or better in {name}" for name, level in v.items())), _small_strain, every_step=True),
        Precondition("no_nan", k.TRUE, "no cell without value because coordinates or displacement are not finite",
                     lambda v: "no displacement or coordinate is NaN",
                     _none_left_out("displacement not finite", "coordinates not finite"), every_step=True),
        Precondition("no_tangled", k.TRUE, "no cell is tangled or without volume", lambda v: "no cell is tangled",
                     _none_left_out("tangled", "no volume"), every_step=True),
    )
}  # fmt: skip
"""Every condition; those without a test belong to the one before them."""
