"""Proof that a file of VTK's XML family is complete and agrees with itself, before VTK reads it.

VTK fills short arrays with whatever was in memory, pairs the arrays of several pieces by position and ends
the interpreter on wrong sizes. Each of these is found here and refused with its place.
"""

from __future__ import annotations

import mmap
import re
from pathlib import Path
from xml.etree import ElementTree

import numpy as np

from unturn.errors import InputError
from unturn.io.vtk_xml_array import XmlArrays
from unturn.io.vtk_xml_data import Encoding, Stream
from unturn.io.vtk_xml_faces import check_faces

_COMPRESSORS = ("", "vtkZLibDataCompressor", "vtkLZ4DataCompressor", "vtkLZMADataCompressor")
_CELL_LISTS = ("Cells", "Verts", "Lines", "Strips", "Polys")
_COUNTED = {
    "Verts": "NumberOfVerts",
    "Lines": "NumberOfLines",
    "Strips": "NumberOfStrips",
    "Polys": "NumberOfPolys",
}


def check_xml(path: str, kind: str) -> None:
    """Raise `InputError` unless VTK can read the file of this kind (``UnstructuredGrid`` ...) right."""
    with Path(path).open("rb") as stream, mmap.mmap(stream.fileno(), 0, access=mmap.ACCESS_READ) as data:
        root, body = _parse(path, data)
        view = memoryview(data)
        try:
            file = _file(path, root, view, body)
            grid = root.find(kind)
            if grid is None:
                raise file.fail(f"it has no {kind} element")
            _check_grid(file, grid, kind)
        finally:
            view.release()


def parse_root(path: str) -> ElementTree.Element:
    """Return the root element of a VTK XML file without appended data (an index of other files)."""
    with Path(path).open("rb") as stream, mmap.mmap(stream.fileno(), 0, access=mmap.ACCESS_READ) as data:
        return _parse(path, data)[0]


def _parse(path: str, data: mmap.mmap) -> tuple[ElementTree.Element, int]:
    """Return the root element, appended data left out, and the position where those begin (-1 if none)."""
    body = data.find(b"<AppendedData")
    end = len(data) if body < 0 else body
    text = data[:end]
    if b"<!DOCTYPE" in text or b"<!ENTITY" in text:
        raise InputError(
            f"{path} declares a document type, which no result file needs and which can make a reader run "
            "out of memory. Remove the declaration, or write the file again."
        )
    try:
        return ElementTree.fromstring(text if body < 0 else text + b"</VTKFile>"), body
    except (ElementTree.ParseError, ValueError, LookupError) as error:
        raise InputError(
            f"{path} is not complete XML ({error}). The file is damaged or the program that wrote it did not "
            "finish: write it again."
        ) from error


def _file(path: str, root: ElementTree.Element, data: memoryview, body: int) -> XmlArrays:
    order = "<" if root.get("byte_order", "LittleEndian") == "LittleEndian" else ">"
    width = {"UInt32": "u4", "UInt64": "u8"}.get(root.get("header_type", "UInt32"))
    compressor = root.get("compressor", "")
    if width is None or compressor not in _COMPRESSORS:
        raise InputError(
            f"{path}: header type {root.get('header_type')!r} with compressor {compressor!r} is not known. "
            "Write the file with zlib, lz4, lzma or no compression."
        )
    encoding = Encoding(np.dtype(order + width), order, compressor)
    if body < 0:
        return XmlArrays(path, encoding, None)
    if b"</VTKFile>" not in bytes(data[-256:]):
        raise InputError(
            f"{path} ends without its closing </VTKFile>: the program that wrote it did not finish, or the file "
            "was cut short. Write it again."
        )
    head = bytes(data[body : body + 4096])
    found = re.match(rb"<AppendedData[^>]*\bencoding\s*=\s*[\"'](raw|base64)[\"'][^>]*>\s*_", head)
    if found is None:
        raise InputError(f"{path}: the appended data have no known encoding or no beginning. Write it again.")
    if found[1] == b"raw":
        return XmlArrays(path, encoding, Stream(data, body + found.end(), False, False))
    text = bytes(data[body + found.end() :]).split(b"<", 1)[0].rstrip()
    return XmlArrays(path, encoding, Stream(text, 0, True, False))


def _check_grid(file: XmlArrays, grid: ElementTree.Element, kind: str) -> None:
    pieces = grid.findall("Piece")
    if not pieces:
        raise file.fail("it has no Piece, so no mesh")
    if grid.get("TimeValues"):
        raise InputError(
            f"{file.path} holds several steps in one file by the TimeValues attribute, which is not read; "
            "write one file a step with a .pvd beside them."
        )
    for section in grid.findall("FieldData"):
        _check_section(file, section, None)
    _check_alike(file, pieces)
    structured = kind not in ("UnstructuredGrid", "PolyData")
    if (
        structured
        and _extent_size(file, grid, "WholeExtent")[0] > 2**26
        and not any(_arrays(s) for s in pieces[0] if s.tag in ("PointData", "CellData", "Points"))
    ):
        raise file.fail(f"its extent {grid.get('WholeExtent')!r} is large and no array has values there")
    total = 0
    for number, piece in enumerate(pieces):
        n_points, n_cells = _extent_counts(file, piece) if structured else _counts(file, piece, kind)
        total += n_cells
        _check_piece(file, piece, n_points, n_cells, f"piece {number}: " if len(pieces) > 1 else "")
    if structured and total != _extent_size(file, grid, "WholeExtent")[1]:
        raise file.fail("its pieces do not fill its whole extent")


def _counts(file: XmlArrays, piece: ElementTree.Element, kind: str) -> tuple[int, int]:
    n_points = file.count(piece, "NumberOfPoints")
    if kind == "UnstructuredGrid":
        return n_points, file.count(piece, "NumberOfCells")
    return n_points, sum(file.count(piece, name, 0) for name in _COUNTED.values())


def _extent_size(file: XmlArrays, element: ElementTree.Element, name: str) -> tuple[int, int]:
    """Return the number of points and cells of an extent."""
    text = element.get(name, "")
    numbers = text.split()
    if len(numbers) != 6 or not all(re.fullmatch(r"-?\d{1,10}", v) for v in numbers):
        raise file.fail(f"{name} is {text!r} instead of six whole numbers")
    low, high = [int(v) for v in numbers[::2]], [int(v) for v in numbers[1::2]]
    sizes = [b - a + 1 for a, b in zip(low, high, strict=True)]
    if min(sizes) < 1:
        return 0, 0
    n_points = sizes[0] * sizes[1] * sizes[2]
    n_cells = max(sizes[0] - 1, 1) * max(sizes[1] - 1, 1) * max(sizes[2] - 1, 1)
    if n_points > 2**31:
        raise file.fail(f"{name} {text!r} asks for {n_points} points, more than can be held in memory")
    return n_points, n_cells


def _extent_counts(file: XmlArrays, piece: ElementTree.Element) -> tuple[int, int]:
    return _extent_size(file, piece, "Extent")


def _check_alike(file: XmlArrays, pieces: list[ElementTree.Element]) -> None:
    """VTK pairs the arrays of all pieces by position: they must be the same in the same order."""
    for section in ("PointData", "CellData"):
        first = _signature(pieces[0].find(section))
        for number, piece in enumerate(pieces[1:], 1):
            if _signature(piece.find(section)) != first:
                raise file.fail(
                    f"piece {number} has other {section} arrays, or in another order, than piece 0"
                )


def _signature(section: ElementTree.Element | None) -> list[tuple[str | None, str | None, str]]:
    arrays = [] if section is None else _arrays(section)
    return [(a.get("Name"), a.get("type"), a.get("NumberOfComponents", "1")) for a in arrays]


def _arrays(section: ElementTree.Element) -> list[ElementTree.Element]:
    return [a for a in section if a.tag in ("DataArray", "Array")]


def _check_piece(
    file: XmlArrays, piece: ElementTree.Element, n_points: int, n_cells: int, where: str
) -> None:
    for section in piece:
        if section.tag == "PointData":
            _check_section(file, section, n_points, where)
        elif section.tag == "CellData":
            _check_section(file, section, n_cells, where)
        elif section.tag == "Points":
            _check_points(file, section, n_points, where)
        elif section.tag == "Coordinates":
            _check_coordinates(file, piece, section, where)
        elif section.tag in _CELL_LISTS:
            n = n_cells if section.tag == "Cells" else file.count(piece, _COUNTED[section.tag], 0)
            _check_cells(file, section, n_points, n, where)
    if n_points and piece.tag == "Piece" and piece.find("Points") is None and piece.get("NumberOfPoints"):
        raise file.fail(f"{where}it says it has {n_points} points and holds none")
    if n_cells and piece.get("NumberOfCells") and piece.find("Cells") is None:
        raise file.fail(f"{where}it says it has {n_cells} cells and holds none")


def _check_points(file: XmlArrays, section: ElementTree.Element, n_points: int, where: str) -> None:
    arrays = _arrays(section)
    if n_points and (len(arrays) != 1 or arrays[0].get("NumberOfComponents", "1").strip() != "3"):
        raise file.fail(f"{where}the points are not one array of 3 components")
    _check_section(file, section, n_points, where)


def _check_coordinates(
    file: XmlArrays, piece: ElementTree.Element, section: ElementTree.Element, where: str
) -> None:
    arrays = _arrays(section)
    extent = [int(v) for v in piece.get("Extent", "").split()]
    if len(arrays) != 3:
        raise file.fail(f"{where}it has {len(arrays)} arrays of coordinates instead of 3")
    for axis, array in enumerate(arrays):
        file.check_array(array, extent[2 * axis + 1] - extent[2 * axis] + 1, where)


def _check_section(
    file: XmlArrays, section: ElementTree.Element, n_rows: int | None, where: str = ""
) -> None:
    """Prove every array of a section; `n_rows` None: each states its own number of rows."""
    seen = set()
    for array in _arrays(section):
        name = array.get("Name", "")
        if name in seen:
            raise file.fail(f"{where}two {section.tag} arrays are called {name!r}, so one would be lost")
        if array.get("TimeStep"):
            raise file.fail(f"{where}{section.tag} array {name!r} belongs to a TimeStep, which is not read")
        seen.add(name)
        file.check_array(array, file.count(array, "NumberOfTuples", 0) if n_rows is None else n_rows, where)


def _check_cells(file: XmlArrays, section: ElementTree.Element, n_points: int, n: int, where: str) -> None:
    """Prove the lists of a cell section; the offsets tell how long the connectivity must be."""
    arrays = {a.get("Name", ""): a for a in _arrays(section)}
    if n == 0:
        return
    for name in ("connectivity", "offsets"):
        if name not in arrays:
            raise file.fail(f"{where}{section.tag} has no array {name!r}")
    if section.tag == "Cells":
        if "types" not in arrays:
            raise file.fail(f"{where}Cells has no array 'types'")
        file.check_array(arrays["types"], n, where)
    last = _check_offsets(file, arrays["offsets"], n, where)
    file.check_array(arrays["connectivity"], last, where)
    if section.tag == "Cells":
        check_faces(file, arrays, n_points, n, where)


def _check_offsets(file: XmlArrays, array: ElementTree.Element, n: int, where: str) -> int:
    """Prove an array of n offsets and return the last one; zeros that some writers leave behind them are no harm."""
    if n == 0:
        file.check_array(array, n, where)
        return 0
    spare = file.values(array, where) - n
    if spare <= 0 or file.decode(array, spare, where).any():
        file.check_array(array, n, where)
    last = int(file.decode(array, spare + 1, where)[0])
    if not 0 <= last < 2**47:
        raise file.fail(f"{where}the last of the {array.get('Name')} is {last}")
    return last
