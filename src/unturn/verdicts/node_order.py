"""Signs of a wrong node order that no single cell can show: how neighbours meet, and where mid-side nodes are."""

from __future__ import annotations

from itertools import combinations

import numpy as np
from numpy.typing import NDArray

from unturn.midside import far_mid_nodes
from unturn.model import Model, ModelBlock

_LOOKED_AT = 20_000
"""Nodes that are looked at, evenly spread."""


def far_from_edges(model: Model) -> NDArray[np.bool_]:
    """Return which cells `(n_cells,)` have nodes between their corners far from where the corners would have them."""
    found = np.zeros(model.result.n_cells, dtype=bool)
    for block in model.blocks:
        if block.row is not None and len(block.active):
            found[block.index] = far_mid_nodes(model.points, block.connectivity, block.row)
    return found


def joined_otherwise(model: Model) -> NDArray[np.bool_]:
    """Return which solids `(n_cells,)` have an edge that is a diagonal of a neighbour, or the other way round.

    Where two cells share two corners, both or none of them join these by an edge; else the corners of one of them are
    listed in a wrong order, or the mesh does not fit together there. Edges of tetrahedra do not count: their corners may
    come in any order, and on a face of a hexahedron they are diagonals. Nor do diagonals of collapsed cells.
    """
    n = model.result.n_points
    looked_at = np.zeros(n, dtype=bool)
    looked_at[:: max(1, n // _LOOKED_AT)] = True
    parts = [_pairs(block, looked_at, n) for block in model.blocks if block.kind == "solid"]
    found = np.zeros(model.result.n_cells, dtype=bool)
    if parts:
        keys, cells, edges = (np.concatenate(c) for c in zip(*parts))
        both = np.intersect1d(keys[edges], keys[~edges])
        found[cells[np.isin(keys, both)]] = True
    return found


def _pairs(
    block: ModelBlock, looked_at: NDArray[np.bool_], n: int
) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.bool_]]:
    """Return the pairs of corners that have a node that is looked at: as numbers, with their cell, and whether an edge."""
    assert block.row is not None
    row = block.row
    corners = block.connectivity[:, : row.n_corners]
    ordered = np.sort(corners, axis=1)
    whole = (np.diff(ordered, axis=1) > 0).all(axis=1)
    keys, cells, edges = [], [], []
    for a, b in combinations(range(row.n_corners), 2) if row.n_corners > row.dim + 1 else ():
        edge = (a, b) in row.shape.edges or (b, a) in row.shape.edges
        low, high = np.minimum(corners[:, a], corners[:, b]), np.maximum(corners[:, a], corners[:, b])
        pick = np.flatnonzero(looked_at[low] & (whole | edge) & (low < high))
        keys.append(low[pick] * n + high[pick])
        cells.append(block.index[pick])
        edges.append(np.full(len(pick), edge))
    empty = np.zeros(0, dtype=np.int64)
    return (
        np.concatenate([empty, *keys]), np.concatenate([empty, *cells]), np.concatenate([empty.astype(bool), *edges])
    )  # fmt: skip
