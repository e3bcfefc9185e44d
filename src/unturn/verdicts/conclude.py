"""From what was measured of a limit in every step to its one verdict."""

from __future__ import annotations

import datetime
import math
from collections.abc import Sequence
from typing import Any, cast

from unturn.verdicts.finding import Finding, Place, State
from unturn.verdicts.limit import Limit
from unturn.verdicts.measured import Measured
from unturn.verdicts.statistic import STATISTICS
from unturn.verdicts.units import shown_in, unit_words
from unturn.verdicts.wording import number, place_text

_RANKS: tuple[State, ...] = ("met", "warning", "undecided", "error", "exceeded")
_PLACE_WORDS = {
    "centroid": "at centroids",
    "mean": "element means",
    "nodes": "at nodes",
    "surface": "on free faces",
    None: "",
}


def state_of(limit: Limit, m: Measured) -> tuple[State, str]:
    """Return the state of a limit in one step, and why.

    Beyond the bound is exceeded, whatever else is in doubt. Inside, any doubt makes it undecided: the plus and minus
    reaches across, a value is missing, the peak is suspected singular.
    """
    if m.error or math.isnan(m.value):
        return "error", m.error or "it has no value"
    if _room(m) < 0:
        return "exceeded", "; ".join(m.doubts)
    doubts = list(m.doubts)
    reach = 0.0 if math.isnan(m.plus_minus) or "plus-minus" in limit.accept else m.plus_minus
    if _reaches(m, reach):
        doubts.insert(0, "inside, but the plus and minus reaches across the bound")
    if doubts:
        return "undecided", "; ".join(doubts)
    unit = STATISTICS[limit.statistic].unit_of(limit)
    levels = (limit.warn_below, limit.warn_above)
    below, above = (None if w is None else unit.to_base(w) for w in levels)
    if above is not None and m.value > above:
        return "warning", f"above the warning level of {number(limit.warn_above)} {unit_words(unit)}".rstrip()
    if below is not None and m.value < below:
        return "warning", f"below the warning level of {number(limit.warn_below)} {unit_words(unit)}".rstrip()
    return "met", ""


def _room(m: Measured) -> float:
    """Return what is left up to the nearer bound; below zero beyond it."""
    rooms = [m.high.base - m.value] if m.high is not None else []
    rooms += [m.value - m.low.base] if m.low is not None else []
    return min(rooms, default=math.inf)


def _reaches(m: Measured, reach: float) -> bool:
    """Return whether a value that is off by so much may be beyond a bound."""
    over = m.high is not None and m.value + reach > m.high.base
    return over or (m.low is not None and m.value - reach < m.low.base)


def conclude(
    limit: Limit, group: str, measured: Sequence[Measured], today: datetime.date, stopped: str = ""
) -> Finding:
    """Return the verdict on a limit: that of its worst step.

    Parameters
    ----------
    limit
        The limit.
    group
        Name of the result.
    measured
        It in every step that it is of; at least one.
    today
        For the waiver.
    stopped
        Why no limit of this result counts; empty when they do.
    """
    states = [state_of(limit, m) for m in measured]
    worst = max(range(len(measured)), key=lambda k: (_RANKS.index(states[k][0]), -_room(measured[k])))
    (state, message), m = states[worst], measured[worst]
    errors = [k for k, (s, _) in enumerate(states) if s == "error"]
    if state == "exceeded" and errors:
        untested = f"not tested in step {measured[errors[0]].step}: {states[errors[0]][1]}"
        message = "; ".join(t for t in (message, untested) if t)
    if stopped and state != "exceeded":
        state, message = "error", "; ".join(t for t in (message, stopped) if t)
    details = _details(limit, m, states, measured)
    if limit.waiver is not None and state in ("exceeded", "undecided"):
        until = f"until {limit.waiver.expires} by {limit.waiver.owner}: {limit.waiver.reason}"
        if not limit.waiver.holds(today):
            message = "; ".join(t for t in (message, f"its waiver has expired ({until})") if t)
        elif not errors and not stopped:
            message = "; ".join(t for t in (state, message, f"waived {until}") if t)
            details["waived"], state = state, "waived"
    said = (message, m.note, _left_out_words(limit, m), *_passed_over(limit, m))
    return _finding(limit, group, m, state, "; ".join(t for t in said if t), details)


def _passed_over(limit: Limit, m: Measured) -> list[str]:
    """Return sentences on cells of the region that do not count."""
    said = []
    for n, why in ((m.not_computed, "not computed"), (m.lower, "of lower dimension and not counted")):
        if n:
            said.append(f"{n} cell{'s' * (n != 1)} of {limit.region} {'is' if n == 1 else 'are'} {why}")
    return said


def _left_out_words(limit: Limit, m: Measured) -> str:
    if m.left_out is None or not m.left_out.get("cells"):
        return ""
    n, largest = m.left_out["cells"], m.left_out.get("largest")
    said = f"{n} cell{'s' * (n != 1)} left out of {limit.region}"
    if largest is None:
        return said
    where = place_text(
        cast(Place, {k: v for k, v in m.left_out["place"].items() if k not in ("step", "time")})
    )
    peak = f"{number(largest)} {unit_words(limit.unit)}".rstrip()
    return f"{said}: {peak} there, {where}"


def _details(
    limit: Limit, m: Measured, states: Sequence[tuple[State, str]], measured: Sequence[Measured]
) -> dict[str, Any]:
    waiver = limit.waiver
    return {
        "array": limit.quantity.name,
        "component": limit.quantity.component or None,
        "at": limit.quantity.at,
        "frame": limit.quantity.frame,
        "region": limit.region,
        "statistic": limit.statistic,
        "percent": limit.percent,
        "threshold": limit.threshold,
        "values": m.count,
        "without_value": m.missing,
        "left_out": m.left_out,
        "not_computed": m.not_computed,
        "lower_dimension": m.lower,
        "steps": [
            {"step": k.step, "time": k.time, "state": s, "value": _in_unit(limit, k)}
            for k, (s, _) in zip(measured, states)
        ],
        "accept": sorted(limit.accept),
        "reason": limit.reason,
        "source": limit.source,
        "waiver": None
        if waiver is None
        else {"owner": waiver.owner, "reason": waiver.reason, "expires": waiver.expires.isoformat()},
        "waived": None,
    }


def _in_unit(limit: Limit, m: Measured) -> float | None:
    """Return the value in the unit of the limit, on the side of its bounds on which it was found."""
    if math.isnan(m.value):
        return None
    return shown_in(STATISTICS[limit.statistic].unit_of(limit), m.value, m.low, m.high)


def _finding(
    limit: Limit, group: str, m: Measured, state: State, message: str, details: dict[str, Any]
) -> Finding:
    unit = STATISTICS[limit.statistic].unit_of(limit)
    low = limit.at_least if m.low is None else m.low.written
    high = limit.at_most if m.high is None else m.high.written
    return Finding(
        id=limit.id,
        group=group,
        title=limit.title or title_of(limit),
        state=state,
        message=message,
        value=_in_unit(limit, m),
        bound=high if low is None else (low, high),
        plus_minus=None if math.isnan(m.plus_minus) else unit.from_base(m.plus_minus),
        unit=unit_words(unit),
        place=m.place or Place(step=m.step, time=m.time),
        details=details,
    )


def title_of(limit: Limit) -> str:
    """Return a limit in words."""
    q = limit.quantity
    name = f"{q.name} {q.component}".strip()
    frame = f", axes {q.frame}" if q.frame else ""
    at = f", {_PLACE_WORDS[q.at]}" if _PLACE_WORDS[q.at] else ""
    return f"{name}{frame}, {STATISTICS[limit.statistic].words(limit)} in {limit.region}{at}"
