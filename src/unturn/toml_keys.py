"""Tables of a TOML file read strictly: every key known, every value of its kind, every mistake told with its place."""

from __future__ import annotations

import datetime
import math
import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

from unturn.errors import UsageError, close_matches

Path = tuple[str | int, ...]


class Wrong(Exception):
    """A value is not of its kind; the text completes "expected"."""


@dataclass(frozen=True)
class Kind:
    """A kind of value.

    Parameters
    ----------
    words
        What it is, for people: completes "expected ...".
    read
        Returns the value as the program uses it; raises `Wrong` (with better words) or anything else for another value.
    """

    words: str
    read: Callable[[Any], Any]


REQUIRED: Final = object()


@dataclass(frozen=True)
class Key:
    """One key of a table.

    Parameters
    ----------
    name
        As it is written.
    kind
        What its value is.
    meaning
        One line for people.
    default
        `REQUIRED`, or what it is where it is not written.
    """

    name: str
    kind: Kind
    meaning: str
    default: Any = None


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


def shown(value: Any) -> str:
    """Return a value as an error shows it: short, on one line."""
    text = ascii(value) if not isinstance(value, bool) else str(value).lower()
    return text if len(text) <= 60 else text[:57] + "..."


# --- kinds ------------------------------------------------------------------------------------------------------------


def _number(value: Any) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise Wrong
    try:
        number = float(value)
    except OverflowError:
        raise Wrong from None
    if not math.isfinite(number):
        raise Wrong
    return number


def number_kind(words: str, holds: Callable[[float], bool] = lambda _: True) -> Kind:
    """Return a kind of finite number."""

    def read(value: Any) -> float:
        number = _number(value)
        if not holds(number):
            raise Wrong
        return number

    return Kind(words, read)


def _whole(least: int) -> Callable[[Any], int]:
    def read(value: Any) -> int:
        if isinstance(value, bool) or not isinstance(value, int) or not least <= value < 2**53:
            raise Wrong
        return value

    return read


def _text(value: Any) -> str:
    if not isinstance(value, str) or not value.strip():
        raise Wrong
    if any(ord(c) < 32 for c in value):
        raise Wrong("It must be one line without control characters.")
    return value


def _boolean(value: Any) -> bool:
    if not isinstance(value, bool):
        raise Wrong
    return value


def _true(value: Any) -> bool:
    if value is not True:
        raise Wrong("Leave the key out where it need not hold.")
    return True


def _date(value: Any) -> datetime.date:
    if not isinstance(value, datetime.date) or isinstance(value, datetime.datetime):
        raise Wrong("Write it without quotes.")
    return value


def _point(value: Any) -> tuple[float, float, float]:
    if not isinstance(value, list) or len(value) != 3:
        raise Wrong
    x, y, z = (_number(v) for v in value)
    return x, y, z


def choice_kind(names: Sequence[str]) -> Kind:
    """Return the kind that is one of some names."""

    def read(value: Any) -> str:
        if not isinstance(value, str) or value not in names:
            raise Wrong(close_matches(value, names).strip() if isinstance(value, str) else "")
        return value

    return Kind("one of " + ", ".join(f'"{n}"' for n in names), read)


def list_kind(words: str, item: Kind) -> Kind:
    """Return the kind that is a list without repeats of at least one value of a kind."""

    def read(value: Any) -> tuple[Any, ...]:
        if not isinstance(value, list) or not value:
            raise Wrong
        found = tuple(item.read(v) for v in value)
        if len(set(found)) < len(found):
            raise Wrong("A value is repeated.")
        return found

    return Kind(words, read)


def table_kind(words: str, item: Kind) -> Kind:
    """Return the kind that is a table of any names with values of a kind."""

    def read(value: Any) -> dict[str, Any]:
        if not isinstance(value, dict) or not value:
            raise Wrong
        return {name: item.read(v) for name, v in value.items()}

    return Kind(words, read)


def either_kind(*kinds: Kind) -> Kind:
    """Return the kind that is any of several; the first that fits counts."""

    def read(value: Any) -> Any:
        said = []
        for kind in kinds:
            try:
                return kind.read(value)
            except Wrong as wrong:
                said.append(str(wrong))
        raise Wrong(next((s for s in said if s), ""))

    return Kind(", or ".join(k.words for k in kinds), read)


TEXT = Kind("a text", _text)
BOOLEAN = Kind("true or false", _boolean)
TRUE = Kind("true", _true)
NUMBER = number_kind("a finite number")
POSITIVE = number_kind("a number above zero", lambda x: x > 0)
NOT_NEGATIVE = number_kind("a number not below zero", lambda x: x >= 0)
COUNT = Kind("a whole number from 1", _whole(1))
POSITION = Kind("a whole number from 0", _whole(0))
DATE = Kind("a date such as 2027-03-31", _date)
POINT = Kind("three numbers [x, y, z]", _point)
TEXTS = list_kind("a list of different texts", TEXT)
