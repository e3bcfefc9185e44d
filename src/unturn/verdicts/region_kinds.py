"""Named regions of a limits file: the table of what a region may be made of, and the cells it selects."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unturn.errors import close_matches
from unturn.kinematics._symmetric import Floats
from unturn.model import Model
from unturn.result import Result
from unturn.verdicts.keys import (
    COUNT,
    NUMBER,
    POINT,
    POSITIVE,
    REQUIRED,
    TEXT,
    TEXTS,
    Key,
    Kind,
    Wrong,
    choice_kind,
    either_kind,
    list_kind,
)

Mask = NDArray[np.bool_]
WHOLE = "whole"


class NoRegion(Exception):
    """A region cannot be found in a result; the text says why."""


@dataclass(frozen=True)
class RegionSpec:
    """A region as it is written.

    Parameters
    ----------
    name
        Its name.
    conditions
        Key of `REGION_KINDS` -> value; a cell belongs where all of them hold.
    cells_at_least
        Smallest number of cells.
    """

    name: str
    conditions: Mapping[str, Any]
    cells_at_least: int = 1


@dataclass(frozen=True, eq=False)
class Cells:
    """What regions are chosen from: the cells of one step.

    Parameters
    ----------
    model
        Of the step.
    centroid
        `(n_cells, 3)`.
    dimension
        `(n_cells,)` of each cell; 0 where it is not computed.
    """

    model: Model
    centroid: Floats
    dimension: NDArray[np.int8]

    @cached_property
    def computed(self) -> Mask:
        """Which cells are computed."""
        return self.dimension > 0

    @property
    def result(self) -> Result:
        """The step."""
        return self.model.result


@dataclass(frozen=True, eq=False)
class Found:
    """The cells of a region, and those that it names and leaves out."""

    inside: Mask
    left_out: Mask


Pick = Callable[[str], Found]


@dataclass(frozen=True)
class RegionKind:
    """One thing a region may be made of.

    Parameters
    ----------
    key
        As it is written.
    kind
        Of its value.
    meaning
        One line for people.
    select
        The cells of which it holds: from the cells, its value, and a function that finds regions by name.
    words
        The condition in words, from its value.
    """

    key: str
    kind: Kind
    meaning: str
    select: Callable[[Cells, Any, Pick], Mask]
    words: Callable[[Any], str]


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


# --- the kinds --------------------------------------------------------------------------------------------------------


def _group(cells: Cells, name: str, pick: Pick) -> Mask:
    groups = cells.result.groups
    if name not in groups:
        raise NoRegion(
            f"the file has no cell group {name!r}.{close_matches(name, groups)} Groups: {', '.join(groups) or 'none'}"
        )
    mask = np.zeros(cells.result.n_cells, dtype=bool)
    mask[groups[name]] = True
    return mask


def _tag(cells: Cells, text: str, pick: Pick) -> Mask:
    array, value = text.rsplit("=", 1)
    return np.asarray(_cell_numbers(cells.result, array) == float(value))


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


def _cell_numbers(result: Result, name: str) -> Floats:
    if name not in result.cell_data:
        known = result.cell_data
        raise NoRegion(
            f"the file has no cell array {name!r}.{close_matches(name, known)} Cell arrays: {', '.join(known) or 'none'}"
        )
    return _numbers(result.cell_data[name], result.n_cells, name)


def _numbers(values: NDArray[Any], n: int, name: str) -> Floats:
    if values.size != n or values.dtype.kind not in "iufb":
        raise NoRegion(f"the array {name!r} is not one number each")
    return values.reshape(-1).astype(np.float64)


def _box(cells: Cells, box: Mapping[str, Any], pick: Pick) -> Mask:
    low, high = np.array(box["from"]), np.array(box["to"])
    inside: Mask = np.asarray(((cells.centroid >= low) & (cells.centroid <= high)).all(axis=1))
    return inside


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


def _cylinder(cells: Cells, shape: Mapping[str, Any], pick: Pick) -> Mask:
    start, end = np.array(shape["from"]), np.array(shape["to"])
    length = float(np.linalg.norm(end - start))
    axis = (end - start) / length
    away = cells.centroid - start
    along = away @ axis
    across = np.linalg.norm(away - along[:, None] * axis, axis=1)
    inside: Mask = (along >= 0) & (along <= length) & (across <= shape["radius"])
    return inside


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


def _sphere(cells: Cells, shape: Mapping[str, Any], pick: Pick) -> Mask:
    inside: Mask = np.linalg.norm(cells.centroid - np.array(shape["center"]), axis=1) <= shape["radius"]
    return inside


def _near(cells: Cells, near: Mapping[str, Any], pick: Pick) -> Mask:
    distance = np.linalg.norm(cells.centroid - np.array(near["point"]), axis=1)
    usable = np.flatnonzero(cells.computed & (distance <= near["within"]))
    chosen = usable[np.argsort(distance[usable], kind="stable")[: near["cells"]]]
    mask = np.zeros(len(distance), dtype=bool)
    mask[chosen] = True
    return mask


def _where(cells: Cells, asked: Mapping[str, Any], pick: Pick) -> Mask:
    name, result = asked["array"], cells.result
    on_cells, on_points = name in result.cell_data, name in result.point_data
    if asked["on"] is None and on_cells and on_points:
        raise NoRegion(f'both cells and nodes have an array {name!r}: say which with on = "cells" or "nodes"')
    if on_cells and asked["on"] != "nodes":
        return _compares(_cell_numbers(result, name), asked)
    if not on_points or asked["on"] == "cells":
        known = [*result.cell_data, *result.point_data]
        raise NoRegion(
            f"the file has no such array {name!r}.{close_matches(name, known)} Arrays: {', '.join(known)}"
        )
    holds = _compares(_numbers(result.point_data[name], result.n_points, name), asked)
    mask = np.zeros(result.n_cells, dtype=bool)
    for block in result.blocks:
        mask[block.index] = holds[block.connectivity].all(axis=1)
    return mask


def _compares(values: Floats, asked: Mapping[str, Any]) -> Mask:
    holds: Mask = np.asarray(np.isfinite(values), dtype=bool)
    if asked["above"] is not None:
        holds = holds & (values > asked["above"])
    if asked["below"] is not None:
        holds = holds & (values < asked["below"])
    if asked["equals"] is not None:
        holds = holds & np.isin(values, asked["equals"])
    return holds


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


def _all_of(cells: Cells, names: tuple[str, ...], pick: Pick) -> Mask:
    mask: Mask = np.logical_and.reduce([pick(n).inside for n in names])
    return mask


def _any_of(cells: Cells, names: tuple[str, ...], pick: Pick) -> Mask:
    mask: Mask = np.logical_or.reduce([pick(n).inside for n in names])
    return mask


def _none_of(cells: Cells, names: tuple[str, ...], pick: Pick) -> Mask:
    return ~_any_of(cells, names, pick)


def _where_words(asked: Mapping[str, Any]) -> str:
    parts = [f"above {asked['above']:g}"] if asked["above"] is not None else []
    parts += [f"below {asked['below']:g}"] if asked["below"] is not None else []
    if asked["equals"] is not None:
        values = asked["equals"] if isinstance(asked["equals"], tuple) else (asked["equals"],)
        parts.append("equal to " + " or ".join(f"{v:g}" for v in values))
    on = f" on {asked['on']}" if asked["on"] else ""
    return f"array {asked['array']!r}{on} is {' and '.join(parts)}"


def _at(point: tuple[float, ...]) -> str:
    return "(" + ", ".join(f"{x:g}" for x in point) + ")"


REFERENCES = ("all_of", "any_of", "none_of")
"""Kinds whose value names other regions."""

REGION_KINDS: dict[str, RegionKind] = {
    row.key: row
    for row in (
        RegionKind("group", TEXT, "cells of a cell group of the file", _group, lambda v: f"cell group {v!r}"),
        RegionKind("tag", _tag_kind(), 'cells whose array has this value: "part=1"', _tag, lambda v: f"tag {v}"),
        RegionKind("box", _box_kind(), "cells with their centroid in a box along the axes, borders included", _box,
                   lambda v: f"box from {_at(v['from'])} to {_at(v['to'])}"),
        RegionKind("cylinder", _cylinder_kind(), "cells with their centroid in a cylinder with these ends", _cylinder,
                   lambda v: f"cylinder of radius {v['radius']:g} from {_at(v['from'])} to {_at(v['to'])}"),
        RegionKind(
            "sphere",
            record_kind("a table { center = [x, y, z], radius = R }",
                        Key("center", POINT, "its middle", REQUIRED), Key("radius", POSITIVE, "radius", REQUIRED)),
            "cells with their centroid in a ball", _sphere,
            lambda v: f"sphere of radius {v['radius']:g} about {_at(v['center'])}",
        ),
        RegionKind(
            "near",
            record_kind("a table { point = [x, y, z], cells = N, within = DISTANCE }",
                        Key("point", POINT, "the point", REQUIRED),
                        Key("cells", COUNT, "how many cells at the most", REQUIRED),
                        Key("within", POSITIVE, "largest distance of their centroids", REQUIRED)),
            "the cells nearest to a point by their centroids, none farther than a distance", _near,
            lambda v: f"the {v['cells']} cells nearest to {_at(v['point'])}, within {v['within']:g}",
        ),
        RegionKind("where", _where_kind(), "cells where another array has certain values; of a point array, at all nodes",
                   _where, _where_words),
        RegionKind("all_of", TEXTS, "cells that belong to all of these regions", _all_of,
                   lambda v: "in all of " + ", ".join(v)),
        RegionKind("any_of", TEXTS, "cells that belong to any of these regions", _any_of,
                   lambda v: "in any of " + ", ".join(v)),
        RegionKind("none_of", TEXTS, "cells that belong to none of these regions", _none_of,
                   lambda v: "in none of " + ", ".join(v)),
    )
}  # fmt: skip
"""Everything a region may be made of."""


def region_words(spec: RegionSpec) -> str:
    """Return a region in words."""
    return " and ".join(REGION_KINDS[key].words(value) for key, value in spec.conditions.items())


@dataclass(eq=False)
class RegionFinder:
    """Finds regions by name among the cells of a step, each once."""

    specs: Mapping[str, RegionSpec]
    cells: Cells
    _found: dict[str, Found | NoRegion] = field(default_factory=dict)

    def find(self, name: str) -> Found:
        """Return a region.

        Raises
        ------
        NoRegion
            It does not exist in this result, or has fewer cells than it must have.
        """
        if name not in self._found:
            try:
                self._found[name] = self._whole() if name == WHOLE else self._make(self.specs[name])
            except NoRegion as error:
                self._found[name] = NoRegion(f"region {name!r}: {error}")
        found = self._found[name]
        if isinstance(found, NoRegion):
            raise found
        return found

    def _whole(self) -> Found:
        whole = self.cells.dimension == self.cells.model.dimension
        return Found(whole, np.zeros(len(whole), dtype=bool))

    def _make(self, spec: RegionSpec) -> Found:
        masks = {
            key: REGION_KINDS[key].select(self.cells, value, self.find)
            for key, value in spec.conditions.items()
        }
        named: Mask = self.cells.computed.copy()
        for key, mask in masks.items():
            if key != "none_of":
                named &= mask
        if named.any():  # skins and edges do not count beside what they belong to
            named &= self.cells.dimension == self.cells.dimension[named].max()
        inside = named & masks["none_of"] if "none_of" in masks else named
        left_out = named & ~inside
        for key in ("all_of", "any_of"):
            for name in spec.conditions.get(key, ()):
                left_out = left_out | self.find(name).left_out & ~inside
        n = int(inside.sum())
        if n < spec.cells_at_least:
            raise NoRegion(
                f"it holds {n} computed cell{'s' * (n != 1)} and must hold {spec.cells_at_least} ({region_words(spec)})"
            )
        return Found(inside, left_out)
