"""The elements that hold a point of space, and its reference coordinates in each: by the elements' own shape functions."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unturn.elements import Element
from unturn.kinematics._symmetric import Floats
from unturn.model import Model, ModelBlock

_SLACK = 0.1  # share of a cell's size by which a curved side may lie outside the box of its nodes
_INSIDE = 1e-6  # share of the reference shape within which a point counts as on its border
_ITERATIONS = 25


@dataclass(frozen=True, eq=False)
class Location:
    """A cell that holds the point.

    Parameters
    ----------
    block
        The block of the cell.
    cell
        Its zero-based position in the file.
    connectivity
        `(n_nodes,)` its nodes.
    reference
        `(dim,)` reference coordinates of the point.
    """

    block: ModelBlock
    cell: int
    connectivity: NDArray[np.int64]
    reference: Floats


def locate(model: Model, point: Floats) -> list[Location]:
    """Return every computed cell of the highest dimension that holds a point; several where it lies on their border.

    Parameters
    ----------
    model
        The model.
    point
        `(3,)` reference coordinates, in the unit of the points.

    Notes
    -----
    Newton's method on `sum_a N_a(xi) X_a = point`; for surfaces and lines in space the least-squares step, and the point
    must lie on them.
    """
    found = []
    for block in model.blocks:
        if block.row is None or block.row.dim != model.dimension or not len(block.active):
            continue
        connectivity, index = block.connectivity, block.index
        for k in _near(model.points, connectivity, point):
            xi = _reference(block.row, model.points[connectivity[k]], point)
            if xi is not None:
                found.append(Location(block, int(index[k]), connectivity[k], xi))
    return found


def _near(points: Floats, connectivity: NDArray[np.int64], point: Floats) -> NDArray[np.int64]:
    """Return positions of the cells in whose box, made a little larger, the point lies."""
    low, high = np.full((len(connectivity), 3), np.inf), np.full((len(connectivity), 3), -np.inf)
    for nodes in connectivity.T:
        np.fmin(low, points[nodes], out=low)
        np.fmax(high, points[nodes], out=high)
    with np.errstate(invalid="ignore"):
        slack = _SLACK * (high - low).max(axis=1, keepdims=True)
        near: NDArray[np.bool_] = ((point >= low - slack) & (point <= high + slack)).all(axis=1)
    return np.flatnonzero(near)


def _reference(row: Element, nodes: Floats, point: Floats) -> Floats | None:
    """Return the reference coordinates of a point in one cell, or None when it is not in it."""
    X = nodes - point
    size = float(np.ptp(X, axis=0).max())
    xi = np.array(row.centroid)
    for _ in range(_ITERATIONS):
        away = row.shape_functions(xi[None])[0] @ X
        J = row.shape_gradients(xi[None])[0] @ X
        step = np.linalg.lstsq(J.T, -away, rcond=None)[0]
        xi = xi + step
        if not np.isfinite(xi).all() or np.abs(xi).max() > 10.0:
            return None
        if np.abs(step).max() < 1e-12:
            break
    on_it = np.abs(row.shape_functions(xi[None])[0] @ X).max() <= _INSIDE * size
    return xi if on_it and _holds(row, xi) else None


def _holds(row: Element, xi: Floats) -> bool:
    """Whether the reference shape holds a point, to rounding."""
    shape = row.shape
    for normal, facet in zip(shape.facet_normals, shape.facets):
        extent = np.ptp(shape.vertices @ normal)
        if (xi - shape.vertices[facet[0]]) @ normal > _INSIDE * extent:
            return False
    return True
