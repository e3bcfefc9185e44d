"""XDMF Attributes and Sets: arrays of nodes, cells and grids, and finite-element functions."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unturn.io.xdmf_hdf import hdf_dataset
from unturn.io.xdmf_items import ItemReader
from unturn.io.xdmf_xml import Node, attribute, fault, local_name
from unturn.result import Array, CellBlock

TENSOR6 = ("XX", "YY", "ZZ", "XY", "YZ", "XZ")
TENSOR6_IN_FILE = ("XX", "XY", "XZ", "YY", "YZ", "ZZ")
# Position in one order of each component of the other; the permutation is its own inverse.
TENSOR6_ORDER = [0, 3, 5, 1, 4, 2]
COMPONENT_NAMES = "component_names"

# Degrees of freedom of a Lagrange function in the order of the unified form-assembly code (vertices, then the
# edge across from each vertex or pair of vertices), for each node of the cell in VTK's order.
_LAGRANGE: dict[tuple[str, int], list[int]] = {
    ("line", 2): [0, 1],
    ("line3", 3): [0, 1, 2],
    ("triangle", 3): [0, 1, 2],
    ("triangle6", 6): [0, 1, 2, 5, 3, 4],
    ("tetra", 4): [0, 1, 2, 3],
    ("tetra10", 10): [0, 1, 2, 3, 9, 6, 8, 7, 5, 4],
}


@dataclass(frozen=True, eq=False)
class Field:
    """An array as read: rows of points, cells or the grid, and how the file words it."""

    center: str
    name: str
    values: Array
    kind: str
    tail: tuple[int, ...]
    components: tuple[str, ...] = ()


@dataclass(frozen=True, eq=False)
class Kept:
    """An element that no `Result` array can hold; it is written back as it was."""

    tag: str
    attributes: Mapping[str, str]
    arrays: tuple[Array, ...]
    why: str


def read_attribute(
    items: ItemReader, node: Node, n_points: int, blocks: tuple[CellBlock, ...]
) -> Field | Kept:
    """Return the array of an Attribute, or the element itself when no array of the mesh can hold it.

    Raises
    ------
    InputError
        The array does not fit the mesh, or its data cannot be read.
    """
    node = items.tree.resolve(node)
    name = attribute(node, "Name")
    if not name:
        raise fault(node, "an Attribute without a name.")
    if attribute(node, "ItemType", default="Uniform").lower() == "finiteelementfunction":
        return _function(items, node, name, n_points, blocks)
    center = attribute(node, "Center", default="Node").lower()
    if center in ("edge", "face", "other"):
        return _kept(items, node, f"the array {name!r} belongs to {center}s, not to nodes or cells")
    if center not in ("node", "cell", "grid"):
        raise fault(node, f"the array {name!r} has Center={attribute(node, 'Center')!r}; Node, Cell or Grid.")
    kind = attribute(node, "AttributeType", "Type", default="Scalar")
    item = items.only_item(node)
    data = items.read(item)
    if center == "grid":
        return Field("field", name, np.atleast_1d(data), kind, (), _names_in_hdf(items, item))
    n = n_points if center == "node" else sum(len(b) for b in blocks)
    values, tail = _rows(node, name, data, n, f"{center}s")
    place = "point" if center == "node" else "cell"
    if kind.lower() == "tensor6":
        if values.ndim != 2 or values.shape[1] != 6:
            raise fault(
                node, f"the array {name!r} is a Tensor6 of {values.shape[1:]} components; 6 are expected."
            )
        return Field(place, name, values[:, TENSOR6_ORDER], kind, tail, TENSOR6)
    names = _names_in_hdf(items, item)
    n_components = values.shape[1] if values.ndim == 2 else 1
    return Field(place, name, values, kind, tail, names if len(names) == n_components else ())


def _rows(node: Node, name: str, data: Array, n: int, what: str) -> tuple[Array, tuple[int, ...]]:
    for axes in range(1, data.ndim + 1):
        if int(np.prod(data.shape[:axes])) == n:
            tail = data.shape[axes:]
            width = int(np.prod(tail))
            return data.reshape((n, width) if width != 1 else (n,)), tail
    if data.ndim == 1 and n and data.size and data.size % n == 0:
        return data.reshape(n, -1), (data.size // n,)
    raise fault(
        node,
        f"the array {name!r} has the shape {data.shape}; the mesh has {n} {what}. "
        "The file is incomplete or was written wrongly: write it again.",
    )


def _names_in_hdf(items: ItemReader, item: Node) -> tuple[str, ...]:
    """Return the component names that our writer puts beside the dataset."""
    if (
        attribute(item, "Format").lower() != "hdf"
        or attribute(item, "ItemType", default="Uniform") != "Uniform"
    ):
        return ()
    with hdf_dataset(item) as dataset:
        try:
            names = dataset.attrs.get(COMPONENT_NAMES)
        except (OSError, RuntimeError, ValueError, TypeError) as error:
            raise fault(item, f"the names of the components cannot be read: {error}.") from error
    if not isinstance(names, np.ndarray) or names.ndim != 1:
        return ()
    return tuple(n for n in names.tolist() if isinstance(n, str))


def read_set(items: ItemReader, node: Node, n_cells: int) -> NDArray[np.int64] | Kept:
    """Return the cell positions of a Set of cells; other sets are kept as they are.

    Raises
    ------
    InputError
        The set names a cell that does not exist.
    """
    node = items.tree.resolve(node)
    name = attribute(node, "Name")
    kind = attribute(node, "SetType", "Type", default="Node").lower()
    others = [local_name(c) for c in items.tree.children(node) if local_name(c) != "DataItem"]
    if kind != "cell" or others:
        return _kept(items, node, f"the {kind} set {name!r} cannot be a cell group")
    ids = items.only(node).ravel()
    if ids.dtype.kind not in "iu":
        raise fault(node, f"the cell set {name!r} holds {ids.dtype} numbers; whole numbers are expected.")
    if ids.size and (int(ids.min()) < 0 or int(ids.max()) >= n_cells):
        raise fault(
            node, f"the cell set {name!r} names cell {int(ids.max())}; the mesh has cells 0 to {n_cells - 1}."
        )
    return ids.astype(np.int64)


def _kept(items: ItemReader, node: Node, why: str) -> Kept:
    arrays = tuple(items.read(n) for n in items.children(node))
    return Kept(local_name(node), {k: v for k, v in node.attrib.items() if k != "Reference"}, arrays, why)


def _function(
    items: ItemReader, node: Node, name: str, n_points: int, blocks: tuple[CellBlock, ...]
) -> Field | Kept:
    """Return a finite-element function as an array, where its degrees of freedom are the mesh's own nodes.

    Notes
    -----
    XDMF model and format, finite-element functions: the DataItems are the degrees of freedom of each cell,
    their values, how many each cell has (or where each cell begins), and which cell each row belongs to.
    """
    family = attribute(node, "ElementFamily").upper()
    degree = attribute(node, "ElementDegree")
    kept = _kept(items, node, f"the finite-element function {name!r} ({family or 'no family'} {degree})")
    kind = attribute(node, "AttributeType", "Type", default="Scalar")
    n_cells = sum(len(b) for b in blocks)
    if len(kept.arrays) < 2 or len(blocks) != 1:
        return kept
    values = kept.arrays[1].ravel()
    table = _dof_table(kept.arrays, n_cells, len(values))
    if table is None:
        return kept
    if degree == "0" and family in ("DG", "DISCONTINUOUS LAGRANGE", "DQ", "DPC"):
        return Field("cell", name, values[table] if table.shape[1] > 1 else values[table[:, 0]], kind, ())
    if family in ("CG", "LAGRANGE", "P") and degree == ("2" if blocks[0].cell_type[-1].isdigit() else "1"):
        found = _on_nodes(values, table, blocks[0], n_points)
        if found is not None:
            return Field("point", name, found, kind, ())
    return kept


def _dof_table(arrays: tuple[Array, ...], n_cells: int, n_values: int) -> NDArray[np.int64] | None:
    """Return the degrees of freedom ``(n_cells, n_dofs)`` in the order of the mesh's cells, or None."""
    dofs = arrays[0]
    if any(a.dtype.kind not in "iu" for a in (dofs, *arrays[2:])) or not n_cells or dofs.size % n_cells:
        return None
    width = dofs.size // n_cells
    if not width or int(dofs.min()) < 0 or int(dofs.max()) >= n_values:
        return None
    if len(arrays) > 2:
        ends = arrays[2].ravel().astype(np.int64)
        even = np.arange(n_cells + 1) * width
        if not (np.array_equal(ends, even) or (len(ends) == n_cells and bool((ends == width).all()))):
            return None
    table = dofs.reshape(n_cells, width).astype(np.int64)
    if len(arrays) > 3:
        cells = arrays[3].ravel().astype(np.int64)
        if not np.array_equal(np.sort(cells), np.arange(n_cells)):
            return None
        table = table[np.argsort(cells)]
    return table


def _on_nodes(values: Array, table: NDArray[np.int64], block: CellBlock, n_points: int) -> Array | None:
    nodes = block.connectivity.shape[1]
    order = _LAGRANGE.get((block.cell_type, nodes))
    if order is None or table.shape[1] % nodes:
        return None
    per_component = table.reshape(len(table), -1, nodes)[:, :, order]
    dof_of = np.full((n_points, per_component.shape[1]), -1, np.int64)
    dof_of[block.connectivity] = per_component.transpose(0, 2, 1)
    if not np.array_equal(dof_of[block.connectivity], per_component.transpose(0, 2, 1)):
        return None
    missing = dof_of[:, 0] < 0
    found = values[np.where(missing[:, None], 0, dof_of)].astype(values.dtype)
    if found.dtype.kind == "f":
        found[missing] = np.nan
    elif missing.any():
        return None
    return found[:, 0] if found.shape[1] == 1 else found
