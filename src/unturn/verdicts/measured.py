"""One limit held against one step: its value, its bounds there, and what stands in the way of a verdict."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from unturn.errors import UnturnError
from unturn.kinematics._symmetric import Floats
from unturn.measures import MEASURES
from unturn.verdicts.certainty import Ask, Certainty, certainties
from unturn.verdicts.columns import NoValues, Selection
from unturn.verdicts.finding import Place
from unturn.verdicts.limit import Limit, Quantity
from unturn.verdicts.statistic import STATISTICS, Got, Sample
from unturn.verdicts.step import Step
from unturn.verdicts.units import BoundAt
from unturn.written_regions.select import NoRegion


@dataclass(frozen=True)
class Measured:
    """A limit in one step.

    Attributes
    ----------
    step, time
        Which; None where the result is no series.
    value, plus_minus
        As computed; NaN where there is none.
    low, high
        Bounds that it is held against.
    place
        Where.
    count, missing
        Values behind it, and those that are not finite.
    error
        Why it is not tested; empty when it is.
    doubts
        Why it is undecided even inside its bound.
    note
        What else there is to say of it.
    left_out
        What the region names and leaves out.
    not_computed, lower
        Cells of the region that are not computed, and that are of lower dimension than others.
    """

    step: int | None
    time: float | None
    value: float = math.nan
    plus_minus: float = math.nan
    low: BoundAt | None = None
    high: BoundAt | None = None
    place: Place = field(default_factory=Place)
    count: int = 0
    missing: int = 0
    error: str = ""
    doubts: tuple[str, ...] = ()
    note: str = ""
    left_out: dict[str, Any] | None = None
    not_computed: int = 0
    lower: int = 0


@dataclass(frozen=True, eq=False)
class _Pending:
    """A limit whose value is known and whose certainty is not."""

    limit: Limit
    selection: Selection
    sample: Sample
    got: Got
    low: BoundAt | None
    high: BoundAt | None
    left_out: dict[str, Any] | None


def measure_all(step: Step, limits: Sequence[Limit]) -> list[Measured]:
    """Return every limit in one step; what is recovered for plus and minus is recovered once for all of them."""
    pending = [_begin(step, limit) for limit in limits]
    asked = [
        Ask(p.limit.quantity, p.selection, at, smallest, STATISTICS[p.limit.statistic].extreme, p.limit.unit)
        for p in pending
        if isinstance(p, _Pending)
        for at, smallest in p.got.ends
    ]
    found = iter(certainties(step, asked))
    return [
        p if isinstance(p, Measured) else _finish(step, p, [next(found) for _ in p.got.ends]) for p in pending
    ]


def _begin(step: Step, limit: Limit) -> _Pending | Measured:
    try:
        selection = step.select(limit.quantity, limit.region)
        stop = _refused(step, limit, selection)
        if stop:
            return Measured(step.shown, step.time, error=stop, missing=selection.missing)
        sample = Sample(_based(limit, selection.values), selection.weights)
        got, low, high = _held_against(step, limit, selection, sample)
        return _Pending(limit, selection, sample, got, low, high, _left_out(step, limit))
    except (NoRegion, NoValues, UnturnError) as error:
        return Measured(step.shown, step.time, error=str(error))


def _refused(step: Step, limit: Limit, selection: Selection) -> str:
    """Return why a selection cannot be tested; empty when it can."""
    if not len(selection.values):
        what = f"none of its {selection.missing} values is finite" if selection.missing else "it has no value"
        return f"region {limit.region!r}: {what}"
    only = step.mid_surface
    if limit.quantity.measure and only is not None and "mid-surface" not in limit.accept:
        n = int(only[selection.cells].sum())
        if n:
            return (
                f"region {limit.region!r}: {n} cells are surfaces or lines in space, whose displacements hold the strain of "
                'the mid-surface or axis only, not bending; where that is what the limit is for, accept = ["mid-surface"]'
            )
    return ""


def _based(limit: Limit, values: Floats) -> Floats:
    """Return values as they are computed: strain without a unit, radian."""
    if limit.stored_in is None or limit.stored_in.per_base == 1.0:
        return values
    return limit.stored_in.to_base(values)


def _held_against(
    step: Step, limit: Limit, selection: Selection, sample: Sample
) -> tuple[Got, BoundAt | None, BoundAt | None]:
    """Return the statistic and its bounds, low and high."""
    statistic = STATISTICS[limit.statistic]
    array = limit.at_most_array or limit.at_least_array
    if array is None:
        unit = statistic.unit_of(limit)
        low, high = (
            None if b is None else BoundAt(unit.to_base(b), b) for b in (limit.at_least, limit.at_most)
        )
        return statistic.compute(sample, limit), low, high
    written = _bounds_of(step, selection, array)
    bounds = limit.unit.to_base(written)
    values = np.abs(sample.values) if statistic.magnitude else sample.values
    upper = limit.at_most_array is not None
    room = bounds - values if upper else values - bounds
    if not np.isfinite(room).all():
        n = int((~np.isfinite(room)).sum())
        raise NoValues(f"the array {array!r} has no finite bound for {n} of {len(room)} values")
    at = int(room.argmin())
    smallest = not upper or (statistic.magnitude and bool(sample.values[at] < 0))
    bound = BoundAt(float(bounds[at]), float(written[at]))
    got = Got(float(values[at]), ((at, smallest),))
    return (got, None, bound) if upper else (got, bound, None)


def _bounds_of(step: Step, selection: Selection, array: str) -> Floats:
    """Return the bound for each value of a selection; on free faces, that of the cell behind."""
    on = selection.column.on
    at = "nodes" if on in ("points", "shares") else "centroid"
    values = step.column(Quantity(array, False, at=at)).values  # type: ignore[arg-type]
    return values[selection.column.owners(selection.index)]


def _left_out(step: Step, limit: Limit) -> dict[str, Any] | None:
    """Return what the region names and leaves out, with its own peak."""
    n = int(step.finder.find(limit.region).left_out.sum())
    if not n or STATISTICS[limit.statistic].over_steps:
        return None if not n else {"cells": n}
    rest = step.select(limit.quantity, limit.region, left_out=True)
    if not len(rest.values):
        return {"cells": n, "without_value": rest.missing}
    values = _based(limit, rest.values)
    at = int(np.abs(values).argmax())
    return {
        "cells": n,
        "largest": limit.unit.from_base(float(values[at])),
        "without_value": rest.missing,
        "place": dict(step.place(rest.column, int(rest.index[at]))),
    }


def _finish(step: Step, p: _Pending, certain: list[Certainty]) -> Measured:
    limit, statistic = p.limit, STATISTICS[p.limit.statistic]
    ends = [c.plus_minus for c in certain]
    if limit.plus_minus is not None:
        ends = [limit.unit.to_base(limit.plus_minus)] * len(certain)
    doubts = []
    if p.selection.missing:
        n = p.selection.missing
        doubts.append(f"{n} value{'s' * (n != 1)} of the region {'are' if n != 1 else 'is'} not finite")
    doubts += _hidden(step, p.selection)
    if statistic.extreme and "singular" not in limit.accept:
        doubts += [c.singular for c in certain if c.singular]
    doubts += turning(step, limit)
    when: Place = {"step": step.shown, "time": step.time}
    where = step.place(p.selection.column, int(p.selection.index[p.got.ends[0][0]])) if p.got.ends else when
    region = step.finder.find(limit.region)
    return Measured(
        step.shown,
        step.time,
        value=p.got.value,
        plus_minus=statistic.spread(p.sample, limit, p.got, ends),
        low=p.low,
        high=p.high,
        place=where,
        count=len(p.selection.values),
        missing=p.selection.missing,
        doubts=tuple(doubts),
        left_out=p.left_out,
        not_computed=int(region.not_computed.sum()),
        lower=int(region.lower.sum()),
    )


def _hidden(step: Step, selection: Selection) -> list[str]:
    """Return the doubt that cells have no value where the values are not theirs, at nodes and on faces."""
    if selection.column.on not in ("shares", "faces"):
        return []
    n = int((~np.isfinite(step.diagnostics.stretch[selection.cells])).sum())
    return [f"{n} cell{'s' * (n != 1)} of the region {'have' if n != 1 else 'has'} no value"] if n else []


def turning(step: Step, limit: Limit) -> list[str]:
    """Return the doubt that a small strain contains turning; none or one."""
    row = MEASURES.get(limit.quantity.name.removeprefix("surface_"))
    small = limit.quantity.measure and row is not None and row.unit == "strain" and not row.finite
    if not small or "turning" in limit.accept or limit.quantity.name == "small_strain_error":
        return []
    verdict = step.verdict(limit.region)
    if verdict.level != "does not hold":
        return []
    return [f"the small strain does not hold in {limit.region}: {verdict.action}"]
