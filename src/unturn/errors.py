"""The errors that unturn raises on purpose.

::

    UnturnError            exit status 70: a fault of ours when raised bare
    ├── UsageError         exit status 2: the request cannot be right
    ├── InputError         exit status 3: the input cannot be used
    │   └── DisplacementError      no displacement, or more than one candidate
    └── MissingExtraError  exit status 2: an optional package is not installed

Each message is one paragraph: what is wrong, where (file, array, cell), and what to do.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable


class UnturnError(Exception):
    """Base of every error raised on purpose; `exit_status` is what the command line returns."""

    exit_status = 70


class UsageError(UnturnError):
    """The request cannot be right: wrong option, wrong combination, unknown name."""

    exit_status = 2


class InputError(UnturnError):
    """The input cannot be used: unreadable, incomplete, no displacement, no computable element."""

    exit_status = 3


class DisplacementError(InputError):
    """No displacement array, or several candidates and none chosen."""


class MissingExtraError(UsageError):
    """An optional package or a system library is missing; the message names what to install."""


def close_matches(name: str, known: Iterable[str]) -> str:
    """Return `` Did you mean 'x' or 'y'?`` for an unknown name, or an empty string.

    Parameters
    ----------
    name
        What was asked for.
    known
        The names that exist.

    Examples
    --------
    >>> close_matches("strian", ["strain", "rotation"])
    " Did you mean 'strain'?"
    >>> close_matches("pressure", ["strain", "rotation"])
    ''
    """
    by_folded = {k.casefold(): k for k in known}
    found = difflib.get_close_matches(name.casefold(), list(by_folded), n=3, cutoff=0.6)
    if not found:
        return ""
    return " Did you mean " + " or ".join(repr(by_folded[f]) for f in found) + "?"
