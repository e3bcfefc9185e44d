"""How a `Result` is laid out in XDMF: topology, types and shapes of arrays, names."""

from __future__ import annotations

import re
from collections.abc import Sequence
from typing import Any
from xml.etree import ElementTree as ET

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError
from unturn.io.xdmf_attributes import TENSOR6
from unturn.io.xdmf_mesh import BY_TYPE, COUNTED
from unturn.io.xdmf_read import XdmfCarrier
from unturn.result import Array, Association, Result

_NOT_XML = re.compile("[\x00-\x08\x0b\x0c\x0e-\x1f\ud800-\udfff\ufffe\uffff]")


def carrier_of(result: Result) -> XdmfCarrier:
    return result.carrier if isinstance(result.carrier, XdmfCarrier) else XdmfCarrier()


def check_names(result: Result) -> None:
    names = [*result.point_data, *result.cell_data, *result.field_data, *result.groups]
    names += [component for key in result.component_names.values() for component in key]
    for name in names:
        if _NOT_XML.search(name):
            raise UsageError(f"the name {name!r} cannot be written in XDMF: rename the array or group.")


def same_mesh(a: Result, b: Result) -> bool:
    if a.points is not b.points and not np.array_equal(a.points, b.points):
        return False
    if (
        a.points.dtype != b.points.dtype
        or a.point_dimension != b.point_dimension
        or len(a.blocks) != len(b.blocks)
    ):
        return False
    return all(
        x is y
        or (
            x.cell_type == y.cell_type
            and np.array_equal(x.connectivity, y.connectivity)
            and np.array_equal(x.index, y.index)
        )
        for x, y in zip(a.blocks, b.blocks)
    )


def form_of(
    result: Result, association: Association, name: str, values: Array, names: Sequence[str]
) -> tuple[str, tuple[int, ...]]:
    """Return AttributeType and the shape of one row: as in the file read, else by the component count."""
    tail = values.shape[1:]
    width = int(np.prod(tail))
    if association != "field" and width == 6 and tuple(names) == TENSOR6:
        return "Tensor6", (6,)
    kind, before = carrier_of(result).forms.get((association, name), ("", ()))
    if kind and kind.lower() != "tensor6" and (association == "field" or int(np.prod(before)) == width):
        return kind, before
    if association == "field":
        return "Matrix" if values.ndim > 1 else "Scalar", tail
    kind = {1: "Scalar", 2: "Vector", 3: "Vector", 9: "Tensor"}.get(width, "Matrix")
    # A Matrix has rows and columns; readers take a flat one for a single matrix.
    return kind, (1, width) if kind == "Matrix" else tail


def topology_of(result: Result) -> tuple[ET.Element, NDArray[Any]]:
    """Return the Topology element without its data, and the data."""
    for block in result.blocks:
        if block.cell_type not in BY_TYPE:
            raise UsageError(
                f"XDMF has no cells of type {block.cell_type} with {block.connectivity.shape[1]} nodes. "
                "Write VTU instead (-o NAME.vtu): it holds them."
            )
    stated = np.dtype(carrier_of(result).connectivity_dtype)
    n_nodes = max(result.n_points, 256)
    dtype = stated if n_nodes <= np.iinfo(stated).max else np.dtype(np.int64)
    if len(result.blocks) == 1:
        block = result.blocks[0]
        rows = block.connectivity[np.argsort(block.index, kind="stable")].astype(dtype)
        element = ET.Element(
            "Topology",
            TopologyType=BY_TYPE[block.cell_type][0],
            NumberOfElements=str(len(rows)),
            NodesPerElement=str(rows.shape[1]),
        )
        return element, rows
    element = ET.Element("Topology", TopologyType="Mixed", NumberOfElements=str(result.n_cells))
    return element, _mixed(result).astype(dtype)


def _mixed(result: Result) -> NDArray[np.int64]:
    length = np.zeros(result.n_cells, np.int64)
    rows: list[NDArray[np.int64]] = []
    for block in result.blocks:
        code, width = BY_TYPE[block.cell_type][1], block.connectivity.shape[1]
        head = [code, width] if code in COUNTED else [code]
        rows.append(np.column_stack([np.tile(head, (len(block), 1)), block.connectivity]))
        length[block.index] = rows[-1].shape[1]
    begin = np.cumsum(length) - length
    stream = np.empty(int(length.sum()), np.int64)
    for block, table in zip(result.blocks, rows):
        stream[begin[block.index][:, None] + np.arange(table.shape[1])] = table
    return stream
