"""The table of statistics of limits: one number from the values of a region."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np

from unturn.kinematics._symmetric import Floats
from unturn.source import Source
from unturn.statistics import weighted_percentiles
from unturn.verdicts.limit import Limit
from unturn.verdicts.units import COUNT, SHARE, Unit, unit_words


@dataclass(frozen=True, eq=False)
class Sample:
    """Finite values and their weights, `(n,)` each, n at least 1."""

    values: Floats
    weights: Floats


@dataclass(frozen=True)
class Got:
    """A statistic of a sample.

    Attributes
    ----------
    value
        Of it.
    ends
        Positions in the sample of the values it rests on, the first being where it is; and whether the smallest was
        looked for there. Empty where it is of the whole sample.
    """

    value: float
    ends: tuple[tuple[int, bool], ...] = ()


Spread = Callable[[Sample, Limit, Got, list[float]], float]


@dataclass(frozen=True)
class Statistic:
    """One statistic.

    Parameters
    ----------
    name
        As it is written.
    meaning
        One line for people.
    words
        In words, from the limit: completes "principal_strain 1, ...".
    compute
        From a sample and the limit.
    spread
        Its plus and minus from those of its ends; NaN for none.
    needs
        The keys that must be written with it: ``percent``, or one of ``above`` and ``below`` for ``threshold``.
    unit
        Its own unit where that is not the limit's.
    extreme
        Whether it is one value of the region, which may be a singular peak.
    per_cell
        Which bound may be an array, compared value by value; of ``|v|`` where `magnitude` is set.
    magnitude
        Whether magnitudes are compared.
    over_steps
        Whether it is of all steps together.
    source
        Where its definition comes from.
    """

    name: str
    meaning: str
    words: Callable[[Limit], str]
    compute: Callable[[Sample, Limit], Got]
    spread: Spread
    source: Source
    needs: Literal["", "percent", "threshold"] = ""
    unit: Unit | None = None
    extreme: bool = False
    per_cell: Literal["", "at_most", "at_least"] = ""
    magnitude: bool = False
    over_steps: bool = False

    def unit_of(self, limit: Limit) -> Unit:
        """Return the unit of its bound and value."""
        return self.unit or limit.unit


def _maximum(sample: Sample, limit: Limit) -> Got:
    at = int(sample.values.argmax())
    return Got(float(sample.values[at]), ((at, False),))


def _minimum(sample: Sample, limit: Limit) -> Got:
    at = int(sample.values.argmin())
    return Got(float(sample.values[at]), ((at, True),))


def _largest_magnitude(sample: Sample, limit: Limit) -> Got:
    high, low = _maximum(sample, limit), _minimum(sample, limit)
    return high if high.value >= -low.value else Got(-low.value, low.ends)


def _spread_of_region(sample: Sample, limit: Limit) -> Got:
    high, low = _maximum(sample, limit), _minimum(sample, limit)
    return Got(high.value - low.value, (*high.ends, *low.ends))


def _mean(sample: Sample, limit: Limit) -> Got:
    total = float(sample.weights.sum())
    if not total > 0:
        return Got(float(sample.values.mean()))
    return Got(float((sample.values * sample.weights).sum()) / total)


def _sum(sample: Sample, limit: Limit) -> Got:
    return Got(math.fsum(sample.values) if len(sample.values) < 100_000 else float(sample.values.sum()))


def _percentile(sample: Sample, limit: Limit) -> Got:
    assert limit.percent is not None
    value = weighted_percentiles(sample.values, sample.weights, [limit.percent])[0]
    return Got(value, ((int((sample.values == value).argmax()), limit.percent < 50.0),))


def _beyond(sample: Sample, limit: Limit, moved: float = 0.0) -> Floats:
    """Return where values are beyond the threshold, moved outwards by so much."""
    if limit.above is not None:
        return np.asarray(sample.values > limit.above + moved)
    assert limit.below is not None
    return np.asarray(sample.values < limit.below - moved)


def _share(sample: Sample, limit: Limit, moved: float = 0.0) -> float:
    beyond = _beyond(sample, limit, moved)
    total = float(sample.weights.sum())
    if not total > 0:
        return float(beyond.mean())
    return float(sample.weights[beyond].sum()) / total


def _count(sample: Sample, limit: Limit, moved: float = 0.0) -> float:
    return float(_beyond(sample, limit, moved).sum())


def _crossing(take: Callable[[Sample, Limit], float]) -> Callable[[Sample, Limit], Got]:
    """Return a statistic whose end is the value nearest to the threshold."""

    def compute(sample: Sample, limit: Limit) -> Got:
        threshold = limit.above if limit.above is not None else limit.below
        assert threshold is not None
        near = int(np.abs(sample.values - threshold).argmin())
        return Got(take(sample, limit), ((near, limit.below is not None),))

    return compute


def _added(sample: Sample, limit: Limit, got: Got, ends: list[float]) -> float:
    return sum(ends) if ends else math.nan


def _none(sample: Sample, limit: Limit, got: Got, ends: list[float]) -> float:
    return math.nan


def _stated_mean(sample: Sample, limit: Limit, got: Got, ends: list[float]) -> float:
    """Return how far a mean may be off: known only where the limit states it for every value."""
    return math.nan if limit.plus_minus is None else limit.unit.to_base(limit.plus_minus)


def _stated_sum(sample: Sample, limit: Limit, got: Got, ends: list[float]) -> float:
    return len(sample.values) * _stated_mean(sample, limit, got, ends)


def _moved(take: Callable[[Sample, Limit, float], float]) -> Spread:
    """Return how far a statistic goes when its threshold is moved by the plus and minus."""

    def spread(sample: Sample, limit: Limit, got: Got, ends: list[float]) -> float:
        if not math.isfinite(ends[0]):
            return math.nan
        low, high = (take(sample, limit, move) for move in (ends[0], -ends[0]))
        return max(high - got.value, got.value - low, 0.0)

    return spread


def _threshold_words(limit: Limit) -> str:
    side = "above" if limit.above is not None else "below"
    return f"{side} {limit.threshold:g} {unit_words(limit.unit)}".rstrip()


_PLAIN = Source("practice", "extremes, mean and sum of values")
_WEIGHTED = Source("practice", "weighted inverted cumulative distribution, volume as weight")
_OVER_STEPS = Source("derived", "differences between the steps of a series, cell by cell")


STATISTICS: dict[str, Statistic] = {
    row.name: row
    for row in (
        Statistic("maximum", "largest value", lambda v: "largest", _maximum, _added, _PLAIN, extreme=True,
                  per_cell="at_most"),
        Statistic("minimum", "smallest value", lambda v: "smallest", _minimum, _added, _PLAIN, extreme=True,
                  per_cell="at_least"),
        Statistic("largest_magnitude", "largest value without its sign", lambda v: "largest magnitude",
                  _largest_magnitude, _added, _PLAIN, extreme=True, per_cell="at_most", magnitude=True),
        Statistic("mean", "mean, weighted by volume", lambda v: "mean", _mean, _stated_mean, _WEIGHTED),
        Statistic("sum", "sum of the values, each counted once", lambda v: "sum", _sum, _stated_sum, _PLAIN),
        Statistic("percentile", "smallest value that `percent` % of the volume do not exceed",
                  lambda v: f"{v.percent:g} % of the volume below", _percentile, _added, _WEIGHTED, needs="percent"),
        Statistic("share", "share of the volume `above` (or `below`) a value; bounds in percent of the volume",
                  lambda v: f"share {_threshold_words(v)}", _crossing(_share), _moved(_share), _WEIGHTED,
                  needs="threshold", unit=SHARE),
        Statistic("count", "number of cells (nodes, faces) `above` (or `below`) a value",
                  lambda v: f"count {_threshold_words(v)}", _crossing(_count), _moved(_count), _PLAIN,
                  needs="threshold", unit=COUNT),
        Statistic("spread", "largest less smallest value of the region, in one step", lambda v: "largest less smallest",
                  _spread_of_region, _added, _PLAIN, extreme=True),
        Statistic("range", "largest less smallest value over the steps, of the cell where that is largest",
                  lambda v: "largest range over steps", _maximum, _none, _OVER_STEPS, over_steps=True),
        Statistic("tensor_range", "equivalent of the largest difference of the strain tensors of any two steps, of the "
                  "cell where that is largest; measure `strain`", lambda v: "largest tensor range over steps", _maximum,
                  _none, _OVER_STEPS, over_steps=True),
    )
}  # fmt: skip
"""Every statistic."""
