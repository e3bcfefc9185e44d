"""Results and limits files for tests of `unturn check`: values that are known cell by cell."""

from __future__ import annotations

import datetime
import json
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.result import CellBlock, Result
from unturn.verdicts.check import Checked, InMemory, check_result
from unturn.verdicts.finding import Finding
from unturn.verdicts.limit import Limits
from unturn.verdicts.read_limits import parse_limits

Floats = NDArray[np.float64]
TODAY = datetime.date(2026, 12, 1)


def row(strains: Sequence[float], lengths: Sequence[float] | None = None, **cell_data: Any) -> Result:
    """Bricks of unit cross-section in a row along x, each pulled along x by its own strain and no other way."""
    lengths_ = np.ones(len(strains)) if lengths is None else np.asarray(lengths, dtype=np.float64)
    x = np.concatenate([[0.0], np.cumsum(lengths_)])
    u = np.concatenate([[0.0], np.cumsum(lengths_ * np.asarray(strains))])
    section = np.array([(0, 0), (1, 0), (1, 1), (0, 1)], dtype=np.float64)
    points = np.array([(a, *yz) for a in x for yz in section])
    first = 4 * np.arange(len(strains))[:, None]
    cells = first + np.array([0, 1, 2, 3, 4, 5, 6, 7])
    moved = np.zeros_like(points)
    moved[:, 0] = np.repeat(u, 4)
    block = CellBlock("hexahedron", cells, np.arange(len(strains)))
    return Result(points, (block,), {"u": moved}, {k: np.asarray(v) for k, v in cell_data.items()})


def grid(n: int = 4, **cell_data: Any) -> Result:
    """The cube of edge n in n x n x n unit bricks, stretched by 0.001 along x; cell k + n (j + n i) is at (i, j, k)."""
    line = np.arange(n + 1, dtype=np.float64)
    points = np.stack(np.meshgrid(line, line, line, indexing="ij"), axis=-1).reshape(-1, 3)
    number = np.arange((n + 1) ** 3).reshape(n + 1, n + 1, n + 1)
    low, high = slice(None, -1), slice(1, None)
    corners = [(low, low, low), (high, low, low), (high, high, low), (low, high, low)]
    corners += [(a, b, high) for a, b, _ in corners]
    cells = np.stack([number[c].ravel() for c in corners], axis=1)
    block = CellBlock("hexahedron", cells, np.arange(n**3))
    u = 1e-3 * points * [1.0, 0.0, 0.0]
    return Result(points, (block,), {"u": u}, {k: np.asarray(v) for k, v in cell_data.items()})


def toml(value: Any) -> str:
    """Return a value as TOML writes it."""
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, str):
        return json.dumps(value)
    if isinstance(value, Mapping):
        return "{ " + ", ".join(f"{toml(str(k))} = {toml(v)}" for k, v in value.items()) + " }"
    if isinstance(value, list | tuple):
        return "[" + ", ".join(toml(v) for v in value) + "]"
    return value.isoformat() if isinstance(value, datetime.date) else repr(value)


def written(
    *limits: Mapping[str, Any],
    result: Mapping[str, Any] | None = None,
    reading: Mapping[str, Any] | None = None,
    regions: Mapping[str, Mapping[str, Any]] | None = None,
    number: int | None = None,
) -> str:
    """Return the text of a limits file; reason and source are filled in."""
    lines = ['schema = "unturn.limits/1"', f"number_of_limits = {len(limits) if number is None else number}"]
    tables: list[tuple[str, Mapping[str, Any]]] = [("[result]", result or {}), ("[reading]", reading or {})]
    tables += [(f"[regions.{name}]", region) for name, region in (regions or {}).items()]
    tables += [("[[limits]]", {"reason": "invented", "source": "invented", **limit}) for limit in limits]
    for head, table in tables:
        lines += ["", head, *(f"{key} = {toml(value)}" for key, value in table.items())]
    return "\n".join(lines) + "\n"


def parsed(text: str) -> Limits:
    """Return what a text says."""
    return parse_limits(text.encode(), "limits.toml")


def checked(result: Result, text: str, today: datetime.date = TODAY) -> Checked:
    """Return the verdicts on a result in memory."""
    return check_result(InMemory(result, result.path), parsed(text), "result", today=today, threads=1)


class Series:
    """A series in memory; a step that is an error cannot be read."""

    def __init__(self, results: Sequence[Result | Exception], times: Sequence[float] | None = None) -> None:
        self.results = results
        self.path = ""
        self.steps: tuple[float, ...] | None = tuple(times or map(float, range(len(results))))

    def read(self, step: int = 0) -> Result:
        found = self.results[step]
        if isinstance(found, Exception):
            raise found
        return found


def checked_series(series: Series, text: str) -> dict[str, Finding]:
    """Return the verdicts on a series by id."""
    found = check_result(series, parsed(text), "series", today=TODAY, threads=1)
    return {f.id: f for f in found.findings}


def one(result: Result, limit: Mapping[str, Any], **more: Any) -> Finding:
    """Return the verdict on the one limit of a file."""
    limit = {"id": "it", **limit}
    found = checked(result, written(limit, **more)).findings
    return next(f for f in found if f.id == limit["id"])


def write(path: Path, text: str) -> Path:
    """Write a limits file and return its path."""
    path.write_text(text, encoding="utf-8")
    return path
