"""Writing of text and JSON, and where the output of a command goes."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import Any

import typer

from unturn.errors import UsageError


def write_json(data: Any, path: Path) -> None:
    """Write data as JSON, NaN as null, to a file (whole or not at all) or to stdout (``-``)."""
    text = json.dumps(_finite(data), indent=2, ensure_ascii=False, allow_nan=False)
    if str(path) == "-":
        typer.echo(text)
        return
    from unturn.io._atomic import replacing

    with replacing(path) as work:
        work.write_text(text + "\n", encoding="utf-8")


def _finite(data: Any) -> Any:
    if isinstance(data, dict):
        return {str(k): _finite(v) for k, v in data.items()}
    if isinstance(data, list | tuple):
        return [_finite(v) for v in data]
    if isinstance(data, float):
        return data if math.isfinite(data) else None
    return data


def output_path(source: Path, asked: Path | None, several: bool, suffix: str, added: str = "strain") -> Path:
    """Return where the output of one input goes; `added` stands before the suffix of a name of ours.

    Raises
    ------
    UsageError
        Several inputs and an output that is no folder.
    """
    name = f"{source.stem}.{added}{suffix}"
    if asked is None:
        return source.with_name(name)
    if asked.is_dir():
        return asked / name
    if several:
        raise UsageError(f"-o {asked}: with several input files the output must be an existing folder.")
    return asked
