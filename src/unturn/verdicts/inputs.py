"""The files that a verdict rests on, with what lies behind them: the numbers beside an index, the pieces of a series."""

from __future__ import annotations

import hashlib
from pathlib import Path

from unturn.io import files_behind
from unturn.verdicts.finding import InputFile, hashed_file

_MOST_LISTED = 4


def hashed_inputs(role: str, path: Path | str) -> tuple[InputFile, ...]:
    """Return the records of a result file and of the files its numbers lie in, each with its SHA-256.

    Parameters
    ----------
    role
        What the file is for: ``result``, ``reference``.
    path
        The file. Behind an index (XDMF, PVD, PVTU, VTM ...) lie the files that it names; more than four of them are one
        record, whose hash is that of their names and hashes.

    Raises
    ------
    InputError
        A file cannot be read.
    """
    main = hashed_file(role, path)
    behind = [hashed_file(f"{role} data", p) for p in files_behind(Path(path))]
    if len(behind) <= _MOST_LISTED:
        return (main, *behind)
    lines = "".join(f"{f.sha256}  {Path(f.path).name}\n" for f in behind)
    digest = hashlib.sha256(lines.encode(errors="surrogateescape")).hexdigest()
    return main, InputFile(f"{role} data", f"{len(behind)} files that {main.path} names", digest)
