"""Tiny meshes for tests, made from the element table: any element, no file, no array but the nodes.

`distorted_cell` and `affine_cell` are one cell; `patch` is a few cells that share nodes. `curved` bends any
of them smoothly, so that shared nodes stay shared.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from unturn.elements import ELEMENTS, Element
from unturn.result import CellBlock, Result

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Source: MacNeal and Harder 1985, A proposed standard set of problems to test finite element accuracy, Finite
# Elem. Anal. Des. 1, 3-20: plate 0.24 x 0.12 and unit cube, each with one inner cell.
PLATE = np.array(
    [(0, 0), (0.24, 0), (0.24, 0.12), (0, 0.12), (0.04, 0.02), (0.18, 0.03), (0.16, 0.08), (0.08, 0.08)]
)
PLATE_QUADS = np.array([(0, 1, 5, 4), (1, 2, 6, 5), (2, 3, 7, 6), (3, 0, 4, 7), (4, 5, 6, 7)])
CUBE = np.array(
    [
        *((0, 0, 0), (1, 0, 0), (1, 1, 0), (0, 1, 0), (0, 0, 1), (1, 0, 1), (1, 1, 1), (0, 1, 1)),
        *((0.249, 0.342, 0.192), (0.826, 0.288, 0.288), (0.850, 0.649, 0.263), (0.273, 0.750, 0.230)),
        *((0.320, 0.186, 0.643), (0.677, 0.305, 0.683), (0.788, 0.693, 0.644), (0.165, 0.745, 0.702)),
    ]
)
CUBE_HEXAHEDRA = np.array(
    [
        (8, 9, 10, 11, 12, 13, 14, 15),
        (0, 1, 2, 3, 8, 9, 10, 11),
        (12, 13, 14, 15, 4, 5, 6, 7),
        (0, 1, 9, 8, 4, 5, 13, 12),
        (3, 11, 10, 2, 7, 15, 14, 6),
        (0, 8, 11, 3, 4, 12, 15, 7),
        (1, 2, 10, 9, 5, 6, 14, 13),
    ]
)


class Mesh(NamedTuple):
    """``(n_points, 3)`` points, ``(n_cells, n_nodes)`` cells, and the element they are of."""

    points: Floats
    cells: Ints
    element: Element

    @property
    def cell_type(self) -> str:
        """meshio's name."""
        return self.element.name

    def result(self, **point_data: Any) -> Result:
        """A result in memory with these point arrays."""
        block = CellBlock(self.cell_type, self.cells, np.arange(len(self.cells), dtype=np.int64))
        return Result(self.points, (block,), point_data=point_data)


def _three(points: Floats) -> Floats:
    return np.concatenate([points, np.zeros((len(points), 3 - points.shape[1]))], axis=1)


def _affine(dim: int, seed: int) -> Floats:
    """A well-shaped linear map with positive determinant."""
    noise = np.random.default_rng(seed).uniform(-0.3, 0.3, (dim, dim))
    return np.eye(dim) * np.array([1.0, 0.8, 1.3])[:dim] + noise


def affine_cell(element: Element, seed: int = 0) -> Mesh:
    """One straight cell with parallel opposite sides."""
    points = element.nodes @ _affine(element.dim, seed).T + 0.5
    return Mesh(_three(points), np.arange(element.n_nodes)[None], element)


def distorted_cell(element: Element, amount: float = 0.06, seed: int = 0) -> Mesh:
    """One cell with every node moved at random: curved where the element can be curved."""
    points = affine_cell(element, seed).points.copy()
    noise = np.random.default_rng(seed + 1).uniform(-1, 1, (element.n_nodes, element.dim))
    points[:, : element.dim] += amount / element.order**2 * noise
    return Mesh(points, np.arange(element.n_nodes)[None], element)


def straight(corners: Floats, cells: Ints, element: Element) -> Mesh:
    """Raise a mesh of linear cells to `element`: further nodes on straight edges, shared by neighbours."""
    linear = ELEMENTS[element.shape.name].shape_functions(element.nodes)
    places = np.einsum("an,cnx->cax", linear, _three(corners)[cells])
    flat = places.reshape(-1, 3)
    _, first, inverse = np.unique(np.round(flat, 9) + 0.0, axis=0, return_index=True, return_inverse=True)
    return Mesh(flat[first], inverse.reshape(len(cells), -1).astype(np.int64), element)


def patch(element: Element) -> Mesh:
    """A few straight, unequal cells that share nodes; MacNeal and Harder's where the shape allows it."""
    corners, cells = _PATCHES[element.shape.name]()
    return straight(corners, cells, element)


def curved(mesh: Mesh, amount: float = 0.03) -> Mesh:
    """Bend a mesh by a smooth map within its own dimension."""
    x = mesh.points / np.ptp(mesh.points, axis=0).max()
    wave = np.stack(
        [np.sin(3 * x[:, 1] + x[:, 2]), np.cos(2 * x[:, 0]) * x[:, 2] + x[:, 0] ** 2, x[:, 0] * x[:, 1]], 1
    )
    wave[:, mesh.element.dim :] = 0
    return mesh._replace(points=mesh.points + amount * np.ptp(mesh.points, axis=0).max() * wave)


def _line_patch() -> tuple[Floats, Ints]:
    t = np.array([0.0, 0.3, 0.5, 1.0])[:, None]
    return t * np.array([[0.9, 0.4, 0.2]]), np.array([(0, 1), (1, 2), (2, 3)])


def _quad_patch() -> tuple[Floats, Ints]:
    return PLATE, PLATE_QUADS


def _triangle_patch() -> tuple[Floats, Ints]:
    return PLATE, np.concatenate([PLATE_QUADS[:, [0, 1, 2]], PLATE_QUADS[:, [0, 2, 3]]])


def _hexahedron_patch() -> tuple[Floats, Ints]:
    return CUBE, CUBE_HEXAHEDRA


def _pyramid_patch() -> tuple[Floats, Ints]:
    """Six pyramids in each hexahedron, with the apex in its middle."""
    middles = CUBE[CUBE_HEXAHEDRA].mean(axis=1)
    faces = ELEMENTS["hexahedron"].shape.faces
    cells = [
        (*(int(hexahedron[v]) for v in face[::-1]), len(CUBE) + h)
        for h, hexahedron in enumerate(CUBE_HEXAHEDRA)
        for face in faces
    ]
    return np.concatenate([CUBE, middles]), np.array(cells)


def _tetra_patch() -> tuple[Floats, Ints]:
    """Each pyramid cut along the diagonal of its base that holds the lowest node: neighbours agree."""
    corners, pyramids = _pyramid_patch()
    cells = []
    for *base, apex in pyramids.tolist():
        start = base.index(min(base))
        a, b, c, d = base[start:] + base[:start]
        cells += [(a, b, c, apex), (a, c, d, apex)]
    return corners, np.array(cells)


def _wedge_patch() -> tuple[Floats, Ints]:
    """The triangles of the plate in two layers, the middle one tilted."""
    flat, triangles = _triangle_patch()
    n = len(flat)
    heights = (np.zeros(n), 0.05 + 0.1 * flat[:, 0] - 0.05 * flat[:, 1], np.full(n, 0.12))
    corners = np.concatenate([np.column_stack([flat, z]) for z in heights])
    corners[n + 4 : 2 * n, :2] += np.array(
        [(0.004, -0.002), (-0.003, 0.002), (0.002, 0.003), (-0.002, -0.004)]
    )
    cells = [np.concatenate([triangles + n * k, triangles + n * (k + 1)], axis=1) for k in (0, 1)]
    return corners, np.concatenate(cells)


def _pixel_patch() -> tuple[Floats, Ints]:
    corners = np.array([(x, y) for y in (0.0, 0.1, 0.3) for x in (0.0, 0.2, 0.5)])
    return corners, np.array([(k, k + 1, k + 3, k + 4) for k in (0, 1, 3, 4)])


def _voxel_patch() -> tuple[Floats, Ints]:
    corners = np.array([(x, y, z) for z in (0.0, 0.2) for y in (0.0, 0.1, 0.3) for x in (0.0, 0.2, 0.5)])
    return corners, np.array([[k + i for i in (0, 1, 3, 4, 9, 10, 12, 13)] for k in (0, 1, 3, 4)])


_PATCHES = {
    "line": _line_patch,
    "triangle": _triangle_patch,
    "quad": _quad_patch,
    "pixel": _pixel_patch,
    "tetra": _tetra_patch,
    "hexahedron": _hexahedron_patch,
    "voxel": _voxel_patch,
    "wedge": _wedge_patch,
    "pyramid": _pyramid_patch,
}
