"""Steps of a series on the command line."""

from __future__ import annotations

from typing import TYPE_CHECKING

from unturn.errors import UsageError

if TYPE_CHECKING:
    from unturn.io import ResultFile


def chosen_step(opened: ResultFile, step: str, option: str = "--step") -> int:
    """Return the zero-based number of the step asked for.

    Raises
    ------
    UsageError
        Neither ``last`` nor ``all`` nor the number of a step that exists.
    """
    n = 1 if opened.steps is None else len(opened.steps)
    if step == "last":
        return n - 1
    try:
        number = int(step)
    except ValueError:
        raise UsageError(f"--step {step!r}: use 'last', 'all' or a number from 0 to {n - 1}.") from None
    if not 0 <= number < n:
        raise UsageError(
            f"{opened.path} has {n} step{'s' * (n != 1)}, 0 to {n - 1}; {option} {number} does not exist."
        )
    return number
