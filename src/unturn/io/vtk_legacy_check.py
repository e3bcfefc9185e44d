"""Proof that a legacy VTK file is complete and agrees with itself, before VTK reads it.

VTK's legacy reader ends the interpreter on files cut short and on cell lists that point past their end. The
grammar followed here is that of the VTK User's Guide, "VTK file formats, simple legacy formats", with the
additions of file version 5.1 (offsets and connectivity) and METADATA, as VTK 9.7 writes them.
"""

from __future__ import annotations

import mmap
import re
from collections.abc import Callable
from pathlib import Path
from typing import Any, NoReturn

import numpy as np

from unturn.errors import InputError
from unturn.io.vtk_xml_data import Unsound, count_numbers

_TYPES = {
    "char": "i1", "signed_char": "i1", "unsigned_char": "u1", "short": "i2", "unsigned_short": "u2",
    "int": "i4", "unsigned_int": "u4", "vtkidtype": "i4", "long": "i8", "unsigned_long": "u8",
    "long_long": "i8", "unsigned_long_long": "u8", "float": "f4", "double": "f8",
    # Some name their own size.
    **{f"vtktype{sign}int{8 * n}": f"{sign or 'i'}{n}" for sign in ("", "u") for n in (1, 2, 4, 8)},
}  # fmt: skip
_DATASETS = ("UNSTRUCTURED_GRID", "STRUCTURED_GRID", "RECTILINEAR_GRID", "STRUCTURED_POINTS", "POLYDATA")
_CELL_LISTS = ("CELLS", "VERTICES", "LINES", "POLYGONS", "TRIANGLE_STRIPS")
# Attribute keyword -> number of components when the file does not state it.
_FIXED = {
    "VECTORS": 3, "NORMALS": 3, "TENSORS": 9, "TENSORS6": 6, "GLOBAL_IDS": 1, "PEDIGREE_IDS": 1,
    "EDGE_FLAGS": 1, "TANGENTS": 3, "RATIONALWEIGHTS": 1, "HIGHERORDERDEGREES": 3, "PROCESSIDS": 1,
}  # fmt: skip
_POLYHEDRON = 42
_WORD = re.compile(rb"\s*(\S+)")
_INFORMATION = re.compile(rb"NAME \S+ LOCATION \S+\s*")
_RANGE_VALUES = re.compile(rb"DATA 2( [-+.\deinfa]+){2}\s*", re.IGNORECASE)
_ANY_VALUES = re.compile(rb"DATA \S.*")
_NUMBER = re.compile(rb"\s*(\d{1,15})(?=\s|$)")


def check_legacy(path: str) -> str:
    """Return the data set type of a legacy VTK file that was proved sound; raise `InputError` otherwise."""
    with Path(path).open("rb") as stream, mmap.mmap(stream.fileno(), 0, access=mmap.ACCESS_READ) as data:
        return _Walk(path, data).run()


class _Walk:
    """One walk through a file from its first keyword to its last."""

    def __init__(self, path: str, data: mmap.mmap) -> None:
        self.path, self.data, self.at, self.binary = path, data, 0, False
        self.rows, self.width = 0, 1
        self.names: set[str] = set()
        self.n_cells, self.with_offsets = 0, False
        self.streams: list[Any] = []
        self.new_layout = False

    def fail(self, what: str) -> NoReturn:
        raise InputError(
            f"{self.path}: {what} (byte {self.at} of {len(self.data)}). The file is damaged, incomplete or "
            "was written wrongly: write it again, best as .vtu."
        )

    def run(self) -> str:
        version = re.fullmatch(rb"# vtk DataFile Version (\d)\.\d\s*", self.line())
        if version is None:
            self.fail("it does not begin with '# vtk DataFile Version' and a number")
        self.with_offsets = int(version[1]) >= 5
        self.line()
        mode = self.word()
        if mode not in ("ASCII", "BINARY"):
            self.fail(f"the third line is {mode!r} instead of ASCII or BINARY")
        self.binary = mode == "BINARY"
        if self.word() != "DATASET":
            self.fail("it has no DATASET line, so no mesh")
        dataset = str(self.word())
        if dataset not in _DATASETS:
            self.fail(f"DATASET {dataset} is not read; expected one of {', '.join(_DATASETS)}")
        while (keyword := self.word(last=True)) is not None:
            self.section(keyword)
        return dataset

    def section(self, keyword: str) -> None:
        """Walk over what a keyword announces."""
        handlers: dict[str, Callable[[], None]] = {
            "FIELD": self.field,
            "METADATA": self.metadata,
            "POINTS": self.points,
            "CELL_TYPES": self.cell_types,
            "SCALARS": self.scalars,
            "LOOKUP_TABLE": self.lookup_table,
            "COLOR_SCALARS": self.color_scalars,
            "TEXTURE_COORDINATES": self.texture_coordinates,
        }
        if keyword in handlers:
            handlers[keyword]()
        elif keyword in _CELL_LISTS:
            self.cell_list()
        elif keyword in ("POINT_DATA", "CELL_DATA"):
            self.rows, self.names = self.number(), set()
        elif keyword in _FIXED:
            self.name()
            self.values(self.rows, self.word().lower(), _FIXED[keyword])
        elif keyword in ("X_COORDINATES", "Y_COORDINATES", "Z_COORDINATES"):
            n = self.number()
            self.values(n, self.word().lower())
        elif keyword in ("DIMENSIONS", "SPACING", "ASPECT_RATIO", "ORIGIN", "EXTENT"):
            self.header_numbers(6 if keyword == "EXTENT" else 3)
        else:
            self.fail(f"the keyword {keyword[:40]!r} is not known")

    def line(self) -> bytes:
        end = self.data.find(b"\n", self.at)
        if end < 0:
            self.fail("it ends early")
        text = self.data[self.at : end]
        self.at = end + 1
        return text

    def word(self, *, last: bool = False) -> Any:
        """Return the next word in capitals; at the end of the file None if `last`, else a failure."""
        found = _WORD.match(self.data, self.at)
        if found is None:
            if last:
                return None
            self.fail("it ends early")
        if len(found[1]) > 1000:
            self.fail("a keyword was expected and other data were found")
        self.at = found.end()
        return found[1].decode("latin-1").upper()

    def number(self) -> int:
        found = _NUMBER.match(self.data, self.at)
        if found is None:
            self.fail("a whole number was expected")
        self.at = found.end()
        if int(found[1]) > 64 * len(self.data) + 2**20:
            self.fail(f"it announces {int(found[1])} values, more than it can hold")
        return int(found[1])

    def header_numbers(self, n: int) -> None:
        for _ in range(n):
            word = self.word()
            try:
                value = float(word)
            except ValueError:
                self.fail(f"{word[:40]!r} is not a number")
            if not abs(value) < 2**31:
                self.fail(f"{word[:40]!r} is out of range")

    def name(self) -> None:
        name = self.word()
        if name in self.names:
            self.fail(f"two arrays are called {name!r}, so one would be lost")
        self.names.add(name)

    def values(self, rows: int, kind: str, width: int = 1) -> int:
        """Walk over the rows of an array of `width` components and return where they begin."""
        n, self.width = rows * width, width
        if kind in ("string", "utf8_string"):
            return self.strings(n)
        if kind != "bit" and kind not in _TYPES:
            self.fail(f"the number type {kind!r} is not read")
        dtype = np.dtype(_TYPES.get(kind, "u1"))
        n_bytes = -(-n // 8) if kind == "bit" else n * dtype.itemsize
        if not self.binary:
            return self.ascii_values(n, dtype)
        self.line()
        begin = self.at
        if begin + n_bytes > len(self.data):
            self.fail(f"{n} values of type {kind} are announced and the file ends before them")
        self.at += n_bytes
        return begin

    def ascii_values(self, n: int, dtype: np.dtype[Any]) -> int:
        """Walk over n numbers in text, a piece at a time."""
        begin, left = self.at, n
        while left:
            piece = self.data[self.at : self.at + 2**20]
            words = piece.split(maxsplit=left)
            if len(words) > left:
                rest = words.pop()
                step = len(piece) - len(rest)
            elif self.at + len(piece) < len(self.data):
                step = len(piece)
                if not piece[-1:].isspace():  # the last word may go on in the next piece
                    step -= len(words.pop())
            else:
                step = len(piece)
            if not words or step == 0:
                self.fail(f"{n} values are announced and {n - left} are there")
            try:
                count_numbers(b" ".join(words), dtype)
            except Unsound as error:
                self.fail(str(error))
            left -= len(words)
            self.at += step
        return begin

    def strings(self, n: int) -> int:
        self.line()
        begin = self.at
        for _ in range(n):
            if not self.binary:
                self.line()
                continue
            # Source: VTK 9.7, vtkDataReader::DecodeString: two high bits say how many bytes hold the length.
            if self.at >= len(self.data):
                self.fail("it ends within an array of strings")
            width = {3: 1, 2: 2, 1: 4, 0: 8}[self.data[self.at] >> 6]
            head = self.data[self.at : self.at + width]
            length = int.from_bytes(bytes([head[0] & 0x3F]) + head[1:], "big")
            self.at += width + length
            if len(head) < width or self.at > len(self.data):
                self.fail("it ends within an array of strings")
        return begin

    def points(self) -> None:
        n = self.number()
        self.values(n, self.word().lower(), 3)

    def field(self) -> None:
        self.word()
        for _ in range(self.number()):
            found = _WORD.match(self.data, self.at)
            if found is not None and found[1] == b"METADATA":
                self.at = found.end()
                self.metadata()
            self.name()
            n_components, n_rows = self.number(), self.number()
            self.values(n_rows, self.word().lower(), n_components)

    def metadata(self) -> None:
        """Walk over component names and information about the last array, up to an empty line."""
        self.line()
        while self.at < len(self.data) and (line := self.line().strip()):
            if line == b"COMPONENT_NAMES":
                for _ in range(self.width):
                    self.line()
                continue
            found = re.fullmatch(rb"INFORMATION (\d{1,6})", line)
            if found is None:
                self.fail(f"METADATA is followed by {line[:40]!r}")
            for _ in range(int(found[1])):
                name, values = self.line(), self.line()
                whole = _RANGE_VALUES if b"_RANGE " in name else _ANY_VALUES
                if not _INFORMATION.fullmatch(name) or not whole.fullmatch(values):
                    self.fail(f"the {int(found[1])} announced pieces of INFORMATION are not all there")

    def scalars(self) -> None:
        self.name()
        kind = self.word().lower()
        words = self.line().split()
        n_components = int(words[0]) if words and words[0].isdigit() and len(words[0]) < 8 else 1
        if self.word() != "LOOKUP_TABLE":
            self.fail("SCALARS is not followed by a LOOKUP_TABLE line")
        self.word()
        self.values(self.rows, kind, n_components)

    def lookup_table(self) -> None:
        self.word()
        self.values(self.number(), self.color(), 4)

    def color_scalars(self) -> None:
        self.name()
        self.values(self.rows, self.color(), self.number())

    def color(self) -> str:
        """Return the type of colours: bytes in binary, numbers from 0 to 1 in text."""
        return "unsigned_char" if self.binary else "float"

    def texture_coordinates(self) -> None:
        self.name()
        n_components = self.number()
        self.values(self.rows, self.word().lower(), n_components)

    def cell_list(self) -> None:
        """Walk over cells: ``n size`` and a stream up to version 4.2, offsets and connectivity from 5.0."""
        n, size = self.number(), self.number()
        found = re.compile(rb"\s*OFFSETS\s+(\S+)", re.IGNORECASE).match(self.data, self.at)
        self.n_cells = n
        if (found is not None) != (self.with_offsets and (n, size) != (0, 0)):
            self.fail("its cells are not laid out as its version says")
        if found is None:
            begin = self.values(size, "int")
            self.stream(begin, n, size)
            return
        self.new_layout, self.n_cells = True, max(n - 1, 0)
        kind = found[1].decode("latin-1").lower()
        self.at = found.end()
        begin = self.values(n, kind)
        offsets = self.integers(begin, n, kind)
        if self.word() != "CONNECTIVITY":
            self.fail("OFFSETS is not followed by CONNECTIVITY")
        kind = self.word().lower()
        begin = self.values(size, kind)
        if n and (offsets[0] != 0 or offsets[-1] != size or (np.diff(offsets) < 0).any()):
            self.fail(f"the cell offsets do not rise from 0 to {size}")
        self.streams = [self.integers(begin, size, kind), offsets]

    def integers(self, begin: int, n: int, kind: str) -> Any:
        """Return the n whole numbers that begin at a position already walked over."""
        if self.binary:
            dtype = np.dtype(_TYPES[kind]).newbyteorder(">")
            return np.frombuffer(self.data[begin : self.at], dtype, n).astype(np.int64)
        return np.array(self.data[begin : self.at].split()[:n], dtype=np.float64).astype(np.int64)

    def stream(self, begin: int, n: int, size: int) -> None:
        """Prove that n cells ``(count, nodes ...)`` fill exactly `size` numbers."""
        numbers = self.integers(begin, size, "int")
        if n and size % n == 0 and (numbers[:: size // n] == size // n - 1).all():
            return
        position = 0
        listed = numbers.tolist()
        starts = [0]
        for cell in range(n):
            if position >= size or listed[position] < 0:
                self.fail(f"the list of nodes of cell {cell} does not fit the announced {size} numbers")
            position += 1 + listed[position]
            starts.append(position)
        if position != size:
            self.fail(f"the cells take {position} numbers of the announced {size}")
        self.streams = [numbers, np.array(starts)]

    def cell_types(self) -> None:
        n = self.number()
        if n != self.n_cells:
            self.fail(f"it has {n} cell types for {self.n_cells} cells")
        begin = self.values(n, "int")
        kinds = self.integers(begin, n, "int")
        if (kinds < 0).any() or (kinds > 255).any():
            self.fail("a cell type is not between 0 and 255")
        if (kinds == _POLYHEDRON).any():
            self.polyhedra(kinds)

    def polyhedra(self, kinds: Any) -> None:
        """Prove the stream ``[faces, (count, nodes ...) ...]`` of every polyhedron."""
        if len(self.streams) != 2 or len(self.streams[1]) != len(kinds) + 1:
            self.fail("the polyhedra do not fit the list of cells")
        numbers, starts = self.streams
        skip = 0 if self.new_layout else 1
        for cell in np.flatnonzero(kinds == _POLYHEDRON):
            faces = numbers[int(starts[cell]) + skip : int(starts[cell + 1])].tolist()
            position, left = 1, faces[0] if faces else -1
            while left > 0 and position < len(faces) and faces[position] >= 0:
                position, left = position + 1 + faces[position], left - 1
            if left != 0 or position != len(faces):
                self.fail(f"the faces of the polyhedron in cell {int(cell)} do not fit its list")
