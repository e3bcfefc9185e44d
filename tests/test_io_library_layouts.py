"""Files laid out as finite-element libraries write them, made by hand: what each means must come out."""

from __future__ import annotations

import base64
from collections.abc import Callable
from pathlib import Path

import h5py
import numpy as np
import pytest

import unturn
from unturn import io
from unturn.elements import ELEMENTS, element
from unturn.errors import DisplacementError, InputError
from unturn.result import CellBlock, Result

Field = Callable[[np.ndarray], np.ndarray]
SLANT = np.array([[1.0, 0.1, 0.05], [0.2, 0.9, -0.1], [0.0, 0.15, 1.1]])


def displacement(points: np.ndarray) -> np.ndarray:
    """A cubic field, held exactly by affine cells of order 3 and higher."""
    x, y, z = points.T
    return 1e-3 * np.stack([x**3 + y * z, 0.5 * y**3 - x * y, z**3 + 2 * x * x * y], axis=1)


def gradient(points: np.ndarray) -> np.ndarray:
    """``(n, 3, 3)`` the field's gradient."""
    x, y, z = points.T
    rows = [[3 * x * x, z, y], [-y, 1.5 * y * y - x, 0 * x], [4 * x * y, 2 * x * x, 3 * z * z]]
    return 1e-3 * np.moveaxis(np.array(rows), -1, 0)


def expected_strain(places: np.ndarray) -> np.ndarray:
    h = gradient(places)
    e = (h + np.swapaxes(h, 1, 2)) / 2
    return e[:, [0, 1, 2, 0, 1, 0], [0, 1, 2, 1, 2, 2]]


def text(values: np.ndarray) -> str:
    return " ".join(map(repr, np.asarray(values).ravel().tolist()))


@pytest.mark.source("NGSolve 6.2.2608, VTKOutput(legacy=True, order=3): version 3.0 over VTK 9's node order")
@pytest.mark.parametrize("order", [2, 3, 4])
def test_lagrange_hexahedra_in_the_new_order_under_an_old_version(order: int, tmp_path: Path) -> None:
    row = element("VTK_LAGRANGE_HEXAHEDRON", (order + 1) ** 3)
    points = row.nodes @ SLANT.T
    path = tmp_path / "u.vtk"
    path.write_text(
        "# vtk DataFile Version 3.0\nvtk output\nASCII\nDATASET UNSTRUCTURED_GRID\n"
        f"POINTS {len(points)} double\n{text(points)}\n"
        f"CELLS 1 {len(points) + 1}\n{len(points)} {text(np.arange(len(points)))}\nCELL_TYPES 1\n72\n"
        f"POINT_DATA {len(points)}\nVECTORS displacement double\n{text(displacement(points))}\n"
    )
    result = unturn.read(path)
    assert "VTK_LAGRANGE_HEXAHEDRON cells were not in the order of the format" in result.notes[0]
    assert result.blocks[0].connectivity.tolist() == [list(range(len(points)))]
    found = unturn.strain(result).cell_data["strain"]
    if order > 2:
        np.testing.assert_allclose(found, expected_strain(row.centroid[None] @ SLANT.T), atol=1e-15)
    unturn.write(result, tmp_path / "again.vtu")
    again = unturn.strain(unturn.read(tmp_path / "again.vtu")).cell_data["strain"]
    np.testing.assert_array_equal(again, found)


def base64_apart(values: np.ndarray, header: str) -> str:
    """The length as base64 text of its own, then the data."""
    data = values.tobytes()
    return (base64.b64encode(np.array([len(data)], header).tobytes()) + base64.b64encode(data)).decode()


@pytest.mark.source("DOLFIN 2019.2, File(name, 'base64'): length encoded apart, offsets padded with zeros")
@pytest.mark.parametrize(("header", "stated"), [("<u4", ""), ("<u8", ' header_type="UInt64"')])
@pytest.mark.parametrize("n_cells", [1, 2, 3])
def test_base64_with_its_length_apart_and_padded_offsets(
    header: str, stated: str, n_cells: int, tmp_path: Path
) -> None:
    corners = np.array([[0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1], [1, 1, 1], [1, 1, -1.0]])
    cells = np.array([[0, 1, 2, 3], [1, 2, 3, 4], [0, 2, 1, 5]], np.uint32)[:n_cells]
    points = corners[: cells.max() + 1] @ SLANT.T
    offsets = np.zeros(cells.size, np.uint32)
    offsets[:n_cells] = 4 * np.arange(1, n_cells + 1)

    def array(name: str, values: np.ndarray, kind: str, more: str = "") -> str:
        return (
            f'<DataArray  type="{kind}"  Name="{name}"{more}  format="binary">\n'
            f"{base64_apart(values, header)}\n</DataArray>\n"
        )

    three = '  NumberOfComponents="3"'
    path = tmp_path / "u.vtu"
    path.write_text(
        f'<?xml version="1.0"?>\n<VTKFile type="UnstructuredGrid"  version="0.1"{stated} '
        'byte_order="LittleEndian">\n<UnstructuredGrid>\n'
        f'<Piece  NumberOfPoints="{len(points)}" NumberOfCells="{n_cells}">\n<Points>\n'
        + array("Points", points, "Float64", three)
        + "</Points>\n<Cells>\n"
        + array("connectivity", cells, "UInt32")
        + array("offsets", offsets, "UInt32")
        + array("types", np.full(n_cells, 10, np.uint8), "UInt8")
        + '</Cells>\n<PointData  Vectors="u">\n'
        + array("u", displacement(points), "Float64", three)
        + "</PointData>\n</Piece>\n</UnstructuredGrid>\n</VTKFile>\n"
    )
    result = unturn.read(path)
    np.testing.assert_array_equal(result.points, points)
    np.testing.assert_array_equal(result.point_data["u"], displacement(points))
    assert result.blocks[0].connectivity.tolist() == cells.tolist()


@pytest.mark.source("GetFEM 5.4.2, export_to_vtu: in front of point arrays the number of values as a float")
@pytest.mark.parametrize("short", [False, True])
def test_base64_behind_a_length_that_is_none(short: bool, tmp_path: Path) -> None:
    points = (np.array([[0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1.0]]) @ SLANT.T).astype(np.float32)
    u = displacement(points).astype(np.float32)

    def array(name: str, values: np.ndarray, kind: str, more: str = "", length: bytes = b"") -> str:
        data = (length or np.array([values.nbytes], "<u4").tobytes()) + values.tobytes()
        return (
            f'<DataArray type="{kind}" Name="{name}"{more} format="binary">\n'
            f"{base64.b64encode(data).decode()}\n</DataArray>\n"
        )

    three = ' NumberOfComponents="3"'
    path = tmp_path / "u.vtu"
    path.write_text(
        '<?xml version="1.0"?>\n<VTKFile type="UnstructuredGrid" version="0.1" byte_order="LittleEndian">\n'
        '<UnstructuredGrid>\n<Piece NumberOfPoints="4" NumberOfCells="1">\n<Points>\n'
        + array("Points", points, "Float32", three)
        + "</Points>\n<Cells>\n"
        + array("connectivity", np.arange(4, dtype=np.int32), "Int32")
        + array("offsets", np.array([4], np.int32), "Int32")
        + array("types", np.array([10], np.int32), "Int32")
        + "</Cells>\n<PointData>\n"
        + array("displacement", u[: 4 - short], "Float32", three, np.array([u.size], "<f4").tobytes())
        + "</PointData>\n</Piece>\n</UnstructuredGrid>\n</VTKFile>\n"
    )
    if short:
        with pytest.raises(InputError, match="'displacement' has 9 values; 12 are needed"):
            unturn.read(path)
        return
    result = unturn.read(path)
    np.testing.assert_array_equal(result.point_data["displacement"], u)
    np.testing.assert_array_equal(result.points, points)


def xdmf(topology: str, rows: np.ndarray, points: np.ndarray, values: np.ndarray, more: str = "") -> str:
    def item(a: np.ndarray, kind: str = "") -> str:
        return f'<DataItem Dimensions="{a.shape[0]} {a.shape[1]}"{kind} Format="XML">{text(a)}</DataItem>'

    return (
        '<?xml version="1.0"?>\n<!DOCTYPE Xdmf SYSTEM "Xdmf.dtd" []>\n<Xdmf Version="3.0"><Domain>'
        f'<Grid Name="mesh" GridType="Uniform"><Topology TopologyType="{topology}" '
        f'NumberOfElements="{len(rows)}" NodesPerElement="{rows.shape[1]}">'
        + item(rows, ' NumberType="Int"')
        + f'</Topology><Geometry GeometryType="XYZ">{item(points)}</Geometry>'
        + f'<Attribute Name="u" AttributeType="Vector" Center="Node">{item(values)}</Attribute>{more}'
        + "</Grid></Domain></Xdmf>"
    )


@pytest.mark.source("DOLFINx 0.11, XDMFFile with Encoding.ASCII: numbers of 16 digits, no Precision stated")
@pytest.mark.parametrize(
    ("topology", "cell_type", "n_nodes"),
    [
        ("Triangle_10", "VTK_LAGRANGE_TRIANGLE", 10),
        ("Quadrilateral_16", "VTK_LAGRANGE_QUADRILATERAL", 16),
        ("Tetrahedron_20", "VTK_LAGRANGE_TETRAHEDRON", 20),
    ],
)
def test_cubic_cells_in_xdmf(topology: str, cell_type: str, n_nodes: int, tmp_path: Path) -> None:
    row = element(cell_type, n_nodes)
    points = np.zeros((n_nodes, 3))
    points[:, : row.dim] = row.nodes @ SLANT[: row.dim, : row.dim].T
    flat = np.array([1.0, 1.0, row.dim == 3])
    path = tmp_path / "u.xdmf"
    path.write_text(xdmf(topology, np.arange(n_nodes)[None], points, displacement(points) * flat))
    result = unturn.read(path)
    assert result.points.dtype == np.float64
    assert "read with all their digits" in result.notes[0]
    at = np.zeros((1, 3))
    at[0, : row.dim] = SLANT[: row.dim, : row.dim] @ row.centroid
    held = slice(0, 6) if row.dim == 3 else [0, 1, 3]
    found = unturn.strain(result, measures=["strain"]).cell_data["strain"]
    np.testing.assert_allclose(found[:, held], expected_strain(at)[:, held], atol=1e-15)


@pytest.mark.source("DOLFIN 2019.2, XDMFFile.write_checkpoint of a quadratic function on linear cells")
def test_a_function_of_higher_degree_than_its_mesh_is_named_in_the_refusal(tmp_path: Path) -> None:
    def item(values: np.ndarray, kind: str) -> str:
        return f'<DataItem Dimensions="{len(values)} 1" NumberType="{kind}" Precision="8">{text(values)}</DataItem>'

    function = (
        '<Attribute ItemType="FiniteElementFunction" ElementFamily="CG" ElementDegree="2" '
        'ElementCell="triangle" Name="w" Center="Other" AttributeType="Vector">'
        + item(np.arange(12), "UInt") + item(np.linspace(0, 1e-3, 12), "Float")
        + item(np.array([0, 12]), "UInt") + item(np.array([0]), "UInt") + "</Attribute>"
    )  # fmt: skip
    points = np.array([[0, 0, 0], [1, 0, 0], [0, 1, 0.0]])
    path = tmp_path / "u.xdmf"
    whole = xdmf("Triangle", np.array([[0, 1, 2]]), points, points, function)
    before, rest = whole.split('<Attribute Name="u"', 1)
    path.write_text(before + rest.split("</Attribute>", 1)[1])
    with pytest.raises(DisplacementError, match=r"Not used: the finite-element function 'w' \(CG 2\)"):
        unturn.strain(unturn.read(path))


@pytest.mark.source("MFEM 4.10 and NGSolve 6.2.2608: one component along a mesh of lines on the x axis")
@pytest.mark.parametrize("shape", [(-1,), (-1, 1)])
def test_a_bar_along_x_has_one_component(shape: tuple[int, ...], tmp_path: Path) -> None:
    x = np.array([0.0, 0.5, 1.25])
    points = np.stack([x, 0 * x, 0 * x], axis=1)
    block = unturn.CellBlock("line", np.array([[0, 1], [1, 2]]), np.array([0, 1]))
    u = (1e-3 * x * x).reshape(shape)
    for name in (None, "u"):
        found = unturn.strain(unturn.Result(points, (block,), {"u": u}), displacement=name)
        np.testing.assert_allclose(found.cell_data["strain"][:, 0], [0.5e-3, 1.75e-3], atol=1e-18)
    with pytest.raises(DisplacementError, match="no displacement found"):
        unturn.strain(unturn.Result(points[:, [1, 0, 2]], (block,), {"u": u}))
    with pytest.raises(DisplacementError, match="no displacement found"):
        unturn.strain(unturn.Result(points, (block,), {"temperature": u}))


# Source: gmsh 4.15.2, getElementProperties(type): local coordinates of the nodes in units of 1 / order, a digit each.
MSH_NODES: dict[int, tuple[str, int, str]] = {
    25: (
        "VTK_LAGRANGE_TRIANGLE",
        5,
        "00 50 05 10 20 30 40 41 32 23 14 04 03 02 01 11 31 13 21 22 12",
    ),
    37: (
        "VTK_LAGRANGE_QUADRILATERAL",
        4,
        "00 40 44 04 10 20 30 41 42 43 34 24 14 03 02 01 11 31 33 13 21 32 23 12 22",
    ),
    30: (
        "VTK_LAGRANGE_TETRAHEDRON",
        4,
        "000 400 040 004 100 200 300 310 220 130 030 020 010 003 002 001 013 022 031 103 202 301 110 120 210 "
        "101 201 102 011 012 021 112 211 121 111",
    ),
    92: (
        "VTK_LAGRANGE_HEXAHEDRON",
        3,
        "000 300 330 030 003 303 333 033 100 200 010 020 001 002 310 320 301 302 230 130 331 332 031 032 103 "
        "203 013 023 313 323 233 133 110 120 220 210 101 201 202 102 011 012 022 021 311 321 322 312 231 131 "
        "132 232 113 213 223 123 111 211 221 121 112 212 222 122",
    ),
    93: (
        "VTK_LAGRANGE_HEXAHEDRON",
        4,
        "000 400 440 040 004 404 444 044 100 200 300 010 020 030 001 002 003 410 420 430 401 402 403 340 240 "
        "140 441 442 443 041 042 043 104 204 304 014 024 034 414 424 434 344 244 144 110 130 330 310 120 230 "
        "320 210 220 101 301 303 103 201 302 203 102 202 011 013 033 031 012 023 032 021 022 411 431 433 413 "
        "421 432 423 412 422 341 141 143 343 241 142 243 342 242 114 314 334 134 214 324 234 124 224 111 311 "
        "331 131 113 313 333 133 211 121 112 321 312 231 332 132 213 123 323 233 221 212 122 322 232 223 222",
    ),
}


@pytest.mark.source(
    "gmsh 4.15.2: view.addModelData(..., 'NodeData') written in MSH 2.2 over elements of higher order"
)
@pytest.mark.parametrize("kind", MSH_NODES)
def test_msh_elements_of_higher_order(kind: int, tmp_path: Path) -> None:
    cell_type, order, digits = MSH_NODES[kind]
    lattice = np.array([[int(d) for d in word] for word in digits.split()]) / order
    points = np.zeros((len(lattice), 3))
    dim = lattice.shape[1]
    points[:, :dim] = lattice @ SLANT[:dim, :dim].T
    values = displacement(points) * [1, 1, dim == 3]
    numbers = np.arange(1, len(points) + 1)
    path = tmp_path / "u.msh"
    path.write_text(
        "$MeshFormat\n2.2 0 8\n$EndMeshFormat\n"
        f"$Nodes\n{len(points)}\n"
        + "".join(f"{n} {text(x)}\n" for n, x in zip(numbers, points))
        + f"$EndNodes\n$Elements\n1\n1 {kind} 2 1 1 {text(numbers)}\n$EndElements\n"
        + f'$NodeData\n1\n"displacement"\n1\n0\n3\n0\n3\n{len(points)}\n'
        + "".join(f"{n} {text(u)}\n" for n, u in zip(numbers, values))
        + "$EndNodeData\n"
    )
    result = unturn.read(path)
    assert [b.cell_type for b in result.blocks] == [cell_type]
    assert result.notes == ()
    shape = element(cell_type, len(points)).shape
    box = (shape.centroid - shape.vertices.min(axis=0)) / np.ptp(shape.vertices, axis=0)
    at = np.zeros((1, 3))
    at[0, :dim] = SLANT[:dim, :dim] @ box
    held = slice(0, 6) if dim == 3 else [0, 1, 3]
    found = unturn.strain(result, measures=["strain"]).cell_data["strain"]
    np.testing.assert_allclose(found[:, held], expected_strain(at)[:, held], atol=1e-15)


@pytest.mark.source(
    "MEDCoupling 9.15, WriteField: MED 4.2; element H27, QU9, P18, TR7, SE2; field DEPL at nodes"
)
@pytest.mark.parametrize(
    ("med_name", "cell_type", "coordinates"),
    [
        ("H27", "hexahedron27", 3),
        ("QU9", "quad9", 2),
        ("P18", "wedge18", 3),
        ("TR7", "triangle7", 2),
        ("SE2", "line", 1),
    ],
)
def test_med_fields_on_full_quadratic_cells_and_bars(
    med_name: str, cell_type: str, coordinates: int, tmp_path: Path
) -> None:
    row = ELEMENTS[cell_type]
    held = SLANT[:coordinates, :coordinates]
    points = row.nodes @ held.T
    slope = 1e-3 * np.array([[1.0, 2, 0], [0.5, -1, 1], [0, 0.25, 3]])[:coordinates, :coordinates]
    path = tmp_path / "u.med"
    whole = {"NBR": len(points)}
    with h5py.File(path, "w") as file:
        mesh = file.create_group("ENS_MAA/mesh")
        mesh.attrs.update({"DIM": row.dim, "ESP": coordinates, "TYP": 0})
        step = mesh.create_group("-0000000000000000001-0000000000000000001")
        step.create_dataset("NOE/COO", data=points.T.ravel()).attrs.update(whole)
        nodes = step.create_dataset(f"MAI/{med_name}/NOD", data=np.arange(1, len(points) + 1))
        nodes.attrs["NBR"] = 1
        file.create_group("FAS/mesh/FAMILLE_ZERO").attrs["NUM"] = 0
        field = file.create_group("CHA/DEPL")
        field.attrs.update({"MAI": b"mesh", "NCO": coordinates, "TYP": 6})
        at = field.create_group("0000000000000000000100000000000000000000")
        at.attrs.update({"NDT": 1, "NOR": 0, "PDT": 1.0})
        at.create_group("NOE").attrs["PFL"] = np.bytes_(b"MED_NO_PROFILE_INTERNAL")
        values = at.create_group("NOE/MED_NO_PROFILE_INTERNAL")
        values.attrs.update(whole)
        values.create_dataset("CO", data=(points @ slope.T).T.ravel())
    result = unturn.read(path)
    assert [b.cell_type for b in result.blocks] == [cell_type]
    found = unturn.strain(result, measures=["strain"]).cell_data["strain"][0]
    expected = np.zeros((3, 3))
    expected[:coordinates, :coordinates] = (slope + slope.T) / 2
    seen = {1: [0], 2: [0, 1, 3], 3: [0, 1, 2, 3, 4, 5]}[coordinates]
    flat = expected[[0, 1, 2, 0, 1, 0], [0, 1, 2, 1, 2, 2]]
    np.testing.assert_allclose(found[seen], flat[seen], atol=1e-15)


def test_a_result_whose_cells_xdmf_cannot_name_goes_to_vtu() -> None:
    cubic = CellBlock("VTK_LAGRANGE_TRIANGLE", np.arange(10)[None], np.array([0]))
    linear = CellBlock("triangle", np.arange(3)[None], np.array([0]))
    for block, single, series in ((cubic, ".vtu", ".pvd"), (linear, ".xdmf", ".xdmf")):
        result = Result(np.random.default_rng(0).normal(size=(10, 3)), (block,))
        assert io.writable_suffix(Path("a.xdmf"), result) == single
        assert io.writable_suffix(Path("a.xdmf"), result, series=True) == series
    assert io.writable_suffix(Path("a.msh"), result) == ".vtu"
