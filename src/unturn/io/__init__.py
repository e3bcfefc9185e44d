"""Files in, files out. Readers and writers know no mechanics; node reordering happens only here."""

from __future__ import annotations

import contextlib
import os
from collections.abc import Iterator
from dataclasses import replace
from os import PathLike
from pathlib import Path
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unturn.errors import InputError, UnturnError, UsageError
from unturn.io._atomic import ensure_room, replacing
from unturn.io._behind import files_behind
from unturn.io._format import Format, ResultFile, StepWriter
from unturn.io._formats import FORMATS, format_for_writing, format_of_file, writable_suffix
from unturn.io._readback import check_same
from unturn.result import Result

__all__ = [
    "FORMATS",
    "Format",
    "ResultFile",
    "StepWriter",
    "check_target",
    "files_behind",
    "open_result",
    "read",
    "series_writer",
    "with_points",
    "writable_suffix",
    "write",
]


def open_result(path: str | PathLike[str]) -> ResultFile:
    """Return an opened result file of any known format; nothing of size is read yet.

    Parameters
    ----------
    path
        The file. Its content decides the format, its suffix where the content does not tell.

    Raises
    ------
    InputError
        No such file, a folder, empty, not readable, or of no known format.
    """
    place = Path(path)
    try:
        os.fspath(place).encode()
    except UnicodeEncodeError:
        raise InputError(
            f"{os.fspath(place)!a}: the name is not UTF-8, which the readers need; rename it."
        ) from None
    try:
        if place.is_dir():
            raise InputError(f"{path} is a folder; give the name of the result file in it.")
        if not place.is_file():
            place.stat()
            raise InputError(f"{path} is not a regular file; give the name of a result file.")
        if place.stat().st_size == 0:
            raise InputError(
                f"{path} is empty (0 bytes). The program that writes it did not finish: run it again."
            )
        fmt = format_of_file(place)
    except FileNotFoundError:
        raise InputError(f"{path}: there is no such file. Check the name and the folder.") from None
    except OSError as error:
        raise InputError(f"{path} cannot be read: {error.strerror}. Check its permissions.") from error
    return fmt.open(place)


def read(path: str | PathLike[str], step: Literal["last"] | int = "last") -> Result:
    """Return one step of a result file.

    Parameters
    ----------
    path
        The file.
    step
        Zero-based position of the step, or ``"last"``.

    Raises
    ------
    InputError
        The file cannot be read right; the message says what is wrong, where, and what to do.
    UsageError
        There is no such step.
    """
    opened = open_result(path)
    n_steps = 1 if opened.steps is None else len(opened.steps)
    number = n_steps - 1 if step == "last" else step
    if not isinstance(number, int):
        raise UsageError(f"step={step!r} is not known; use 'last' or a number from 0 to {n_steps - 1}.")
    if not 0 <= number < n_steps:
        raise UsageError(
            f"{path} has no step {step}: it has {n_steps} step{'s' * (n_steps != 1)}, 0 to {n_steps - 1}."
        )
    return opened.read(number)


def check_target(path: str | PathLike[str], *, series: bool = False) -> None:
    """Refuse a place that no result can be written to, before anything is computed.

    Raises
    ------
    UsageError
        The format is not written here, the place is a folder, or its folder does not exist or may not be written to.
    """
    target = Path(path)
    format_for_writing(target, series=series)
    with contextlib.suppress(_Nothing), replacing(target):
        raise _Nothing


class _Nothing(Exception):
    """Leaves a place as it was."""


def with_points(before: Result, after: Result, point: NDArray[np.int64]) -> Result:
    """Return `after` such that it is written as completely as `before`, from which it differs by duplicated points.

    Parameters
    ----------
    before
        As read.
    after
        The same cells in the same order and the same arrays.
    point
        `(n,)` position in `before` of each point of `after`.
    """
    if not hasattr(before.carrier, "GetPointData"):
        return after
    from unturn.io.vtk_points import grid_with_points

    return replace(after, carrier=grid_with_points(before.carrier, after, point))


def write(result: Result, path: str | PathLike[str]) -> tuple[str, ...]:
    """Write a result whole or not at all, and return sentences on what the format could not hold.

    The file is written beside its target, read back, compared bit for bit, and only then put in place.

    Parameters
    ----------
    result
        What to write.
    path
        The target; its suffix decides the format. What was there before stays until the new file is complete.

    Raises
    ------
    UsageError
        The format is not written here, or the place cannot be written to.

    Examples
    --------
    >>> import tempfile
    >>> import numpy as np
    >>> from unturn.result import CellBlock
    >>> points = np.array([[0.0, 0, 0], [1, 0, 0], [0, 1, 0]])
    >>> cells = CellBlock("triangle", np.array([[0, 1, 2]]), np.array([0]))
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     lost = write(Result(points, (cells,), {"u": 0.1 * points}), f"{folder}/plate.vtu")
    ...     found = read(f"{folder}/plate.vtu")
    >>> lost, found.format_name, list(found.point_data)
    ((), 'VTU', ['u'])
    """
    target = Path(path)
    fmt = format_for_writing(target)
    assert fmt.write is not None
    with replacing(target) as work:
        ensure_room(work, _size(result))
        lost = fmt.write(result, work)
        check_same(result, _again(fmt, work), lost)
    return lost


def _again(fmt: Format, work: Path, step: int = 0) -> Result:
    """Return what was just written, read back."""
    try:
        return fmt.open(work).read(step)
    except InputError as error:
        said = str(error).replace(str(work), work.name)
        raise UnturnError(
            f"what was written cannot be read back ({said}), so it was not put in place and what was there before is "
            "unchanged. Write another format, and report this as a fault."
        ) from error


def _size(result: Result) -> int:
    """Return about how many bytes a result takes in a file, rather too many."""
    arrays = [
        result.points,
        *result.point_data.values(),
        *result.cell_data.values(),
        *result.field_data.values(),
    ]
    cells = sum(b.connectivity.nbytes + 16 * len(b) for b in result.blocks)
    return cells + sum(a.nbytes + 4096 for a in arrays)


@contextlib.contextmanager
def series_writer(path: str | PathLike[str]) -> Iterator[StepWriter]:
    """Return a context manager that writes a series step by step and puts it in place when it is complete.

    Each step is read back and compared bit for bit as soon as it is written; one step is held at a time.

    Parameters
    ----------
    path
        The target; its suffix decides the format.

    Raises
    ------
    UsageError
        The format holds no series, no step was added, or the place cannot be written to.
    """
    target = Path(path)
    fmt = format_for_writing(target, series=True)
    assert fmt.write_series is not None
    with replacing(target) as work:
        writer = _CheckedSeries(fmt, fmt.write_series(work), work)
        try:
            yield writer
        finally:
            writer.close()
        if not writer.n_steps:
            raise UsageError(f"{path}: a series needs at least one step; nothing was written.")


class _CheckedSeries:
    """Passes steps on to a format's writer and reads each of them back."""

    def __init__(self, fmt: Format, inner: StepWriter, work: Path) -> None:
        self._fmt, self._inner, self._work = fmt, inner, work
        self.n_steps = 0

    @property
    def lost(self) -> tuple[str, ...]:
        """What the format could not hold, so far."""
        return self._inner.lost

    def add(self, result: Result, value: float) -> None:
        """Write one step and prove that it is in the file."""
        ensure_room(self._work, _size(result))
        self._inner.add(result, value)
        check_same(result, _again(self._fmt, self._work, self.n_steps), self._inner.lost)
        self.n_steps += 1

    def close(self) -> None:
        """Finish the file."""
        self._inner.close()
