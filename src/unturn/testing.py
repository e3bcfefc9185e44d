"""For tests of results: assertions whose messages say what is exceeded, by how much and where."""

from __future__ import annotations

import datetime
from os import PathLike, fspath
from pathlib import Path

from unturn import io
from unturn.result import Result
from unturn.verdicts.check import InMemory, check_result
from unturn.verdicts.finding import Report
from unturn.verdicts.read_limits import read_limits
from unturn.verdicts.writers import text_report


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
        A limit is exceeded, undecided or was not tested; the message is what ``unturn check`` prints.
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
    report = Report("check", checked.findings, allow_undecided=allow_undecided)
    if not report.passed:
        raise AssertionError(f"{name} does not meet {read.path}\n{text_report(report)}")
