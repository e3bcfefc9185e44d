"""The sections on what the result says: verdicts, extremes, what is left out, limits, comparison, steps, pictures."""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from unturn.report.content import Content, Extreme
from unturn.report.parts import Cell, Figures, Part, Said, Section, Table
from unturn.report.sections import LEVELS
from unturn.report.words import bound, coordinates, outward, percent, place_of, unit_name
from unturn.summary import RegionSummary, Summary
from unturn.summary_text import _FINITE_ONLY, tried_text
from unturn.trusted import Growth, Which
from unturn.verdicts.finding import Place
from unturn.verdicts.wording import place_text

_TRUSTED = "May the small strain be trusted?"


def verdicts(content: Content) -> Section:
    """Return whether the small strain may be trusted, region by region."""
    summary = content.summary
    if summary.options.mode:
        said = "A mode shape has an arbitrary amplitude, so nothing is judged; values are per unit amplitude."
        return Section("verdicts", _TRUSTED, [Said([said])])
    head = ("region", "small strain", "largest error over its strain", "volume above 1 %", "volume above 10 %",
            "largest rotation, degree")  # fmt: skip
    rows = [_verdict(r) for r in summary.regions]
    parts: list[Part] = [
        Said(["Turning adds to the small strain something that is no strain. The error is held against the strain that "
              "matters in the region: up to 1 % of it everywhere, the small strain holds; up to 10 %, it is marginal; "
              "above, it does not hold."]),
        Table("verdicts", "Verdict on the small strain by region", head, rows, frozenset(range(2, 6))),
    ]  # fmt: skip
    actions: dict[str, list[str]] = {}
    for r in summary.regions:
        if r.verdict.action:
            actions.setdefault(r.verdict.action, []).append(r.region.name)
    solve = summary.options.solve
    if summary.finite_only:
        return Section("verdicts", _TRUSTED, [*parts, Said([f"{_FINITE_ONLY[solve]}."])])
    advice = [f"{', '.join(names)}: {action}." for action, names in actions.items()]
    advice += [tried_text(r.region.name, t, solve).strip() for r in summary.regions for t in r.trials]
    return Section("verdicts", _TRUSTED, [*parts, *([Said(advice, "list")] if advice else [])])


def _verdict(r: RegionSummary) -> list[Cell]:
    v = r.verdict
    word, tone = LEVELS[v.level]
    turn = outward(v.largest_rotation, "maximum", "degree", 3)
    return [
        Cell(r.region.name), Cell(word, tone=tone), Cell(percent(v.worst), v.worst),
        Cell(percent(v.share_marginal), v.share_marginal), Cell(percent(v.share_broken), v.share_broken),
        Cell(turn, v.largest_rotation),
    ]  # fmt: skip


def extremes(content: Content) -> Section:
    """Return the extremes of every region, with plus and minus and place."""
    summary = content.summary
    head = ("region", "what", "value", "±", "unit", "where", "at x, y, z", "turning error there")
    rows = [_extreme(e) for e in content.extremes]
    parts: list[Part] = [
        Table("extremes", "Extremes by region, at cells", head, rows, frozenset({2, 3, 7})),
        Table("shares", "Values that a share of the volume does not go beyond",
              ("region", "what", *(f"{s:g} %" for s in _SHARES), "unit"), list(_shares(content)), frozenset(range(2, 6))),
    ]  # fmt: skip
    if content.suspects:
        heads = ("region", "what", "value", "grows towards", "next peak away from it", "unit")
        grown = [_growth(g, summary) for g in content.suspects]
        parts.append(
            Said(["A peak that keeps growing towards a node is not resolved by this mesh, and no finer mesh need ever "
                  "resolve it: its value is that of the mesh, not of the part."])
        )  # fmt: skip
        parts.append(Table("suspected", "Extremes suspected to be singular", heads, grown, frozenset({2})))
    return Section("extremes", "Extremes", [*parts, *_elsewhere(summary)])


def _extreme(e: Extreme) -> list[Cell]:
    mark = " (suspected singular)" if e.singular else ""
    return [
        Cell(e.region), Cell(f"{e.label}{mark}"), Cell(outward(e.value, e.which, e.unit), e.value),
        Cell(bound(e.plus_minus, e.unit), e.plus_minus), Cell(unit_name(e.unit), "1" if e.unit == "strain" else e.unit),
        Cell(place_of(e)), Cell(coordinates(e.at)), Cell(percent(e.error_over_size), e.error_over_size),
    ]  # fmt: skip


_SHARES = (50.0, 95.0, 99.0, 99.9)


def _shares(content: Content) -> Iterator[list[Cell]]:
    """Yield, for each region and number, the value that so much of the volume does not go beyond."""
    for r in content.summary.regions:
        told = [
            (e.label, e.array, e.which)
            for e in content.extremes
            if e.region == r.region.name and e.unit == "strain"
        ]
        for label, name, which in told:
            held = r.statistics[name].percentiles
            shares = _SHARES if which == "maximum" else [round(100.0 - s, 1) for s in _SHARES]
            values = [held.get(s, math.nan) for s in shares]
            if any(map(math.isfinite, values)):
                cells = [Cell(outward(v, which, "strain"), v) for v in values]
                yield [Cell(r.region.name), Cell(label), *cells, Cell("microstrain", "1")]


def _growth(g: Growth, summary: Summary) -> list[Cell]:
    t = g.trust
    numbers = summary.numbers
    element = None if numbers is None or t.next_cell < 0 else int(numbers.numbers[t.next_cell])
    after = "none is found"
    if t.next_cell >= 0:
        after = (
            f"{outward(t.next_value, g.which, 'strain')} ± {bound(t.next_plus_minus, 'strain')} in "
            f"{place_text(Place(cell=t.next_cell, element=element))}"
        )
    return [
        Cell(g.region), Cell(f"{g.label}, at {g.location}"), Cell(outward(g.value, g.which, "strain"), g.value),
        Cell(place_text(Place(point=t.point, node=g.node))), Cell(after), Cell("microstrain"),
    ]  # fmt: skip


def _elsewhere(summary: Summary) -> Iterator[Part]:
    found = summary.elsewhere
    if found is None:
        return
    head = ("region", "what", "value", "±", "unit", "where", "at x, y, z")
    rows = []
    for e in found.extremes:
        which: Which = "minimum" if "smallest" in e.label else "maximum"
        place = Place(**{k: v for k, v in e.place.items() if k in Place.__annotations__})  # type: ignore[typeddict-item]
        rows.append([
            Cell(e.region), Cell(e.label), Cell(outward(e.value, which, "strain"), e.value),
            Cell(bound(e.plus_minus, "strain"), e.plus_minus), Cell("microstrain", "1"), Cell(place_text(place)),
            Cell(coordinates(e.at)),
        ])  # fmt: skip
    yield Table("elsewhere", f"Extremes by region, at {found.title}", head, rows, frozenset({2, 3}))
    if found.notes:
        yield Said(list(found.notes))


def left_out(content: Content) -> Section:
    """Return the cells without a value, and the peak of what is computed and not reported."""
    fields = content.summary.fields
    rows = [
        [Cell(reason), Cell(str(len(cells)), len(cells)), Cell(_first(cells))]
        for reason, cells in fields.left_out.items()
    ]
    parts: list[Part] = [
        Table("left-out", "Cells without a value", ("why", "cells", "first of them"), rows, frozenset({1}))
        if rows
        else Said(["Every cell has a value."])
    ]
    if content.beyond:
        head = ("what", "cells", "largest", "unit", "where")
        beyond = [
            [
                Cell(f"cells of dimension {b.dimension}"), Cell(str(b.cells), b.cells),
                Cell(f"{b.array.replace('_', ' ')} {outward(b.value, 'maximum', b.unit)}", b.value), Cell(unit_name(b.unit)),
                Cell(place_text(Place(cell=b.cell, element=b.element))),
            ]
            for b in content.beyond
        ]  # fmt: skip
        parts.append(
            Table("beyond", "Computed, and in no region of this report", head, beyond, frozenset({1}))
        )
    else:
        parts.append(Said(["Every computed cell lies in a region of this report."]))
    return Section("left-out", "What was left out", parts)


def _first(cells: NDArray[np.int64]) -> str:
    return ", ".join(f"cell {c}" for c in cells[:3]) + (", …" if len(cells) > 3 else "")


def pictures(content: Content) -> Section:
    """Return the pictures."""
    return Section("pictures", "Pictures", [Figures(content.pictures)])
