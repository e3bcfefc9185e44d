"""How far two results may differ: tolerances by array, from a TOML file and from options."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any, Literal, get_args

from unturn import toml_kinds as k
from unturn.errors import UsageError, close_matches
from unturn.toml_keys import Lines, Source, parse_toml, read_raw, read_table
from unturn.toml_kinds import REQUIRED, Key, Wrong

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


_AT_LEAST_ZERO = k.number_kind("a number from 0 on", lambda x: x >= 0)
_SHARE = k.number_kind("a share of the volume, from 0 to below 1", lambda x: 0 <= x < 1)

ARRAY_KEYS = (
    Key("absolute", _AT_LEAST_ZERO, "in the unit of the array"),
    Key("relative", _AT_LEAST_ZERO, "share of the reference's size at the same place"),
    Key("of_largest", _AT_LEAST_ZERO, "share of the reference's largest size in the region"),
    Key("share", _SHARE, "share of the volume that may differ by more"),
    Key("by", k.choice_kind(get_args(By)), "every component, or the norm of the difference"),
    Key("sign", k.choice_kind(get_args(Sign)), "`free`: a vector and its opposite are the same"),
)
"""Keys of ``[default]`` and of ``[arrays.NAME]``."""

_ANY = k.Kind("a table", lambda value: value)
FILE_KEYS = (
    Key("schema", k.choice_kind((SCHEMA,)), "version of the rules by which the file is read", REQUIRED),
    Key("default", _ANY, "tolerances of every array", {}),
    Key("arrays", _ANY, "tables `[arrays.NAME]`: what is another one for an array", {}),
    Key("ignore", k.TEXTS, "arrays that are not compared", ()),
)
"""Keys of the file itself."""


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
            try:
                value = _AT_LEAST_ZERO.read(float(number))
            except (ValueError, Wrong):
                raise UsageError(
                    f"--{key.replace('_', '-')} {text}: {number!r} is no tolerance; it is {_AT_LEAST_ZERO.words}, as 1e-6 or "
                    "NAME=1e-6."
                ) from None
            if name:
                arrays.setdefault(name, {})[key] = value
            else:
                default = replace(default, **{key: value})
        return Tolerances(default, arrays, self.ignore)


def read_tolerances(path: Path | str) -> Tolerances:
    """Return the tolerances of a TOML file.

    Raises
    ------
    UsageError
        It cannot be read, is no TOML, or holds an unknown key, another kind of value, or a number that is no tolerance.
    """
    return _parsed(*parse_toml(read_raw(path, "tolerances"), str(path)))


def parse_tolerances(data: Mapping[str, Any]) -> Tolerances:
    """Return the tolerances of tables that say what such a file says; the schema may be left out.

    Raises
    ------
    UsageError
        An unknown key, another kind of value, or a number that is no tolerance.

    Examples
    --------
    >>> parse_tolerances({"default": {"relative": 0.01}, "ignore": ["rank"]}).of("u").relative
    0.01
    """
    tables = {"schema": SCHEMA, **data}
    return _parsed(Source("tolerances", Lines("", tables)), tables)


def _parsed(source: Source, data: dict[str, Any]) -> Tolerances:
    found = read_table(source, (), data, FILE_KEYS)
    default = _stated(source, ("default",), found["default"])
    if not isinstance(found["arrays"], Mapping):
        raise source.error(("arrays",), "expected tables [arrays.NAME].")
    arrays = {name: _stated(source, ("arrays", name), table) for name, table in found["arrays"].items()}
    return Tolerances(Tolerance(**default), arrays, found["ignore"])


def _stated(source: Source, path: tuple[str, ...], table: Any) -> dict[str, Any]:
    """Return the keys that a table states; what it does not is left to the default."""
    return {key: v for key, v in read_table(source, path, table, ARRAY_KEYS).items() if v is not None}
