"""Node order of MSH elements of order three and higher."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from unturn.elements import FAMILIES

Corners = NDArray[np.int64]


@dataclass(frozen=True)
class _Shape:
    """Edges and faces in the direction in which MSH numbers their inner nodes.

    `lost` is the difference in order between a cell and the cell that its inner nodes form.
    """

    edges: tuple[tuple[int, int], ...]
    faces: tuple[tuple[int, ...], ...]
    lost: int

    def inner(self, corners: Corners, order: int) -> Corners:
        """Return the corners of the inner cell: one step along every edge from each corner."""
        moved = corners.copy()
        for a, b in self.edges:
            step = (corners[b] - corners[a]) // order
            moved[a] += step
            moved[b] -= step
        return moved

    def nodes(self, corners: Corners, order: int) -> list[Corners]:
        """Return the nodes of the cell: corners, edges, faces, then the inner cell alike."""
        if order <= 0:
            return [corners[0]] if order == 0 else []
        found = list(corners)
        for a, b in self.edges:
            found += [corners[a] + s * (corners[b] - corners[a]) // order for s in range(1, order)]
        for face in self.faces:
            shape, held = _FACES[len(face)], corners[list(face)]
            found += shape.nodes(shape.inner(held, order), order - shape.lost)
        return found + self.nodes(self.inner(corners, order), order - self.lost)


# Source: Gmsh 4.15 reference manual, node ordering; directions as its local node coordinates have them.
_FACES = {
    3: _Shape(((0, 1), (1, 2), (2, 0)), (), 3),
    4: _Shape(((0, 1), (1, 2), (2, 3), (3, 0)), (), 2),
}
_SHAPES = {
    "VTK_LAGRANGE_TRIANGLE": _FACES[3],
    "VTK_LAGRANGE_QUADRILATERAL": _FACES[4],
    "VTK_LAGRANGE_TETRAHEDRON": _Shape(
        ((0, 1), (1, 2), (2, 0), (3, 0), (3, 2), (3, 1)),
        ((0, 2, 1), (0, 1, 3), (0, 3, 2), (3, 1, 2)),
        4,
    ),
    "VTK_LAGRANGE_HEXAHEDRON": _Shape(
        ((0, 1), (0, 3), (0, 4), (1, 2), (1, 5), (2, 3), (2, 6), (3, 7), (4, 5), (4, 7), (5, 6), (6, 7)),
        ((0, 3, 2, 1), (0, 1, 5, 4), (0, 4, 7, 3), (1, 2, 6, 5), (2, 3, 7, 6), (4, 5, 6, 7)),
        2,
    ),
}


@lru_cache
def lagrange_columns(cell_type: str, n_nodes: int) -> tuple[int, ...]:
    """Return the columns that bring the nodes of an MSH element into the order of VTK's Lagrange cell.

    Examples
    --------
    >>> lagrange_columns("VTK_LAGRANGE_QUADRILATERAL", 16)
    (0, 1, 2, 3, 4, 5, 6, 7, 9, 8, 11, 10, 12, 13, 15, 14)
    """
    if cell_type not in _SHAPES:
        return tuple(range(n_nodes))
    family = FAMILIES[cell_type]
    order = next(k for k in range(1, 11) if len(family.lattice(k)) == n_nodes)
    corners = order * np.array(family.corners, dtype=np.int64)
    found = _SHAPES[cell_type].nodes(corners, order)
    place = {tuple(node.tolist()): k for k, node in enumerate(found)}
    return tuple(place[tuple(node.tolist())] for node in family.lattice(order))
