"""The extremes of a summary with how far each is to be trusted, and which are suspected singular."""

from __future__ import annotations

import math
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from typing import Literal, NamedTuple

from unturn.around import Asked, Trust, trust_of
from unturn.kinematics._symmetric import Floats
from unturn.measures import MEASURES
from unturn.numbering import Numbering, node_numbers
from unturn.pipeline import Computed
from unturn.regions import Region
from unturn.statistics import Statistics

Which = Literal["maximum", "minimum"]
Trusts = dict[tuple[str, Which], Trust]
"""How far to trust the extremes of a region, by the name of the number and which extreme of it."""

BASE_WORDS = {
    "": "",
    "_mechanical": ", mechanical",
    "_green_lagrange": ", Green-Lagrange",
    "_hencky": ", Hencky",
    "_biot": ", Biot",
    "_almansi": ", Almansi",
}
"""What stands behind the name of a statistic, by the ending of its array."""

_ROWS: tuple[tuple[str, str, Which], ...] = tuple(
    row
    for suffix, words in BASE_WORDS.items()
    for row in (
        (f"largest principal{words}", f"principal_strain{suffix}_1", "maximum"),
        (f"smallest principal{words}", f"principal_strain{suffix}_3", "minimum"),
        (f"equivalent, largest{words}", f"equivalent_strain{suffix}", "maximum"),
        (f"max shear, largest{words}", f"max_shear_strain{suffix}", "maximum"),
        (f"volumetric, largest{words}", f"volumetric_strain{suffix}", "maximum"),
        (f"volumetric, smallest{words}", f"volumetric_strain{suffix}", "minimum"),
        (f"strain error, largest{words}", f"strain_error{suffix}", "maximum"),
        (f"strain jump, largest{words}", f"strain_jump{suffix}", "maximum"),
        (f"equivalent of increment, largest{words}", f"equivalent_strain_increment{suffix}", "maximum"),
        (f"accumulated equivalent, largest{words}", f"accumulated_equivalent_strain{suffix}", "maximum"),
    )
)
_MOTION: tuple[tuple[str, Which], ...] = (
    ("angle_of_turn", "maximum"),
    ("det_f", "minimum"),
    ("det_f", "maximum"),
    ("stretch_3", "minimum"),
    ("stretch_1", "maximum"),
)


class Column(NamedTuple):
    """A number of every cell that gets statistics: its values, whether it is signed, and the measure it is of."""

    values: Floats
    signed: bool
    measure: str


@dataclass(frozen=True)
class Growth:
    """A peak that keeps growing towards a node, and the next one away from it.

    Attributes
    ----------
    location
        ``cells`` or ``free surfaces``.
    region, label, array, which
        The region's name, what it is in words, the name of the number, and which extreme of it.
    cell, value
        The cell that holds it (the parent of a face) and the value.
    node
        The solver's number of the node `trust.point`, where the file holds them.
    trust
        Node, growth, and the next peak, whose cell is the parent of a face again.
    """

    location: str
    region: str
    label: str
    array: str
    which: Which
    cell: int
    value: float
    node: int | None
    trust: Trust


def table_rows(names: Collection[str], components: Sequence[str]) -> list[tuple[str, str, Which]]:
    """Return label, name of the number and which extreme of it for the strain rows of the table.

    Parameters
    ----------
    names
        Names of the numbers that have statistics.
    components
        Names of the components of the strain.
    """
    rows = list(_ROWS)
    if "principal_strain_1" not in names:  # a plane mesh whose third direction is not stated
        for c in components:
            rows += [(f"largest {c}", f"strain_{c}", "maximum"), (f"smallest {c}", f"strain_{c}", "minimum")]
    return [row for row in rows if row[1] in names]


def trusted(
    computed: Computed,
    columns: Mapping[str, Column],
    found: Sequence[tuple[Region, Mapping[str, Statistics]]],
    groups: Sequence[Region],
    full: bool,
    threads: int | None = None,
) -> list[Trusts]:
    """Return how far to trust the extremes of each region.

    Parameters
    ----------
    computed
        Computed with ``diagnose=True``.
    columns
        The numbers that have statistics, by name.
    found
        Each region with the cells that count, and its statistics.
    groups
        What `find_regions` returns for all computed cells.
    full
        Every extreme, or only those of the table.
    threads
        None: all processors.
    """
    components = computed.fields.components.get("strain", ())
    every: list[tuple[str, Which]] = [(n, w) for n in columns for w in ("maximum", "minimum")]
    shown = [(n, w) for _, n, w in table_rows(columns, components)] + [m for m in _MOTION if m[0] in columns]
    asked, keys = [], []
    for k, (region, stats) in enumerate(found):
        size = _size(columns, stats)
        for name, which in every if full else shown:
            cell = stats[name].at_maximum if which == "maximum" else stats[name].at_minimum
            keys.append((k, name, which))
            column = columns[name]
            asked.append(Asked(column.measure, column.values, region.cells, cell, which == "minimum", size))
    answers: list[Trusts] = [{} for _ in found]
    for (k, name, which), answer in zip(keys, trust_of(computed, asked, groups, threads)):
        answers[k][name, which] = answer
    return answers


def _size(columns: Mapping[str, Column], stats: Mapping[str, Statistics]) -> float:
    """Return the largest strain among the extremes of a region."""
    sizes = [
        abs(value)
        for name, column in columns.items()
        if column.measure in MEASURES and MEASURES[column.measure].unit == "strain"
        for value in (stats[name].maximum, stats[name].minimum)
    ]
    return max((s for s in sizes if math.isfinite(s)), default=0.0)


def growths(
    computed: Computed,
    found: Sequence[tuple[Region, Mapping[str, Statistics]]],
    trusts: Sequence[Trusts],
) -> list[Growth]:
    """Return the extremes that are suspected singular, region by region.

    Parameters
    ----------
    computed, found
        As of `trusted`.
    trusts
        What it returned.
    """
    numbering = node_numbers(computed.fields.model.result)
    components = computed.fields.components.get("strain", ())
    made = []
    for (region, stats), of_region in zip(found, trusts):
        labels = {(name, which): label for label, name, which in table_rows(stats, components)}
        for (name, which), trust in of_region.items():
            if not trust.singular:
                continue
            s = stats[name]
            cell, value = (s.at_maximum, s.maximum) if which == "maximum" else (s.at_minimum, s.minimum)
            label = labels.get((name, which)) or f"{_WORDS[which]} {name}"
            node = node_of(numbering, trust.point)
            made.append(Growth("cells", region.name, label, name, which, cell, value, node, trust))
    return made


_WORDS = {"maximum": "largest", "minimum": "smallest"}


def node_of(numbering: Numbering | None, point: int) -> int | None:
    """Return the solver's number of a point, where the file holds them."""
    return None if numbering is None else int(numbering.numbers[point])
