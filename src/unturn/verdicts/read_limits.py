"""Reading a limits file: every table, every key, every mistake told with its place."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path as FilePath
from typing import Any

from unturn import toml_kinds as k
from unturn.reading_keys import READING_KEYS, options_of
from unturn.toml_keys import Path, Source, key_path, parse_toml, read_raw, read_table
from unturn.toml_kinds import REQUIRED, Key
from unturn.verdicts.limit import Limits
from unturn.verdicts.preconditions import PRECONDITIONS
from unturn.verdicts.read_limit import read_limit
from unturn.written_regions.read import check_names, read_regions

SCHEMA = "unturn.limits/1"

_ANY = k.Kind("a table", lambda value: value)

FILE_KEYS = (
    Key("schema", k.choice_kind((SCHEMA,)), "version of the rules by which the file is read", REQUIRED),
    Key("title", k.TEXT, "what the limits are for", ""),
    Key("number_of_limits", k.COUNT, "how many [[limits]] tables the file has: finds a file that was cut off", REQUIRED),
    Key("result", _ANY, "what the result must be before any limit counts", {}),
    Key("reading", _ANY, "how the result is read", {}),
    Key("regions", _ANY, "named regions", {}),
    Key("limits", _ANY, "the limits", REQUIRED),
)  # fmt: skip
"""Keys of the file itself."""

RESULT_KEYS = (
    Key("displacement", k.TEXT, "the point array that holds the displacement, or three scalars: \"ux,uy,uz\""),
    Key("solve", k.choice_kind(("linear", "nonlinear", "unknown")), "what the solve was", "unknown"),
    *(Key(row.key, row.kind, row.meaning) for row in PRECONDITIONS.values()),
)  # fmt: skip
"""Keys of ``[result]``."""


def read_limits(path: FilePath | str) -> Limits:
    """Return what a limits file says.

    Parameters
    ----------
    path
        A TOML file; its keys are in docs/limits.md.

    Raises
    ------
    UsageError
        The file cannot be read, is no TOML, or says something that is not known, contradicts itself, or tests nothing.
    """
    return parse_limits(read_raw(path, "limits"), str(path))


def parse_limits(raw: bytes, name: str) -> Limits:
    """Return what the bytes of a limits file say; see `read_limits`."""
    source, data = parse_toml(raw, name, "; the limits file comes last")
    found = read_table(source, (), data, FILE_KEYS)
    required = read_table(source, ("result",), found["result"], RESULT_KEYS)
    reading = read_table(source, ("reading",), found["reading"], READING_KEYS)
    options, _ = options_of(reading)
    options = replace(options, displacement=required["displacement"], solve=required["solve"])
    regions = read_regions(source, found["regions"])
    written = _tables(source, found["limits"])
    if len(written) != found["number_of_limits"]:
        raise source.error(
            ("number_of_limits",),
            f"it says {found['number_of_limits']}, and the file has {len(written)} [[limits]] tables: it was cut off or "
            "merged wrongly, or the number must be corrected.",
        )
    for row in PRECONDITIONS.values():
        if row.belongs_to and required[row.key] is not None and required[row.belongs_to] is None:
            raise source.error(
                ("result", row.key), f"it says nothing without {row.belongs_to!r}, which is missing."
            )
    if isinstance(required["small_strain"], dict):
        check_names(source, ("result", "small_strain"), required["small_strain"], regions)
    limits = []
    seen: dict[str, Path] = {}
    for position, table in enumerate(written):
        place: Path = ("limits", position)
        for limit in read_limit(source, place, table, regions, options, reading["surface_poisson"]):
            if limit.id in seen:
                raise source.error(
                    (*place, "id"), f"{limit.id!r} is also the id of {key_path(seen[limit.id])}."
                )
            seen[limit.id] = place
            limits.append(limit)
    return Limits(
        path=name,
        title=found["title"],
        required={key: required[key] for key in PRECONDITIONS if required[key] is not None},
        options=options,
        surface_poisson=reading["surface_poisson"],
        zero_step=reading["zero_step"],
        regions=regions,
        limits=tuple(limits),
        written=len(written),
        settings={"result": required, "reading": reading},
    )


def _tables(source: Source, tables: Any) -> list[Any]:
    if not isinstance(tables, list):
        raise source.error(
            ("limits",), "limits are written as tables [[limits]], with two brackets on each side."
        )
    if not tables:
        raise source.error(
            ("limits",), "there is no limit: nothing would be tested, so nothing could be met."
        )
    return tables
