"""Kinds of the values of which regions are made: boxes, cylinders, tags, comparisons with arrays."""

from __future__ import annotations

from typing import Any

from unturn.toml_kinds import (
    COUNT,
    NUMBER,
    POINT,
    POSITIVE,
    REQUIRED,
    TEXT,
    Key,
    Kind,
    Wrong,
    choice_kind,
    either_kind,
    list_kind,
    record_kind,
)


def _tag_kind() -> Kind:
    def read(value: Any) -> str:
        if not isinstance(value, str):
            raise Wrong
        array, equals, number = value.rpartition("=")
        try:
            float(number)
        except ValueError:
            raise Wrong from None
        if not array or not equals:
            raise Wrong
        return value

    return Kind('a cell array and a number, "array=number"', read)


def _box_kind() -> Kind:
    plain = record_kind(
        "a table { from = [x, y, z], to = [x, y, z] }",
        Key("from", POINT, "smallest x, y and z", REQUIRED),
        Key("to", POINT, "largest x, y and z", REQUIRED),
    )

    def read(value: Any) -> Any:
        box = plain.read(value)
        if any(a > b for a, b in zip(box["from"], box["to"])):
            raise Wrong("'from' must not be beyond 'to' in any direction.")
        return box

    return Kind(plain.words, read)


def _cylinder_kind() -> Kind:
    plain = record_kind(
        "a table { from = [x, y, z], to = [x, y, z], radius = R }",
        Key("from", POINT, "middle of one end", REQUIRED),
        Key("to", POINT, "middle of the other end", REQUIRED),
        Key("radius", POSITIVE, "radius", REQUIRED),
    )

    def read(value: Any) -> Any:
        shape = plain.read(value)
        if shape["from"] == shape["to"]:
            raise Wrong("'from' and 'to' are the same point.")
        return shape

    return Kind(plain.words, read)


def _where_kind() -> Kind:
    plain = record_kind(
        "a table { array = NAME } with above, below or equals",
        Key("array", TEXT, "cell or point array of one number each", REQUIRED),
        Key("above", NUMBER, "its value is above this"),
        Key("below", NUMBER, "its value is below this"),
        Key("equals", either_kind(NUMBER, list_kind("a list of numbers", NUMBER)), "its value is this, or one of these"),
        Key("on", choice_kind(("cells", "nodes")), "which array, where cells and nodes have one of that name"),
    )  # fmt: skip

    def read(value: Any) -> Any:
        asked = plain.read(value)
        if all(asked[k] is None for k in ("above", "below", "equals")):
            raise Wrong("One of 'above', 'below' and 'equals' must be there.")
        return asked

    return Kind(plain.words, read)


SPHERE = record_kind(
    "a table { center = [x, y, z], radius = R }",
    Key("center", POINT, "its middle", REQUIRED),
    Key("radius", POSITIVE, "radius", REQUIRED),
)
NEAR = record_kind(
    "a table { point = [x, y, z], cells = N, within = DISTANCE }",
    Key("point", POINT, "the point", REQUIRED),
    Key("cells", COUNT, "how many cells at the most", REQUIRED),
    Key("within", POSITIVE, "largest distance of their centroids", REQUIRED),
)
TAG, BOX, CYLINDER, WHERE = _tag_kind(), _box_kind(), _cylinder_kind(), _where_kind()
