"""Limits files as they are read: every mistake is told with its place, and no broken file passes as tested."""

from __future__ import annotations

import datetime
import random
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from limits_samples import checked, one, parsed, row, written
from unturn.errors import UsageError
from unturn.verdicts.read_limits import SCHEMA, parse_limits, read_limits

pytestmark = pytest.mark.derived("the keys and rules of docs/limits.md")

GOOD: dict[str, Any] = {
    "id": "pull",
    "measure": "principal_strain",
    "component": "1",
    "statistic": "maximum",
    "at_most": 1000,
    "unit": "microstrain",
}
ARRAY: dict[str, Any] = {"id": "v", "array": "v", "statistic": "maximum", "at_most": 9.0, "unit": "number"}
WAIVER = {"owner": "A. Person", "reason": "known", "expires": datetime.date(2027, 1, 31)}
REGIONS = {"arm": {"tag": "part=1"}, "foot": {"tag": "part=2"}}


def refused(*limits: dict[str, Any], **more: Any) -> str:
    with pytest.raises(UsageError) as caught:
        parsed(written(*limits, **more))
    assert caught.value.exit_status == 2
    return str(caught.value)


def without(limit: dict[str, Any], *keys: str, **more: Any) -> dict[str, Any]:
    return {**{k: v for k, v in limit.items() if k not in keys}, **more}


def test_a_file_says_what_is_in_it() -> None:
    limits = parsed(
        written({**GOOD, "waiver": WAIVER}, ARRAY, regions=REGIONS, result={"solve": "linear", "steps": 3})
    )
    assert [v.id for v in limits.limits] == ["pull", "v"]
    assert limits.written == 2
    assert limits.required == {"steps": 3}
    assert limits.options.solve == "linear"
    assert list(limits.regions) == ["arm", "foot"]
    first = limits.limits[0]
    assert (first.at_most, first.at_least, first.region, first.steps) == (1000.0, None, "whole", "all")
    assert first.waiver is not None
    assert first.waiver.holds(datetime.date(2027, 1, 31))
    assert not first.waiver.holds(datetime.date(2027, 2, 1))


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"at_mots": 5}, "limits[1].at_mots: there is no such key. Did you mean 'at_most'"),
        ({"at_most": "1000"}, "limits[1].at_most: expected a finite number, or a table of numbers by region, found '1000'"),
        ({"at_most": True}, "limits[1].at_most: expected a finite number, or a table of numbers by region, found true"),
        ({"at_most": float("nan")}, "limits[1].at_most: expected a finite number"),
        ({"at_most": float("inf")}, "limits[1].at_most: expected a finite number"),
        ({"at_most": [1000]}, "limits[1].at_most: expected"),
        ({"at_most": {}}, "limits[1].at_most: expected"),
        ({"at_most": {"arm": "x"}}, "limits[1].at_most: expected"),
        ({"at_most": {"arm": 5}}, "limits[1].at_most: its regions must be those of 'region'"),
        ({"statistic": "maximun"}, "Did you mean 'maximum'"),
        ({"statistic": "percentile"}, "limits[1].percent: the statistic 'percentile' needs 'percent'"),
        ({"statistic": "percentile", "percent": 0}, "limits[1].percent: expected a number above 0, up to 100"),
        ({"statistic": "percentile", "percent": 100.1}, "limits[1].percent: expected"),
        ({"percent": 50}, "limits[1].percent: the statistic 'maximum' has no 'percent'"),
        ({"above": 50}, "limits[1].above: the statistic 'maximum' has no threshold"),
        ({"statistic": "share"}, "limits[1].above: the statistic 'share' needs one of 'above' and 'below'"),
        ({"statistic": "share", "above": 1, "below": 0}, "needs one of 'above' and 'below'"),
        ({"measure": "principal_strian"}, "Did you mean 'principal_strain"),
        ({"measure": "all"}, "'all' is no number that can be limited"),
        ({"measure": "principal_direction_1"}, "is no number that can be limited"),
        ({"measure": "mechanical_strain", "component": "XX"},
         "mechanical_strain needs the free thermal strain: state it in [reading]"),
        ({"component": "4"}, "principal_strain has no component '4'. Components: 1, 2, 3."),
        ({"component": "magnitude"}, "principal_strain has no component 'magnitude'"),
        ({"component": ""}, "limits[1].component: expected a text"),
        ({"measure": "equivalent_strain"}, "equivalent_strain is one number and has no components"),
        ({"base": "henky"}, "Did you mean 'hencky'"),
        ({"array": "v"}, "give 'measure' or 'array', and not both"),
        ({"plus_minus": 5}, "limits[1].plus_minus: it goes with 'array'"),
        ({"stored_in": "strain"}, "limits[1].stored_in: it goes with 'array'"),
        ({"unit": "degree"}, "limits[1].unit: degree is no unit of this measure. Units: strain, microstrain, percent."),
        ({"unit": "microstrian"}, "Did you mean 'microstrain'"),
        ({"at": "centre"}, "limits[1].at: expected one of"),
        ({"at": "surface", "component": "3"}, "surface_principal_strain has no component '3'. Components: 1, 2."),
        ({"at": "surface", "base": "almansi"}, "no base on surfaces is called 'almansi'"),
        ({"frame": "cylindrical z"}, "no components that a frame could turn"),
        ({"region": "arn"}, "limits[1].region: no region is called 'arn'. Did you mean 'arm'?"),
        ({"region": []}, "limits[1].region: expected a text, or a list of different texts"),
        ({"region": ["arm", "arm"]}, "A value is repeated."),
        ({"region": 5}, "limits[1].region: expected"),
        ({"id": "two words"}, "limits[1].id: an id has letters, digits"),
        ({"id": "result/x"}, "limits[1].id: an id has letters, digits"),
        ({"id": ""}, "limits[1].id: expected a text"),
        ({"reason": " "}, "limits[1].reason: expected a text"),
        ({"source": "a\nb"}, "limits[1].source: expected a text"),
        ({"warn_above": 1001}, "bounds and levels must rise in the order at_least, warn_below, warn_above, at_most"),
        ({"warn_below": 5}, "limits[1].warn_below: it is a level within 'at_least', which is missing"),
        ({"at_least": 1001}, "bounds and levels must rise"),
        ({"at_most_array": "v"}, "has no other bound or level"),
        ({"at_least_array": "v"}, "'at_most_array' with 'maximum' and 'at_least_array' with 'minimum'"),
        ({"statistic": "mean", "at_most_array": "v"}, "compared value by value"),
        ({"steps": "first"}, "limits[1].steps: expected"),
        ({"steps": -1}, "limits[1].steps: expected"),
        ({"steps": True}, "limits[1].steps: expected"),
        ({"steps": [1, 1]}, "limits[1].steps: expected"),
        ({"steps": []}, "limits[1].steps: expected"),
        ({"accept": "singular"}, "limits[1].accept: expected a list"),
        ({"accept": ["singulr"]}, "Did you mean 'singular'"),
        ({"statistic": "range", "steps": "last"}, "'range' needs several steps"),
        ({"statistic": "range", "at": "nodes"}, "'range' is of a measure at centroids or of element means"),
        ({"statistic": "tensor_range"}, "it is of the whole tensor: leave it out"),
        ({"waiver": {"owner": "A"}}, "limits[1].waiver: the key 'reason' is missing"),
        ({"waiver": {**WAIVER, "expires": "2027-01-31"}}, "limits[1].waiver.expires: expected a date such as 2027-03-31"),
        ({"waiver": {**WAIVER, "owner": ""}}, "limits[1].waiver.owner: expected a text"),
        ({"waiver": {**WAIVER, "until": 1}}, "limits[1].waiver.until: there is no such key"),
        ({"waiver": 5}, "limits[1].waiver: expected a table, found 5"),
    ],
    ids=lambda c: str(c)[:50],
)  # fmt: skip
def test_a_mistake_in_a_limit_is_told_with_its_place(change: dict[str, Any], said: str) -> None:
    text = refused({**GOOD, **change}, regions=REGIONS)
    if "tensor_range" in change.values():
        assert "'tensor_range' is of the whole tensor" in text
    else:
        assert said in text
    assert text.startswith("limits.toml, line ")


@pytest.mark.parametrize("key", ["id", "statistic", "unit", "reason", "source"])
def test_a_missing_key_is_named(key: str) -> None:
    text = written(GOOD).replace(f"\n{key} = ", "\n# ")
    with pytest.raises(UsageError, match=rf"line 8: limits\[1\]: the key '{key}' is missing"):
        parsed(text)


@pytest.mark.parametrize(
    ("limit", "said"),
    [
        (without(GOOD, "at_most"), "the limit has no bound: nothing could be exceeded"),
        (without(GOOD, "component"), "principal_strain has components: name one. Components: 1, 2, 3."),
        (without(GOOD, "measure"), "give 'measure' or 'array', and not both"),
        ({**ARRAY, "base": "hencky"}, "an array of the file has no base"),
        ({**ARRAY, "at": "surface"}, 'an array of the file is at "centroid" (cells) or at "nodes"'),
        ({**ARRAY, "frame": "cylindrical z"}, "components of an array of the file are as they are stored"),
        ({**ARRAY, "stored_in": "degree"}, "degree and number are units of different things"),
        ({**ARRAY, "plus_minus": -1}, "expected a number not below zero"),
        (
            {**GOOD, "statistic": "share", "above": 2000, "at_most": 2000},
            "limits[1].at_most: a share is from 0 to 100 percent of the volume: 2000 says nothing.",
        ),
        (
            {**GOOD, "statistic": "share", "above": 2000, "at_least": -5},
            "limits[1].at_least: a share is from 0 to 100 percent of the volume: -5 says nothing.",
        ),
        (
            {**GOOD, "measure": "strain", "statistic": "tensor_range", "base": "almansi", "component": ""},
            "expected a text",
        ),
    ],
    ids=lambda c: str(c)[:40],
)
def test_keys_that_do_not_fit_each_other(limit: dict[str, Any], said: str) -> None:
    assert said in refused(limit)


def test_tensor_ranges_are_of_tensors() -> None:
    limit = without(GOOD, "component", statistic="tensor_range")
    assert "'tensor_range' is of the measure 'strain'" in refused(
        {**limit, "measure": "rotation", "unit": "degree"}
    )
    assert "but almansi" in refused({**limit, "measure": "strain", "base": "almansi"})
    assert (
        parsed(written({**limit, "measure": "strain", "base": "hencky"})).limits[0].quantity.name
        == "strain_hencky"
    )


@pytest.mark.parametrize(
    ("more", "said"),
    [
        ({"result": {"stpes": 3}}, "result.stpes: there is no such key. Did you mean 'steps'?"),
        ({"result": {"steps": 0}}, "result.steps: expected a whole number from 1, found 0"),
        ({"result": {"steps": 2.0}}, "result.steps: expected a whole number from 1, found 2.0"),
        ({"result": {"no_nan": False}}, "result.no_nan: expected true, found false. Leave the key out"),
        ({"result": {"no_nan": 1}}, "result.no_nan: expected true, found 1"),
        ({"result": {"cells": 5, "cells_within_percent": 100}}, "result.cells_within_percent: expected"),
        ({"result": {"cells_within_percent": 5}}, "result.cells_within_percent: it says nothing without 'cells'"),
        ({"result": {"last_time_within": 5}}, "result.last_time_within: it says nothing without 'last_time'"),
        ({"result": {"solve": "lineer"}}, "Did you mean 'linear'"),
        ({"result": {"small_strain": "hold"}}, "Did you mean 'holds'"),
        ({"result": {"small_strain": {"arm": "does not hold"}}}, "result.small_strain: expected"),
        ({"result": {"small_strain": {"whole": "holds", "hole": "holds"}}},
         "result.small_strain: no region is called 'hole'. Did you mean 'whole'"),
        ({"reading": {"poison": 0.3}}, "reading.poison: there is no such key. Did you mean 'poisson'?"),
        ({"reading": {"displacement_scale": 0}}, "reading.displacement_scale: expected a number above zero"),
        ({"regions": {"arm": {}}}, "regions.arm: the region has no condition"),
        ({"regions": {"arm": {"tag": "part"}}}, 'regions.arm.tag: expected a cell array and a number, "array=number"'),
        ({"regions": {"arm": {"tag": "part=x"}}}, "regions.arm.tag: expected"),
        ({"regions": {"arm": {"bxo": 1}}}, "Did you mean 'box'?"),
        ({"regions": {"arm": {"box": {"from": [0, 0, 0]}}}}, "regions.arm.box: expected a table { from = [x, y, z], to = "
         "[x, y, z] }, found {'from': [0, 0, 0]}. The key 'to' is missing."),
        ({"regions": {"arm": {"box": {"from": [0, 0, 0], "to": [0, 0]}}}}, "'to' must be three numbers [x, y, z]"),
        ({"regions": {"arm": {"box": {"from": [0, 1, 0], "to": [1, 0, 1]}}}}, "'from' must not be beyond 'to'"),
        ({"regions": {"arm": {"box": {"from": [0, 0, 0], "to": [1, 0, float("nan")]}}}}, "'to' must be three numbers"),
        ({"regions": {"arm": {"sphere": {"center": [0, 0, 0], "radus": 1}}}}, "no key 'radus' here. Did you mean 'radius'?"),
        ({"regions": {"arm": {"sphere": {"center": [0, 0, 0], "radius": -1}}}}, "'radius' must be a number above zero"),
        ({"regions": {"arm": {"cylinder": {"from": [0, 0, 0], "to": [0, 0, 0], "radius": 1}}}}, "are the same point"),
        ({"regions": {"arm": {"near": {"point": [0, 0, 0], "cells": 0, "within": 1}}}},
         "'cells' must be a whole number from 1"),
        ({"regions": {"arm": {"near": {"point": [0, 0, 0], "cells": 1}}}}, "The key 'within' is missing"),
        ({"regions": {"arm": {"where": {"array": "a"}}}}, "One of 'above', 'below' and 'equals' must be there."),
        ({"regions": {"arm": {"any_of": ["amr"]}}}, "regions.arm.any_of: no region is called 'amr'. Did you mean 'arm'?"),
        ({"regions": {"arm": {"any_of": ["arm"]}}}, "regions.arm: the region is made of itself in the end"),
        ({"regions": {"a": {"none_of": ["b"]}, "b": {"all_of": ["c"]}, "c": {"any_of": ["whole", "a"]}}}, "made of itself"),
        ({"regions": {"whole": {"tag": "a=1"}}}, "a region's name has letters, digits"),
        ({"regions": {"arm": {"tag": "a=1", "cells_at_least": 0}}}, "cells_at_least: expected a whole number from 1"),
        ({"number": 2}, "it says 2, and the file has 1 [[limits]] tables: it was cut off or merged wrongly"),
        ({"number": 0}, "number_of_limits: expected a whole number from 1"),
    ],
    ids=lambda c: str(c)[:50],
)  # fmt: skip
def test_a_mistake_elsewhere_is_told_with_its_place(more: dict[str, Any], said: str) -> None:
    text = refused(GOOD, **more)
    assert said in text
    assert text.startswith("limits.toml, line ")


def test_measures_of_a_linear_solve_are_small_ones() -> None:
    text = refused({**GOOD, "base": "hencky"}, result={"solve": "linear"})
    assert (
        "limits[1].base: principal_strain_hencky is a finite measure, and [result] states a linear solve"
        in text
    )


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("", "the key 'schema' is missing"),
        ("limits = 5", "the key 'schema' is missing"),
        (f'schema = "{SCHEMA}"\nnumber_of_limits = 1', "the key 'limits' is missing"),
        (
            f'schema = "{SCHEMA}"\nnumber_of_limits = 1\nlimits = []',
            "there is no limit: nothing would be tested",
        ),
        (f'schema = "{SCHEMA}"\nnumber_of_limits = 1\n[limits]\nid = "a"', "two brackets on each side"),
        (f'schema = "{SCHEMA}"\nnumber_of_limits = 1\nlimits = [1]', "limits[1]: expected a table, found 1"),
        ('schema = "unturn.limits/2"\nnumber_of_limits = 1', 'schema: expected one of "unturn.limits/1"'),
        ("schema = [", "not a TOML file"),
        ("a = 1\na = 2", "not a TOML file"),
        ("a = " + "1" * 5000, "not a TOML file"),
        ("#[" + " " * 100_000 + "\nschema = 5", "line 2: schema: expected one of"),
    ],
)
def test_a_file_that_tests_nothing_is_refused(text: str, said: str) -> None:
    with pytest.raises(UsageError) as caught:
        parse_limits(text.encode(), "limits.toml")
    assert said in str(caught.value)


def test_line_numbers_are_those_of_the_file() -> None:
    text = written(GOOD, {**GOOD, "id": "second", "at_most": "x"}, regions=REGIONS)
    line = 1 + text.splitlines().index('at_most = "x"')
    with pytest.raises(UsageError, match=rf"limits.toml, line {line}: limits\[2\].at_most"):
        parsed(text)
    line = 1 + [n for n, v in enumerate(text.splitlines()) if v == "[[limits]]"][1]
    with pytest.raises(UsageError, match=rf"line {line}: limits\[2\]: the key 'id' is missing"):
        parsed(text.replace('id = "second"\n', ""))


def test_two_limits_of_one_id_are_refused() -> None:
    assert "limits[2].id: 'pull' is also the id of limits[1]" in refused(GOOD, GOOD)


def test_one_limit_in_several_regions_is_one_verdict_each() -> None:
    bounds = {"region": ["arm", "foot"], "at_most": {"arm": 1000, "foot": 400}}
    limits = parsed(written({**GOOD, **bounds}, regions=REGIONS)).limits
    assert [(v.id, v.region, v.at_most) for v in limits] == [
        ("pull/arm", "arm", 1000.0),
        ("pull/foot", "foot", 400.0),
    ]
    same = parsed(written({**GOOD, "region": ["arm", "foot"]}, regions=REGIONS)).limits
    assert [v.at_most for v in same] == [1000.0, 1000.0]


def test_what_cannot_be_read_is_wrong_usage(tmp_path: Path) -> None:
    for path in (tmp_path / "missing.toml", tmp_path, "bad\0name"):
        with pytest.raises(UsageError, match="the limits cannot be read"):
            read_limits(path)
    (tmp_path / "latin.toml").write_bytes(b'title = "\xe9"')
    with pytest.raises(UsageError, match="not a TOML file"):
        read_limits(tmp_path / "latin.toml")
    (tmp_path / "deep.toml").write_text("a = " + "[" * 5000)
    with pytest.raises(UsageError, match="not a TOML file"):
        read_limits(tmp_path / "deep.toml")


# --- broken files -----------------------------------------------------------------------------------------------------

MESH = row([5e-4, -2e-4, 3e-4], v=[1.0, 2.0, 3.0], part=[1, 1, 2])
SOUND = written(
    {**GOOD, "accept": ["plus-minus", "singular"]},
    {
        **GOOD,
        "id": "low",
        "component": "3",
        "statistic": "minimum",
        "at_least": -1e4,
        "region": "arm",
        "accept": ["plus-minus"],
    },
    ARRAY,
    {
        **ARRAY,
        "id": "share",
        "statistic": "share",
        "above": 2.5,
        "at_most": {"arm": 50, "foot": 100},
        "region": ["arm", "foot"],
    },
    {**ARRAY, "id": "p", "statistic": "percentile", "percent": 99, "waiver": WAIVER},
    result={"cells": 3, "no_nan": True, "no_tangled": True, "solve": "linear", "small_strain": "marginal"},
    regions={
        **REGIONS,
        "all": {"any_of": ["arm", "foot"]},
        "ball": {"sphere": {"center": [0, 0, 0], "radius": 9}},
    },
).replace("[result]", "title = '''sound \\' file'''\n\n[result]")
IDS = {"pull", "low", "v", "share/arm", "share/foot", "p"}


def _exit_status(raw: bytes) -> tuple[int, int]:
    """Return the exit status of a limits file, and how many limits were tested."""
    try:
        limits = parse_limits(raw, "limits.toml")
    except UsageError as error:
        return error.exit_status, 0
    found = checked(MESH, raw.decode()).findings
    tested = [f for f in found if not f.id.startswith("result/")]
    assert len(tested) == len(limits.limits)
    return (0 if all(f.passes() for f in found) else 1), len(tested)


def test_the_sound_file_passes() -> None:
    found = checked(MESH, SOUND).findings
    assert {f.id for f in found if not f.id.startswith("result/")} == IDS
    assert [f for f in found if f.state != "met"] == []
    assert _exit_status(SOUND.encode()) == (0, 6)


def test_a_thousand_random_corruptions_never_pass_with_fewer_limits() -> None:
    random_ = random.Random(20261201)
    raw = SOUND.encode()
    statuses = {0: 0, 1: 0, 2: 0}
    for _ in range(1000):
        status, tested = _exit_status(_corrupted(raw, random_))
        assert status != 0 or tested >= len(IDS)
        statuses[status] += 1
    assert statuses[2] > 400  # the corruptions do reach the rules


def _corrupted(raw: bytes, random_: random.Random) -> bytes:
    """Return a file with bytes changed, lost, doubled or moved, or lines lost, doubled or exchanged, or cut off."""
    lines = raw.splitlines(keepends=True)
    a, b = sorted(random_.sample(range(len(raw)), 2))
    i, j = sorted(random_.sample(range(len(lines)), 2))
    added = random_.choice([b"#", b'"', b'"""', b"'''", b"[", b"=", b"\n", b"[[limits]]\n", b"nan"])
    ways = (
        raw[:a] + bytes([random_.randrange(256)]) + raw[a + 1 :],
        raw[:a] + raw[a + random_.randrange(1, 30) :],
        raw[:a] + added + raw[a:],
        raw[:a],
        b"".join(lines[:i] + lines[j:]),
        b"".join([*lines[:i], lines[j], *lines[i + 1 : j], lines[i], *lines[j + 1 :]]),
        b"".join(lines[:i] + lines[i:j] + lines[i:]),
        raw[:a] + raw[b:] + raw[a:b],
    )
    return random_.choice(ways)


_LEAVES = st.one_of(
    st.none(),
    st.booleans(),
    st.integers(),
    st.floats(),
    st.text(max_size=8),
    st.dates(),
    st.just({}),
    st.just([]),
)
_VALUES = st.recursive(
    _LEAVES, lambda inner: st.one_of(st.lists(inner, max_size=3), st.dictionaries(st.text(max_size=5), inner, max_size=3)),
    max_leaves=6,
)  # fmt: skip
_KEYS = sorted(
    {
        *GOOD,
        "region",
        "base",
        "at",
        "steps",
        "accept",
        "waiver",
        "warn_above",
        "at_least",
        "percent",
        "above",
        "x",
    }
)


@settings(max_examples=60)
@given(key=st.sampled_from(_KEYS), value=_VALUES)
def test_any_value_of_any_key_is_read_or_refused(key: str, value: Any) -> None:
    import tomllib

    from unturn.toml_keys import Lines, Source
    from unturn.verdicts.limit import Limits
    from unturn.verdicts.read_limit import read_limit

    limits: Limits = parsed(written(GOOD))
    table = {**tomllib.loads(written(GOOD))["limits"][0], key: value}
    source = Source("limits.toml", Lines("", {}))
    try:
        made = read_limit(source, ("limits", 0), table, limits.regions, limits.options)
    except UsageError as refused_:
        said = str(refused_)
    else:
        said = f"limits[1] is {made[0].id}"
    assert "limits[1]" in said


def test_a_result_made_worse_by_a_factor_flips_the_verdict() -> None:
    limit = {**GOOD, "accept": ["plus-minus", "singular"]}
    for factor, state in ((1.0, "met"), (1.999, "met"), (2.001, "exceeded"), (50.0, "exceeded")):
        worse = MESH.with_arrays(point_data={"u": factor * MESH.point_data["u"]})
        assert one(worse, limit).state == state
