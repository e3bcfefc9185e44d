"""Kinds of values in a TOML file: numbers that are numbers, texts, dates, points, small tables."""

from __future__ import annotations

import datetime
import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any, Final

from unturn.errors import close_matches


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


def shown(value: Any) -> str:
    """Return a value as an error shows it: short, on one line."""
    text = ascii(value) if not isinstance(value, bool) else str(value).lower()
    return text if len(text) <= 60 else text[:57] + "..."


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


def record_kind(words: str, *keys: Key) -> Kind:
    """Return the kind that is a small table with fixed keys."""

    def read(value: Any) -> dict[str, Any]:
        if not isinstance(value, dict):
            raise Wrong
        names = [k.name for k in keys]
        for name in value:
            if name not in names:
                raise Wrong(f"There is no key {name!r} here.{close_matches(name, names)}")
        found = {}
        for key in keys:
            if key.name not in value:
                if key.default is REQUIRED:
                    raise Wrong(f"The key {key.name!r} is missing.")
                found[key.name] = key.default
                continue
            try:
                found[key.name] = key.kind.read(value[key.name])
            except Wrong as wrong:
                raise Wrong(f"{key.name!r} must be {key.kind.words}. {wrong}".rstrip()) from None
        return found

    return Kind(words, read)


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
