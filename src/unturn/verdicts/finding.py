"""One limit or tolerance and what was found; and all findings of one run."""

from __future__ import annotations

import hashlib
import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Literal, TypedDict, get_args

from unturn.errors import InputError, UnturnError, UsageError

State = Literal["met", "warning", "undecided", "exceeded", "waived", "error"]
STATES: tuple[State, ...] = get_args(State)
WORST_FIRST: tuple[State, ...] = ("error", "exceeded", "undecided", "warning", "waived", "met")
"""The order in which people read findings."""

Bound = float | tuple[float | None, float | None] | None
_CHUNK = 1 << 20


class Place(TypedDict, total=False):
    """Where a value was found; every key may be missing.

    ``cell`` and ``point`` are zero-based positions in the file, ``element`` and ``node`` the solver's own numbers, ``at``
    the coordinates, ``step`` a zero-based position and ``time`` its value.
    """

    cell: int | None
    element: int | None
    point: int | None
    node: int | None
    at: tuple[float, float, float] | None
    step: int | None
    time: float | None


@dataclass(frozen=True)
class Finding:
    """One limit or tolerance and what was found.

    Parameters
    ----------
    id
        Stable name, unique in its group.
    group
        What it belongs to: the result file's name.
    title
        In words: ``equivalent strain, largest in casting, centroids``.
    state
        ``met``; ``warning``: met, and beyond a warning level; ``undecided``; ``exceeded``; ``waived``; ``error``: not
        tested.
    message
        One sentence why, for people; empty when plainly met.
    value
        What was found, in `unit`.
    bound
        In `unit`: the largest value that is met, or the pair (smallest, largest), either of which may be None.
    margin
        What is left up to the bound, in `unit`; negative beyond it. None: worked out from value and bound.
    plus_minus
        How far the value may be off, in `unit`.
    unit
        ``microstrain``, ``strain``, ``percent``, ``degree``, ``radian`` ...; empty for a plain number.
    place
        Where the value was found.
    details
        Further plain data for JSON: reason, source, waiver ...

    Raises
    ------
    UnturnError
        It says met, or warning, of a value that is not within its bound: a fault of ours.

    Examples
    --------
    >>> Finding("peak", "foot.vtu", "largest strain", "met", value=870.0, bound=1000.0, unit="microstrain").margin
    130.0
    """

    id: str
    group: str
    title: str
    state: State
    message: str = ""
    value: float | None = None
    bound: Bound = None
    margin: float | None = None
    plus_minus: float | None = None
    unit: str = ""
    place: Place = field(default_factory=Place)
    details: Mapping[str, Any] = field(default_factory=dict)

    def __post_init__(self) -> None:
        if self.state not in STATES:
            raise UnturnError(f"finding {self.id!r}: there is no state {self.state!r}.")
        if self.state in ("met", "warning") and not self._within():
            raise UnturnError(
                f"finding {self.id!r} says {self.state} of the value {self.value!r}, which is not within {self.bound!r}."
            )
        if self.margin is None:
            object.__setattr__(self, "margin", self._room())

    @property
    def low(self) -> float | None:
        """The smallest value that is met, or None."""
        return self.bound[0] if isinstance(self.bound, tuple) else None

    @property
    def high(self) -> float | None:
        """The largest value that is met, or None."""
        return self.bound[1] if isinstance(self.bound, tuple) else self.bound

    def passes(self, allow_undecided: bool = False) -> bool:
        """Whether a build may go on with it."""
        return self.state in ("met", "warning", "waived") or (allow_undecided and self.state == "undecided")

    def _within(self) -> bool:
        if self.value is None:
            return True
        over = self.high is not None and not self.value <= self.high
        under = self.low is not None and not self.value >= self.low
        return not (over or under or math.isnan(self.value))

    def _room(self) -> float | None:
        if self.value is None:
            return None
        rooms = [self.high - self.value] if self.high is not None else []
        rooms += [self.value - self.low] if self.low is not None else []
        return min(rooms, default=None)


@dataclass(frozen=True)
class InputFile:
    """A file that a verdict rests on: what it was for, its path as given, and its SHA-256 (empty: in memory)."""

    role: str
    path: str
    sha256: str


def hashed_file(role: str, path: Path | str) -> InputFile:
    """Return the record of an input file with its SHA-256.

    Raises
    ------
    InputError
        It cannot be read.
    """
    digest = hashlib.sha256()
    try:
        with open(path, "rb") as file:
            while chunk := file.read(_CHUNK):
                digest.update(chunk)
    except (OSError, ValueError) as error:
        raise InputError(f"{path}: {getattr(error, 'strerror', None) or error}.") from None
    return InputFile(role, str(path), digest.hexdigest())


@dataclass(frozen=True)
class Report:
    """All findings of one run.

    Parameters
    ----------
    command
        ``check``, ``compare`` or ``patchtest``.
    findings
        In the order in which they were asked for.
    inputs
        The files behind them.
    allow_undecided
        Whether a build may go on with what is undecided.
    notes
        Sentences for the reader, beside the findings.
    settings
        Plain data for JSON: what was asked for.
    timestamp
        ISO 8601, only if it was given: the same input otherwise gives the same bytes.

    Raises
    ------
    UsageError
        Nothing was tested: that must never look like a result that is in order.
    UnturnError
        Two findings of one group have the same id: a fault of ours.
    """

    command: str
    findings: tuple[Finding, ...]
    inputs: tuple[InputFile, ...] = ()
    allow_undecided: bool = False
    notes: tuple[str, ...] = ()
    settings: Mapping[str, Any] = field(default_factory=dict)
    timestamp: str | None = None

    def __post_init__(self) -> None:
        if not self.findings:
            raise UsageError(f"unturn {self.command}: nothing was tested, so nothing is met.")
        names = [(f.group, f.id) for f in self.findings]
        if len(set(names)) < len(names):
            twice = next(n for n in names if names.count(n) > 1)
            raise UnturnError(f"two findings of {twice[0]!r} are called {twice[1]!r}.")

    @property
    def counts(self) -> dict[State, int]:
        """How many findings have each state, worst first; only those that occur."""
        found = [f.state for f in self.findings]
        return {s: found.count(s) for s in WORST_FIRST if s in found}

    @property
    def passed(self) -> bool:
        """Whether a build may go on."""
        return all(f.passes(self.allow_undecided) for f in self.findings)

    @property
    def exit_status(self) -> int:
        """0 when everything passes, else 1."""
        return 0 if self.passed else 1

    @property
    def groups(self) -> dict[str, list[Finding]]:
        """Findings by group, each group worst first and then in the order in which they were asked for."""
        found: dict[str, list[Finding]] = {}
        for finding in self.findings:
            found.setdefault(finding.group, []).append(finding)
        return {g: sorted(fs, key=lambda f: WORST_FIRST.index(f.state)) for g, fs in found.items()}
