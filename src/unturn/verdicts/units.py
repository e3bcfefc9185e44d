"""Units of limits: how a bound in a unit compares with a value as it is computed."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TypeVar

from unturn.kinematics._symmetric import Floats
from unturn.source import Source

Number = TypeVar("Number", float, Floats)


@dataclass(frozen=True)
class Unit:
    """One unit.

    Parameters
    ----------
    name
        As it is written.
    quantity
        What it is a unit of: ``strain``, ``angle``, ``length``, ``share``, ``number``.
    per_base
        How many of it are one of what is computed: strain without a unit, radian, length as in the file, share of one.
    source
        Where that comes from.
    """

    name: str
    quantity: str
    per_base: float
    source: Source

    def to_base(self, value: Number) -> Number:
        """Return a value in this unit as it is computed.

        Division by a power of ten rounds once: 867 microstrain is the very number that 0.000867 is.
        """
        return value / self.per_base

    def from_base(self, value: Number) -> Number:
        """Return a computed value in this unit."""
        return value * self.per_base


_SI = Source(
    "published", "SI Brochure, 9th edition, tables 7 and 8: prefix micro, degree; section 5.4.7: percent"
)

UNITS: dict[str, Unit] = {
    unit.name: unit
    for unit in (
        Unit("strain", "strain", 1.0, _SI),
        Unit("microstrain", "strain", 1e6, _SI),
        Unit("percent", "strain", 100.0, _SI),
        Unit("radian", "angle", 1.0, _SI),
        Unit("degree", "angle", 180.0 / math.pi, _SI),
        Unit("length", "length", 1.0, Source("practice", "the length unit of the file's coordinates")),
        Unit("number", "number", 1.0, Source("practice", "a plain number, as it is")),
    )
}  # fmt: skip
"""Every unit a limit can be written in."""

SHARE = Unit("percent", "share", 100.0, _SI)
"""Unit of a share of the volume or area: a statistic has it, no limit writes it."""
COUNT = UNITS["number"]
"""Unit of a count."""

OF_MEASURE = {"strain": "strain", "radian": "angle", "1": "number"}
"""The quantity of a unit of `unturn.measures.MEASURES`."""


def unit_words(unit: Unit) -> str:
    """Return a unit behind a number; empty for a plain number."""
    return "" if unit.quantity == "number" else unit.name


@dataclass(frozen=True)
class BoundAt:
    """One bound: as values are computed, and as it is written."""

    base: float
    written: float


def shown_in(unit: Unit, value: float, low: BoundAt | None, high: BoundAt | None) -> float:
    """Return a computed value in a unit, on the side of its bounds on which it was found.

    Examples
    --------
    >>> shown_in(UNITS["microstrain"], 0.000867, None, BoundAt(0.000867, 867.0))
    867.0
    """
    shown = unit.from_base(value)
    if high is not None:
        above = value > high.base
        shown = max(shown, math.nextafter(high.written, math.inf)) if above else min(shown, high.written)
    if low is not None:
        below = value < low.base
        shown = min(shown, math.nextafter(low.written, -math.inf)) if below else max(shown, low.written)
    return shown
