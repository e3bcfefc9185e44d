"""Mid-side nodes of quadratic cells must lie near the middle of their edges; formats differ in order."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from unturn.errors import InputError
from unturn.result import Array, CellBlock

_SAMPLE = 2000
_FAR = 0.5
"""Of the edge's length: a quarter-point node is 0.25 off its middle, a node of another edge 0.5 or more."""


def _ring(*nodes: int) -> list[tuple[int, int]]:
    return list(zip(nodes, (*nodes[1:], nodes[0])))


_UP4, _UP3 = [(i, i + 4) for i in range(4)], [(i, i + 3) for i in range(3)]
_TETRA = [*_ring(0, 1, 2), (0, 3), (1, 3), (2, 3)]
_HEXAHEDRON = [*_ring(0, 1, 2, 3), *_ring(4, 5, 6, 7), *_UP4]
_WEDGE = [*_ring(0, 1, 2), *_ring(3, 4, 5), *_UP3]
# Edges of the mid-side nodes, in VTK's order. Source: VTK 9.7, class references of the quadratic cells.
EDGES: dict[str, list[tuple[int, int]]] = {
    "line3": [(0, 1)],
    "triangle6": _ring(0, 1, 2),
    "quad8": _ring(0, 1, 2, 3),
    "quad9": _ring(0, 1, 2, 3),
    "tetra10": _TETRA,
    "pyramid13": [*_ring(0, 1, 2, 3), *[(i, 4) for i in range(4)]],
    "pyramid14": [*_ring(0, 1, 2, 3), *[(i, 4) for i in range(4)]],
    "wedge15": _WEDGE,
    "wedge18": _WEDGE,
    "hexahedron20": _HEXAHEDRON,
    "hexahedron24": _HEXAHEDRON,
    "hexahedron27": _HEXAHEDRON,
}
# The other order in use: bottom ring, upright edges, top ring. Source: Exodus II manual, element node order.
_UPRIGHT_SECOND = {
    "wedge15": [*range(9), 12, 13, 14, 9, 10, 11],
    "hexahedron20": [*range(12), 16, 17, 18, 19, 12, 13, 14, 15],
}


def checked_order(
    points: Array, blocks: tuple[CellBlock, ...], where: str
) -> tuple[tuple[CellBlock, ...], tuple[str, ...]]:
    """Return the blocks with mid-side nodes in VTK's order, and a sentence for each block that was repaired.

    Parameters
    ----------
    points
        ``(n_points, 3)``.
    blocks
        As the format's reader made them; connectivity within range.
    where
        Put in front of an error.

    Notes
    -----
    At most 2000 cells of a block are looked at, evenly spread. A block is in the wrong order when in half of
    them or more a mid-side node is farther from the middle of its edge than half the edge's length.

    Raises
    ------
    InputError
        The order is wrong and no order in use makes it right.

    Examples
    --------
    >>> points = np.array([[0.0, 0, 0], [2, 0, 0], [0, 2, 0], [1, 0, 0], [1, 1, 0], [0, 1, 0]])
    >>> block = CellBlock("triangle6", np.array([[0, 1, 2, 3, 4, 5]]), np.array([0]))
    >>> checked_order(points, (block,), "")[1]
    ()
    """
    checked: list[CellBlock] = []
    notes: list[str] = []
    for block in blocks:
        order = _right_order(points, block)
        if order is None:
            raise InputError(
                f"{where}the mid-side nodes of the {block.cell_type} cells do not lie on the edges they "
                f"belong to (first cell {int(block.index[0])}): the node order is not that of the format. "
                "Write the file with another program or as VTU."
            )
        if order:
            checked.append(replace(block, connectivity=np.ascontiguousarray(block.connectivity[:, order])))
            notes.append(
                f"The {block.cell_type} cells stored their upright edges before the top ones; put in order."
            )
        else:
            checked.append(block)
    return tuple(checked), tuple(notes)


def _right_order(points: Array, block: CellBlock) -> list[int] | None:
    """Return the columns that bring the nodes into order, an empty list for none needed, None if unknown."""
    if _wrong_share(points, block.connectivity, block.cell_type) < 0.5:
        return []
    other = _UPRIGHT_SECOND.get(block.cell_type)
    if other and _wrong_share(points, block.connectivity[:, other], block.cell_type) < 0.5:
        return other
    return None


def _wrong_share(points: Array, connectivity: NDArray[np.int64], cell_type: str) -> float:
    """Return the share of cells with a mid-side node far from the middle of its edge."""
    edges = EDGES.get(cell_type)
    if edges is None or not len(connectivity):
        return 0.0
    picked = np.unique(np.linspace(0, len(connectivity) - 1, _SAMPLE).astype(np.int64))
    nodes = points[connectivity[picked]].astype(np.float64)
    first, second = (nodes[:, [edge[k] for edge in edges]] for k in (0, 1))
    corners = 1 + max(max(edge) for edge in edges)
    middle = nodes[:, corners : corners + len(edges)]
    off = np.linalg.norm(middle - (first + second) / 2, axis=2)
    far = off > _FAR * np.linalg.norm(second - first, axis=2)
    return float(far.any(axis=1).mean())
