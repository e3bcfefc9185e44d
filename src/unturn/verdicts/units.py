"""Units of limits: how a bound in a unit compares with a value as it is computed."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from unturn.source import Source


@dataclass(frozen=True)
class Unit:
    """One unit.

    Parameters
    ----------
    name
        As it is written.
    quantity
        What it is a unit of: ``strain``, ``angle``, ``length``, ``share``, ``number``.
    to_base, from_base
        To and from the value as it is computed: strain without a unit, radian, length as in the file, share of one.
    source
        Where the factor comes from.
    """

    name: str
    quantity: str
    to_base: Callable[[float], float]
    from_base: Callable[[float], float]
    source: Source


_SAME: Callable[[float], float] = float
_SI = Source(
    "published", "SI Brochure, 9th edition, tables 7 and 8: prefix micro, degree; section 5.4.7: percent"
)

UNITS: dict[str, Unit] = {
    unit.name: unit
    for unit in (
        # division by a power of ten rounds once, so that 867 microstrain is the very number 0.000867
        Unit("strain", "strain", _SAME, _SAME, _SI),
        Unit("microstrain", "strain", lambda x: x / 1e6, lambda x: x * 1e6, _SI),
        Unit("percent", "strain", lambda x: x / 100.0, lambda x: x * 100.0, _SI),
        Unit("radian", "angle", _SAME, _SAME, _SI),
        Unit("degree", "angle", lambda x: x * (math.pi / 180.0), lambda x: x * (180.0 / math.pi), _SI),
        Unit("length", "length", _SAME, _SAME, Source("practice", "the length unit of the file's coordinates")),
        Unit("number", "number", _SAME, _SAME, Source("practice", "a plain number, as it is")),
    )
}  # fmt: skip
"""Every unit a limit can be written in."""

SHARE = Unit("percent of volume", "share", lambda x: x / 100.0, lambda x: x * 100.0, _SI)
"""Unit of a share of the volume: a statistic has it, no limit writes it."""

COUNT = UNITS["number"]
"""Unit of a count."""

OF_MEASURE = {"strain": "strain", "radian": "angle", "1": "number"}
"""The quantity of a unit of `unturn.measures.MEASURES`."""


def unit_words(unit: Unit) -> str:
    """Return a unit behind a number; empty for a plain number."""
    return "" if unit.quantity == "number" else unit.name


def shown_in(unit: Unit, value: float, bound: float, written: float) -> float:
    """Return a value in a unit, on the side of its bound on which it was found.

    Parameters
    ----------
    unit
        The unit.
    value, bound
        As computed; they were compared like this.
    written
        The bound in the unit.

    Examples
    --------
    >>> shown_in(UNITS["microstrain"], 0.000867, 0.000867, 867.0)
    867.0
    """
    converted = unit.from_base(value)
    if value == bound:
        return written
    if value > bound and converted <= written:
        return math.nextafter(written, math.inf)
    if value < bound and converted >= written:
        return math.nextafter(written, -math.inf)
    return converted
