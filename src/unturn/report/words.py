"""Numbers of a report in words: an extreme is never told smaller than it is, nor a plus and minus."""

from __future__ import annotations

import math
from collections.abc import Sequence
from decimal import ROUND_CEILING, ROUND_FLOOR

from unturn.report.content import Extreme
from unturn.trusted import Which
from unturn.verdicts.finding import Place
from unturn.verdicts.wording import number, place_text

UNITS = {"strain": (1e6, "microstrain"), "radian": (180.0 / math.pi, "degree")}
"""Unit of an array -> factor to the unit that is told, and its name."""

NONE = "–"
_NOTHING = 1e-9
"""In the unit that is told: less is rounding of the numbers themselves."""
_DIGITS = 5


def shown_value(value: float, unit: str) -> float:
    """Return a value in the unit that is told, without the rounding of the change of unit.

    Examples
    --------
    >>> shown_value(0.0011, "strain")
    1100.0
    """
    factor, _ = UNITS.get(unit, (1.0, unit))
    return float(f"{value * factor:.15g}")


def unit_name(unit: str) -> str:
    """Return the unit that is told."""
    return UNITS[unit][1] if unit in UNITS else unit


def outward(value: float, which: Which, unit: str, digits: int = _DIGITS) -> str:
    """Return an extreme with a few digits, a largest one rounded up and a smallest one down.

    Examples
    --------
    >>> outward(0.00100000001, "maximum", "strain"), outward(-0.0012345678, "minimum", "strain")
    ('1000.1', '-1234.6')
    """
    if not math.isfinite(value):
        return NONE
    rounding = ROUND_CEILING if which == "maximum" else ROUND_FLOOR
    told = shown_value(value, unit)
    return "0" if abs(told) < _NOTHING else number(told, rounding, digits)


def bound(plus_minus: float, unit: str) -> str:
    """Return a plus and minus with two digits, rounded up.

    Examples
    --------
    >>> bound(0.0013210, "strain"), bound(float("nan"), "strain")
    ('1400', '–')
    """
    return number(shown_value(plus_minus, unit), ROUND_CEILING, 2) if math.isfinite(plus_minus) else NONE


def percent(ratio: float, digits: int = 2) -> str:
    """Return a ratio in percent, rounded up.

    Examples
    --------
    >>> percent(0.0871), percent(13.2), percent(0.0)
    ('8.8 %', '1400 %', '0 %')
    """
    if not math.isfinite(ratio):
        return NONE
    return "0 %" if 100.0 * ratio < _NOTHING else f"{number(100.0 * ratio, ROUND_CEILING, digits)} %"


def place_of(e: Extreme) -> str:
    """Return where an extreme is."""
    if e.cell < 0:
        return NONE
    return place_text(Place(cell=e.cell, element=e.element))


def coordinates(at: Sequence[float] | None, digits: int = 4) -> str:
    """Return reference coordinates."""
    return NONE if at is None else ", ".join(number(x, digits=digits) for x in at)


def size_text(size: int) -> str:
    """Return a number of bytes.

    Examples
    --------
    >>> size_text(1234567)
    '1 234 567 bytes'
    """
    return f"{size:,} bytes".replace(",", " ")
