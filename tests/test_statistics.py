"""Weighted percentiles and extremes against counting."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import strategies  # noqa: F401  (its settings)
from unturn.statistics import LOW_PERCENTILES, PERCENTILES, statistics, weighted_percentiles

ALL = (*LOW_PERCENTILES, *PERCENTILES, 0.0, 25.0, 100.0)


def by_counting(values: list[float], weights: list[int], percentage: float) -> float:
    """The smallest value that `percentage` of the copies do not exceed, each value copied `weight` times."""
    copies = sorted(v for v, w in zip(values, weights) for _ in range(w))
    # in whole thousandths, so that nothing rounds: the k-th copy is the first with k / n >= percentage / 100
    needed = -(-round(percentage * 10) * len(copies) // 1000)
    return copies[max(needed, 1) - 1]


@pytest.mark.derived("integer weights are repeated values: sort the copies and count")
@given(st.lists(st.tuples(st.floats(-1e3, 1e3), st.integers(1, 9)), min_size=1, max_size=40))
def test_percentiles_against_repeated_values(pairs: list[tuple[float, int]]) -> None:
    values, weights = [p[0] for p in pairs], [p[1] for p in pairs]
    found = weighted_percentiles(np.array(values), np.array(weights, dtype=float), ALL)
    assert found == [by_counting(values, weights, q) for q in ALL]


@pytest.mark.derived("the size of the weights' unit does not matter")
@given(
    st.lists(st.tuples(st.floats(-1, 1), st.integers(0, 9)), min_size=1, max_size=30),
    st.sampled_from([1e-9, 0.1, 1 / 3, 7e5]),
)
def test_percentiles_do_not_depend_on_the_unit_of_volume(pairs: list[tuple[float, int]], unit: float) -> None:
    values, weights = np.array([p[0] for p in pairs]), np.array([float(p[1]) for p in pairs])
    assert weighted_percentiles(values, weights * unit, PERCENTILES) == weighted_percentiles(
        values, weights, PERCENTILES
    )


@pytest.mark.source("numpy.percentile(method='inverted_cdf'), numpy 2")
@given(st.lists(st.floats(-1e6, 1e6), min_size=1, max_size=200))
def test_equal_weights_against_numpy(values: list[float]) -> None:
    array = np.array(values)
    found = weighted_percentiles(array, np.full(len(array), 0.25), [5, 50, 95])
    assert found == np.percentile(array, [5, 50, 95], method="inverted_cdf").tolist()


def test_a_thousandth_of_the_volume_is_found() -> None:
    values = np.array([1.0, 2.0, 3.0])
    assert weighted_percentiles(values, np.array([998.0, 1.0, 1.0]), [99.8, 99.9, 99.95]) == [1.0, 2.0, 3.0]


def test_no_weight_at_all_counts_values() -> None:
    assert weighted_percentiles(np.array([3.0, 1.0, 2.0]), np.zeros(3), [50, 100]) == [2.0, 3.0]


def test_nothing_gives_nothing() -> None:
    assert np.isnan(weighted_percentiles(np.zeros(0), np.zeros(0), [50])).all()
    nothing = statistics(np.full(3, np.nan), np.ones(3), np.arange(3))
    assert (nothing.count, nothing.left_out, nothing.at_maximum) == (0, 3, -1)
    assert np.isnan(nothing.maximum)


def test_extremes_mean_and_places() -> None:
    values = np.array([5.0, np.nan, -2.0, 9.0, np.inf, 1.0, 100.0])
    weights = np.array([1.0, 1.0, 2.0, 1.0, 1.0, np.nan, 1.0])
    found = statistics(values, weights, np.array([3, 2, 1, 0, 4, 5]))
    assert (found.count, found.left_out) == (3, 3)
    assert (found.maximum, found.at_maximum) == (9.0, 3)
    assert (found.minimum, found.at_minimum) == (-2.0, 2)
    assert found.mean == pytest.approx((5 - 4 + 9) / 4)
    assert found.percentiles[50.0] == -2.0


def test_of_equal_extremes_the_first_is_named() -> None:
    assert statistics(np.array([1.0, 1.0]), np.ones(2), np.arange(2)).at_maximum == 0


def test_a_million_weights_round_without_losing_a_value() -> None:
    weights = np.full(1_000_000, 0.1)
    values = np.arange(1_000_000.0)
    assert weighted_percentiles(values, weights, [50, 99.9, 100]) == [499_999.0, 998_999.0, 999_999.0]
