"""A picture plan: the same pictures of every revision, from a text file."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path as FilePath
from typing import Any

from unturn import reading_keys as r
from unturn import toml_kinds as k
from unturn.errors import close_matches
from unturn.options import StrainOptions
from unturn.picture_keys import PICTURE_KEYS, PictureRequest
from unturn.pictures._measure import LOCATIONS
from unturn.report_keys import REPORT_KEYS, ReportWish
from unturn.toml_keys import Path, Source, parse_toml, read_raw, read_table, read_value
from unturn.toml_kinds import REQUIRED, Key
from unturn.written_regions.kinds import RegionSpec
from unturn.written_regions.read import read_regions

SCHEMA = "unturn.plan/1"
_ANY = k.Kind("a table", lambda value: value)

PLAN_KEYS = (
    Key("schema", k.choice_kind((SCHEMA,)), "version of the rules by which the file is read", REQUIRED),
    Key("title", k.TEXT, "what is shown; stands before the title of every picture", ""),
    Key("reading", _ANY, "how the result is read", {}),
    Key("regions", _ANY, "named regions", {}),
    Key("defaults", _ANY, "what holds for every picture that does not say otherwise", {}),
    Key("report", _ANY, "what `unturn report` says beside the pictures", {}),
    Key("pictures", _ANY, "the pictures", REQUIRED),
)
"""Keys of the file itself."""

PLAN_READING_KEYS = (r.DISPLACEMENT_KEY, r.SOLVE_KEY, r.BASE_KEY, r.FRAME_KEY, *r.READING_KEYS)
"""Keys of ``[reading]``."""

NAME_KEY = Key(
    "name", k.TEXT, "name of the file, without suffix: letters, digits, '_', '.' and '-'", REQUIRED
)
_AT_KEY = Key("at", k.choice_kind(tuple(LOCATIONS)), "where values live", "centroid")
_CSV_KEY = Key("csv", k.BOOLEAN, "also the values that are drawn as a CSV file of the same name", False)
DEFAULT_KEYS = (*PICTURE_KEYS, _AT_KEY, _CSV_KEY)
"""Keys of ``[defaults]``: those of every picture."""


@dataclass(frozen=True, eq=False)
class Plan:
    """A plan that was read.

    Attributes
    ----------
    path, title
        Where it came from; what it is for.
    options, surface_poisson, zero_step
        How results are read.
    regions
        Those that the plan defines, by name.
    pictures
        What is asked for, in the order of the file; names are different.
    csv
        Names of the pictures whose values are wanted as a table.
    report
        What a report says beside the pictures.
    """

    path: str
    title: str
    options: StrainOptions
    surface_poisson: float | None
    zero_step: int | None
    regions: Mapping[str, RegionSpec]
    pictures: tuple[PictureRequest, ...]
    csv: frozenset[str] = field(default_factory=frozenset)
    report: ReportWish = field(default_factory=ReportWish)


def read_plan(path: FilePath | str) -> Plan:
    """Return what a plan says.

    Raises
    ------
    UsageError
        The file cannot be read, is no TOML, or says something that is not known; with the line.
    """
    return parse_plan(read_raw(path, "plan"), str(path))


def parse_plan(raw: bytes, name: str) -> Plan:
    """Return what the bytes of a plan say; see `read_plan`."""
    source, data = parse_toml(raw, name)
    found = read_table(source, (), data, PLAN_KEYS)
    reading = read_table(source, ("reading",), found["reading"], PLAN_READING_KEYS)
    options, zero_step = r.options_of(reading)
    read_table(source, ("defaults",), found["defaults"], DEFAULT_KEYS)
    tables = _tables(source, found["pictures"])
    pictures: list[PictureRequest] = []
    csv: list[str] = []
    for position, table in enumerate(tables):
        place: Path = ("pictures", position)
        read = _picture(source, place, table, found["defaults"])
        if read.pop("csv"):
            csv.append(read["name"])
        line = source.lines.of(place)
        request = PictureRequest(**read, source=f"{name}, line {line}, picture {read['name']!r}")
        if request.name.casefold() in [p.name.casefold() for p in pictures]:
            raise source.error((*place, "name"), f"another picture is called {request.name!r} too.")
        pictures.append(request)
    report = _report(source, found["report"], [p.name for p in pictures])
    return Plan(
        name,
        found["title"],
        options,
        reading["surface_poisson"],
        zero_step,
        read_regions(source, found["regions"]),
        tuple(pictures),
        frozenset(csv),
        report,
    )


def _report(source: Source, table: Any, pictures: Sequence[str]) -> ReportWish:
    wish = ReportWish(**read_table(source, ("report",), table, REPORT_KEYS))
    for name in wish.side_by_side:
        if name not in pictures:
            raise source.error(
                ("report", "side_by_side"),
                f"no picture is called {name!r}.{close_matches(name, pictures)} Pictures: {', '.join(pictures)}.",
            )
    return wish


def _picture(source: Source, place: Path, table: Any, defaults: Mapping[str, Any]) -> dict[str, Any]:
    """Return the keys of a picture; what it does not say is that of the defaults."""
    keys = [NAME_KEY, *DEFAULT_KEYS]
    read = read_table(source, place, table, keys)
    if not re.fullmatch(r"[\w.-]{1,100}", read["name"]):
        raise source.error((*place, "name"), f"expected {NAME_KEY.meaning}; found {k.shown(read['name'])}.")
    for key in DEFAULT_KEYS:
        if key.name in defaults and key.name not in table:
            read[key.name] = read_value(source, ("defaults", key.name), defaults[key.name], key.kind)
    return read


def _tables(source: Source, tables: Any) -> Sequence[Any]:
    if not isinstance(tables, list) or not tables:
        raise source.error(("pictures",), "pictures are written as tables [[pictures]]; there must be one.")
    return tables
