"""Surfaces cut at their folds, lines at their kinks: nothing is smooth across them."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.sparse.csgraph import connected_components

from unturn.gradient import chunk_ranges
from unturn.kinematics._symmetric import Floats
from unturn.model import Model, ModelBlock
from unturn.recovery._nodes import Ints, node_shares


def sheets(model: Model, groups: NDArray[np.integer], angle: float = 40.0) -> Ints:
    """Return groups `(n_cells,)` in which surfaces are cut at folds and lines at kinks.

    Parameters
    ----------
    model
        See `build_model`.
    groups
        `(n_cells,)` group of each cell in file order, integers.
    angle
        Degrees between the normals (tangents of lines) of neighbouring cells, above which they are not joined.

    Returns
    -------
    numpy.ndarray
        Groups numbered from zero: cells of one group, and of surfaces and lines in space only those that a chain of
        neighbours joins. Solids and plane meshes keep their groups.

    Notes
    -----
    Normals are taken in the middle of the shared edge, so a coarse mesh of curved elements along a smooth surface is not
    cut; the sense in which the two cells run along the edge tells how one normal continues the other. Where three or more
    cells share an edge, each pair of them is looked at. A fold that fades out inside a surface does not cut it: its sides
    are joined around its end.

    Raises
    ------
    UsageError
        The groups are not one integer a cell.
    """
    label: Ints = np.unique(groups, return_inverse=True)[1].astype(np.int64)
    bendable = any(b.kind in ("surface", "line") and len(b.active) for b in model.blocks)
    if not bendable and groups.shape == (model.result.n_cells,):
        return label
    shares = node_shares(model, groups)
    joints = [
        _facets(model, b, s) for b, s in zip(model.blocks, shares.cells) if b.kind in ("surface", "line")
    ]
    joints = [j for j in joints if len(j[0])]
    if not joints:
        return label
    cell, ends, direction = (np.concatenate(parts) for parts in zip(*joints))
    first, second = _smooth_pairs(ends, direction, np.cos(np.radians(angle)))
    n = model.result.n_cells
    pairs = sparse.coo_array((np.ones(len(first)), (cell[first], cell[second])), shape=(n, n))
    _, part = connected_components(pairs, directed=False)
    bent = np.zeros(n, dtype=bool)
    bent[cell] = True
    kinds = np.stack([label, np.where(bent, part, -1)], axis=1)
    found: Ints = np.unique(kinds, axis=0, return_inverse=True)[1].reshape(-1).astype(np.int64)
    return found


def _facets(
    model: Model, block: ModelBlock, shares: NDArray[np.int32]
) -> tuple[Ints, NDArray[np.int32], Floats]:
    """Return for each edge of surfaces (end of lines): its cell, its nodes `(n, 2)` sorted, and the direction there.

    The direction `(n, 3)` is the unit normal (tangent) turned such that it continues smoothly with the opposite sign of
    that of a neighbour: it carries the sense in which the cell runs along the edge.
    """
    assert block.row is not None
    row = block.row
    facets = row.shape.facets
    middles = np.array([row.shape.vertices[list(f)].mean(axis=0) for f in facets])
    gradients, functions = row.shape_gradients(middles), row.shape_functions(middles)
    cells, ends, directions = [], [], []
    for start, stop in chunk_ranges(len(block.active), row.n_nodes):
        with np.errstate(invalid="ignore", divide="ignore"):
            chunk = model.chunk(block, block.connectivity[start:stop], block.index[start:stop])
            for k, facet in enumerate(facets):
                tangents = chunk.at(gradients[k], functions[k]).tangents
                assert tangents is not None
                nodes = shares[start:stop][:, [facet[0], facet[-1]]]
                directions.append(_direction(tangents, nodes, k))
                ends.append(np.sort(nodes, axis=1))
                cells.append(block.index[start:stop])
    if not cells:
        return np.zeros(0, dtype=np.int64), np.zeros((0, 2), dtype=np.int32), np.zeros((0, 3))
    return np.concatenate(cells), np.concatenate(ends), np.concatenate(directions)


def _direction(tangents: Floats, nodes: NDArray[np.int32], facet: int) -> Floats:
    if len(tangents) == 1:
        direction = tangents[0].T
        sense = np.full(len(nodes), 1.0 if facet else -1.0)
    else:
        direction = np.cross(tangents[0], tangents[1], axis=0).T
        sense = np.where(nodes[:, 0] < nodes[:, 1], 1.0, -1.0)
    length = np.linalg.norm(direction, axis=1, keepdims=True)
    result: Floats = direction * (sense[:, None] / length)
    return result


def _smooth_pairs(ends: NDArray[np.int32], direction: Floats, cosine: float) -> tuple[Ints, Ints]:
    """Return pairs of entries that share both ends and whose directions continue each other."""
    order = np.lexsort((ends[:, 1], ends[:, 0]))
    same = (np.diff(ends[order], axis=0) == 0).all(axis=1)
    run = np.concatenate([[0], np.cumsum(~same)])
    first, second = [], []
    for step in range(1, int(np.bincount(run).max())):
        a = np.flatnonzero(run[step:] == run[:-step])
        one, other = order[a], order[a + step]
        smooth = -(direction[one] * direction[other]).sum(axis=1) >= cosine
        first.append(one[smooth])
        second.append(other[smooth])
    empty = np.zeros(0, dtype=np.int64)
    return np.concatenate([empty, *first]), np.concatenate([empty, *second])
