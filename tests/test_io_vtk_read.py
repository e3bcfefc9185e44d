"""Every encoding, version and kind of the VTK family is read right."""

from __future__ import annotations

import itertools
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import pyvista
from vtkmodules.vtkCommonDataModel import vtkDataSetAttributes, vtkImageData

import unturn.io
import vtk_samples as samples
from child_reader import read_in_child
from roundtrip import assert_same
from unturn.errors import InputError
from unturn.io.vtk_result import result_from_vtk

COMPRESSORS = ("None", "ZLib", "LZ4", "LZMA")
ENCODINGS = [
    ("ascii", "None", 32, 1),
    *itertools.product(("binary", "raw", "base64"), COMPRESSORS, (32, 64), (0, 1)),
]


@pytest.mark.parametrize(("mode", "compressor", "header", "order"), ENCODINGS)
def test_every_encoding_of_vtu(mode: str, compressor: str, header: int, order: int, tmp_path: Path) -> None:
    # Source: VTK 9.7 as the writer of every encoding; the data set it was given is the truth.
    grid = samples.without_odd_names(samples.mixed())
    settings = {"HeaderType": header, "ByteOrder": order, "BlockSize": 64}
    path = samples.write_xml(grid, tmp_path / "in.vtu", mode, compressor, **settings)
    assert_same(result_from_vtk(grid), unturn.io.read(path))


@pytest.mark.parametrize("mode", ["ascii", "binary", "raw", "base64"])
@pytest.mark.parametrize("make", [samples.image, samples.rectilinear, samples.structured, samples.poly])
def test_every_other_kind_of_xml(make: Any, mode: str, tmp_path: Path) -> None:
    # Source: VTK 9.7 as the writer.
    data = samples.without_odd_names(make())
    path = samples.write_xml(data, tmp_path / "in.xml", mode, "ZLib" if mode == "base64" else "None")
    assert_same(result_from_vtk(data), unturn.io.read(path))


@pytest.mark.parametrize("version", [42, 51])
@pytest.mark.parametrize("binary", [True, False])
@pytest.mark.parametrize(
    "make",
    [samples.mixed, samples.image, samples.rectilinear, samples.structured, samples.poly, samples.polyhedra],
)
def test_every_kind_of_legacy_file(make: Any, binary: bool, version: int, tmp_path: Path) -> None:
    # Source: VTK 9.7 as the writer. In ASCII it writes 11 digits of a double and 6 of a float, so values are
    # compared to that; everything else must be the same.
    data = make()
    path = samples.write_legacy(data, tmp_path / "in.vtk", binary=binary, version=version)
    meant, found = result_from_vtk(data), unturn.io.read(path)
    if binary:
        assert_same(meant, found, ordered=False)
        return
    assert [b.cell_type for b in meant.blocks] == [b.cell_type for b in found.blocks]
    for a, b in zip(meant.blocks, found.blocks, strict=True):
        assert np.array_equal(a.connectivity, b.connectivity)
    for name, values in meant.point_data.items():
        assert found.point_data[name].dtype == values.dtype
        if values.dtype.kind != "U":
            digits = 1e-5 if values.dtype == np.float32 else 1e-10
            np.testing.assert_allclose(found.point_data[name], values, rtol=digits, atol=1e-30)


def test_a_legacy_file_of_version_3(tmp_path: Path) -> None:
    # Source: VTK User's Guide, "VTK file formats", simple legacy formats, version 3.0.
    (tmp_path / "old.vtk").write_text(
        "# vtk DataFile Version 3.0\nby hand\nASCII\nDATASET UNSTRUCTURED_GRID\nPOINTS 4 float\n"
        "0 0 0  1 0 0  0 1 0  0 0 1\nCELLS 1 5\n4 0 1 2 3\nCELL_TYPES 1\n10\n"
        "POINT_DATA 4\nVECTORS u double\n0 0 0  1 0 0  0 2 0  0 0 3\nSCALARS t float 1\nLOOKUP_TABLE default\n1 2 3 4\n"
    )
    result = unturn.io.read(tmp_path / "old.vtk")
    assert result.blocks[0].cell_type == "tetra"
    assert result.point_data["u"].tolist() == [[0, 0, 0], [1, 0, 0], [0, 2, 0], [0, 0, 3]]
    assert result.point_data["t"].tolist() == [1, 2, 3, 4]


@pytest.mark.parametrize("binary", [True, False])
def test_every_attribute_keyword_of_a_legacy_file(binary: bool, tmp_path: Path) -> None:
    # Source: VTK User's Guide, "VTK file formats", simple legacy formats: data set attributes.
    def numbers(values: list[float], kind: str) -> bytes:
        if binary:
            return np.array(values).astype(kind).tobytes() + b"\n"
        return " ".join(f"{v:g}" for v in values).encode() + b"\n"

    colors = [0, 128, 255] if binary else [0.0, 0.5, 1.0]
    kind = "u1" if binary else ">f4"
    parts = [
        b"# vtk DataFile Version 3.0\nx\n" + (b"BINARY" if binary else b"ASCII"),
        b"\nDATASET POLYDATA\nPOINTS 3 double\n" + numbers([0, 0, 0, 1, 0, 0, 0, 1, 0], ">f8"),
        b"POLYGONS 1 4\n" + numbers([3, 0, 1, 2], ">i4"),
        b"POINT_DATA 3\nSCALARS s float\nLOOKUP_TABLE mine\n" + numbers([1, 2, 3], ">f4"),
        b"LOOKUP_TABLE mine 1\n" + numbers([*colors, colors[-1]], kind),
        b"COLOR_SCALARS c 3\n" + numbers(colors * 3, kind),
        b"VECTORS v double\n" + numbers(list(range(9)), ">f8"),
        b"NORMALS n float\n" + numbers([0, 0, 1] * 3, ">f4"),
        b"TEXTURE_COORDINATES t 2 float\n" + numbers(list(range(6)), ">f4"),
        b"TENSORS w double\n" + numbers(list(range(27)), ">f8"),
        b"CELL_DATA 1\nTENSORS6 six double\n" + numbers(list(range(6)), ">f8"),
        b"FIELD more 2\nf 2 1 int\n"
        + numbers([7, 8], ">i4")
        + b"g 1 1 unsigned_short\n"
        + numbers([9], ">u2"),
    ]
    (tmp_path / "in.vtk").write_bytes(b"".join(parts))
    result = unturn.io.read(tmp_path / "in.vtk")
    assert set(result.point_data) == {"s", "c", "v", "n", "t", "w"}
    assert result.point_data["w"].tolist() == np.arange(27.0).reshape(3, 9).tolist()
    assert result.point_data["c"].shape == (3, 3)
    assert result.cell_data["f"].tolist() == [[7, 8]]
    assert result.cell_data["g"].tolist() == [9]
    assert result.cell_data["six"].size in (6, 9)  # VTK makes nine of TENSORS6


def test_pieces_of_one_vtu_are_put_together(tmp_path: Path) -> None:
    # Source: VTK file format description: a file may have several Pieces.
    piece = (
        '<Piece NumberOfPoints="4" NumberOfCells="1"><PointData><DataArray type="Float64" Name="t" format="ascii">'
        '{t}</DataArray></PointData><Points><DataArray type="Float64" NumberOfComponents="3" format="ascii">'
        '0 0 {z} 1 0 {z} 0 1 {z} 0 0 9</DataArray></Points><Cells><DataArray type="Int32" Name="connectivity" '
        'format="ascii">0 1 2 3</DataArray><DataArray type="Int32" Name="offsets" format="ascii">4</DataArray>'
        '<DataArray type="UInt8" Name="types" format="ascii">10</DataArray></Cells></Piece>'
    )
    text = (
        '<VTKFile type="UnstructuredGrid" version="1.0"><UnstructuredGrid>{}{}</UnstructuredGrid></VTKFile>'
    )
    pieces = [piece.format(t=t, z=z) for t, z in (("1 2 3 4", 0), ("5 6 7 8", 1))]
    (tmp_path / "two.vtu").write_text(text.format(*pieces))
    result = unturn.io.read(tmp_path / "two.vtu")
    assert result.point_data["t"].tolist() == [1, 2, 3, 4, 5, 6, 7, 8]
    assert result.blocks[0].connectivity.tolist() == [[0, 1, 2, 3], [4, 5, 6, 7]]
    other = pieces[1].replace('"t"', '"other"')
    (tmp_path / "odd.vtu").write_text(text.format(pieces[0], other))
    with pytest.raises(InputError, match="piece 1 has other PointData arrays"):
        unturn.io.read(tmp_path / "odd.vtu")


STREAM = (
    '<VTKFile type="UnstructuredGrid" version="0.1"><UnstructuredGrid><Piece NumberOfPoints="27" NumberOfCells="3">'
    '<Points><DataArray type="Float64" NumberOfComponents="3" format="ascii">{points}</DataArray></Points><Cells>'
    '<DataArray type="Int64" Name="connectivity" format="ascii">{nodes}</DataArray>'
    '<DataArray type="Int64" Name="offsets" format="ascii">8 16 24</DataArray>'
    '<DataArray type="UInt8" Name="types" format="ascii">12 42 42</DataArray>'
    '<DataArray type="Int64" Name="faces" format="ascii">{faces}</DataArray>'
    '<DataArray type="Int64" Name="faceoffsets" format="ascii">-1 31 62</DataArray>'
    "</Cells></Piece></UnstructuredGrid></VTKFile>"
)


def test_polyhedra_in_the_older_layout(tmp_path: Path) -> None:
    # Source: VTK file format description up to file version 2.2: faces and faceoffsets.
    grid = samples.polyhedra()
    meant = result_from_vtk(grid)
    faces = "6 4 0 1 4 3 4 9 10 13 12 4 0 1 10 9 4 3 4 13 12 4 0 3 12 9 4 1 4 13 10"
    nodes = " ".join(str(n) for b in meant.blocks for n in b.connectivity.ravel())
    points = " ".join(repr(float(v)) for v in meant.points.ravel())
    text = STREAM.format(points=points, nodes=nodes, faces=f"{faces} {faces}")
    (tmp_path / "in.vtu").write_text(text)
    assert_same(meant, unturn.io.read(tmp_path / "in.vtu"))
    wrong = [text.replace(" 13 10<", new) for new in (" 13 99<", " 13 -1<", " 13<")]
    wrong += [text.replace(">6 4 0", new) for new in (">9 4 0", ">6 90 0", ">-6 4 0", ">6 -4 0")]
    wrong += [text.replace("-1 31 62", new) for new in ("-1 31 61", "-1 62 31", "-1 31 99", "-1 -1 31")]
    paths = [tmp_path / f"{k}.vtu" for k in range(len(wrong))]
    for path, damaged in zip(paths, wrong, strict=True):
        assert damaged != text
        path.write_text(damaged)
    assert {o for o, _ in read_in_child(paths).values()} == {"InputError"}


@pytest.mark.source("VTK 9.7 (through pyvista): its own cells of every grid")
@pytest.mark.parametrize(
    "make",
    [
        samples.image,
        samples.rectilinear,
        samples.structured,
        lambda: samples.structured((4, 3, 1)),
        lambda: samples.structured((4, 1, 3)),
        lambda: samples.structured((1, 4, 3)),
        lambda: samples.structured((1, 4, 1)),
    ],
)
def test_structured_cells_are_those_vtk_has(make: Any) -> None:
    data = make()
    result = result_from_vtk(data)
    grid = pyvista.wrap(data)
    assert np.allclose(result.points, grid.points)
    (block,) = result.blocks
    assert len(block) == grid.n_cells
    for k, nodes in enumerate(block.connectivity):
        assert sorted(nodes) == sorted(grid.get_cell(k).point_ids)
    if block.cell_type == "hexahedron":
        a, b, c = (
            result.points[block.connectivity[:, k]] - result.points[block.connectivity[:, 0]]
            for k in (1, 3, 4)
        )
        volume = np.einsum("ci,ci->c", np.cross(a, b), c)
        assert np.allclose(volume, grid.compute_cell_sizes()["Volume"])
    if block.cell_type == "quad":
        a, b = (
            result.points[block.connectivity[:, k]] - result.points[block.connectivity[:, 0]] for k in (1, 3)
        )
        assert np.allclose(np.linalg.norm(np.cross(a, b), axis=1), grid.compute_cell_sizes()["Area"])


def test_voxels_and_pixels_are_turned() -> None:
    # Source: VTK 9.7, vtkVoxel and vtkPixel: nodes in lexicographic order.
    blocks = {b.index[0]: b for b in result_from_vtk(samples.mixed()).blocks}
    assert blocks[2].cell_type == "hexahedron"
    assert blocks[2].connectivity.tolist() == [[1, 2, 5, 4, 10, 11, 14, 13]]
    assert blocks[8].cell_type == "quad"
    assert blocks[8].connectivity.tolist() == [[3, 4, 7, 6]]


def test_polydata_cells_are_in_vtks_order() -> None:
    # Source: VTK 9.7, vtkPolyData: cells are numbered verts, lines, polys, strips.
    result = result_from_vtk(samples.poly())
    kinds = {int(i): b.cell_type for b in result.blocks for i in b.index}
    assert [kinds[i] for i in range(7)] == [
        "vertex", "line", "VTK_POLY_LINE", "triangle", "quad", "polygon", "VTK_TRIANGLE_STRIP",
    ]  # fmt: skip


@pytest.mark.source("VTK 9.7, vtkDataSetAttributes: bits of vtkGhostType")
def test_ghost_and_hidden_cells_are_left_out() -> None:
    grid = samples.mixed()
    flags = np.zeros(grid.GetNumberOfCells(), np.uint8)
    flags[1], flags[3], flags[4] = 1, 8, 32 | 1
    array = pyvista.convert_array(flags, name="vtkGhostType")
    grid.GetCellData().AddArray(array)
    left_out = {k: v.tolist() for k, v in result_from_vtk(grid).left_out.items()}
    assert left_out == {"ghost": [1, 4], "refined": [3], "hidden": [4]}
    assert (vtkDataSetAttributes.DUPLICATECELL, vtkDataSetAttributes.REFINEDCELL) == (1, 8)
    assert (vtkDataSetAttributes.HIDDENCELL, vtkDataSetAttributes.HIDDENPOINT) == (32, 2)


@pytest.mark.source("VTK 9.7, vtkImageData: a cell with a blanked point is not visible")
def test_cells_at_hidden_points_are_left_out() -> None:
    data = vtkImageData()
    data.SetDimensions(3, 2, 2)
    data.BlankPoint(0)
    data.GetPointData().GetArray("vtkGhostType")
    result = result_from_vtk(data)
    visible = [data.IsCellVisible(k) for k in range(2)]
    assert result.left_out["hidden"].tolist() == [k for k in range(2) if not visible[k]] == [0]


def test_the_content_decides_about_the_format(tmp_path: Path) -> None:
    # Common practice, no source.
    grid = samples.without_odd_names(samples.tetrahedra())
    for name in ("wrong.vtk", "wrong.msh", "none", "UPPER.VTU", "wrong.xdmf"):
        assert unturn.io.open_result(samples.write_xml(grid, tmp_path / name)).format_name == "VTU"
    assert unturn.io.read(samples.write_legacy(grid, tmp_path / "legacy.vtu")).format_name == "VTK legacy"
    unturn.io.write(result_from_vtk(grid), tmp_path / "x.vtkhdf")
    (tmp_path / "x.vtkhdf").rename(tmp_path / "x.h5")
    assert unturn.io.read(tmp_path / "x.h5").format_name == "VTKHDF"


def test_importing_the_package_loads_no_reader() -> None:
    # Common practice, no source.
    code = (
        "import sys, unturn.io; bad = {'vtkmodules', 'vtk', 'meshio', 'h5py', 'pyvista'} & set(sys.modules); "
        "assert not bad, bad"
    )
    subprocess.run([sys.executable, "-c", code], check=True)


def test_reading_vtu_loads_no_more_of_vtk_than_it_needs(tmp_path: Path) -> None:
    # Common practice, no source.
    path = samples.write_xml(samples.without_odd_names(samples.mixed()), tmp_path / "in.vtu", "raw")
    code = (
        "import sys, unturn.io; unturn.io.read(sys.argv[1]); "
        "bad = {'vtk', 'meshio', 'h5py', 'pyvista', 'vtkmodules.all'} & set(sys.modules); assert not bad, bad"
    )
    subprocess.run([sys.executable, "-c", code, str(path)], check=True)
