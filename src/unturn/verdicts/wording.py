"""Numbers and names of findings in words: no rounding hides a side, no name breaks a table."""

from __future__ import annotations

import math
import unicodedata
from decimal import ROUND_CEILING, ROUND_FLOOR, ROUND_HALF_EVEN, Context, Decimal
from pathlib import PurePath

from unturn.verdicts.finding import Finding, Place, Report

_DIGITS = 5
_MOST_DIGITS = 17  # of a double
_DIRECTION = frozenset("\u200e\u200f\u061c\u202a\u202b\u202c\u202d\u202e\u2066\u2067\u2068\u2069")


def short_name(path: str) -> str:
    """Return what findings call a result: the name of its file.

    Examples
    --------
    >>> short_name("results/foot.vtu"), short_name("")
    ('foot.vtu', '(in memory)')
    """
    return PurePath(path).name or "(in memory)"


def clean(text: str) -> str:
    r"""Return a text on one line that every format can hold: control characters, halves of pairs and marks that turn the
    reading direction become escapes.

    Examples
    --------
    >>> print(clean("peak\n\x00\ud800"))
    peak\n\x00\ud800
    """
    return "".join(_escaped(c) if _unprintable(c) else c for c in text)


def _unprintable(c: str) -> bool:
    code = ord(c)
    return (
        unicodedata.category(c) in ("Cc", "Cs", "Zl", "Zp")
        or c in _DIRECTION
        or code & 0xFFFE == 0xFFFE
        or 0xFDD0 <= code <= 0xFDEF
        or code == 0xFEFF
    )


def _escaped(c: str) -> str:
    return c.encode("unicode_escape", errors="surrogatepass").decode("ascii")


def number(value: float | None, rounding: str = ROUND_HALF_EVEN, digits: int = _DIGITS) -> str:
    """Return a number with so many digits at most; empty for None.

    Examples
    --------
    >>> number(1512.3456), number(1e-9), number(0.0), number(float("nan"))
    ('1512.3', '1e-9', '0', 'nan')
    """
    if value is None:
        return ""
    if not math.isfinite(value):
        return str(value)
    return _plain(_rounded(_exact(value), digits, rounding))


def value_text(value: float | None, low: float | None = None, high: float | None = None) -> str:
    """Return a value, rounded away from met, with as many digits as show on which side of each bound it is.

    Examples
    --------
    >>> value_text(1000.0004, high=1000.0), value_text(999.99997, high=1000.0), value_text(12.34567, low=10.0)
    ('1000.1', '999.99997', '12.345')
    """
    bounds = [_exact(b) for b in (low, high) if b is not None and math.isfinite(b)]
    if value is None or not math.isfinite(value) or not bounds:
        return number(value)
    exact = _exact(value)
    rounding = _away(exact, bounds, low, high)
    for digits in range(_DIGITS, _MOST_DIGITS):
        shown = _rounded(exact, digits, rounding)
        if all(shown.compare(b) == exact.compare(b) for b in bounds):
            return _plain(shown)
    return _plain(exact)


def _away(exact: Decimal, bounds: list[Decimal], low: float | None, high: float | None) -> str:
    if len(bounds) == 2:
        return ROUND_CEILING if 2 * exact >= bounds[0] + bounds[1] else ROUND_FLOOR
    return ROUND_CEILING if high is not None and math.isfinite(high) else ROUND_FLOOR


def _exact(value: float) -> Decimal:
    return Decimal(repr(float(value)))  # the shortest decimals keep the order of the numbers


def _rounded(exact: Decimal, digits: int, rounding: str) -> Decimal:
    return Context(prec=digits, rounding=rounding).plus(exact)


def _plain(value: Decimal) -> str:
    if not value:
        return "0"
    if -5 <= value.adjusted() < 8:
        text = format(value, "f")
        return text.rstrip("0").rstrip(".") if "." in text else text
    digits = "".join(map(str, value.as_tuple().digits)).rstrip("0")
    fraction = f".{digits[1:]}" if len(digits) > 1 else ""
    return f"{'-' * value.is_signed()}{digits[0]}{fraction}e{value.adjusted()}"


def bound_text(finding: Finding) -> str:
    """Return the bound in words, with every digit of it; empty when there is none."""
    low, high = (None if b is None else _all_digits(b) for b in (finding.low, finding.high))
    if low is not None and high is not None:
        return f"{low} to {high}"
    if high is not None:
        return f"at most {high}"
    return "" if low is None else f"at least {low}"


def _all_digits(value: float) -> str:
    return _plain(_exact(value)) if math.isfinite(value) else str(value)


def measured_text(finding: Finding) -> str:
    """Return the value and how far it may be off."""
    text = value_text(finding.value, finding.low, finding.high)
    if finding.plus_minus is None:
        return text
    return f"{text} +-{number(finding.plus_minus, ROUND_CEILING, 3)}"


def margin_text(finding: Finding) -> str:
    """Return what is left up to the bound, never more than there is."""
    return number(finding.margin, ROUND_FLOOR, 3)


def place_text(place: Place) -> str:
    """Return a place in words.

    Examples
    --------
    >>> place_text({"cell": 7, "element": 8, "at": (0.0, 1.0, 0.5), "step": 2, "time": 0.5})
    'element 8 (cell 7) at 0, 1, 0.5; step 2 (t = 0.5)'
    """
    where = [
        _numbered("element", "cell", place.get("element"), place.get("cell")),
        _numbered("node", "point", place.get("node"), place.get("point")),
    ]
    at = place.get("at")
    if at is not None:
        where.append("at " + ", ".join(number(x) for x in at))
    text = " ".join(w for w in where if w)
    step, time = place.get("step"), place.get("time")
    when = f"step {step}" if step is not None else ""
    if time is not None:
        when = f"{when} (t = {number(time, digits=_MOST_DIGITS)})".lstrip()
    return "; ".join(w for w in (text, when) if w)


def _numbered(theirs: str, ours: str, number_: int | None, position: int | None) -> str:
    if position is None:
        return "" if number_ is None else f"{theirs} {number_}"
    return f"{ours} {position}" if number_ is None else f"{theirs} {number_} ({ours} {position})"


def counts_text(report: Report) -> str:
    """Return how many findings have each state, in one line."""
    counts, n = report.counts, len(report.findings)
    listed = ", ".join(f"{k} {'with an error' if s == 'error' else s}" for s, k in counts.items())
    allowed = " (undecided is allowed)" if report.allow_undecided and "undecided" in counts else ""
    return f"{listed} of {n}{allowed}: {'PASSED' if report.passed else 'NOT PASSED'}"
