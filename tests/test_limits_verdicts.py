"""What a limit says of a result: never met when the result is not what it must be, or when anything is in doubt."""

from __future__ import annotations

import datetime
import os
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import unturn
from limits_samples import TODAY, Series, checked, checked_series, grid, one, parsed, row, write, written
from solved_problems import corner_plate
from unturn.errors import InputError, UnturnError, UsageError
from unturn.result import CellBlock, Result
from unturn.testing import assert_limits
from unturn.verdicts.check import check_result, unreadable
from unturn.verdicts.finding import Finding
from unturn.verdicts.preconditions import PRECONDITIONS
from unturn.verdicts.read_limits import read_limits

pytestmark = pytest.mark.derived("the rules of docs/limits.md")

PULL: dict[str, Any] = {
    "id": "pull",
    "measure": "strain",
    "component": "XX",
    "statistic": "maximum",
    "at_most": 2000,
    "unit": "microstrain",
    "accept": ["plus-minus", "singular"],
}
MESH = row([1e-3, 5e-4, 2e-4], part=[1, 1, 2])


def broken(mesh: Result, *points: int) -> Result:
    """The result with NaN displacements at some points."""
    u = mesh.point_data["u"].copy()
    u[list(points)] = np.nan
    return mesh.with_arrays(point_data={"u": u})


# --- values that are missing ------------------------------------------------------------------------------------------


def test_any_nan_in_the_selection_is_undecided() -> None:
    found = one(broken(MESH, 12), PULL)
    assert found.state == "undecided"
    assert "1 value of the region is not finite" in found.message
    assert found.value == pytest.approx(1000)
    assert one(broken(MESH, 12), PULL, regions={"left": {"tag": "part=1"}}).state == "undecided"
    left = {**PULL, "region": "left"}
    assert one(broken(MESH, 12), left, regions={"left": {"tag": "part=1"}}).state == "met"


def test_beyond_the_bound_is_exceeded_whatever_is_missing() -> None:
    assert one(broken(MESH, 12), {**PULL, "at_most": 999}).state == "exceeded"


def test_no_value_at_all_is_an_error_that_nothing_allows() -> None:
    found = one(broken(MESH, *range(16)), PULL)
    assert found.state == "error"
    assert "none of its 3 values is finite" in found.message


@pytest.mark.parametrize("values", [[1.0, np.nan, 2.0], [1.0, np.inf, 2.0]])
def test_an_array_of_the_file_with_a_missing_value_is_undecided(values: list[float]) -> None:
    mesh = MESH.with_arrays(cell_data={"v": np.array(values)})
    for statistic, more in (("maximum", {}), ("mean", {}), ("sum", {}), ("percentile", {"percent": 50}),
                            ("share", {"above": 5.0}), ("count", {"above": 5.0}), ("spread", {})):  # fmt: skip
        bound = 100 if statistic == "share" else 1e9
        limit = {"array": "v", "statistic": statistic, "at_most": bound, "unit": "number", **more}
        assert one(mesh, limit).state == "undecided", statistic


@pytest.mark.parametrize(
    ("limit", "said"),
    [
        ({"array": "sixx"}, "the file has no array 'sixx'. Did you mean 'six'?"),
        ({"array": "v", "at": "nodes"}, "the file has no point array 'v'"),
        ({"array": "u", "at": "centroid"}, "the file has no cell array 'u'"),
        ({"array": "u"}, "the array 'u' has components: name one of X, Y, Z, 1, 2, 3, magnitude"),
        ({"array": "u", "component": "XX"}, "magnitude, not 'XX'"),
        ({"array": "v", "component": "X"}, "is one number each and has no component 'X'"),
        ({"array": "six", "component": "magnitude"}, "name one of XX, YY, ZZ, XY, YZ, XZ"),
        ({"array": "complex"}, "the array 'complex' holds no real numbers"),
    ],
)
def test_an_array_that_is_not_there_is_never_met(limit: dict[str, Any], said: str) -> None:
    more = {"v": np.ones(3), "six": np.ones((3, 6)), "complex": np.ones(3, dtype=complex)}
    found = one(
        MESH.with_arrays(cell_data=more), {"statistic": "maximum", "at_most": 1e9, "unit": "number", **limit}
    )
    assert found.state == "error"
    assert said in found.message


def test_components_of_arrays_by_name_number_and_length() -> None:
    values = np.array([[3.0, 4.0, 0.0], [1.0, 1.0, 1.0], [0.0, 0.0, 2.0]])
    mesh = replace(
        MESH.with_arrays(cell_data={"v": values}), component_names={("cell", "v"): ("a", "b", "c")}
    )
    for component, value in (("a", 3.0), ("2", 4.0), ("magnitude", 5.0)):
        limit = {"array": "v", "component": component, "statistic": "maximum", "unit": "number"}
        assert one(mesh, {**limit, "at_most": value, "at_least": value}).state == "met"


# --- what the result must be ------------------------------------------------------------------------------------------

SERIES = Series([row([k * 1e-4]) for k in range(4)], [0.0, 0.25, 0.5, 1.0])


def conditions(series: Any, **required: Any) -> dict[str, Finding]:
    return checked_series(series, written(PULL, result=required))


@pytest.mark.parametrize(
    ("key", "holds", "fails", "said"),
    [
        ("steps", 4, 5, "the file has 4 steps, not 5"),
        ("last_time", 1.0, 1.0000001, "the last step is at t = 1: 1.0000001 was not reached"),
        ("cells", 1, 2, "step 0 has 1 cells, not 2 to 2"),
    ],
)
def test_a_condition_on_a_series(key: str, holds: Any, fails: Any, said: str) -> None:
    found = conditions(SERIES, **{key: holds})
    assert found[f"result/{key}"].state == found["pull"].state == "met"
    found = conditions(SERIES, **{key: fails})
    assert found[f"result/{key}"].state == "error"
    assert said in found[f"result/{key}"].message
    assert found["pull"].state == "error"
    assert f"the result is not what it must be: result/{key}" in found["pull"].message


def test_every_condition_of_the_table_is_proved_here() -> None:
    text = Path(__file__).read_text(encoding="utf-8")
    assert [key for key in PRECONDITIONS if f'"{key}"' not in text and f"{key}=" not in text] == []


def test_an_unfinished_series_never_passes() -> None:
    unfinished = Series(SERIES.results[:3], [0.0, 0.25, 0.5])
    assert conditions(unfinished, last_time=1.0)["pull"].state == "error"
    assert conditions(unfinished, steps=4)["pull"].state == "error"
    assert conditions(Series([MESH]), last_time=1.0, last_time_within=0.5)["pull"].state == "error"
    near = conditions(unfinished, last_time=1.0, last_time_within=0.5)
    assert near["pull"].state == "met"
    alone = checked(MESH, written(PULL, result={"last_time": 1.0})).findings
    assert [f.state for f in alone] == ["error", "error"]
    assert "not a series" in alone[0].message


def test_cells_within_a_tolerance() -> None:
    for number, within, state in (
        (3, 0, "met"),
        (4, 25, "met"),
        (4, 24.9, "error"),
        (2, 50, "met"),
        (2, 49, "error"),
    ):
        text = written(PULL, result={"cells": number, "cells_within_percent": within})
        assert checked(MESH, text).findings[0].state == state, (number, within)


@pytest.mark.parametrize(("apart", "state"), [(1, "met"), (0, "error"), (-1, "error")])
def test_a_stale_file_never_passes(tmp_path: Path, apart: int, state: str) -> None:
    unturn.write(MESH, tmp_path / "a.vtu")
    (tmp_path / "model.inp").write_text("")
    limits = write(tmp_path / "limits.toml", written(PULL, result={"newer_than": "model.inp"}))
    os.utime(tmp_path / "model.inp", ns=(10**18, 10**18))
    os.utime(tmp_path / "a.vtu", ns=(10**18, 10**18 + apart * 1000))
    found = check_result(
        unturn.io.open_result(tmp_path / "a.vtu"), read_limits(limits), "a", today=TODAY
    ).findings
    assert [f.state for f in found] == [state, state]
    os.remove(tmp_path / "model.inp")
    found = check_result(
        unturn.io.open_result(tmp_path / "a.vtu"), read_limits(limits), "a", today=TODAY
    ).findings
    assert [f.state for f in found] == ["error", "error"]
    assert "cannot be compared: No such file" in found[0].message


def test_a_result_in_memory_has_no_age() -> None:
    found = checked(MESH, written(PULL, result={"newer_than": "limits.toml"})).findings
    assert [f.state for f in found] == ["error", "error"]


def test_no_nan_and_no_tangled() -> None:
    assert [f.state for f in checked(MESH, written(PULL, result={"no_nan": True, "no_tangled": True})).findings] == [
        "met", "met", "met",
    ]  # fmt: skip
    found = checked(broken(MESH, 12), written({**PULL, "region": "left"}, result={"no_nan": True},
                                              regions={"left": {"tag": "part=1"}})).findings  # fmt: skip
    assert [f.state for f in found] == ["error", "error"]
    assert "step 0: 1 cells (displacement not finite)" in found[0].message
    points = MESH.points.copy()
    points[4:8, 0] = 3.5  # the second and third cell are turned inside out or crossed
    points[6, 0] = 0.5
    tangled = replace(MESH, points=points)
    found = checked(tangled, written(PULL, result={"no_tangled": True})).findings
    assert found[0].state == "error"
    assert "tangled" in found[0].message


def test_a_step_that_cannot_be_read_is_an_error_and_told() -> None:
    gap = Series([MESH, InputError("x.vtu: cut short."), MESH])
    found = check_result(gap, parsed(written(PULL, result={"whole_file": True})), "gap", today=TODAY)
    by_id = {f.id: f for f in found.findings}
    assert by_id["result/whole_file"].state == by_id["pull"].state == "error"
    assert "step 1 cannot be used: x.vtu: cut short." in by_id["result/whole_file"].message
    assert found.unusable is not None
    assert found.unusable.exit_status == 3
    plain = check_result(gap, parsed(written(PULL)), "gap", today=TODAY)
    assert plain.findings[0].state == "error"
    assert "cut short" in plain.findings[0].message
    last = check_result(gap, parsed(written({**PULL, "steps": "last"})), "gap", today=TODAY)
    assert last.findings[0].state == "met"
    whole = check_result(
        gap, parsed(written({**PULL, "steps": "last"}, result={"whole_file": True})), "gap", today=TODAY
    )
    assert whole.findings[1].state == "error"


def test_a_result_that_cannot_be_opened_has_an_error_for_every_limit() -> None:
    text = written(PULL, {**PULL, "id": "b"}, result={"steps": 2, "small_strain": "holds"})
    found = unreadable(InputError("a.vtu: there is no such file."), parsed(text), "a.vtu")
    assert [f.id for f in found.findings] == ["result/steps", "result/small_strain/whole", "pull", "b"]
    assert {f.state for f in found.findings} == {"error"}
    assert all("there is no such file" in f.message for f in found.findings)


def test_the_small_strain_must_hold() -> None:
    mesh = grid(2, part=np.repeat([1, 2], 4))
    x = mesh.points
    turned = mesh.with_arrays(
        point_data={"u": 0.2 * np.stack([-x[:, 1], x[:, 0], 0 * x[:, 0]], 1) + 1e-3 * x}
    )
    still = mesh.with_arrays(point_data={"u": 1e-3 * x})
    regions = {"left": {"tag": "part=1"}, "right": {"tag": "part=2"}}
    limit = {**PULL, "region": ["left", "right"], "at_most": 1e6}
    for wanted in ("holds", "marginal", {"left": "marginal"}):
        text = written(limit, result={"small_strain": wanted}, regions=regions)
        names = ["left", "right"] if isinstance(wanted, str) else ["left"]
        good = {f.id: f for f in checked(still, text).findings}
        assert [good[f"result/small_strain/{n}"].state for n in names] == ["met"] * len(names)
        bad = {f.id: f for f in checked(turned, text).findings}
        assert {bad[f"result/small_strain/{n}"].state for n in names} == {"error"}
        assert "does not hold" in bad["result/small_strain/left"].message
        assert {bad["pull/left"].state, bad["pull/right"].state} == {"error"}


def test_a_small_strain_that_does_not_hold_is_undecided() -> None:
    mesh = grid(2)
    x = mesh.points
    turned = mesh.with_arrays(
        point_data={"u": 0.2 * np.stack([-x[:, 1], x[:, 0], 0 * x[:, 0]], 1) + 1e-3 * x}
    )
    found = one(turned, {**PULL, "at_most": 1e6})
    assert found.state == "undecided"
    assert "the small strain does not hold in whole" in found.message
    assert one(turned, {**PULL, "at_most": 1e6, "accept": [*PULL["accept"], "turning"]}).state == "met"
    assert one(turned, {**PULL, "at_most": 1e6, "base": "hencky"}).state == "met"
    assert one(turned, {**PULL, "at_most": 1}).state == "exceeded"


@pytest.mark.derived(
    "turning by t adds cos(t) - 1 to the small strain: steps that turn hide a range or make one up"
)
@pytest.mark.parametrize("statistic", ["range", "tensor_range"])
def test_a_range_is_in_doubt_when_any_of_its_steps_turns(statistic: str) -> None:
    mesh = grid(2)
    x, turn = (
        mesh.points,
        np.array([[np.cos(0.2), np.sin(0.2), 0], [-np.sin(0.2), np.cos(0.2), 0], [0, 0, 1]]),
    )
    moved = [0 * x, x @ turn - x, 1e-3 * x * [1, 0, 0]]
    series = Series([mesh.with_arrays(point_data={"u": u}) for u in moved])
    limit = {"id": "it", "measure": "strain", "statistic": statistic, "at_most": 1e6, "unit": "microstrain",
             "accept": ["plus-minus"], **({"component": "XX"} if statistic == "range" else {})}  # fmt: skip
    found = checked_series(series, written(limit))["it"]
    assert found.state == "undecided"
    assert "in step 1 the small strain does not hold in whole" in found.message
    for others in ({"accept": ["plus-minus", "turning"]}, {"steps": [0, 2]}, {"base": "hencky"}):
        assert checked_series(series, written({**limit, **others}))["it"].state == "met", others
    assert checked_series(series, written({**limit, "at_most": 1}))["it"].state == "exceeded"


# --- steps ------------------------------------------------------------------------------------------------------------


def test_the_worst_step_decides() -> None:
    up_and_down = Series([row([s]) for s in (0.0, 3e-3, 1e-3)])
    text = written(
        {**PULL, "at_most": 2500},
        {**PULL, "id": "last", "steps": "last"},
        {**PULL, "id": "some", "steps": [0, 2]},
    )
    found = checked_series(up_and_down, text)
    assert found["pull"].state == "exceeded"
    assert (found["pull"].place["step"], found["pull"].value) == (1, pytest.approx(3000))
    assert [s["state"] for s in found["pull"].details["steps"]] == ["met", "exceeded", "met"]
    assert found["last"].state == found["some"].state == "met"
    assert found["some"].place["step"] == 2


def test_a_step_that_is_missing_is_never_met() -> None:
    found = checked_series(SERIES, written({**PULL, "steps": [0, 7]}))["pull"]
    assert found.state == "error"
    assert "step 7 does not exist: the result has 4 steps, counted from 0" in found.message
    assert one(MESH, {**PULL, "steps": 1}).state == "error"


def test_exceeded_in_one_step_is_exceeded_though_another_is_missing() -> None:
    waiver = {"owner": "A. Person", "reason": "known", "expires": datetime.date(2027, 1, 1)}
    limit = {**PULL, "steps": [3, 7], "at_most": 100, "waiver": waiver}
    found = checked_series(SERIES, written(limit))["pull"]
    assert found.state == "exceeded"  # a waiver never covers what was not tested
    assert "not tested in step 7" in found.message


def test_only_the_steps_that_are_needed_are_read() -> None:
    read: list[int] = []

    class Watched(Series):
        def read(self, step: int = 0) -> Result:
            read.append(step)
            return super().read(step)

    checked_series(Watched(SERIES.results), written({**PULL, "steps": [1]}, reading={"plane": "strain"}))
    assert read == [1, 3]


# --- consent, waivers -------------------------------------------------------------------------------------------------


def shell() -> Result:
    points = np.array([[0, 0, 0], [1, 0, 0], [1, 1, 0.5], [0, 1, 0.5]], dtype=np.float64)
    block = CellBlock("quad", np.array([[0, 1, 2, 3]]), np.array([0]))
    return Result(points, (block,), {"u": 1e-3 * points}, {"v": np.array([1.0])})


def test_a_mid_surface_value_needs_consent() -> None:
    limit = {**PULL, "measure": "equivalent_strain"}
    del limit["component"]
    found = one(shell(), limit)
    assert found.state == "error"
    assert 'accept = ["mid-surface"]' in found.message
    assert one(shell(), {**limit, "accept": [*limit["accept"], "mid-surface"]}).state == "met"
    array = {"array": "v", "statistic": "maximum", "at_most": 1, "unit": "number"}
    assert one(shell(), array).state == "met"  # an array of the file is what the solver says it is


@pytest.fixture(scope="module")
def corner() -> Result:
    mesh, u = corner_plate("quad", 8)
    return mesh.result(u=1e-6 * u)


def test_a_suspected_singular_peak_is_undecided(corner: Result) -> None:
    limit = {
        **PULL,
        "measure": "principal_strain",
        "component": "1",
        "at_most": 1e12,
        "accept": ["plus-minus"],
    }
    reading = {"reading": {"plane": "strain"}}
    found = one(corner, limit, **reading)
    assert found.state == "undecided"
    assert "suspected singular: it keeps growing towards point" in found.message
    assert "at 0.5, 0.5, 0" in found.message
    assert one(corner, {**limit, "accept": ["plus-minus", "singular"]}, **reading).state == "met"
    assert one(corner, {**limit, "statistic": "percentile", "percent": 99}, **reading).state == "met"
    assert one(corner, {**limit, "at": "nodes"}, **reading).state == "undecided"
    away = {"away": {"all_of": ["whole"], "none_of": ["corner"]},
            "corner": {"sphere": {"center": [0.5, 0.5, 0], "radius": 0.2}}}  # fmt: skip
    outside = one(corner, {**limit, "region": "away"}, regions=away, **reading)
    assert outside.state == "met"
    assert "left out of away" in outside.message


def test_the_plus_and_minus_of_a_measure_reaches_across(corner: Result) -> None:
    limit = {
        **PULL,
        "measure": "equivalent_strain",
        "statistic": "percentile",
        "percent": 95,
        "accept": ["singular"],
    }
    del limit["component"]
    reading = {"reading": {"plane": "strain"}}
    found = one(corner, {**limit, "at_most": 1e12}, **reading)
    assert found.state == "met"
    assert found.value is not None
    assert found.plus_minus is not None
    assert found.plus_minus > 0
    for bound, state in (
        (found.value * (1 - 1e-9), "exceeded"),
        (found.value * (1 + 1e-9), "undecided"),
        (found.value + found.plus_minus * (1 - 1e-9), "undecided"),
        (found.value + found.plus_minus * (1 + 1e-9), "met"),
    ):
        assert one(corner, {**limit, "at_most": bound}, **reading).state == state


WAIVER = {"owner": "A. Person", "reason": "part is redesigned", "expires": datetime.date(2026, 12, 24)}


@pytest.mark.parametrize(
    ("today", "state"),
    [
        (datetime.date(2026, 12, 1), "waived"),
        (datetime.date(2026, 12, 24), "waived"),
        (datetime.date(2026, 12, 25), "exceeded"),
    ],
)
def test_a_waiver_holds_until_its_day(today: datetime.date, state: str) -> None:
    found = checked(MESH, written({**PULL, "at_most": 999, "waiver": WAIVER}), today).findings[0]
    assert found.state == state
    assert "A. Person: part is redesigned" in found.message
    assert ("has expired" in found.message) is (state == "exceeded")
    assert found.details["waived"] == ("exceeded" if state == "waived" else None)


def test_a_waiver_covers_undecided_but_never_an_error() -> None:
    waived = {**PULL, "waiver": WAIVER}
    assert one(broken(MESH, 12), waived).state == "waived"
    assert one(broken(MESH, *range(16)), waived).state == "error"
    assert one(MESH, {**waived, "region": "gone"}, regions={"gone": {"tag": "part=9"}}).state == "error"
    assert one(MESH, {**waived, "steps": 3}).state == "error"
    late = checked(MESH, written({**waived, "at_most": 999}, result={"cells": 9})).findings
    assert late[0].state == "error"
    assert late[1].state == "exceeded"
    met = one(MESH, waived)
    assert met.state == "met"  # a waiver that is not needed changes nothing


# --- what else stands behind a value ----------------------------------------------------------------------------------


def test_options_of_reading_are_used() -> None:
    limit = {**PULL, "at_most": 2000 * (1 + 1e-9), "at_least": 2000 * (1 - 1e-9)}
    assert one(MESH, limit, reading={"displacement_scale": 2.0}).state == "met"
    moved = replace(MESH, points=MESH.points + MESH.point_data["u"])
    same = {**PULL, "at_most": 1000 * (1 + 1e-9), "at_least": 1000 * (1 - 1e-9)}
    assert one(moved, same, reading={"coordinates": "deformed"}).state == "met"
    other = MESH.with_arrays(point_data={"v": 3 * MESH.point_data["u"]})
    text = written(
        {**PULL, "at_most": 3000 * (1 + 1e-9), "at_least": 3000 * (1 - 1e-9)}, result={"displacement": "v"}
    )
    assert checked(other, text).findings[0].state == "met"


def test_displacements_are_measured_from_a_step() -> None:
    series = Series([row([1e-3]), row([3e-3])])
    text = written({**PULL, "at_most": 2000 * (1 + 1e-9), "at_least": 2000 * (1 - 1e-9), "steps": "last"},
                   reading={"zero_step": 0})  # fmt: skip
    assert checked_series(series, text)["pull"].state == "met"
    gone = checked_series(series, written(PULL, reading={"zero_step": 5}))["pull"]
    assert gone.state == "error"
    assert "zero_step 5" in gone.message


def test_a_limit_that_is_not_tested_says_why_though_none_counts() -> None:
    limit = {**PULL, "region": "gone"}
    found = checked(MESH, written(limit, result={"cells": 9}, regions={"gone": {"tag": "part=9"}})).findings[
        1
    ]
    assert found.state == "error"
    assert "holds 0 computed cells" in found.message
    assert "the result is not what it must be: result/cells" in found.message


def test_a_measure_that_cannot_be_computed_stops_its_own_limits_only() -> None:
    points = np.array([[0, 0, 0], [1, 0, 0], [1, 1, 0], [0, 1, 0.0]])
    flat = Result(points, (CellBlock("quad", np.array([[0, 1, 2, 3]]), np.array([0])),), {"u": 1e-3 * points})
    limits = [{**PULL, "at": "mean"}, {**PULL, "id": "p", "measure": "principal_strain", "component": "1"}]
    found = {f.id: f for f in checked(flat, written(*limits)).findings}
    assert found["pull"].state == "met"
    assert found["p"].state == "error"
    assert "--plane" in found["p"].message


# --- from tests -------------------------------------------------------------------------------------------------------


def test_assert_limits(tmp_path: Path) -> None:
    good, bad = (
        write(tmp_path / "good.toml", written(PULL)),
        write(tmp_path / "bad.toml", written({**PULL, "at_most": 900})),
    )
    assert_limits(MESH, good)
    unturn.write(MESH, tmp_path / "a.vtu")
    assert_limits(tmp_path / "a.vtu", good)
    for result in (MESH, tmp_path / "a.vtu", str(tmp_path / "a.vtu")):
        with pytest.raises(AssertionError) as caught:
            assert_limits(result, bad)
        said = " ".join(str(caught.value).split())
        assert "EXCEEDED pull" in said
        assert "at most 900 margin -100 microstrain" in said
        assert "cell 0 at 0.5, 0.5, 0.5" in said
    undecided = broken(MESH, 12)
    assert_limits(undecided, good, allow_undecided=True)
    with pytest.raises(AssertionError, match="UNDECIDED"):
        assert_limits(undecided, good)
    with pytest.raises(UsageError):
        assert_limits(MESH, tmp_path / "missing.toml")
    with pytest.raises(UnturnError, match="no such file"):
        assert_limits(tmp_path / "missing.vtu", good)
    waived = write(tmp_path / "waived.toml", written({**PULL, "at_most": 900, "waiver": WAIVER}))
    assert_limits(MESH, waived, today=datetime.date(2026, 12, 1))
    with pytest.raises(AssertionError, match="expired"):
        assert_limits(MESH, waived, today=datetime.date(2027, 12, 1))


@pytest.mark.parametrize("region", ["whole", "left", "both"])
def test_cells_that_are_not_computed_are_counted(region: str) -> None:
    mesh = MESH.with_arrays(cell_data={"alive": np.array([1, 0, 1])})
    regions = {"left": {"tag": "part=1"}, "both": {"any_of": ["left", "whole"]}}
    found = one(mesh, {**PULL, "region": region}, regions=regions, reading={"alive": "alive"})
    assert found.state == "met"
    assert f"1 cell of {region} is not computed" in found.message
    assert found.details["not_computed"] == 1
    assert found.details["values"] == (1 if region == "left" else 2)


def test_poissons_ratio_of_free_faces_is_theirs_alone() -> None:
    surface = {**PULL, "measure": "equivalent_strain", "at": "surface"}
    del surface["component"]
    with pytest.raises(UsageError, match=r"limits\[1\].measure: .*give surface_poisson in \[reading\]"):
        parsed(written(surface))
    found = checked(MESH, written(surface, {**PULL, "id": "b"}, reading={"surface_poisson": 0.3})).findings
    assert [f.state for f in found] == ["met", "met"]
    # in the plane 1000 and 0; along the normal -nu/(1-nu) = -3/7 of their sum
    assert found[0].value == pytest.approx(
        1000 * np.sqrt(2 / 3 * (1 + 0 + (3 / 7) ** 2 - (1 - 3 / 7) ** 2 / 3))
    )


@pytest.mark.parametrize("at", ["nodes", "surface"])
def test_a_cell_without_value_is_not_hidden_by_its_nodes_or_faces(at: str) -> None:
    points = grid(2).points.copy()
    points[26] = [0.2, 0.2, 0.2]  # the corner (2, 2, 2) is pushed through its cell
    tangled = replace(grid(2), points=points)
    limit = {**PULL, "at": at, "at_most": 1e12}
    found = one(tangled, limit)
    assert found.state == "undecided"
    assert "1 cell of the region has no value" in found.message
    assert one(grid(2), limit).state == "met"


def test_what_cannot_be_told_to_belong_is_never_passed_over() -> None:
    nowhere = MESH.points.copy()
    nowhere[12:] = np.nan  # the last cell lies nowhere
    mesh = replace(MESH, points=nowhere).with_arrays(cell_data={"heat": np.array([1.0, np.nan, 3.0])})
    for region in (
        {"box": {"from": [0, 0, 0], "to": [2, 1, 1]}},
        {"sphere": {"center": [0, 0, 0], "radius": 2}},
        {"cylinder": {"from": [0, 0, 0], "to": [2, 0, 0], "radius": 1}},
        {"near": {"point": [0.5, 0.5, 0.5], "cells": 2, "within": 2}},
    ):
        assert one(mesh, {**PULL, "region": "it"}, regions={"it": region}).state == "undecided", region
        assert one(MESH, {**PULL, "region": "it"}, regions={"it": region}).state == "met", region
    found = one(mesh, {**PULL, "region": "it"}, regions={"it": {"where": {"array": "heat", "below": 2}}})
    assert found.state == "error"
    assert "1 values of the array 'heat' are not finite" in found.message
