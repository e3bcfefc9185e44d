"""Comparing two results: what differs, where, and by how much; on one mesh, renumbered, and on different meshes."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import unturn
from meshes import Mesh, patch, straight
from unturn.elements import ELEMENTS
from unturn.errors import InputError, UsageError
from unturn.locate import locate_all
from unturn.model import build_model
from unturn.result import CellBlock, Result, Steps
from unturn.verdicts.compare import CompareOptions, compare_states
from unturn.verdicts.comparison import Comparison
from unturn.verdicts.finding import Finding
from unturn.verdicts.mesh_match import match
from unturn.verdicts.mesh_view import view
from unturn.verdicts.sampling import sample

RNG = np.random.default_rng(7)


# --- meshes -----------------------------------------------------------------------------------------------------------


def box(n: int, element: str, length: float = 1.0, skew: float = 0.0) -> Mesh:
    """A unit cube (times `length` along x) in n x n x n parts of one element; `skew` bends planes within it."""
    row = ELEMENTS[element]
    t = np.linspace(0.0, 1.0, n + 1)
    corners = np.stack(np.meshgrid(t, t, t, indexing="ij"), axis=-1).reshape(-1, 3)
    x, y, z = corners.T
    bump = skew * x * (1 - x) * y * (1 - y) * z * (1 - z)
    corners = corners + np.stack([3.0 * bump, -2.0 * bump, bump], axis=1)
    corners[:, 0] *= length
    at = np.arange((n + 1) ** 3).reshape(n + 1, n + 1, n + 1)
    cube = [at[i : n + i, j : n + j, k : n + k].reshape(-1) for i, j, k in np.ndindex(2, 2, 2)]
    if row.shape.name == "hexahedron":
        cells = np.stack([cube[c] for c in (0, 4, 6, 2, 1, 5, 7, 3)], axis=1)
    else:  # six tetrahedra around the diagonal
        paths = [(0, 4, 6, 7), (0, 6, 2, 7), (0, 2, 3, 7), (0, 3, 1, 7), (0, 1, 5, 7), (0, 5, 4, 7)]
        cells = np.concatenate([np.stack([cube[c] for c in path], axis=1) for path in paths])
    return straight(corners, cells, row)


def linear(X: np.ndarray) -> np.ndarray:
    return 1e-3 * (X @ np.array([[1.0, 0.4, -0.2], [0.3, -0.5, 0.1], [0.2, 0.1, 0.7]]).T) + [0.1, -0.2, 0.3]


def quadratic(X: np.ndarray) -> np.ndarray:
    x, y, z = X.T
    return 1e-3 * np.stack([x * x + 0.3 * y * z, x * y - z * z, 0.5 * x * z + y * y - x], axis=1)


def shuffled(result: Result, seed: int = 1) -> Result:
    """The same result with other node and cell numbers, in other blocks."""
    rng = np.random.default_rng(seed)
    point, cell = rng.permutation(result.n_points), rng.permutation(result.n_cells)
    new_point, new_cell = np.argsort(point), np.argsort(cell)
    blocks = []
    for b in result.blocks:
        order = rng.permutation(len(b))
        for half in (order[::2], order[1::2]):
            blocks.append(CellBlock(b.cell_type, new_point[b.connectivity[half]], new_cell[b.index[half]]))
    return replace(
        result, points=result.points[point], blocks=tuple(blocks[::-1]),
        point_data={k: v[point] for k, v in result.point_data.items()},
        cell_data={k: v[cell] for k, v in result.cell_data.items()},
        groups={k: new_cell[v] for k, v in result.groups.items()},
    )  # fmt: skip


def found(comparison: Comparison, name: str) -> Finding:
    """The one finding of that id."""
    (one,) = [f for f in comparison.report.findings if f.id == name]
    return one


def states(comparison: Comparison) -> dict[str, str]:
    return {f.id: f.state for f in comparison.report.findings}


# --- one mesh ---------------------------------------------------------------------------------------------------------


@pytest.mark.derived("a result does not differ from itself")
@pytest.mark.parametrize("element", ["hexahedron20", "tetra", "wedge15", "quad9", "triangle6", "line3"])
def test_a_result_does_not_differ_from_itself(element: str) -> None:
    mesh = patch(ELEMENTS[element])
    result = mesh.result(u=linear(mesh.points), where=quadratic(mesh.points)[:, 0])
    measures = ["all"] if mesh.element.dim != 2 else ["strain", "rotation"]
    same = unturn.compare(result, result, measures=measures, displacement="u")
    assert same.passed, same.report
    assert set(states(same).values()) == {"met"}
    assert all(not v.any() for v in same.differences.cell_data.values() if v.dtype.kind == "f")


@pytest.mark.derived("one node is moved by a known amount")
def test_a_known_difference_is_found_with_its_place_and_size() -> None:
    mesh = box(3, "hexahedron")
    u = linear(mesh.points)
    node = 21
    moved = u.copy()
    moved[node, 1] -= 2.5e-4
    numbers = np.arange(100, 100 + len(u))
    now, before = (mesh.result(u=a, node_number=numbers) for a in (moved, u))
    compared = unturn.compare(now, before)
    one = found(compared, "point u in whole")
    assert one.state == "exceeded"
    assert one.value == pytest.approx(2.5e-4, rel=1e-12)
    assert one.place["point"] == node
    assert one.place["node"] == 100 + node
    assert one.place["at"] == tuple(mesh.points[node])
    assert "component 2 of 3" in one.title
    assert one.details["largest"]["value"] == pytest.approx(2.5e-4, rel=1e-12)
    size = np.linalg.norm(u[node])
    assert one.details["relative"]["value"] == pytest.approx(2.5e-4 / size, rel=1e-12)
    assert one.details["beyond"] == 1
    difference = compared.differences.point_data["u_difference"]
    assert difference[node] == pytest.approx([0, -2.5e-4, 0], rel=1e-12)
    assert not np.delete(difference, node, axis=0).any()
    assert np.array_equal(compared.differences.point_data["u"], u)


@pytest.mark.derived("nodal weight: the volume of each cell, shared equally by its nodes")
def test_norm_and_share_are_weighted_by_volume() -> None:
    mesh = box(2, "hexahedron")
    volume = 1.0 / 8.0
    u, changed = np.ones(len(mesh.points)), np.ones(8)
    moved = u.copy()
    moved[13] += 0.1  # the middle: it belongs to all eight cells
    changed[2] += 0.3
    now, before = mesh.result(v=moved), mesh.result(v=u)
    now, before = now.with_arrays(cell_data={"c": changed}), before.with_arrays(cell_data={"c": np.ones(8)})
    compared = unturn.compare(now, before)
    point, cell = found(compared, "point v in whole").details, found(compared, "cell c in whole").details
    assert point["share_beyond"] == pytest.approx(8 * volume / 8, rel=1e-12)
    assert point["l2"] == pytest.approx(0.1 * np.sqrt(volume), rel=1e-12)
    assert cell["share_beyond"] == pytest.approx(volume, rel=1e-12)
    assert cell["l2"] == cell["l2_relative"] == pytest.approx(0.3 * np.sqrt(volume), rel=1e-12)


@pytest.mark.derived("at most: just below is within, just above is beyond")
@pytest.mark.parametrize("key", ["absolute", "relative", "of_largest"])
@pytest.mark.parametrize("by", ["components", "norm"])
def test_a_tolerance_just_below_and_just_above(key: str, by: str) -> None:
    mesh = box(2, "tetra")
    a = np.column_stack([3.0 + mesh.points[:, 0], 4.0 + 0 * mesh.points[:, 1], 0 * mesh.points[:, 2]])
    b = a.copy()
    b[5] += [3e-3, 4e-3, 0.0]
    allowed = 5e-3 if by == "norm" else 4e-3
    size = np.linalg.norm(a, axis=1)
    stated = {"absolute": allowed, "relative": allowed / size[5], "of_largest": allowed / size.max()}[key]
    for factor, passes in ((1 - 1e-9, False), (1 + 1e-9, True)):
        tolerances = {"default": {"by": by}, "arrays": {"u": {key: stated * factor}}}
        compared = unturn.compare(mesh.result(u=b), mesh.result(u=a), tolerances=tolerances)
        assert compared.passed is passes, compared.report
        assert found(compared, "point u in whole").value == pytest.approx(allowed, rel=1e-9)


@pytest.mark.derived("a share of the volume may differ by more")
def test_a_share_of_the_volume_may_be_beyond() -> None:
    mesh = box(2, "hexahedron")
    values = np.zeros(8)
    values[3] = 1.0
    now, before = (mesh.result().with_arrays(cell_data={"c": v}) for v in (values, np.zeros(8)))
    for share, passes in ((0.1249, False), (0.1251, True)):
        compared = unturn.compare(now, before, tolerances={"default": {"share": share}})
        assert compared.passed is passes
        one = found(compared, "cell c in whole")
        assert (one.unit, one.value) == ("percent", pytest.approx(12.5))


@pytest.mark.derived("differences within the stored precision do not count; beyond it they do")
def test_stored_precision_does_not_count() -> None:
    mesh = box(3, "tetra")
    u = linear(mesh.points) + 1e-3 * RNG.random((len(mesh.points), 3))
    single = mesh.result(u=u.astype(np.float32))
    assert unturn.compare(single, mesh.result(u=u)).passed
    text = mesh.result(u=np.round(u, 6))
    assert unturn.compare(text, mesh.result(u=u)).passed
    further = u.copy()
    further[4, 0] += 1e-6
    assert not unturn.compare(mesh.result(u=further), text).passed
    next_to = np.nextafter(u, np.inf)
    assert unturn.compare(mesh.result(u=next_to), mesh.result(u=u)).passed
    assert not unturn.compare(mesh.result(u=u * (1 + 1e-14)), mesh.result(u=u)).passed


@pytest.mark.derived("NaN on one side only is a difference, whatever the tolerance; on both it is none")
def test_nan_on_one_side_is_a_difference() -> None:
    mesh = box(2, "hexahedron")
    u = linear(mesh.points)
    broken = u.copy()
    broken[4] = np.nan
    loose: dict[str, Any] = {"absolute": 1e9, "tolerances": {"default": {"share": 0.9}}}
    for now, before in ((broken, u), (u, broken)):
        one = found(unturn.compare(mesh.result(u=now), mesh.result(u=before), **loose), "point u in whole")
        assert one.state == "exceeded"
        assert "NaN on one side only at 1 of 27 points" in one.message
        assert one.place["point"] == 4
        assert (one.details["beyond"], one.details["nan_on_one_side"]) == (1, 1)
    assert unturn.compare(mesh.result(u=broken), mesh.result(u=broken)).passed
    nothing = np.full_like(u, np.nan)
    one = found(unturn.compare(mesh.result(v=nothing), mesh.result(v=nothing)), "point v in whole")
    assert one.state == "warning"
    infinite = u.copy()
    infinite[3, 0] = np.inf
    same = unturn.compare(mesh.result(u=infinite), mesh.result(u=infinite))
    assert same.passed
    assert not same.differences.point_data["u_difference"].any()
    assert not unturn.compare(mesh.result(u=infinite), mesh.result(u=u), absolute=1e300).passed


@pytest.mark.derived("whole numbers and texts are equal or not")
def test_whole_numbers_and_texts_are_compared_exactly() -> None:
    mesh = box(2, "hexahedron")
    part, name = np.arange(8), np.array([f"lot {k}" for k in range(8)])
    other, renamed = part.copy(), name.copy()
    other[6], renamed[2] = 7, "lot x"
    before = mesh.result().with_arrays(cell_data={"lot": part, "label": name})
    now = mesh.result().with_arrays(cell_data={"lot": other, "label": renamed})
    compared = unturn.compare(now, before, absolute=100.0)
    one, text = found(compared, "cell lot in whole"), found(compared, "cell label in whole")
    assert (one.state, one.value, one.place["cell"]) == ("exceeded", 1.0, 6)
    assert "7 instead of 6" in one.message
    assert (text.state, text.place["cell"]) == ("exceeded", 2)
    assert "lot x instead of lot 2" in text.message
    assert unturn.compare(before, before).passed


@pytest.mark.derived("the sign of a direction says nothing")
def test_the_sign_of_a_direction_does_not_matter() -> None:
    mesh = box(2, "hexahedron")
    d = RNG.normal(size=(8, 3))
    flipped = d * np.where(np.arange(8) % 2, 1.0, -1.0)[:, None]
    arrays = {"principal_direction_1": d, "axis": d}
    before = mesh.result().with_arrays(cell_data=arrays)
    now = mesh.result().with_arrays(cell_data=dict.fromkeys(arrays, flipped))
    compared = unturn.compare(now, before)
    assert states(compared)["cell principal_direction_1 in whole"] == "met"
    assert states(compared)["cell axis in whole"] == "exceeded"
    assert unturn.compare(now, before, tolerances={"arrays": {"axis": {"sign": "free"}}}).passed
    turned = mesh.result().with_arrays(cell_data={"principal_direction_1": d[:, ::-1]})
    assert not unturn.compare(turned, before, arrays=["principal_direction_1"]).passed


@pytest.mark.derived("directions of equal principal values are arbitrary")
def test_directions_of_equal_principal_values_are_left_open() -> None:
    mesh = box(2, "tetra")
    u = mesh.points * [1e-3, -0.3e-3, -0.3e-3]
    noisy = u * (1 + 1e-15 * RNG.normal(size=u.shape))
    names = [f"principal_direction_{k}" for k in (1, 2, 3)]
    compared = unturn.compare(mesh.result(u=noisy), mesh.result(u=u), measures=names, absolute=1e-12)
    assert compared.passed, compared.report
    first = found(compared, "computed principal_direction_1 in whole")
    assert first.details["largest"]["value"] < 1e-9  # the first one is well separated, and still compared


@pytest.mark.derived("shear counts twice in the norm of a symmetric tensor")
def test_the_norm_of_a_tensor_counts_shear_twice() -> None:
    mesh = box(1, "hexahedron")
    strain = np.array([[1.0, 0, 0, 1.0, 0, 0]])
    names = {("cell", "strain"): ("XX", "YY", "ZZ", "XY", "YZ", "XZ")}
    now, before = (
        mesh.result().with_arrays(cell_data={"strain": s}, component_names=names)
        for s in (2 * strain, strain)
    )
    one = found(unturn.compare(now, before), "cell strain in whole")
    assert one.details["norm"] == pytest.approx(np.sqrt(3.0))
    assert one.details["relative"]["value"] == pytest.approx(1.0 / np.sqrt(3.0))
    assert one.details["largest"]["component"] == "XX"


# --- what is missing or another one -----------------------------------------------------------------------------------


@pytest.mark.derived("what the reference has must be there; what is new is told")
def test_missing_new_and_changed_arrays_are_reported() -> None:
    mesh = box(2, "hexahedron")
    u = linear(mesh.points)
    strain = np.zeros((8, 6))
    order = ("XX", "YY", "ZZ", "XY", "YZ", "XZ")
    before = mesh.result(u=u, gone=u[:, 0], wide=u).with_arrays(
        cell_data={"strain_hencky": strain, "named": strain + np.arange(6)},
        field_data={"load": np.array([1.0, 2.0])},
        component_names={("cell", "named"): order},
    )
    now = mesh.result(u=u, fresh=u[:, 0], wide=u[:, :2]).with_arrays(
        cell_data={"strain_biot": strain, "named": (strain + np.arange(6))[:, ::-1]},
        field_data={"load": np.array([1.0, 2.5])},
        component_names={("cell", "named"): order[::-1]},
    )
    compared = unturn.compare(now, before)
    told = states(compared)
    assert (
        told["missing point gone"]
        == told["missing cell strain_hencky"]
        == told["kind of point wide"]
        == "exceeded"
    )
    assert told["new point fresh"] == told["new cell strain_biot"] == "warning"
    assert told["cell named in whole"] == "met"  # the same components in another order
    assert "'strain_biot': another base?" in found(compared, "missing cell strain_hencky").message
    load = found(compared, "field load")
    assert (load.state, load.value) == ("exceeded", 0.5)
    other = now.with_arrays(component_names={("cell", "named"): ("RR", "TT", "ZZ", "RT", "TZ", "RZ")})
    assert states(unturn.compare(other, before))["kind of cell named"] == "exceeded"
    kept = unturn.compare(now, before, arrays=["u"])
    assert [f.id for f in kept.report.findings] == ["mesh", "point u in whole"]
    assert kept.passed


@pytest.mark.derived("a comparison of nothing is no comparison")
def test_nothing_to_compare_is_refused() -> None:
    mesh = box(1, "hexahedron")
    with pytest.raises(InputError, match="no array to compare"):
        unturn.compare(mesh.result(), mesh.result())
    u = linear(mesh.points)
    with pytest.raises(InputError, match="no array to compare"):
        unturn.compare(mesh.result(u=u), mesh.result(u=u), tolerances={"ignore": ["u"]})


@pytest.mark.derived("names that do not exist are refused with the nearest that does")
def test_unknown_names_are_refused() -> None:
    mesh = box(1, "hexahedron")
    result = mesh.result(displacement=linear(mesh.points))
    for wrong in (
        {"arrays": ["displacment"]},
        {"tolerances": {"arrays": {"displacment": {"absolute": 1.0}}}},
        {"tolerances": {"ignore": ["displacment"]}},
    ):
        with pytest.raises(UsageError, match="Did you mean 'displacement'"):
            unturn.compare(result, result, **wrong)
    with pytest.raises(UsageError, match="Did you mean 'plane'"):
        unturn.compare(result, result, plain="strain")
    with pytest.raises(UsageError, match="no region is called"):
        unturn.compare(result, result, regions=["hole"])
    with pytest.raises(UsageError, match="one text"):
        unturn.compare(result, result, arrays="displacement")
    for wrong_number in (-1.0, float("nan"), float("inf")):
        with pytest.raises(UsageError, match="a number from 0 on"):
            unturn.compare(result, result, relative=wrong_number)
    for share in (-0.1, 1.0, float("nan")):
        with pytest.raises(UsageError, match="share of the volume"):
            unturn.compare(result, result, outside=share)


@pytest.mark.derived("differences of one region are those of its cells")
def test_regions_are_compared_apart() -> None:
    mesh = box(2, "hexahedron")
    part = np.where(mesh.points[mesh.cells].mean(axis=1)[:, 0] < 0.5, 1, 2)
    c = np.ones(8)
    c[part == 2] += 0.01
    before = mesh.result(u=linear(mesh.points)).with_arrays(cell_data={"part": part, "c": np.ones(8)})
    now = before.with_arrays(cell_data={"c": c})
    told = states(unturn.compare(now, before))
    assert (told["cell c in part=1"], told["cell c in part=2"]) == ("met", "exceeded")
    assert unturn.compare(now, before, regions=["part=1"]).passed
    assert not unturn.compare(now, before, regions=["part=2"]).passed


# --- renumbered -------------------------------------------------------------------------------------------------------


@pytest.mark.derived("other numbers of one mesh change nothing")
@pytest.mark.parametrize("element", ["hexahedron27", "tetra10", "wedge", "pyramid13", "quad", "line"])
def test_a_renumbered_mesh_is_matched(element: str) -> None:
    mesh = patch(ELEMENTS[element])
    n = len(mesh.cells)
    before = mesh.result(u=linear(mesh.points), s=RNG.random(len(mesh.points))).with_arrays(
        cell_data={"lot": np.arange(n), "c": RNG.random((n, 6))}
    )
    before = replace(before, groups={"some": np.arange(n)[: n // 2]})
    now = shuffled(before)
    measures = ["all"] if mesh.element.dim != 2 else ["strain", "rotation"]
    compared = unturn.compare(now, before, measures=measures)
    assert compared.passed, compared.report
    assert found(compared, "mesh").details["kind"] == "renumbered"
    assert found(compared, "groups").state == "met"
    changed = now.with_arrays(cell_data={"lot": now.cell_data["lot"] + (now.cell_data["lot"] == 1)})
    one = found(
        unturn.compare(changed, before, arrays=["lot"]),
        f"cell lot in {'some' if n // 2 > 1 else '(no group)'}",
    )
    assert (one.state, one.place["cell"]) == ("exceeded", 1)


@pytest.mark.derived("measures that are recovered at nodes are those of the nodes, whatever their numbers")
def test_measures_at_nodes_of_a_renumbered_mesh() -> None:
    mesh = box(3, "tetra10", skew=1.0)
    before = mesh.result(u=quadratic(mesh.points) + 1e-5 * RNG.random((len(mesh.points), 3)))
    measures = ["strain", "principal_strain", "principal_direction_1"]
    compared = unturn.compare(shuffled(before), before, measures=measures, at="nodes")
    assert compared.passed, compared.report
    assert compared.differences.point_data["strain_difference"].shape == (before.n_points, 6)
    u = before.point_data["u"].copy()
    u[np.argmin(np.linalg.norm(mesh.points - 1 / 3, axis=1))] += [0, 0, 1e-4]  # a node within
    compared = unturn.compare(shuffled(mesh.result(u=u)), before, measures=["strain"], at="nodes")
    one = found(compared, "computed strain in whole")
    assert one.state == "exceeded"
    assert "point" in one.place
    with pytest.raises(UsageError, match="write it of both results"):
        unturn.compare(before, before, measures=["strain"], at="surface")
    with pytest.raises(UsageError, match="the meshes differ"):
        unturn.compare(box(2, "tetra10").result(u=quadratic(box(2, "tetra10").points)), before, measures=["strain"],
                       at="nodes")  # fmt: skip


@pytest.mark.derived("nodes at one place that belong to different parts stay apart")
def test_coincident_nodes_are_matched_by_their_cells() -> None:
    mesh = box(2, "hexahedron")
    torn = np.arange(8 * 8).reshape(8, 8)  # every cell has nodes of its own
    points = mesh.points[mesh.cells].reshape(-1, 3)
    block = CellBlock("hexahedron", torn, np.arange(8))
    before = Result(points, (block,), {"u": linear(points), "lot": np.repeat(np.arange(8), 8)})
    compared = unturn.compare(shuffled(before), before)
    assert compared.passed
    assert found(compared, "mesh").details["kind"] == "renumbered"
    joined = mesh.result(u=linear(mesh.points))
    assert found(unturn.compare(joined, before, arrays=["u"]), "mesh").details["kind"] == "different"


@pytest.mark.derived("cells at one place that share no nodes are never taken for each other")
@pytest.mark.parametrize("seed", range(6))
def test_coincident_layers_are_never_crossed(seed: int) -> None:
    mesh = patch(ELEMENTS["quad"])
    n, k = len(mesh.points), len(mesh.cells)
    block = CellBlock("quad", np.vstack([mesh.cells, mesh.cells + n]), np.arange(2 * k))
    layer = np.repeat([1.0, 2.0], n)
    before = Result(np.vstack([mesh.points, mesh.points]), (block,), {"v": layer})
    compared = unturn.compare(shuffled(before, seed), before)
    kind = found(compared, "mesh").details["kind"]
    assert kind == "different" or set(np.abs(compared.differences.point_data["v_difference"])) in (
        {0.0},
        {1.0},
    )
    if kind == "different":
        assert "cannot be told apart" in found(compared, "mesh").message


@pytest.mark.derived("points of no cell are compared where they have a counterpart")
def test_points_of_no_cell_are_compared_too() -> None:
    mesh = box(1, "hexahedron")
    points = np.vstack([mesh.points, [[5, 5, 5], [np.nan] * 3]])
    block = CellBlock("hexahedron", mesh.cells, np.arange(1))
    before = Result(points, (block,), {"v": np.arange(10.0)})
    now = shuffled(before)
    compared = unturn.compare(now, before)
    assert found(compared, "mesh").details["kind"] == "renumbered"
    one = found(compared, "point v in points of no cell")
    assert (one.state, one.details["outside"]) == (
        "undecided",
        1,
    )  # the one that is nowhere has no counterpart
    assert unturn.compare(now, before, outside=0.6).passed
    changed = before.with_arrays(point_data={"v": np.arange(10.0) + (np.arange(10) == 8)})
    assert found(unturn.compare(changed, before), "point v in points of no cell").place["point"] == 8


@pytest.mark.derived("a mesh that is not the same says why")
def test_another_mesh_is_told_from_other_numbers() -> None:
    coarse, fine = box(2, "hexahedron"), box(3, "hexahedron")
    assert match(view(fine.result()), view(coarse.result())).reason.startswith("27 hexahedron")
    moved = coarse._replace(points=coarse.points + 1e-3 * (coarse.points[:, :1] == 0.5))
    assert "apart" in match(view(moved.result()), view(coarse.result())).reason
    assert "away from every point" in match(view(shuffled(moved.result())), view(coarse.result())).reason
    near = coarse._replace(points=coarse.points + 1e-8)
    assert match(view(near.result()), view(coarse.result())).kind == "same"
    other = box(2, "tetra")
    turned = other._replace(cells=np.vstack([other.cells[:-2], other.cells[:2]]))  # two cells twice, two gone
    assert match(view(turned.result()), view(other.result())).kind == "different"
    u = linear(coarse.points)
    assert unturn.compare(moved.result(u=u), coarse.result(u=u), absolute=1e-3).passed
    assert not unturn.compare(moved.result(u=u), coarse.result(u=u), absolute=1e-3, same_mesh=True).passed


# --- different meshes -------------------------------------------------------------------------------------------------


@pytest.mark.source("linear elements hold linear fields, quadratic ones quadratic fields (patch tests)")
@pytest.mark.parametrize(
    ("of_result", "of_reference"),
    [
        ("hexahedron", "tetra"),
        ("tetra", "hexahedron20"),
        ("hexahedron27", "tetra10"),
        ("tetra10", "hexahedron"),
    ],
)
def test_a_linear_field_is_the_same_on_different_meshes(of_result: str, of_reference: str) -> None:
    a, b = box(3, of_result, skew=2.0), box(4, of_reference, skew=1.0)
    measures = ["strain", "rotation", "principal_strain", "strain_hencky", "finite_rotation"]
    compared = unturn.compare(a.result(u=linear(a.points)), b.result(u=linear(b.points)), measures=measures)
    assert compared.passed, compared.report
    assert states(compared)["mesh"] == "warning"
    assert found(compared, "point u in whole").details["outside"] == 0


@pytest.mark.source("complete quadratic elements hold quadratic fields exactly on straight cells")
@pytest.mark.parametrize(
    ("of_result", "of_reference"), [("hexahedron27", "tetra10"), ("tetra10", "hexahedron20")]
)
def test_a_quadratic_field_is_exact_on_quadratic_elements(of_result: str, of_reference: str) -> None:
    a, b = box(2, of_result), box(3, of_reference)
    result, reference = a.result(u=quadratic(a.points)), b.result(u=quadratic(b.points))
    compared = unturn.compare(result, reference, measures=["strain", "rotation", "displacement_gradient"])
    assert compared.passed, compared.report
    coarse = box(2, "hexahedron")
    poor = unturn.compare(coarse.result(u=quadratic(coarse.points)), reference, measures=["strain"])
    assert not poor.passed  # linear elements do not hold it
    largest = found(poor, "point u in whole").details["largest"]["value"]
    assert largest == pytest.approx(1e-3 / 18)  # t (1/2 - t) of x^2 at the reference's nodes, t = 1/6 and 1/3


@pytest.mark.derived("a shift by a known amount, on another mesh")
def test_a_known_difference_on_another_mesh() -> None:
    a, b = box(3, "tetra"), box(2, "hexahedron")
    shifted = linear(a.points) + np.array([0.0, 0.0, 4e-5])
    compared = unturn.compare(a.result(u=shifted), b.result(u=linear(b.points)))
    one = found(compared, "point u in whole")
    assert one.value == pytest.approx(4e-5, rel=1e-9)
    assert "component 3 of 3" in one.title
    assert one.details["share_beyond"] == pytest.approx(1.0)
    assert one.details["l2"] == pytest.approx(4e-5, rel=1e-9)
    assert compared.differences.n_points == len(b.points)
    assert compared.differences.point_data["u_difference"][:, 2] == pytest.approx(4e-5, rel=1e-9)


@pytest.mark.derived("cell values on another mesh are those of the cells that hold the middle")
def test_cell_values_on_another_mesh() -> None:
    a, b = box(4, "hexahedron"), box(2, "hexahedron")
    middle = a.points[a.cells].mean(axis=1)
    now = a.result(u=linear(a.points)).with_arrays(cell_data={"c": middle[:, 0], "lot": np.arange(64)})
    before = b.result(u=linear(b.points)).with_arrays(
        cell_data={"c": b.points[b.cells].mean(axis=1)[:, 0], "lot": np.arange(8)}
    )
    compared = unturn.compare(now, before)
    assert states(compared)["cell c in whole"] == "met"  # the mean of the eight around the middle
    assert "cell lot in whole" not in states(compared)
    assert any("cell lot" in note for note in compared.report.notes)


@pytest.mark.derived("what the other mesh does not have is counted, and undecided above a share")
def test_points_outside_of_the_other_mesh_are_counted() -> None:
    short, long = box(4, "hexahedron", length=0.9), box(4, "hexahedron")
    result, reference = short.result(u=linear(short.points)), long.result(u=linear(long.points))
    compared = unturn.compare(result, reference)
    reference_outside, point = found(compared, "reference outside"), found(compared, "point u in whole")
    assert reference_outside.details["points_outside"] == 25
    assert (point.state, point.details["outside"]) == ("undecided", 25)
    assert point.details["outside_share"] == pytest.approx(1 / 8)
    assert compared.report.exit_status == 1
    assert unturn.compare(result, reference, outside=0.13).passed
    grown = unturn.compare(reference, result)  # the result has more than the reference
    assert found(grown, "point u in whole").state == "met"
    assert (found(grown, "result outside").state, found(grown, "result outside").value) == ("met", 0.0)
    much = box(8, "hexahedron", length=2.0)
    assert found(
        unturn.compare(much.result(u=linear(much.points)), result), "result outside"
    ).value == pytest.approx(50)


@pytest.mark.derived("a point slightly outside of a faceted surface is taken from the cell beside, and told")
def test_points_slightly_outside_are_taken_from_the_cell_beside() -> None:
    a, b = box(4, "hexahedron", length=0.995), box(4, "hexahedron")
    compared = unturn.compare(a.result(u=linear(a.points)), b.result(u=linear(b.points)))
    assert compared.passed, compared.report
    assert found(compared, "reference outside").details["points_beside"] == 25
    assert "25 lie up to 5 % of a cell outside" in found(compared, "reference outside").message


@pytest.mark.derived("on a border each part's own values are taken")
def test_on_a_border_the_same_part_counts() -> None:
    def halves(n: int) -> Result:
        """Two halves that do not share nodes, with displacements that jump between them."""
        mesh = box(n, "hexahedron")
        part = (mesh.points[mesh.cells].mean(axis=1)[:, 0] > 0.5).astype(int)
        nodes = mesh.cells + part[:, None] * len(mesh.points)
        used, inverse = np.unique(nodes, return_inverse=True)
        points = mesh.points[used % len(mesh.points)]
        jump = np.where(used >= len(mesh.points), 1.0, 0.0)[:, None] * [5e-3, 0, 0]
        block = CellBlock("hexahedron", inverse.reshape(nodes.shape), np.arange(len(nodes)))
        return Result(points, (block,), {"u": linear(points) + jump}, cell_data={"part": part + 1})

    compared = unturn.compare(halves(4), halves(2), measures=["strain"])
    assert compared.passed, compared.report


@pytest.mark.derived("of the cells beside a point, the nearest one is taken")
def test_the_nearest_cell_beside_a_point_is_taken() -> None:
    mesh = view(box(2, "hexahedron").result())
    places = np.array(
        [[1.01, 0.49, 0.25], [1.01, 0.5, 0.25], [1.01, 1.01, 1.01], [0.5, 0.5, 0.5], [1.04, 0.2, 0.2]]
    )
    found_ = sample(mesh, places, np.full(5, 3), [])
    assert found_.count.tolist() == [1, 2, 1, 8, 0]
    assert found_.beside.tolist() == [True, True, True, False, False]


@pytest.mark.derived("ghosts of the other mesh hold nothing, and tangled cells have no strain")
def test_ghosts_and_tangled_cells_of_the_other_mesh() -> None:
    a, b = box(2, "hexahedron"), box(3, "tetra")
    reference = b.result(u=linear(b.points))
    ghost = replace(a.result(u=linear(a.points)), left_out={"ghost": np.array([0])})
    compared = unturn.compare(ghost, reference)
    assert states(compared)["reference outside"] == "undecided"
    assert found(compared, "point u in whole").details["outside"] == 8
    points = a.points.copy()
    points[0] = [0.8, 0.8, 0.8]  # the corner pushed through its cell
    tangled = a._replace(points=points)
    compared = unturn.compare(tangled.result(u=linear(points)), reference, measures=["strain"], outside=0.5)
    assert found(compared, "computed strain in whole").details["nan_on_one_side"] > 0
    assert states(compared)["computed strain in whole"] == "exceeded"


@pytest.mark.derived("on the same meshes nothing is searched again")
def test_meshes_are_searched_once_for_all_steps() -> None:
    a, b = box(2, "hexahedron"), box(3, "tetra")
    first = compare_states(a.result(u=linear(a.points)), b.result(u=linear(b.points)), CompareOptions())
    again = compare_states(
        a.result(u=quadratic(a.points)), b.result(u=linear(b.points)), CompareOptions(), first.overlay
    )
    assert again.overlay.points is first.overlay.points
    fresh = compare_states(a.result(u=quadratic(a.points)), b.result(u=linear(b.points)), CompareOptions())
    assert again.findings == fresh.findings
    moved = a._replace(points=a.points * 1.001)
    other = compare_states(
        moved.result(u=linear(a.points)), b.result(u=linear(b.points)), CompareOptions(), first.overlay
    )
    assert other.overlay.points is not first.overlay.points


@pytest.mark.derived("measures of the mesh, means and cell frames belong to one mesh")
def test_what_belongs_to_one_mesh_is_refused_on_another() -> None:
    a, b = (box(n, "hexahedron") for n in (2, 3))
    result, reference = a.result(u=linear(a.points)), b.result(u=linear(b.points))
    for wrong in ({"measures": ["element_volume"]}, {"measures": ["strain"], "at": "mean"}):
        with pytest.raises(UsageError, match="mesh"):
            unturn.compare(result, reference, **wrong)
    frame = unturn.compare(result, reference, measures=["strain"], frame="cylindrical z through -1,-1,0")
    assert frame.passed, frame.report


@pytest.mark.source("the nodes of elements and random points in them, by their own shape functions")
@given(st.integers(0, 10_000))
@settings(max_examples=20)
def test_many_points_are_found_in_the_cells_that_hold_them(seed: int) -> None:
    rng = np.random.default_rng(seed)
    names = ["tetra10", "hexahedron20", "wedge", "pyramid", "triangle6", "quad", "line3"]
    mesh = patch(ELEMENTS[names[seed % len(names)]])
    model = build_model(mesh.result(u=0 * mesh.points), displacement="u")
    cells = rng.integers(0, len(mesh.cells), 40)
    corners = mesh.element.shape.vertices
    xi = rng.dirichlet(np.ones(len(corners)), 40) @ corners
    X = np.einsum("pa,pax->px", mesh.element.shape_functions(xi), mesh.points[mesh.cells[cells]])
    far = X + 100.0
    (places,) = locate_all(model, np.vstack([X, far, [[np.nan] * 3]]), mesh.element.dim)
    assert places.point.max() < 40
    for k in range(40):
        mine = places.point == k
        assert cells[k] in places.cell[mine]
        own = places.reference[mine & (places.cell == cells[k])][0]
        assert own == pytest.approx(xi[k], abs=1e-7)


def _mixed(n: int) -> Result:
    """A cube with a skin below, a beam apart from it, and a vertex."""
    mesh = box(n, "hexahedron")
    t = np.linspace(0, 1, n + 1)[:, None]
    points = np.vstack([mesh.points, t * [1.0, 2.0, 3.0] + [2.0, 0, 0]])
    below = mesh.cells[np.isclose(mesh.points[mesh.cells][:, :4, 2], 0).all(axis=1)][:, :4]
    beam = np.stack([np.arange(n), np.arange(1, n + 1)], axis=1) + len(mesh.points)
    blocks, start = [], 0
    for name, cells in (
        ("hexahedron", mesh.cells),
        ("quad", below),
        ("line", beam),
        ("vertex", np.array([[0]])),
    ):
        blocks.append(CellBlock(name, cells, np.arange(start, start + len(cells))))
        start += len(cells)
    groups = {b.cell_type: b.index for b in blocks[:3]}
    return Result(points, tuple(blocks), {"u": linear(points)}, {"c": np.ones(start)}, groups=groups)


@pytest.mark.derived("each dimension is looked for in its own; what has no element is told")
def test_skins_beams_and_vertices() -> None:
    one = unturn.compare(shuffled(_mixed(2)), _mixed(2), measures=["strain"])
    assert one.passed
    assert found(one, "mesh").details["kind"] == "renumbered"
    other = unturn.compare(_mixed(2), _mixed(3), measures=["strain"])
    assert other.passed, other.report
    told = states(other)
    assert told["cell c in quad"] == told["cell c in line"] == told["computed strain in line"] == "met"
    assert "computed strain in quad" not in told  # skins are not computed unasked
    assert any("no known element: 1" in note for note in other.report.notes)
    wrong = _mixed(2)
    c = wrong.cell_data["c"].copy()
    c[wrong.groups["line"]] = 1.5
    told = states(unturn.compare(wrong.with_arrays(cell_data={"c": c}), _mixed(3)))
    assert (told["cell c in line"], told["cell c in quad"]) == ("exceeded", "met")


@pytest.mark.derived("a share is taken among the cells of one dimension")
def test_a_share_is_not_hidden_by_cells_of_a_higher_dimension() -> None:
    before = replace(_mixed(2), groups={})
    c = before.cell_data["c"].copy()
    c[before.blocks[2].index] = 1.5  # both cells of the beam
    now = before.with_arrays(cell_data={"c": c})
    everything = {"all": np.arange(before.n_cells)}
    now, before = replace(now, groups=everything), replace(before, groups=everything)
    whole = unturn.compare(now, before, tolerances={"default": {"share": 0.9}})
    assert not whole.passed
    assert found(whole, "cell c in all").value == pytest.approx(100.0)


@pytest.mark.derived("cells weigh their volume, not their number")
def test_cells_of_unequal_volume() -> None:
    mesh = box(2, "hexahedron")
    points = mesh.points.copy()
    points[np.isclose(points[:, 0], 0.5), 0] = 0.3
    before = mesh._replace(points=points).result().with_arrays(cell_data={"c": np.zeros(8)})
    c = np.zeros(8)
    c[points[mesh.cells].mean(axis=1)[:, 0] < 0.3] = 2.0
    one = found(unturn.compare(before.with_arrays(cell_data={"c": c}), before), "cell c in whole")
    assert one.details["share_beyond"] == pytest.approx(0.3)
    assert one.details["l2"] == pytest.approx(2.0 * np.sqrt(0.3))


@pytest.mark.derived("ghosts do not count, and the same cells must count in both")
def test_cells_that_do_not_count() -> None:
    mesh = box(2, "hexahedron")
    c = np.ones(8)
    c[3] = 2.0
    before = mesh.result(u=linear(mesh.points)).with_arrays(cell_data={"c": np.ones(8)})
    now = before.with_arrays(cell_data={"c": c})
    ghost = {"left_out": {"ghost": np.array([3])}}
    assert unturn.compare(replace(now, **ghost), replace(before, **ghost)).passed
    one = found(unturn.compare(replace(now, **ghost), before), "cells that count")
    assert (one.state, one.place["cell"]) == ("exceeded", 3)


@pytest.mark.derived("a node that is nowhere in one result only makes another mesh")
def test_a_node_that_is_nowhere() -> None:
    mesh = box(3, "hexahedron")
    points = mesh.points.copy()
    points[0] = np.nan
    result = mesh.result(u=linear(mesh.points))
    broken = replace(result, points=points)
    assert unturn.compare(broken, broken).passed
    compared = unturn.compare(broken, result)
    assert "nowhere in one of them" in found(compared, "mesh").message
    assert states(compared)["reference outside"] == "undecided"
    assert compared.report.exit_status == 1


@pytest.mark.derived("numbers of any size are compared without a fault; what is beyond is told")
@pytest.mark.parametrize("huge", [1e30, 1e200, 1e308])
def test_numbers_of_any_size(huge: float) -> None:
    a, b = box(2, "hexahedron"), box(3, "tetra")
    u = linear(a.points)
    u[5] = huge
    points = a.points.copy()
    points[0] = -huge
    wild, far, sound = (
        a.result(u=u),
        replace(a.result(u=linear(a.points)), points=points),
        a.result(u=linear(a.points)),
    )
    other = b.result(u=linear(b.points))
    for now, before in (
        (wild, sound),
        (sound, wild),
        (far, sound),
        (wild, other),
        (other, wild),
        (far, other),
    ):
        for share in (0.0, 1e-9):
            compared = unturn.compare(
                now, before, measures=["strain"], tolerances={"default": {"share": share}}
            )
            assert not compared.passed
    assert unturn.compare(wild, shuffled(wild), measures=["all"]).passed


# --- series in memory -------------------------------------------------------------------------------------------------


@pytest.mark.derived("same input, same findings")
def test_the_same_input_gives_the_same_report() -> None:
    mesh = box(3, "tetra")
    now = replace(mesh.result(u=quadratic(mesh.points)), steps=Steps((0.0, 1.0), 1))
    before = mesh.result(u=linear(mesh.points))
    first, second = (unturn.compare(shuffled(now), before, measures=["all"]).report for _ in range(2))
    assert first == second
