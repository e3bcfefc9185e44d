"""Straight cells: where their nodes are, whether they are there in another order, and what is exact on them."""

from __future__ import annotations

from itertools import permutations

import numpy as np
from numpy.typing import NDArray

from unturn.elements import ELEMENTS, Element
from unturn.kinematics._symmetric import Floats

_SYMMETRIC = ("line", "quad", "pixel", "hexahedron", "voxel")
"""Shapes with a centre of symmetry: there the gradient of straight cells gains an order."""
_COMPLETE = ("quad9", "hexahedron27", "wedge18")
_COMPLETE_FAMILIES = ("VTK_LAGRANGE_QUADRILATERAL", "VTK_LAGRANGE_HEXAHEDRON", "VTK_LAGRANGE_WEDGE")
"""Elements that hold every product of two functions of their corners, so every quadratic on any cell with straight edges."""


def exact_at_middle(row: Element) -> bool:
    """Return whether straight cells of an element give the gradient of every quadratic exactly at their centroid."""
    return row.order >= 2 or row.shape.name in _SYMMETRIC


def reordered_cells(points: Floats, row: Element, allowed: Floats) -> NDArray[np.bool_]:
    """Return which cells hold the nodes of a straight cell, in whatever order.

    Parameters
    ----------
    points
        `(m, n_nodes, 3)` coordinates of the nodes.
    row
        The element.
    allowed
        `(m,)` distance by which a node may be off its place.
    """
    places = _frame(row)[1]
    n = row.n_corners
    found = np.zeros(len(points), dtype=bool)
    vertex_alike = row.shape.name != "pyramid"  # any corner may then stand for the first
    for order in permutations(range(n), row.dim + 1):
        if vertex_alike and order[0] != 0:
            continue
        todo = np.flatnonzero(~found)
        if not len(todo):
            break
        at = points[todo]
        guess = np.einsum("af,mfi->mai", places, at[:, list(order)])
        fits = _same_places(guess[:, :n], at[:, :n], allowed[todo])
        fits[fits] = _same_places(guess[fits], at[fits], allowed[todo][fits])
        found[todo[fits]] = True
    return found


def moved_between_edges(points: Floats, row: Element, allowed: Floats) -> NDArray[np.bool_]:
    """Return which cells have straight edges and every further node at the place of another one.

    Parameters
    ----------
    points, row, allowed
        As in `reordered_cells`; the corners are taken as they are listed.
    """
    if row.n_nodes == row.n_corners:
        return np.zeros(len(points), dtype=bool)
    linear = ELEMENTS[row.shape.name].shape_functions(row.nodes)
    guess = np.einsum("ac,mci->mai", linear, points[:, : row.n_corners])
    off = np.linalg.norm(guess - points, axis=-1).max(axis=1) > allowed
    found: NDArray[np.bool_] = off & _same_places(guess, points, allowed)
    return found


def _same_places(a: Floats, b: Floats, allowed: Floats) -> NDArray[np.bool_]:
    """Return which rows of two lists `(m, n, 3)` of points hold the same points in any order."""
    apart = np.linalg.norm(a[:, :, None] - b[:, None], axis=-1)
    near = apart <= allowed[:, None, None]
    one_each: NDArray[np.bool_] = (near.sum(axis=1) == 1).all(axis=1) & (near.sum(axis=2) == 1).all(axis=1)
    return one_each


def straight_places(row: Element) -> tuple[tuple[int, ...], Floats]:
    """Return corners, and the nodes as combinations of them, in the cells on which an element holds all quadratics.

    Those are cells with parallel opposite sides; for elements that hold all products of the functions of their corners,
    all with straight edges.
    """
    if row.name in _COMPLETE or (row.name in _COMPLETE_FAMILIES and row.order >= 2):
        return tuple(range(row.n_corners)), ELEMENTS[row.shape.name].shape_functions(row.nodes)
    return _frame(row)


def _frame(row: Element) -> tuple[tuple[int, ...], Floats]:
    """Return corners that span the cell, and the nodes as combinations of them `(n_nodes, dim + 1)`."""
    v = row.shape.vertices
    for corners in permutations(range(row.n_corners), row.dim + 1):
        edges = v[list(corners[1:])] - v[corners[0]]
        if abs(np.linalg.det(edges)) > 1e-9:
            local = (row.nodes - v[corners[0]]) @ np.linalg.inv(edges)
            return corners, np.concatenate([1.0 - local.sum(axis=1, keepdims=True), local], axis=1)
    raise AssertionError(row.name)  # a shape whose corners span less than its dimension does not exist
