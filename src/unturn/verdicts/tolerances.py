"""How far two results may differ: tolerances by array, from a TOML file and from options."""

from __future__ import annotations

import math
import tomllib
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field, fields, replace
from pathlib import Path
from typing import Any, Literal, get_args

from unturn.errors import InputError, UsageError, close_matches

SCHEMA = "unturn.tolerances/1"
By = Literal["components", "norm"]
Sign = Literal["fixed", "free"]


@dataclass(frozen=True)
class Tolerance:
    """How far one array may differ.

    Parameters
    ----------
    absolute
        In the unit of the array.
    relative
        Share of the reference's size at the same place; the norm of a vector or tensor, for each of its components.
    of_largest
        Share of the reference's largest size in the region.
    share
        Share of the volume, 0 to 1, that may differ by more.
    by
        ``components``: every component; ``norm``: the norm of the difference.
    sign
        ``free``: a vector and its opposite are the same, as with directions.

    Notes
    -----
    A place is within tolerance where the difference is at most `absolute + relative * size + of_largest * largest`, or at
    most what the storage of the two values leaves open.
    """

    absolute: float = 0.0
    relative: float = 0.0
    of_largest: float = 0.0
    share: float = 0.0
    by: By = "components"
    sign: Sign = "fixed"


KEYS = tuple(f.name for f in fields(Tolerance))
_NUMBERS = ("absolute", "relative", "of_largest", "share")
_WORDS: dict[str, tuple[str, ...]] = {"by": get_args(By), "sign": get_args(Sign)}


@dataclass(frozen=True)
class Tolerances:
    """Tolerances of all arrays: what is stated for an array by its name, and the default for what is not.

    Parameters
    ----------
    default
        For every array.
    arrays
        Array name -> what is stated for it; the default stands for the rest.
    ignore
        Arrays that are not compared.
    """

    default: Tolerance = Tolerance()
    arrays: Mapping[str, Mapping[str, Any]] = field(default_factory=dict)
    ignore: tuple[str, ...] = ()

    def of(self, name: str) -> Tolerance:
        """Return the tolerance of an array."""
        return replace(self.default, **self.arrays.get(name, {}))

    def check_names(self, known: Iterable[str]) -> None:
        """Refuse tolerances for arrays that do not exist: a misspelt name would leave the true one without.

        Raises
        ------
        UsageError
            No array has that name.
        """
        names = sorted(set(known))
        for name in (*self.arrays, *self.ignore):
            if name not in names:
                raise UsageError(
                    f"the tolerances name an array {name!r}, which neither of the results has."
                    f"{close_matches(name, names)} Arrays: {', '.join(names)}."
                )

    def with_options(
        self, absolute: Sequence[str] = (), relative: Sequence[str] = (), of_largest: Sequence[str] = ()
    ) -> Tolerances:
        """Return the tolerances with options laid over them, each ``X`` for all arrays or ``NAME=X`` for one.

        Raises
        ------
        UsageError
            X is no number that is not negative.

        Examples
        --------
        >>> t = Tolerances().with_options(relative=["0.01", "strain=0.02"])
        >>> t.of("u").relative, t.of("strain").relative
        (0.01, 0.02)
        """
        default = self.default
        arrays = {name: dict(stated) for name, stated in self.arrays.items()}
        asked = (("absolute", absolute), ("relative", relative), ("of_largest", of_largest))
        for key, text in ((key, text) for key, texts in asked for text in texts):
            name, _, number = text.rpartition("=")
            value = _number(_parsed(number), f"--{key.replace('_', '-')} {text}")
            if name:
                arrays.setdefault(name, {})[key] = value
            else:
                default = replace(default, **{key: value})  # type: ignore[arg-type]
        return Tolerances(default, arrays, self.ignore)


def read_tolerances(path: Path | str) -> Tolerances:
    """Return the tolerances of a TOML file.

    Raises
    ------
    InputError
        The file cannot be read.
    UsageError
        It is no TOML, or holds an unknown key, another kind of value, or a number that is no tolerance.
    """
    try:
        text = Path(path).read_bytes().decode()
    except OSError as error:
        raise InputError(
            f"{path}: the tolerances cannot be read: {error.strerror}. Check the name."
        ) from error
    except (UnicodeDecodeError, ValueError) as error:
        raise UsageError(f"{path}: not a TOML file ({error}). Correct it there.") from error
    try:
        data = tomllib.loads(text)
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise UsageError(f"{path}: not a TOML file ({error}). Correct it there.") from error
    return parse_tolerances(data, str(path))


def parse_tolerances(data: Mapping[str, Any], where: str = "tolerances") -> Tolerances:
    """Return the tolerances of the tables of such a file.

    Parameters
    ----------
    data
        ``{"default": {...}, "arrays": {NAME: {...}}, "ignore": [...]}``, with the fields of `Tolerance` as keys.
    where
        What messages call it.

    Raises
    ------
    UsageError
        An unknown key, another kind of value, or a number that is no tolerance.

    Examples
    --------
    >>> parse_tolerances({"default": {"relative": 0.01}, "ignore": ["rank"]}).of("u").relative
    0.01
    """
    _known_keys(data, ("schema", "default", "arrays", "ignore"), where)
    schema = data.get("schema", SCHEMA)
    if schema != SCHEMA:
        raise UsageError(f"{where}: schema is {schema!r}; this program knows {SCHEMA!r}.")
    default = _stated(data.get("default", {}), f"{where}: default")
    arrays = data.get("arrays", {})
    if not isinstance(arrays, Mapping):
        raise UsageError(f"{where}: arrays is no table; write [arrays.NAME] and tolerances below it.")
    stated = {name: _stated(table, f"{where}: arrays.{name}") for name, table in arrays.items()}
    ignore = data.get("ignore", [])
    if not isinstance(ignore, list | tuple) or not all(isinstance(name, str) for name in ignore):
        raise UsageError(f"{where}: ignore is a list of array names, as ignore = ['rank'].")
    return Tolerances(Tolerance(**default), stated, tuple(ignore))


def _known_keys(table: Mapping[str, Any], known: Sequence[str], where: str) -> None:
    for key in table:
        if key not in known:
            raise UsageError(
                f"{where}: no key is called {key!r}.{close_matches(str(key), known)} Keys: {', '.join(known)}."
            )


def _stated(table: Any, where: str) -> dict[str, Any]:
    if not isinstance(table, Mapping):
        raise UsageError(f"{where} is no table; its keys are {', '.join(KEYS)}.")
    _known_keys(table, KEYS, where)
    return {key: _value(key, value, f"{where}.{key}") for key, value in table.items()}


def _value(key: str, value: Any, where: str) -> float | str:
    if key in _NUMBERS:
        number = _number(value, where)
        if key == "share" and number >= 1.0:
            raise UsageError(f"{where} = {number:g}: a share of the volume lies from 0 to below 1.")
        return number
    if value not in _WORDS[key]:
        raise UsageError(f"{where} = {value!r}: use {' or '.join(repr(w) for w in _WORDS[key])}.")
    return str(value)


def _parsed(text: str) -> float | str:
    try:
        return float(text)
    except ValueError:
        return text


def _number(value: Any, where: str) -> float:
    is_number = isinstance(value, int | float) and not isinstance(value, bool)
    if not is_number or not 0.0 <= value < math.inf:
        raise UsageError(f"{where}: {value!r} is no tolerance; it is a number from 0 on.")
    return float(value)
