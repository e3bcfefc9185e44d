"""Statistics over cells with their volume as weight."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unturn.kinematics._symmetric import Floats

PERCENTILES = (50.0, 95.0, 99.0, 99.9)
LOW_PERCENTILES = (0.1, 1.0, 5.0)
_BINS = 4096
_TIE = 1e-9  # share of the extreme within which cells count as equal


@dataclass(frozen=True)
class Statistics:
    """Statistics of one number over some cells.

    Attributes
    ----------
    count, left_out
        Cells with a finite value, and those without.
    maximum, minimum
        Largest and smallest value.
    at_maximum, at_minimum
        Zero-based file positions of the cells that hold them.
    mean
        Volume-weighted.
    percentiles
        ``{q: value}``, volume-weighted.
    """

    count: int
    left_out: int
    maximum: float
    minimum: float
    at_maximum: int
    at_minimum: int
    mean: float
    percentiles: dict[float, float]


def _first_extreme(values: Floats) -> int:
    """Return the first position whose value is the largest to rounding: symmetric twins always name the same cell."""
    largest = float(values.max())
    return int(np.argmax(values >= largest - _TIE * abs(largest)))


def weighted_percentiles(
    values: Floats | NDArray[np.float64], weights: Floats, percentages: Sequence[float]
) -> list[float]:
    """Return the smallest value whose cumulative weight reaches each percentage of the whole.

    Parameters
    ----------
    values, weights
        `(n,)`, finite; weights not negative. Without any weight every value counts the same.
    percentages
        0 to 100.

    Notes
    -----
    The weighted inverted cumulative distribution; with equal weights numpy's ``inverted_cdf``.

    Examples
    --------
    >>> import numpy as np
    >>> weighted_percentiles(np.array([3.0, 1.0, 2.0]), np.array([1.0, 1.0, 8.0]), [50, 95])
    [2.0, 3.0]
    """
    if not len(values):
        return [float("nan")] * len(percentages)
    if not weights.sum() > 0:
        weights = np.ones(len(values))
    bins = _bins(values)
    in_bin = np.cumsum(np.bincount(bins, weights=weights))
    found = []
    for q in percentages:
        # the sum of n weights rounds by up to n times 1.1e-16: a percentage that is reached to rounding is reached
        target = q / 100.0 * in_bin[-1] * (1.0 - 4e-16 - 1.2e-16 * len(values))
        b = min(int(np.searchsorted(in_bin, target)), len(in_bin) - 1)
        inside = np.flatnonzero(bins == b)
        order = inside[np.argsort(values[inside])]
        before = in_bin[b - 1] if b else 0.0
        place = int(np.searchsorted(before + np.cumsum(weights[order]), target))
        found.append(float(values[order[min(place, len(order) - 1)]]))
    return found


def _bins(values: Floats) -> NDArray[np.int64]:
    """Return a bin number for each value, rising with the value: only one bin must then be sorted."""
    low, high = float(values.min()), float(values.max())
    if len(values) < 4 * _BINS or not np.isfinite(high - low) or not high > low:
        return np.zeros(len(values), dtype=np.int64)
    scaled = (values - low) / (high - low) * _BINS
    return np.minimum(scaled.astype(np.int64), _BINS - 1)


def statistics(
    values: Floats, weights: Floats, cells: NDArray[np.int64], percentages: Sequence[float] = PERCENTILES
) -> Statistics:
    """Return statistics of `values[cells]`, finite ones only.

    Parameters
    ----------
    values, weights
        `(n_cells,)` in file order.
    cells
        File positions to take.
    percentages
        Which percentiles.
    """
    picked, weight = values[cells], weights[cells]
    finite = np.isfinite(picked) & np.isfinite(weight)
    if not finite.all():
        cells, picked, weight = cells[finite], picked[finite], weight[finite]
    if not len(cells):
        nan = float("nan")
        return Statistics(0, len(finite), nan, nan, -1, -1, nan, dict.fromkeys(percentages, nan))
    high, low = _first_extreme(picked), _first_extreme(-picked)
    total = float(weight.sum())
    mean = float((picked * weight).sum() / total) if total > 0 else float(picked.mean())
    found = weighted_percentiles(picked, weight, percentages) if percentages else []
    return Statistics(
        len(cells),
        len(finite) - len(cells),
        float(picked[high]),
        float(picked[low]),
        int(cells[high]),
        int(cells[low]),
        mean,
        dict(zip(percentages, found)),
    )
