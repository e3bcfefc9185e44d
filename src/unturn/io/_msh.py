"""MSH 2.2 and 4.1, text and binary: nodes, elements, physical groups, node and element data of every step."""

from __future__ import annotations

import re
import warnings
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from unturn.errors import InputError
from unturn.io._msh_cells import CELLS
from unturn.result import Array

Integers = NDArray[np.int64]


@dataclass(eq=False)
class Chunk:
    """Elements of one type that follow each other in the file."""

    kind: int
    numbers: Integers
    nodes: Integers
    entity: Integers
    physical: list[tuple[int, ...]]


@dataclass(eq=False)
class Data:
    """One view: values of some nodes or elements at one step."""

    name: str
    time: float
    step: int
    numbers: Integers
    values: Array


@dataclass(eq=False)
class Msh:
    """The sections of one file, numbers as in the file."""

    node_numbers: Integers = field(default_factory=lambda: np.empty(0, np.int64))
    points: Array = field(default_factory=lambda: np.empty((0, 3)))
    chunks: list[Chunk] = field(default_factory=list)
    names: dict[tuple[int, int], str] = field(default_factory=dict)
    entities: dict[tuple[int, int], tuple[int, ...]] = field(default_factory=dict)
    node_data: list[Data] = field(default_factory=list)
    element_data: list[Data] = field(default_factory=list)
    skipped: list[str] = field(default_factory=list)


class _Reader:
    """Numbers and lines of one file, one after the other, from text or binary."""

    def __init__(self, path: Path, data: bytes) -> None:
        self.path, self.data, self.at = path, data, 0
        self.binary, self.version = False, ""
        self.order: Literal["<", ">"] = "<"
        self._text: Array | None = None
        self._next = 0

    def fault(self, text: str) -> InputError:
        return InputError(
            f"{self.path}: byte {self.at}: {text}. The file is damaged or incomplete: write it again."
        )

    def line(self) -> str:
        """Return the next line that is not empty."""
        while self.at < len(self.data):
            end = self.data.find(b"\n", self.at)
            end = len(self.data) if end < 0 else end
            raw, self.at = self.data[self.at : end], end + 1
            if raw.strip():
                return raw.decode("utf-8", "replace").strip()
        raise self.fault("the file ends too early")

    def whole(self, text: str) -> int:
        """Return one count that stands on a line of its own."""
        if not re.fullmatch(r"-?\d{1,15}", text):
            raise self.fault(f"{text[:40]!r} is not a whole number")
        return int(text)

    def begin(self, name: str) -> None:
        """Prepare for `take` in a text file: all numbers up to the end of the section."""
        if self.binary:
            return
        end = self.data.find(f"$End{name}".encode(), self.at)
        if end < 0:
            raise self.fault(f"the section ${name} has no end")
        text = self.data[self.at : end].decode("ascii", "replace")
        try:
            with warnings.catch_warnings():
                warnings.simplefilter("error")
                self._text = np.fromstring(text, sep=" ") if text.strip() else np.empty(0)
        except (ValueError, DeprecationWarning) as error:
            raise self.fault(f"the section ${name} holds something that is not a number") from error
        self._next, self.at = 0, end

    def take(self, kind: str, count: int) -> Array:
        """Return the next numbers: ``i`` 4-byte whole, ``z`` 8-byte whole, ``d`` floating-point."""
        if count < 0:
            raise self.fault("a count is below zero")
        if self.binary:
            code = {"i": "i4", "z": "u8", "d": "f8"}[kind]
            size = count * int(code[1])
            if self.at + size > len(self.data):
                raise self.fault("the file ends too early")
            raw = np.frombuffer(self.data, f"{self.order}{code}", count, self.at)
            self.at += size
            return raw.astype(np.float64 if kind == "d" else np.int64)
        assert self._text is not None
        if self._next + count > len(self._text):
            raise self.fault("a section holds too few numbers")
        found = self._text[self._next : self._next + count]
        self._next += count
        if kind == "d":
            return found
        if not np.isfinite(found).all() or (found != np.floor(found)).any() or (np.abs(found) > 2**53).any():
            raise self.fault("a section holds a number that should be whole and is not")
        return found.astype(np.int64)

    def left(self) -> int:
        """Return how many numbers of a text section are left."""
        return 0 if self._text is None else len(self._text) - self._next

    def end(self, name: str) -> None:
        """Read the line that ends a section."""
        found = self.line()
        if found != f"$End{name}":
            raise self.fault(f"$End{name} was expected and {found[:40]!r} found")


def read_msh(path: Path) -> Msh:
    """Return the sections of an MSH file.

    Raises
    ------
    InputError
        The file is damaged, or of another version.
    """
    try:
        data = path.read_bytes()
    except OSError as error:
        raise InputError(f"{path}: cannot be opened: {error.strerror}.") from error
    reader, found = _Reader(path, data), Msh()
    sections: dict[str, Callable[[_Reader, Msh], None]] = {
        "MeshFormat": _format,
        "PhysicalNames": _names,
        "Entities": _entities,
        "Nodes": _nodes,
        "Elements": _elements,
        "NodeData": lambda r, m: m.node_data.append(_data(r, "NodeData")),
        "ElementData": lambda r, m: m.element_data.append(_data(r, "ElementData")),
    }
    while reader.data[reader.at :].strip():
        head = reader.line()
        if not head.startswith("$"):
            raise reader.fault(f"a section was expected and {head[:40]!r} found")
        name = head[1:].split()[0] if head[1:].split() else ""
        if not reader.version and name not in ("MeshFormat", "Comments"):
            raise InputError(
                f"{path}: does not begin with $MeshFormat; it is no MSH file of version 2.2 or 4.1."
            )
        if name in sections:
            sections[name](reader, found)
            reader.end(name)
        else:
            _skip(reader, found, name)
    return found


def _skip(reader: _Reader, found: Msh, name: str) -> None:
    end = reader.data.find(f"$End{name}".encode(), reader.at)
    if end < 0:
        raise reader.fault(f"the section ${name[:40]} has no end")
    if name == "ElementNodeData":
        found.skipped.append(name)
    reader.at = end
    reader.line()


def _format(reader: _Reader, found: Msh) -> None:
    words = reader.line().split()
    if len(words) != 3 or words[0] not in ("2.2", "4.1") or words[1] not in ("0", "1") or words[2] != "8":
        raise InputError(
            f"{reader.path}: MSH version {' '.join(words)[:40]!r} is not read; versions 2.2 and 4.1 with "
            "8-byte numbers are. Save it in one of them."
        )
    reader.version, reader.binary = words[0], words[1] == "1"
    if reader.binary:
        one = reader.data[reader.at : reader.at + 4]
        if one not in (b"\x01\0\0\0", b"\0\0\0\x01"):
            raise reader.fault("the byte order is not stated")
        reader.order = "<" if one[0] == 1 else ">"
        reader.at += 4


def _names(reader: _Reader, found: Msh) -> None:
    for _ in range(reader.whole(reader.line())):
        match = re.fullmatch(r'(\d+)\s+(-?\d+)\s+"(.*)"', reader.line())
        if match is None:
            raise reader.fault('a physical name is not of the form: dimension number "name"')
        found.names[int(match[1]), int(match[2])] = match[3]


def _entities(reader: _Reader, found: Msh) -> None:
    reader.begin("Entities")
    for dimension, count in enumerate(reader.take("z", 4)):
        for _ in range(int(count)):
            tag = int(reader.take("i", 1)[0])
            reader.take("d", 3 if dimension == 0 else 6)
            physical = reader.take("i", int(reader.take("z", 1)[0]))
            found.entities[dimension, tag] = tuple(int(p) for p in physical)
            if dimension:
                reader.take("i", int(reader.take("z", 1)[0]))


def _nodes(reader: _Reader, found: Msh) -> None:
    if reader.version == "2.2":
        count = reader.whole(reader.line())
        reader.begin("Nodes")
        if reader.binary:
            rows = _records(reader, [("n", "i4"), ("x", "f8", (3,))], count)
            found.node_numbers, found.points = rows["n"].astype(np.int64), rows["x"].astype(np.float64)
            return
        table = reader.take("d", 4 * count).reshape(count, 4)
        found.node_numbers, found.points = _whole_column(reader, table[:, 0]), table[:, 1:].copy()
        return
    reader.begin("Nodes")
    n_blocks, *_ = (int(v) for v in reader.take("z", 4))
    numbers, points = [np.empty(0, np.int64)], [np.empty((0, 3))]
    for _ in range(n_blocks):
        dimension, _, parametric = (int(v) for v in reader.take("i", 3))
        count = int(reader.take("z", 1)[0])
        width = 3 + (dimension if parametric else 0)
        numbers.append(reader.take("z", count))
        points.append(reader.take("d", width * count).reshape(count, width)[:, :3])
    found.node_numbers, found.points = np.concatenate(numbers), np.concatenate(points)


def _whole_column(reader: _Reader, column: Array) -> Integers:
    if not np.array_equal(column, np.floor(column)):
        raise reader.fault("a number of a node or element is not whole")
    return column.astype(np.int64)


def _records(
    reader: _Reader, fields: list[tuple[str, ...] | tuple[str, str, tuple[int, ...]]], count: int
) -> Array:
    dtype = np.dtype(fields).newbyteorder(reader.order)
    if count < 0 or reader.at + count * dtype.itemsize > len(reader.data):
        raise reader.fault("the file ends too early")
    rows: Array = np.frombuffer(reader.data, dtype, count, reader.at)
    reader.at += count * dtype.itemsize
    return rows


def _elements(reader: _Reader, found: Msh) -> None:
    if reader.version == "4.1":
        found.chunks.extend(_elements_41(reader, found))
        return
    count = reader.whole(reader.line())
    reader.begin("Elements")
    found.chunks.extend(_elements_22_binary(reader, count) if reader.binary else _elements_22(reader, count))


def _width(reader: _Reader, kind: int) -> int:
    if kind not in CELLS:
        raise InputError(f"{reader.path}: elements of MSH type {kind} are not read. Save the mesh as VTU.")
    return CELLS[kind][1]


def _elements_41(reader: _Reader, found: Msh) -> Iterator[Chunk]:
    reader.begin("Elements")
    n_blocks, *_ = (int(v) for v in reader.take("z", 4))
    for _ in range(n_blocks):
        dimension, tag, kind = (int(v) for v in reader.take("i", 3))
        count = int(reader.take("z", 1)[0])
        width = _width(reader, kind)
        table = reader.take("z", count * (1 + width)).reshape(count, 1 + width)
        physical = found.entities.get((dimension, tag), ())
        yield Chunk(kind, table[:, 0], table[:, 1:], np.full(count, tag), [physical] * count)


def _elements_22_binary(reader: _Reader, count: int) -> Iterator[Chunk]:
    while count > 0:
        kind, n, n_tags = (int(v) for v in reader.take("i", 3))
        if n < 1 or n_tags < 0:
            raise reader.fault("a block of elements is empty")
        width = _width(reader, kind)
        table = reader.take("i", n * (1 + n_tags + width)).reshape(n, -1)
        yield _chunk_22(kind, table, n_tags)
        count -= n


def _elements_22(reader: _Reader, count: int) -> Iterator[Chunk]:
    flat = reader.take("i", reader.left())
    rows: list[list[int]] = []
    head, numbers, at = (0, 0), flat.tolist(), 0
    for _ in range(count):
        if at + 3 > len(numbers):
            raise reader.fault("the section $Elements holds too few numbers")
        kind, n_tags = numbers[at + 1], numbers[at + 2]
        end = at + 3 + max(n_tags, 0) + _width(reader, kind)
        if end > len(numbers) or n_tags < 0:
            raise reader.fault("the section $Elements holds too few numbers")
        if (kind, n_tags) != head and rows:
            yield _chunk_22(head[0], np.array(rows), head[1])
            rows = []
        head = (kind, n_tags)
        rows.append([numbers[at], *numbers[at + 3 : end]])
        at = end
    if rows:
        yield _chunk_22(head[0], np.array(rows), head[1])
    if at != len(numbers):
        raise reader.fault("the section $Elements holds more numbers than elements")


def _chunk_22(kind: int, table: Integers, n_tags: int) -> Chunk:
    n = len(table)
    none: tuple[int, ...] = ()
    physical = [(int(p),) if p else none for p in table[:, 1]] if n_tags else [none] * n
    entity = table[:, 2] if n_tags > 1 else np.zeros(n, np.int64)
    return Chunk(kind, table[:, 0], table[:, 1 + n_tags :], entity, physical)


def _data(reader: _Reader, section: str) -> Data:
    strings = [reader.line().strip('"') for _ in range(reader.whole(reader.line()))]
    try:
        reals = [float(reader.line()) for _ in range(reader.whole(reader.line()))]
    except ValueError as error:
        raise reader.fault("the time of a step is not a number") from error
    whole = [reader.whole(reader.line()) for _ in range(reader.whole(reader.line()))]
    if not strings or len(whole) < 3 or whole[1] < 1 or whole[2] < 0:
        raise reader.fault(f"a section ${section} states no name, components or count")
    step, width, count = whole[0], whole[1], whole[2]
    reader.begin(section)
    if reader.binary:
        rows = _records(reader, [("n", "i4"), ("v", "f8", (width,))], count)
        numbers, values = rows["n"].astype(np.int64), rows["v"].astype(np.float64).reshape(count, width)
    else:
        table = reader.take("d", count * (1 + width)).reshape(count, 1 + width)
        numbers, values = _whole_column(reader, table[:, 0]), table[:, 1:].copy()
    return Data(strings[0], reals[0] if reals else 0.0, step, numbers, values[:, 0] if width == 1 else values)
