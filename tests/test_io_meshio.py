"""MSH, Exodus and what meshio reads: right, or refused by name."""

from __future__ import annotations

import json
import random
import subprocess
import sys
from pathlib import Path

import meshio
import numpy as np
import pytest

from solver_samples import EXODUS_NAMES, exodus, msh, section, view
from unturn.errors import InputError, UsageError
from unturn.io._meshio import READ, open_file
from unturn.io._node_order import PLACES, checked_order
from unturn.result import CellBlock, Result, Steps
from xdmf_samples import assert_bits, cell_points, one_cell

QUADRATIC = [t for t in PLACES if t not in ("triangle7", "hexahedron24", "pyramid14")]
SUFFIXES = {
    "avsucd": ".avs",
    "med": ".med",
    "hmf": ".hmf",
    "abaqus": ".inp",
    "nastran": ".bdf",
    "medit": ".mesh",
}


def read(path: Path, step: int = 0) -> Result:
    return open_file(path).read(step)


def refused(path: Path, step: int = 0) -> str:
    with pytest.raises(InputError) as caught:
        read(path, step)
    assert str(path) in str(caught.value)
    return str(caught.value)


# Node order

VTK_CENTRES = """
import json, vtk
types = json.loads(__import__("sys").argv[1])
found = {}
for name, number in types.items():
    cell = vtk.vtkGenericCell.InstantiateCell(number)
    n, flat = cell.GetNumberOfPoints(), cell.GetParametricCoords()
    found[name] = [[flat[3 * i + k] for k in range(3)] for i in range(n)]
print(json.dumps(found))
"""
# Source: VTK 9.7, vtkCellType.h.
VTK_TYPES = {
    "line3": 21, "triangle6": 22, "triangle7": 34, "quad8": 23, "quad9": 28, "tetra10": 24, "pyramid13": 27,
    "wedge15": 26, "wedge18": 32, "hexahedron20": 25, "hexahedron24": 33, "hexahedron27": 29,
}  # fmt: skip


@pytest.mark.source("VTK 9.7.2, parametric coordinates of the nodes of each cell class")
def test_the_places_of_the_nodes_are_those_of_vtk() -> None:
    command = [sys.executable, "-c", VTK_CENTRES, json.dumps(VTK_TYPES)]
    output = subprocess.run(command, capture_output=True, check=True, timeout=60).stdout
    for name, parametric in json.loads(output).items():
        nodes = np.array(parametric)
        if name.startswith("pyramid"):
            # VTK's coordinates of a pyramid are those of a cube whose top is drawn together into the apex.
            nodes[:, :2] = 0.5 + (nodes[:, :2] - 0.5) * (1 - nodes[:, 2:])
        corners = len(nodes) - len(PLACES[name])
        for node, place in zip(nodes[corners:], PLACES[name]):
            np.testing.assert_allclose(node, nodes[list(place)].mean(axis=0), atol=1e-6, err_msg=name)
            assert max(place) < corners


@pytest.mark.parametrize("cell_type", [t for t in PLACES if t != "line3"])
def test_any_order_of_the_further_nodes_is_found_by_where_they_lie(cell_type: str) -> None:
    meant = one_cell(cell_type)
    rows = meant.blocks[0].connectivity
    corners = rows.shape[1] - len(PLACES[cell_type])
    mixed = [*range(corners), *(np.random.default_rng(5).permutation(rows.shape[1] - corners) + corners)]
    if len(mixed) - corners < 2 or mixed == sorted(mixed):
        mixed[corners:] = mixed[corners:][::-1]
    block = CellBlock(cell_type, rows[:, mixed], np.arange(2))
    found, notes = checked_order(meant.points, (block,), "")
    assert found[0].connectivity.tolist() == rows.tolist()
    assert len(notes) == 1
    assert f"The nodes of the {cell_type} cells were not in the order" in notes[0]


# Common practice, no source: quarter-point nodes at a crack tip lie at a quarter of their edges.
@pytest.mark.parametrize("cell_type", ["triangle6", "quad8", "hexahedron20", "wedge15", "tetra10"])
def test_quarter_point_curved_and_collapsed_cells_are_in_order(cell_type: str) -> None:
    points = cell_points(cell_type)
    corners = len(points) - len(PLACES[cell_type])
    for k, edge in enumerate(PLACES[cell_type]):
        if 0 in edge:
            points[corners + k] = 0.75 * points[0] + 0.25 * points[max(edge)]
    bent = cell_points(cell_type)
    bent[:, 1] += 0.15 * bent[:, 0] ** 2
    collapsed = cell_points(cell_type)
    first = PLACES[cell_type][0]
    collapsed[first[1]] = collapsed[first[0]]
    collapsed[corners] = collapsed[first[0]]
    for form in (points, bent, collapsed, points.astype(np.float32)):
        block = CellBlock(cell_type, np.arange(len(points))[None], np.array([0]))
        assert checked_order(form, (block,), "")[0] == (block,)


def test_nodes_that_lie_nowhere_sensible_are_refused() -> None:
    rng = np.random.default_rng(1)
    points = rng.random((400, 3))
    block = CellBlock("hexahedron20", np.arange(400).reshape(20, 20), np.arange(20))
    with pytest.raises(
        InputError, match=r"a\.e: the nodes of the hexahedron20 cells do not lie on the edges"
    ):
        checked_order(points, (block,), "a.e: ")


# MSH

# Source: Gmsh 4.15.2, getElementProperties: local coordinates of the nodes, times two.
GMSH_NODES = {
    "tetra10": (11, "000 200 020 002 100 110 010 001 011 101"),
    "wedge18": (13, "000 200 020 002 202 022 100 010 001 110 201 021 102 012 112 101 011 111"),
    "wedge15": (18, "000 200 020 002 202 022 100 010 001 110 201 021 102 012 112"),
    "hexahedron20": (
        17, "000 200 220 020 002 202 222 022 100 010 001 210 201 120 221 021 102 012 212 122"
    ),
    "hexahedron27": (
        12,
        "000 200 220 020 002 202 222 022 100 010 001 210 201 120 221 021 102 012 212 122 110 101 011 "
        "211 121 112 111",
    ),
    "pyramid14": (14, "000 400 440 040 224 200 020 112 420 312 240 332 132 220"),
    "pyramid13": (19, "000 400 440 040 224 200 020 112 420 312 240 332 132"),
    "quad9": (10, "000 200 220 020 100 210 120 010 110"),
    "quad8": (16, "000 200 220 020 100 210 120 010"),
    "triangle6": (9, "000 200 020 100 110 010"),
    "line3": (8, "000 200 100"),
}  # fmt: skip


@pytest.mark.parametrize("cell_type", GMSH_NODES)
def test_msh_cells_come_in_vtks_order_without_repair(cell_type: str, tmp_path: Path) -> None:
    kind, text = GMSH_NODES[cell_type]
    points = np.array([[float(c) for c in word] for word in text.split()])
    numbers = [7 * k + 3 for k in range(len(points))]
    nodes = [f"{n} {' '.join(map(str, p))}" for n, p in zip(numbers, points)]
    path = tmp_path / "a.msh"
    path.write_text(
        msh(
            section("Nodes", str(len(nodes)), *nodes),
            section("Elements", "1", f"5 {kind} 2 1 1 {' '.join(map(str, numbers))}"),
        )
    )
    found = read(path)
    assert found.notes == ()
    scale = 2 if cell_type.startswith("pyramid") else 1
    np.testing.assert_array_equal(
        found.points[found.blocks[0].connectivity[0]], scale * cell_points(cell_type)
    )
    assert found.point_data["node_id"].tolist() == numbers
    assert found.cell_data["element_id"].tolist() == [5]


@pytest.mark.source("meshio 5.3.5, MSH writers")
@pytest.mark.parametrize("file_format", ["gmsh", "gmsh22"])
@pytest.mark.parametrize("binary", [True, False])
@pytest.mark.parametrize(
    "cell_type", ["triangle", "tetra", "tetra10", "hexahedron", "hexahedron27", "wedge15"]
)
def test_msh_written_by_meshio(file_format: str, binary: bool, cell_type: str, tmp_path: Path) -> None:
    meshio._mesh.topological_dimension.setdefault("wedge15", 3)
    meant = one_cell(cell_type)
    rows = meant.blocks[0].connectivity
    cell_data = {"m": [np.array([4.0, 5.0])]}
    mesh = meshio.Mesh(meant.points, [(cell_type, rows)], point_data=meant.point_data, cell_data=cell_data)
    with np.printoptions(legacy="1.25"):
        meshio.write(tmp_path / "a.msh", mesh, file_format=file_format, binary=binary)
    found = read(tmp_path / "a.msh")
    assert found.blocks[0].cell_type == cell_type
    assert found.blocks[0].connectivity.tolist() == rows.tolist()
    assert_bits(found.point_data["u"], meant.point_data["u"])
    assert_bits(found.cell_data["m"], np.array([4.0, 5.0]))


NODES = section("Nodes", "5", "10 0 0 0", "20 1 0 0", "30 0 1 0", "40 1 1 0", "99 5 5 5")
ELEMENTS = section("Elements", "3", "7 2 2 5 1 10 20 30", "3 1 2 6 2 10 20", "8 2 2 5 1 20 40 30")
NAMES = section("PhysicalNames", "2", '1 6 "edge"', '2 5 "the arm"')


def test_msh_groups_steps_and_partial_values(tmp_path: Path) -> None:
    path = tmp_path / "a.msh"
    path.write_text(
        msh(
            NAMES,
            NODES,
            ELEMENTS,
            view("u", 0.5, 1, {40: [1.0, 2.0, 3.0], 10: [4.0, 5.0, 6.0]}),
            view("u", 0.5, 1, {20: [7.0, 8.0, 9.0]}),
            view("u", 0.0, 0, {10: [0.0, 0.0, 0.0]}),
            view("T", 0.5, 1, {n: [float(n)] for n in (10, 20, 30, 40, 99)}),
            view("d", 0.0, 0, {8: [1.0], 7: [2.0], 3: [3.0]}, "ElementData"),
            section("ElementNodeData", "anything"),
            section("Comments", "by hand"),
        )
    )
    file = open_file(path)
    assert file.steps == (0.0, 0.5)
    found = file.read(1)
    assert found.steps == Steps((0.0, 0.5), 1)
    expected = np.full((5, 3), np.nan)
    expected[[3, 0, 1]] = [[1, 2, 3], [4, 5, 6], [7, 8, 9]]
    assert_bits(found.point_data["u"], expected)
    assert found.point_data["T"].tolist() == [10, 20, 30, 40, 99]
    assert {b.cell_type: (b.connectivity.tolist(), b.index.tolist()) for b in found.blocks} == {
        "triangle": ([[0, 1, 2], [1, 3, 2]], [0, 2]),
        "line": ([[0, 1]], [1]),
    }
    assert {k: v.tolist() for k, v in found.groups.items()} == {"the arm": [0, 2], "edge": [1]}
    assert found.notes == (
        "Values at the corners of each element ($ElementNodeData) are not read.",
        "The array 'u' has no value at 2 nodes; NaN there.",
    )
    first = file.read(0)
    assert "T" not in first.point_data
    assert first.cell_data["d"].tolist() == [2, 3, 1]


MSH41 = """$MeshFormat
4.1 0 8
$EndMeshFormat
$PhysicalNames
1
2 5 "arm"
$EndPhysicalNames
$Entities
0 1 1 0
1 0 0 0 1 0 0 0 0
1 0 0 0 1 1 0 2 5 6 0
$EndEntities
$Nodes
2 4 1 9
1 1 1 2
2
9
0 0 0 0.5
1 0 0 0.7
2 1 0 2
3
4
0 1 0
1 1 0
$EndNodes
$Elements
2 3 1 8
1 1 1 1
7
2 9
2 1 2 2
8
2 9 3
1
9 4 3
$EndElements
"""


# Source: Gmsh 4.13 reference manual, MSH file format version 4.1.
def test_msh_41_with_an_entity_without_a_tag_and_parametric_nodes(tmp_path: Path) -> None:
    (tmp_path / "a.msh").write_text(MSH41)
    found = read(tmp_path / "a.msh")
    assert found.points.tolist() == [[0, 0, 0], [1, 0, 0], [0, 1, 0], [1, 1, 0]]
    assert [b.connectivity.tolist() for b in found.blocks] == [[[0, 1]], [[0, 1, 2], [1, 3, 2]]]
    assert {k: v.tolist() for k, v in found.groups.items()} == {"arm": [1, 2], "physical 6": [1, 2]}
    assert found.cell_data["gmsh:physical"].tolist() == [0, 5, 5]
    assert found.cell_data["element_id"].tolist() == [7, 8, 1]


WRONG_MSH = {
    "empty": ("", "the file has no elements"),
    "other": ("hello\n", "a section was expected"),
    "no format": (f"{NODES}\n", "does not begin with $MeshFormat"),
    "version 1": ("$NOD\n1\n1 0 0 0\n$ENDNOD\n", "does not begin with $MeshFormat"),
    "version 4.0": ("$MeshFormat\n4 0 8\n$EndMeshFormat\n", "MSH version '4 0 8' is not read"),
    "no elements": (msh(NODES), "the file has no elements"),
    "no end": (msh(NODES, ELEMENTS).replace("$EndElements", ""), "the section $Elements has no end"),
    "unknown node": (msh(NODES, ELEMENTS.replace("40 30", "41 30")), "node 41 is referred to and not in"),
    "node twice": (msh(NODES.replace("99 5", "10 5"), ELEMENTS), "two nodes have the number 10"),
    "too few nodes": (msh(NODES.replace("5\n10", "9\n10"), ELEMENTS), "holds too few numbers"),
    "too few elements": (msh(NODES, ELEMENTS.replace("3\n7", "4\n7")), "holds too few numbers"),
    "too many": (msh(NODES, ELEMENTS.replace("3\n7", "2\n7")), "more numbers than elements"),
    "unknown element": (msh(NODES, ELEMENTS.replace("7 2 2", "7 200 2")), "elements of MSH type 200"),
    "word": (msh(NODES.replace("1 1 0", "1 x 0"), ELEMENTS), "something that is not a number"),
    "fraction": (msh(NODES, ELEMENTS.replace("40 30", "40.5 30")), "should be whole and is not"),
    "two values": (
        msh(NODES, ELEMENTS, view("u", 0.0, 0, {10: [1.0]}), view("u", 0.0, 0, {10: [2.0]})),
        "two arrays of one step are called 'u'",
    ),
    "value at an unknown node": (
        msh(NODES, ELEMENTS, view("u", 0.0, 0, {11: [1.0]})),
        "node 11 is referred to",
    ),
    "value at an unknown element": (
        msh(NODES, ELEMENTS, view("u", 0.0, 0, {11: [1.0]}, "ElementData")),
        "element 11 is referred to",
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", WRONG_MSH)
def test_msh_files_that_are_wrong(case: str, tmp_path: Path) -> None:
    content, expected = WRONG_MSH[case]
    (tmp_path / "a.msh").write_text(content)
    assert expected in refused(tmp_path / "a.msh")


# Exodus

VTK_EXODUS = """
import json, sys, vtk
found = {}
for path in sys.argv[1:]:
    reader = vtk.vtkExodusIIReader()
    reader.SetFileName(path)
    reader.UpdateInformation()
    reader.Update()
    grid = reader.GetOutput().GetBlock(0).GetBlock(0)
    cell = grid.GetCell(0)
    found[path] = [grid.GetPoint(cell.GetPointId(i)) for i in range(cell.GetNumberOfPoints())]
print(json.dumps(found))
"""


def exodus_cell(cell_type: str) -> tuple[np.ndarray, np.ndarray]:
    """Return points in Exodus's own order of nodes, and the connectivity 0, 1, 2 ..."""
    points = cell_points(cell_type)
    # Source: Exodus II manual, node ordering of 15-node wedges and of 20- and 27-node hexahedra.
    order = {
        "wedge15": [*range(9), 12, 13, 14, 9, 10, 11],
        "hexahedron20": [*range(12), 16, 17, 18, 19, 12, 13, 14, 15],
        "hexahedron27": [*range(12), 16, 17, 18, 19, 12, 13, 14, 15, 26, 24, 25, 20, 21, 22, 23],
    }.get(cell_type, list(range(len(points))))
    return points[order], np.arange(len(points))[None]


@pytest.mark.source("VTK 9.7.2, vtkExodusIIReader: an independent reader of the same file")
def test_exodus_cells_come_in_the_order_in_which_vtk_reads_them(tmp_path: Path) -> None:
    paths = {}
    for cell_type, kind in EXODUS_NAMES.items():
        points, nodes = exodus_cell(cell_type)
        paths[cell_type] = exodus(tmp_path / f"{cell_type}.e", points, [(kind, nodes)])
    command = [sys.executable, "-c", VTK_EXODUS, *map(str, paths.values())]
    output = subprocess.run(command, capture_output=True, check=True, timeout=60).stdout
    referee = json.loads(output)
    for cell_type, path in paths.items():
        found = read(path)
        assert found.blocks[0].cell_type == cell_type
        assert found.notes == ()
        places = found.points[found.blocks[0].connectivity[0]]
        np.testing.assert_array_equal(places, cell_points(cell_type))
        np.testing.assert_allclose(places, referee[str(path)], atol=1e-6, err_msg=cell_type)


@pytest.mark.parametrize("hdf", [False, True])
def test_exodus_steps_vectors_blocks_and_numbers(hdf: bool, tmp_path: Path) -> None:
    points = np.concatenate([cell_points("tetra"), cell_points("hexahedron") + np.array([5.0, 0, 0])])
    rng = np.random.default_rng(2)
    nodal = {n: rng.random((2, 12)) for n in ("DISPLX", "DISPLY", "DISPLZ", "T", "vel_x", "vel_y")}
    path = exodus(
        tmp_path / "a.e",
        points,
        [("TET4", np.arange(4)[None]), ("HEX", np.arange(4, 12)[None])],
        nodal,
        {
            "vm": {1: np.array([[1.0], [2.0]]), 2: np.array([[3.0], [4.0]])},
            "only": {2: np.array([[5.0], [6.0]])},
        },
        (0.0, 1.5),
        {"node_num_map": np.arange(12, dtype=np.int32) * 2 + 1, "elem_num_map": np.array([7, 9], np.int32)},
        hdf,
    )
    file = open_file(path)
    assert file.steps == (0.0, 1.5)
    found = file.read(1)
    vector = np.stack([nodal[f"DISPL{a}"][1] for a in "XYZ"], axis=1)
    assert_bits(found.point_data["DISPL"], vector)
    assert_bits(found.point_data["vel"], np.stack([nodal["vel_x"][1], nodal["vel_y"][1]], axis=1))
    assert_bits(found.point_data["T"], nodal["T"][1])
    assert found.cell_data["vm"].tolist() == [2, 4]
    np.testing.assert_array_equal(found.cell_data["only"], [np.nan, 6])
    assert found.point_data["node_id"].tolist() == list(range(1, 25, 2))
    assert found.cell_data["element_id"].tolist() == [7, 9]
    assert {k: v.tolist() for k, v in found.groups.items()} == {"block 10": [0], "block 20": [1]}
    assert [b.connectivity.tolist() for b in found.blocks] == [[[0, 1, 2, 3]], [list(range(4, 12))]]
    with pytest.raises(UsageError, match="has steps 0 to 1; step 2"):
        file.read(2)


TETRA = cell_points("tetra")
WRONG_EXODUS = {
    "type": ({"blocks": [("NFACED", np.arange(4)[None])]}, "elements of type 'NFACED' with 4 nodes"),
    "nodes": ({"blocks": [("TETRA", np.arange(3)[None])]}, "elements of type 'TETRA' with 3 nodes"),
    "outside": ({"blocks": [("TETRA", np.array([[0, 1, 2, 4]]))]}, "refers to a node outside 1 to 4"),
    "below": ({"blocks": [("TETRA", np.array([[0, 1, 2, -1]]))]}, "refers to a node outside 1 to 4"),
    "no cells": ({"blocks": [], "hdf": True}, "4 points and no cells"),
    "short array": ({"nodal": {"u": np.zeros((1, 3))}, "hdf": True}, "has 3 values; 4 are expected"),
    "few steps": (
        {"nodal": {"u": np.zeros((1, 4))}, "times": (0.0, 1.0), "hdf": True}, "no values at step 1"
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", WRONG_EXODUS)
def test_exodus_files_that_are_wrong(case: str, tmp_path: Path) -> None:
    content, expected = WRONG_EXODUS[case]
    given = {"blocks": [("TETRA", np.arange(4)[None])], **content}
    path = exodus(tmp_path / "a.e", TETRA, **given)
    assert expected in refused(path, len(given.get("times", (0.0,))) - 1)


@pytest.mark.parametrize(
    "content", [b"", b"CDF\x05" + bytes(50), b"hello", b"\x89HDF\r\n\x1a\n", b"CDF\x01\0\0"]
)
def test_files_that_are_no_exodus(content: bytes, tmp_path: Path) -> None:
    (tmp_path / "a.e").write_bytes(content)
    refused(tmp_path / "a.e")


# Through meshio


@pytest.mark.source("meshio 5.3.5: its own writer, every cell type that a line of READ names")
@pytest.mark.parametrize(
    ("name", "cell_type"),
    [(n, t) for n, s in SUFFIXES.items() for t in READ[s].cell_types if t not in ("vertex", "line", "line3")],
)
def test_what_meshio_reads_right(
    name: str, cell_type: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    # the quadratic cells that meshio's writer leaves out, by the names of MED 4.2, med_geometry_type
    for med_name, full in (
        ("TR7", "triangle7"),
        ("QU9", "quad9"),
        ("P18", "wedge18"),
        ("H27", "hexahedron27"),
    ):
        monkeypatch.setitem(meshio.med._med.meshio_to_med_type, full, med_name)
    for extra in ("wedge15", "pyramid13"):
        meshio._mesh.topological_dimension.setdefault(extra, 3)
    meshio._mesh.topological_dimension.setdefault("triangle7", 2)
    line = READ[SUFFIXES[name]]
    meant = one_cell(cell_type)
    rows = meant.blocks[0].connectivity
    data = {"point_data": dict(meant.point_data)} if line.has_arrays else {}
    path = tmp_path / f"a{SUFFIXES[name]}"
    meshio.write(path, meshio.Mesh(meant.points, [(cell_type, rows)], **data), file_format=name)
    found = read(path)
    assert found.format_name == line.name
    assert [b.cell_type for b in found.blocks] == [cell_type]
    np.testing.assert_allclose(
        found.points[found.blocks[0].connectivity], meant.points[rows], rtol=1e-6, atol=1e-12
    )
    if line.has_arrays:
        np.testing.assert_allclose(found.point_data["u"], meant.point_data["u"], rtol=1e-12)
    else:
        assert any("give a displacement table" in note for note in found.notes)


def test_sets_of_an_input_file_become_groups_and_node_numbers_are_kept(tmp_path: Path) -> None:
    path = tmp_path / "a.inp"
    path.write_text(
        "*HEADING\ninvented\n** nodes\n*NODE, NSET=ALL\n 5, 0., 0., 0.\n 3, 1., 0., 0.\n 9, 0., 1., 0.\n"
        " 1, 0., 0., 1.\n 2, 1., 1., 1.\n*ELEMENT, TYPE=C3D4, ELSET=ARM\n 1, 5, 3, 9, 1\n 2, 3, 9, 1, 2\n"
        "*ELSET, ELSET=LAST\n 2\n*NODE OUTPUT\n U\n"
    )
    found = read(path)
    assert found.point_data["node_id"].tolist() == [5, 3, 9, 1, 2]
    assert found.blocks[0].connectivity.tolist() == [[0, 1, 2, 3], [1, 2, 3, 4]]
    assert {k: v.tolist() for k, v in found.groups.items()} == {"ARM": [0, 1], "LAST": [1]}


NASTRAN = (
    "BEGIN BULK\nGRID    7               0.      0.      0.\nGRID*   3                               1."
    "              0.\n*       0.\nGRID,9,,0.,1.,0.\nGRID    4               0.      0.      1.\n"
    "CTETRA  1       1       7       3       9       4\nENDDATA\n"
)


def test_node_numbers_of_bulk_data(tmp_path: Path) -> None:
    (tmp_path / "a.bdf").write_text(NASTRAN)
    found = read(tmp_path / "a.bdf")
    assert found.point_data["node_id"].tolist() == [7, 3, 9, 4]
    assert found.points.tolist() == [[0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1]]
    assert found.blocks[0].connectivity.tolist() == [[0, 1, 2, 3]]


def test_bulk_data_in_a_coordinate_system_of_its_own_is_refused(tmp_path: Path) -> None:
    (tmp_path / "a.bdf").write_text(NASTRAN.replace("GRID,9,,", "GRID,9,2,"))
    assert "a coordinate system of their own" in refused(tmp_path / "a.bdf")


def test_bulk_data_that_is_cut_off(tmp_path: Path) -> None:
    # Derived: the reader behind it looks for the last line for ever.
    (tmp_path / "a.bdf").write_text(NASTRAN[: NASTRAN.index("ENDDATA")])
    assert "no ENDDATA" in refused(tmp_path / "a.bdf")


def test_a_request_to_end_is_no_damaged_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    # Common practice, no source: status 128 and the number of the signal.
    (tmp_path / "a.bdf").write_text(NASTRAN)

    def stopped(*_: object, **__: object) -> None:
        raise SystemExit(143)

    monkeypatch.setattr("meshio.read", stopped)
    with pytest.raises(SystemExit) as stop:
        read(tmp_path / "a.bdf")
    assert stop.value.code == 143


def test_med_families_become_groups_and_steps_are_refused(tmp_path: Path) -> None:
    meant = one_cell("tetra")
    mesh = meshio.Mesh(
        meant.points,
        [("tetra", meant.blocks[0].connectivity)],
        point_data={"u": meant.point_data["u"]},
        cell_data={"cell_tags": [np.array([-1, -2])]},
    )
    mesh.cell_tags = {-1: ["arm"], -2: ["foot", "both"]}
    mesh.point_tags = {}
    meshio.write(tmp_path / "a.med", mesh)
    found = read(tmp_path / "a.med")
    assert {k: v.tolist() for k, v in found.groups.items()} == {"arm": [0], "foot": [1], "both": [1]}
    mesh.point_data = {"u[0] - 0": meant.point_data["u"], "u[1] - 1.5": meant.point_data["u"]}
    meshio.write(tmp_path / "b.med", mesh)
    assert "holds several steps ('u[0] - 0' and more)" in refused(tmp_path / "b.med")


def test_avs_with_node_numbers(tmp_path: Path) -> None:
    (tmp_path / "a.avs").write_text(
        "# by hand\n4 1 3 0 0\n8 0 0 0\n6 1 0 0\n4 0 1 0\n2 0 0 1\n1 5 tet 8 6 2 4\n1 3\nu, m\n"
        "8 1 2 3\n6 4 5 6\n2 7 8 9\n4 0 0 0\n"
    )
    found = read(tmp_path / "a.avs")
    assert found.point_data["node_id"].tolist() == [8, 6, 4, 2]
    assert found.point_data["u"].tolist() == [[1, 2, 3], [4, 5, 6], [0, 0, 0], [7, 8, 9]]
    assert found.cell_data["avsucd:material"].tolist() == [5]


@pytest.mark.parametrize("suffix", [".cgns", ".dat", ".tec", ".h5m", ".f3grid", ".post", ".xyz", ""])
def test_formats_that_are_not_known_to_be_right_are_refused_by_name(suffix: str, tmp_path: Path) -> None:
    path = tmp_path / f"a{suffix}"
    path.write_text("x")
    text = refused(path)
    assert "are not read" in text
    assert "VTU or XDMF" in text


def test_cells_that_are_not_known_to_be_right_are_refused_by_name(tmp_path: Path) -> None:
    mesh = meshio.Mesh(np.zeros((3, 3)), [("line3", np.array([[0, 1, 2]]))])
    meshio.write(tmp_path / "a.mesh", meshio.Mesh(mesh.points, [("line", np.array([[0, 1]]))]))
    assert read(tmp_path / "a.mesh").n_cells == 1
    hexa = one_cell("hexahedron27")
    meshio.write(
        tmp_path / "a.hmf", meshio.Mesh(hexa.points, [("hexahedron27", hexa.blocks[0].connectivity)])
    )
    assert read(tmp_path / "a.hmf").blocks[0].cell_type == "hexahedron27"
    path = tmp_path / "b.hmf"
    points = np.random.default_rng(0).random((64, 3))
    meshio.write(path, meshio.Mesh(points, [("hexahedron64", np.arange(64)[None])]))
    assert "cells of type hexahedron64 in a HMF file" in refused(path)


def test_nothing_is_printed_and_no_exit(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    for suffix in READ:
        path = tmp_path / f"bad{suffix}"
        path.write_bytes(b"\x00\xff nonsense\n" * 5)
        refused(path)
        refused(tmp_path / f"missing{suffix}")
    printed = capsys.readouterr()
    assert printed.out == ""
    assert printed.err == ""


# Any bytes at all


def samples(folder: Path) -> list[Path]:
    meant = one_cell("tetra")
    rows = meant.blocks[0].connectivity
    paths = [folder / f"a{suffix}" for suffix in SUFFIXES.values()]
    for path, name in zip(paths, SUFFIXES):
        data = {"point_data": dict(meant.point_data)} if READ[path.suffix].has_arrays else {}
        meshio.write(path, meshio.Mesh(meant.points, [("tetra", rows)], **data), file_format=name)
    for binary in (True, False):
        for name in ("gmsh", "gmsh22"):
            paths.append(folder / f"{name}{binary}.msh")
            mesh = meshio.Mesh(meant.points, [("tetra", rows)], point_data=dict(meant.point_data))
            with np.printoptions(legacy="1.25"):
                meshio.write(paths[-1], mesh, file_format=name, binary=binary)
    for hdf in (True, False):
        paths.append(
            exodus(folder / f"{hdf}.e", meant.points, [("TETRA", rows)], {"u": np.zeros((1, 8))}, hdf=hdf)
        )
    return paths


def test_damaged_files_never_crash_or_hang(tmp_path: Path) -> None:
    chance = random.Random(20261201)
    for path in samples(tmp_path):
        read(path)
        whole = path.read_bytes()
        good = 0
        for _ in range(60):
            bad = bytearray(whole)
            for _ in range(chance.choice((1, 3, 20))):
                where = chance.randrange(len(bad))
                if chance.random() < 0.5:
                    bad[where] = chance.randrange(256)
                else:
                    bad[where] = chance.choice(b"0123456789-. ,*$")
            if chance.random() < 0.3:
                bad = bad[: chance.randrange(len(bad))]
            path.write_bytes(bytes(bad))
            try:
                read(path)
                good += 1
            except InputError:
                pass
        assert good < 60, path
