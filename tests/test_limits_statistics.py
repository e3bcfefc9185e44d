"""Every statistic and every unit of a limit, at its bound, just below and just above it, against counting by hand."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from limits_samples import Series, checked_series, grid, one, row, written
from unturn.verdicts.statistic import STATISTICS
from unturn.verdicts.units import UNITS

# the lengths of the cells are whole numbers and the values sums of powers of two: nothing rounds
LENGTHS = [1, 2, 4, 1, 8]
VALUES = [3.0, -5.0, 2.5, 4.0, -0.5]
MESH = row([1e-3] * 5, LENGTHS, v=VALUES)
EXPANDED = np.sort(np.repeat(VALUES, LENGTHS))

CASES: list[tuple[str, dict[str, Any], float]] = [
    ("maximum", {}, 4.0),
    ("minimum", {}, -5.0),
    ("largest_magnitude", {}, 5.0),
    ("mean", {}, float(EXPANDED.mean())),
    ("sum", {}, 4.0),
    ("percentile", {"percent": 50}, float(EXPANDED[math.ceil(0.50 * 16) - 1])),
    ("percentile", {"percent": 90}, float(EXPANDED[math.ceil(0.90 * 16) - 1])),
    ("percentile", {"percent": 100}, 4.0),
    ("share", {"above": 2.0}, 100 * 6 / 16),
    ("share", {"above": 2.5}, 100 * 2 / 16),
    ("share", {"below": 2.5}, 100 * 10 / 16),
    ("count", {"above": 2.0}, 3.0),
    ("count", {"below": -0.5}, 1.0),
    ("spread", {}, 9.0),
]


@pytest.mark.derived("counted by hand: values repeated as often as their cell is long")
@pytest.mark.parametrize(("statistic", "more", "expected"), CASES)
def test_each_statistic_at_just_below_and_just_above_its_bound(
    statistic: str, more: dict[str, Any], expected: float
) -> None:
    limit = {"array": "v", "statistic": statistic, "unit": "number", **more}
    for at_most, at_least, state in (
        (expected, None, "met"),
        (np.nextafter(expected, np.inf), None, "met"),
        (np.nextafter(expected, -np.inf), None, "exceeded"),
        (None, expected, "met"),
        (None, np.nextafter(expected, -np.inf), "met"),
        (None, np.nextafter(expected, np.inf), "exceeded"),
        (expected, expected, "met"),
    ):
        bounds = {k: float(v) for k, v in (("at_most", at_most), ("at_least", at_least)) if v is not None}
        found = one(MESH, {**limit, **bounds})
        assert found.state == state, bounds
        assert found.value == expected


@pytest.mark.derived("every statistic of the table has its case, here or among those over steps")
def test_no_statistic_is_left_out() -> None:
    assert {c[0] for c in CASES} | {"range", "tensor_range"} == set(STATISTICS)


# the bound in each unit, and the number a computed array then holds
UNIT_CASES = [
    ("strain", 867e-6, 867e-6),
    ("microstrain", 867.0, 867e-6),
    ("percent", 0.0867, 867e-6),
    ("degree", 30.0, math.pi / 6),
    ("radian", 0.3, 0.3),
    ("length", 0.3, 0.3),
    ("number", 0.3, 0.3),
]


@pytest.mark.source(
    "SI Brochure, 9th edition: prefixes, degree; a bound at which a value is written is that very value"
)
@pytest.mark.parametrize(("unit", "bound", "base"), UNIT_CASES)
def test_each_unit_at_just_below_and_just_above_its_bound(unit: str, bound: float, base: float) -> None:
    for factor, state in ((1.0, "met"), (1.0 - 1e-12, "met"), (1.0 + 1e-12, "exceeded")):
        # the array holds what is computed: strain without a unit, radian
        stored = {"microstrain": "strain", "percent": "strain", "degree": "radian"}.get(unit, unit)
        mesh = row([1e-3], v=[base * factor])
        found = one(
            mesh, {"array": "v", "statistic": "maximum", "unit": unit, "stored_in": stored, "at_most": bound}
        )
        assert found.state == state, factor
        assert found.value == pytest.approx(bound * factor, rel=1e-13)
        assert found.value is not None
        assert (found.value <= bound) is (state == "met")


@pytest.mark.derived("every unit of the table has its case")
def test_no_unit_is_left_out() -> None:
    assert {c[0] for c in UNIT_CASES} == set(UNITS)


@pytest.mark.derived("a row of bricks, each with its own strain, rotation zero")
def test_a_measure_is_held_in_its_units() -> None:
    mesh = row([1e-3, 2e-3, -4e-3])
    strain = {
        "measure": "strain",
        "component": "XX",
        "statistic": "minimum",
        "accept": ["plus-minus", "singular"],
    }
    for unit, value in (("strain", -4e-3), ("microstrain", -4000.0), ("percent", -0.4)):
        for factor, state in ((1 + 1e-9, "met"), (1 - 1e-9, "exceeded")):
            found = one(mesh, {**strain, "unit": unit, "at_least": value * factor})
            assert found.state == state
            assert found.value == pytest.approx(value)
            assert found.unit == unit
            assert found.place["cell"] == 2
            assert found.place["at"] == pytest.approx((2.5, 0.5, 0.5))


@pytest.mark.derived("u = w x X with w = 0.01 about z: rotation vector (0, 0, 0.01) rad")
def test_rotations_are_held_in_degrees() -> None:
    mesh = grid(2)
    u = 0.01 * np.stack([-mesh.points[:, 1], mesh.points[:, 0], 0 * mesh.points[:, 0]], axis=1)
    turned = mesh.with_arrays(point_data={"u": u})
    limit = {"measure": "rotation", "component": "magnitude", "statistic": "maximum", "unit": "degree"}
    for factor, state in ((1 + 1e-9, "met"), (1 - 1e-9, "exceeded")):
        assert one(turned, {**limit, "at_most": math.degrees(0.01) * factor}).state == state


@pytest.mark.source("numpy.percentile method='inverted_cdf' on values repeated by whole weights")
@settings(max_examples=40)
@given(
    values=st.lists(st.integers(-8, 8), min_size=1, max_size=12),
    lengths=st.lists(st.integers(1, 9), min_size=12, max_size=12),
    percent=st.sampled_from([0.1, 1.0, 5.0, 25.0, 50.0, 95.0, 99.0, 99.9, 100.0]),
)
def test_percentiles_are_weighted_by_volume(values: list[int], lengths: list[int], percent: float) -> None:
    mesh = row([1e-3] * len(values), lengths[: len(values)], v=np.array(values, dtype=float))
    repeated = np.repeat(values, lengths[: len(values)])
    expected = float(np.percentile(repeated, percent, method="inverted_cdf"))
    limit = {"array": "v", "statistic": "percentile", "percent": percent, "unit": "number"}
    assert one(mesh, {**limit, "at_most": expected, "at_least": expected}).state == "met"


@pytest.mark.derived("a share moved by the stated plus and minus, counted by hand")
@pytest.mark.parametrize(
    ("plus_minus", "bound", "state"),
    [
        (0.0, 37.5, "met"),
        (0.4, 37.5, "met"),
        (0.6, 50.0, "undecided"),
        (0.6, 62.5, "met"),
        (2.6, 87.5, "met"),
    ],
)
def test_shares_move_with_the_threshold(plus_minus: float, bound: float, state: str) -> None:
    limit = {"array": "v", "statistic": "share", "above": 2.0, "unit": "number", "plus_minus": plus_minus}
    found = one(MESH, {**limit, "at_most": bound})
    moved = max((2.0 - plus_minus < EXPANDED).mean() - 0.375, 0.375 - (2.0 + plus_minus < EXPANDED).mean())
    assert found.plus_minus == pytest.approx(100 * moved)
    assert found.state == state


@pytest.mark.derived(
    "inside, but the plus and minus reaches across: undecided; beyond: exceeded all the same"
)
@pytest.mark.parametrize(
    ("bound", "state"),
    [(3.9, "exceeded"), (4.0, "undecided"), (4.4, "undecided"), (4.5, "met"), (4.6, "met")],
)
def test_the_plus_and_minus_decides_inside_only(bound: float, state: str) -> None:
    limit = {"array": "v", "statistic": "maximum", "unit": "number", "plus_minus": 0.5, "at_most": bound}
    found = one(MESH, limit)
    assert found.state == state
    assert found.plus_minus == 0.5
    assert (
        one(MESH, {**limit, "statistic": "minimum", "at_least": -6.0, "at_most": bound - 9.0}).state == state
    )
    accepted = one(MESH, {**limit, "accept": ["plus-minus"]})
    assert accepted.state == ("exceeded" if state == "exceeded" else "met")


@pytest.mark.derived("band and levels, at and beside each of them")
@pytest.mark.parametrize(
    ("value", "state"),
    [(-3.1, "exceeded"), (-3.0, "warning"), (-2.1, "warning"), (-2.0, "met"), (2.0, "met"), (2.1, "warning"),
     (3.0, "warning"), (3.1, "exceeded")],
)  # fmt: skip
def test_a_band_with_warning_levels(value: float, state: str) -> None:
    mesh = row([1e-3], v=[value])
    band = {"at_least": -3.0, "warn_below": -2.0, "warn_above": 2.0, "at_most": 3.0}
    found = one(mesh, {"array": "v", "statistic": "maximum", "unit": "number", **band})
    assert found.state == state
    assert found.margin == pytest.approx(min(3.0 - value, value + 3.0))
    assert ("warning level" in found.message) is (state == "warning")


# --- over steps -------------------------------------------------------------------------------------------------------


def steps(*strains: list[float]) -> Series:
    return Series([row(s) for s in strains])


@pytest.mark.derived("largest less smallest of each cell over the steps: 3 and 7 thousandths")
def test_the_range_over_steps() -> None:
    series = steps([0.0, 0.0], [2e-3, -3e-3], [-1e-3, 4e-3])
    limit = {"id": "it", "measure": "strain", "component": "XX", "statistic": "range", "unit": "microstrain",
             "accept": ["plus-minus"]}  # fmt: skip
    for bound, state in ((7000 * (1 + 1e-9), "met"), (7000 * (1 - 1e-9), "exceeded")):
        found = checked_series(series, written({**limit, "at_most": bound}))["it"]
        assert found.state == state
        assert found.value == pytest.approx(7000)
        assert found.place["cell"] == 1
        assert (found.place["step"], found.place["time"]) == (2, 2.0)
        assert "between steps 1 and 2" in found.message
    some = checked_series(series, written({**limit, "at_most": 1e4, "steps": [0, 1]}))["it"]
    assert some.value == pytest.approx(3000)


@pytest.mark.derived("uniaxial strain e has the deviator e (2, -1, -1)/3: equivalent sqrt(2/3 e':e') = 2/3 e")
def test_the_tensor_range_over_steps() -> None:
    series = steps([0.0, 0.0], [2e-3, -3e-3], [-1e-3, 3e-3])
    limit = {"id": "it", "measure": "strain", "statistic": "tensor_range", "unit": "microstrain",
             "accept": ["plus-minus"]}  # fmt: skip
    for bound, state in ((4000 * (1 + 1e-9), "met"), (4000 * (1 - 1e-9), "exceeded")):
        found = checked_series(series, written({**limit, "at_most": bound}))["it"]
        assert found.state == state
        assert found.value == pytest.approx(4000)
        assert "between steps 1 and 2" in found.message


@pytest.mark.derived("one step has no range: zero would be a false pass")
@pytest.mark.parametrize("statistic", ["range", "tensor_range"])
def test_a_range_over_one_step_is_never_met(statistic: str) -> None:
    limit = {"id": "it", "measure": "strain", "statistic": statistic, "unit": "strain", "at_most": 1.0}
    if statistic == "range":
        limit["component"] = "XX"
    found = checked_series(steps([1e-3]), written(limit))["it"]
    assert found.state == "error"
    assert "needs two at least" in found.message
    assert one(row([1e-3]), limit).state == "error"
    assert checked_series(steps([1e-3], [2e-3]), written(limit))["it"].state == "met"


@pytest.mark.derived("a cell without a value in one step has no range")
def test_a_missing_value_in_one_step_spoils_a_range() -> None:
    first, second = row([1e-3, 1e-3]), row([2e-3, 2e-3])
    u = second.point_data["u"].copy()
    u[-1] = np.nan
    limit = {
        "id": "it",
        "measure": "strain",
        "component": "XX",
        "statistic": "range",
        "unit": "strain",
        "at_most": 1.0,
    }
    found = checked_series(Series([first, second.with_arrays(point_data={"u": u})]), written(limit))["it"]
    assert found.state == "undecided"
    assert "1 value of the region is not finite" in found.message


@pytest.mark.derived("another mesh has other cells: their values cannot be subtracted")
def test_ranges_need_one_mesh() -> None:
    limit = {
        "id": "it",
        "measure": "strain",
        "component": "XX",
        "statistic": "range",
        "unit": "strain",
        "at_most": 1.0,
    }
    found = checked_series(Series([row([1e-3]), row([1e-3, 1e-3])]), written(limit))["it"]
    assert found.state == "error"
    assert "another" in found.message


# --- bounds from arrays -----------------------------------------------------------------------------------------------


@pytest.mark.derived("each value against its own bound; the worst is the one with the least room")
@pytest.mark.parametrize(
    ("statistic", "key", "bounds", "state", "cell"),
    [
        ("maximum", "at_most_array", [3.0, 0, 9, 9, 9], "met", 0),
        ("maximum", "at_most_array", [2.9, 0, 9, 4, 9], "exceeded", 0),
        ("maximum", "at_most_array", [9, -5.5, 9, 9, 9], "exceeded", 1),
        ("largest_magnitude", "at_most_array", [9, 5, 9, 9, 9], "met", 1),
        ("largest_magnitude", "at_most_array", [9, 4.9, 9, 4, 9], "exceeded", 1),
        ("minimum", "at_least_array", [-9, -5, -9, -9, -9], "met", 1),
        ("minimum", "at_least_array", [-9, -9, 2.6, -9, -9], "exceeded", 2),
    ],
)
def test_bounds_from_an_array(statistic: str, key: str, bounds: list[float], state: str, cell: int) -> None:
    mesh = MESH.with_arrays(cell_data={"allowed": np.array(bounds, dtype=float)})
    found = one(mesh, {"array": "v", "statistic": statistic, "unit": "number", key: "allowed"})
    assert found.state == state
    assert found.place["cell"] == cell
    assert (found.low if key == "at_least_array" else found.high) == bounds[cell]


@pytest.mark.derived("a bound that is missing is none")
@pytest.mark.parametrize("bounds", [[1.0, np.nan, 9, 9, 9], [np.inf, 9, 9, 9, 9]])
def test_bounds_that_are_not_finite_are_an_error(bounds: list[float]) -> None:
    mesh = MESH.with_arrays(cell_data={"allowed": np.array(bounds)})
    found = one(mesh, {"array": "v", "statistic": "maximum", "unit": "number", "at_most_array": "allowed"})
    assert found.state == "error"
    assert "'allowed' has no finite bound for 1 of 5" in found.message
    gone = one(MESH, {"array": "v", "statistic": "maximum", "unit": "number", "at_most_array": "allowd"})
    assert gone.state == "error"
    assert "allowd" in gone.message


@pytest.mark.derived("the plus and minus of a range is that of the two steps that make it, added")
@pytest.mark.parametrize(("statistic", "component"), [("range", "XX"), ("tensor_range", None)])
def test_a_range_has_the_plus_and_minus_of_its_two_steps(statistic: str, component: str | None) -> None:
    series = steps([0.0, 0.0, 0.0], [2e-3, 1e-3, 1e-3], [-1e-3, 2e-3, 1e-3])
    limit: dict[str, Any] = {"id": "it", "measure": "strain", "statistic": statistic, "unit": "microstrain"}
    single: dict[str, Any] = {"measure": "equivalent_strain", "statistic": "maximum", "unit": "microstrain"}
    if component:
        limit["component"] = single["component"] = component
        single["measure"] = "strain"
    found = checked_series(series, written({**limit, "at_most": 1e9}))["it"]
    assert found.place["cell"] == 0
    regions = {"first": {"near": {"point": [0.5, 0.5, 0.5], "cells": 1, "within": 1}}}
    ends = [
        one(series.results[k], {**single, "at_most": 1e9, "region": "first"}, regions=regions)  # type: ignore[arg-type]
        for k in (1, 2)
    ]
    expected = sum(e.plus_minus or 0.0 for e in ends)
    assert expected > 0
    assert found.plus_minus == pytest.approx(expected)
    assert found.value is not None
    inside = found.value + 0.5 * expected
    assert checked_series(series, written({**limit, "at_most": inside}))["it"].state == "undecided"
    assert (
        checked_series(series, written({**limit, "at_most": inside, "accept": ["plus-minus"]}))["it"].state
        == "met"
    )
