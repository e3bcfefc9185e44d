"""Tables of a TOML file read strictly: every key known, every value of its kind, every mistake told with its place."""

from __future__ import annotations

import re
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path as FilePath
from typing import Any

from unturn.errors import UsageError, close_matches
from unturn.toml_kinds import REQUIRED, Key, Kind, Wrong, shown

Path = tuple[str | int, ...]
_LONGEST = 1000  # characters of a line in which a key or table is looked for
_MOST_BYTES = 10_000_000


class Lines:
    """Finds the line of a key in the text of a TOML file.

    Tables in the text are told from what looks like one inside a long text by comparison with the parsed data: a place
    is only named when the data has it.
    """

    _HEADER = re.compile(r"\s*(\[\[?)\s*([^\]]+?)\s*\]\]?\s*(#.*)?$")
    _LINE = re.compile(r"""\s*([A-Za-z0-9_.-]+|"[^"]*"|'[^']*')\s*=""")

    def __init__(self, text: str, data: Mapping[str, Any]) -> None:
        self._at: dict[Path, int] = {}
        table: Path = ()
        counts: dict[str, int] = {}
        for number, line in enumerate(text.splitlines(), 1):
            if len(line) > _LONGEST:
                continue
            header, key = self._HEADER.match(line), self._LINE.match(line)
            if header is not None:
                name = tuple(part.strip().strip("\"'") for part in header[2].split("."))
                if header[1] == "[[":
                    place = counts[header[2]] = counts.get(header[2], -1) + 1
                    table = (*name, place)
                else:
                    table = name
                self._at.setdefault(table, number)
            elif key is not None:
                parts = (key[1].strip("\"'"),) if key[1][0] in "\"'" else tuple(key[1].split("."))
                self._at.setdefault((*table, *parts), number)
        self._at = {path: at for path, at in self._at.items() if _holds(data, path)}

    def of(self, path: Path) -> int | None:
        """Return the line of a key, or of the nearest table around it that is found."""
        while path:
            if path in self._at:
                return self._at[path]
            path = path[:-1]
        return None


def _holds(data: Any, path: Path) -> bool:
    for part in path:
        if isinstance(part, int):
            if not isinstance(data, list) or part >= len(data):
                return False
        elif not isinstance(data, dict) or part not in data:
            return False
        data = data[part]
    return True


@dataclass(frozen=True)
class Source:
    """A file being read: its name, its lines."""

    name: str
    lines: Lines

    def error(self, path: Path, what: str) -> UsageError:
        """Return the error about a key."""
        line = self.lines.of(path)
        where = f"{self.name}, line {line}" if line is not None else self.name
        spelt = key_path(path)
        return UsageError(f"{where}: {spelt + ': ' if spelt else ''}{what}")


def read_raw(path: FilePath | str, what: str) -> bytes:
    """Return the bytes of a file that people write; `what` it holds, for the error.

    Raises
    ------
    UsageError
        It cannot be read, or is far too long.
    """
    try:
        with open(path, "rb") as file:
            raw = file.read(_MOST_BYTES + 1)
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or error
        raise UsageError(f"{path}: the {what} cannot be read: {reason}. Check the name.") from None
    if len(raw) > _MOST_BYTES:
        raise UsageError(
            f"{path}: longer than the {_MOST_BYTES} bytes that {what} may have; this is something else."
        )
    return raw


def parse_toml(raw: bytes, name: str, hint: str = "") -> tuple[Source, dict[str, Any]]:
    """Return a TOML file and its data; `hint` ends the error.

    Raises
    ------
    UsageError
        It is no TOML.
    """
    try:
        text = raw.decode("utf-8")
        data = tomllib.loads(text)
    except (ValueError, RecursionError) as error:  # also of numbers with thousands of digits
        said = str(error) if not isinstance(error, RecursionError) else "nested too deep"
        raise UsageError(f"{name}: not a TOML file: {said}. Correct it there{hint}.") from None
    return Source(name, Lines(text, data)), data


def key_path(path: Path) -> str:
    """Return a place in words; tables of a list count from one.

    Examples
    --------
    >>> key_path(("limits", 0, "at_most"))
    'limits[1].at_most'
    """
    text = ""
    for part in path:
        text += f"[{part + 1}]" if isinstance(part, int) else f".{part}" if text else part
    return text


def read_table(source: Source, path: Path, table: Any, keys: Sequence[Key]) -> dict[str, Any]:
    """Return every key of a table with its value, in the order of `keys`.

    Raises
    ------
    UsageError
        No table, a key that is not known or is missing, or a value of another kind.
    """
    if not isinstance(table, dict):
        raise source.error(path, f"expected a table, found {shown(table)}.")
    names = [k.name for k in keys]
    for name in table:
        if name not in names:
            raise source.error(
                (*path, name),
                f"there is no such key.{close_matches(name, names)} Keys here: {', '.join(names)}.",
            )
    found = {}
    for key in keys:
        if key.name in table:
            found[key.name] = read_value(source, (*path, key.name), table[key.name], key.kind)
        elif key.default is REQUIRED:
            raise source.error(
                path, f"the key {key.name!r} is missing: {key.meaning}. Expected {key.kind.words}."
            )
        else:
            found[key.name] = key.default
    return found


def read_value(source: Source, path: Path, value: Any, kind: Kind) -> Any:
    """Return a value of a kind.

    Raises
    ------
    UsageError
        It is of another kind.
    """
    try:
        return kind.read(value)
    except Wrong as wrong:
        raise source.error(path, f"expected {kind.words}, found {shown(value)}. {wrong}".rstrip()) from None
