"""Reading a limits file: every table, every key, every mistake told with its place."""

from __future__ import annotations

import re
import tomllib
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path as FilePath
from typing import Any

from unturn.errors import UsageError
from unturn.pipeline import StrainOptions
from unturn.verdicts import kinds as k
from unturn.verdicts.keys import Lines, Path, Source, key_path, read_table
from unturn.verdicts.kinds import REQUIRED, Key
from unturn.verdicts.limit import Limits
from unturn.verdicts.preconditions import PRECONDITIONS
from unturn.verdicts.read_limit import check_names, read_limit
from unturn.verdicts.region_kinds import REFERENCES, REGION_KINDS, WHOLE, RegionSpec

SCHEMA = "unturn.limits/1"
_MOST_BYTES = 10_000_000

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

READING_KEYS = (
    Key("displacement_scale", k.POSITIVE, "factor from the displacement's unit to the mesh's", 1.0),
    Key("coordinates", k.choice_kind(("reference", "deformed")), "whether the coordinates are already moved", "reference"),
    Key("plane", k.choice_kind(("strain", "stress", "axisymmetric")), "what a plane mesh assumes of the direction across it"),
    Key("axis", k.choice_kind(("x", "y")), "axis of revolution", "y"),
    Key("poisson", k.NUMBER, "Poisson's ratio for plane stress and the thickness of surfaces"),
    Key("surface_poisson", k.NUMBER, "Poisson's ratio of solids, for the strain across their free faces"),
    Key("equivalent_poisson", k.NUMBER, "the other form of the equivalent strain"),
    Key("remove_rigid", k.TEXT, "take the rigid motion of these out first", "none"),
    Key("rigid_to", k.TEXT, "take it out of this region instead"),
    Key("rigid_axis", k.TEXT, "a known axis instead of the full fit"),
    Key("thermal_expansion", k.either_kind(k.NUMBER, k.TEXT), "free thermal strain to take out"),
    Key("temperature", k.TEXT, "array of temperature"),
    Key("reference_temperature", k.NUMBER, "temperature without thermal strain"),
    Key("recovery", k.choice_kind(("patch", "extrapolate", "average")), "how the gradient gets to nodes", "patch"),
    Key("zero_step", k.POSITION, "step from which displacements are measured"),
    Key("alive", k.TEXT, "cell array; cells where it is zero do not count"),
    Key("skin", k.BOOLEAN, "also compute cells whose nodes all belong to one larger cell", False),
)  # fmt: skip
"""Keys of ``[reading]``: the options of ``unturn strain`` by the same names."""

REGION_KEYS = (
    *(Key(row.key, row.kind, row.meaning) for row in REGION_KINDS.values()),
    Key(
        "cells_at_least", k.COUNT, "smallest number of computed cells; with fewer the limit is not tested", 1
    ),
)
"""Keys of ``[regions.NAME]``."""


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
    name = str(path)
    try:
        with open(path, "rb") as file:
            raw = file.read(_MOST_BYTES + 1)
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or error
        raise UsageError(f"{name}: the limits cannot be read: {reason}. Check the name.") from None
    if len(raw) > _MOST_BYTES:
        raise UsageError(f"{name}: a limits file has at most {_MOST_BYTES} bytes; this is something else.")
    return parse_limits(raw, name)


def parse_limits(raw: bytes, name: str) -> Limits:
    """Return what the bytes of a limits file say; see `read_limits`."""
    try:
        text = raw.decode("utf-8")
        data = tomllib.loads(text)
    except (ValueError, RecursionError) as error:  # also of numbers with thousands of digits
        said = str(error) if not isinstance(error, RecursionError) else "nested too deep"
        raise UsageError(f"{name}: not a TOML file: {said}. Correct it there.") from None
    source = Source(name, Lines(text, data))
    found = read_table(source, (), data, FILE_KEYS)
    required = read_table(source, ("result",), found["result"], RESULT_KEYS)
    reading = read_table(source, ("reading",), found["reading"], READING_KEYS)
    options = _options(required, reading)
    regions = _regions(source, found["regions"])
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


def _options(required: Mapping[str, Any], reading: Mapping[str, Any]) -> StrainOptions:
    names = [n for n in reading if n not in ("zero_step", "surface_poisson")]
    options = replace(StrainOptions(), **{n: reading[n] for n in names})
    return replace(options, displacement=required["displacement"], solve=required["solve"])


def _regions(source: Source, tables: Any) -> dict[str, RegionSpec]:
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
