"""XDMF files as other writers lay them out are read right."""

from __future__ import annotations

from pathlib import Path

import h5py
import meshio
import numpy as np
import pytest

from roundtrip import assert_same
from unturn.io import xdmf
from unturn.io.xdmf_mesh import CELLS
from unturn.result import Result, Steps
from xdmf_samples import (
    TRIANGLES,
    assert_bits,
    cell_points,
    everything,
    grid,
    index,
    node_array,
    one_cell,
    temporal,
)

MESH_CELLS = [[0, 1, 2], [1, 3, 2]]
MESH_POINTS = np.array([[0, 0, 0], [1, 0, 0], [0, 1, 0], [1, 1, 0]], dtype=float)
INCLUDE = "<xi:include xpointer='{}'/>"


def read(path: Path, step: int = 0) -> Result:
    return xdmf.open_file(path).read(step)


def assert_two_triangles(result: Result) -> None:
    assert [b.cell_type for b in result.blocks] == ["triangle"]
    assert result.blocks[0].connectivity.tolist() == MESH_CELLS
    np.testing.assert_array_equal(result.points, MESH_POINTS)


# One grid


@pytest.mark.parametrize("version", ["2.0", "2.2", "3.0"])
def test_a_grid_with_numbers_in_the_xml(version: str, tmp_path: Path) -> None:
    found = read(index(tmp_path, grid(node_array("t", "1 2.5 -3e2 nan")), version=version))
    assert_two_triangles(found)
    assert_bits(found.point_data["t"], np.array([1, 2.5, -300, np.nan]))
    assert found.point_dimension == 2
    assert found.steps is None
    assert found.format_name == "XDMF"


def test_a_file_without_version_and_with_a_document_type(tmp_path: Path) -> None:
    path = index(tmp_path, grid(), head='<!DOCTYPE Xdmf SYSTEM "Xdmf.dtd" [<!ENTITY heavy "a.h5">]>')
    path.write_text(path.read_text().replace(' Version="3.0"', "").replace('Name="g"', 'Name="&heavy;"'))
    assert_two_triangles(read(path))


def test_a_single_grid_with_a_time(tmp_path: Path) -> None:
    file = xdmf.open_file(index(tmp_path, grid('<Time Value=" 2.5e-1 "/>')))
    assert file.steps == (0.25,)
    assert file.read(0).steps == Steps((0.25,), 0)


@pytest.mark.parametrize(("name", "cell_type", "width"), [(n, t, w) for n, _, t, w in CELLS if w])
def test_every_cell_type_by_every_spelling(name: str, cell_type: str, width: int, tmp_path: Path) -> None:
    short = name.replace("Hexahedron_", "Hex_").replace("Tetrahedron_", "Tet_")
    short = short.replace("Quadrilateral_", "Quad_").replace("Triangle_", "Tri_")
    points = cell_points(cell_type)
    for spelling in (name, name.upper(), short, name.replace("_", "")):
        mesh = (
            f'<Topology Type="{spelling}" NumberOfElements="1"><DataItem Dimensions="{width}" '
            f'NumberType="UInt">{" ".join(map(str, range(width)))}</DataItem></Topology>'
            f'<Geometry Type="XYZ"><DataItem Dimensions="{width} 3" Precision="8">'
            f"{' '.join(map(str, points.ravel()))}</DataItem></Geometry>"
        )
        block = read(index(tmp_path, grid(mesh=mesh))).blocks[0]
        assert block.cell_type == cell_type
        assert block.connectivity.tolist() == [list(range(width))]


def test_mixed_cells_with_points_lines_and_quadratic_cells(tmp_path: Path) -> None:
    stream = "1 1 0  4 0 1 2  4 1 3 2  2 2 0 1  36 0 1 2 4 5 6  34 0 1 4  1 1 3  3 4 0 1 3 2"
    points = "0 0  1 0  0 1  1 1  .5 0  .5 .5  0 .5"
    mesh = (
        f'<Topology TopologyType="Mixed" NumberOfElements="8"><DataItem Dimensions="{len(stream.split())}" '
        f'NumberType="Int">{stream}</DataItem></Topology><Geometry GeometryType="XY">'
        f'<DataItem Dimensions="7 2" Precision="8">{points}</DataItem></Geometry>'
    )
    found = read(index(tmp_path, grid(node_array("n", "0 1 2 3 4 5 6 7", "8", center="Cell"), mesh=mesh)))
    rows = {b.cell_type: (b.connectivity.tolist(), b.index.tolist()) for b in found.blocks}
    assert rows == {
        "vertex": ([[0], [3]], [0, 6]),
        "triangle": ([[0, 1, 2], [1, 3, 2]], [1, 2]),
        "line": ([[0, 1]], [3]),
        "triangle6": ([[0, 1, 2, 4, 5, 6]], [4]),
        "line3": ([[0, 1, 4]], [5]),
        "polygon": ([[0, 1, 3, 2]], [7]),
    }
    assert found.cell_data["n"].tolist() == list(range(8))


def test_long_runs_of_mixed_cells_are_followed(tmp_path: Path) -> None:
    rng = np.random.default_rng(3)
    codes = np.repeat(rng.integers(0, 2, 60), rng.integers(1, 400, 60))
    cells = [rng.integers(0, 4, (3, 4)[c]) for c in codes]
    stream = np.concatenate([[(4, 5)[c], *row] for c, row in zip(codes, cells)])
    mesh = TRIANGLES.replace('"Triangle" NumberOfElements="2" NodesPerElement="3"', '"Mixed"')
    mesh = mesh.replace('"2 3"', f'"{len(stream)}"').replace("0 1 2 1 3 2", " ".join(map(str, stream)))
    found = read(index(tmp_path, grid(mesh=mesh)))
    for block in found.blocks:
        for row, position in zip(block.connectivity, block.index):
            assert row.tolist() == cells[position].tolist()
    assert found.n_cells == len(cells)


# Common practice, no source: a series writer in wide use leaves the count of single points out.
def test_mixed_cells_of_a_writer_that_leaves_the_count_of_points_out(tmp_path: Path) -> None:
    single = '"Triangle" NumberOfElements="2" NodesPerElement="3"'
    mesh = TRIANGLES.replace(single, '"Mixed" NumberOfElements="3"')
    mesh = mesh.replace("0 1 2 1 3 2", "1 2 1 3 4 0 1 2").replace('"2 3"', '"8"')
    found = read(index(tmp_path, grid(mesh=mesh)))
    assert [b.connectivity.tolist() for b in found.blocks] == [[[2], [3]], [[0, 1, 2]]]
    assert "without the count" in found.notes[0]


@pytest.mark.source("meshio 5.3.5, XDMF writer")
def test_mixed_cells_with_points_written_by_meshio(tmp_path: Path) -> None:
    rows = {"vertex": [[2], [3]], "line": [[1, 2]], "triangle": [[0, 1, 2]]}
    meshio.Mesh(MESH_POINTS, [(k, np.array(v)) for k, v in rows.items()]).write(tmp_path / "a.xdmf")
    found = read(tmp_path / "a.xdmf")
    assert {b.cell_type: b.connectivity.tolist() for b in found.blocks} == rows
    assert found.notes == ()


def test_base_offset_is_taken_off(tmp_path: Path) -> None:
    mesh = TRIANGLES.replace("<Topology ", '<Topology BaseOffset="1" ').replace("0 1 2 1 3 2", "1 2 3 2 4 3")
    assert_two_triangles(read(index(tmp_path, grid(mesh=mesh))))


def test_coordinates_in_three_arrays(tmp_path: Path) -> None:
    columns = "".join(
        f'<DataItem Dimensions="4" Precision="8">{c}</DataItem>' for c in ("0 1 0 1", "0 0 1 1")
    )
    third = '<DataItem Dimensions="4" Precision="8">0 0 0 0</DataItem>'
    topology = TRIANGLES.split("<Geometry")[0]
    for kind, inside, dimension in (("X_Y_Z", columns + third, 3), ("X_Y", columns, 2)):
        mesh = f'{topology}<Geometry GeometryType="{kind}">{inside}</Geometry>'
        found = read(index(tmp_path, grid(mesh=mesh)))
        assert_two_triangles(found)
        assert found.point_dimension == dimension


def test_grid_attributes_sets_and_information_go_through(tmp_path: Path) -> None:
    path = index(
        tmp_path,
        grid(
            node_array("load", "1 2 3", "3", center="Grid"),
            '<Set Name="arm" SetType="Cell"><DataItem Dimensions="1" NumberType="Int">1</DataItem></Set>',
            '<Set Name="fixed" SetType="Node"><DataItem Dimensions="2" NumberType="Int">0 2</DataItem></Set>',
            '<Information Name="solver" Value="invented"/>',
        ),
    )
    found = read(path)
    assert found.field_data["load"].tolist() == [1, 2, 3]
    assert {k: v.tolist() for k, v in found.groups.items()} == {"arm": [1]}
    assert found.notes == (
        "Not used: the node set 'fixed' cannot be a cell group; it is written back as it was.",
    )
    xdmf.write(found, tmp_path / "out.xdmf")
    again = read(tmp_path / "out.xdmf")
    assert_same(found, again)
    assert again.notes == found.notes
    assert 'Information Name="solver" Value="invented"' in (tmp_path / "out.xdmf").read_text()


# Arrays


@pytest.mark.parametrize(
    ("kind", "dims", "shape"),
    [
        ("Scalar", "4", (4,)),
        ("Scalar", "4 1", (4,)),
        ("Vector", "4 3", (4, 3)),
        ("Vector", "12", (4, 3)),
        ("Vector", "4 2", (4, 2)),
        ("Tensor", "4 9", (4, 9)),
        ("Tensor", "4 3 3", (4, 9)),
        ("Matrix", "4 6", (4, 6)),
        ("Matrix", "4 2 5", (4, 10)),
    ],
)
def test_shapes_come_in_flat_and_go_out_as_they_were(
    kind: str, dims: str, shape: tuple[int, ...], tmp_path: Path
) -> None:
    n = int(np.prod(shape))
    path = index(tmp_path, grid(node_array("a", " ".join(map(str, range(n))), dims, kind)))
    found = read(path)
    assert_bits(found.point_data["a"], np.arange(n, dtype=float).reshape(shape))
    assert ("point", "a") not in found.component_names
    xdmf.write(found, tmp_path / "out.xdmf")
    text = (tmp_path / "out.xdmf").read_text()
    stated = {"12": "4 3"}.get(dims, dims)
    assert f'<Attribute Name="a" AttributeType="{kind}" Center="Node">' in text
    assert f'Dimensions="{stated}"' in text.split('Name="a"')[1].split("</Attribute>")[0]
    assert_same(found, read(tmp_path / "out.xdmf"))


@pytest.mark.source("XDMF model and format, Attribute: Tensor6 is XX XY XZ YY YZ ZZ")
def test_a_symmetric_tensor_is_put_into_our_order(tmp_path: Path) -> None:
    numbers = " ".join(["11 12 13 22 23 33"] * 4)
    found = read(index(tmp_path, grid(node_array("E", numbers, "4 6", "Tensor6"))))
    assert found.component_names["point", "E"] == ("XX", "YY", "ZZ", "XY", "YZ", "XZ")
    assert found.point_data["E"][0].tolist() == [11, 22, 33, 12, 23, 13]
    xdmf.write(found, tmp_path / "out.xdmf")
    with h5py.File(tmp_path / "out.xdmf.h5") as file:
        assert file["grid_0/E"][0].tolist() == [11, 12, 13, 22, 23, 33]


@pytest.mark.parametrize(
    ("kind", "precision", "dtype"),
    [
        ("Float", 4, "f4"), ("Float", 8, "f8"), ("Int", 1, "i1"), ("Int", 2, "i2"), ("Int", 4, "i4"),
        ("Int", 8, "i8"), ("UInt", 1, "u1"), ("UInt", 2, "u2"), ("UInt", 4, "u4"), ("UInt", 8, "u8"),
        ("Char", 1, "i1"), ("UChar", 1, "u1"), ("Char", "", "i1"), ("UChar", "", "u1"), ("Int", "", "i4"),
        ("Float", "", "f4"), ("UInt", "", "u4"),
    ],
)  # fmt: skip
@pytest.mark.parametrize("word", ["NumberType", "DataType"])
def test_number_types(kind: str, precision: int | str, dtype: str, word: str, tmp_path: Path) -> None:
    stated = f' Precision="{precision}"' if precision else ""
    item = f'<DataItem {word}="{kind}"{stated} Dimensions="4" Format="XML">1 2 3 4</DataItem>'
    array = node_array("a", "1 2 3 4")
    array = array[: array.index("<DataItem")] + item + "</Attribute>"
    found = read(index(tmp_path, grid(array)))
    assert_bits(found.point_data["a"], np.array([1, 2, 3, 4], dtype))
    assert found.notes == ()


def test_extreme_whole_numbers_in_xml_are_exact(tmp_path: Path) -> None:
    low, high = -(2**63), 2**64 - 1
    arrays = node_array("low", f"{low} 1 2 9007199254740993") + node_array("high", f"{high} 1 2 3")
    arrays = arrays.replace("Precision", 'NumberType="Int" Precision', 1)
    arrays = arrays.replace('"4" Precision="8"', '"4" NumberType="UInt" Precision="8"')
    found = read(index(tmp_path, grid(arrays)))
    assert_bits(found.point_data["low"], np.array([low, 1, 2, 9007199254740993], np.int64))
    assert_bits(found.point_data["high"], np.array([high, 1, 2, 3], np.uint64))


def test_all_digits_are_read_where_no_precision_is_stated(tmp_path: Path) -> None:
    array = node_array("u", "0.123456789012 1 2 3").replace(' Precision="8"', "")
    found = read(index(tmp_path, grid(array)))
    assert_bits(found.point_data["u"], np.array([0.123456789012, 1, 2, 3]))
    assert "read with all their digits" in found.notes[0]
    plain = node_array("u", "0.1 0.10000000149011612 2.5e-3 nan").replace(' Precision="8"', "")
    assert read(index(tmp_path, grid(plain))).notes == ()


# Where the numbers are


def hdf_array(text: str, dims: str, name: str = "u", kind: str = "Vector") -> str:
    return (
        f'<Attribute Name="{name}" AttributeType="{kind}" Center="Node">'
        f'<DataItem Dimensions="{dims}" Format="HDF">{text}</DataItem></Attribute>'
    )


@pytest.mark.parametrize("dtype", ["f4", "f8", ">f8", "i1", "u8", "i4", ">i2"])
@pytest.mark.parametrize("text", ["a.h5:/Function/u/0", " a.h5:Function/u/0\n", "./a.h5:/Function/u/0"])
def test_hdf5_keeps_its_own_number_type(dtype: str, text: str, tmp_path: Path) -> None:
    values = np.arange(12).reshape(4, 3).astype(dtype)
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["/Function/u/0"] = values
    found = read(index(tmp_path, grid(hdf_array(text, "4 3"))))
    assert_bits(found.point_data["u"], values.astype(values.dtype.newbyteorder("=")))


def test_hdf5_in_another_folder_by_absolute_path(tmp_path: Path) -> None:
    (tmp_path / "heavy").mkdir()
    with h5py.File(tmp_path / "heavy" / "a.h5", "w") as file:
        file["u"] = np.arange(4.0)
    found = read(index(tmp_path, grid(hdf_array(f"{tmp_path}/heavy/a.h5:u", "4", kind="Scalar"))))
    assert found.point_data["u"].tolist() == [0, 1, 2, 3]


@pytest.mark.parametrize(("endian", "order"), [("Big", ">"), ("Little", "<"), ("Native", "=")])
@pytest.mark.parametrize("seek", [0, 5])
def test_binary_with_byte_order_offset_and_path(
    endian: str, order: str, seek: int, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / "heavy").mkdir()
    (tmp_path / "elsewhere").mkdir()
    values = np.array([1, -2, 3.5, np.nan])
    raw = b"x" * seek + values.astype(f"{order}f8").tobytes() + b"tail"
    (tmp_path / "heavy" / "a.bin").write_bytes(raw)
    item = f'Endian="{endian}" Seek="{seek}" Format="Binary">heavy/a.bin<'
    array = node_array("u", "@").replace('Format="XML">@<', item)
    path = index(tmp_path, grid(array))
    monkeypatch.chdir(tmp_path / "elsewhere")
    assert_bits(read(path).point_data["u"], values)


def test_hyperslab_of_hdf5_and_of_xml(tmp_path: Path) -> None:
    whole = np.arange(5 * 4 * 6, dtype=float).reshape(5, 4, 6)
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["all"] = whole
    xml = f'<DataItem Dimensions="5 4 6" Precision="8">{" ".join(map(str, whole.ravel()))}</DataItem>'
    hdf = '<DataItem Dimensions="5 4 6" Format="HDF">a.h5:/all</DataItem>'
    for source in (xml, hdf):
        item = (
            '<DataItem ItemType="HyperSlab" Dimensions="4 3"><DataItem Dimensions="3 3" NumberType="Int">'
            f"2 0 1  1 1 2  1 4 3</DataItem>{source}</DataItem>"
        )
        array = f'<Attribute Name="u" AttributeType="Vector" Center="Node">{item}</Attribute>'
        assert_bits(read(index(tmp_path, grid(array))).point_data["u"], whole[2, :, 1::2])


def test_join_and_coordinates(tmp_path: Path) -> None:
    parts = "".join(f'<DataItem Dimensions="4" Precision="8">{10 * k} 1 2 3</DataItem>' for k in range(3))
    join = f'<DataItem ItemType="Function" Function="JOIN($0 , $2, $1)" Dimensions="4 3">{parts}</DataItem>'
    picks = (
        '<DataItem ItemType="Coordinates" Dimensions="4"><DataItem Dimensions="4 2" NumberType="Int">'
        "0 0 1 1 0 1 1 0</DataItem>"
        '<DataItem Dimensions="2 2" Precision="8">5 6 7 8</DataItem></DataItem>'
    )
    vector = f'<Attribute Name="u" AttributeType="Vector">{join}</Attribute>'
    found = read(index(tmp_path, grid(vector, f'<Attribute Name="t">{picks}</Attribute>')))
    assert found.point_data["u"].tolist() == [[0, 20, 10], [1, 1, 1], [2, 2, 2], [3, 3, 3]]
    assert found.point_data["t"].tolist() == [5, 8, 6, 7]


@pytest.mark.parametrize(
    "reference",
    [
        '<DataItem Reference="XML">/Xdmf/Domain/DataItem[@Name="shared"]</DataItem>',
        '<DataItem Reference="XML">\n /Xdmf/Domain/DataItem[1]\n</DataItem>',
        "<DataItem Reference=\"/Xdmf/Domain/DataItem[@Name='shared']\"/>",
        '<DataItem Reference="XML">//DataItem[@Name="shared"]</DataItem>',
    ],
)
def test_references_to_a_data_item(reference: str, tmp_path: Path) -> None:
    shared = '<DataItem Name="shared" Dimensions="4" Precision="8">4 3 2 1</DataItem>'
    found = read(index(tmp_path, shared, grid(f'<Attribute Name="t">{reference}</Attribute>')))
    assert found.point_data["t"].tolist() == [4, 3, 2, 1]


def test_references_to_topology_and_geometry(tmp_path: Path) -> None:
    mesh = '<Topology Reference="/Xdmf/Domain/Topology"/>'
    mesh += '<Geometry Reference="XML">/Xdmf/Domain/Geometry</Geometry>'
    assert_two_triangles(read(index(tmp_path, TRIANGLES, grid(mesh=mesh))))


# Structured meshes


@pytest.mark.derived("a grid of 3 x 2 x 2 points: two unit cubes along x, or boxes of 2 x 3 x 4")
@pytest.mark.parametrize(
    ("kind", "geometry"),
    [
        ("3DRectMesh", ("VXVYVZ", "0 2 4", "0 3", "0 4")),
        ("3DCoRectMesh", ("ORIGIN_DXDYDZ", "0 0 0", "4 3 2")),
        ("3DSMesh", ("XYZ", " ".join(f"{x} {y} {z}" for z in (0, 4) for y in (0, 3) for x in (0, 2, 4)))),
    ],
)
def test_structured_meshes_become_hexahedra(kind: str, geometry: tuple[str, ...], tmp_path: Path) -> None:
    items = "".join(
        f'<DataItem Dimensions="{len(g.split())}" Precision="8">{g}</DataItem>' for g in geometry[1:]
    )
    mesh = f'<Topology TopologyType="{kind}" Dimensions="2 2 3"/>'
    mesh += f'<Geometry GeometryType="{geometry[0]}">{items}</Geometry>'
    number = " ".join(map(str, range(12)))
    found = read(
        index(
            tmp_path,
            grid(node_array("n", number, "2 2 3"), node_array("c", "7 8", "1 1 2", center="Cell"), mesh=mesh),
        )
    )
    assert [b.cell_type for b in found.blocks] == ["hexahedron"]
    corners = found.points[found.blocks[0].connectivity[1]]
    np.testing.assert_array_equal(
        corners,
        np.array([[0, 0, 0], [1, 0, 0], [1, 1, 0], [0, 1, 0], [0, 0, 1], [1, 0, 1], [1, 1, 1], [0, 1, 1]])
        * [2, 3, 4]
        + [2, 0, 0],
    )
    assert found.point_data["n"].tolist() == list(range(12))
    assert found.cell_data["c"].tolist() == [7, 8]
    assert len(found.notes) == (kind == "3DCoRectMesh")


def test_a_plane_structured_mesh_becomes_quads(tmp_path: Path) -> None:
    mesh = (
        '<Topology TopologyType="2DSMesh" NumberOfElements="2 3"/><Geometry GeometryType="XY">'
        '<DataItem Dimensions="2 3 2" Precision="8">0 0 1 0 2 0 0 1 1 1 2 1</DataItem></Geometry>'
    )
    found = read(index(tmp_path, grid(mesh=mesh)))
    assert found.blocks[0].connectivity.tolist() == [[0, 1, 4, 3], [1, 2, 5, 4]]


# Finite-element functions


def fe_function(items: str, family: str, degree: int, kind: str = "Scalar") -> str:
    return (
        f'<Attribute ItemType="FiniteElementFunction" ElementFamily="{family}" ElementDegree="{degree}" '
        f'ElementCell="triangle" Name="f" Center="Other" AttributeType="{kind}">{items}</Attribute>'
    )


def numbers(text: str, kind: str = "UInt") -> str:
    precision = ' Precision="8"' if kind == "Float" else ""
    return (
        f'<DataItem Dimensions="{len(text.split())} 1" NumberType="{kind}"{precision} Format="XML">'
        f"{text}</DataItem>"
    )


# Source: XDMF model and format, finite-element functions; the layout with offsets and cell numbers is that
# of DOLFIN 2019.1 checkpoints.
def test_a_linear_vector_function_comes_to_the_points(tmp_path: Path) -> None:
    dofs = "4 0 2  5 1 3   0 6 2  1 7 3"
    items = numbers(dofs) + numbers("10 11 20 21 0 1 30 31", "Float") + numbers("0 6 12") + numbers("0 1")
    found = read(index(tmp_path, grid(fe_function(items, "CG", 1, "Vector"))))
    assert found.point_data["f"].tolist() == [[0, 1], [10, 11], [20, 21], [30, 31]]
    swapped = numbers("0 6 2  1 7 3   4 0 2  5 1 3") + items[items.index("</DataItem>") + 11 :]
    swapped = swapped.replace(">0 1<", ">1 0<")
    again = read(index(tmp_path, grid(fe_function(swapped, "CG", 1, "Vector"))))
    assert_bits(again.point_data["f"], found.point_data["f"])


@pytest.mark.source("unified form-assembly code 2.0, numbering: edge i lies across from vertex i")
def test_a_quadratic_function_on_quadratic_cells(tmp_path: Path) -> None:
    points = cell_points("triangle6")[:, :2]
    mesh = (
        '<Topology TopologyType="Triangle_6"><DataItem Dimensions="1 6" NumberType="Int">'
        "0 1 2 3 4 5</DataItem></Topology>"
        '<Geometry GeometryType="XY"><DataItem Dimensions="6 2" Precision="8">'
        f"{' '.join(map(str, points.ravel()))}</DataItem></Geometry>"
    )
    corners = points[:3]
    places = np.concatenate([corners, [(corners[1] + corners[2]) / 2, corners[2] / 2, corners[1] / 2]])
    values = places[:, 0] + 10 * places[:, 1]
    items = numbers("0 1 2 3 4 5") + numbers(" ".join(map(str, values)), "Float")
    found = read(index(tmp_path, grid(fe_function(items, "Lagrange", 2), mesh=mesh)))
    np.testing.assert_array_equal(found.point_data["f"], points[:, 0] + 10 * points[:, 1])


def test_a_constant_function_comes_to_the_cells(tmp_path: Path) -> None:
    items = numbers("1 0") + numbers("7 8", "Float") + numbers("1 1")
    assert read(index(tmp_path, grid(fe_function(items, "DG", 0)))).cell_data["f"].tolist() == [8, 7]


@pytest.mark.parametrize(("family", "degree"), [("CG", 2), ("DG", 1), ("N1curl", 1), ("CG", 3)])
def test_other_functions_are_kept_for_writing_and_mentioned(family: str, degree: int, tmp_path: Path) -> None:
    items = numbers("0 1 2 3 4 5 6 7 8 9 10 11") + numbers(" ".join(map(str, range(12))), "Float")
    found = read(index(tmp_path, grid(fe_function(items, family, degree))))
    assert "f" not in found.point_data
    kept = f"Not used: the finite-element function 'f' ({family.upper()} {degree}); "
    assert found.notes == (kept + "it is written back as it was.",)
    xdmf.write(found, tmp_path / "out.xdmf")
    assert read(tmp_path / "out.xdmf").notes == found.notes
    with h5py.File(tmp_path / "out.xdmf.h5") as file:
        assert file["grid_0/data_1"][:, 0].tolist() == list(range(12))


# Series


def test_each_step_with_a_mesh_of_its_own(tmp_path: Path) -> None:
    other = TRIANGLES.replace("0 1 2 1 3 2", "1 3 2 0 1 2")
    path = index(
        tmp_path,
        temporal(
            grid('<Time Value="0"/>', node_array("u", "0 0 0 0")),
            grid('<Time Value="1.5"/>', node_array("u", "1 1 1 1"), mesh=other),
        ),
    )
    file = xdmf.open_file(path)
    assert file.steps == (0.0, 1.5)
    assert file.read(0).blocks[0].connectivity.tolist() == MESH_CELLS
    assert file.read(1).blocks[0].connectivity.tolist() == MESH_CELLS[::-1]
    assert file.read(1).point_data["u"].tolist() == [1, 1, 1, 1]
    assert file.read(1).steps == Steps((0.0, 1.5), 1)


@pytest.mark.parametrize(
    "pointer",
    [
        'xpointer(//Grid[@Name="mesh"]/*[self::Topology or self::Geometry])',
        'xpointer(/Xdmf/Domain/Grid[@Name="mesh"]/*[self::Topology or self::Geometry])',
        'xpointer(/Xdmf/Domain/Grid[@GridType="Uniform"][1]/*[self::Topology or self::Geometry])',
    ],
)
@pytest.mark.parametrize("space", ["2001", "2003"])
def test_steps_that_include_a_mesh_beside_the_series(pointer: str, space: str, tmp_path: Path) -> None:
    steps = [
        f'<Grid Name="u" GridType="Uniform">{INCLUDE.format(pointer)}<Time Value="{k}"/>'
        f"{node_array('u', f'{k} 1 2 3')}</Grid>"
        for k in range(3)
    ]
    path = index(tmp_path, grid(name="mesh"), temporal(*steps))
    path.write_text(path.read_text().replace("/2001/", f"/{space}/"))
    file = xdmf.open_file(path)
    assert file.steps == (0.0, 1.0, 2.0)
    for k in range(3):
        found = file.read(k)
        assert_two_triangles(found)
        assert found.point_data["u"].tolist() == [k, 1, 2, 3]
        assert found.notes == ()
        assert found.groups == {}


@pytest.mark.parametrize(
    "pointer", ["element(/1/1/1/1/1)", "xpointer(//Grid[@Name='steps']/Grid[1]/Topology)"]
)
def test_steps_that_include_the_first_step(pointer: str, tmp_path: Path) -> None:
    geometry = pointer.replace("/1/1/1/1/1)", "/1/1/1/1/2)").replace("Topology", "Geometry")
    include = f'<xi:include xpointer="{pointer}"/><xi:include xpointer="{geometry}"/>'
    second = f'<Grid Name="b" GridType="Uniform"><Time Value="2"/>{include}</Grid>'
    file = xdmf.open_file(index(tmp_path, temporal(grid('<Time Value="1"/>'), second)))
    assert_two_triangles(file.read(1))


def test_several_functions_in_series_of_their_own_are_joined_by_time(tmp_path: Path) -> None:
    include = INCLUDE.format('xpointer(/Xdmf/Domain/Grid[@Name="mesh"]/*[self::Topology or self::Geometry])')

    def one(name: str, time: float) -> str:
        return f"<Grid>{include}<Time Value='{time}'/>{node_array(name, f'{time} 0 0 0')}</Grid>"

    tags = node_array("tag", "5 6", "2", center="Cell")
    path = index(
        tmp_path,
        grid(tags, name="mesh"),
        temporal(one("u", 0.0), one("u", 1.0), name="u"),
        temporal(one("p", 1.0), name="p"),
    )
    file = xdmf.open_file(path)
    assert file.steps == (0.0, 1.0)
    assert set(file.read(0).point_data) == {"u"}
    found = file.read(1)
    assert_two_triangles(found)
    assert {k: v[0] for k, v in found.point_data.items()} == {"u": 1.0, "p": 1.0}
    assert found.cell_data["tag"].tolist() == [5, 6]


def test_an_array_missing_in_a_step_never_keeps_its_old_value(tmp_path: Path) -> None:
    file = xdmf.open_file(
        index(
            tmp_path,
            temporal(
                grid('<Time Value="0"/>', node_array("u", "1 1 1 1"), node_array("p", "2 2 2 2")),
                grid('<Time Value="1"/>', node_array("u", "3 3 3 3")),
            ),
        )
    )
    assert set(file.read(0).point_data) == {"u", "p"}
    assert set(file.read(1).point_data) == {"u"}


@pytest.mark.parametrize(
    ("time", "expected"),
    [
        (
            '<Time TimeType="List"><DataItem Dimensions="3" Precision="8">0 0.5 4</DataItem></Time>',
            (0.0, 0.5, 4.0),
        ),
        (
            '<Time TimeType="HyperSlab"><DataItem Dimensions="3" Precision="8">1 0.5 3</DataItem></Time>',
            (1.0, 1.5, 2.0),
        ),
        ("", (0.0, 1.0, 2.0)),
    ],
)
def test_times_of_the_whole_series(time: str, expected: tuple[float, ...], tmp_path: Path) -> None:
    file = xdmf.open_file(index(tmp_path, temporal(time, grid(), grid(), grid())))
    assert file.steps == expected
    assert len(file.read(1).notes) == (not time)


def test_steps_in_files_of_their_own(tmp_path: Path) -> None:
    (tmp_path / "parts").mkdir()
    for k in range(2):
        with h5py.File(tmp_path / "parts" / f"{k}.h5", "w") as file:
            file["u"] = np.full(4, float(k))
        part = index(tmp_path / "parts", grid(f'<Time Value="{k}"/>', hdf_array(f"{k}.h5:u", "4")))
        part.rename(tmp_path / "parts" / f"{k}.xdmf")
    includes = [
        f'<xi:include href="parts/{k}.xdmf" xpointer="xpointer(/Xdmf/Domain/Grid)"/>' for k in range(2)
    ]
    series = xdmf.open_file(index(tmp_path, temporal(*includes)))
    assert series.steps == (0.0, 1.0)
    assert series.read(1).point_data["u"].tolist() == [1, 1, 1, 1]


# Several grids


def test_a_spatial_collection_becomes_one_mesh_with_groups(tmp_path: Path) -> None:
    both = node_array("u", "1 2 3 4") + node_array("m", "1 2", "2", center="Cell")
    only = node_array("T", "5 6 7 8")
    other = TRIANGLES.replace("0 0 1 0", "9 0 1 0")
    collection = (
        '<Grid Name="all" GridType="Collection" CollectionType="Spatial">'
        f"{grid(both, name='arm')}{grid(both, only, name='foot', mesh=other)}</Grid>"
    )
    found = read(index(tmp_path, collection))
    assert found.n_points == 8
    assert found.blocks[0].connectivity.tolist() == [*MESH_CELLS, [4, 5, 6], [5, 7, 6]]
    assert {k: v.tolist() for k, v in found.groups.items()} == {"arm": [0, 1], "foot": [2, 3]}
    assert found.point_data["u"].tolist() == [1, 2, 3, 4, 1, 2, 3, 4]
    assert found.cell_data["m"].tolist() == [1, 2, 1, 2]
    assert_bits(found.point_data["T"], np.array([np.nan] * 4 + [5, 6, 7, 8]))
    assert found.notes == ("The point array 'T' is not in every grid: NaN where it is missing.",)
    xdmf.write(found, tmp_path / "out.xdmf")
    assert_same(found, read(tmp_path / "out.xdmf"))


def test_grids_on_the_same_points_share_them(tmp_path: Path) -> None:
    lines = (
        '<Topology TopologyType="Polyline" NodesPerElement="2"><DataItem Dimensions="1 2" NumberType="Int">'
        '0 1</DataItem></Topology><xi:include xpointer="xpointer(/Xdmf/Domain/Grid/Geometry)"/>'
    )
    found = read(index(tmp_path, grid(name="mesh"), grid(name="edges", mesh=lines)))
    assert found.n_points == 4
    assert [b.cell_type for b in found.blocks] == ["triangle", "line"]
    assert {k: v.tolist() for k, v in found.groups.items()} == {"mesh": [0, 1], "edges": [2]}


def test_a_series_of_spatial_collections(tmp_path: Path) -> None:
    other = TRIANGLES.replace("1 1<", "2 2<")

    def step(time: int) -> str:
        return (
            f'<Grid GridType="Collection" CollectionType="Spatial"><Time Value="{time}"/>'
            f"{grid(node_array('u', f'{time} 0 0 0'), name='a')}"
            f"{grid(node_array('u', f'{time} 9 9 9'), name='b', mesh=other)}</Grid>"
        )

    file = xdmf.open_file(index(tmp_path, temporal(step(0), step(3))))
    assert file.steps == (0.0, 3.0)
    assert file.read(1).point_data["u"].tolist() == [3, 0, 0, 0, 3, 9, 9, 9]


def test_a_mesh_of_its_own_beside_a_series_is_left_out_and_mentioned(tmp_path: Path) -> None:
    file = xdmf.open_file(
        index(
            tmp_path,
            grid(name="undeformed"),
            temporal(grid('<Time Value="0"/>', mesh=TRIANGLES.replace("1 1<", "2 2<"))),
        )
    )
    found = file.read(0)
    assert found.n_cells == 2
    assert "'undeformed' lies outside the time steps" in found.notes[0]


# Other writers


@pytest.mark.source("meshio 5.3.5, TimeSeriesWriter")
def test_a_series_written_by_meshio(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    with meshio.xdmf.TimeSeriesWriter("s.xdmf") as writer:
        writer.write_points_cells(MESH_POINTS, [("triangle", np.array(MESH_CELLS))])
        for k in range(3):
            writer.write_data(
                0.5 * k,
                point_data={"u": np.full((4, 3), float(k))},
                cell_data={"d": [np.array([k, 2 * k])]},
            )
    file = xdmf.open_file(Path("s.xdmf"))
    assert file.steps == (0.0, 0.5, 1.0)
    found = file.read(2)
    assert_two_triangles(found)
    assert_bits(found.point_data["u"], np.full((4, 3), 2.0))
    assert_bits(found.cell_data["d"], np.array([2, 4]))


@pytest.mark.source("meshio 5.3.5, XDMF writer")
@pytest.mark.parametrize("data_format", ["XML", "HDF", "Binary"])
def test_a_file_written_by_meshio(data_format: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    whole = everything()
    names = [n for n in ("u", "single", "two", "nine", "i4", "u8") if data_format != "Binary" or n != "two"]
    data = {n: whole.point_data[n] for n in names}
    if data_format == "XML":
        data = {n: v for n, v in data.items() if v.ndim < 3 and n != "u8"}
    cells = [("tetra", np.array([[0, 1, 2, 3]])), ("hexahedron", np.arange(10, 18)[None])]
    mesh = meshio.Mesh(whole.points, cells, point_data=data, cell_data={"m": [[4], [5]]})
    mesh.write("a.xdmf", data_format=data_format)
    found = read(tmp_path / "a.xdmf")
    assert [b.connectivity.tolist() for b in found.blocks] == [[[0, 1, 2, 3]], [list(range(10, 18))]]
    for name, values in data.items():
        if data_format == "XML":
            np.testing.assert_allclose(
                found.point_data[name], values, rtol=1e-7 if name == "single" else 1e-15
            )
        else:
            assert_bits(found.point_data[name], values)
    assert found.cell_data["m"].tolist() == [4, 5]


@pytest.mark.source("scikit-fem, written through meshio 5.3.5")
def test_a_result_of_a_finite_element_library(tmp_path: Path) -> None:
    skfem = pytest.importorskip("skfem")
    mesh = skfem.MeshTet().refined(1)
    u = mesh.p.T @ np.array([[0.001, 0, 0], [0.0005, 0, 0], [0, 0, 0.002]])
    mesh.save(tmp_path / "a.xdmf", point_data={"u": u})
    found = read(tmp_path / "a.xdmf")
    assert found.blocks[0].connectivity.tolist() == mesh.t.T.tolist()
    assert_bits(found.point_data["u"], u)


def dolfin_like(folder: Path, topology: str, vector: str) -> Path:
    """Write index and HDF5 file as the DOLFIN family does: 64-bit cells, 3 components in the plane."""
    with h5py.File(folder / "u.h5", "w") as file:
        file["/Mesh/mesh/topology"] = np.array(MESH_CELLS, np.int64)
        file["/Mesh/mesh/geometry"] = MESH_POINTS[:, :2]
        for k in range(2):
            file[f"{vector}/{k}"] = np.array([[k, 2 * k, 0]] * 4, float)
    mesh = (
        f'<Grid Name="mesh" GridType="Uniform">{topology}'
        '<DataItem Dimensions="2 3" NumberType="Int" Precision="8" Format="HDF">u.h5:/Mesh/mesh/topology'
        '</DataItem></Topology><Geometry GeometryType="XY"><DataItem Dimensions="4 2" Format="HDF">'
        "u.h5:/Mesh/mesh/geometry</DataItem></Geometry></Grid>"
    )
    include = INCLUDE.format(
        'xpointer(/Xdmf/Domain/Grid[@GridType="Uniform"][1]/*[self::Topology or self::Geometry])'
    )
    steps = [
        f'<Grid Name="u" GridType="Uniform">{include}<Time Value="{k}"/>'
        f'<Attribute Name="u" AttributeType="Vector" Center="Node"><DataItem Dimensions="4 3" Format="HDF">'
        f"u.h5:{vector}/{k}</DataItem></Attribute></Grid>"
        for k in range(2)
    ]
    return index(folder, mesh, temporal(*steps))


# From memory, not looked up: the layouts of DOLFIN 2019.1 and DOLFINx 0.8; the independent check is that the
# numbers come back.
@pytest.mark.parametrize(
    ("topology", "vector"),
    [
        (
            '<Topology NumberOfElements="2" NodesPerElement="3" TopologyType="Triangle">',
            "/VisualisationVector",
        ),
        ('<Topology TopologyType="Triangle" NumberOfElements="2" NodesPerElement="3">', "/Function/u"),
    ],
)
def test_the_layouts_of_the_dolfin_family(topology: str, vector: str, tmp_path: Path) -> None:
    file = xdmf.open_file(dolfin_like(tmp_path, topology, vector))
    found = file.read(1)
    assert_two_triangles(found)
    assert found.point_dimension == 2
    assert found.point_data["u"].tolist() == [[1, 2, 0]] * 4
    xdmf.write(found, tmp_path / "out.xdmf")
    assert_same(found, read(tmp_path / "out.xdmf"))


# Node order


@pytest.mark.source("Exodus II manual: hexahedra and wedges number the upright edges before the top ones")
@pytest.mark.parametrize("cell_type", ["hexahedron20", "wedge15"])
def test_the_other_node_order_is_repaired_and_mentioned(cell_type: str, tmp_path: Path) -> None:
    meant = one_cell(cell_type)
    xdmf.write(meant, tmp_path / "a.xdmf")
    n, ring = (20, 4) if cell_type == "hexahedron20" else (15, 3)
    up, top = list(range(n - ring, n)), list(range(n - 2 * ring, n - ring))
    with h5py.File(tmp_path / "a.xdmf.h5", "a") as file:
        rows = file["grid_0/connectivity"][()]
        file["grid_0/connectivity"][...] = rows[:, [*range(n - 2 * ring), *up, *top]]
    found = read(tmp_path / "a.xdmf")
    assert found.blocks[0].connectivity.tolist() == meant.blocks[0].connectivity.tolist()
    assert f"The nodes of the {cell_type} cells were not in the order" in found.notes[0]


def test_ghost_cells_do_not_count(tmp_path: Path) -> None:
    ghosts = node_array("vtkGhostType", "1 0", "2", center="Cell")
    ghosts = ghosts.replace('Precision="8"', 'NumberType="UChar" Precision="1"')
    found = read(index(tmp_path, grid(ghosts)))
    assert {k: v.tolist() for k, v in found.left_out.items()} == {"ghost": [0]}
