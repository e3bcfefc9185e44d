"""Assertions on results for tests: what is found is told in the message."""

from __future__ import annotations

import datetime
from dataclasses import replace
from os import PathLike, fspath
from pathlib import Path
from typing import Any

from unturn import io
from unturn.errors import UsageError
from unturn.result import Result
from unturn.verdicts.check import InMemory, check_result
from unturn.verdicts.comparison import compare, compare_files
from unturn.verdicts.finding import Report
from unturn.verdicts.read_limits import read_limits
from unturn.verdicts.writers import text_report

__all__ = ["assert_limits", "assert_results_close"]

Given = Result | str | PathLike[str]


def assert_limits(
    result: Result | str | PathLike[str],
    limits: str | PathLike[str],
    *,
    allow_undecided: bool = False,
    today: datetime.date | None = None,
    threads: int | None = None,
) -> None:
    """Pass only when every limit of a limits file was tested on a result and none is exceeded or undecided.

    Parameters
    ----------
    result
        A result, or the path of a result file with all its steps.
    limits
        Path of a limits file (docs/limits.md).
    allow_undecided
        Whether what is undecided passes.
    today
        Day on which waivers are judged; None: the date of the system.
    threads
        None: all processors.

    Raises
    ------
    AssertionError
        A limit is exceeded, undecided or was not tested; the message names each with value, bound,
        margin and place.
    UsageError
        The limits file cannot be right.
    InputError
        The result cannot be used.

    Examples
    --------
    >>> import tempfile
    >>> import numpy as np
    >>> from unturn import CellBlock, Result
    >>> points = np.array([[0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1.0]])
    >>> pulled = Result(points, (CellBlock("tetra", np.array([[0, 1, 2, 3]]), np.array([0])),), {"u": points * 1e-3})
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     _ = Path(folder, "limits.toml").write_text('''
    ...         schema = "unturn.limits/1"
    ...         number_of_limits = 1
    ...         [[limits]]
    ...         id = "pull"
    ...         measure = "strain"
    ...         component = "XX"
    ...         statistic = "maximum"
    ...         at_most = 1200
    ...         unit = "microstrain"
    ...         reason = "example"
    ...         source = "invented"
    ...     ''')
    ...     assert_limits(pulled, Path(folder, "limits.toml"))
    """
    read = read_limits(Path(limits))
    if isinstance(result, Result):
        name, opened = result.path or "result", InMemory(result, result.path)
        checked = check_result(opened, read, name, today=today, threads=threads)
    else:
        name = fspath(result)
        checked = check_result(io.open_result(result), read, name, today=today, threads=threads)
    if checked.unusable is not None:
        raise checked.unusable
    _assert_passed(Report("check", checked.findings, allow_undecided=allow_undecided))


def assert_results_close(result: Given, reference: Given, **options: Any) -> None:
    """Fail unless a result is within tolerance of its reference.

    Parameters
    ----------
    result, reference
        Two results in memory, or the paths of two files.
    **options
        Those of `unturn.compare`: ``absolute``, ``relative``, ``tolerances``, ``arrays``, ``measures`` ...; for files also
        ``step``: ``"last"``, ``"all"`` or a number.

    Raises
    ------
    AssertionError
        Something is beyond tolerance or undecided; the message names every such array with region, difference, tolerance
        and place.
    UsageError
        A file and a result in memory are mixed, or options that do not fit.
    InputError
        A result that cannot be used.

    Examples
    --------
    >>> import numpy as np
    >>> from unturn import CellBlock, Result
    >>> points = np.array([[0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1.0]])
    >>> block = CellBlock("tetra", np.array([[0, 1, 2, 3]]), np.array([0]))
    >>> old, new = (Result(points, (block,), {"u": points * x}) for x in (1e-3, 1.02e-3))
    >>> assert_results_close(new, old, relative=0.03)
    """
    if isinstance(result, Result) and isinstance(reference, Result):
        _assert_passed(compare(result, reference, **options).report)
    elif isinstance(result, Result) or isinstance(reference, Result):
        raise UsageError(
            "give two results in memory, or the paths of two files; unturn.read makes a result of a file."
        )
    else:
        _assert_passed(compare_files(result, reference, **options))


def _assert_passed(report: Report) -> None:
    """Raise an AssertionError with every finding that does not pass."""
    failed = tuple(f for f in report.findings if not f.passes(report.allow_undecided))
    if failed:
        others = len(report.findings) - len(failed)
        notes = (*report.notes, f"{others} more findings pass") if others else report.notes
        raise AssertionError("\n" + text_report(replace(report, findings=failed, notes=notes)))
