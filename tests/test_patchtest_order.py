"""Meshes whose nodes are in a wrong order must not pass the patch test."""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
import pytest

import meshes
from unturn.elements import ELEMENTS, FAMILIES, Element, element
from unturn.errors import InputError
from unturn.model import build_model
from unturn.result import CellBlock, Result
from unturn.verdicts.finding import Finding, Report
from unturn.verdicts.node_order import joined_otherwise
from unturn.verdicts.patchtest import patch_test
from unturn.verdicts.patchtest_report import patch_report
from unturn.verdicts.straight_cells import reordered_cells

pytestmark = pytest.mark.derived("a straight cell is known by the places of its nodes, whatever their order")


def box(name: str, n: int = 3, bend: float = 0.0, shear: float = 0.2) -> meshes.Mesh:
    """A box of n x n x n cells: sheared, so that they are straight, or bent smoothly."""
    line = np.linspace(0, 1, n + 1)
    points = np.stack(np.meshgrid(line, line, line, indexing="ij"), axis=-1).reshape(-1, 3)
    number = np.arange((n + 1) ** 3).reshape((n + 1,) * 3)
    square = ((0, 0), (1, 0), (1, 1), (0, 1))
    cells = np.stack(
        [number[a : n + a, b : n + b, c : n + c].ravel() for c in (0, 1) for a, b in square], axis=1
    )
    mesh = meshes.straight(
        points @ np.array([[1, shear, 0], [0, 1, shear], [0, 0, 1.0]]), cells, ELEMENTS[name]
    )
    return meshes.curved(mesh, bend) if bend else mesh


def report(mesh: meshes.Mesh) -> Report:
    return patch_report(patch_test(mesh.result()), "mesh")


def finding(found: Report, start: str) -> Finding:
    return next(f for f in found.findings if f.id.startswith(start))


def permuted(mesh: meshes.Mesh, order: Sequence[int], cells: slice = slice(None)) -> meshes.Mesh:
    """The mesh with the first nodes of some cells listed in another order."""
    changed = mesh.cells.copy()
    part = changed[cells]
    part[:, : len(order)] = part[:, list(order)]
    return mesh._replace(cells=changed)


# --- straight cells -----------------------------------------------------------------------------------------------

TOP_TURNED = (0, 1, 2, 3, 5, 6, 7, 4)


class Wrong(NamedTuple):
    """A wrong order of the nodes of some cells of a mesh, and whether the quadratic field shows it too."""

    mesh: meshes.Mesh
    order: tuple[int, ...]
    cells: slice
    shown: bool


def _swapped(n: int, a: int, b: int) -> tuple[int, ...]:
    order = list(range(n))
    order[a], order[b] = b, a
    return tuple(order)


WRONG = {
    "hexahedra, top turned": Wrong(box("hexahedron"), TOP_TURNED, slice(None), True),
    "some hexahedra, top turned": Wrong(box("hexahedron"), TOP_TURNED, slice(4), True),
    "opposite mid-side nodes of hexahedra": Wrong(box("hexahedron27"), _swapped(27, 8, 10), slice(9), False),
    "middle and face of hexahedra": Wrong(box("hexahedron27"), _swapped(27, 20, 26), slice(9), True),
    "some tetrahedra": Wrong(meshes.patch(ELEMENTS["tetra10"]), _swapped(10, 4, 9), slice(30), False),
}  # fmt: skip


@pytest.mark.parametrize("name", WRONG)
def test_a_wrong_order_in_straight_cells_is_named(name: str) -> None:
    mesh, order, cells, shown = WRONG[name]
    assert report(mesh).exit_status == 0
    wrong = permuted(mesh, order, cells)
    found = report(wrong)
    assert found.exit_status == 1
    bad = finding(found, "node_order")
    assert bad.state == "exceeded"
    assert bad.details["reordered"] == len(wrong.cells[cells])
    assert bad.place["cell"] == 0
    assert "in another order than that of a" in bad.message
    quadratic = [f for f in found.findings if f.id.startswith("quadratic")]
    assert [f.state for f in quadratic] == ["exceeded" if shown else "met"]
    if shown:
        assert "the order of their nodes" in quadratic[0].message
        assert quadratic[0].details["beyond"] == len(wrong.cells[cells])


def test_the_reader_does_not_notice_turned_tops() -> None:
    wrong = permuted(box("hexahedron"), TOP_TURNED)
    model = build_model(wrong.result(u=np.zeros_like(wrong.points)))
    assert not model.notes
    assert not model.left_out


@pytest.mark.parametrize("row", ELEMENTS.values(), ids=ELEMENTS)
def test_any_order_of_the_nodes_of_a_straight_cell_is_recognised(row: Element) -> None:
    mesh = meshes.affine_cell(row)
    rng = np.random.default_rng(11)
    n = row.n_corners  # which every format lists first
    orders = np.array([[*rng.permutation(n), *(n + rng.permutation(row.n_nodes - n))] for _ in range(5)])
    assert reordered_cells(mesh.points[orders], row, np.full(5, 1e-9)).all()
    bent = mesh.points.copy()
    bent[0] += 1e-3
    if row.n_nodes > row.dim + 1:
        assert not reordered_cells(bent[orders], row, np.full(5, 1e-9)).any()


@pytest.mark.parametrize("name", ["VTK_LAGRANGE_HEXAHEDRON"])
def test_swapped_nodes_of_an_edge_of_higher_order_are_named(name: str) -> None:
    family = FAMILIES[name]
    row = element(name, family.n_nodes(5))
    mesh = meshes.patch(row)
    a, b = row.edges[0][2][:2]
    assert report(mesh).exit_status == 0
    found = report(permuted(mesh, _swapped(row.n_nodes, a, b)))
    assert finding(found, "node_order").state == "exceeded"


# --- bent cells, and cells that the reader refuses ----------------------------------------------------------------


@pytest.mark.parametrize("cells", [slice(None), slice(5)])
@pytest.mark.parametrize("name", ["hexahedron", "wedge"])
def test_neighbours_show_a_wrong_order_of_bent_cells(name: str, cells: slice) -> None:
    mesh = box(name, bend=0.03) if name == "hexahedron" else meshes.curved(meshes.patch(ELEMENTS[name]))
    assert not joined_otherwise(patch_test(mesh.result()).model).any()
    wrong = permuted(mesh, TOP_TURNED if name == "hexahedron" else (0, 1, 2, 4, 5, 3), cells)
    found = report(wrong)
    assert found.exit_status == 1
    bad = finding(found, "node_order")
    assert bad.state == "undecided"
    assert "an edge that is a diagonal of a neighbour" in bad.message
    assert bad.value is not None
    assert bad.value >= len(wrong.cells[cells])


def test_mid_side_nodes_far_from_bent_edges_are_undecided() -> None:
    mesh = permuted(meshes.curved(meshes.patch(ELEMENTS["tetra10"])), _swapped(10, 8, 9), slice(20))
    found = report(mesh)
    assert found.exit_status == 1
    bad = finding(found, "node_order")
    assert bad.state == "undecided"
    assert bad.details["far"] == 20


@pytest.mark.parametrize(
    ("name", "order"),
    [
        (
            "hexahedron20",
            (*range(12), *range(16, 20), *range(12, 16)),
        ),  # mid-side nodes of the pillars before the top's
        ("wedge15", (*range(9), 12, 13, 14, 9, 10, 11)),
        ("tetra10", _swapped(10, 8, 5)),
        ("hexahedron20", TOP_TURNED),
    ],
)
def test_an_order_that_the_reader_refuses_is_refused(name: str, order: tuple[int, ...]) -> None:
    with pytest.raises(InputError, match=r"far from the middle|no cell could be computed"):
        report(permuted(meshes.patch(ELEMENTS[name]), order))


@pytest.mark.parametrize("collapsed", [(0, 1, 2, 2, 4, 5, 6, 6), (0, 1, 2, 3, 4, 4, 4, 4)])
def test_collapsed_cells_and_mirrored_ones_are_in_order(collapsed: tuple[int, ...]) -> None:
    one = permuted(box("hexahedron", 1), collapsed)
    assert report(one).exit_status == 0
    mirrored = permuted(box("hexahedron"), (4, 5, 6, 7, 0, 1, 2, 3))
    assert report(mirrored).exit_status == 0


def test_cells_of_different_shapes_fit_together() -> None:
    # a cube, a pyramid on it and a tetrahedron beside that: the pyramid's base is the cube's face
    points = np.array([*box("hexahedron", 1, shear=0.0).points, (0.5, 0.5, 2.0), (2.0, 0.5, 1.5)])
    cube = box("hexahedron", 1, shear=0.0).cells
    top = cube[0, 4:]
    tetra = [[top[1], top[2], len(points) - 2, len(points) - 1]]
    cells = [("hexahedron", cube), ("pyramid", [[*top, len(points) - 2]]), ("tetra", tetra)]
    blocks = tuple(CellBlock(t, np.array(c), np.array([k])) for k, (t, c) in enumerate(cells))
    found = patch_report(patch_test(Result(points, blocks)), "mesh")
    assert found.exit_status == 0, [f for f in found.findings if f.state != "met"]
