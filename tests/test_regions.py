"""The parts by which a result is judged: groups, tags, connected bodies, the whole."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

import meshes
from unturn.elements import ELEMENTS
from unturn.errors import UsageError
from unturn.model import Model, build_model
from unturn.regions import bodies, find_regions, judged_together, merge_coincident, named_regions, tag_arrays

# Derived: stated definitions of regions; every cell that is judged is in exactly one tag, body or the whole.


def row_of_hexahedra(gaps: tuple[int, ...] = (), n: int = 6) -> meshes.Mesh:
    """`n` unit cubes in a row; before the cubes in `gaps` the row is interrupted."""
    points, cells, start = [], [], 0.0
    face = np.array([(0, 0, 0), (0, 1, 0), (0, 1, 1), (0, 0, 1)], dtype=float)
    for k in range(n):
        if k == 0 or k in gaps:
            start += 1.0
            points.append(face + np.array([start, 0, 0]))
        start += 1.0
        points.append(face + np.array([start, 0, 0]))
        b = 4 * (len(points) - 2)
        cells.append([b, b + 4, b + 5, b + 1, b + 3, b + 7, b + 6, b + 2])
    return meshes.Mesh(np.concatenate(points), np.array(cells), ELEMENTS["hexahedron"])


def model(mesh: meshes.Mesh, **changes: Any) -> Model:
    return build_model(replace(mesh.result(u=np.zeros(mesh.points.shape)), **changes))


def everything(m: Model) -> np.ndarray:
    return np.ones(m.result.n_cells, dtype=bool)


def cells_of(regions: list[Any]) -> dict[str, list[int]]:
    return {r.name: r.cells.tolist() for r in regions}


def test_one_body_is_the_whole() -> None:
    m = model(row_of_hexahedra())
    assert bodies(m, everything(m)) == []
    found = find_regions(m, everything(m))
    assert cells_of(found) == {"whole": [0, 1, 2, 3, 4, 5]}
    assert found[0].origin == "whole"


def test_bodies_come_largest_first() -> None:
    m = model(row_of_hexahedra(gaps=(1, 3)))
    assert cells_of(find_regions(m, everything(m))) == {"body 1": [3, 4, 5], "body 2": [1, 2], "body 3": [0]}


def test_cells_that_are_not_judged_do_not_connect() -> None:
    m = model(row_of_hexahedra())
    mask = everything(m)
    mask[2] = False
    assert cells_of(find_regions(m, mask)) == {"body 1": [3, 4, 5], "body 2": [0, 1]}


def test_groups_come_first_and_the_rest_is_named() -> None:
    groups = {"arm": np.array([4, 0]), "shim": np.array([1])}
    m = model(row_of_hexahedra(), groups=groups, cell_data={"part": np.arange(6)})
    assert cells_of(find_regions(m, everything(m))) == {"arm": [0, 4], "shim": [1], "(no group)": [2, 3, 5]}
    mask = everything(m)
    mask[[0, 4]] = False
    assert "arm" not in cells_of(find_regions(m, mask))


@pytest.mark.practice("integer cell arrays by which solvers and meshers number parts")
@pytest.mark.parametrize(
    "name", ["part", "PartId", "material", "mat_id", "gmsh:physical", "RegionId", "PID", "domain"]
)
def test_tags(name: str) -> None:
    tags = np.array([7, 7, 3, 3, 3, 7], dtype=np.int32)
    m = model(row_of_hexahedra(), cell_data={name: tags, "pressure": tags * 1.5})
    assert tag_arrays(m.result) == [name]
    found = find_regions(m, everything(m))
    assert cells_of(found) == {f"{name}=3": [2, 3, 4], f"{name}=7": [0, 1, 5]}
    assert {r.origin for r in found} == {"tag"}


@pytest.mark.practice("integer cell arrays that number something else")
@pytest.mark.parametrize(
    "name", ["element_number", "vtkGhostType", "process", "GlobalElementId", "status", "partition"]
)
def test_other_integers_are_no_tags(name: str) -> None:
    m = model(row_of_hexahedra(), cell_data={name: np.arange(6)})
    assert tag_arrays(m.result) == []


def test_a_single_tag_does_not_divide() -> None:
    m = model(row_of_hexahedra(gaps=(3,)), cell_data={"material": np.ones(6, dtype=int)})
    assert [r.origin for r in find_regions(m, everything(m))] == ["body", "body"]


def test_nodes_duplicated_per_element_are_one_body() -> None:
    mesh = row_of_hexahedra()
    loose = mesh.points[mesh.cells].reshape(-1, 3) + np.random.default_rng(0).normal(size=(48, 3)) * 1e-12
    apart = mesh._replace(points=loose, cells=np.arange(48).reshape(6, 8))
    m = model(apart)
    assert cells_of(find_regions(m, everything(m))) == {"whole": [0, 1, 2, 3, 4, 5]}


def test_nodes_of_no_cell_change_nothing() -> None:
    mesh = row_of_hexahedra(gaps=(3,))
    loose = mesh.points[mesh.cells].reshape(-1, 3)
    wild = np.array([[1e30, -1e30, 0], [np.nan] * 3, [np.inf, 0, 0]])
    m = model(mesh._replace(points=np.concatenate([wild, loose]), cells=3 + np.arange(48).reshape(6, 8)))
    assert cells_of(find_regions(m, everything(m))) == {"body 1": [0, 1, 2], "body 2": [3, 4, 5]}


@pytest.mark.derived("every pair of points, one by one")
@pytest.mark.parametrize("width", [3, 4])
@pytest.mark.parametrize("origin", [0.0, 5e5])
def test_coincident_points_by_brute_force(origin: float, width: int) -> None:
    random = np.random.default_rng(3)
    grid = np.stack(np.meshgrid(*[np.arange(4.0)] * width), -1).reshape(-1, width)
    again = grid[random.permutation(len(grid))[:40]]
    move = random.normal(size=again.shape)
    move *= (
        random.choice([0.0, 2e-9, 4e-9, 1e-7], len(again))[:, None] / np.linalg.norm(move, axis=1)[:, None]
    )
    points = origin + random.permutation(np.concatenate([grid, again + move, again]))
    label, tolerance = merge_coincident(points)
    near = np.linalg.norm(points[:, None] - points[None], axis=2) <= tolerance
    for _ in range(3):  # chains
        near = near @ near
    np.testing.assert_array_equal(label, near.argmax(axis=1))
    assert 0 < (label != np.arange(len(points))).sum() < 80


def test_merging_names_the_lowest_and_tells_the_tolerance() -> None:
    points = np.array([[0.0, 0, 0], [10, 0, 0], [1e-9, 0, 0], [np.nan, 0, 0], [10, 0, 1e-7]])
    label, tolerance = merge_coincident(points)
    assert label.tolist() == [0, 1, 0, 3, 4]
    assert tolerance == pytest.approx(1e-8)


def test_bodies_that_touch_without_shared_nodes_stay_apart() -> None:
    mesh = row_of_hexahedra()
    doubled = np.concatenate([mesh.points, mesh.points[mesh.cells[3]]])
    cells = mesh.cells.copy()
    cells[3:] += 0
    seam = {int(a): len(mesh.points) + k for k, a in enumerate(mesh.cells[3])}
    for k in (3, 4, 5):
        cells[k] = [seam.get(int(a), int(a)) if k == 3 or a in mesh.cells[3] else a for a in cells[k]]
    m = model(mesh._replace(points=doubled, cells=cells))
    assert cells_of(find_regions(m, everything(m))) == {"body 1": [0, 1, 2], "body 2": [3, 4, 5]}


def test_nodes_repeated_by_the_writer_make_no_bodies() -> None:
    """Each pair of cells has its own nodes, as writers do that subdivide elements."""
    mesh = row_of_hexahedra()
    points, cells = [], []
    for k in (0, 2, 4):
        used, local = np.unique(mesh.cells[k : k + 2], return_inverse=True)
        cells.append(local.reshape(2, 8) + sum(map(len, points)))
        points.append(mesh.points[used])
    apart = mesh._replace(points=np.concatenate(points), cells=np.concatenate(cells))
    m = model(apart)
    assert cells_of(find_regions(m, everything(m))) == {"whole": [0, 1, 2, 3, 4, 5]}


def test_many_bodies_are_no_regions() -> None:
    m = model(row_of_hexahedra(gaps=tuple(range(1, 120)), n=120))
    found = find_regions(m, everything(m))
    assert [(r.name, r.n_bodies) for r in found] == [("whole", 120)]
    assert "the mesh is 120 bodies, more than the 50 that are judged apart" in judged_together(found)
    few = model(row_of_hexahedra(gaps=(4,)))
    assert judged_together(find_regions(few, everything(few))) == ""
    assert len(bodies(m, everything(m))) == 120


def test_regions_by_name() -> None:
    m = model(
        row_of_hexahedra(gaps=(4,)),
        groups={"arm": np.array([5, 1])},
        cell_data={"part": np.array([1, 1, 2, 2, 2, 1]), "a=b": np.array([0.5] * 3 + [1.5] * 3)},
    )
    found = named_regions(m, ["arm", "part=2", "a=b=1.5", "(no group)"], everything(m))
    assert cells_of(found) == {
        "arm": [1, 5],
        "part=2": [2, 3, 4],
        "a=b=1.5": [3, 4, 5],
        "(no group)": [0, 2, 3, 4],
    }


@pytest.mark.parametrize(
    ("name", "words"),
    [
        ("arn", "Did you mean 'arm'"),
        ("part=9", "holds no cell"),
        ("part=x", "not a number"),
        ("vector=1", "not one number a cell"),
        ("material=1", "no region is called"),
    ],
)
def test_regions_that_do_not_exist(name: str, words: str) -> None:
    m = model(
        row_of_hexahedra(),
        groups={"arm": np.array([1])},
        cell_data={"part": np.ones(6, dtype=int), "vector": np.ones((6, 3))},
    )
    with pytest.raises(UsageError, match=words):
        named_regions(m, [name], everything(m))
