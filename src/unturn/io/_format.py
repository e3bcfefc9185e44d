"""What every file format offers: the record behind the FORMATS table."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Protocol

from unturn.errors import UsageError
from unturn.result import Result


class ResultFile(Protocol):
    """An opened result file; nothing of size is read before `read`.

    Attributes
    ----------
    path
        As given by the user.
    format_name
        Name in the FORMATS table.
    steps
        The value (time, frequency ...) of each step, in file order; None when the file is not a series.
    """

    path: str
    format_name: str
    steps: tuple[float, ...] | None

    def read(self, step: int = 0) -> Result:
        """Read one step (zero-based; 0 when the file is not a series)."""
        ...


def check_step_value(value: float, known: Iterable[float]) -> None:
    """Refuse a step value that is not finite or was used before.

    Raises
    ------
    UsageError
        It cannot tell the step from others.
    """
    if not math.isfinite(value) or value in known:
        raise UsageError(f"each step of a series needs its own finite value; {value!r} cannot be used.")


class StepWriter(Protocol):
    """Writes a series step by step into `path`; the caller renames the finished file into place.

    The files are complete and closed after each step, so that the step can be read back.

    Attributes
    ----------
    lost
        Sentences on what the format could not hold so far; each names its array in quotes.
    """

    @property
    def lost(self) -> tuple[str, ...]: ...

    def add(self, result: Result, value: float) -> None:
        """Write one step; only this step is held in memory."""
        ...

    def close(self) -> None:
        """Finish the file."""
        ...


@dataclass(frozen=True)
class Format:
    """One file format.

    Parameters
    ----------
    name
        Short name for people: ``VTU``, ``XDMF`` ...
    suffixes
        Lower-case file suffixes with the dot.
    open
        Opens a file for reading; raises `InputError` for anything it cannot read right.
    write
        Writes a result to a path, not atomically (the caller does that), and returns sentences on what the
        format could not hold; each names its array in quotes. None: reading only.
    write_series
        Opens a `StepWriter`. None: no series.
    """

    name: str
    suffixes: tuple[str, ...]
    open: Callable[[Path], ResultFile]
    write: Callable[[Result, Path], tuple[str, ...]] | None = None
    write_series: Callable[[Path], StepWriter] | None = None
