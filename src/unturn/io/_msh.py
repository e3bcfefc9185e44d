"""MSH 2.2 and 4.1, text and binary: nodes, elements, physical groups, node and element data of every step."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from unturn.errors import InputError
from unturn.io._msh_cells import CELLS
from unturn.io._msh_reader import MshReader, read_records
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
    reader, found = MshReader(path, data), Msh()
    sections: dict[str, Callable[[MshReader, Msh], None]] = {
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


def _skip(reader: MshReader, found: Msh, name: str) -> None:
    end = reader.data.find(f"$End{name}".encode(), reader.at)
    if end < 0:
        raise reader.fault(f"the section ${name[:40]} has no end")
    if name == "ElementNodeData":
        found.skipped.append(name)
    reader.at = end
    reader.line()


def _format(reader: MshReader, found: Msh) -> None:
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


def _names(reader: MshReader, found: Msh) -> None:
    for _ in range(reader.whole(reader.line())):
        match = re.fullmatch(r'(\d+)\s+(-?\d+)\s+"(.*)"', reader.line())
        if match is None:
            raise reader.fault('a physical name is not of the form: dimension number "name"')
        found.names[int(match[1]), int(match[2])] = match[3]


def _entities(reader: MshReader, found: Msh) -> None:
    reader.begin("Entities")
    for dimension, count in enumerate(reader.take("z", 4)):
        for _ in range(int(count)):
            tag = int(reader.take("i", 1)[0])
            reader.take("d", 3 if dimension == 0 else 6)
            physical = reader.take("i", int(reader.take("z", 1)[0]))
            found.entities[dimension, tag] = tuple(int(p) for p in physical)
            if dimension:
                reader.take("i", int(reader.take("z", 1)[0]))


def _nodes(reader: MshReader, found: Msh) -> None:
    if reader.version == "2.2":
        count = reader.whole(reader.line())
        reader.begin("Nodes")
        if reader.binary:
            rows = read_records(reader, [("n", "i4"), ("x", "f8", (3,))], count)
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


def _whole_column(reader: MshReader, column: Array) -> Integers:
    if not np.array_equal(column, np.floor(column)):
        raise reader.fault("a number of a node or element is not whole")
    return column.astype(np.int64)


def _elements(reader: MshReader, found: Msh) -> None:
    if reader.version == "4.1":
        found.chunks.extend(_elements_41(reader, found))
        return
    count = reader.whole(reader.line())
    reader.begin("Elements")
    found.chunks.extend(_elements_22_binary(reader, count) if reader.binary else _elements_22(reader, count))


def _width(reader: MshReader, kind: int) -> int:
    if kind not in CELLS:
        raise InputError(f"{reader.path}: elements of MSH type {kind} are not read. Save the mesh as VTU.")
    return CELLS[kind][1]


def _elements_41(reader: MshReader, found: Msh) -> Iterator[Chunk]:
    reader.begin("Elements")
    n_blocks, *_ = (int(v) for v in reader.take("z", 4))
    for _ in range(n_blocks):
        dimension, tag, kind = (int(v) for v in reader.take("i", 3))
        count = int(reader.take("z", 1)[0])
        width = _width(reader, kind)
        table = reader.take("z", count * (1 + width)).reshape(count, 1 + width)
        physical = found.entities.get((dimension, tag), ())
        yield Chunk(kind, table[:, 0], table[:, 1:], np.full(count, tag), [physical] * count)


def _elements_22_binary(reader: MshReader, count: int) -> Iterator[Chunk]:
    while count > 0:
        kind, n, n_tags = (int(v) for v in reader.take("i", 3))
        if n < 1 or n_tags < 0:
            raise reader.fault("a block of elements is empty")
        width = _width(reader, kind)
        table = reader.take("i", n * (1 + n_tags + width)).reshape(n, -1)
        yield _chunk_22(kind, table, n_tags)
        count -= n


def _elements_22(reader: MshReader, count: int) -> Iterator[Chunk]:
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


def _data(reader: MshReader, section: str) -> Data:
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
        rows = read_records(reader, [("n", "i4"), ("v", "f8", (width,))], count)
        numbers, values = rows["n"].astype(np.int64), rows["v"].astype(np.float64).reshape(count, width)
    else:
        table = reader.take("d", count * (1 + width)).reshape(count, 1 + width)
        numbers, values = _whole_column(reader, table[:, 0]), table[:, 1:].copy()
    return Data(strings[0], reals[0] if reals else 0.0, step, numbers, values[:, 0] if width == 1 else values)
