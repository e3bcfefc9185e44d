"""The solver's node numbers of mesh files, which meshio leaves out."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from unturn.errors import InputError
from unturn.result import Array


def _inp(lines: Iterator[str]) -> Iterator[int]:
    """Yield the first number of each line under ``*NODE``."""
    inside = False
    for line in lines:
        text = line.strip()
        if text.startswith("*"):
            inside = inside and text.startswith("**")
            keyword = text.lstrip("*").split(",")[0].strip().upper()
            if not text.startswith("**"):
                inside = keyword == "NODE"
        elif inside and text:
            yield int(text.split(",")[0])


def _nastran(lines: Iterator[str]) -> Iterator[int]:
    """Yield the number of each GRID card, free, short or long."""
    for line in lines:
        head = line[:8].upper()
        if not head.startswith("GRID"):
            continue
        if "," in line:
            yield int(line.split(",")[1])
        else:
            yield int(line[8:24] if head.rstrip().endswith("*") else line[8:16])


def _avs(lines: Iterator[str]) -> Iterator[int]:
    """Yield the first number of each node line."""
    rows = (line for line in lines if line.strip() and not line.lstrip().startswith("#"))
    for _ in range(int(next(rows).split()[0])):
        yield int(next(rows).split()[0])


_Read = Callable[[Path, Array], NDArray[np.int64]]


def _numbers(parse: Callable[[Iterator[str]], Iterator[int]]) -> _Read:
    def read(path: Path, points: Array) -> NDArray[np.int64]:
        try:
            with path.open(encoding="utf-8", errors="replace") as stream:
                numbers = np.array(list(parse(iter(stream))), np.int64)
        except (ValueError, IndexError, StopIteration, RuntimeError, OverflowError, OSError) as error:
            raise InputError(f"{path}: the node numbers cannot be read ({error}).") from error
        if len(numbers) != len(points) or len(np.unique(numbers)) < len(numbers):
            raise InputError(
                f"{path}: {len(numbers)} node numbers, {len(np.unique(numbers))} of them different, for "
                f"{len(points)} nodes. Files in several parts or with includes are not read: write VTU "
                "or XDMF."
            )
        return numbers

    return read


NODE_NUMBERS: dict[str, _Read] = {
    "abaqus": _numbers(_inp),
    "nastran": _numbers(_nastran),
    "avsucd": _numbers(_avs),
}
"""meshio's name of a format -> its node numbers, in the order in which meshio gives the points."""
