"""MSH element types and their node order.

Source: Gmsh 4.13 reference manual, MSH file format and node ordering; names and node counts as in meshio 5.3.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from unturn.io._msh_lagrange import lagrange_columns
from unturn.io._node_order import PLACES, Places

CELLS: dict[int, tuple[str, int]] = {
    1: ("line", 2),
    2: ("triangle", 3),
    3: ("quad", 4),
    4: ("tetra", 4),
    5: ("hexahedron", 8),
    6: ("wedge", 6),
    7: ("pyramid", 5),
    8: ("line3", 3),
    9: ("triangle6", 6),
    10: ("quad9", 9),
    11: ("tetra10", 10),
    12: ("hexahedron27", 27),
    13: ("wedge18", 18),
    14: ("pyramid14", 14),
    15: ("vertex", 1),
    16: ("quad8", 8),
    17: ("hexahedron20", 20),
    18: ("wedge15", 15),
    19: ("pyramid13", 13),
    21: ("VTK_LAGRANGE_TRIANGLE", 10),
    23: ("VTK_LAGRANGE_TRIANGLE", 15),
    25: ("VTK_LAGRANGE_TRIANGLE", 21),
    26: ("VTK_LAGRANGE_CURVE", 4),
    27: ("VTK_LAGRANGE_CURVE", 5),
    28: ("VTK_LAGRANGE_CURVE", 6),
    29: ("VTK_LAGRANGE_TETRAHEDRON", 20),
    30: ("VTK_LAGRANGE_TETRAHEDRON", 35),
    31: ("VTK_LAGRANGE_TETRAHEDRON", 56),
    36: ("VTK_LAGRANGE_QUADRILATERAL", 16),
    37: ("VTK_LAGRANGE_QUADRILATERAL", 25),
    38: ("VTK_LAGRANGE_QUADRILATERAL", 36),
    90: ("wedge40", 40),
    91: ("wedge75", 75),
    92: ("VTK_LAGRANGE_HEXAHEDRON", 64),
    93: ("VTK_LAGRANGE_HEXAHEDRON", 125),
    94: ("VTK_LAGRANGE_HEXAHEDRON", 216),
}
"""MSH type -> name and number of nodes. Wedges above order two keep MSH's own node order and are not computed."""

_TETRA: Places = ((0, 1), (1, 2), (2, 0), (3, 0), (2, 3), (1, 3))
_PYRAMID: Places = ((0, 1), (0, 3), (0, 4), (1, 2), (1, 4), (2, 3), (2, 4), (3, 4))
_WEDGE: Places = ((0, 1), (0, 2), (0, 3), (1, 2), (1, 4), (2, 5), (3, 4), (3, 5), (4, 5))
_HEXAHEDRON: Places = (
    (0, 1), (0, 3), (0, 4), (1, 2), (1, 5), (2, 3), (2, 6), (3, 7), (4, 5), (4, 7), (5, 6), (6, 7)
)  # fmt: skip
_HEXAHEDRON_FACES: Places = (
    (0, 3, 2, 1), (0, 1, 5, 4), (0, 4, 7, 3), (1, 2, 6, 5), (2, 3, 7, 6), (4, 5, 6, 7)
)  # fmt: skip
_MSH_PLACES: dict[str, Places] = {
    "tetra10": _TETRA,
    "pyramid13": _PYRAMID,
    "pyramid14": (*_PYRAMID, (0, 3, 2, 1)),
    "wedge15": _WEDGE,
    "wedge18": (*_WEDGE, (0, 1, 4, 3), (0, 3, 5, 2), (1, 2, 5, 4)),
    "hexahedron20": _HEXAHEDRON,
    "hexahedron27": (*_HEXAHEDRON, *_HEXAHEDRON_FACES, tuple(range(8))),
}


def to_vtk_order(cell_type: str, nodes: NDArray[np.int64]) -> NDArray[np.int64]:
    """Return the nodes ``(n, n_nodes)`` of MSH elements in VTK's order."""
    if cell_type.startswith("VTK_LAGRANGE"):
        return nodes[:, lagrange_columns(cell_type, nodes.shape[1])]
    if cell_type not in _MSH_PLACES:
        return nodes
    theirs = [frozenset(place) for place in _MSH_PLACES[cell_type]]
    corners = nodes.shape[1] - len(theirs)
    further = [corners + theirs.index(frozenset(place)) for place in PLACES[cell_type]]
    return nodes[:, [*range(corners), *further]]
