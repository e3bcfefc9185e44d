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


def check_place(picture: Path | None, data: Path | None) -> None:
    """Refuse places for the picture and the JSON that cannot be written to, before anything is computed.

    Raises
    ------
    UsageError
        Not a PNG name, or a folder that does not exist.
    """
    if picture is not None and picture.suffix.lower() != ".png":
        raise UsageError(f"{picture}: pictures are written as PNG; give a name that ends in .png.")
    for path in (picture, data):
        if path is not None and not path.parent.is_dir():
            raise UsageError(f"{path}: there is no folder {path.parent}; make it first.")


def _finite(data: Any) -> Any:
    if isinstance(data, dict):
        return {str(k): _finite(v) for k, v in data.items()}
    if isinstance(data, list | tuple):
        return [_finite(v) for v in data]
    if isinstance(data, float):
        return data if math.isfinite(data) else None
    return data


def output_path(source: Path, asked: Path | None, suffix: str, added: str = "strain") -> Path:
    """Return where the output of one input goes: the name asked for, in the folder asked for, or beside the input.

    In a name of ours `added` stands before the suffix.
    """
    name = f"{source.stem}.{added}{suffix}"
    if asked is None:
        return source.with_name(name)
    return asked / name if asked.is_dir() else asked
