"""Meshes and hand-written XDMF files for the tests of the XDMF adapter."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from roundtrip import same_bits
from unturn.io._node_order import PLACES
from unturn.result import CellBlock, Result

CORNERS: dict[str, list[list[float]]] = {
    "vertex": [[0, 0, 0]],
    "line": [[0, 0, 0], [2, 0, 0]],
    "triangle": [[0, 0, 0], [2, 0, 0], [0, 2, 0]],
    "quad": [[0, 0, 0], [2, 0, 0], [2, 2, 0], [0, 2, 0]],
    "tetra": [[0, 0, 0], [2, 0, 0], [0, 2, 0], [0, 0, 2]],
    "pyramid": [[0, 0, 0], [2, 0, 0], [2, 2, 0], [0, 2, 0], [1, 1, 2]],
    "wedge": [[0, 0, 0], [2, 0, 0], [0, 2, 0], [0, 0, 2], [2, 0, 2], [0, 2, 2]],
    "hexahedron": [
        [0, 0, 0], [2, 0, 0], [2, 2, 0], [0, 2, 0], [0, 0, 2], [2, 0, 2], [2, 2, 2], [0, 2, 2]
    ],
}  # fmt: skip


def cell_points(cell_type: str) -> np.ndarray:
    """Return the points of one cell in VTK's order."""
    base = cell_type.rstrip("0123456789")
    corners = np.array(CORNERS[base], dtype=float)
    return np.array([*corners, *(corners[list(place)].mean(axis=0) for place in PLACES.get(cell_type, ()))])


def one_cell(cell_type: str) -> Result:
    """Return a result of two cells of one type, side by side, with a displacement."""
    points = cell_points(cell_type)
    n = len(points)
    both = np.concatenate([points, points + np.array([3.0, 0, 0])])
    rows = np.arange(2 * n).reshape(2, n)
    return Result(both, (CellBlock(cell_type, rows, np.arange(2)),), {"u": both * 0.01})


def everything() -> Result:
    """Return a mixed mesh with every kind of array that XDMF can hold."""
    rng = np.random.default_rng(7)
    points = np.concatenate([cell_points("tetra10"), cell_points("hexahedron") + np.array([5.0, 0, 0])])
    blocks = (
        CellBlock("hexahedron", np.arange(10, 18)[None], np.array([0])),
        CellBlock("vertex", np.array([[3], [4]]), np.array([1, 5])),
        CellBlock("tetra10", np.arange(10)[None], np.array([2])),
        CellBlock("line", np.array([[3, 4]]), np.array([3])),
        CellBlock("polygon", np.array([[10, 11, 12, 13, 14]]), np.array([4])),
    )
    n = len(points)
    integers = {
        k: rng.integers(0, 100, n).astype(k) for k in ("i1", "i2", "i4", "i8", "u1", "u2", "u4", "u8")
    }
    integers["u8"][0], integers["i8"][0] = 2**64 - 1, -(2**63)
    point_data: dict[str, Any] = {
        "u": rng.random((n, 3)),
        "single": rng.random(n).astype(np.float32),
        "two": rng.random((n, 2)),
        "six": rng.random((n, 6)),
        "strain": rng.random((n, 6)),
        "nine": rng.random((n, 9)),
        "four": rng.random((n, 4)),
        "with <&\"'> and a / in it \u00e9": np.array([np.nan, np.inf, -np.inf, -0.0] + [5e-324] * (n - 4)),
        **integers,
    }
    return Result(
        points,
        blocks,
        point_data,
        {"material": np.arange(6, dtype=np.int32), "J": rng.random((6, 1, 9)).reshape(6, 9)},
        {"load": np.array([1.5, 2.5]), "matrix": rng.random((2, 3)), "none": np.empty(0)},
        {"arm": np.array([0, 2]), "overlap": np.array([2, 3, 5])},
        {
            ("point", "strain"): ("XX", "YY", "ZZ", "XY", "YZ", "XZ"),
            ("point", "four"): ("a", "b", "c", "\u03b5"),
            ("point", "u"): ("X", "Y", "Z"),
        },
    )


def assert_bits(a: np.ndarray, b: np.ndarray) -> None:
    """Assert the same type, shape and bits."""
    assert same_bits(a, b), f"{a.dtype} {a.shape} and {b.dtype} {b.shape}"


TRIANGLES = """
<Topology TopologyType="Triangle" NumberOfElements="2" NodesPerElement="3">
  <DataItem Dimensions="2 3" NumberType="Int" Format="XML">0 1 2 1 3 2</DataItem>
</Topology>
<Geometry GeometryType="XY">
  <DataItem Dimensions="4 2" Precision="8" Format="XML">0 0 1 0 0 1 1 1</DataItem>
</Geometry>
"""


def node_array(name: str, numbers: str, dims: str = "4", kind: str = "Scalar", center: str = "Node") -> str:
    """Return an Attribute with its numbers in the XML."""
    return (
        f'<Attribute Name="{name}" AttributeType="{kind}" Center="{center}">'
        f'<DataItem Dimensions="{dims}" Precision="8" Format="XML">{numbers}</DataItem></Attribute>'
    )


def grid(*inside: str, name: str = "g", mesh: str = TRIANGLES) -> str:
    """Return a Uniform grid of two triangles with more in it."""
    return f'<Grid Name="{name}" GridType="Uniform">{mesh}{"".join(inside)}</Grid>'


def temporal(*steps: str, name: str = "steps") -> str:
    """Return a temporal collection."""
    return f'<Grid Name="{name}" GridType="Collection" CollectionType="Temporal">{"".join(steps)}</Grid>'


def index(folder: Path, *inside: str, version: str = "3.0", head: str = "") -> Path:
    """Write an XDMF index with these elements in its Domain."""
    path = folder / "hand.xdmf"
    path.write_text(
        f'<?xml version="1.0"?>{head}<Xdmf Version="{version}" xmlns:xi="http://www.w3.org/2001/XInclude">'
        f"<Domain>{''.join(inside)}</Domain></Xdmf>"
    )
    return path
