"""VTK cell type numbers, the names this project uses for them, and how many nodes each must have."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

# Source: VTK 9.7, vtkCellType.h (numbers and node counts); names as in meshio 5.3, `_vtk_common.py`.
# None: the number of nodes varies.
_CELLS: dict[int, tuple[str, int | None]] = {
    0: ("empty", 0),
    1: ("vertex", 1),
    2: ("VTK_POLY_VERTEX", None),
    3: ("line", 2),
    4: ("VTK_POLY_LINE", None),
    5: ("triangle", 3),
    6: ("VTK_TRIANGLE_STRIP", None),
    7: ("polygon", None),
    8: ("quad", 4),
    9: ("quad", 4),
    10: ("tetra", 4),
    11: ("hexahedron", 8),
    12: ("hexahedron", 8),
    13: ("wedge", 6),
    14: ("pyramid", 5),
    15: ("penta_prism", 10),
    16: ("hexa_prism", 12),
    21: ("line3", 3),
    22: ("triangle6", 6),
    23: ("quad8", 8),
    24: ("tetra10", 10),
    25: ("hexahedron20", 20),
    26: ("wedge15", 15),
    27: ("pyramid13", 13),
    28: ("quad9", 9),
    29: ("hexahedron27", 27),
    30: ("quad6", 6),
    31: ("wedge12", 12),
    32: ("wedge18", 18),
    33: ("hexahedron24", 24),
    34: ("triangle7", 7),
    35: ("line4", 4),
    36: ("VTK_QUADRATIC_POLYGON", None),
    37: ("VTK_TRIQUADRATIC_PYRAMID", 19),
    41: ("VTK_CONVEX_POINT_SET", None),
    42: ("polyhedron", None),
    68: ("VTK_LAGRANGE_CURVE", None),
    69: ("VTK_LAGRANGE_TRIANGLE", None),
    70: ("VTK_LAGRANGE_QUADRILATERAL", None),
    71: ("VTK_LAGRANGE_TETRAHEDRON", None),
    72: ("VTK_LAGRANGE_HEXAHEDRON", None),
    73: ("VTK_LAGRANGE_WEDGE", None),
    74: ("VTK_LAGRANGE_PYRAMID", None),
    75: ("VTK_BEZIER_CURVE", None),
    76: ("VTK_BEZIER_TRIANGLE", None),
    77: ("VTK_BEZIER_QUADRILATERAL", None),
    78: ("VTK_BEZIER_TETRAHEDRON", None),
    79: ("VTK_BEZIER_HEXAHEDRON", None),
    80: ("VTK_BEZIER_WEDGE", None),
    81: ("VTK_BEZIER_PYRAMID", None),
}

_LEAST_NODES = {
    2: 1, 4: 2, 6: 3, 7: 3, 36: 6, 41: 4, 42: 4,
    68: 2, 69: 3, 70: 4, 71: 4, 72: 8, 73: 6, 74: 5,
    75: 2, 76: 3, 77: 4, 78: 4, 79: 8, 80: 6, 81: 5,
}  # fmt: skip

PIXEL, VOXEL, POLYHEDRON = 8, 11, 42

# Node order of the axis-aligned types (lexicographic) turned into that of the general quad and hexahedron.
TURNED: dict[int, list[int]] = {PIXEL: [0, 1, 3, 2], VOXEL: [0, 1, 3, 2, 4, 5, 7, 6]}

_NUMBERS = {name: number for number, (name, _) in _CELLS.items() if number not in TURNED}


def is_cell_type(number: int) -> bool:
    """Return whether VTK has a cell type of this number."""
    return number in _CELLS


def cell_name(number: int) -> str:
    """Return the cell type name of a VTK type number; ``VTK_<number>`` for one that is not known here.

    Examples
    --------
    >>> cell_name(24), cell_name(71), cell_name(250)
    ('tetra10', 'VTK_LAGRANGE_TETRAHEDRON', 'VTK_250')
    """
    return _CELLS[number][0] if number in _CELLS else f"VTK_{number}"


def cell_number(name: str) -> int | None:
    """Return the VTK type number of a cell type name, or None when VTK has no such cell.

    Examples
    --------
    >>> cell_number("hexahedron20"), cell_number("VTK_250"), cell_number("tetra21")
    (25, 250, None)
    """
    if name in _NUMBERS:
        return _NUMBERS[name]
    number = name.removeprefix("VTK_")
    return int(number) if name.startswith("VTK_") and number.isdigit() else None


def expected_nodes(number: int, n_nodes: int) -> str:
    """Return what was expected when a cell of this type cannot have `n_nodes` nodes, else an empty string.

    Examples
    --------
    >>> expected_nodes(10, 4), expected_nodes(10, 10), expected_nodes(71, 11)
    ('', '4', '4, 10, 15, 20, 35 ...')
    """
    if number not in _CELLS:
        return ""
    fixed = _CELLS[number][1]
    if fixed is not None:
        return "" if n_nodes == fixed else str(fixed)
    if number in (69, 76) and n_nodes != 7 and not _is_simplex_count(n_nodes, 2):
        return "3, 6, 7, 10, 15 ..."
    if number in (71, 78) and n_nodes != 15 and not _is_simplex_count(n_nodes, 3):
        return "4, 10, 15, 20, 35 ..."
    least = _LEAST_NODES[number]
    return "" if n_nodes >= least else f"{least} or more"


def _is_simplex_count(n: int, dimension: int) -> bool:
    """Whether n is the node count of a Lagrange triangle (2) or tetrahedron (3) of some degree."""
    order, count = 1, dimension + 1
    while count < n:
        order += 1
        count = count * (order + dimension) // order
    return count == n


def uniform_types(number: int, n_cells: int) -> NDArray[Any]:
    """Return ``(n_cells,)`` uint8 VTK type numbers, all the same."""
    return np.full(n_cells, number, dtype=np.uint8)
