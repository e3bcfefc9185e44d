"""Displacements from a table by node number come to the right nodes, or are refused with the place."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from unturn.errors import InputError
from unturn.io.table import DisplacementTable, attach_displacement_table, read_displacement_table
from unturn.result import CellBlock, Result

VALUES = np.array([[0.5, -1.25, 3e-3], [0, 2.5, 0], [1e-9, 0, 7]])


def written(folder: Path, text: str | bytes) -> Path:
    path = folder / "u.csv"
    path.write_bytes(text.encode() if isinstance(text, str) else text)
    return path


def mesh(n: int = 3, **arrays: list[int]) -> Result:
    cells = np.arange(n)[None, :3]
    data = {name: np.array(values) for name, values in arrays.items()}
    return Result(np.arange(3.0 * n).reshape(n, 3), (CellBlock("triangle", cells, np.array([0])),), data)


SPELLINGS = {
    "comma": "node,ux,uy,uz\n1,0.5,-1.25,3e-3\n2,0,2.5,0\n3,1e-9,0,7\n",
    "comma and blank": "node, ux, uy, uz\n1, 0.5, -1.25, 3e-3\n2, 0, 2.5, 0\n3, 1e-9, 0, 7",
    "no names": "1,.5,-1.25,+3.E-3\n2,0,2.5,0\n3,1e-9,0,7\n",
    "blanks": "   1    0.5  -1.25   3e-3\n   2    0  2.5  0\n   3  1e-9  0  7\n",
    "tabs": "ID\tU1\tU2\tU3\n1\t0.5\t-1.25\t3e-3\n2\t0\t2.5\t0\n3\t1e-9\t0\t7\n",
    "semicolon": "Node ID;UX [mm];UY [mm];UZ [mm]\n1;0.5;-1.25;3e-3\n2;0;2.5;0\n3;1e-9;0;7\n",
    "decimal comma": "node;ux;uy;uz\n1;0,5;-1,25;3e-3\n2;0;2,5;0\n3;1e-9;0;7\n",
    "decimal comma and blanks": "node ux uy uz\n1 0,5 -1,25 0,003\n2 0 2,5 0\n3 1e-9 0 7\n",
    "decimal comma and tabs": "1\t0,5\t-1,25\t3e-3\n2\t0\t2,5\t0\n3\t1e-9\t0\t7\n",
    "fortran": "1 0.5D0 -1.25d+00 0.3D-2\n2 0. 2.5 0.\n3 1.0D-009 0 7\n",
    "comments": "# made by hand\n** step 1\n\n$ head\nnode,ux,uy,uz\n1,0.5,-1.25,3e-3\n# more\n2,0,2.5,0\n"
    "3,1e-9,0,7\n",
    "byte order mark": "\ufeffnode,ux,uy,uz\r\n1,0.5,-1.25,3e-3\r\n2,0,2.5,0\r\n3,1e-9,0,7\r\n",
    "quotes": '"Node","X displacement","Y displacement","Z displacement"\n'
    "1,0.5,-1.25,3e-3\n2,0,2.5,0\n3,1e-9,0,7\n",
    "coordinates too": "x,y,z,node,uz,uy,ux\n9,9,9,1,3e-3,-1.25,0.5\n9,9,9,2,0,2.5,0\n9,9,9,3,7,0,1e-9\n",
    "counted from 0": "Point ID,displacement:0,displacement:1,displacement:2\n"
    "1,0.5,-1.25,3e-3\n2,0,2.5,0\n3,1e-9,0,7\n",
    "counted from 1": "label displacement1 displacement2 displacement3\n"
    "1 0.5 -1.25 3e-3\n2 0 2.5 0\n3 1e-9 0 7\n",
    "last separator": "node,ux,uy,uz,\n1,0.5,-1.25,3e-3,\n2,0,2.5,0,\n3,1e-9,0,7,\n",
    "float node": "1.0 0.5 -1.25 3e-3\n2.0 0 2.5 0\n3.0000E+00 1e-9 0 7\n",
    "utf-16": "node\tux\tuy\tuz\n1\t0.5\t-1.25\t3e-3\n2\t0\t2.5\t0\n3\t1e-9\t0\t7\n".encode("utf-16"),
    "latin-1": "Knoten f\u00fcr,ux\n".replace("Knoten f\u00fcr,ux", "node,ux,uy,uz,L\u00e4nge").encode(
        "latin-1"
    )
    + b"1,0.5,-1.25,3e-3,1\n2,0,2.5,0,1\n3,1e-9,0,7,1\n",
}


@pytest.mark.parametrize("case", SPELLINGS)
def test_every_spelling_gives_the_same_numbers(case: str, tmp_path: Path) -> None:
    table = read_displacement_table(written(tmp_path, SPELLINGS[case]))
    assert table.node_numbers.tolist() == [1, 2, 3]
    np.testing.assert_array_equal(table.values, VALUES)
    found = attach_displacement_table(mesh(), table)
    np.testing.assert_array_equal(found.point_data["displacement"], VALUES)


def test_two_components(tmp_path: Path) -> None:
    table = read_displacement_table(written(tmp_path, "node,ux,uy\n1,1,2\n2,3,4\n3,5,6\n"))
    assert table.values.tolist() == [[1, 2], [3, 4], [5, 6]]
    assert table.columns == ("ux", "uy")


@pytest.mark.source("Fortran 2018, 13.7.2.3.2: an exponent of three digits has no letter")
def test_exponents_without_a_letter(tmp_path: Path) -> None:
    table = read_displacement_table(written(tmp_path, "1 1.5-100 -2.5+101 0.1E-002\n"))
    assert table.values.tolist() == [[1.5e-100, -2.5e101, 1e-3]]


def test_nan_is_a_number(tmp_path: Path) -> None:
    table = read_displacement_table(written(tmp_path, "1 nan 0 0\n"))
    assert np.isnan(table.values[0, 0])


WRONG_TABLES = {
    "empty": ("", "the table is empty"),
    "comments alone": ("# a\n\n", "the table is empty"),
    "names alone": ("node,ux,uy\n", "a header and no line of numbers"),
    "binary": ("1,2\0,3", "binary data"),
    "word": ("node,ux,uy,uz\n1,0,0,0\n2,0,oops,0\n", "line 3, column 3: 'oops' is not a number"),
    "empty cell": ("node,ux,uy,uz\n1,0,0,0\n2,0,,0\n", "line 3, column 3: '' is not a number"),
    "short line": ("node,ux,uy,uz\n1,0,0,0\n2,0,0\n", "line 3: 3 columns; the lines before have 4"),
    "header": ("node,ux,uy\n1,0,0,0\n", "line 1: the header names 3 columns, line 2 has 4"),
    "no node": ("ux,uy,uz\n1,0,0\n", "no column of the table could be the node number"),
    "two nodes": ("node,id,ux,uy\n1,1,0,0\n", "2 columns of the table could be the node number"),
    "coordinates": ("node,x,y,z\n1,0,0,0\n", "x, y and z alone may be coordinates"),
    "two of ux": ("node,ux,u1,uy\n1,0,0,0\n", "the displacement columns are not clear"),
    "no uy": ("node,ux,uz\n1,0,0\n", "the displacement columns are not clear"),
    "too many": ("1 2 3 4 5 6 7\n", "this has 7 columns"),
    "too few": ("1 2\n", "this has 2 columns"),
    "broken node": ("1.5 0 0 0\n", "line 1, column 1: the node number 1.5 is not a whole number"),
    "negative node": ("1 0 0 0\n-2 0 0 0\n", "line 2, column 1: the node number -2"),
    "repeated": (
        "1 0 0 0\n2 0 0 0\n# again\n1 0 0 0\n2 0 0 1\n",
        "line 4: node 1 stands there a second time; 2 lines",
    ),
    "two commas": ("1 2 3\n1,5 2,x 3\n", "line 2: it is not clear whether commas"),
}


@pytest.mark.parametrize("case", WRONG_TABLES)
def test_tables_that_are_wrong(case: str, tmp_path: Path) -> None:
    content, expected = WRONG_TABLES[case]
    path = written(tmp_path, content)
    with pytest.raises(InputError) as caught:
        read_displacement_table(path)
    assert expected in str(caught.value)
    assert str(caught.value).startswith(str(path))


def test_a_missing_table(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="cannot be opened: No such file"):
        read_displacement_table(tmp_path / "no.csv")


# Onto the mesh

TABLE = DisplacementTable(np.array([30, 10, 20]), np.array([[3.0, 0], [1, 0], [2, 0]]), ("ux", "uy"), "u.csv")


@pytest.mark.parametrize(
    "name", ["node_id", "NodeId", "gmsh:node", "GlobalNodeId", "nodeNumber", "id", "Node ID"]
)
def test_the_solvers_node_numbers_are_used(name: str) -> None:
    found = attach_displacement_table(mesh(**{name: [10, 20, 30]}), TABLE, "u")
    assert found.point_data["u"][:, 0].tolist() == [1, 2, 3]
    assert found.notes == (
        f"Displacements from u.csv, columns ux, uy; nodes found by the mesh's array {name!r}.",
    )


@pytest.mark.parametrize("first", [0, 1])
def test_positions_are_used_when_the_numbers_have_no_gap(first: int) -> None:
    table = replace(TABLE, node_numbers=np.array([2, 0, 1]) + first)
    found = attach_displacement_table(mesh(), table)
    assert found.point_data["displacement"][:, 0].tolist() == [1, 2, 3]
    assert f"counted from {first}" in found.notes[0]


def test_an_array_that_cannot_be_node_numbers_is_not_used() -> None:
    table = replace(TABLE, node_numbers=np.array([3, 1, 2]))
    found = attach_displacement_table(mesh(id=[7, 7, 7]), table)
    assert "position" in found.notes[0]


def test_two_equal_arrays_of_numbers_are_one() -> None:
    found = attach_displacement_table(mesh(id=[10, 20, 30], node_id=[10, 20, 30]), TABLE)
    assert found.point_data["displacement"][:, 0].tolist() == [1, 2, 3]


def test_nodes_that_no_cell_uses_may_be_missing() -> None:
    found = attach_displacement_table(mesh(5, node_id=[10, 20, 30, 40, 50]), TABLE)
    assert np.isnan(found.point_data["displacement"][3:]).all()
    assert found.notes[1] == "2 nodes that no cell uses have no line in the table: NaN there."


@pytest.mark.parametrize(
    ("result", "table", "expected"),
    [
        (mesh(), TABLE, "has nodes 10 to 30; the mesh has 3 nodes and no array of node numbers"),
        (mesh(node_id=[10, 20, 31]), TABLE, "1 node numbers are not in the mesh (first: 30)"),
        (
            mesh(node_id=[10, 20, 30]),
            replace(TABLE, node_numbers=np.array([10, 20]), values=TABLE.values[:2]),
            "1 nodes of the mesh's cells have no line (first: 30)",
        ),
        (mesh(id=[10, 20, 30], node_id=[1, 2, 3]), TABLE, "all look like node numbers and differ"),
        (mesh(displacement=[0, 0, 0]), TABLE, "already has a point array 'displacement'"),
    ],
)
def test_tables_that_do_not_fit_the_mesh(result: Result, table: DisplacementTable, expected: str) -> None:
    with pytest.raises(InputError) as caught:
        attach_displacement_table(result, table)
    assert expected in str(caught.value)


def test_the_mesh_stays_as_it_was() -> None:
    before = mesh(node_id=[10, 20, 30])
    attach_displacement_table(before, TABLE)
    assert set(before.point_data) == {"node_id"}
    assert before.notes == ()
