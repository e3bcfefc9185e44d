"""Writing of text and JSON, and where the output of a command goes."""

from __future__ import annotations

import json
import math
import os
import stat
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import typer

from unturn.errors import UsageError


def write_json(data: Any, path: Path) -> None:
    """Write data as JSON, NaN as null, to a file (whole or not at all) or to stdout (``-``)."""
    write_text(json.dumps(_finite(data), indent=2, ensure_ascii=False, allow_nan=False) + "\n", path)


def write_text(text: str, path: Path) -> None:
    """Write a text that ends in a line end to a file, whole or not at all and byte for byte, or to stdout (``-``)."""
    if str(path) == "-":
        typer.echo(text, nl=False)
        return
    from unturn.io._atomic import replacing

    with replacing(path) as work:
        work.write_text(text, encoding="utf-8", errors="backslashreplace", newline="")


def check_place(picture: Path | None, data: Path | None, inputs: Sequence[Path]) -> None:
    """Refuse places for the picture and the JSON that cannot be written to, before anything is computed.

    Raises
    ------
    UsageError
        Not a PNG name, or refused by `check_places`.
    """
    if picture is not None and picture.suffix.lower() != ".png":
        raise UsageError(f"{picture}: pictures are written as PNG; give a name that ends in .png.")
    check_places((picture, data), inputs)


def check_places(places: Sequence[Path | None], inputs: Sequence[Path]) -> None:
    """Refuse places that cannot be written to, before anything is computed; ``-`` is the standard output.

    Raises
    ------
    UsageError
        A folder or a name in a folder that does not exist, one of the input files, or a place named twice.
    """
    taken: set[str] = set()
    behind = _Inputs(inputs)
    for path in places:
        if path is None:
            continue
        place = "-" if str(path) == "-" else os.path.realpath(path)
        if place in taken:
            raise UsageError(f"{path} is named for two outputs; give each its own.")
        taken.add(place)
        if place == "-":
            continue
        if is_folder(path):
            raise UsageError(f"{path} is a folder; give the name of a file in it.")
        if not path.parent.is_dir():
            raise UsageError(f"{path}: there is no folder {path.parent}; make it first.")
        behind.check(path, "give another name")


class _Inputs:
    """The input files and, when first asked for, the files behind them."""

    def __init__(self, files: Sequence[Path]) -> None:
        self._files = files
        self._behind: dict[Path, Sequence[Path]] = {}

    def check(self, path: Path, advice: str, named: bool = False) -> None:
        """Refuse a place where an input lies, or the numbers of one.

        Parameters
        ----------
        path
            The place.
        advice
            What to do.
        named
            An input may be replaced, with what is behind it, where it was named as the output.
        """
        files = [file for file in self._files if not (named and _same_place(path, file))]
        if any(_same_place(path, file) for file in files):
            raise UsageError(f"{path} is an input file and would be lost; {advice}.")
        for file in files if os.path.lexists(path) else ():
            if any(_same_place(path, behind) for behind in self._of(file)):
                raise UsageError(f"{path} holds numbers of the input {file} and would be lost; {advice}.")

    def _of(self, file: Path) -> Sequence[Path]:
        if file not in self._behind:
            from unturn.io import files_behind

            try:
                self._behind[file] = files_behind(file)
            except OSError:  # it is told where the file is read
                self._behind[file] = []
        return self._behind[file]


def is_folder(path: Path) -> bool:
    """Return whether a path is a folder; a name that no file can have is none.

    Raises
    ------
    UsageError
        The name is too long, or no name at all.
    """
    try:
        return stat.S_ISDIR(path.stat().st_mode)
    except (FileNotFoundError, NotADirectoryError):
        return False
    except (OSError, ValueError) as error:
        raise UsageError(f"{path}: {getattr(error, 'strerror', None) or error}. Give another name.") from None


def _same_place(a: Path, b: Path) -> bool:
    return os.path.realpath(a) == os.path.realpath(b)


class Places:
    """Where results go, so that none is written over another file of the same call."""

    def __init__(self, asked: Path | None, inputs: Sequence[Path], others: Sequence[Path | None]) -> None:
        self._asked, self._inputs, self._behind = asked, inputs, _Inputs(inputs)
        self._taken = {os.path.realpath(p): "of the picture or the JSON" for p in others if p is not None}

    def of(self, source: Path, suffix: str, added: str = "strain") -> Path:
        """Return where the result of one input goes: the name asked for, in the folder asked for, or beside the input.

        In a name of ours `added` stands before the suffix.

        Raises
        ------
        UsageError
            Another file of this call goes there, or an input lies there and was not named as the output.
        """
        name = f"{source.stem}.{added}{suffix}"
        out = source.with_name(name) if self._asked is None else self._asked
        named = self._asked is not None and not is_folder(self._asked)
        if self._asked is not None and not named:
            out = self._asked / name
        if not named and any(_same_place(out, file) for file in self._inputs):
            raise UsageError(
                f"{source}: its result would replace {out}, which is an input too; say where it goes with -o."
            )
        self._behind.check(out, "give another place with -o", named=True)
        place = os.path.realpath(out)
        if place in self._taken:
            raise UsageError(
                f"{source}: its result would go to {out}, the place {self._taken[place]}; give another one with -o."
            )
        self._taken[place] = f"of the result of {source}"
        return out


def _finite(data: Any) -> Any:
    if isinstance(data, dict):
        return {str(k): _finite(v) for k, v in data.items()}
    if isinstance(data, list | tuple):
        return [_finite(v) for v in data]
    if isinstance(data, float):
        return data if math.isfinite(data) else None
    return data
