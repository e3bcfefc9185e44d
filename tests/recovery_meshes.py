"""Blocks of cells for recovery: every element, structured or moved at random, and smooth fields on them."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

import meshes
from test_fields_convergence import unit_grid
from unturn.elements import ELEMENTS, Element
from unturn.model import Model, PlaneOptions, build_model

Floats = NDArray[np.float64]


def block(row: Element, n: int = 3, move: float = 0.0, border: bool = False) -> meshes.Mesh:
    """`n` cells a direction in the unit line, square or cube; corners moved at random by a share of the cell size."""
    corners, cells = _corners(row, n)
    if move:
        shift = np.random.default_rng(1).uniform(-move, move, corners.shape) / n
        if not border:
            shift[(np.abs(corners) < 1e-9) | (np.abs(corners - 1) < 1e-9)] = 0.0
        shift[:, row.dim :] = 0.0
        corners = corners + shift
    return meshes.straight(corners, cells, row)


def _corners(row: Element, n: int) -> tuple[Floats, NDArray[np.int64]]:
    shape = row.shape.name
    if shape == "line":
        t = np.linspace(0, 1, n + 1)
        return t[:, None] * [1.0, 0, 0], np.stack([np.arange(n), np.arange(1, n + 1)], 1)
    box = {"pixel": "quad", "voxel": "hexahedron", "pyramid": "hexahedron"}.get(shape, shape)
    grid = unit_grid(box, n)
    if shape == "pixel":
        return grid.points, grid.cells[:, [0, 1, 3, 2]]
    if shape == "voxel":
        return grid.points, grid.cells[:, [0, 1, 3, 2, 4, 5, 7, 6]]
    if shape != "pyramid":
        return grid.points, grid.cells
    faces = ELEMENTS["hexahedron"].shape.faces
    middles = len(grid.points) + np.arange(len(grid.cells))
    cells = [np.column_stack([grid.cells[:, list(face[::-1])], middles]) for face in faces]
    return np.concatenate([grid.points, grid.points[grid.cells].mean(axis=1)]), np.concatenate(cells)


def model_of(mesh: meshes.Mesh, u: Floats, **arrays: Any) -> Model:
    """The model of a mesh with displacement `u`; plane meshes in plane strain."""
    plane = PlaneOptions("strain") if mesh.element.dim == 2 else None
    return build_model(mesh.result(u=u, **arrays), plane=plane, displacement="u")


def one_group(model: Model) -> NDArray[np.int64]:
    """Every cell in one group."""
    return np.zeros(model.result.n_cells, dtype=np.int64)


def smooth(x: Floats, dim: int) -> tuple[Floats, Floats]:
    """A smooth displacement `(n, 3)` within the first `dim` directions, and its gradient `(3, 3, n)`."""
    a, b, c = x.T if dim == 3 else (x[:, 0], x[:, 1], np.zeros(len(x)))
    s, t, p, q = 2 * a + b, 1.5 * b + 0.5 * c, np.exp(0.7 * c), 2 * a * b + c
    u = np.stack([np.sin(s) * p, np.cos(t) * a, np.sin(q)], 1)
    zero = np.zeros(len(x))
    H = np.array(
        [
            [2 * np.cos(s) * p, np.cos(s) * p, 0.7 * np.sin(s) * p],
            [np.cos(t), -1.5 * np.sin(t) * a, -0.5 * np.sin(t) * a],
            [2 * b * np.cos(q), 2 * a * np.cos(q), np.cos(q) + zero],
        ]
    )
    u[:, dim:] = 0.0
    H[dim:] = H[:, dim:] = 0.0
    return u, H
