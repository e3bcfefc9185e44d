"""XDMF Topology and Geometry: cell types, node order, points, structured meshes."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator

import numpy as np
from numpy.typing import NDArray

from unturn.io.xdmf_items import ItemReader
from unturn.io.xdmf_structured import points_from_origin, points_on_axes, structured_cells
from unturn.io.xdmf_xml import Node, attribute, fault, local_name
from unturn.result import Array, CellBlock

# name in files, code in mixed streams, meshio's name, nodes (0: stated by the file).
# The node order is VTK's for every type: measured with VTK 9.7's XDMF reader, see the tests.
CELLS: tuple[tuple[str, int, str, int], ...] = (
    ("Polyvertex", 0x1, "vertex", 1),
    ("Polyline", 0x2, "line", 2),
    ("Polygon", 0x3, "polygon", 0),
    ("Triangle", 0x4, "triangle", 3),
    ("Quadrilateral", 0x5, "quad", 4),
    ("Tetrahedron", 0x6, "tetra", 4),
    ("Pyramid", 0x7, "pyramid", 5),
    ("Wedge", 0x8, "wedge", 6),
    ("Hexahedron", 0x9, "hexahedron", 8),
    ("Edge_3", 0x22, "line3", 3),
    ("Quadrilateral_9", 0x23, "quad9", 9),
    ("Triangle_6", 0x24, "triangle6", 6),
    ("Quadrilateral_8", 0x25, "quad8", 8),
    ("Tetrahedron_10", 0x26, "tetra10", 10),
    ("Pyramid_13", 0x27, "pyramid13", 13),
    ("Wedge_15", 0x28, "wedge15", 15),
    ("Wedge_18", 0x29, "wedge18", 18),
    ("Hexahedron_20", 0x30, "hexahedron20", 20),
    ("Hexahedron_24", 0x31, "hexahedron24", 24),
    ("Hexahedron_27", 0x32, "hexahedron27", 27),
)
COUNTED = (0x1, 0x2, 0x3)
BY_CODE = {code: (cell_type, nodes) for _, code, cell_type, nodes in CELLS}
BY_TYPE = {cell_type: (name, code) for name, code, cell_type, _ in CELLS}
_ALIASES = {
    "tri6": "triangle6",
    "quad8": "quadrilateral8",
    "quad9": "quadrilateral9",
    "tet10": "tetrahedron10",
}
_ALIASES |= {f"hex{n}": f"hexahedron{n}" for n in (20, 24, 27)}
_ALIASES |= {"quad": "quadrilateral", "tet": "tetrahedron", "hex": "hexahedron"}
_BY_NAME = {name.lower().replace("_", ""): (cell_type, nodes) for name, _, cell_type, nodes in CELLS}
# Source: DOLFINx 0.11, io/xdmf_utils.cpp: names beyond XDMF's own, nodes in VTK's order. Read, not written.
_BY_NAME |= {
    "triangle10": ("VTK_LAGRANGE_TRIANGLE", 10),
    "quadrilateral16": ("VTK_LAGRANGE_QUADRILATERAL", 16),
    "tetrahedron20": ("VTK_LAGRANGE_TETRAHEDRON", 20),
}


def read_cells(items: ItemReader, topology: Node) -> tuple[tuple[CellBlock, ...], np.dtype[np.generic]]:
    """Return the cell blocks of a Topology and the number type of its connectivity.

    Raises
    ------
    InputError
        The type is not read, or the data does not fit it.
    """
    stated = attribute(topology, "TopologyType", "Type")
    name = stated.lower().replace("_", "").replace(" ", "")
    if attribute(topology, "Order"):
        raise fault(
            topology, "a Topology with an Order of its own is not read: write the nodes in XDMF's order."
        )
    if name.endswith("mesh"):
        return structured_cells(topology, name), np.dtype(np.int64)
    data = items.only(topology)
    if data.dtype.kind not in "iu":
        raise fault(topology, f"the connectivity holds {data.dtype} numbers; whole numbers are expected.")
    dtype, n_cells = data.dtype, _n_cells(topology)
    data = data.astype(np.int64)
    if name == "mixed":
        blocks = _mixed(items, topology, data.ravel(), n_cells)
    else:
        blocks = (_single(topology, stated, _ALIASES.get(name, name), data, n_cells),)
    offset = attribute(topology, "BaseOffset", default="0")
    if not re.fullmatch(r"-?\d{1,9}", offset):
        raise fault(topology, f"BaseOffset={offset!r} is not a whole number.")
    for block in blocks:
        np.subtract(block.connectivity, int(offset), out=block.connectivity)
    return blocks, dtype


def _n_cells(topology: Node) -> int | None:
    text = attribute(topology, "NumberOfElements", "Dimensions")
    if not text:
        return None
    shape = [w for w in text.split() if re.fullmatch(r"\d{1,15}", w)]
    if len(shape) != len(text.split()):
        raise fault(topology, f"NumberOfElements={text!r} is not a whole number.")
    return int(np.prod([int(w) for w in shape], dtype=object))


def _single(topology: Node, stated: str, name: str, data: Array, n_cells: int | None) -> CellBlock:
    if name not in _BY_NAME:
        raise fault(
            topology,
            f"cells of type {stated!r} are not read. "
            "Write the mesh as VTU, or with linear or quadratic cells.",
        )
    cell_type, nodes = _BY_NAME[name]
    per_cell = attribute(topology, "NodesPerElement")
    if per_cell and not re.fullmatch(r"[1-9]\d{0,5}", per_cell):
        raise fault(topology, f"NodesPerElement={per_cell!r} is not a number of nodes.")
    width = int(per_cell or nodes or (data.shape[1] if data.ndim == 2 else 0))
    if width < 1 or (nodes and width != nodes):
        raise fault(
            topology, f"{stated} with {width} nodes a cell is not read; {nodes or 'a number'} is expected."
        )
    if data.ndim > 1 and data.shape[-1] not in (width, 1):
        raise fault(topology, f"{stated} has {width} nodes a cell; the data has rows of {data.shape[-1]}.")
    if data.size % width or n_cells not in (None, data.size // width):
        raise fault(
            topology,
            f"{stated}: {data.size} node numbers of {width} a cell for {n_cells} cells. "
            "The file is incomplete or was written wrongly: write it again.",
        )
    rows = np.ascontiguousarray(data.reshape(-1, width))
    return CellBlock(cell_type, rows, np.arange(len(rows)))


def _mixed(
    items: ItemReader, topology: Node, data: NDArray[np.int64], n_cells: int | None
) -> tuple[CellBlock, ...]:
    try:
        runs = list(_runs(topology, data, counted_vertices=True))
        wrong = n_cells is not None and sum(r[3] for r in runs) != n_cells
    except _NoMixed as error:
        runs, wrong, reason = [], True, str(error)
    else:
        reason = f"it holds {sum(r[3] for r in runs)} cells, NumberOfElements says {n_cells}"
    if wrong and n_cells is not None:
        try:
            runs = list(_runs(topology, data, counted_vertices=False))
        except _NoMixed:
            runs = []
        wrong = not runs or sum(r[3] for r in runs) != n_cells
        if not wrong:
            items.notes[
                "The mixed topology stores its single points without the count that XDMF asks for; "
                "it was read as such because only so the number of cells is right."
            ] = None
    if wrong:
        raise fault(topology, f"the mixed topology cannot be followed: {reason}. Write the file again.")
    rows: dict[tuple[str, int], list[tuple[Array, Array]]] = {}
    position = 0
    for code, head, width, count, start in runs:
        table = data[start : start + count * (head + width)].reshape(count, head + width)[:, head:]
        index = np.arange(position, position + count)
        rows.setdefault((BY_CODE[code][0], width), []).append((table, index))
        position += count
    return tuple(
        CellBlock(cell_type, np.concatenate([t for t, _ in parts]), np.concatenate([i for _, i in parts]))
        for (cell_type, _), parts in rows.items()
    )


class _NoMixed(Exception):
    """The stream of a mixed topology cannot be followed."""


def _runs(
    topology: Node, data: NDArray[np.int64], counted_vertices: bool
) -> Iterator[tuple[int, int, int, int, int]]:
    """Yield runs of equal cells: code, numbers before the nodes, nodes, cells, start in the stream."""
    start, size = 0, len(data)
    while start < size:
        code = int(data[start])
        if code not in BY_CODE:
            raise _NoMixed(f"number {start} is {code}, which is no cell type that is read")
        head, width = 1, BY_CODE[code][1]
        if code in COUNTED and (code != 1 or counted_vertices):
            head, stated = 2, int(data[start + 1]) if start + 1 < size else 0
            if stated < 1 or width not in (0, stated):
                raise _NoMixed(f"number {start} begins a {BY_CODE[code][0]} of {stated} nodes")
            width = stated
        if start + head + width > size:
            raise _NoMixed(f"it ends within the {BY_CODE[code][0]} that begins at number {start}")
        count = _run_length(data, start, head, head + width)
        yield code, head, width, count, start
        start += count * (head + width)


def _run_length(data: NDArray[np.int64], start: int, head: int, step: int) -> int:
    """Return how many cells from `start` on have the same leading numbers; looks ahead in growing leaps."""
    most = (len(data) - start) // step
    count, leap = 1, 64
    while count < most:
        until = min(most, count + leap)
        block = data[start + count * step : start + until * step].reshape(-1, step)[:, :head]
        other = np.flatnonzero((block != data[start : start + head]).any(axis=1))
        if len(other):
            return count + int(other[0])
        count, leap = until, 4 * leap
    return most


def read_points(items: ItemReader, geometry: Node, topology: Node) -> tuple[Array, int]:
    """Return the points ``(n, 3)`` of a Geometry and how many coordinates the file stores for each.

    Raises
    ------
    InputError
        The type is not read, or the data does not fit it.
    """
    stated = attribute(geometry, "GeometryType", "Type", default="XYZ")
    readers: dict[str, Callable[[ItemReader, Node, Node], Array]] = {
        "XYZ": lambda i, g, t: _rows(i, g, 3),
        "XY": lambda i, g, t: _rows(i, g, 2),
        "X_Y_Z": lambda i, g, t: _columns(i, g, 3),
        "X_Y": lambda i, g, t: _columns(i, g, 2),
        "VXVYVZ": points_on_axes,
        "VXVY": points_on_axes,
        "ORIGIN_DXDYDZ": points_from_origin,
        "ORIGIN_DXDY": points_from_origin,
    }
    if stated.upper() not in readers:
        raise fault(geometry, f"a Geometry of type {stated!r} is not read; {', '.join(readers)} are.")
    points = readers[stated.upper()](items, geometry, topology)
    dimension = points.shape[1]
    if dimension == 2:
        points = np.column_stack([points, np.zeros(len(points), points.dtype)])
    return points, dimension


def _rows(items: ItemReader, geometry: Node, width: int) -> Array:
    data = items.only(geometry)
    if data.size % width or (data.ndim > 1 and data.shape[-1] not in (width, 1)):
        raise fault(
            geometry, f"the points are stored in the shape {data.shape}; rows of {width} are expected."
        )
    return data.reshape(-1, width)


def _columns(items: ItemReader, geometry: Node, width: int) -> Array:
    parts = [items.read(n).ravel() for n in items.children(geometry)]
    if len(parts) != width or len({len(p) for p in parts}) != 1:
        raise fault(geometry, f"{width} arrays of one length are expected; found {[len(p) for p in parts]}.")
    return np.stack(parts, axis=1)


def mesh_key(items: ItemReader, topology: Node, geometry: Node) -> tuple[object, object]:
    """Return two values that are equal for elements that lead to the same cells, or the same points."""
    return _key(items, topology), _key(items, geometry)


def _key(items: ItemReader, node: Node) -> object:
    node = items.tree.resolve(node)
    own = sorted((k, v) for k, v in node.attrib.items() if k != "Name")
    text = (node.text or "").strip()
    inner = tuple(_key(items, c) for c in items.tree.children(node) if local_name(c) == "DataItem")
    return (local_name(node), str(node.file.parent), tuple(own), text, inner)
