"""Named regions of a limits file: the table of what a region may be made of."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

from unturn.toml_kinds import TEXT, TEXTS, Kind
from unturn.written_regions import select as pick
from unturn.written_regions.select import Cells, Mask, Pick
from unturn.written_regions.values import BOX, CYLINDER, NEAR, SPHERE, TAG, WHERE

WHOLE = "whole"


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
        RegionKind("group", TEXT, "cells of a cell group of the file", pick.group, lambda v: f"cell group {v!r}"),
        RegionKind("tag", TAG, 'cells whose array has this value: "part=1"', pick.tag, lambda v: f"tag {v}"),
        RegionKind("box", BOX, "cells with their centroid in a box along the axes, borders included", pick.box,
                   lambda v: f"box from {_at(v['from'])} to {_at(v['to'])}"),
        RegionKind("cylinder", CYLINDER, "cells with their centroid in a cylinder with these ends", pick.cylinder,
                   lambda v: f"cylinder of radius {v['radius']:g} from {_at(v['from'])} to {_at(v['to'])}"),
        RegionKind("sphere", SPHERE, "cells with their centroid in a ball", pick.sphere,
                   lambda v: f"sphere of radius {v['radius']:g} about {_at(v['center'])}"),
        RegionKind("near", NEAR, "the cells nearest to a point by their centroids, none farther than a distance", pick.near,
                   lambda v: f"the {v['cells']} cells nearest to {_at(v['point'])}, within {v['within']:g}"),
        RegionKind("where", WHERE, "cells where another array has certain values; of a point array, at all nodes",
                   pick.where, _where_words),
        RegionKind("all_of", TEXTS, "cells that belong to all of these regions", pick.all_of,
                   lambda v: "in all of " + ", ".join(v)),
        RegionKind("any_of", TEXTS, "cells that belong to any of these regions", pick.any_of,
                   lambda v: "in any of " + ", ".join(v)),
        RegionKind("none_of", TEXTS, "cells that belong to none of these regions", pick.none_of,
                   lambda v: "in none of " + ", ".join(v)),
    )
}  # fmt: skip
"""Everything a region may be made of."""


def region_words(spec: RegionSpec) -> str:
    """Return a region in words."""
    return " and ".join(REGION_KINDS[key].words(value) for key, value in spec.conditions.items())
