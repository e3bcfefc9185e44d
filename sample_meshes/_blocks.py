"""Structured blocks of quadratic bricks, and the same blocks cut into quadratic tetrahedra.

A block is a mapping of the unit cube, evaluated on a grid that is twice as fine as the bricks: the points in
between are the mid-side nodes, so that they follow arcs as the corners do.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]
Mapping3 = Callable[[Floats, Floats, Floats], tuple[Floats, Floats, Floats]]

# Source: the VTK file formats, cell types VTK_QUADRATIC_HEXAHEDRON (25) and VTK_QUADRATIC_TETRA (24).
CORNERS = ((0, 0, 0), (2, 0, 0), (2, 2, 0), (0, 2, 0), (0, 0, 2), (2, 0, 2), (2, 2, 2), (0, 2, 2))
HEXA_EDGES = (
    *((0, 1), (1, 2), (2, 3), (3, 0)),
    *((4, 5), (5, 6), (6, 7), (7, 4)),
    *((0, 4), (1, 5), (2, 6), (3, 7)),
)
TETRA_EDGES = ((0, 1), (1, 2), (0, 2), (0, 3), (1, 3), (2, 3))
HEXA_FACES = ((0, 1, 2, 3), (4, 7, 6, 5), (0, 4, 5, 1), (1, 5, 6, 2), (2, 6, 7, 3), (3, 7, 4, 0))


def _middle(a: int, b: int) -> tuple[int, int, int]:
    p, q = CORNERS[a], CORNERS[b]
    return ((p[0] + q[0]) // 2, (p[1] + q[1]) // 2, (p[2] + q[2]) // 2)


def block(mapping: Mapping3, n: tuple[int, int, int]) -> tuple[Floats, Ints]:
    """Return points ``(m, 3)`` and ``(n_cells, 3, 3, 3)`` point numbers of the bricks of one mapped cube."""
    axes = [np.linspace(0.0, 1.0, 2 * k + 1) for k in n]
    grid = np.stack(mapping(*np.meshgrid(*axes, indexing="ij")), axis=-1)
    first = grid[:3, :3, :3]
    edges = [
        first[2, 0, 0] - first[0, 0, 0],
        first[0, 2, 0] - first[0, 0, 0],
        first[0, 0, 2] - first[0, 0, 0],
    ]
    if np.linalg.det(edges) < 0.0:
        grid = grid[::-1]
    number = np.arange(grid[..., 0].size).reshape(grid.shape[:3])
    cells = [number[2 * i : 2 * i + 3, 2 * j : 2 * j + 3, 2 * k : 2 * k + 3] for i, j, k in np.ndindex(n)]
    return grid.reshape(-1, 3), np.array(cells)


def join(blocks: Sequence[tuple[Floats, Ints]]) -> tuple[Floats, Ints, Ints]:
    """Return the points, the bricks and the block of each brick, coincident points (1e-9 m) made one."""
    points = np.concatenate([p for p, _ in blocks])
    start = np.cumsum([0, *(len(p) for p, _ in blocks)])
    cells = np.concatenate([c + s for (_, c), s in zip(blocks, start)])
    owner = np.repeat(np.arange(len(blocks)), [len(c) for _, c in blocks])
    _, first, inverse = np.unique(
        np.round(points / 1e-9).astype(np.int64), axis=0, return_index=True, return_inverse=True
    )
    return points[first], inverse.ravel()[cells], owner


def _only_used(points: Floats, cells: Ints) -> tuple[Floats, Ints]:
    used, renumbered = np.unique(cells, return_inverse=True)
    return points[used], renumbered.reshape(cells.shape)


def as_hexahedron20(points: Floats, bricks: Ints) -> tuple[Floats, Ints]:
    """Return points and ``(n, 20)`` connectivity in VTK's node order."""
    local = [*CORNERS, *(_middle(a, b) for a, b in HEXA_EDGES)]
    return _only_used(points, np.stack([bricks[:, i, j, k] for i, j, k in local], axis=1))


def _tetrahedra_of(brick: Ints) -> list[list[int]]:
    """Cut one brick into six from its smallest corner number, so that neighbours share the face diagonals."""
    number = [int(brick[c]) for c in CORNERS]
    apex = int(np.argmin(number))
    found = []
    for face in HEXA_FACES:
        if apex in face:
            continue
        low = min(range(4), key=lambda i: number[face[i]])
        a, b, c, d = (face[(low + i) % 4] for i in range(4))
        found += [[a, b, c, apex], [a, c, d, apex]]
    return [
        [number[v] for v in tetra] + [int(brick[_middle(tetra[a], tetra[b])]) for a, b in TETRA_EDGES]
        for tetra in found
    ]


def as_tetra10(points: Floats, bricks: Ints) -> tuple[Floats, Ints]:
    """Return points and ``(6 n, 10)`` connectivity in VTK's node order, six tetrahedra a brick in turn."""
    return _only_used(points, np.array([tetra for brick in bricks for tetra in _tetrahedra_of(brick)]))
