"""Reading the named regions of a TOML file."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from typing import Any

from unturn import toml_kinds as k
from unturn.errors import close_matches
from unturn.toml_keys import Path, Source, read_table
from unturn.toml_kinds import Key
from unturn.written_regions.kinds import REFERENCES, REGION_KINDS, WHOLE, RegionSpec

REGION_KEYS = (
    *(Key(row.key, row.kind, row.meaning) for row in REGION_KINDS.values()),
    Key(
        "cells_at_least", k.COUNT, "smallest number of computed cells; with fewer the limit is not tested", 1
    ),
)
"""Keys of ``[regions.NAME]``."""


def read_regions(source: Source, tables: Any) -> dict[str, RegionSpec]:
    """Return the regions of the tables ``[regions.NAME]``.

    Raises
    ------
    UsageError
        A table says something that is not known or nothing, or a region is made of one that does not exist or of itself.
    """
    if not isinstance(tables, dict):
        raise source.error(("regions",), "regions are written as tables [regions.NAME].")
    found = {}
    for name, table in tables.items():
        place: Path = ("regions", name)
        if name == WHOLE or not re.fullmatch(r"[\w.-]+", name):
            raise source.error(
                place, "a region's name has letters, digits, '_', '.' and '-' only, and is not 'whole'."
            )
        read = read_table(source, place, table, REGION_KEYS)
        conditions = {key: read[key] for key in REGION_KINDS if read[key] is not None}
        if not conditions:
            raise source.error(place, f"the region has no condition. Give one of {', '.join(REGION_KINDS)}.")
        found[name] = RegionSpec(name, conditions, read["cells_at_least"])
    for spec in found.values():
        _check_references(source, spec, found)
    return found


def _check_references(source: Source, spec: RegionSpec, regions: Mapping[str, RegionSpec]) -> None:
    """Refuse names of regions that do not exist, and regions that name themselves in the end."""
    for key in REFERENCES:
        check_names(source, ("regions", spec.name, key), spec.conditions.get(key, ()), regions)
    reached: list[str] = []
    waiting = [spec.name]
    while waiting:
        current = regions.get(waiting.pop())
        for name in () if current is None else _named(current):
            if name == spec.name:
                raise source.error(("regions", spec.name), "the region is made of itself in the end.")
            if name not in reached:
                reached.append(name)
                waiting.append(name)


def _named(spec: RegionSpec) -> list[str]:
    return [name for key in REFERENCES for name in spec.conditions.get(key, ())]


def check_names(source: Source, path: Path, names: Iterable[str], regions: Mapping[str, RegionSpec]) -> None:
    """Refuse names of regions that are not defined in the file."""
    known = [*regions, WHOLE]
    for name in names:
        if name not in known:
            raise source.error(
                path,
                f"no region is called {name!r}.{close_matches(name, known)} Regions: {', '.join(known)}; others are "
                f"defined in [regions.NAME].",
            )
