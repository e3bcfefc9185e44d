"""The free faces of solids: which they are, whose they are, which way they look."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
import pyvista as pv

import meshes
from unturn.elements import ELEMENTS, FAMILIES, Element, element
from unturn.errors import UsageError
from unturn.io.vtk_result import vtk_from_result
from unturn.model import Model, build_model
from unturn.node_sets import singles
from unturn.regions import Region
from unturn.result import CellBlock, Result
from unturn.surface import Faces, free_faces

# Derived: a face is free when no other cell has its corners; the free faces of a body close it, so their areas as
# vectors sum to zero.

SOLIDS = [row for row in ELEMENTS.values() if row.dim == 3]
HIGHER = [
    element(f.name, f.n_nodes(order), spacing)
    for f in FAMILIES.values()
    if f.shape.dim == 3
    for order, spacing in ((1, "equal"), (2, "equal"), (3, "gll"), (4, "equal"))
]
EVERY = [*SOLIDS, *HIGHER, element("VTK_LAGRANGE_PYRAMID", 14)]
COUNT = {"hexahedron": 6, "pyramid": 6, "tetra": 12, "wedge": 28, "voxel": 16}
AREA = {"wedge": 2 * 0.24 * 0.12 + 2 * 0.12 * 0.36, "voxel": 2 * (0.15 + 0.1 + 0.06)}


def name_of(row: Element) -> str:
    return f"{row.name}-{row.n_nodes}"


def still(mesh: meshes.Mesh, **changes: Any) -> Model:
    return build_model(replace(mesh.result(u=np.zeros(mesh.points.shape)), **changes))


def faces_of(faces: Faces) -> list[tuple[int, int]]:
    """Parent and face number, in the order given."""
    return [(int(p), int(n)) for b in faces.blocks for p, n in zip(b.parent, b.number)]


def area_vectors(faces: Faces) -> tuple[np.ndarray, np.ndarray]:
    """Areas as vectors, and sizes, with each face's own element and a rule that is ample."""
    vectors, sizes = [], []
    for b in faces.blocks:
        t = np.einsum(
            "qka,nai->qnki",
            b.row.shape_gradients(b.row.quadrature.points),
            faces.model.points[b.connectivity],
        )
        normal = np.cross(t[:, :, 0], t[:, :, 1])
        vectors.append(np.einsum("q,qni->ni", b.row.quadrature.weights, normal))
        sizes.append(np.einsum("q,qn->n", b.row.quadrature.weights, np.linalg.norm(normal, axis=-1)))
    return np.concatenate(vectors), np.concatenate(sizes)


def check_outward(faces: Faces) -> None:
    """Normals of straight cells point away from the parent's corners."""
    model = faces.model
    middle = np.full((model.result.n_cells, 3), np.nan)
    for block in model.blocks:
        assert block.row is not None
        corners = block.cells.connectivity[:, : block.row.n_corners]
        middle[block.cells.index] = model.points[corners].mean(axis=1)
    vectors, _ = area_vectors(faces)
    where = np.concatenate(
        [model.points[b.connectivity[:, : b.row.n_corners]].mean(axis=1) for b in faces.blocks]
    )
    parent = np.concatenate([b.parent for b in faces.blocks])
    assert (((where - middle[parent]) * vectors).sum(axis=1) > 0).all()


@pytest.mark.parametrize("row", EVERY, ids=name_of)
def test_a_patch_shows_its_outside(row: Element) -> None:
    mesh = meshes.patch(row)
    faces = free_faces(still(mesh))
    assert len(faces) == COUNT[row.shape.name]
    vectors, sizes = area_vectors(faces)
    assert sizes.sum() == pytest.approx(AREA.get(row.shape.name, 6.0), rel=1e-12)
    np.testing.assert_allclose(vectors.sum(axis=0), 0, atol=1e-12)
    check_outward(faces)
    assert not faces.left_out
    assert faces.merged == 0
    for block in faces.blocks:
        assert block.row.n_nodes == block.connectivity.shape[1]
        for conn, parent, number in zip(block.connectivity, block.parent, block.number):
            assert conn.tolist() == mesh.cells[parent][list(row.face_nodes[number].nodes)].tolist()


@pytest.mark.parametrize("row", EVERY, ids=name_of)
def test_mirrored_cells_look_outward_too(row: Element) -> None:
    mesh = meshes.curved(meshes.patch(row), 0.01)
    mirrored = mesh._replace(points=mesh.points * [1, 1, -1])
    here, there = free_faces(still(mesh)), free_faces(still(mirrored))
    assert faces_of(here) == faces_of(there)
    vectors, sizes = area_vectors(here)
    turned, same = area_vectors(there)
    np.testing.assert_allclose(turned, vectors * [1, 1, -1], atol=1e-13)
    # rules of high degree are not the same seen from the other side
    np.testing.assert_allclose(same, sizes, rtol=1e-12 if row.order < 4 else 1e-8)
    check_outward(there)


@pytest.mark.source("VTK 9.7.2, vtkDataSetSurfaceFilter: the cells that the faces come from")
@pytest.mark.parametrize("seed", range(3))
def test_random_tetrahedra_as_in_vtk(seed: int) -> None:
    points = np.random.default_rng(seed).uniform(size=(400, 3))
    grid = pv.PolyData(points).delaunay_3d()
    mesh = meshes.Mesh(points, grid.cells.reshape(-1, 5)[:, 1:].astype(np.int64), ELEMENTS["tetra"])
    some = np.random.default_rng(seed).permutation(len(mesh.cells))[: len(mesh.cells) // 2]
    mesh = mesh._replace(cells=mesh.cells[some])
    model = still(mesh)
    surface = pv.wrap(vtk_from_result(model.result)).extract_surface(algorithm="dataset_surface")
    theirs = sorted(surface.cell_data["vtkOriginalCellIds"].tolist())
    assert sorted(p for p, _ in faces_of(free_faces(model))) == theirs


def test_keys_that_occur_once() -> None:
    rng = np.random.default_rng(0)
    for n in (0, 1, 2, 7, 1000):
        keys = rng.integers(0, 2**64, size=max(n, 1), dtype=np.uint64)[rng.integers(0, max(n, 1), size=n)]
        values, first, count = np.unique(keys, return_index=True, return_counts=True)
        assert len(values) <= max(n, 1)
        assert singles(keys).tolist() == sorted(first[count == 1].tolist())


def mixed(extra: int = 0) -> tuple[np.ndarray, list[tuple[str, list[list[int]]]]]:
    """A hexahedron, a wedge beside it, a pyramid on top of it with a tetrahedron at one side."""
    points = [(0, 0, 0), (1, 0, 0), (1, 1, 0), (0, 1, 0), (0, 0, 1), (1, 0, 1), (1, 1, 1), (0, 1, 1),
              (2, 0.5, 0), (2, 0.5, 1), (0.5, 0.5, 2), (1.5, 0.5, 2)]  # fmt: skip
    cells = [
        ("hexahedron", [[0, 1, 2, 3, 4, 5, 6, 7]]),
        ("wedge", [[1, 8, 2, 5, 9, 6]]),
        ("pyramid", [[4, 5, 6, 7, 10]]),
        ("tetra", [[5, 6, 10, 11]]),
    ]
    return np.array(points, dtype=float), cells


def blocks_of(cells: list[tuple[str, list[list[int]]]]) -> tuple[CellBlock, ...]:
    starts = np.cumsum([0, *(len(c) for _, c in cells)])
    return tuple(CellBlock(name, np.array(c), np.arange(len(c)) + s) for (name, c), s in zip(cells, starts))


def result_of(points: np.ndarray, cells: list[tuple[str, list[list[int]]]], **more: Any) -> Result:
    return Result(points, blocks_of(cells), **{"point_data": {"u": np.zeros(points.shape)}, **more})


def test_mixed_cells_meet() -> None:
    faces = free_faces(build_model(result_of(*mixed())))
    # 6 + 5 + 5 + 4 faces, less three meetings
    assert len(faces) == 14
    assert sorted(b.row.name for b in faces.blocks) == ["quad", "triangle"]
    np.testing.assert_allclose(area_vectors(faces)[0].sum(axis=0), 0, atol=1e-14)
    check_outward(faces)
    for block in faces.blocks:
        assert block.parent.tolist() == sorted(block.parent.tolist())


def test_a_quadratic_cell_meets_a_linear_one() -> None:
    mesh = meshes.straight(*meshes._hexahedron_patch(), ELEMENTS["hexahedron20"])
    blocks = (
        CellBlock("hexahedron20", mesh.cells[:3], np.arange(3)),
        CellBlock("hexahedron", mesh.cells[3:, :8], np.arange(3, 7)),
    )
    model = build_model(Result(mesh.points, blocks, {"u": 0 * mesh.points}))
    faces = free_faces(model)
    assert len(faces) == 6
    assert sorted((b.row.name, len(b)) for b in faces.blocks) == [("quad", 4), ("quad8", 2)]


@pytest.mark.source(
    "degenerate elements, Hughes 2000, The Finite Element Method, section 3.6: repeated nodes of a brick"
)
def test_collapsed_bricks() -> None:
    points, cells = mixed()
    bricks = [
        cells[0][1][0],
        [1, 8, 2, 2, 5, 9, 6, 6],  # the wedge
        [4, 5, 6, 7, 10, 10, 10, 10],  # the pyramid
        [5, 6, 10, 10, 11, 11, 11, 11],  # the tetrahedron
    ]
    faces = free_faces(build_model(result_of(points, [("hexahedron", bricks)])))
    whole = free_faces(build_model(result_of(points, cells)))
    assert len(faces) == 14
    assert sorted(p for p, _ in faces_of(faces)) == sorted(p for p, _ in faces_of(whole))
    vectors, sizes = area_vectors(faces)
    np.testing.assert_allclose(vectors.sum(axis=0), 0, atol=1e-14)
    assert sizes.sum() == pytest.approx(area_vectors(whole)[1].sum())
    # a collapsed brick also meets the cell it stands for
    part = free_faces(build_model(result_of(points, [("hexahedron", bricks[:2]), *cells[2:]])))
    assert sorted(p for p, _ in faces_of(part)) == sorted(p for p, _ in faces_of(whole))


@pytest.mark.parametrize("name", ["hexahedron", "tetra10", "wedge15", "pyramid13", "hexahedron27"])
def test_nodes_repeated_for_every_cell(name: str) -> None:
    mesh = meshes.patch(ELEMENTS[name])
    apart = mesh._replace(
        points=mesh.points[mesh.cells].reshape(-1, 3),
        cells=np.arange(mesh.cells.size).reshape(mesh.cells.shape),
    )
    rng = np.random.default_rng(0)
    for u in (np.zeros(apart.points.shape), rng.normal(size=apart.points.shape)):
        faces = free_faces(build_model(apart.result(u=u)))
        assert faces_of(faces) == faces_of(free_faces(still(mesh)))
        assert faces.merged > 0
        assert faces.tolerance == pytest.approx(1e-9 * np.ptp(mesh.points, axis=0).max())


def two_halves(moved: float) -> Model:
    """Four cubes in a row, the nodes between the second and third repeated; the right half moved."""
    points = np.array([(x, y, z) for x in (0, 1, 2, 2, 3, 4) for y in (0, 1) for z in (0, 1)], dtype=float)
    cells = [[4 * k + i for i in (0, 4, 6, 2, 1, 5, 7, 3)] for k in (0, 1, 3, 4)]
    u = 1e-3 * points
    u[12:, 0] += moved
    return build_model(result_of(points, [("hexahedron", cells)], point_data={"u": u}))


def test_repeated_nodes_that_move_together_make_no_surface() -> None:
    # parts of a partitioned file meet here
    faces = free_faces(two_halves(0.0))
    assert len(faces) == 18
    assert faces.merged == 4


def test_a_crack_that_opens_does() -> None:
    faces = free_faces(two_halves(1e-6))
    assert len(faces) == 20
    assert faces.merged == 0
    assert {(1, 1), (2, 0)} <= set(faces_of(faces))


def test_between_groups() -> None:
    mesh = meshes.patch(ELEMENTS["hexahedron"])
    model = still(mesh, groups={"core": np.array([0]), "mantle": np.arange(1, 7)})
    assert len(free_faces(model)) == 6
    faces = free_faces(model, between_groups=True)
    (block,) = faces.blocks
    assert len(faces) == 18
    assert block.between.sum() == 12
    assert block.parent[block.between].tolist() == [0] * 6 + list(range(1, 7))
    check_outward(faces)
    own = free_faces(model, [Region("below", np.array([1]), "group")], between_groups=True)
    assert own.blocks[0].between.sum() == 2 * 5
    # without groups the mesh is one
    assert len(free_faces(still(mesh), between_groups=True)) == 6


def test_between_groups_with_repeated_nodes() -> None:
    model = two_halves(0.0)
    tagged = build_model(replace(model.result, cell_data={"part": np.array([1, 1, 2, 2])}))
    faces = free_faces(tagged, between_groups=True)
    assert len(faces) == 20
    assert sum(int(b.between.sum()) for b in faces.blocks) == 2


def test_deleted_cells_leave_a_surface_behind() -> None:
    mesh = meshes.patch(ELEMENTS["hexahedron"])
    result = replace(mesh.result(u=0 * mesh.points), cell_data={"alive": np.array([0, 1, 1, 1, 1, 1, 1])})
    faces = free_faces(build_model(result, alive="alive"))
    assert len(faces) == 12
    assert 0 not in {p for p, _ in faces_of(faces)}


@pytest.mark.parametrize(("reason", "expected"), [("ghost", 5), ("hidden", 5 + 5), ("refined", 5 + 5)])
def test_cells_that_do_not_count(reason: str, expected: int) -> None:
    # behind a ghost the body goes on; behind a hidden cell it ends
    mesh = meshes.patch(ELEMENTS["hexahedron"])
    faces = free_faces(still(mesh, left_out={reason: np.array([1])}))
    assert len(faces) == expected
    assert 1 not in {p for p, _ in faces_of(faces)}


def test_a_ghost_that_repeats_a_cell_does_not_hide_its_surface() -> None:
    points = np.array([(x, y, z) for x in (0, 1, 2) for y in (0, 1) for z in (0, 1)], dtype=float)
    cells = [[4 * k + i for i in (0, 4, 6, 2, 1, 5, 7, 3)] for k in (0, 1)]
    own = free_faces(build_model(result_of(points, [("hexahedron", cells)])))
    # two parts, each with a ghost of the other's cell
    twice = [cells[0], cells[1], [n + 12 for n in cells[0]], [n + 12 for n in cells[1]]]
    result = result_of(
        np.concatenate([points, points]), [("hexahedron", twice)], left_out={"ghost": np.array([1, 2])}
    )
    both = free_faces(build_model(result))
    assert len(both) == len(own) == 10
    assert sorted({p for p, _ in faces_of(both)}) == [0, 3]


def test_a_region_alone_does_not_grow_faces() -> None:
    model = still(meshes.patch(ELEMENTS["hexahedron"]))
    faces = free_faces(model.only(np.array([0, 1])))
    assert [p for p, _ in faces_of(faces)] == [1]


def test_a_polyhedron_covers_what_it_touches() -> None:
    points, cells = mixed()
    whole = free_faces(build_model(result_of(points, cells)))
    # VTK's polyhedron of these nodes; its faces are not in the connectivity
    instead = [cells[0], cells[1], ("polyhedron5", cells[2][1]), cells[3]]
    faces = free_faces(build_model(result_of(points, instead)))
    assert faces_of(faces) == [f for f in faces_of(whole) if f[0] != 2]


def test_tangled_cells_have_no_faces_and_free_none() -> None:
    points = np.array([(x, y, z) for x in range(4) for y in (0, 1) for z in (0, 1)], dtype=float)
    cells = [[4 * k + i for i in (0, 4, 6, 2, 1, 5, 7, 3)] for k in range(3)]
    points[:4, 1] = 1 - points[:4, 1]  # the first cube turns inside out on the way
    faces = free_faces(build_model(result_of(points, [("hexahedron", cells)])))
    assert {r: c.tolist() for r, c in faces.left_out.items()} == {"tangled or without volume": [0]}
    assert faces_of(faces) == [(1, n) for n in (2, 3, 4, 5)] + [(2, n) for n in (1, 2, 3, 4, 5)]


def test_skins_and_shells_have_no_faces() -> None:
    plate = meshes.patch(ELEMENTS["quad"])
    with pytest.raises(UsageError, match="solid cells"):
        free_faces(still(plate._replace(points=plate.points + 0.1 * np.sin(9 * plate.points[:, ::-1]))))
    points, cells = mixed()
    skin = [*cells, ("quad", [[0, 3, 2, 1]])]
    assert len(free_faces(build_model(result_of(points, skin)))) == 14


def test_threads_change_nothing() -> None:
    k = np.arange(21**3).reshape(21, 21, 21)
    grid = np.stack(np.meshgrid(*[np.arange(21.0)] * 3, indexing="ij"), -1).reshape(-1, 3)
    c = [k[:-1, :-1, :-1], k[1:, :-1, :-1], k[1:, 1:, :-1], k[:-1, 1:, :-1],
         k[:-1, :-1, 1:], k[1:, :-1, 1:], k[1:, 1:, 1:], k[:-1, 1:, 1:]]  # fmt: skip
    mesh = meshes.Mesh(grid, np.stack([a.reshape(-1) for a in c], 1), ELEMENTS["hexahedron"])
    one, two = (free_faces(still(mesh), threads=t) for t in (1, 2))
    assert len(one) == 6 * 400
    np.testing.assert_array_equal(one.blocks[0].connectivity, two.blocks[0].connectivity)
    np.testing.assert_allclose(area_vectors(one)[1].sum(), 2400)
