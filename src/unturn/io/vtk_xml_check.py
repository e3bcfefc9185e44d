"""Proof that a file of VTK's XML family is complete and agrees with itself, before VTK reads it.

VTK fills short arrays with whatever was in memory, pairs the arrays of several pieces by position and ends
the interpreter on wrong sizes. Each of these is found here and refused with its place.
"""

from __future__ import annotations

import mmap
import re
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any
from xml.etree import ElementTree

import numpy as np

from unturn.errors import InputError
from unturn.io.vtk_xml_data import Encoding, Stream, Unsound, count_numbers, decoded_size, tail

# Source: VTK 9.7, vtkXMLDataReader and vtkXMLWriter: the names of number types in files.
_TYPES = {
    "Int8": "i1", "UInt8": "u1", "Int16": "i2", "UInt16": "u2", "Int32": "i4", "UInt32": "u4",
    "Int64": "i8", "UInt64": "u8", "Float32": "f4", "Float64": "f8",
}  # fmt: skip
_COMPRESSORS = ("", "vtkZLibDataCompressor", "vtkLZ4DataCompressor", "vtkLZMADataCompressor")
_CELL_LISTS = ("Cells", "Verts", "Lines", "Strips", "Polys")
_COUNTED = {
    "Verts": "NumberOfVerts",
    "Lines": "NumberOfLines",
    "Strips": "NumberOfStrips",
    "Polys": "NumberOfPolys",
}


@dataclass(frozen=True)
class _File:
    """A file under proof."""

    path: str
    encoding: Encoding
    appended: Stream | None

    def fail(self, what: str) -> InputError:
        return InputError(
            f"{self.path}: {what}. The file is damaged, incomplete or was written wrongly: write it again."
        )


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


def _file(path: str, root: ElementTree.Element, data: memoryview, body: int) -> _File:
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
        return _File(path, encoding, None)
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
        return _File(path, encoding, Stream(data, body + found.end(), False, False))
    text = bytes(data[body + found.end() :]).split(b"<", 1)[0].rstrip()
    return _File(path, encoding, Stream(text, 0, True, False))


def _check_grid(file: _File, grid: ElementTree.Element, kind: str) -> None:
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


def _counts(file: _File, piece: ElementTree.Element, kind: str) -> tuple[int, int]:
    n_points = _count(file, piece, "NumberOfPoints")
    if kind == "UnstructuredGrid":
        return n_points, _count(file, piece, "NumberOfCells")
    return n_points, sum(_count(file, piece, name, 0) for name in _COUNTED.values())


def _count(file: _File, element: ElementTree.Element, name: str, default: int | None = None) -> int:
    text = element.get(name, None if default is None else str(default))
    if text is None or not re.fullmatch(r"\s*\d{1,15}\s*", text):
        raise file.fail(f"{name} is {text!r} instead of a number")
    return int(text)


def _extent_size(file: _File, element: ElementTree.Element, name: str) -> tuple[int, int]:
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


def _extent_counts(file: _File, piece: ElementTree.Element) -> tuple[int, int]:
    return _extent_size(file, piece, "Extent")


def _check_alike(file: _File, pieces: list[ElementTree.Element]) -> None:
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


def _check_piece(file: _File, piece: ElementTree.Element, n_points: int, n_cells: int, where: str) -> None:
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
            n = n_cells if section.tag == "Cells" else _count(file, piece, _COUNTED[section.tag], 0)
            _check_cells(file, section, n, where)
    if n_points and piece.tag == "Piece" and piece.find("Points") is None and piece.get("NumberOfPoints"):
        raise file.fail(f"{where}it says it has {n_points} points and holds none")
    if n_cells and piece.get("NumberOfCells") and piece.find("Cells") is None:
        raise file.fail(f"{where}it says it has {n_cells} cells and holds none")


def _check_points(file: _File, section: ElementTree.Element, n_points: int, where: str) -> None:
    arrays = _arrays(section)
    if n_points and (len(arrays) != 1 or arrays[0].get("NumberOfComponents", "1").strip() != "3"):
        raise file.fail(f"{where}the points are not one array of 3 components")
    _check_section(file, section, n_points, where)


def _check_coordinates(
    file: _File, piece: ElementTree.Element, section: ElementTree.Element, where: str
) -> None:
    arrays = _arrays(section)
    extent = [int(v) for v in piece.get("Extent", "").split()]
    if len(arrays) != 3:
        raise file.fail(f"{where}it has {len(arrays)} arrays of coordinates instead of 3")
    for axis, array in enumerate(arrays):
        _check_array(file, array, extent[2 * axis + 1] - extent[2 * axis] + 1, where)


def _check_section(file: _File, section: ElementTree.Element, n_rows: int | None, where: str = "") -> None:
    """Prove every array of a section; `n_rows` None: each states its own number of rows."""
    seen = set()
    for array in _arrays(section):
        name = array.get("Name", "")
        if name in seen:
            raise file.fail(f"{where}two {section.tag} arrays are called {name!r}, so one would be lost")
        if array.get("TimeStep"):
            raise file.fail(f"{where}{section.tag} array {name!r} belongs to a TimeStep, which is not read")
        seen.add(name)
        _check_array(
            file, array, _count(file, array, "NumberOfTuples", 0) if n_rows is None else n_rows, where
        )


def _check_cells(file: _File, section: ElementTree.Element, n: int, where: str) -> None:
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
        _check_array(file, arrays["types"], n, where)
    last = _check_offsets(file, arrays["offsets"], n, where)
    _check_array(file, arrays["connectivity"], last, where)
    # Polyhedra. Source: VTK 9.7, vtkXMLUnstructuredDataReader: one stream ("faces") up to version 2.2,
    # lists with their own offsets from 2.3 on.
    for name, offsets, length in (
        ("face_connectivity", "face_offsets", None),
        ("polyhedron_to_faces", "polyhedron_offsets", n),
    ):
        if name in arrays and offsets in arrays:
            rows = _values(file, arrays[offsets], where) if length is None else length
            _check_array(file, arrays[name], _check_offsets(file, arrays[offsets], rows, where), where)
    if "faces" in arrays and "faceoffsets" in arrays:
        _check_face_stream(file, arrays["faces"], arrays["faceoffsets"], n, where)


def _check_offsets(file: _File, array: ElementTree.Element, n: int, where: str) -> int:
    """Prove an array of n offsets and return the last one."""
    _check_array(file, array, n, where)
    if n == 0:
        return 0
    last = int(_decode(file, array, 1, where)[-1])
    if not 0 <= last < 2**47:
        raise file.fail(f"{where}the last of the {array.get('Name')} is {last}")
    return last


def _check_face_stream(
    file: _File, faces: ElementTree.Element, offsets: ElementTree.Element, n: int, where: str
) -> None:
    """Prove the stream ``[number of faces, (number of nodes, nodes ...) ...]`` of every polyhedron."""
    _check_array(file, offsets, n, where)
    ends = _decode(file, offsets, None, where)
    stream = _decode(file, faces, None, where)
    _check_array(file, faces, len(stream), where)
    start = 0
    for cell in np.flatnonzero(ends >= 0):
        position = start
        for count in _face_counts(stream, position):
            position = count
        if position != ends[cell] or position > len(stream):
            raise file.fail(f"{where}the faces of the polyhedron in cell {int(cell)} do not fit their offset")
        start = position


def _face_counts(stream: Any, start: int) -> Iterator[int]:
    """Yield the position after the head and after each face of one polyhedron; -1 when it runs out."""
    if not 0 <= start < len(stream) or stream[start] < 0:
        yield -1
        return
    position = start + 1
    for _ in range(int(stream[start])):
        if position >= len(stream) or stream[position] < 0:
            yield -1
            return
        position += 1 + int(stream[position])
    yield position


def _check_array(file: _File, array: ElementTree.Element, n_rows: int, where: str) -> None:
    """Prove that an array has exactly the values that `n_rows` rows need."""
    name = array.get("Name", "")
    width = _count(file, array, "NumberOfComponents", 1)
    if width < 1:
        raise file.fail(f"{where}array {name!r} has {width} components")
    needed = n_rows * width
    if array.get("type") == "String":
        found = int(np.count_nonzero(_decode(file, array, None, where, "u1") == 0))
        unit = "strings"
    elif array.get("type") == "Bit":
        needed, found, unit = -(-needed // 8), _values(file, array, where, "u1"), "bytes of bits"
        if array.get("format", "ascii") == "ascii":
            needed, unit = n_rows * width, "bits"
    else:
        found, unit = _values(file, array, where), "values"
    if found != needed:
        raise file.fail(f"{where}array {name!r} has {found} {unit}; {needed} are needed ({n_rows} x {width})")


def _dtype(file: _File, array: ElementTree.Element) -> np.dtype[Any]:
    kind = array.get("type", "")
    if kind not in _TYPES:
        raise file.fail(f"array {array.get('Name')!r} has the unknown number type {kind!r}")
    return np.dtype(file.encoding.order + _TYPES[kind])


def _values(file: _File, array: ElementTree.Element, where: str, dtype: str | None = None) -> int:
    """Return the number of values an array holds."""
    stream = _stream(file, array, where)
    kind = np.dtype(dtype) if dtype else _dtype(file, array)
    try:
        if isinstance(stream, bytes):
            return count_numbers(stream, kind)
        n_bytes = decoded_size(stream, file.encoding)
    except Unsound as error:
        raise file.fail(f"{where}array {array.get('Name')!r}: {error}") from error
    if n_bytes % kind.itemsize:
        raise file.fail(
            f"{where}array {array.get('Name')!r} has {n_bytes} bytes, no multiple of {kind.itemsize}"
        )
    return n_bytes // kind.itemsize


def _decode(
    file: _File, array: ElementTree.Element, n_last: int | None, where: str, dtype: str | None = None
) -> Any:
    """Return the last values of an array, or all of them for `n_last` None."""
    kind = np.dtype(dtype) if dtype else _dtype(file, array)
    stream = _stream(file, array, where)
    try:
        if isinstance(stream, bytes):
            words = stream.split() if n_last is None else stream.rsplit(maxsplit=n_last)[-n_last:]
            return np.array(words, dtype=np.float64).astype(np.int64)
        n = decoded_size(stream, file.encoding) if n_last is None else n_last * kind.itemsize
        found = tail(stream, file.encoding, n)
        return np.frombuffer(found[: len(found) // kind.itemsize * kind.itemsize], kind)
    except (Unsound, ValueError) as error:
        raise file.fail(f"{where}array {array.get('Name')!r}: {error}") from error


def _stream(file: _File, array: ElementTree.Element, where: str) -> Stream | bytes:
    """Return the encoded bytes of an array, or its text when it is ASCII."""
    form = array.get("format", "ascii").strip().lower()
    if form == "appended":
        if file.appended is None:
            raise file.fail(f"{where}array {array.get('Name')!r} lies in appended data that are not there")
        offset = _count(file, array, "offset")
        start = file.appended.start + offset
        return Stream(file.appended.data, start, file.appended.is_text, False)
    text = (array.text or "") + "".join(child.tail or "" for child in array)
    if form == "ascii":
        return text.encode()
    if form == "binary":
        return Stream(b"".join(text.encode().split()), 0, True, True)
    raise file.fail(f"{where}array {array.get('Name')!r} has the unknown format {form!r}")
