"""Which cell types are computed, which are not and why, and what a wrong number of nodes leads to."""

from __future__ import annotations

import subprocess
import sys

import numpy as np
import pytest

from unturn.elements import ELEMENTS, FAMILIES, element, not_computable
from unturn.errors import InputError

pytestmark = pytest.mark.derived("node counts are the dimensions of the spaces; the words are this project's")


@pytest.mark.parametrize("name", ELEMENTS)
def test_rows_are_found_by_name_and_number_of_nodes(name: str) -> None:
    row = ELEMENTS[name]
    assert element(name, row.n_nodes) is row
    assert row.name == name
    assert not_computable(name, row.n_nodes) is None
    assert row.source.text


@pytest.mark.parametrize("name", ELEMENTS)
def test_a_wrong_number_of_nodes_is_refused_with_the_right_one(name: str) -> None:
    expected = ELEMENTS[name].n_nodes
    with pytest.raises(InputError, match=f"a {name} cell has {expected} nodes; {expected + 1} were found"):
        element(name, expected + 1)


@pytest.mark.source(
    "VTK file format: cell type numbers of vtkCellType.h, as meshio 5.3.5 maps them to its names"
)
def test_names_and_numbers_are_those_of_meshio() -> None:
    from meshio._vtk_common import vtk_to_meshio_type

    rows = {**ELEMENTS, **{f: element(f, FAMILIES[f].n_nodes(3)) for f in FAMILIES}}
    no_number = {"pyramid14": 74, "voxel": 11}  # VTK has no fixed 14-node pyramid; meshio has no voxel
    assert {n: rows[n].vtk_type for n in no_number} == no_number
    for name in set(rows) - set(no_number):
        assert vtk_to_meshio_type[rows[name].vtk_type] == name


@pytest.mark.parametrize("name", FAMILIES)
def test_lagrange_orders_one_and_two_are_the_fixed_cells(name: str) -> None:
    shape = FAMILIES[name].shape.name
    names = {
        "line": ("line", "line3"),
        "triangle": ("triangle", "triangle6"),
        "quad": ("quad", "quad9"),
        "tetra": ("tetra", "tetra10"),
        "hexahedron": ("hexahedron", "hexahedron27"),
        "wedge": ("wedge", "wedge18"),
    }[shape]
    for fixed in names:
        row = ELEMENTS[fixed]
        np.testing.assert_allclose(element(name, row.n_nodes).nodes, row.nodes, atol=1e-15)


@pytest.mark.parametrize(
    ("name", "n"),
    [("VTK_LAGRANGE_HEXAHEDRON", 12), ("VTK_LAGRANGE_QUADRILATERAL", 6), ("VTK_LAGRANGE_WEDGE", 12)],
)
def test_other_orders_along_each_axis_are_refused(name: str, n: int) -> None:
    with pytest.raises(InputError, match=rf"\(order 6\) nodes; {n} were found"):
        element(name, n)


@pytest.mark.parametrize(
    ("name", "n", "reason"),
    [
        ("vertex", 1, "no extent"),
        ("poly_line", 5, "chain of lines"),
        ("triangle_strip", 5, "drawing form"),
        ("polygon", 5, "no agreed shape functions"),
        ("polygon5", 5, "no agreed shape functions"),
        ("polyhedron12", 12, "no agreed shape functions"),
        ("convex_point_set", 9, "no agreed shape functions"),
        ("hexa_prism", 12, "no agreed polynomial"),
        ("VTK_BEZIER_HEXAHEDRON", 27, "control points"),
        ("VTK_LAGRANGE_TETRAHEDRON", 15, "no row"),
        ("VTK_LAGRANGE_TRIANGLE", 7, "write it as triangle7"),
        ("VTK_LAGRANGE_WEDGE", 21, "no row"),
        ("VTK_LAGRANGE_TRIANGLE", 36, "it is of order 7"),
        ("VTK_LAGRANGE_PYRAMID", 30, "it is of order 3"),
        ("tetra100", 100, "similar: 'tetra10'"),
        ("blob", 3, "'blob' is not in the element table"),
    ],
)
def test_reasons(name: str, n: int, reason: str) -> None:
    found = not_computable(name, n)
    assert found is not None
    assert reason in found
    with pytest.raises(InputError, match="cannot be computed"):
        element(name, n)


def test_importing_the_table_stays_light() -> None:
    heavy = ("scipy", "meshio", "pyvista", "vtkmodules")
    code = f"import sys, unturn.elements; print([m for m in {heavy} if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
