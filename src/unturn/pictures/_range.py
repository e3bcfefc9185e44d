"""The colour range: what its ends are, and how many values lie outside."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError
from unturn.picture_wishes import RangeWish
from unturn.pictures._colours import Range, round_up
from unturn.statistics import weighted_percentiles

Floats = NDArray[np.float64]
_FAR = 1.25  # the range is cut where the extreme is this much larger than the percentile


@dataclass(frozen=True)
class Ends:
    """The two ends of a colour range, in the unit of the array, and how they were chosen."""

    low: float
    high: float
    words: str

    def symmetric(self) -> Ends:
        """Return ends as far below zero as above."""
        far = max(abs(self.low), abs(self.high))
        return Ends(-far, far, f"{self.words}, symmetric")


def choose_range(values: Floats, given: tuple[float, float] | None = None) -> Range:
    """Return the range of `values` `(n,)` between two ends, or between automatic ones.

    Raises
    ------
    UsageError
        A `given` range that is none.
    """
    if given is None:
        return in_range(values, automatic(values))
    low, high = given
    if not (np.isfinite(low) and np.isfinite(high) and low < high):
        raise UsageError(f"the colour range {low} to {high}: give two numbers, the lower one first.")
    return in_range(values, Ends(low, high, "range: as given"))


def in_range(values: Floats, ends: Ends, two_sided: bool = False) -> Range:
    """Return the range with these ends, and what of `values` lies outside."""
    finite = np.isfinite(values)
    above, below = int((values[finite] > ends.high).sum()), int((values[finite] < ends.low).sum())
    missing = len(values) - int(finite.sum())
    return Range(ends.low, ends.high, above, below, missing, len(values), ends.words, two_sided)


def automatic(values: Floats) -> Ends:
    """Return ends that hold 0 and reach to the smallest and the largest value.

    An end that lies far beyond 99.9 % of the values is drawn in to them; ends are rounded outwards to two digits.
    """
    finite = np.sort(values[np.isfinite(values)])
    if not len(finite):
        return Ends(0.0, 0.0, "")
    most, least = _drawn_in(finite), _drawn_in(-finite[::-1])
    high = round_up(most) if finite[-1] > 0 else 0.0
    low = -round_up(least) if finite[0] < 0 else 0.0
    whole = (high == 0.0 or most == finite[-1]) and (low == 0.0 or least == -finite[0])
    return Ends(low, high, "range: to the extremes" if whole else "range: to 99.9 % of the values")


def _drawn_in(ascending: Floats) -> float:
    """Return the largest value, or the one 99.9 % do not exceed when that is far below it."""
    most = float(ascending[int(np.ceil(0.999 * len(ascending))) - 1])
    largest = float(ascending[-1])
    return most if most > 0 and largest > _FAR * most else largest


def ends_of(wish: RangeWish, values: Floats, weights: Floats | None, scale: float) -> Ends:
    """Return the ends that are asked for; those of a shared range are automatic until they are joined.

    Parameters
    ----------
    wish
        What is asked for.
    values
        `(n,)` those that are drawn.
    weights
        `(n,)` volumes, for percentiles; None: every value counts the same.
    scale
        Number in the legend per number of the array.
    """
    if wish.how == "fixed":
        return Ends(wish.low / scale, wish.high / scale, "range: as given")
    finite = np.isfinite(values)
    if wish.how in ("auto", "shared") or not finite.any():
        return automatic(values)
    if wish.how == "full":
        return Ends(float(values[finite].min()), float(values[finite].max()), "range: smallest to largest")
    weight = np.ones(len(values)) if weights is None else np.where(np.isfinite(weights), weights, 0.0)
    q = wish.percentage
    low, high = weighted_percentiles(values[finite], weight[finite], [100.0 - q, q])
    of = "values" if weights is None else "volume"
    return Ends(min(low, 0.0), max(high, 0.0), f"range: to {q:g} % of the {of}")


def joined(ends: Sequence[Ends]) -> Ends:
    """Return the ends that hold all of these."""
    low, high = min(e.low for e in ends), max(e.high for e in ends)
    n = len(ends)
    return Ends(low, high, f"range: shared by {n} pictures" if n > 1 else ends[0].words)
