"""Small meshes of every element for the record of an installation."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from unturn.elements import ELEMENTS, Element
from unturn.kinematics._symmetric import Floats
from unturn.result import CellBlock, Result
from unturn.source import Source

Ints = NDArray[np.int64]
Corners = tuple[Floats, Ints]

SOURCE = Source(
    "memory",
    "MacNeal and Harder 1985, A proposed standard set of problems to test finite element accuracy, Finite Elem. Anal. "
    "Des. 1, 3-20: plate 0.24 x 0.12 and unit cube, each with one inner cell",
)
_PLATE = np.array(
    [(0, 0), (0.24, 0), (0.24, 0.12), (0, 0.12), (0.04, 0.02), (0.18, 0.03), (0.16, 0.08), (0.08, 0.08)]
)
_QUADS = np.array([(0, 1, 5, 4), (1, 2, 6, 5), (2, 3, 7, 6), (3, 0, 4, 7), (4, 5, 6, 7)])
_CUBE = np.array(
    [
        *((0, 0, 0), (1, 0, 0), (1, 1, 0), (0, 1, 0), (0, 0, 1), (1, 0, 1), (1, 1, 1), (0, 1, 1)),
        *((0.249, 0.342, 0.192), (0.826, 0.288, 0.288), (0.850, 0.649, 0.263), (0.273, 0.750, 0.230)),
        *((0.320, 0.186, 0.643), (0.677, 0.305, 0.683), (0.788, 0.693, 0.644), (0.165, 0.745, 0.702)),
    ]
)
_HEXAHEDRA = np.array(
    [(8, 9, 10, 11, 12, 13, 14, 15), (0, 1, 2, 3, 8, 9, 10, 11), (12, 13, 14, 15, 4, 5, 6, 7), (0, 1, 9, 8, 4, 5, 13, 12),
     (3, 11, 10, 2, 7, 15, 14, 6), (0, 8, 11, 3, 4, 12, 15, 7), (1, 2, 10, 9, 5, 6, 14, 13)]
)  # fmt: skip
_SHEAR = np.array([[1.0, 0.2, -0.1], [0.1, 0.8, 0.3], [-0.2, 0.1, 1.2]])


def patch(row: Element) -> Result:
    """Return the patch of MacNeal and Harder in cells of an element, with straight edges.

    Triangles halve the quadrilaterals of the plate; pyramids join the faces of the cube's cells to their middles, and
    tetrahedra halve those; wedges stand on the triangles in two layers; lines, pixels and voxels have unequal steps.
    """
    corners, cells = _PATCHES[row.shape.name]()
    return _raised(corners, cells, row)


def straight_cell(row: Element) -> Result:
    """Return one cell with parallel opposite sides, in its plane or along its line."""
    v = row.shape.vertices
    corners = v @ _SHEAR[: row.dim, : row.dim].T
    return _raised(corners, np.arange(len(v))[None], row)


def _raised(corners: Floats, cells: Ints, row: Element) -> Result:
    """Return a mesh of cells with these corners; further nodes on straight edges, shared by neighbours."""
    points = np.zeros((len(corners), 3))
    points[:, : corners.shape[1]] = corners
    linear = ELEMENTS[row.shape.name].shape_functions(row.nodes)
    places = np.einsum("an,cnx->cax", linear, points[cells]).reshape(-1, 3)
    _, first, inverse = np.unique(np.round(places, 9) + 0.0, axis=0, return_index=True, return_inverse=True)
    block = CellBlock(row.name, inverse.reshape(len(cells), -1).astype(np.int64), np.arange(len(cells)))
    return Result(places[first], (block,))


def _lines() -> Corners:
    t = np.array([0.0, 0.3, 0.5, 1.0])[:, None]
    return t * np.array([[0.9, 0.4, 0.2]]), np.array([(0, 1), (1, 2), (2, 3)])


def _plate() -> Corners:
    return _PLATE, _QUADS


def _triangles() -> Corners:
    return _PLATE, np.concatenate([_QUADS[:, [0, 1, 2]], _QUADS[:, [0, 2, 3]]])


def _cube() -> Corners:
    return _CUBE, _HEXAHEDRA


def _pyramids() -> Corners:
    middles = _CUBE[_HEXAHEDRA].mean(axis=1)
    faces = ELEMENTS["hexahedron"].shape.faces
    cells = [(*cell[list(face[::-1])], len(_CUBE) + k) for k, cell in enumerate(_HEXAHEDRA) for face in faces]
    return np.concatenate([_CUBE, middles]), np.array(cells)


def _tetrahedra() -> Corners:
    corners, pyramids = _pyramids()
    cells = []
    for *base, apex in pyramids.tolist():
        start = base.index(min(base))  # the diagonal from the lowest node: neighbours agree
        a, b, c, d = base[start:] + base[:start]
        cells += [(a, b, c, apex), (a, c, d, apex)]
    return corners, np.array(cells)


def _wedges() -> Corners:
    flat, triangles = _triangles()
    n = len(flat)
    tilted = 0.05 + 0.1 * flat[:, 0] - 0.05 * flat[:, 1]
    corners = np.concatenate([np.column_stack([flat, z]) for z in (np.zeros(n), tilted, np.full(n, 0.12))])
    return corners, np.concatenate(
        [np.concatenate([triangles + n * k, triangles + n * (k + 1)], axis=1) for k in (0, 1)]
    )


def _pixels() -> Corners:
    corners = np.array([(x, y) for y in (0.0, 0.1, 0.3) for x in (0.0, 0.2, 0.5)])
    return corners, np.array([(k, k + 1, k + 3, k + 4) for k in (0, 1, 3, 4)])


def _voxels() -> Corners:
    corners = np.array([(x, y, z) for z in (0.0, 0.2) for y in (0.0, 0.1, 0.3) for x in (0.0, 0.2, 0.5)])
    return corners, np.array([[k + i for i in (0, 1, 3, 4, 9, 10, 12, 13)] for k in (0, 1, 3, 4)])


_PATCHES: dict[str, Callable[[], Corners]] = {
    "line": _lines, "triangle": _triangles, "quad": _plate, "pixel": _pixels, "tetra": _tetrahedra, "hexahedron": _cube,
    "voxel": _voxels, "wedge": _wedges, "pyramid": _pyramids,
}  # fmt: skip
