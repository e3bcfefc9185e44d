"""Random limits on random values against an oracle written from the page on limits, not from the code."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from limits_samples import one, row

NUMBERS = st.integers(-16, 16).map(lambda k: k / 4)
CELLS = st.lists(  # value, length and part of each cell
    st.tuples(st.one_of(NUMBERS, NUMBERS, NUMBERS, st.just(math.nan)), st.integers(1, 5), st.integers(1, 3)),
    min_size=1,
    max_size=9,
)


def oracle(values: np.ndarray, lengths: np.ndarray, limit: dict[str, Any]) -> str:
    """Return the state of a limit on the values of a region."""
    if not np.isfinite(values).any():
        return "error"
    finite = np.isfinite(values)
    known = np.repeat(values[finite], lengths[finite])
    plus_minus = limit.get("plus_minus", 0.0)

    def share(threshold: float, whole: np.ndarray) -> float:
        beyond = whole > threshold if "above" in limit else whole < threshold
        return float(beyond.mean())

    statistic = limit["statistic"]
    reach = plus_minus
    if statistic in ("share", "count"):
        threshold = limit.get("above", limit.get("below"))
        sample = known if statistic == "share" else values[finite]
        scale = 100.0 if statistic == "share" else float(len(sample))
        value, *moved = (
            scale * share(t, sample) for t in (threshold, threshold - plus_minus, threshold + plus_minus)
        )
        reach = max(abs(m - value) for m in moved)
    elif statistic == "percentile":
        value = float(np.percentile(known, limit["percent"], method="inverted_cdf"))
    elif statistic == "sum":
        value, reach = float(values[finite].sum()), plus_minus * finite.sum()
    elif statistic == "spread":
        value, reach = float(known.max() - known.min()), 2 * plus_minus
    else:
        take = {
            "maximum": np.max,
            "minimum": np.min,
            "mean": np.mean,
            "largest_magnitude": lambda v: np.abs(v).max(),
        }
        value = float(take[statistic](known))
    low, high = limit.get("at_least", -math.inf), limit.get("at_most", math.inf)
    slack = 1e-9  # means round
    if not low - slack <= value <= high + slack:
        return "exceeded"
    if not finite.all() or value - reach < low - slack or value + reach > high + slack:
        return "undecided"
    return "met"


@pytest.mark.derived("the rules of docs/limits.md, evaluated on values repeated by the length of their cell")
@settings(max_examples=120)
@given(data=st.data(), cells=CELLS)
def test_random_limits_say_what_the_page_says(
    data: st.DataObject, cells: list[tuple[float, int, int]]
) -> None:
    values, lengths, parts = (np.array(v) for v in zip(*cells))
    part = data.draw(st.integers(0, 3))
    kinds = (
        "maximum",
        "minimum",
        "largest_magnitude",
        "mean",
        "sum",
        "percentile",
        "share",
        "count",
        "spread",
    )
    limit: dict[str, Any] = {"array": "v", "statistic": data.draw(st.sampled_from(kinds)), "unit": "number"}
    if part:
        limit["region"] = "it"
    if limit["statistic"] == "percentile":
        limit["percent"] = data.draw(st.sampled_from([1, 25, 50, 75, 99, 100]))
    if limit["statistic"] in ("share", "count"):
        limit[data.draw(st.sampled_from(["above", "below"]))] = data.draw(NUMBERS)
    room = (0, 100) if limit["statistic"] == "share" else (-20, 120)
    bounds = sorted(data.draw(st.lists(st.integers(*room).map(float), min_size=2, max_size=2, unique=True)))
    which = data.draw(st.sampled_from(["at_least", "at_most", "both"]))
    limit |= {k: b for k, b in zip(("at_least", "at_most"), bounds) if which in (k, "both")}
    if data.draw(st.booleans()):
        limit["plus_minus"] = data.draw(st.integers(0, 4)) / 4
    mesh = row([1e-3] * len(values), lengths.tolist(), v=values, part=parts)
    found = one(mesh, limit, regions={"it": {"tag": f"part={part}"}})
    inside = parts == part if part else np.ones(len(values), dtype=bool)
    expected = oracle(values[inside], lengths[inside], limit) if inside.any() else "error"
    assert found.state == expected, limit
