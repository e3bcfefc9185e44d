"""Combinations of load cases: factors and signs, from a file or from tables in memory."""

from __future__ import annotations

import itertools
import math
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from unturn.errors import UsageError
from unturn.toml_keys import parse_toml, read_raw

_MOST_REVERSIBLE = 10


@dataclass(frozen=True)
class Combination:
    """A name and the factor of each load case."""

    name: str
    factors: Mapping[str, float]


def read_combinations(path: Path) -> tuple[Combination, ...]:
    """Return the combinations of a TOML file.

    ``[combinations.NAME]`` holds one line a load case: ``case = 1.35``, or ``case = "+-1.5"`` for a load that acts either
    way. A combination with k of those becomes 2^k, each with its signs in its name.

    Raises
    ------
    UsageError
        The file cannot be read, is no TOML, or what it holds is no table of combinations.
    """
    _, data = parse_toml(read_raw(path, "combinations"), str(path))
    others = sorted(set(data) - {"combinations"})
    tables = data.get("combinations")
    if others or not isinstance(tables, dict) or not tables:
        found = f"it has {others[0]!r}" if others else "it has none"
        raise UsageError(f"{path}: expected tables [combinations.NAME] and nothing else; {found}.")
    return expanded_combinations(tables, str(path))


def expanded_combinations(
    tables: Mapping[str, Any], where: str = "the combinations"
) -> tuple[Combination, ...]:
    """Return the combinations of tables NAME -> (load case -> factor), those that act either way with each of their signs.

    Raises
    ------
    UsageError
        A table that is none, or a factor that is neither a number nor ``"+-1.5"``.

    Examples
    --------
    >>> [c.name for c in expanded_combinations({"storm": {"dead": 1.35, "wind": "+-1.5"}})]
    ['storm (+wind)', 'storm (-wind)']
    """
    return tuple(c for name, table in tables.items() for c in _expanded(where, name, table))


def _expanded(path: str, name: str, table: Any) -> list[Combination]:
    if not isinstance(table, Mapping) or not table:
        raise UsageError(f"{path}: combination {name!r} holds no load case; write lines such as wind = 1.5.")
    factors = {case: _factor(path, name, case, value) for case, value in table.items()}
    both = [case for case, (_, reversible) in factors.items() if reversible]
    if len(both) > _MOST_REVERSIBLE:
        raise UsageError(
            f"{path}: combination {name!r} has {len(both)} reversible loads, which is {2 ** len(both)} combinations; "
            f"at most {_MOST_REVERSIBLE} are expanded."
        )
    found = []
    for signs in itertools.product((1.0, -1.0), repeat=len(both)):
        sign = dict(zip(both, signs))
        words = ", ".join(f"{'+' if sign[c] > 0 else '-'}{c}" for c in both)
        found.append(
            Combination(
                f"{name} ({words})" if both else name,
                {case: value * sign.get(case, 1.0) for case, (value, _) in factors.items()},
            )
        )
    return found


def _factor(path: str, name: str, case: str, value: Any) -> tuple[float, bool]:
    """Return a factor and whether it acts either way."""
    reversible = isinstance(value, str) and value.startswith("+-")
    number = math.nan
    if reversible:
        try:
            number = float(value[2:])
        except ValueError:
            number = math.nan
    elif isinstance(value, int | float) and not isinstance(value, bool):
        number = float(value)
    if not math.isfinite(number):
        raise UsageError(
            f"{path}: combination {name!r}: the factor of {case!r} is {value!r}. Write a number, 1.35, or both signs, "
            '"+-1.35".'
        )
    return number, reversible
