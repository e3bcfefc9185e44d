"""The files that an index file rests on: what a hash of a result must cover too."""

from __future__ import annotations

import re
from pathlib import Path

from unturn.errors import InputError
from unturn.io._formats import format_of_file

_INDEXES = ("XDMF", "PVD", "PVTU", "VTM")
_MOST = 1 << 26
_NAMES = re.compile(r""""([^"<>]{1,500})"|'([^'<>]{1,500})'|>\s*([^<>]{1,500}?)\s*<""")


def files_behind(path: Path) -> list[Path]:
    """Return the files that a result file names, and those that these name, in the order of the text.

    Parameters
    ----------
    path
        A result file that exists. One that is no index has none.

    Notes
    -----
    Every name in quotes or between tags that is a file beside the index counts; of ``name.h5:/group`` what stands before
    the colon.
    """
    found: list[Path] = []
    waiting = [path]
    seen = {path.resolve()}
    while waiting:
        for file in _named(waiting.pop(0)):
            if file.resolve() not in seen:
                seen.add(file.resolve())
                found.append(file)
                waiting.append(file)
    return found


def _named(path: Path) -> list[Path]:
    if path.stat().st_size > _MOST or not _is_index(path):
        return []
    text = path.read_text(encoding="utf-8", errors="replace")
    found = []
    for match in _NAMES.finditer(text):
        name = next(g for g in match.groups() if g is not None).strip().replace("\\", "/")
        for candidate in (name, name.rpartition(":")[0]):
            if _is_file(path.parent / candidate) and candidate:
                found.append(path.parent / candidate)
                break
    return found


def _is_index(path: Path) -> bool:
    try:
        return format_of_file(path).name in _INDEXES
    except InputError:
        return False


def _is_file(path: Path) -> bool:
    try:
        return path.is_file()
    except (OSError, ValueError):
        return False
