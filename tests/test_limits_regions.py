"""Every kind of region of a limits file against the cells chosen by hand, and what is left out of them."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from limits_samples import checked, grid, one, written
from unturn.result import CellBlock, Result
from unturn.written_regions.kinds import REGION_KINDS

N = 4
A, B, C = (a.ravel() for a in np.meshgrid(*[np.arange(N)] * 3, indexing="ij"))
X, Y, Z = A + 0.5, B + 0.5, C + 0.5
POINTS = grid(N).points
MESH = replace(
    grid(N, number=np.arange(N**3), part=(A > 1).astype(np.int32), heat=100.0 * A + C).with_arrays(
        point_data={"depth": POINTS[:, 2], "heat": 0.0 * POINTS[:, 0]}
    ),
    groups={"slab": np.flatnonzero(B == 2), "nothing": np.zeros(0, dtype=np.int64)},
)

Mask = np.ndarray[Any, np.dtype[np.bool_]]
CASES: list[tuple[dict[str, Any], Mask]] = [
    ({"group": "slab"}, B == 2),
    ({"tag": "part=1"}, A > 1),
    ({"box": {"from": [0, 0, 0], "to": [1.5, 2.5, 0.5]}}, (X <= 1.5) & (Y <= 2.5) & (Z <= 0.5)),
    ({"box": {"from": [0, 0, 0], "to": [1.4999999, 2.5, 0.5]}}, (X <= 0.5) & (Y <= 2.5) & (Z <= 0.5)),
    ({"cylinder": {"from": [2, 2, 0.5], "to": [2, 2, 2.5], "radius": 0.7072}}, (np.hypot(X - 2, Y - 2) < 1) & (Z <= 2.5)),
    ({"cylinder": {"from": [2, 2, 0.5], "to": [2, 2, 2.5], "radius": 0.7070}}, X < 0),
    ({"cylinder": {"from": [0, 0.5, 0.5], "to": [2, 0.5, 0.5], "radius": 0.1}}, (B == 0) & (C == 0) & (X < 2)),
    ({"sphere": {"center": [0.5, 0.5, 0.5], "radius": 1.0}}, A + B + C <= 1),
    ({"sphere": {"center": [0.5, 0.5, 0.5], "radius": 0.9999999}}, A + B + C == 0),
    ({"near": {"point": [0.5, 0.6, 0.7], "cells": 3, "within": 9}}, (A == 0) & (B + C <= 1)),
    ({"near": {"point": [0.5, 0.6, 0.7], "cells": 3, "within": 0.5}}, A + B + C == 0),
    ({"where": {"array": "heat", "on": "cells", "above": 100, "below": 300}}, (100 * A + C > 100) & (100 * A + C < 300)),
    ({"where": {"array": "number", "equals": 7}}, np.arange(N**3) == 7),
    ({"where": {"array": "number", "equals": [7, 9]}}, np.isin(np.arange(N**3), [7, 9])),
    ({"where": {"array": "depth", "below": 2.5}}, C <= 1),
    ({"where": {"array": "heat", "on": "nodes", "below": 1.0}}, A >= 0),
    ({"tag": "part=1", "group": "slab"}, (A > 1) & (B == 2)),
    ({"all_of": ["right", "slab"]}, (A > 1) & (B == 2)),
    ({"any_of": ["right", "slab"]}, (A > 1) | (B == 2)),
    ({"none_of": ["right", "slab"]}, (A <= 1) & (B != 2)),
    ({"all_of": ["right"], "none_of": ["slab"]}, (A > 1) & (B != 2)),
    ({"all_of": ["whole"], "none_of": ["mixed"]}, ~((A > 1) & (B != 2))),
]  # fmt: skip
OTHERS: dict[str, dict[str, Any]] = {
    "right": {"tag": "part=1"},
    "slab": {"group": "slab"},
    "mixed": {"all_of": ["right"], "none_of": ["slab"]},
}
SUM = {"array": "number", "statistic": "sum", "unit": "number", "region": "it"}
COUNT = {"array": "number", "statistic": "count", "above": -1, "unit": "number", "region": "it"}


@pytest.mark.derived("the cells of a cube of 4 x 4 x 4 chosen by their indices")
@pytest.mark.parametrize(("region", "expected"), CASES, ids=lambda c: str(c)[:60])
def test_each_kind_of_region_holds_its_cells(region: dict[str, Any], expected: Mask) -> None:
    regions = {**OTHERS, "it": region}
    numbers = np.flatnonzero(expected)
    for limit, value in ((SUM, float(numbers.sum())), (COUNT, float(len(numbers)))):
        found = one(MESH, {**limit, "at_most": value, "at_least": value}, regions=regions)
        if len(numbers):
            assert (found.state, found.value) == ("met", value)
        else:
            assert found.state == "error"
            assert "holds 0 computed cells" in found.message


@pytest.mark.derived("every kind of the table has its case")
def test_no_kind_is_left_out() -> None:
    assert {key for region, _ in CASES for key in region} == set(REGION_KINDS)


@pytest.mark.derived("a region that matches nothing, or less than it must, is an error and never met")
@pytest.mark.parametrize(
    ("region", "said"),
    [
        ({"group": "slap"}, "no cell group 'slap'. Did you mean 'slab'?"),
        ({"group": "nothing"}, "holds 0 computed cells"),
        ({"tag": "part=7"}, "holds 0 computed cells"),
        ({"tag": "prat=1"}, "no cell array 'prat'. Did you mean 'part'?"),
        ({"where": {"array": "numbr", "above": 1}}, "no such array 'numbr'. Did you mean 'number'?"),
        ({"where": {"array": "heat", "above": 1}}, "both cells and nodes have an array 'heat'"),
        ({"where": {"array": "number", "on": "nodes", "above": 1}}, "no such array"),
        ({"where": {"array": "u", "above": 1}}, "not one number each"),
        ({"tag": "part=1", "cells_at_least": 33}, "holds 32 computed cells and must hold 33"),
        ({"none_of": ["whole"]}, "holds 0 computed cells"),
        ({"box": {"from": [900, 0, 0], "to": [1000, 9, 9]}}, "holds 0 computed cells"),
    ],
)
def test_a_region_that_is_not_there_is_never_met(region: dict[str, Any], said: str) -> None:
    found = one(MESH, {**SUM, "at_most": 1e9}, regions={"it": region})
    assert found.state == "error"
    assert said in found.message
    above = one(
        MESH, {**SUM, "at_most": 1e9, "region": "top"}, regions={"it": region, "top": {"any_of": ["it"]}}
    )
    assert above.state == "error"


@pytest.mark.derived("exactly as many cells as it must hold are enough")
def test_the_smallest_number_of_cells() -> None:
    region = {"tag": "part=1", "cells_at_least": 32}
    assert one(MESH, {**SUM, "at_most": 1e9}, regions={"it": region}).state == "met"


@pytest.mark.derived("what is left out by name is printed with its own peak, also through other regions")
@pytest.mark.parametrize("region", ["away", "around"])
def test_what_is_left_out_is_told_with_its_peak(region: str) -> None:
    regions = {**OTHERS, "away": {"tag": "part=1", "none_of": ["slab"]}, "around": {"all_of": ["away"]}}
    limit = {"array": "number", "statistic": "maximum", "unit": "number", "at_most": 63, "region": region}
    found = one(MESH, limit, regions=regions)
    left = np.flatnonzero((A > 1) & (B == 2))
    assert found.state == "met"
    assert f"{len(left)} cells left out of {region}: {left.max()} there, cell {left.max()}" in found.message
    assert found.details["left_out"]["cells"] == len(left)
    assert found.details["left_out"]["largest"] == left.max()
    assert found.details["left_out"]["place"]["cell"] == left.max()


@pytest.mark.derived("skins and edges do not count beside the solids they belong to")
def test_cells_of_lower_dimension_do_not_count() -> None:
    solids = grid(2)
    faces = CellBlock("quad", np.array([[0, 3, 12, 9]]), np.array([8]))
    far = CellBlock("line", np.array([[27, 28]]), np.array([9]))
    points = np.concatenate([solids.points, [[9.0, 0, 0], [10, 0, 0]]])
    mixed = Result(points, (*solids.blocks, faces, far), {"u": 1e-3 * points}, {"number": np.arange(10.0)})
    assert one(mixed, {**COUNT, "region": "whole", "at_most": 8, "at_least": 8}).state == "met"
    tip = {"box": {"from": [8, -1, -1], "to": [11, 1, 1]}}
    assert one(mixed, {**COUNT, "at_most": 1, "at_least": 1}, regions={"it": tip}).state == "met"
    both = {"box": {"from": [-1, -1, -1], "to": [11, 9, 9]}}
    found = one(mixed, {**COUNT, "at_most": 8, "at_least": 8}, regions={"it": both})
    assert found.state == "met"
    assert "1 cell of it is of lower dimension and not counted" in found.message
    assert found.details["lower_dimension"] == 1


@pytest.mark.derived(
    "at nodes a region has the nodes of its cells, each weighted by its share of their volume"
)
def test_regions_at_nodes() -> None:
    depth = {"array": "depth", "at": "nodes", "unit": "number", "region": "it"}
    regions = {"it": {"box": {"from": [0, 0, 0], "to": [4, 4, 1]}}}  # the lowest layer: nodes at 0 and 1
    for statistic, more, value in (
        ("maximum", {}, 1.0), ("mean", {}, 0.5), ("count", {"above": -1}, 50.0), ("share", {"above": 0.5}, 50.0),
    ):  # fmt: skip
        found = one(
            MESH,
            {**depth, "statistic": statistic, "at_most": value, "at_least": value, **more},
            regions=regions,
        )
        assert (found.state, found.value) == ("met", value), statistic
    top = one(MESH, {**depth, "statistic": "maximum", "at_most": 0.5}, regions=regions)
    assert top.state == "exceeded"
    assert top.place["at"][2] == 1.0  # type: ignore[index]
    assert "cell" not in top.place


@pytest.mark.derived(
    "u = 0.001 x: e_xx = 0.001 everywhere, whatever the location; u = 0.001 x^2: 0.002 x at nodes"
)
@pytest.mark.parametrize("at", ["centroid", "mean", "nodes", "surface"])
def test_every_location_sees_its_own_values(at: str) -> None:
    x = MESH.points[:, 0]
    bent = MESH.with_arrays(point_data={"u": np.stack([1e-3 * x**2, 0 * x, 0 * x], axis=1)})
    limit = {"measure": "strain", "component": "XX", "at": at, "statistic": "maximum", "unit": "microstrain"}
    accept = {"accept": ["plus-minus", "singular"]}
    flat = one(MESH, {**limit, **accept, "at_most": 1000 * (1 + 1e-9), "at_least": 1000 * (1 - 1e-9)})
    assert flat.state == "met"
    found = one(bent, {**limit, **accept, "at_most": 1.0})
    assert found.state == "exceeded"
    # linear bricks: 2 x at centroids, 7 in the last layer; patches recover the linear strain at nodes: 8
    assert found.value == pytest.approx(8000 if at == "nodes" else 7000, rel=1e-6)
    assert ("point" in found.place) is (at == "nodes")


@pytest.mark.derived(
    "u_r = 0.001 r about z: e_RR = 0.001; u_x of it alone is e_XX = 0.001 too, e_TT = 0.001, e_ZZ = 0"
)
@pytest.mark.parametrize("at", ["centroid", "nodes"])
def test_components_in_a_frame(at: str) -> None:
    grown = MESH.with_arrays(point_data={"u": np.outer(1e-3 * MESH.points[:, 0], [1, 0, 0])})
    limit = {
        "measure": "strain",
        "at": at,
        "statistic": "maximum",
        "unit": "microstrain",
        "accept": ["plus-minus"],
    }
    for component, value in (("11", 0.0), ("22", 1000.0), ("12", 0.0)):
        bounds = {"at_most": value + 1e-6, "at_least": value - 1e-6}
        found = one(grown, {**limit, "frame": "cartesian y 1,0,0", "component": component, **bounds})
        assert found.state == "met", (component, found)


@pytest.mark.derived("several limits on one quantity and region take it once and say the same")
def test_limits_share_what_is_computed() -> None:
    limits = [{"id": f"l{k}", **SUM, "at_most": 1e9} for k in range(3)]
    text = written(*limits, regions={"it": {"tag": "part=1"}})
    first, second = (checked(MESH, text).findings for _ in range(2))
    assert first == second
    assert {(f.value, f.state) for f in first} == {(float(np.flatnonzero(A > 1).sum()), "met")}
